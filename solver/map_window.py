"""The window of a correction map: which guides it serves, and coordinates in it.

Up to six axes: width, thickness of the core, etch depth, slope of the walls, core index, wavelength. Along the
wavelength all indices follow their dispersion, kept as values at Chebyshev points; the core index counts as an offset
from that curve. An axis without extent is fixed. Everything else of a cross-section has one nominal value.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.polynomial import chebyshev as cheb
from numpy.typing import ArrayLike

from .cross_section import CrossSection, cross_section
from .layers import Array
from .map_basis import chebyshev

AXES = ("width_um", "thickness_um", "etch_um", "sidewall_deg", "core_index_offset", "wavelength_um")
WIDTH, THICKNESS, ETCH, SIDEWALL, INDEX, WAVELENGTH = range(6)


@dataclass(frozen=True)
class MapWindow:
    """low, high (6): ends of the axes in the order of `AXES`, equal where fixed; t_um (L-2): nominal thicknesses, the
    core's being ignored; core: number of the etched layer; full_etch: etched right through (the etch axis is ignored);
    curves (K, L): Chebyshev coefficients of the nominal absolute indices over the wavelength axis; tm and order: the
    mode. Build it with `map_window`."""

    low: Array
    high: Array
    t_um: Array
    core: int
    full_etch: bool
    curves: Array
    tm: bool
    order: int

    @property
    def active(self) -> list[int]:
        return [k for k in range(6) if self.high[k] > self.low[k] and not (k == ETCH and self.full_etch)]

    def nominal_index(self, wavelength_um: ArrayLike) -> tuple[Array, Array]:
        """Nominal indices (..., L) and their slopes per µm at wavelengths (...) in µm."""
        lam = np.asarray(wavelength_um, dtype=float)
        half = (self.high[WAVELENGTH] - self.low[WAVELENGTH]) / 2
        xi = (lam - self.low[WAVELENGTH]) / half - 1 if half else np.zeros_like(lam)
        value, slope = chebyshev(xi, self.curves.shape[0] - 1)
        return np.asarray(value @ self.curves), np.asarray(slope @ self.curves) / (half or 1.0)

    def section_at(self, points: Array) -> tuple[CrossSection, Array]:
        """Cross-sections at points (..., 6) in the axes' own units, and slopes (..., L) of their nominal indices."""
        n, slopes = self.nominal_index(points[..., WAVELENGTH])
        n = np.array(n)
        n[..., self.core] += points[..., INDEX]
        t = np.broadcast_to(self.t_um, (*points.shape[:-1], self.t_um.size)).copy()
        t[..., self.core - 1] = points[..., THICKNESS]
        etch = None if self.full_etch else points[..., ETCH]
        section = cross_section(
            n, t, self.core, points[..., WIDTH], points[..., WAVELENGTH], etch, points[..., SIDEWALL]
        )
        return section, slopes

    def points_of(self, section: CrossSection, nominal: Array) -> Array:
        """Where cross-sections (B) lie: (B, 6) in the axes' own units. nominal (B, L): `nominal_index` of theirs."""
        core = section.core
        out = np.empty((section.width_um.size, 6))
        out[:, WIDTH], out[:, THICKNESS], out[:, ETCH] = section.width_um, section.t_um[:, core - 1], section.depth_um
        out[:, SIDEWALL], out[:, WAVELENGTH] = section.sidewall_deg, section.wavelength_um
        out[:, INDEX] = section.n[:, core] - nominal[:, core]
        return out

    def to_unit(self, points: Array) -> Array:
        """Active coordinates (..., d), -1 to 1 in the window."""
        k = self.active
        return np.asarray((2 * points[..., k] - self.low[k] - self.high[k]) / (self.high[k] - self.low[k]))

    def from_unit(self, xi: Array) -> Array:
        """Points (..., 6) of active coordinates (..., d)."""
        k = self.active
        out = np.broadcast_to((self.low + self.high) / 2, (*xi.shape[:-1], 6)).copy()
        out[..., k] = (self.low[k] + self.high[k]) / 2 + xi * (self.high[k] - self.low[k]) / 2
        return out

    def half_extent(self) -> Array:
        """Half the extent (d) of the active axes."""
        k = self.active
        return np.asarray((self.high[k] - self.low[k]) / 2)

    def weakest(self) -> Array:
        """The corner (6) where the mode is bound most weakly: narrow, thin, of low index, at long wavelength and
        little etched: then the core left beside the guide all but carries the mode away."""
        out = (self.low + self.high) / 2
        ends = [WIDTH, THICKNESS, INDEX, ETCH]
        out[ends] = self.low[ends]
        out[WAVELENGTH] = self.high[WAVELENGTH]
        return out


def index_points_um(low_um: float, high_um: float) -> Array:
    """Wavelengths in µm at which `map_window` wants the nominal indices."""
    if low_um == high_um:
        return np.array([low_um])
    return np.asarray((low_um + high_um) / 2 + (high_um - low_um) / 2 * cheb.chebpts1(7))


def map_window(
    low: ArrayLike,
    high: ArrayLike,
    index: ArrayLike,
    t_um: ArrayLike,
    core: int,
    full_etch: bool,
    tm: bool,
    order: int = 0,
) -> MapWindow:
    """A checked window. low, high (6) as in `MapWindow`; index (K, L): absolute nominal indices at
    `index_points_um(...)` of the wavelength axis. Raises ValueError for ends that do not fit."""
    lo, hi = np.asarray(low, dtype=float), np.asarray(high, dtype=float)
    n, t = np.asarray(index, dtype=float), np.asarray(t_um, dtype=float)
    if lo.shape != (6,) or hi.shape != (6,) or not (hi >= lo).all():
        raise ValueError(f"low and high must hold six ends each, low not above high: {lo}, {hi}")
    if full_etch:
        lo[ETCH] = hi[ETCH] = 0.0
    elif not hi[ETCH] < lo[THICKNESS]:
        raise ValueError("the etch must stay above the bottom of the core throughout the window, or be full")
    count = index_points_um(lo[WAVELENGTH], hi[WAVELENGTH]).size
    if n.shape != (count, t.size + 2):
        raise ValueError(f"index has shape {n.shape}; ({count}, {t.size + 2}) is required")
    curves = n if count == 1 else cheb.chebfit(cheb.chebpts1(count), n, count - 1)
    return MapWindow(lo, hi, t, core, full_etch, curves, tm, order)
