"""Plots of readings and residuals; shapes carry what colours carry.

measured_predicted    readings of a wafer or of the table: measured against predicted, and normalised residuals
residuals_by_mode     all readings of the table: mean and scatter of the normalised residual, mode by mode
residuals_by_wafer    the same, wafer by wafer
site_residuals        one site, reading by reading
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from ..records import FitResult, FittedReading, SiteResult
from .drawing import COLOURS, MARKS, figure_of, svg
from .view import mode_name, normalised, wafers, wavelength_nm

if TYPE_CHECKING:
    from matplotlib.axes import Axes


def _waves(readings: Sequence[FittedReading]) -> list[float]:
    return sorted({wavelength_nm(r) for r in readings})


def measured_predicted(readings: Sequence[FittedReading], quantity: str) -> str:
    """Two panels over readings of one kind; quantity: `angle (°)` or `effective index`. Left-out ones on the axis."""
    waves = _waves(readings)
    used = [r for r in readings if r.used and r.predicted is not None]
    with figure_of(2.5) as figure:
        left, right = figure.add_axes((0.08, 0.17, 0.37, 0.7)), figure.add_axes((0.55, 0.17, 0.43, 0.7))
        span = [r.reading.value for r in used]
        left.plot([min(span), max(span)], [min(span), max(span)], color="0.6", zorder=1)
        for y in (-2, 0, 2):
            right.axhline(y, color="0.6", linestyle="-" if y == 0 else "--", linewidth=0.6, zorder=1)
        for pol in ("TE", "TM"):
            for w, colour, mark in zip(waves, COLOURS * 4, MARKS * 4):
                mine = [r for r in used if r.reading.pol == pol and wavelength_nm(r) == w]
                if not mine:
                    continue
                style: Any = {
                    "linestyle": "", "marker": mark, "markersize": 4, "color": colour, "label": f"{pol}, {w:g} nm",
                    "markerfacecolor": colour if pol == "TE" else "white", "markeredgewidth": 0.8,
                }  # fmt: skip
                x = [r.reading.value for r in mine]
                left.plot([r.predicted or 0.0 for r in mine], x, **style)
                right.plot(x, [normalised(r) or 0.0 for r in mine], **style)
        strays = [r.reading.value for r in readings if not r.used]
        _stray_marks(right, strays)
        left.set(xlabel=f"predicted {quantity}", ylabel=f"measured {quantity}", title="measured against predicted")
        right.set(xlabel=f"measured {quantity}", ylabel="(measured − predicted) / u", title="normalised residual")
        left.legend(loc="upper left", handletextpad=0.2, borderaxespad=0)
        return svg(figure)


def _stray_marks(axes: Axes, strays: Sequence[float]) -> None:
    """Readings that were left out have no residual: crosses on the lower axis say where they lie."""
    low, high = axes.get_ylim()
    top = max(abs(low), abs(high), 3.0)
    axes.set_ylim(-top, top)
    if strays:
        (crosses,) = axes.plot(strays, [-top] * len(strays), "x", color="black", markersize=6, clip_on=False)
        axes.legend([crosses], ["left out"], loc="upper right", handletextpad=0.2, borderaxespad=0)


def residuals_by_mode(result: FitResult) -> str | None:
    """Mean and standard deviation of the normalised residual of each mode over all sites."""
    groups: dict[tuple[float, str, int], list[float]] = {}
    for s in result.sites:
        for r in s.readings:
            z = normalised(r)
            if z is not None and r.order is not None:
                groups.setdefault((wavelength_nm(r), r.reading.pol, r.order), []).append(z)
    named = {f"{pol}{order}\n{wave:g} nm": groups[wave, pol, order] for wave, pol, order in sorted(groups)}
    return _spread_bars(named)


def residuals_by_wafer(result: FitResult) -> str | None:
    """Mean and standard deviation of the normalised residual of each wafer over its readings."""
    groups: dict[str, list[float]] = {}
    for _, wafer, sites in wafers(result):
        found = [z for s in sites for r in s.readings if (z := normalised(r)) is not None]
        groups.setdefault(wafer or "no name", []).extend(found)
    return _spread_bars(groups) if len(groups) > 1 else None


def _spread_bars(groups: Mapping[str, Sequence[float]]) -> str | None:
    """Dot at the mean, bar one standard deviation either way; None where no group has three readings."""
    shown = {name: z for name, z in groups.items() if len(z) > 2}
    if not shown:
        return None
    with figure_of(2.3) as figure:
        axes = figure.add_axes((0.08, 0.3, 0.9, 0.62))
        for y, line in ((0, "-"), (-1, "--"), (1, "--")):
            axes.axhline(y, color="0.6", linestyle=line, linewidth=0.6, zorder=1)
        for i, z in enumerate(shown.values()):
            mean = sum(z) / len(z)
            spread = (sum((v - mean) ** 2 for v in z) / (len(z) - 1)) ** 0.5
            axes.plot([i, i], [mean - spread, mean + spread], color="0.25", linewidth=3, solid_capstyle="butt")
            axes.plot(i, mean, "o", color="black", markerfacecolor="white", markersize=5)
        many = len(shown) > 12
        labels = [f"{name}" if many else f"{name}\nn = {len(z)}" for name, z in shown.items()]
        axes.set_xticks(range(len(labels)), labels, rotation=90 if many else 0)
        axes.set_xlim(-0.6, max(len(labels) - 0.4, 3.6))
        axes.set_ylabel("(measured − predicted) / u")
        return svg(figure)


def site_residuals(site: SiteResult) -> str | None:
    """Normalised residuals of one site by reading; those left out as crosses. None where nothing was used."""
    if not any(normalised(r) is not None for r in site.readings):
        return None
    with figure_of(1.75) as figure:
        axes = figure.add_axes((0.08, 0.27, 0.9, 0.68))
        for y in (-2, 0, 2):
            axes.axhline(y, color="0.6", linestyle="-" if y == 0 else "--", linewidth=0.6, zorder=1)
        for i, r in enumerate(site.readings):
            z = normalised(r)
            if z is None:
                axes.plot(i, 0, "x", color="black", markersize=7, markeredgewidth=1.4)
                continue
            axes.plot([i, i], [0, z], color="0.25", linewidth=1)
            axes.plot(i, z, MARKS[0], color="black", markersize=5,
                      markerfacecolor="black" if r.reading.pol == "TE" else "white")  # fmt: skip
        names = [f"{mode_name(r)}\n{wavelength_nm(r):g}" for r in site.readings]
        axes.set_xticks(range(len(names)), names, fontsize=7 if len(names) <= 14 else 5.5)
        axes.set_xlim(-0.6, max(len(names) - 0.4, 7.6))
        top = max(3.0, *(abs(v) for v in axes.get_ylim()))
        axes.set(ylim=(-top, top), ylabel="(meas. − pred.) / u")
        return svg(figure)
