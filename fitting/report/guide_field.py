"""Drawings of guide modes: the main component of the electric field over the cross-section, with its outlines.

The vector reference gives the field; the effective index method the product of its vertical and its lateral one.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from layerlot.solver.cross_section import CrossSection, without_substrate
from layerlot.solver.fields import mode_field
from layerlot.solver.slab import mode_index

from ..records import Array
from .drawing import figure_of

if TYPE_CHECKING:
    from matplotlib.axes import Axes

SUFFIXES = (".svg", ".png", ".pdf")
# Points across a panel, and decay lengths that are shown around the guide.
_POINTS = (241, 181)
_DECAYS = 3.0
_COLUMNS = 2
_PANEL_IN = (3.5, 2.7)

Line = tuple[Array, Array]


@dataclass(frozen=True)
class FieldPanel:
    """One guide (a section of empty batch shape) with the title over it; tm, order: of the mode; N: its absolute
    effective index, which sets how far the panel goes."""

    title: str
    section: CrossSection
    tm: bool
    order: int
    N: float


def draw_fields(panels: Sequence[FieldPanel], path: Path, plain: bool) -> None:
    """Draw panels into one svg, png or pdf file, whichever the suffix says. plain: fields of the effective index
    method. A panel whose mode the reference does not hold says so. Raises OSError where the disk refuses."""
    rows, columns = -(-len(panels) // _COLUMNS), min(len(panels), _COLUMNS)
    with figure_of(_PANEL_IN[1] * rows) as figure:
        figure.set_size_inches(_PANEL_IN[0] * columns, _PANEL_IN[1] * rows)
        figure.set_layout_engine("constrained")
        how = "effective index method" if plain else "full-vector reference"
        figure.suptitle(f"Field across the straight guide, by the {how}", fontsize=8)
        for place, panel in enumerate(panels, start=1):
            _draw(figure.add_subplot(rows, columns, place), panel, plain)
        metadata = {"Date": None} if path.suffix.lower() == ".svg" else None
        figure.savefig(path, dpi=200, metadata=metadata)


def _draw(axes: Axes, panel: FieldPanel, plain: bool) -> None:
    from layerlot.solver.vector_modes import NoSuchModeError

    x, y = _grid(panel)
    axes.set(xlim=(x[0], x[-1]), ylim=(y[0], y[-1]), aspect="equal", title=panel.title)
    axes.set(xlabel="x across the guide (µm)", ylabel="y above the substrate (µm)")
    try:
        field = (_eim_field if plain else _vector_field)(panel, x, y)
    except NoSuchModeError:
        text = "The reference holds no such mode:\nit is cut off, or leaks."
        axes.text(0.5, 0.5, text, transform=axes.transAxes, ha="center", va="center")
        return
    strength = np.abs(field) / np.abs(field).max()
    image = axes.pcolormesh(x, y, strength, cmap="cividis", vmin=0, vmax=1, shading="gouraud", rasterized=True)
    for along, up in outlines(panel.section, float(x[0]), float(x[-1])):
        axes.plot(along, up, color="black", linewidth=1.6)
        axes.plot(along, up, color="white", linewidth=0.7)
    bar = axes.figure.colorbar(image, ax=axes, shrink=0.8)
    bar.set_label("|E_y| / largest" if panel.tm else "|E_x| / largest")


def _grid(panel: FieldPanel) -> tuple[Array, Array]:
    """Points around the guide: some decay lengths of its field into the substrate or buffer, at least half the core's
    thickness, and as far to the sides."""
    s = panel.section
    n, _ = without_substrate(s.n)
    t = float(s.t_um[s.core - 1])
    bottom = float(s.t_um[: s.core - 1].sum())
    fall = panel.N**2 - max(n[0], n[-1]) ** 2
    decay = float(s.wavelength_um) / (2 * np.pi * np.sqrt(max(fall, 1e-3)))
    room = min(max(_DECAYS * decay, t / 2), 6 * t)
    foot = float(s.width_um + abs(s.wall_um)) / 2
    side = min(max(room, foot / 2), 4 * foot)
    x = np.linspace(-foot - side, foot + side, _POINTS[0])
    return x, np.linspace(bottom - room, bottom + t + room, _POINTS[1])


def outlines(section: CrossSection, left_um: float, right_um: float) -> list[Line]:
    """Where materials meet, as lines (x, y) in µm between two edges: plane interfaces, and the etched one."""
    core, t = section.core, section.t_um
    heights = np.concatenate([[0.0], np.cumsum(t)])
    top, depth = float(heights[core]), float(section.depth_um)
    foot, head = (float(section.width_um + sign * section.wall_um) / 2 for sign in (1, -1))
    edges = np.array([left_um, right_um])
    # The top of the film above the core is flat; the core's own top is where it was not etched away.
    plane = [h for k, h in enumerate(heights) if k != core]
    lines = [(edges, np.full(2, h)) for h in plane]
    etched = np.array([left_um, -foot, -head, head, foot, right_um])
    return [*lines, (etched, np.array([top - depth, top - depth, top, top, top - depth, top - depth]))]


def _vector_field(panel: FieldPanel, x: Array, y: Array) -> Array:
    from layerlot.solver.vector_field import vector_field

    _, components = vector_field(panel.section, panel.tm, panel.order, x[None, :], y[:, None])
    return components[1 if panel.tm else 0]


def _eim_field(panel: FieldPanel, x: Array, y: Array) -> Array:
    """Main component (Y, X): the vertical slab's field times the lateral one's, walls taken as vertical. Of a TM slab's
    H the electric field across its layers follows by dividing by n²."""
    s, tm = panel.section, panel.tm
    n, _ = without_substrate(s.n)
    lam = float(s.wavelength_um)
    centre = float(mode_index(n, s.t_um, lam, 0, tm))
    beside = float(mode_index(n, s.column(1.0), lam, 0, tm))
    side = beside if np.isfinite(beside) else float(max(n[0], n[-1]))
    index, width = np.array([side, centre, side]), np.array([float(s.width_um)])
    N = float(mode_index(index, width, lam, panel.order, not tm))
    up = mode_field(centre, n, s.t_um, lam, y, tm)
    along = mode_field(N, index, width, lam, x + width[0] / 2, not tm)
    if tm:
        up = up / n[np.searchsorted(np.concatenate([[0.0], np.cumsum(s.t_um)]), y)] ** 2
    else:
        along = along / index[np.searchsorted([-width[0] / 2, width[0] / 2], x)] ** 2
    return np.asarray(up[:, None] * along[None, :])
