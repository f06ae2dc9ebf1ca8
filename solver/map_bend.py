"""The shift of a bend, corrected: ratio of the vector reference's shift to that of the effective index method.

Both shifts go as the inverse square of the radius, so their ratio hardly depends on it; over a window it is a low
polynomial. It is found at the tightest bend in use, where it matters most. Shifts are differences of two solves on one
mesh of the whole guide, straight and bent, so most of the mesh's error drops out.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from .correction import BendRatio
from .cross_section import CrossSection, without_substrate
from .guide import eim_modes
from .layers import Array
from .map_basis import Halves, basis, design_nodes, exponents, fit_values
from .map_nodes import NodeJob, NodePool, single
from .map_window import MapWindow
from .vector_mesh import GuideMesh, lay_out
from .vector_modes import FINE, bend_room_um, merged, side_index

_DEGREE = 2
_CHECKS = 4
_SEED = 99


def bend_ratio(
    window: MapWindow,
    radius_um: float,
    pool: NodePool,
    weakest: float,
    job: Callable[[CrossSection, float], NodeJob],
) -> BendRatio:
    """The ratio over a window at one radius. weakest: effective index where the mode is bound most weakly; job makes
    one of a guide and the method's index. Where hardly a guide of the window holds the mode in such a bend the ratio is
    1, with an uncertainty of 1."""
    dimension = len(window.active)
    powers = exponents(dimension, _DEGREE)
    nodes = design_nodes(dimension, _DEGREE, powers.shape[0] + 2) if dimension else np.zeros((1, 0))
    checks = np.random.default_rng(_SEED).uniform(-1, 1, (_CHECKS, dimension))
    xi = np.concatenate([nodes, checks]) if dimension else nodes
    ratio = _ratios(window, xi, radius_um, pool, weakest, job)
    known = np.isfinite(ratio)
    inner = known & (np.arange(ratio.size) < nodes.shape[0])
    degree = _DEGREE
    while degree and inner.sum() < exponents(dimension, degree).shape[0]:
        degree -= 1
    if not inner.any():
        return BendRatio(0, np.ones((1, 1, 1)), 1.0, radius_um)
    powers = exponents(dimension, degree)
    coefficients = fit_values(xi[inner], ratio[inner, None], powers)
    miss = np.abs(coefficients[:, 0] @ basis(xi, powers)[0] - ratio)[known & ~inner]
    # Without a node to check at, what the ratio itself does over the window stands in for its error.
    error = float(miss.max()) if miss.size else float(np.ptp(ratio[known])) or 0.01
    return BendRatio(degree, Halves(dimension, degree).table(coefficients, powers), error, radius_um)


def _ratios(
    window: MapWindow,
    xi: Array,
    radius_um: float,
    pool: NodePool,
    weakest: float,
    job: Callable[[CrossSection, float], NodeJob],
) -> Array:
    """Ratios (B) at points (B, d), NaN where one of the modes is missing."""
    section, _ = window.section_at(window.from_unit(xi))
    plain = eim_modes(section, window.tm, window.order)
    turned = eim_modes(section, window.tm, window.order, radius_um)
    straight = [job(single(section, k), float(plain.N[k])) for k in range(xi.shape[0])]
    bends = [replace(j, near=j.near + float(np.nan_to_num(turned.N[k] - plain.N[k]))) for k, j in enumerate(straight)]
    bends = [replace(j, radius_um=radius_um) for j in bends]
    found = pool.solve([*straight, *bends], _whole_mesh(window, radius_um, weakest))
    N = np.array([np.nan if m is None else float(m.N) for m in found]).reshape(2, -1)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray((N[1] - N[0]) / (turned.N - plain.N))


def _whole_mesh(window: MapWindow, radius_um: float, weakest: float) -> GuideMesh:
    middle, _ = window.section_at((window.low + window.high) / 2)
    slim = merged(replace(middle, n=without_substrate(middle.n)[0]))[0]
    beside = side_index(slim)
    N = max(weakest, beside + 1e-4)
    return lay_out(slim, N, beside, FINE, whole=True, side_limit_um=bend_room_um(radius_um, N, beside))
