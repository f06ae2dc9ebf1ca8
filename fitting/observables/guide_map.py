"""Modes of the guides of a stack file: by the corrected model, or by the plain effective index method on request.

The corrected model needs a map over the window that the file's quantities span. It is built at first use and kept, see
`map_store`; the wavelength axis is rounded outwards, so that neighbouring requests find the same map.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import fields, replace

import numpy as np
from layerlot.solver.cross_section import CrossSection, GuideFlag, GuideModes, substrate_pull
from layerlot.solver.guide import eim_modes
from layerlot.solver.map_window import (
    ETCH,
    INDEX,
    SIDEWALL,
    THICKNESS,
    WAVELENGTH,
    WIDTH,
    MapWindow,
    index_points_um,
    map_window,
)

from ..records import Array
from ..stack import Stack
from .guide import GuideContext, GuideParts, GuideWindow, core_number, guide_windows, mean_x
from .guide_index import layer_indices, nominal

Progress = Callable[[str, int, int], None]

# Half extents, in the axes' units, below which a quantity is followed to first order and is no axis: the correction
# bends by less than 5e-6 over them in silicon wires, and by less elsewhere.
_TO_FIRST_ORDER = {WIDTH: 1e-3, THICKNESS: 5e-4, ETCH: 5e-4, SIDEWALL: 0.2, INDEX: 1e-3}
# Axes are widened by this share, so that rounding does not put their ends outside.
_PADDED = (WIDTH, THICKNESS, INDEX)
_PADDING = 0.01
# The wavelength axis ends at multiples of this, and is no shorter than twice it, in µm.
_WAVE_STEP_UM = 0.05
# More than a wavelength differs between air and vacuum: ranges may be stated in either.
_AIR = 4e-4


def guide_modes(
    stack: Stack,
    contexts: Sequence[GuideContext],
    parts: GuideParts,
    plain: bool = False,
    progress: Progress | None = None,
    workers: int | None = None,
) -> GuideModes:
    """Modes of the guides of contexts (C), `parts` being theirs. plain: by the effective index method alone, which
    states no error. In a window of which no map can be made there is no number but a flag."""
    if plain or not contexts:
        return eim_modes(parts.section, parts.tm, parts.order, parts.radius_um)
    out = {f.name: np.array(getattr(_none(parts.section), f.name)) for f in fields(GuideModes)}
    for window in guide_windows(stack, contexts):
        rows = list(window.rows)
        box = solver_window(stack, window, mean_x(contexts))
        modes = _modes_of(box, _rows(parts.section, rows), parts.radius_um[rows], progress, workers)
        for name, value in out.items():
            value[rows] = getattr(modes, name)
    return GuideModes(**out)


def _modes_of(
    window: MapWindow,
    section: CrossSection,
    radius_um: Array,
    progress: Progress | None,
    workers: int | None,
) -> GuideModes:
    from layerlot.solver.correction import corrected_modes, held_to_sides
    from layerlot.solver.map_build import MapError

    from .map_store import stored_map

    bends = bool(np.isfinite(radius_um).any())
    try:
        a_map = stored_map(window, None, workers, progress, bends)
    except MapError:
        flags = eim_modes(section, window.tm, window.order, radius_um).flags
        return replace(_none(section), flags=flags | int(GuideFlag.NO_MAP))
    modes = held_to_sides(section, corrected_modes(section, a_map, radius_um), window.tm)
    return replace(modes, error=np.hypot(modes.error, substrate_pull(section, modes.N)))


def solver_window(stack: Stack, window: GuideWindow, first_term_at: float | None = None) -> MapWindow:
    """The map's window for a window of a stack file. first_term_at: as `mean_x` of `layer_indices`."""
    low, high = window.ends()
    for axis, least in _TO_FIRST_ORDER.items():
        if high[axis] - low[axis] <= 2 * least:
            low[axis] = high[axis] = (low[axis] + high[axis]) / 2
    for axis in _PADDED:
        more = _PADDING * (high[axis] - low[axis])
        low[axis], high[axis] = low[axis] - more, high[axis] + more
    low[WAVELENGTH], high[WAVELENGTH] = _wave_axis(stack, float(low[WAVELENGTH]), float(high[WAVELENGTH]))
    waves = index_points_um(float(low[WAVELENGTH]), float(high[WAVELENGTH]))
    return map_window(
        low,
        high,
        layer_indices(stack, waves, mean_x=first_term_at).n,
        [nominal(x.thickness_um) for x in stack.layers[1:-1] if x.thickness_um is not None],
        core_number(stack),
        window.full_etch,
        window.tm,
        window.order,
    )


def _wave_axis(stack: Stack, low: float, high: float) -> tuple[float, float]:
    """Ends of the wavelength axis: multiples of the step about the wavelengths asked for, within the range of every
    material."""
    step = _WAVE_STEP_UM
    first, last = np.floor(low / step + 1e-9) * step, np.ceil(high / step - 1e-9) * step
    if last - first < 2 * step - 1e-9:
        middle = np.round((low + high) / 2 / step) * step
        first, last = min(first, middle - step), max(last, middle + step)
    known = [x.index.material.range_um for x in stack.layers if x.index.material is not None]
    first = max([first, *(r[0] * (1 + _AIR) for r in known)])
    last = min([last, *(r[1] * (1 - _AIR) for r in known)])
    return round(float(min(first, low)), 9), round(float(max(last, high)), 9)


def _rows(section: CrossSection, rows: list[int]) -> CrossSection:
    etch = None if section.etch_um is None else section.etch_um[rows]
    return CrossSection(
        section.n[rows], section.t_um[rows], section.core, section.width_um[rows], section.wavelength_um[rows], etch,
        section.sidewall_deg[rows],
    )  # fmt: skip


def _none(section: CrossSection) -> GuideModes:
    """Modes of guides that hold none."""
    shape, layers = section.shape, section.n.shape[-1]
    nan = np.full(shape, np.nan)
    return GuideModes(
        nan, nan, np.full((*shape, layers - 2), np.nan), nan, nan, np.full((*shape, layers), np.nan), nan,
        np.zeros(shape, dtype=np.int64), nan, nan,
    )  # fmt: skip
