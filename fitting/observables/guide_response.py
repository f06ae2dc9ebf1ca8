"""What a change of a guide does to what is measured: small formulas, one each, any shape."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from ..records import Array


def per_degree(dN_dn: ArrayLike, dn_dtemperature: ArrayLike) -> Array:
    """dN/dT (...) per °C: the sum over layers (..., L) of dN/dn dn/dT. Thermal expansion is left out."""
    return np.asarray((np.asarray(dN_dn, dtype=float) * np.asarray(dn_dtemperature, dtype=float)).sum(axis=-1))


def resonance_shift(dN: ArrayLike, wavelength: ArrayLike, group_index: ArrayLike) -> Array:
    """Change of a resonance's or fringe's wavelength at fixed order and length, in the unit of the wavelength, when
    the effective index changes by dN: from m lambda = N(lambda) L follows d lambda = lambda dN / n_g."""
    return np.asarray(np.asarray(wavelength, dtype=float) * np.asarray(dN, dtype=float) / np.asarray(group_index))


def order_spacing(wavelength: ArrayLike, group_index: ArrayLike, length: ArrayLike) -> Array:
    """Spacing of neighbouring resonances or fringes, lambda^2 / (n_g L), all lengths in one unit: the free spectral
    range to first order in it."""
    return np.asarray(np.asarray(wavelength, dtype=float) ** 2 / (np.asarray(group_index) * np.asarray(length)))


def nearest_order(N: float, wavelength: float, group_index: float, length: float) -> tuple[int, float]:
    """Number m of waves on a path that is nearest to the number at a wavelength, and the wavelength where the path
    holds m, all lengths in one unit.

    N(lambda) is taken as straight over half a spacing, so m lambda = N(lambda) L has a closed solution; in silicon
    wires its curvature (1 per µm² at the most) leaves some pm at a spacing of 10 nm, and less as its square.
    """
    slope = (N - group_index) / wavelength
    order = round(N * length / wavelength)
    return order, length * (N - slope * wavelength) / (order - slope * length)
