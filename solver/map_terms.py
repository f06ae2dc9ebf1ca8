"""Quantities of a guide in a fixed order, and which of them are axes of a correction map.

The order: width, etch depth, sidewall, wavelength at fixed indices, L-2 thicknesses, L indices.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import ArrayLike

from .cross_section import CrossSection, GuideModes
from .guide import eim_modes
from .layers import Array
from .map_window import ETCH, INDEX, SIDEWALL, THICKNESS, WAVELENGTH, WIDTH, MapWindow

# Place of the wavelength among the quantities, and of the first thickness.
WAVE, FILMS = 3, 4


def base_modes(section: CrossSection, tm: bool, order: int, radius_um: ArrayLike | None = None) -> GuideModes:
    """What a map corrects: the effective index method for upright walls at the mean width. The method with sloped walls
    has a kink at 90 degrees, where undercut begins; the reference has none, so a map must not be made to mend it."""
    upright = replace(section, sidewall_deg=np.full_like(section.sidewall_deg, 90.0))
    modes = eim_modes(upright, tm, order, radius_um)
    return replace(modes, dsidewall_per_deg=np.zeros_like(modes.N))


def slopes_by_quantity(window: MapWindow, modes: GuideModes) -> Array:
    """Slopes (B, P) of modes, zero where the quantity is an axis of the map."""
    out = np.concatenate(
        [
            np.stack(
                [modes.dwidth_per_um, modes.detch_per_um, modes.dsidewall_per_deg, modes.dwavelength_per_um], axis=-1
            ),
            modes.dt_per_um,
            modes.dn,
        ],
        axis=-1,
    )
    out[:, axis_columns(window)] = 0.0
    return out


def axis_columns(window: MapWindow) -> list[int]:
    """Places of the axes among the quantities, in the order of the active axes."""
    films = window.t_um.size
    column = {WIDTH: 0, ETCH: 1, SIDEWALL: 2, WAVELENGTH: 3, THICKNESS: 3 + window.core, INDEX: 4 + films + window.core}
    return [column[k] for k in window.active]


def offsets(window: MapWindow, section: CrossSection, points: Array, nominal: Array) -> Array:
    """How far (B, 1 + P) everything that is no axis lies from its nominal value; the first column is
    zero."""
    core, films = window.core, window.t_um.size
    from_middle = points - (window.low + window.high) / 2
    out = np.zeros((points.shape[0], 5 + films + films + 2))
    others = out[:, 1:]
    others[:, 0], others[:, 1] = from_middle[:, WIDTH], 0.0 if window.full_etch else from_middle[:, ETCH]
    others[:, 2], others[:, WAVE] = from_middle[:, SIDEWALL], from_middle[:, WAVELENGTH]
    others[:, 4 : 4 + films] = section.t_um - window.t_um
    others[:, 3 + core] = from_middle[:, THICKNESS]
    others[:, 4 + films :] = section.n - nominal
    others[:, 4 + films + core] = from_middle[:, INDEX]
    others[:, axis_columns(window)] = 0.0
    return out


def along_quantities(window: MapWindow, slope: Array, others: Array, index_slopes: Array) -> Array:
    """Slopes (B, P) by quantity: `others` where it is no axis, else `slope` (B, d) in unit coordinates. index_slopes
    (B, L): of the nominal indices by the wavelength, along which the wavelength axis runs."""
    out = np.array(others)
    out[:, axis_columns(window)] = slope / window.half_extent()
    if WAVELENGTH in window.active:
        out[:, WAVE] -= (out[:, -index_slopes.shape[1] :] * index_slopes).sum(axis=1)
    return out


def axis_slopes(window: MapWindow, m: GuideModes, slopes: Array) -> Array:
    """Slopes (B, d) along the active axes, in their own units. slopes (B, L): of the nominal indices by wavelength."""
    core = window.core
    every = (
        m.dwidth_per_um, m.dt_per_um[:, core - 1], m.detch_per_um, m.dsidewall_per_deg, m.dn[:, core],
        m.slope_per_um(slopes),
    )  # fmt: skip
    return np.stack([every[k] for k in window.active], axis=-1) if window.active else np.zeros((m.N.size, 0))
