"""Predictions of guides from the outside, by the plain effective index method unless a test says otherwise."""

from __future__ import annotations

import json
import re
import xml.etree.ElementTree as ET
from pathlib import Path
from typing import Any, NoReturn

import numpy as np
import pytest
from layerlot.fitting.cli import main
from layerlot.fitting.flags import FLAGS, NOTES
from layerlot.fitting.observables.guide import CODES
from layerlot.solver.cross_section import GuideFlag

from tests.fitting.guide_cases import STRIP, rib
from tests.fitting.stack_cases import GOOD

REFERENCE = Path(__file__).parents[1] / "reference"
CHECKS = {
    c["id"]: c for name in ("eim", "channel") for c in json.loads((REFERENCE / f"{name}.json").read_text())["checks"]
}
Capture = pytest.CaptureFixture[str]


@pytest.fixture(autouse=True)
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    return tmp_path


def never(name: str) -> NoReturn:
    raise AssertionError(f"{name} is no JSON")


def predict(capsys: Capture, text: str, *arguments: str, status: int = 0) -> list[dict[str, Any]]:
    """The `guide` list for a stack file's text."""
    Path("wafer.toml").write_text(text, encoding="utf-8")
    assert main(["predict", "wafer.toml", "--json", "--plain-eim", *arguments]) == status
    out, err = capsys.readouterr()
    assert err == ""
    document = json.loads(out, parse_constant=never)
    assert set(document) == {"film_modes", "guide"}
    guides: list[dict[str, Any]] = document["guide"]
    return guides


def codes(guide: dict[str, Any]) -> set[str]:
    return {f["code"] for f in [*guide["flags"], *guide["notes"]]}


@pytest.mark.parametrize("name", ["rib-BT1", "rib-BT2"])
@pytest.mark.parametrize("pol", ["TE", "TM"])
def test_ribs_of_the_checks(capsys: Capture, name: str, pol: str) -> None:
    """The effective index method on ribs gives the independent values of reference/eim.json, to their printed digits;
    the one that leaks into the slab beside it is flagged and gives status 1, the others 0."""
    check = CHECKS[name]
    x = check["inputs"]
    etch = (x["H_total_um"] - x["outer_slab_um"]) * 1000
    text = rib((x["n_sub"], x["n_rib"], x["n_cover"]), x["H_total_um"] * 1000, etch, x["w_um"] * 1000, pol)
    leaks = check["expected"]["full_vector"].get("quasiTM_leaky") is not None and pol == "TM"
    (guide,) = predict(capsys, text, "--wavelength-nm", str(x["wavelength_um"] * 1000), status=int(leaks))
    assert guide["n_eff"] == pytest.approx(check["expected"][f"EIM_quasi{pol}"], abs=5.1e-8)
    assert ("guide_leaks_sideways" in {f["code"] for f in guide["flags"]}) == leaks
    assert (guide["model"], guide["model_u"], guide["model_u_group"]) == ("eim", None, None)
    assert "guide_plain_model" in {f["code"] for f in guide["notes"]}


def test_corrected_model(capsys: Capture, folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Unless the plain method is asked for, the number is that of the full-vector reference (reference/channel.json)
    within the error that it states, which is far below the plain method's."""
    monkeypatch.setenv("LAYERLOT_CACHE", str(folder / "cache"))
    text = rib((1.444, 3.476, 1.444), 220.0, "full", 500.0)
    (plain,) = predict(capsys, text, "--wavelength-nm", "1550")
    assert main(["predict", "wafer.toml", "--json", "--wavelength-nm", "1550"]) == 0
    (guide,) = json.loads(capsys.readouterr().out, parse_constant=never)["guide"]
    expected = CHECKS["siwire-36"]["expected"]["quasiTE"]
    assert guide["model"] == "corrected"
    assert 0 < guide["model_u"] < 1e-5 and 0 < guide["model_u_group"] < 1e-4
    # Three stated errors, and the entry's own 1e-6.
    assert abs(guide["n_eff"] - expected) < 3 * guide["model_u"] + 1e-6
    assert abs(plain["n_eff"] - expected) > 1e-2
    assert main(["predict", "wafer.toml", "--wavelength-nm", "1550"]) == 0
    assert "Guide model: effective index method, corrected to a full-vector" in capsys.readouterr().out


AIR = 'index_reference = "air"\nwavelength_reference = "air"\n'


@pytest.mark.parametrize("reference", ["", AIR], ids=["vacuum", "air"])
def test_group_index_and_spacing(capsys: Capture, reference: str) -> None:
    """n_g is n_eff - wavelength dn_eff/dwavelength of the predictions themselves, dispersion of the materials included,
    and the spacing that of two wavelengths which differ by one order."""
    text = reference + STRIP
    low, middle, high = (
        predict(capsys, text, "--wavelength-nm", str(nm))[1] for nm in (1549.0, 1550.0, 1551.0)
    )  # fmt: skip
    slope = (high["n_eff"] - low["n_eff"]) / 2
    # Third derivatives of order 1 per µm³ at steps of 1 nm; air's own dispersion is left out of n_g: 1e-6.
    assert middle["n_g"] == pytest.approx(middle["n_eff"] - 1550 * slope, abs=1e-5)
    orders = [38.0e3 * g["n_eff"] / g["wavelength_nm"] for g in (low, high)]
    # The phase over 2 nm is straight to 1e-6.
    assert middle["spacing_nm"] == pytest.approx(2 / (orders[0] - orders[1]), rel=1e-5)


@pytest.mark.parametrize("which", [0, 1], ids=["ring", "interferometer"])
def test_nearest_resonance_or_fringe(capsys: Capture, which: int) -> None:
    """At the wavelength given as nearest, the path holds that whole number of waves, and no other lies nearer."""
    first = predict(capsys, STRIP, "--wavelength-nm", "1550")[which]
    found = first["nearest"]
    length_nm = (2 * np.pi * 20.0e3, 38.0e3)[which]
    there = predict(capsys, STRIP, "--wavelength-nm", repr(found["wavelength_nm"]))[which]
    # Curvature of n_eff over half a spacing: up to 15 nm for the interferometer, where 1e-4 of a wave is left.
    assert there["n_eff"] * length_nm / found["wavelength_nm"] == pytest.approx(found["waves"], abs=1e-3)
    assert abs(found["wavelength_nm"] - 1550) < 0.55 * first["spacing_nm"]


def test_numbers_relative_to_air(capsys: Capture) -> None:
    """A mode only knows index over wavelength: typed relative to air, the same numbers give the same n_eff as typed in
    vacuum."""
    text = rib((1.45, 2.0, 1.0), 400.0, 300.0, 1000.0)
    (vacuum,), (air,) = (predict(capsys, r + text, "--wavelength-nm", "1550") for r in ("", AIR))
    assert air["n_eff"] == pytest.approx(vacuum["n_eff"], abs=1e-12)
    for key in ("width_per_nm", "thickness_per_nm", "etch_per_nm", "core_index"):
        assert air["sensitivity"][key] == pytest.approx(vacuum["sensitivity"][key], rel=1e-9)
    for key, value in vacuum["resonance_shift"].items():
        # Air's own dispersion, 1e-6 of n_g, is in one of them alone.
        assert air["resonance_shift"][key] == (value if value is None else pytest.approx(value, rel=1e-5))


RIB = STRIP.replace('"full"', "150.0").replace("sidewall_deg = 90.0", "sidewall_deg = 85.0")
STEPS = {
    "width_per_nm": ("start = 5", "start = {}", 5.0, 0.1),
    "thickness_per_nm": ("value = 220", "value = {}", 220.0, 0.1),
    "etch_per_nm": ("= 150.0", "= {}", 150.0, 0.1),
    "sidewall_per_deg": ("= 85.0", "= {}", 85.0, 0.1),
    "temperature_per_C": ("_C = 25.0", "_C = {}", 25.0, 1.0),
}


@pytest.mark.parametrize("key", STEPS)
def test_sensitivities_are_derivatives(capsys: Capture, key: str) -> None:
    """Each sensitivity is the difference of two predictions with that quantity changed in the file."""
    old, new, value, step = STEPS[key]
    asked = ("--wavelength-nm", "1550")
    middle = predict(capsys, RIB, *asked)
    low, high = (predict(capsys, RIB.replace(old, new.format(value + s * step)), *asked) for s in (-1, 1))
    for m, a, b in zip(middle, low, high, strict=True):
        # Third derivatives at these steps: 1e-6 relative or less.
        assert m["sensitivity"][key] == pytest.approx((b["n_eff"] - a["n_eff"]) / (2 * step), rel=2e-5)


def test_sensitivity_to_the_core_index(capsys: Capture) -> None:
    """The sensitivity to the core's index, and those to the films', are differences of predictions."""
    asked = ("--wavelength-nm", "1550")

    def at(n: float, t_nm: float = 400.0) -> dict[str, Any]:
        return predict(capsys, rib((1.45, n, 1.0), t_nm, 300.0, 1000.0), *asked)[0]

    middle, low, high = at(2.0), at(1.999), at(2.001)
    difference = (high["n_eff"] - low["n_eff"]) / 2e-3
    assert middle["sensitivity"]["core_index"] == pytest.approx(difference, rel=1e-5)
    assert middle["film_sensitivity"]["film"] == {
        "index": middle["sensitivity"]["core_index"],
        "thickness_per_nm": middle["sensitivity"]["thickness_per_nm"],
    }
    # No thermo-optic term is known of a typed number.
    assert middle["sensitivity"]["temperature_per_C"] is None
    assert middle["resonance_shift"]["temperature_pm_per_C"] is None


SHIFT_OF = {
    "width_per_nm": "width_pm_per_nm",
    "thickness_per_nm": "thickness_pm_per_nm",
    "etch_per_nm": "etch_pm_per_nm",
    "sidewall_per_deg": "sidewall_pm_per_deg",
    "temperature_per_C": "temperature_pm_per_C",
}


@pytest.mark.parametrize("key", STEPS)
def test_resonance_shifts(capsys: Capture, key: str) -> None:
    """A resonance m wavelength = n_eff L followed through a change of the guide moves by the stated shift."""
    old, new, value, step = STEPS[key]
    waves = ("1549", "1550", "1551")
    phase = [
        [g["n_eff"] / g["wavelength_nm"] for g in predict(capsys, text, "--wavelength-nm", *waves)[:3]]
        for text in (RIB.replace(old, new.format(value + s * step)) for s in (-1, 0, 1))
    ]
    # The phase at each setting, as a parabola over wavelength; where it equals that of 1550 nm at the middle setting.
    at = []
    for values in (phase[0], phase[2]):
        curve = np.polynomial.Polynomial.fit([1549.0, 1550.0, 1551.0], np.array(values) - phase[1][1], 2)
        at.append(min(curve.roots(), key=lambda w: abs(w - 1550.0)))
    stated = predict(capsys, RIB, "--wavelength-nm", "1550")[0]["resonance_shift"][SHIFT_OF[key]]
    assert stated == pytest.approx((at[1] - at[0]) / (2 * step) * 1000, rel=1e-4)


def test_index_shift_goes_by_a_thousandth(capsys: Capture) -> None:
    """The shift with the core's index is stated per 0.001."""
    (g,) = predict(capsys, rib((1.45, 2.0, 1.0), 400.0, 300.0, 1000.0), "--wavelength-nm", "1550")
    expected = 1550 * g["sensitivity"]["core_index"] * 1e-3 / g["n_g"] * 1000
    assert g["resonance_shift"]["core_index_pm_per_1e-3"] == pytest.approx(expected, rel=1e-12)


def test_core_etched_through_has_no_etch_depth(capsys: Capture) -> None:
    """Where the core is etched through there is no sensitivity to an etch depth, not a zero."""
    for g in predict(capsys, STRIP):
        assert g["sensitivity"]["etch_per_nm"] is None and g["resonance_shift"]["etch_pm_per_nm"] is None


def test_wavelengths_and_polarisations(capsys: Capture) -> None:
    """Every structure comes at every wavelength asked for, at its own polarisation, unless the other is asked for;
    1550 nm without one, or the wavelengths of the file's tables."""
    both = STRIP.replace('420\npol = "TE"', '420\npol = "TM"')
    asked = [
        (g["structure"], g["wavelength_nm"], g["pol"]) for g in predict(capsys, both, "--wavelength-nm", "1500", "1600")
    ]
    assert asked == [("R20", 1500, "TE"), ("R20", 1600, "TE"), ("M38", 1500, "TM"), ("M38", 1600, "TM")]
    assert [g["structure"] for g in predict(capsys, both, "--pol", "TM")] == ["M38"]
    assert predict(capsys, STRIP, "--pol", "TM") == []
    assert {g["wavelength_nm"] for g in predict(capsys, STRIP)} == {1550.0}
    table = rib((1.45, 2.0, 1.0), 400.0, 300.0, 1000.0).replace("= 2.0", "= { table = [[1500, 2.0], [1560, 1.99]] }")
    assert [g["wavelength_nm"] for g in predict(capsys, table)] == [1500.0, 1560.0]


NO_MODE = {
    "guide_no_vertical_mode": rib((1.45, 1.46, 1.0), 300.0, "full", 2000.0),
    "guide_no_lateral_mode": rib((1.45, 1.5, 1.0), 800.0, 700.0, 2000.0).replace(
        "[[layer]]\nname = 'cover'",
        "[[layer]]\nname = 'fill'\nindex = 2.0\nthickness_nm = 300\n[[layer]]\nname = 'cover'",
    ),
    "guide_bend_out_of_range": rib((1.45, 1.5, 1.4), 1500.0, "full", 1500.0, path="kind = 'ring'\nradius_um = 8.0"),
    "guide_uniaxial": rib((1.45, 2.0, 1.0), 400.0, 300.0, 1000.0).replace("= 2.0", "= 2.0\nindex_normal = 1.99"),
}


@pytest.mark.parametrize("code", NO_MODE)
def test_where_there_is_no_number(capsys: Capture, code: str) -> None:
    """A guide without a mode, or that the model knows nothing of, has null for every number, a flag that says why, and
    gives status 1; film modes are there all the same."""
    (g,) = predict(capsys, NO_MODE[code], "--wavelength-nm", "1550", status=1)
    assert code in {f["code"] for f in g["flags"]}
    numbers = [g["n_eff"], g["n_g"], g["model_u"], g["spacing_nm"], *g["sensitivity"].values()]
    assert set(numbers) | set(g["resonance_shift"].values()) == {None}
    assert main(["predict", "wafer.toml", "--plain-eim", "--wavelength-nm", "1550"]) == 1
    out = capsys.readouterr().out
    assert f"  G at 1550 nm: {FLAGS[code]}" in out
    assert "nan" not in re.findall(r"\w+", out)


def test_every_flag_of_the_models_is_registered() -> None:
    """Each bit that a guide mode can carry has a code with a sentence in the registry."""
    bits = {bit for bit in GuideFlag if bit}
    assert set(CODES) == bits
    assert set(CODES.values()) <= set(FLAGS) | set(NOTES)


def test_what_is_only_said(capsys: Capture) -> None:
    """Sides that guide nothing, and a second mode, are notes: status 0, no flag."""
    for g in predict(capsys, STRIP):
        assert g["flags"] == []
        assert {"guide_sides_guide_nothing", "guide_second_mode"} <= codes(g)


def test_text_answers_first(capsys: Capture) -> None:
    """The text has the indices first, then shifts and sensitivities, flags once with the guides that carry them, the
    film modes, and the conventions with the model."""
    Path("wafer.toml").write_text(STRIP, encoding="utf-8")
    assert main(["predict", "wafer.toml", "--plain-eim"]) == 0
    out = capsys.readouterr().out
    lines = out.splitlines()
    assert lines[:4] == ["Strip on oxide (invented)", "", "No wavelength was asked for: 1550 nm taken.", ""]
    guides = predict(capsys, STRIP)
    row = next(line for line in lines if line.split()[:1] == ["R20"]).split()
    assert row[1:4] == ["1550", "TE0", f"{guides[0]['n_eff']:.6f}"]
    order = [
        "Guides", "Shift of a resonance or fringe at fixed order, in pm per", "Change of n_eff per", "Notes", "Films",
    ]  # fmt: skip
    assert sorted(lines.index(x) for x in order) == [lines.index(x) for x in order]
    assert out.count("Plain effective index method") == 1
    assert "  R20, M38 at 1550 nm: Plain effective index method" in out
    assert "Width is that at half the etch depth: made width = drawn width + width bias." in lines
    assert "temperature: by the materials' thermo-optic terms, without expansion." in lines


def test_text_of_several_wavelengths(capsys: Capture) -> None:
    """A flag that holds at several wavelengths names them all; materials without a thermo-optic term are named."""
    Path("wafer.toml").write_text(
        GOOD.replace("[-60, 60] }", "[-60, 60], start = 0 }")
        .replace("index = { fit = [1.90, 2.05] }", "index = 1.98")
        .replace("[300, 700] }", "[300, 700], start = 400 }")
    )
    assert main(["predict", "wafer.toml", "--plain-eim", "--wavelength-nm", "1000", "1100"]) == 0
    out = capsys.readouterr().out
    assert "R20, M38 at 1000 nm; R20, M38 at 1100 nm: Plain effective index method" in out
    assert "none is known for core, cover, so no number is given." in out
    assert main(["predict", "wafer.toml", "--plain-eim", "--pol", "TM"]) == 0
    out = capsys.readouterr().out
    assert "Guides: no structure has the polarisation asked for." in out
    assert "No wavelength was asked for: 1550 nm taken for guides, 632.8 nm for films." in out


def test_faults_of_guides_all_at_once(capsys: Capture) -> None:
    """Starts that guides lack and dimensions that no guide can have are told together, with films' own faults."""
    text = STRIP.replace('"full"', "{ fit = [100, 300] }").replace("start = 5", "start = -50")
    text = text.replace("sidewall_deg = 90.0", "sidewall_deg = { fit = [70, 95] }").replace("= 420", "= 40")
    text = text.replace("radius_um = 20.0", "radius_um = { fit = [19, 21] }")
    Path("wafer.toml").write_text(text.replace("{ value = 220, u = 1 }", "{ fit = [200, 240] }"), encoding="utf-8")
    assert main(["predict", "wafer.toml", "--wavelength-nm", "1550", "800", "--field", "mode.gif"]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    told = "to be fitted, without a start, a prediction needs a value, add start = ... beside fit"
    lines = err.splitlines()
    assert lines[:5] == [
        f"wafer.toml: column layer[3].thickness_nm: {told}",
        f"wafer.toml: column guide.etch_depth_nm: {told}",
        f"wafer.toml: column guide.sidewall_deg: {told}",
        f"wafer.toml: column structure[1].radius_um: {told}",
        'wafer.toml: column structure[2].drawn_width_nm: "M38": 40 nm drawn, bias -50 nm, the width made is positive, '
        "correct the drawn width or the bias",
    ]
    assert lines[5].startswith("command line: column --wavelength-nm: 800 nm, silicon (Li 1980) is known for")
    assert lines[6] == (
        "command line: column --field: a file ending in .gif, a field is drawn as .svg, .png or .pdf, name it with .svg"
    )
    assert len(lines) == 7


@pytest.mark.parametrize(
    ("edits", "told"),
    [
        ({'"full"': "250"}, "column guide.etch_depth_nm: 250 nm, the etch stays within core, 220 nm thick, correct the "
         'depth, or write "full"'),
        ({"_deg = 90.0": "_deg = 40"}, "column guide.sidewall_deg: 40 degrees, walls slope between 45 and 135 degrees, "
         "90 being vertical, correct the angle"),
        ({"_deg = 90.0": "_deg = 50", "drawn_width_nm = 450": "drawn_width_nm = 150"},
         'column structure[1].drawn_width_nm: "R20": 155 nm wide, walls of 50 degrees take 184.6 nm and must not meet, '
         "correct width, etch depth or sidewall angle"),
    ],
)  # fmt: skip
def test_guides_that_cannot_be(capsys: Capture, edits: dict[str, str], told: str) -> None:
    """An etch below the core, a wall that lies down and walls that meet are refused with what to do."""
    text = STRIP
    for old, new in edits.items():
        assert old in text
        text = text.replace(old, new)
    Path("wafer.toml").write_text(text, encoding="utf-8")
    assert main(["predict", "wafer.toml"]) == 2
    assert capsys.readouterr().err == f"wafer.toml: {told}\n"


@pytest.mark.parametrize("suffix", [".svg", ".png", ".pdf"])
def test_field_is_drawn(capsys: Capture, suffix: str) -> None:
    """The field of each cross-section is drawn into the file named, and the text says where."""
    start = {".svg": b"<?xml", ".png": b"\x89PNG", ".pdf": b"%PDF"}[suffix]
    name = f"mode{suffix}"
    Path("wafer.toml").write_text(
        RIB + RIB[RIB.index("[[structure]]") :].replace('"R20"', '"R2"').replace('"M38"', '"M3"')
    )
    assert main(["predict", "wafer.toml", "--plain-eim", "--field", name]) == 0
    assert capsys.readouterr().out.endswith(f"\nField: {name}\n")
    data = Path(name).read_bytes()
    assert data.startswith(start)
    if suffix == ".svg":
        text = " ".join(ET.fromstring(data.decode()).itertext())
        assert "R20, R2: TE0 at 1550 nm, n_eff" in text and "M38, M3: TE0" in text
        assert "by the effective index method" in text


def test_field_faults(capsys: Capture) -> None:
    """A field without structures, or in a folder that is not there, is refused."""
    Path("wafer.toml").write_text(STRIP[: STRIP.index("[[structure]]")], encoding="utf-8")
    assert main(["predict", "wafer.toml", "--field", "no/mode.svg", "--wavelength-nm", "1550"]) == 2
    first, second = capsys.readouterr().err.splitlines()
    assert "no structure in wafer.toml, a field needs [guide] and [[structure]]" in first
    assert "a file in an existing folder is required" in second


def test_field_of_no_mode(capsys: Capture) -> None:
    """Where no guide holds a mode nothing is drawn, and with --json that is said on standard error alone."""
    Path("wafer.toml").write_text(NO_MODE["guide_no_vertical_mode"], encoding="utf-8")
    assert main(["predict", "wafer.toml", "--plain-eim", "--json", "--field", "mode.svg"]) == 1
    out, err = capsys.readouterr()
    json.loads(out)
    assert err == "No field was drawn: no guide holds a mode.\n"
    assert not Path("mode.svg").exists()
