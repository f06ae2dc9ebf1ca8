"""results.xlsx: readable as it stands, every number with its unit in the head and its digits from its uncertainty.

sheets: answers (one row a site), means, readings (with residuals), budget, shared and flags

Rows are streamed (openpyxl's write-only mode). A streamed cell is serialised as its row is appended, so one cell object per
column and format is enough; a thousand sites take two seconds rather than six.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from ..records import Estimate, FitResult, FittedReading, GroupMean, SiteResult
from .rounding import COVERAGE
from .rounding import decimals as places
from .summary import CAUTION, KEY
from .view import by_column, columns, mean_columns, mean_rows, mode_name, normalised, reading_unit, wavelength_nm
from .words import (
    STATUS,
    Column,
    column_of,
    flag_groups,
    note_groups,
    place_levels,
    unit_mark,
    verdict,
)

Value = str | float | int | None
# Excel shows at most 30 decimals and its cells hold 15 digits; more than 9 decimals never mean anything here.
_MOST_DECIMALS = 9
_ANGLE_DECIMALS, _INDEX_DECIMALS = 4, 6


@dataclass(frozen=True)
class Number:
    """A figure with the number of decimals it is shown to; the cell keeps all digits."""

    value: float
    decimals: int

    @property
    def format(self) -> str:
        """Spreadsheet number format."""
        n = min(max(self.decimals, 0), _MOST_DECIMALS)
        return "0." + "0" * n if n else "0"


Cell = Value | Number


class _Sheet:
    """One streamed sheet: title lines, a head row that stays in view with a filter on it, then rows."""

    def __init__(self, book: Any, name: str, notes: Sequence[str], heads: Sequence[str], frozen_columns: int) -> None:
        from openpyxl.cell import WriteOnlyCell
        from openpyxl.styles import Alignment, Font, PatternFill
        from openpyxl.utils import get_column_letter

        self._make = WriteOnlyCell
        self._pool: dict[tuple[int, str], Any] = {}
        self.sheet = book.create_sheet(name)
        self.heads = heads
        self.row = len(notes) + 1
        self._letter = get_column_letter
        self.sheet.freeze_panes = f"{get_column_letter(frozen_columns + 1)}{self.row + 1}"
        for i, head in enumerate(heads):
            self.sheet.column_dimensions[get_column_letter(i + 1)].width = _width(head)
        self.sheet.print_title_rows = f"{self.row}:{self.row}"
        self.sheet.page_setup.orientation = "landscape"
        self.sheet.page_setup.fitToHeight = 0
        self.sheet.sheet_properties.pageSetUpPr.fitToPage = True
        for text in notes:
            cell = WriteOnlyCell(self.sheet, text)
            cell.font = Font(italic=True)
            self.sheet.append([cell])
        line = []
        for head in heads:
            cell = WriteOnlyCell(self.sheet, head)
            cell.font = Font(bold=True)
            cell.fill = PatternFill("solid", fgColor="E6E6E6")
            cell.alignment = Alignment(wrap_text=True, vertical="top")
            line.append(cell)
        self._bold = Font(bold=True)
        self.sheet.append(line)

    def add(self, cells: Sequence[Cell]) -> None:
        """Append a row; a Number takes its format along."""
        self.row += 1
        self.sheet.append([self._cell(i, c) for i, c in enumerate(cells)])

    def _cell(self, column: int, value: Cell) -> Any:
        if isinstance(value, Number):
            cell = self._pooled(column, value.format)
            cell.value = value.value
            return cell
        if isinstance(value, str):
            cell = self._pooled(column, "bold" if value in ("FLAGGED", "FAILED") else "text")
            cell.value = value
            # text from a data file must stay text, also where it begins with an equals sign
            cell.data_type = "s"
            return cell
        return value

    def _pooled(self, column: int, kind: str) -> Any:
        cell = self._pool.get((column, kind))
        if cell is None:
            cell = self._pool[column, kind] = self._make(self.sheet)
            if kind == "bold":
                cell.font = self._bold
            elif kind != "text":
                cell.number_format = kind
        return cell

    def done(self, head_row: int) -> None:
        """Put the filter on the head row, over all rows."""
        if self.row > head_row:
            self.sheet.auto_filter.ref = f"A{head_row}:{self._letter(len(self.heads))}{self.row}"


def _width(head: str) -> float:
    """Wide enough for figures and for the longest word of the head."""
    if head in ("flags and what to do", "text", "file", "remark"):
        return 60.0
    return max(11.0, max(len(w) for w in head.split()) + 3.0)


def write_workbook(result: FitResult, path: Path) -> None:
    """Write the workbook. Raises OSError where the path cannot be written."""
    from openpyxl import Workbook

    book = Workbook(write_only=True)
    book.properties.title = result.title
    book.properties.creator = f"layerlot {result.version}"
    _fill(book, "answers", [result.title, verdict(result), KEY, CAUTION], *_answers(result))
    _fill(book, "means", [_MEANS_NOTE], *_means(result))
    _fill(
        book,
        "readings",
        ["normalised residual = (measured - predicted) / u; a reading not used has none"],
        *_readings(result),
    )
    _fill(book, "budget", [_BUDGET_NOTE], *_budget(result))
    _fill(book, "shared and flags", [], *_rest(result))
    book.save(path)


_MEANS_NOTE = (
    "u (shared) is common to all sites and does not average down; spread is the standard deviation of what was averaged"
)
_BUDGET_NOTE = (
    "shares of the standard uncertainty u, in the unit of the quantity; the squares of a row's shares add up to u²"
)


def _fill(
    book: Any, name: str, notes: Sequence[str], heads: Sequence[str], rows: Iterable[Sequence[Cell]], frozen: int
) -> None:
    sheet = _Sheet(book, name, notes, heads, frozen)
    for row in rows:
        sheet.add(row)
    sheet.done(len(notes) + 1)


Table = tuple[list[str], Iterable[Sequence[Cell]], int]


def _answers(result: FitResult) -> Table:
    cols = columns(result.sites, known=True)
    levels = place_levels(result.sites)
    heads = [*levels, "x (mm)", "y (mm)", "measured at", "status"]
    for c in cols:
        unit = unit_mark(c.unit)
        heads += [c.heading] + [f"{part} ({unit})" if unit else part for part in _PARTS] + ["origin"]
    heads += ["chi-squared", "degrees of freedom", "p", "readings used", "readings rejected", "flags and what to do"]
    return heads, (_answer_row(s, levels, cols) for s in result.sites), len(levels)


_PARTS = ("U, k = 2", "u", "u (random)", "u (shared)", "95 % from", "95 % to")


def _answer_row(s: SiteResult, levels: Sequence[str], cols: Sequence[Column]) -> list[Cell]:
    found = by_column(s)
    row: list[Cell] = [getattr(s, level) for level in levels]
    row += [s.x_mm, s.y_mm, s.measured_at, STATUS[s.status]]
    for c in cols:
        e = found.get(c)
        row += ["not determined", *[None] * 7] if e is None else [*_numbers(e), e.origin]
    if s.fit is None:
        row += [None] * 5
    else:
        p = None if s.fit.p_value is None else Number(s.fit.p_value, 3)
        row += [Number(s.fit.chi2, 2), s.fit.dof, p, s.fit.readings_used, s.fit.readings_rejected]
    row.append("; ".join(f.text for f in (*s.flags, *s.notes)) or None)
    return row


def _numbers(e: Estimate | GroupMean) -> list[Cell]:
    """Value, U, u, its parts and interval, to the digits of U and of u."""
    if e.u == 0:
        return [e.value, 0, 0, 0, 0, e.low95, e.high95]
    wide, fine = places(COVERAGE * e.u), places(e.u)
    head: list[Cell] = [Number(e.value, wide), Number(COVERAGE * e.u, wide)]
    return head + [Number(x, fine) for x in (e.u, e.u_random, e.u_shared, e.low95, e.high95)]


def _means(result: FitResult) -> Table:
    heads = ["mean over", "lot", "wafer", "quantity", "unit", "mean", *_PARTS]
    heads += ["spread", "spread without measurement noise", "sites used", "sites left out"]
    rows = mean_rows(result)
    cols = mean_columns(rows)
    body = (
        [
            m.level,
            m.lot,
            m.wafer,
            c.name,
            m.unit,
            *_numbers(m),
            _spread(m, m.spread),
            _spread(m, m.spread_process),
            m.sites,
            m.sites_left_out,
        ]
        for r in rows
        for c in cols
        if (m := r.cells.get(c)) is not None
    )
    return heads, body, 4


def _spread(m: GroupMean, s: float | None) -> Cell:
    return None if s is None else Number(s, places(m.u) if m.u > 0 else 3)


def _readings(result: FitResult) -> Table:
    levels = place_levels(result.sites)
    heads = [*levels, "wavelength (nm)", "pol", "mode", "measured", "predicted", "u", "unit", "measured - predicted"]
    heads += ["normalised residual", "used", "remark", "file", "sheet", "row"]
    return heads, (_reading_row(s, r, levels) for s in result.sites for r in s.readings), len(levels)


def _reading_row(s: SiteResult, r: FittedReading, levels: Sequence[str]) -> list[Cell]:
    unit = reading_unit(r)
    n = _ANGLE_DECIMALS if unit == "deg" else _INDEX_DECIMALS
    place, z = r.reading.place, normalised(r)
    row: list[Cell] = [getattr(s, level) for level in levels]
    row += [wavelength_nm(r), r.reading.pol, mode_name(r), Number(r.reading.value, n)]
    row += [None if r.predicted is None else Number(r.predicted, n), Number(r.u, n), unit]
    row += [None, None] if z is None else [Number(z * r.u, n), Number(z, 2)]
    row += ["yes" if r.used else "NO", r.reason, place.file, place.sheet, place.row]
    return row


def _budget(result: FitResult) -> Table:
    levels = place_levels(result.sites)
    sources = list(dict.fromkeys((b.source, b.kind) for s in result.sites for b in s.budget))
    heads = [*levels, "quantity", "unit", "u", *[f"{source} ({kind})" for source, kind in sources]]

    def rows() -> Iterable[Sequence[Cell]]:
        for s in result.sites:
            shares: dict[Column, dict[tuple[str, str], float]] = {}
            for b in s.budget:
                shares.setdefault(column_of(b), {})[b.source, b.kind] = b.u
            for e in s.estimates:
                mine = shares.get(column_of(e))
                if mine is None or e.u == 0:
                    continue
                n = places(e.u) + 1
                row: list[Cell] = [getattr(s, level) for level in levels]
                row += [column_of(e).name, e.unit, Number(e.u, n - 1)]
                row += [Number(mine[k], n) if k in mine else None for k in sources]
                yield row

    return heads, rows(), len(levels) + 1


def _rest(result: FitResult) -> Table:
    heads = ["kind", "subject", "value", "u", "stated value", "stated u", "unit", "text"]
    rows: list[list[Cell]] = []
    for e in result.shared:
        n = places(e.u) if e.u > 0 else _MOST_DECIMALS
        stated: list[Cell] = [None, None] if e.prior is None else [Number(e.prior[0], n), Number(e.prior[1], n)]
        rows.append(
            ["shared quantity", column_of(e).name, Number(e.value, n), Number(e.u, n), *stated, e.unit, e.origin]
        )
    blank: list[Cell] = [None] * 5
    for kind, groups in (("flag", flag_groups(result)), ("note", note_groups(result))):
        rows += [[kind, f"{g.code}: {name}", *blank, f"{g.text} {d}".strip()] for g in groups for name, d in g.sites]
    rows += [["row left out", str(place), *blank, why] for place, why in result.skipped_rows]
    for s in result.sites:
        for r in s.rivals:
            words = f"{r.orders} (probability {r.probability:.3g}, delta chi-squared {r.delta_chi2:.3g})"
            rows.append(["rival mode orders", ", ".join(filter(None, (s.lot, s.wafer, s.site))), *blank, words])
            for e in r.estimates:
                n = places(e.u) if e.u > 0 else _MOST_DECIMALS
                rows.append(["rival", column_of(e).name, Number(e.value, n), Number(e.u, n), None, None, e.unit, None])
    rows += [["convention", None, *blank, text] for text in result.conventions]
    rows += [["input", f.file, *blank, f"SHA-256 {f.sha256}"] for f in result.inputs]
    return heads, rows, 2
