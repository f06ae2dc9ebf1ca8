"""Regenerates the demo scenario in datasets/demo: `python tests/reference/make_demo.py`. Everything in it is invented.

Harrow Fen Photonics (invented) deposits silicon nitride on fused silica monitor wafers and reads the coupling angles of
lot HF-0412: five 150 mm wafers, nine sites each, TE and TM at 632.8 and 1550 nm. The films thin towards the rim and
differ from wafer to wafer; prism, base angle and table zero are off by amounts drawn from their stated uncertainties;
readings carry noise. Wafers W03 and W04 came without mode numbers; one mode was missed, one stray line was read as a
mode, one angle was typed two degrees off. The modes come from `field_model`, not from the solver, and the truth is
kept in answer_key.csv, which no fit reads.
"""

from __future__ import annotations

import datetime
import sys
import zipfile
from dataclasses import dataclass
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parents[2]
if __name__ == "__main__":
    sys.path.insert(0, str(ROOT))

from tests.reference.field_model import coupling_angle_deg, guided_modes  # noqa: E402

DEMO = ROOT / "datasets" / "demo"
SEED = 412
LOT = "HF-0412"
WAFERS = ("W01", "W02", "W03", "W04", "W05")
UNLABELLED = ("W03", "W04")
WAVELENGTHS_NM = (632.8, 1550.0)
PRISM = (2.5012, 2.4214)
U_PRISM, U_BASE_DEG, U_ZERO_DEG, U_ANGLE_DEG = 2e-4, 0.01, 0.01, 0.01
BASE_DEG = 45.0
STAMP = datetime.datetime(2026, 3, 17, 9, 0)

STACK = f"""\
# Invented scenario: Harrow Fen Photonics, its films, prism and numbers exist nowhere.
title = "Nitride on fused silica, monitor wafers of lot {LOT} (invented)"
reference_temperature_C = 20.0
index_reference = "air"                   # as the bench knows them: wavelengths and indices relative to air
wavelength_reference = "air"

[[layer]]                                 # from the substrate up; first and last are half-spaces
name = "substrate"
index = "fused silica"

[[layer]]
name = "nitride"
index = {{ fit = [1.90, 2.10] }}            # one free value at each wavelength in the data
thickness_nm = {{ fit = [300, 800] }}

[[layer]]
name = "cover"
index = 1.0

[prism]
index = {{ table = [[632.8, {PRISM[0]}], [1550.0, {PRISM[1]}]], shift = {{ value = 0.0, u = {U_PRISM} }} }}
base_angle_deg = {{ value = {BASE_DEG}, u = {U_BASE_DEG} }}
angle_offset_deg = {{ value = 0.0, u = {U_ZERO_DEG} }}
angle_u_deg = {U_ANGLE_DEG}                        # standard uncertainty of one reading
"""


@dataclass
class Site:
    """One site: place on the wafer, the film, and its readings (wavelength, pol, mode or None, angle, remark)."""

    wafer: str
    site: str
    x_mm: float
    y_mm: float
    thickness_nm: float
    index: tuple[float, float]
    readings: list[list[object]]
    fault: str = ""


def silica_index(wavelength_um: float) -> float:
    """Fused silica relative to air, I. H. Malitson, J. Opt. Soc. Am. 55, 1205 (1965), coefficients from memory."""
    x = wavelength_um**2
    terms = ((0.6961663, 0.0684043), (0.4079426, 0.1162414), (0.8974794, 9.896161))
    return float(np.sqrt(1 + sum(b * x / (x - c**2) for b, c in terms)))


def places() -> list[tuple[str, float, float]]:
    """Nine sites of a 150 mm wafer: the centre, four at 35 mm, four at 62 mm turned by 45 degrees."""
    out = [("1", 0.0, 0.0)]
    for radius, turn in ((35.0, 0.0), (62.0, 45.0)):
        for k in range(4):
            a = np.deg2rad(90 * k + turn)
            out.append((str(len(out) + 1), round(float(radius * np.cos(a)), 1), round(float(radius * np.sin(a)), 1)))
    return out


def draw_sites() -> list[Site]:
    """The lot as nature made it and as the bench read it, faults included."""
    rng = np.random.default_rng(SEED)
    n_p = np.array(PRISM) + rng.normal(0, U_PRISM)
    base, zero = BASE_DEG + rng.normal(0, U_BASE_DEG), rng.normal(0, U_ZERO_DEG)
    sites = []
    for w, wafer in enumerate(WAFERS):
        centre_nm = 592.0 + 1.1 * w + rng.normal(0, 0.8)
        wafer_index = 2.0085 + rng.normal(0, 8e-4)
        for name, x, y in places():
            r = np.hypot(x, y) / 75
            t = centre_nm * (1 - 0.021 * r**2) + 0.025 * x + rng.normal(0, 0.4)
            n0 = wafer_index + 0.0012 * r**2 + rng.normal(0, 2e-4)
            index = (float(n0), float(n0 - 0.0221 + rng.normal(0, 1e-4)))
            sites.append(Site(wafer, name, x, y, float(t), index, read(rng, float(t), index, n_p, base, zero)))
    spoil(sites)
    for site in sites:
        if site.wafer in UNLABELLED:
            for row in site.readings:
                row[2] = None
    return sites


def read(
    rng: np.random.Generator, t_nm: float, index: tuple[float, float], n_p: np.ndarray, base: float, zero: float
) -> list[list[object]]:
    """Readings of one site, both wavelengths and polarisations, to the bench's thousandth of a degree."""
    rows: list[list[object]] = []
    for k, nm in enumerate(WAVELENGTHS_NM):
        for pol in ("TE", "TM"):
            n = np.array([[silica_index(nm / 1000), index[k], 1.0]])
            modes = guided_modes(n, np.array([[t_nm / 1000]]), nm / 1000, pol == "TM")[0]
            angles = coupling_angle_deg(modes, n_p[k], base) - zero + rng.normal(0, U_ANGLE_DEG, modes.size)
            rows += [[nm, pol, m, round(float(a), 3), ""] for m, a in enumerate(angles)]
    return rows


def spoil(sites: list[Site]) -> None:
    """What went wrong at the bench: a typing error, a missed mode, a stray line."""
    by_name = {(s.wafer, s.site): s for s in sites}
    typed = by_name["W02", "7"]
    row = next(r for r in typed.readings if r[:3] == [632.8, "TM", 1])
    row[3] = round(float(row[3]) + 2, 3)  # type: ignore[arg-type]
    typed.fault = "TM1 at 632.8 nm typed two degrees too high"
    missed = by_name["W03", "5"]
    missed.readings = [r for r in missed.readings if r[:3] != [632.8, "TE", 1]]
    missed.readings[0][4] = "one line very faint, not read"
    missed.fault = "TE1 at 632.8 nm missed"
    stray = by_name["W04", "2"]
    at = next(i for i, r in enumerate(stray.readings) if r[:3] == [632.8, "TM", 0])
    stray.readings.insert(at, [632.8, "TE", None, -11.407, ""])
    stray.fault = "a line at -11.407 degrees that is no mode"


def write_workbook(sites: list[Site], path: Path) -> None:
    """The sheet as an engineer keeps it: title rows, a note, units in the headings, wafer after wafer."""
    from openpyxl import Workbook
    from openpyxl.styles import Alignment, Font

    book = Workbook()
    sheet = book.active
    sheet.title = "Prism readings"
    sheet["A1"] = "Harrow Fen Photonics (invented) - prism coupler log"
    sheet["A1"].font = Font(bold=True, size=14)
    sheet.merge_cells("A1:I1")
    sheet["A2"] = f"Lot {LOT}, nitride deposition, monitor wafers 150 mm fused silica"
    sheet["A3"] = "Note: prism cleaned before W03; mode numbers of W03 and W04 not written down."
    headings = (
        "Lot", "Wafer", "Site", "x (mm)", "y (mm)", "Measured at", "Wavelength (nm)", "Pol.", "Mode",
        "Angle θ (°)", "Remark",
    )  # fmt: skip
    for column, text in enumerate(headings, start=1):
        cell = sheet.cell(row=5, column=column, value=text)
        cell.font = Font(bold=True)
        cell.alignment = Alignment(horizontal="center", wrap_text=True)
    row = 6
    for i, site in enumerate(sites):
        when = STAMP + datetime.timedelta(minutes=6 * i)
        for nm, pol, mode, angle, remark in site.readings:
            values = (LOT, site.wafer, int(site.site), site.x_mm, site.y_mm, when, nm, pol, mode, angle, remark or None)
            for column, value in enumerate(values, start=1):
                sheet.cell(row=row, column=column, value=value)
            sheet.cell(row=row, column=6).number_format = "yyyy-mm-dd hh:mm"
            sheet.cell(row=row, column=10).number_format = "0.000"
            row += 1
    for letter, width in zip("ABCDEFGHIJK", (10, 8, 6, 8, 8, 17, 16, 6, 7, 12, 30), strict=True):
        sheet.column_dimensions[letter].width = width
    sheet.freeze_panes = "A6"
    book.properties.creator = "invented demo scenario"
    book.properties.created = book.properties.modified = STAMP
    book.save(path)
    _same_bytes_every_time(path)


def _same_bytes_every_time(path: Path) -> None:
    """Workbooks are zip archives: write the members again with one fixed date."""
    with zipfile.ZipFile(path) as old:
        members = {name: old.read(name) for name in old.namelist()}
    stamp = STAMP.strftime("%Y-%m-%dT%H:%M:%SZ").encode()
    head, tag, rest = members["docProps/core.xml"].partition(b"<dcterms:modified")
    start, end = rest.index(b">") + 1, rest.index(b"<", rest.index(b">"))
    members["docProps/core.xml"] = head + tag + rest[:start] + stamp + rest[end:]
    with zipfile.ZipFile(path, "w", zipfile.ZIP_DEFLATED) as new:
        for name, data in members.items():
            new.writestr(zipfile.ZipInfo(name, (2026, 3, 17, 9, 0, 0)), data, zipfile.ZIP_DEFLATED)


def write_answer_key(sites: list[Site], path: Path) -> None:
    """The truth beside the readings, for tests and for readers who want to compare."""
    lines = [
        "# Answer key of the invented demo lot: what the films were drawn as. No fit reads this file.",
        "lot,wafer,site,x_mm,y_mm,thickness_nm,index_632.8,index_1550,what_went_wrong",
    ]
    for s in sites:
        numbers = f"{s.thickness_nm:.4f},{s.index[0]:.7f},{s.index[1]:.7f}"
        lines.append(f"{LOT},{s.wafer},{s.site},{s.x_mm},{s.y_mm},{numbers},{s.fault}")
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")


def main(out: Path = DEMO) -> None:
    out.mkdir(parents=True, exist_ok=True)
    sites = draw_sites()
    (out / "nitride_on_silica.toml").write_text(STACK, encoding="utf-8")
    write_workbook(sites, out / "monitor_wafers.xlsx")
    write_answer_key(sites, out / "answer_key.csv")


if __name__ == "__main__":
    main()
