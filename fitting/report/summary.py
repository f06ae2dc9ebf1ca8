"""The answers on a terminal: value ± U first, then what is wrong and what to do about it.

up to FEW_SITES sites      each site, then the means
more                       means of lots and wafers, then the sites in trouble
a table too wide           in two or more, one below the other
"""

from __future__ import annotations

import textwrap
from collections.abc import Sequence

from ..records import Estimate, FitResult, GroupMean, SiteResult, Status
from .rounding import COVERAGE, expanded, format_number, format_u
from .rounding import decimals as places
from .view import FEW_SITES, MeanRow, asymmetric, by_column, columns, in_trouble, mean_columns, mean_rows
from .words import (
    ALL_SITES,
    STATUS,
    Column,
    FlagGroup,
    column_of,
    count_words,
    flag_groups,
    note_groups,
    place_levels,
    site_name,
    unit_mark,
    verdict,
    with_unit,
)

WIDTH = 112
# Lines of one kind before "and n more".
_LIST_AT_MOST = 20
_SITES_AT_MOST = 40
_DETAILS_OF_MANY = 6
KEY = "value ± U: expanded uncertainty U = 2 u (k = 2, about 95 %)"
CAUTION = "Release of a lot stays with the responsible engineer."


def summary_text(result: FitResult) -> str:
    """What `fit` prints: answers, flags with remedies, notes. Plain text, no colour, lines of 112 characters or fewer
    unless a name or a path is longer."""
    parts = [[result.title, verdict(result)], _answers(result), _flags(result), _rivals(result), _notes(result)]
    parts += [_left_out_rows(result), [CAUTION]]
    return "\n\n".join("\n".join(lines) for lines in parts if lines) + "\n"


def _answers(result: FitResult) -> list[str]:
    means = mean_rows(result)
    several = [r for r in means if r.first.sites + r.first.sites_left_out > 1]
    if len(result.sites) > FEW_SITES and several:
        bad = in_trouble(result)
        lines = [KEY, *_mean_table(several)]
        if bad:
            lines += ["", "Sites flagged or failed", *_site_table(bad[:_LIST_AT_MOST]), *_more(len(bad), _LIST_AT_MOST)]
        return lines
    shown = result.sites[:_SITES_AT_MOST]
    lines = [KEY, *_site_table(shown), *_more(len(result.sites), _SITES_AT_MOST)]
    if several:
        lines += ["", *_mean_table(several)]
    return lines


def _more(count: int, shown: int) -> list[str]:
    return [f"... and {count - shown:,} more: see report.html or results.xlsx"] if count > shown else []


def _site_table(sites: Sequence[SiteResult]) -> list[str]:
    """One row a site; what is not parabolic is spelt out below."""
    levels, cols = place_levels(sites), columns(sites)
    rows = []
    for s in sites:
        found = by_column(s)
        cells = [_answer(found.get(c)) for c in cols] if found else ["no answer"] * len(cols)
        place = [getattr(s, level) or "" for level in levels] or ["all readings"]
        rows.append(place + cells + [STATUS[s.status]])
    if not cols:
        return [f"{site_name(s)}: no answer, {STATUS[s.status]}" for s in sites]
    if any(s.status is not Status.FAILED for s in sites):
        rows.append(["of U, shared"] + [""] * (len(levels) - 1) + _shared_cells(sites, cols) + [""])
    lines = _table(levels or [""], cols, rows, ["status"])
    return lines + [
        f"* {site_name(s)}: 95 % interval of {column_of(e).name} {_interval(e)}"
        for s in sites
        for e in s.estimates
        if asymmetric(e) and column_of(e) in cols
    ]


def _answer(e: Estimate | None) -> str:
    if e is None:
        return "not determined"
    return expanded(e.value, e.u) + ("*" if asymmetric(e) else "")


def _interval(e: Estimate) -> str:
    """The 95 % interval, to the digits of u."""
    n = places(e.u)
    return with_unit(f"{format_number(e.low95, n)} to {format_number(e.high95, n)}", e.unit)


def _shared_cells(sites: Sequence[SiteResult], cols: Sequence[Column]) -> list[str]:
    """The part of U that no number of sites averages away: the largest of these sites."""
    parts = [[e.u_shared for s in sites for e in s.estimates if column_of(e) == c] for c in cols]
    return [f"± {format_u(max(p), COVERAGE)}" for p in parts]


def _mean_table(rows: Sequence[MeanRow]) -> list[str]:
    cols = mean_columns(rows)
    lots = any(r.first.lot is not None for r in rows)
    body = []
    for r in rows:
        first = r.first
        place = ([first.lot or ""] if lots else []) + [first.wafer or "all" if first.level == "wafer" else "all"]
        count = f"{first.sites}" + (f" of {first.sites + first.sites_left_out}" if first.sites_left_out else "")
        body.append(place + [_mean(r.cells.get(c)) for c in cols] + [count])
    head = (["lot"] if lots else []) + ["wafer"]
    title = "Means (s: standard deviation, of sites in a wafer, of wafers in a lot; U is that of the mean)"
    return [title, *_table(head, cols, body, ["sites"])]


def _mean(m: GroupMean | None) -> str:
    if m is None:
        return "not determined"
    text = expanded(m.value, m.u)
    return text if m.spread is None else f"{text}  s {format_u(m.spread)}"


def _table(before: list[str], cols: Sequence[Column], rows: Sequence[list[str]], after: list[str]) -> list[str]:
    """Aligned columns under short heads; what does not fit beside the others follows as a second table."""
    left = len(before)
    out: list[str] = []
    start = 0
    while start < len(cols):
        stop = len(cols)
        while True:
            picked = [*range(left), *range(left + start, left + stop), *range(left + len(cols), len(rows[0]))]
            lines = _aligned(_heads(before, cols[start:stop], after), [[r[i] for i in picked] for r in rows], left)
            if stop == start + 1 or max(map(len, lines)) <= WIDTH:
                break
            stop -= 1
        out += lines
        start = stop
    return out


def _heads(before: list[str], cols: Sequence[Column], after: list[str]) -> list[list[str]]:
    """Name, axis and wavelength or unit of each quantity, one below the other."""
    named = [(c.short, c.direction, c.wavelength or unit_mark(c.unit)) for c in cols]
    lines = [[""] * len(before) + [n[i] for n in named] + [""] * len(after) for i in range(2)]
    return [h for h in lines if any(h)] + [before + [n[2] for n in named] + after]


def _aligned(heads: list[list[str]], rows: list[list[str]], left: int) -> list[str]:
    every = [*heads, *rows]
    widths = [max(len(r[i]) for r in every) for i in range(len(every[0]))]
    out = []
    for r in every:
        cells = [t.ljust(w) if i < left else t.rjust(w) for i, (t, w) in enumerate(zip(r, widths, strict=True))]
        out.append("  ".join(cells).rstrip())
    return out


def _flags(result: FitResult) -> list[str]:
    groups = flag_groups(result)
    if not groups:
        return ["Nothing flagged."]
    few = len(result.sites) <= FEW_SITES
    lines = ["FLAGS AND WHAT TO DO"]
    for g in groups:
        lines += _group(g, _LIST_AT_MOST if few else _DETAILS_OF_MANY)
    return lines


def _group(g: FlagGroup, at_most: int) -> list[str]:
    lines = _wrap(f"{g.code} ({_where(g)}): {g.text}", "")
    for name, detail in g.sites[:at_most]:
        lines += _wrap(f"- {name}: {detail}" if detail else f"- {name}", "  ")
    return lines + [f"  {m}" for m in _more(len(g.sites), at_most)]


def _where(g: FlagGroup) -> str:
    names = {name for name, _ in g.sites}
    return ALL_SITES if names == {ALL_SITES} else count_words(len(names), "site")


def _wrap(text: str, indent: str) -> list[str]:
    return textwrap.wrap(text, WIDTH, initial_indent=indent, subsequent_indent=indent + "  ", break_long_words=False)


def _rivals(result: FitResult) -> list[str]:
    """Other mode orders that the readings do not rule out."""
    found = [(s, r) for s in result.sites for r in s.rivals]
    if not found:
        return []
    lines = ["RIVALS (other mode orders that the readings do not rule out)"]
    for s, r in found[:_LIST_AT_MOST]:
        numbers = "; ".join(f"{column_of(e).name} {with_unit(expanded(e.value, e.u), e.unit)}" for e in r.estimates)
        orders = f"{site_name(s)}, probability {r.probability:.3g}: as {r.orders}"
        lines += _wrap(f"- {orders}: {numbers or 'no number'}", "  ")
    return lines + _more(len(found), _LIST_AT_MOST)


def _notes(result: FitResult) -> list[str]:
    lines = []
    for g in note_groups(result):
        lines += _wrap(f"Note ({_where(g)}): {g.text}", "")
        told = [(name, detail) for name, detail in g.sites if detail]
        for name, detail in told[:_DETAILS_OF_MANY]:
            lines += _wrap(f"- {name}, {detail}", "  ")
        lines += [f"  {m}" for m in _more(len(told), _DETAILS_OF_MANY)]
    return lines


def _left_out_rows(result: FitResult) -> list[str]:
    rows = result.skipped_rows
    if not rows:
        return []
    lines = [f"{count_words(len(rows), 'row')} of the data left out on reading:"]
    for place, why in rows[:_DETAILS_OF_MANY]:
        lines += _wrap(f"- {place}: {why}", "  ")
    return lines + [f"  {m}" for m in _more(len(rows), _DETAILS_OF_MANY)]
