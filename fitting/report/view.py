"""What the three reports have in common: columns in reading order, wafers, budgets of a typical site, strays."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field

from ..records import Estimate, FitResult, FittedReading, GroupMean, Quantity, SiteResult, Status
from .words import Column, column_of

# So many sites are shown one by one; more are shown by their means.
FEW_SITES = 12
_RANK = {"index": 0, "thickness": 1}


def columns(sites: Iterable[SiteResult], *, known: bool = False) -> list[Column]:
    """Quantities of these sites: layers as they appear, index before thickness, by wavelength.

    known: include those that are at every site only the stated prior.
    """
    seen: dict[Column, bool] = {}
    for site in sites:
        for e in site.estimates:
            c = column_of(e)
            seen[c] = seen.get(c, False) or e.origin != "known"
    return _sorted([c for c, sharpened in seen.items() if sharpened or known])


def _sorted(found: Sequence[Column]) -> list[Column]:
    layers = list(dict.fromkeys(c.layer for c in found))
    return sorted(
        found,
        key=lambda c: (layers.index(c.layer), _RANK.get(c.quantity, 2), c.quantity, c.wavelength_nm or 0, c.axis or ""),
    )


def by_column(site: SiteResult) -> dict[Column, Estimate]:
    """Estimates of one site by column."""
    return {column_of(e): e for e in site.estimates}


def asymmetric(e: Estimate) -> bool:
    """Whether the 95 % interval has to be shown beside value ± U."""
    return e.interval != "parabolic"


@dataclass
class MeanRow:
    """Means of all quantities of one wafer or lot."""

    first: GroupMean
    cells: dict[Column, GroupMean] = field(default_factory=dict)


def mean_rows(result: FitResult) -> list[MeanRow]:
    """Lots first, then wafers, each in the order of the result."""
    rows: dict[tuple[str, str | None, str | None], MeanRow] = {}
    for m in result.means:
        rows.setdefault((m.level, m.lot, m.wafer), MeanRow(m)).cells[column_of(m)] = m
    return sorted(rows.values(), key=lambda r: r.first.level != "lot")


def mean_columns(rows: Sequence[MeanRow]) -> list[Column]:
    """Quantities of the means in reading order."""
    return _sorted(list(dict.fromkeys(c for r in rows for c in r.cells)))


def wafers(result: FitResult) -> list[tuple[str | None, str | None, list[SiteResult]]]:
    """Sites by lot and wafer, in the order of the table."""
    groups: dict[tuple[str | None, str | None], list[SiteResult]] = {}
    for s in result.sites:
        groups.setdefault((s.lot, s.wafer), []).append(s)
    return [(lot, wafer, members) for (lot, wafer), members in groups.items()]


@dataclass(frozen=True)
class Share:
    """One source's share of u in the budget of a typical site: root mean square over `sites` sites."""

    source: str
    kind: str
    u: float
    fraction: float  # of the variance


@dataclass(frozen=True)
class Budget:
    """The sources of u of one quantity, largest first, with their root sum of squares by kind."""

    column: Column
    u: float
    u_random: float
    u_shared: float
    shares: tuple[Share, ...]
    sites: int


def budgets(sites: Sequence[SiteResult]) -> list[Budget]:
    """Budget of every quantity over these sites. Sources that never contribute are left out."""
    lines: dict[Column, dict[tuple[str, str], float]] = {}
    count: dict[Column, int] = {}
    for site in sites:
        for c in {column_of(line) for line in site.budget}:
            count[c] = count.get(c, 0) + 1
        for line in site.budget:
            table = lines.setdefault(column_of(line), {})
            table[(line.source, line.kind)] = table.get((line.source, line.kind), 0.0) + line.u**2
    return [_budget(c, lines[c], count[c]) for c in columns(sites) if c in lines]


def _budget(column: Column, squares: dict[tuple[str, str], float], count: int) -> Budget:
    total = sum(squares.values()) / count
    shares = [
        Share(source, kind, math.sqrt(v / count), v / count / total if total > 0 else 0.0)
        for (source, kind), v in squares.items()
        if v > 0
    ]
    shares.sort(key=lambda s: -s.u)
    parts = {k: math.sqrt(sum(s.u**2 for s in shares if s.kind == k)) for k in ("random", "shared")}
    return Budget(column, math.sqrt(total), parts["random"], parts["shared"], tuple(shares), count)


def reading_unit(fitted: FittedReading) -> str:
    """deg for an angle, 1 for an effective index."""
    return "deg" if fitted.reading.quantity is Quantity.ANGLE else "1"


def wavelength_nm(fitted: FittedReading) -> float:
    """As typed; rounded to a femtometre, which takes the conversion's binary dust off."""
    return round(fitted.reading.wavelength_um * 1000, 6)


def mode_name(fitted: FittedReading) -> str:
    """TE0, or TE? where the order is not known."""
    return f"{fitted.reading.pol}{'?' if fitted.order is None else fitted.order}"


def normalised(fitted: FittedReading) -> float | None:
    """(measured - predicted) / u of a used reading, None for one that was left out."""
    if not fitted.used or fitted.predicted is None:
        return None
    return (fitted.reading.value - fitted.predicted) / fitted.u


def left_out(result: FitResult) -> list[tuple[SiteResult, FittedReading]]:
    """Readings that were not used at sites that were fitted; a failed site lists its own."""
    return [(s, r) for s in result.sites for r in s.readings if not r.used and s.status is not Status.FAILED]


def in_trouble(result: FitResult) -> list[SiteResult]:
    """Failed sites, then flagged ones."""
    bad = [s for s in result.sites if s.status is not Status.OK]
    return sorted(bad, key=lambda s: s.status is not Status.FAILED)
