"""results.xlsx: readable as it stands, every number with its unit in the head and its digits from its uncertainty.

sheets: answers (one row a site), means, readings (with residuals), budget, shared and flags
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from pathlib import Path

from ..records import Estimate, FitResult, FittedReading, GroupMean, SiteResult
from .rounding import COVERAGE
from .rounding import decimals as places
from .sheetfile import MOST_DECIMALS, Book, Cell, Number
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

Table = tuple[list[str], Iterable[Sequence[Cell]], int]  # heads, rows, columns that stay in view
_ANGLE_DECIMALS, _INDEX_DECIMALS = 4, 6
_PARTS = ("U, k = 2", "u", "u (random)", "u (shared)", "95 % from", "95 % to")
_MEANS_NOTE = (
    "u (shared) is common to all sites and does not average down; spread is the standard deviation of what was averaged"
)
_BUDGET_NOTE = (
    "shares of the standard uncertainty u, in the unit of the quantity; the squares of a row's shares add up to u²"
)
_READINGS_NOTE = "normalised residual = (measured - predicted) / u; a reading that was not used has none"


def write_workbook(result: FitResult, path: Path) -> None:
    """Write the workbook. Raises OSError where the path cannot be written."""
    book = Book(result.title, f"layerlot {result.version}")
    book.add_sheet("answers", [result.title, verdict(result), KEY, CAUTION], *_answers(result))
    book.add_sheet("means", [_MEANS_NOTE], *_means(result))
    book.add_sheet("readings", [_READINGS_NOTE], *_readings(result))
    book.add_sheet("budget", [_BUDGET_NOTE], *_budget(result))
    book.add_sheet(
        "shared and flags",
        ["what all sites share, what is wrong and what to do, what the figures rest on"],
        *_rest(result),
    )
    book.save(path)


def _answers(result: FitResult) -> Table:
    cols = columns(result.sites, known=True)
    levels = place_levels(result.sites)
    heads = [*levels, "x (mm)", "y (mm)", "measured at", "status"]
    for c in cols:
        unit = unit_mark(c.unit)
        heads += [c.heading] + [f"{part} ({unit})" if unit else part for part in _PARTS] + ["origin"]
    heads += ["chi-squared", "degrees of freedom", "p", "readings used", "readings rejected", "flags and what to do"]
    return heads, (_answer_row(s, levels, cols) for s in result.sites), len(levels)


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
        p = s.fit.p_value
        digits = 3 if p is None or not 0 < p < 0.01 else places(p)
        row += [
            Number(s.fit.chi2, 2),
            s.fit.dof,
            None if p is None else Number(p, digits),
            s.fit.readings_used,
            s.fit.readings_rejected,
        ]
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
        n = places(e.u) if e.u > 0 else MOST_DECIMALS
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
                n = places(e.u) if e.u > 0 else MOST_DECIMALS
                rows.append(["rival", column_of(e).name, Number(e.value, n), Number(e.u, n), None, None, e.unit, None])
    rows += [["convention", None, *blank, text] for text in result.conventions]
    rows += [["input", f.file, *blank, f"SHA-256 {f.sha256}"] for f in result.inputs]
    return heads, rows, 2
