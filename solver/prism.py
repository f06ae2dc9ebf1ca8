"""Prism coupling: the angle at the entrance face and the effective index it selects.

N = n_p sin(A + asin(sin theta / n_p)), theta on the entrance face from its normal, A the angle between entrance face
and base (R. Ulrich and R. Torge, Appl. Opt. 12, 2901, 1973, doi 10.1364/AO.12.002901). Indices are relative to the
medium in front of the entrance face.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]


class AngleSlopes(NamedTuple):
    """Derivatives of the coupling angle (degrees) with respect to N, prism index and base angle (degrees)."""

    dN: Array
    dn_p: Array
    dbase: Array


def effective_index(angle_deg: ArrayLike, n_p: ArrayLike, base_angle_deg: ArrayLike) -> Array:
    """Effective index that a coupling angle selects. All broadcast; degrees. |angle| must not exceed 90."""
    theta, base = (
        np.deg2rad(np.asarray(angle_deg, dtype=float)),
        np.deg2rad(np.asarray(base_angle_deg, dtype=float)),
    )
    n = np.asarray(n_p, dtype=float)
    return np.asarray(n * np.sin(base + np.arcsin(np.sin(theta) / n)))


def coupling_angle_deg(N: ArrayLike, n_p: ArrayLike, base_angle_deg: ArrayLike) -> Array:
    """Coupling angle in degrees, NaN where the prism cannot reach N (N >= n_p, or total reflection at the face)."""
    n, index = np.asarray(n_p, dtype=float), np.asarray(N, dtype=float)
    inner, outer = _refraction(index, n, np.deg2rad(np.asarray(base_angle_deg, dtype=float)))
    return np.asarray(np.rad2deg(np.where(np.abs(outer) <= 1, np.arcsin(np.clip(outer, -1, 1)), np.nan)) + 0 * inner)


def coupling_slopes(N: ArrayLike, n_p: ArrayLike, base_angle_deg: ArrayLike) -> AngleSlopes:
    """Closed-form derivatives of `coupling_angle_deg`; NaN where the angle is."""
    n, index = np.asarray(n_p, dtype=float), np.asarray(N, dtype=float)
    inner, outer = _refraction(index, n, np.deg2rad(np.asarray(base_angle_deg, dtype=float)))
    cos_outer = np.sqrt(np.where(np.abs(outer) < 1, 1 - outer**2, np.nan))
    cos_inner = np.cos(inner)
    root = np.sqrt(np.where(index < n, n**2 - index**2, np.nan))
    dN = n * cos_inner / cos_outer / root
    dn_p = (np.sin(inner) - cos_inner * index / root) / cos_outer
    dbase = -n * cos_inner / cos_outer
    return AngleSlopes(np.rad2deg(dN), np.rad2deg(dn_p), dbase)


def _refraction(index: Array, n: Array, base: Array) -> tuple[Array, Array]:
    """Angle inside the prism from the face normal (rad), and sine of the angle outside."""
    ratio = index / n
    inner = np.arcsin(np.where(np.abs(ratio) <= 1, ratio, np.nan)) - base
    return inner, n * np.sin(inner)
