"""Maps over the wafer, and means wafer by wafer. The colour scale is even in lightness, so it survives a black print.

wafer_map      one wafer: values beside the marks, circles for good sites, diamonds for flagged, crosses for failed
wafer_tiles    many wafers on one scale, no figures
wafer_means    means and the two parts of their U
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from ..records import Estimate, FitResult, SiteResult, Status
from .drawing import figure_of, svg
from .rounding import COVERAGE, format_number, format_u
from .rounding import decimals as places
from .view import by_column, mean_rows, wafers
from .words import Column, unit_mark

if TYPE_CHECKING:
    from matplotlib.axes import Axes

# More values than this on one map would run into each other.
MAP_TEXT_AT_MOST = 100
_SHAPE = {Status.OK: "o", Status.FLAGGED: "D", Status.FAILED: "X"}
_TILES_A_ROW = 7


def wafer_map(sites: Sequence[SiteResult], columns: Sequence[Column]) -> str | None:
    """One map a column, two in a row; None unless three sites have different places."""
    placed = [s for s in sites if s.x_mm is not None and s.y_mm is not None]
    if len({(s.x_mm, s.y_mm) for s in placed}) < 3 or not columns:
        return None
    lines = (len(columns) + 1) // 2
    height = 3.35 * lines
    with figure_of(height) as figure:
        for k, c in enumerate(columns):
            x0 = 0.07 + 0.5 * (k % 2)
            y0 = 1 - (k // 2 + 1) * 3.35 / height + 0.4 / height
            _one_map(figure.add_axes((x0, y0, 0.42, 2.6 / height)), placed, c)
        return svg(figure)


def _one_map(axes: Axes, placed: Sequence[SiteResult], column: Column) -> None:
    from matplotlib.transforms import offset_copy

    found = [(s, by_column(s).get(column)) for s in placed]
    known = [e for _, e in found if e is not None]
    if known:
        axes.set_title(f"{column.heading}\n{_scale_words(known)}", fontsize=7)
    size = 8.5 if len(placed) <= 60 else 5
    _marks(axes, [(s.x_mm or 0.0, s.y_mm or 0.0, s.status, e) for s, e in found], known, size)
    if len(placed) <= MAP_TEXT_AT_MOST:
        below = offset_copy(axes.transData, axes.figure, y=-size * 0.78, units="points")  # type: ignore[arg-type]
        style: Any = {"transform": below, "ha": "center", "va": "top", "fontsize": 5.5 if len(placed) > 25 else 7}
        digits = _map_digits(known)
        for s, e in found:
            if e is not None:
                axes.text(s.x_mm or 0.0, s.y_mm or 0.0, format_number(e.value, digits), **style)
    axes.set_aspect("equal", adjustable="datalim")
    axes.margins(0.2)
    axes.set(xlabel="x (mm)", ylabel="y (mm)")


def _map_digits(known: Sequence[Estimate]) -> int:
    """One digit of the usual U is enough on a map."""
    usual = sorted(e.u for e in known)[len(known) // 2] if known else 0.0
    return max(places(COVERAGE * usual) - 1, 0) if usual > 0 else 6


def _scale_words(known: Sequence[Estimate]) -> str:
    n = _map_digits(known)
    low, high = (format_number(f(e.value for e in known), n) for f in (min, max))
    random = sorted(e.u_random for e in known)[len(known) // 2]
    return f"dark {low}, light {high}; random U ± {format_u(random, COVERAGE)}"


def _marks(
    axes: Axes, spots: Sequence[tuple[float, float, Status, Estimate | None]], known: Sequence[Estimate], size: float
) -> None:
    """Filled marks; shape and edge tell the status, white means no number."""
    from matplotlib import colormaps

    shade = colormaps["cividis"]
    values = [e.value for e in known] or [0.0]
    low, span = min(values), (max(values) - min(values)) or 1.0
    for status, mark in _SHAPE.items():
        mine = [(x, y, e) for x, y, its, e in spots if its is status]
        if mine:
            faces: Any = ["white" if e is None else shade((e.value - low) / span) for _, _, e in mine]
            edge = 0.4 if status is Status.OK else 1.2
            axes.scatter(
                [x for x, _, _ in mine], [y for _, y, _ in mine], s=size**2, marker=mark, c=faces, edgecolors="black",
                linewidths=edge, clip_on=False,
            )  # fmt: skip


def wafer_tiles(result: FitResult, column: Column) -> str | None:
    """All wafers side by side, one colour scale; None unless the sites of several wafers have places."""
    groups = [(w, [s for s in sites if s.x_mm is not None and s.y_mm is not None]) for _, w, sites in wafers(result)]
    groups = [(w, sites) for w, sites in groups if sites]
    reach = max((max(abs(s.x_mm or 0.0), abs(s.y_mm or 0.0)) for _, sites in groups for s in sites), default=0.0)
    if len(groups) < 2 or reach == 0:
        return None
    pitch, lines = 2.9 * reach, -(-len(groups) // _TILES_A_ROW)
    height = 1.05 * lines + 0.3
    spots, known = [], []
    with figure_of(height) as figure:
        axes = figure.add_axes((0.0, 0.0, 1.0, 1 - 0.3 / height))
        for k, (name, sites) in enumerate(groups):
            x0, y0 = (k % _TILES_A_ROW) * pitch, -(k // _TILES_A_ROW) * pitch * 1.02
            for s in sites:
                e = by_column(s).get(column)
                spots.append((x0 + (s.x_mm or 0.0), y0 + (s.y_mm or 0.0), s.status, e))
                known += [] if e is None else [e]
            axes.text(x0, y0 - 1.22 * reach, name or "no name", ha="center", va="top", fontsize=6.5)
        if not known:
            return None
        _marks(axes, spots, known, 4.5 if len(spots) > 25 * len(groups) else 6.5)
        axes.set_title(f"{column.heading}: {_scale_words(known)}")
        axes.set_axis_off()
        axes.set_xlim(-0.52 * pitch, (_TILES_A_ROW - 0.48) * pitch)
        axes.set_ylim(-(lines - 0.42) * pitch * 1.02, 0.46 * pitch)
        return svg(figure)


def wafer_means(result: FitResult, columns: Sequence[Column]) -> str | None:
    """Sites as dots, mean with U (thin) and its random part (thick), wafer by wafer; None for fewer than two wafers."""
    rows = [r for r in mean_rows(result) if r.first.level == "wafer"]
    shown = [c for c in columns if sum(c in r.cells for r in rows) > 1][:3]
    if len(rows) < 2 or not shown:
        return None
    sites: dict[tuple[str | None, str | None], list[SiteResult]] = {}
    for s in result.sites:
        sites.setdefault((s.lot, s.wafer), []).append(s)
    height = 1.7 * len(shown) + 0.5
    with figure_of(height) as figure:
        for k, c in enumerate(shown):
            axes = figure.add_axes((0.11, 1 - (k + 1) * 1.7 / height + 0.12 / height, 0.87, 1.32 / height))
            for i, r in enumerate(rows):
                found = [by_column(s).get(c) for s in sites.get((r.first.lot, r.first.wafer), [])]
                dots = [e.value for e in found if e is not None]
                axes.plot([i - 0.18] * len(dots), dots, ".", color="0.62", markersize=2.5)
                m = r.cells.get(c)
                if m is None:
                    continue
                for u, thick in ((m.u, 0.9), (m.u_random, 3.2)):
                    axes.plot([i, i], [m.value - COVERAGE * u, m.value + COVERAGE * u], color="black", linewidth=thick)
                axes.plot(i, m.value, "_", color="black", markersize=9)
            axes.set_title(c.name)
            axes.set_ylabel(unit_mark(c.unit))
            axes.ticklabel_format(axis="y", useOffset=False)
            axes.set_xlim(-0.6, max(len(rows) - 0.4, 3.6))
            names = [r.first.wafer or "" for r in rows] if k == len(shown) - 1 else [""] * len(rows)
            axes.set_xticks(range(len(rows)), names, rotation=90 if len(rows) > 12 else 0)
        return svg(figure)
