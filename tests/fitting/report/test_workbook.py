"""results.xlsx as a person opens it."""

from __future__ import annotations

import dataclasses
import re

import openpyxl
import pytest
from layerlot.fitting.report.rounding import COVERAGE
from layerlot.fitting.report.rounding import decimals as places
from layerlot.fitting.report.workbook import write_workbook

from tests.fitting.report import fixtures

SHEETS = ["answers", "means", "readings", "budget", "shared and flags"]


def opened(result, folder):
    """The workbook, read back."""
    write_workbook(result, folder / "results.xlsx")
    return openpyxl.load_workbook(folder / "results.xlsx")


def head_row(sheet):
    """Number of the row with the heads: the one above the frozen line."""
    return int(re.sub(r"\D", "", sheet.freeze_panes)) - 1


def table(sheet):
    """Rows below the head as dicts of cells; heads that repeat get their quantity's name in front."""
    heads, quantity = [], ""
    for cell in sheet[head_row(sheet)]:
        if " of " in str(cell.value) and cell.value != "degrees of freedom":
            quantity = cell.value
        heads.append(f"{quantity}|{cell.value}" if cell.value in heads else cell.value)
    return [dict(zip(heads, row, strict=True)) for row in sheet.iter_rows(min_row=head_row(sheet) + 1)]


@pytest.mark.parametrize("name", [*fixtures.ALL])
def test_sheets_are_ready_to_read(name, tmp_path):
    """Every sheet has a frozen bold head, a filter over all rows, wide columns, the head on every printed page."""
    result = getattr(fixtures, name)()
    book = opened(result, tmp_path)
    assert book.sheetnames == SHEETS
    for sheet in book:
        head = head_row(sheet)
        assert sheet.auto_filter.ref.startswith(f"A{head}:")
        assert int(re.search(r"(\d+)$", sheet.auto_filter.ref)[1]) == sheet.max_row
        assert sheet.print_title_rows == f"${head}:${head}"
        assert all(cell.font.bold and cell.value for cell in sheet[head])
        assert all(sheet.column_dimensions[cell.column_letter].width >= 11 for cell in sheet[head])


def test_numbers_show_the_digits_of_their_uncertainty(tmp_path):
    """Cells hold all digits; their format shows value and U to two digits of U, u and its parts to two digits of u."""
    result = fixtures.good()
    rows = table(opened(result, tmp_path)["answers"])
    for site, row in zip(result.sites, rows, strict=True):
        index, thickness = site.estimates
        assert row["index of nitride, 632.8 nm"].value == index.value
        assert row["thickness of nitride (nm)"].value == thickness.value
        assert row["u (nm)"].value == thickness.u
        wide, fine = places(COVERAGE * thickness.u), places(thickness.u)
        assert row["thickness of nitride (nm)"].number_format == "0." + "0" * wide
        assert row["U, k = 2 (nm)"].number_format == "0." + "0" * wide
        assert row["u (random) (nm)"].number_format == "0." + "0" * fine


def test_every_answer_has_its_uncertainty_beside_it(tmp_path):
    """Wherever a value stands, U and u stand in the next two cells; where it is not determined, nothing does."""
    for row in opened(fixtures.bad(), tmp_path)["answers"].iter_rows(min_row=6):
        for k, cell in enumerate(row):
            head = row[0].parent.cell(5, k + 1).value
            if " of nitride" not in str(head):
                continue
            beside = [c.value for c in row[k + 1 : k + 8]]
            if isinstance(cell.value, float):
                # U = 2 u, exactly but for rounding in the last bit
                assert beside[0] == pytest.approx(2 * beside[1], rel=1e-12) and all(v is not None for v in beside)
            else:
                assert cell.value == "not determined" and beside == [None] * 7


def test_units_stand_in_the_heads(tmp_path):
    """Lengths carry (nm) or (mm) in their heads; angles say deg in the unit column."""
    book = opened(fixtures.uniaxial(), tmp_path)
    heads = [cell.value for cell in book["answers"][head_row(book["answers"])]]
    assert "thickness of polymer (nm)" in heads and "x (mm)" in heads
    assert "index of polymer along the normal, 632.8 nm" in heads
    assert "wavelength (nm)" in [cell.value for cell in book["readings"][head_row(book["readings"])]]
    assert {row["unit"].value for row in table(book["readings"])} == {"deg"}


def test_readings_carry_residuals_and_their_source(tmp_path):
    """A used reading has its residual, plain and over u; one left out has its reason; both name file and row."""
    rows = table(opened(fixtures.bad(), tmp_path)["readings"])
    for row in rows:
        assert row["file"].value == "monitor.xlsx" and row["row"].value >= 5
        if row["used"].value == "yes":
            difference = row["measured"].value - row["predicted"].value
            # 1e-9 of u: both are differences of the same two doubles
            assert row["measured - predicted"].value == pytest.approx(difference, abs=1e-11)
            assert row["normalised residual"].value == pytest.approx(difference / row["u"].value, abs=1e-9)
        else:
            assert row["normalised residual"].value is None and row["remark"].value
    assert sum(row["used"].value == "NO" for row in rows) == 3


def test_budget_adds_up(tmp_path):
    """The squares of the shares of each row add up to u²."""
    for row in table(opened(fixtures.good(), tmp_path)["budget"]):
        shares = [c.value for head, c in row.items() if head.endswith(("(random)", "(shared)"))]
        # 1e-9: sums of five doubles
        assert sum(s**2 for s in shares) == pytest.approx(row["u"].value ** 2, rel=1e-9)


def test_flags_and_inputs_are_there(tmp_path):
    """The last sheet lists shared quantities as stated and found, flags, left-out rows, rivals and input hashes."""
    rows = table(opened(fixtures.bad(), tmp_path)["shared and flags"])
    kinds = [row["kind"].value for row in rows]
    for kind in ("shared quantity", "flag", "row left out", "rival mode orders", "convention", "input"):
        assert kind in kinds
    zero = next(row for row in rows if row["subject"].value == "table zero")
    assert (zero["value"].value, zero["stated value"].value) == (0.047, 0.0)


def test_text_from_data_files_stays_text(tmp_path):
    """A site named like a formula, or with a control character in its name, is shown and not run."""
    result = fixtures.bare()
    site = dataclasses.replace(result.sites[0], site='=HYPERLINK("x")', wafer="a\x07<b>&")
    book = opened(dataclasses.replace(result, sites=(site,)), tmp_path)
    row = table(book["answers"])[0]
    assert row["site"].value == '=HYPERLINK("x")' and row["site"].data_type != "f"
    assert row["wafer"].value == "a\ufffd<b>&"


def test_not_a_number_leaves_an_empty_cell(tmp_path):
    """A statistic that is not finite leaves its cell empty rather than spoiling the file."""
    result = fixtures.bare()
    fit = dataclasses.replace(result.sites[0].fit, chi2=float("inf"))
    book = opened(dataclasses.replace(result, sites=(dataclasses.replace(result.sites[0], fit=fit),)), tmp_path)
    assert table(book["answers"])[0]["chi-squared"].value is None
