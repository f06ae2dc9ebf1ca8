"""The shipped demo lot (invented) against its answer key, drawn by the tests' independent model."""

from __future__ import annotations

import csv
from collections import Counter
from pathlib import Path

import pytest
from layerlot.fitting.inverse import fit_table
from layerlot.fitting.records import Place, Quantity, Reading, Status
from layerlot.fitting.stack import load_stack
from openpyxl import load_workbook

from tests.reference.make_demo import DEMO, main


def _cells(path: Path) -> list[tuple]:
    return list(load_workbook(path).active.iter_rows(values_only=True))


def _readings() -> list[Reading]:
    """The workbook's rows, read here without the importers."""
    out = []
    for number, row in enumerate(_cells(DEMO / "monitor_wafers.xlsx")[5:], start=6):
        lot, wafer, site, x, y, _when, nm, pol, mode, angle, _remark = row
        out.append(
            Reading(
                Quantity.ANGLE, angle, nm / 1000, pol, Place("monitor_wafers.xlsx", "Prism readings", number), mode,
                lot=lot, wafer=wafer, site=str(site), x_mm=x, y_mm=y,
            )
        )  # fmt: skip
    return out


def _answers() -> dict[tuple[str, str], dict[str, str]]:
    with open(DEMO / "answer_key.csv", encoding="utf-8") as lines:
        rows = csv.DictReader(line for line in lines if not line.startswith("#"))
        return {(row["wafer"], row["site"]): row for row in rows}


@pytest.fixture(scope="module")
def result():
    return fit_table(load_stack(DEMO / "nitride_on_silica.toml"), _readings())


def test_shipped_files_are_what_the_script_makes(tmp_path):
    """Making the demo again gives the shipped stack file, answer key and cells."""
    main(tmp_path)
    for name in ("nitride_on_silica.toml", "answer_key.csv"):
        assert (tmp_path / name).read_text(encoding="utf-8") == (DEMO / name).read_text(encoding="utf-8")
    assert _cells(tmp_path / "monitor_wafers.xlsx") == _cells(DEMO / "monitor_wafers.xlsx")


def test_every_demo_site_has_its_number(result):
    """All 45 sites come out, and only the spoilt ones have a reading left out."""
    assert len(result.sites) == 45 == len(_answers())
    assert all(site.status is not Status.FAILED for site in result.sites)
    rejected = {(s.wafer, s.site) for s in result.sites if any(not r.used for r in s.readings)}
    assert rejected == {("W02", "7"), ("W04", "2")}


def test_demo_intervals_hold_the_answers(result):
    """Index and thickness of the demo lot lie within their intervals as often as 95 % allows."""
    answers, inside, pulls = _answers(), Counter(), []
    for site in result.sites:
        key = answers[site.wafer, site.site]
        for e in site.estimates:
            if e.layer == "nitride":
                column = "thickness_nm" if e.quantity == "thickness" else f"index_{e.wavelength_nm:g}"
                truth = float(key[column])
                inside[column] += e.low95 <= truth <= e.high95
                pulls.append((e.value - truth) / e.u)
    assert set(inside) == {"thickness_nm", "index_632.8", "index_1550"}
    # One lot shares one draw of the prism's errors: at worst all 45 sites move together by up to 3 standard
    # uncertainties, so the bound is on the largest pull (5) and on the lot as a whole, not a binomial one.
    assert max(abs(p) for p in pulls) < 5
    assert all(n >= 30 for n in inside.values()), inside


def test_demo_orders_are_found(result):
    """Readings without mode numbers get the orders they were drawn with: 0, 1, 2 from the highest angle down."""
    for site in result.sites:
        for pol in ("TE", "TM"):
            used = [r for r in site.readings if r.used and r.reading.pol == pol and r.reading.wavelength_um < 1]
            orders = [r.order for r in sorted(used, key=lambda r: -r.reading.value)]
            missing = {("W03", "5", "TE"): 1, ("W02", "7", "TM"): 1}.get((site.wafer, site.site, pol))
            assert orders == [m for m in (0, 1, 2) if m != missing]
