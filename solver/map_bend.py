"""The shift of a bend, corrected: ratio of the vector reference's shift to that of the effective index method.

Both shifts go as the inverse square of the radius, so their ratio does not depend on it until the bend radiates; over a
window it is a low polynomial. It is found at a radius so gentle that the box holds the whole field of the weakest mode
and still ends before light beside the guide would outrun it. Shifts are differences of two solves on one mesh of the
whole guide, straight and bent, so most of the mesh's error drops out.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from .correction import BendRatio
from .cross_section import CrossSection, without_substrate
from .layers import Array
from .map_basis import Halves, basis, design_nodes, exponents, fit
from .map_nodes import NodeJob, NodePool, single, stacked, taken
from .map_terms import axis_slopes, base_modes
from .map_window import MapWindow
from .vector_mesh import GuideMesh, lay_out
from .vector_modes import FINE, bend_room_um, merged, side_index

_DEGREE = 4
# Nodes for as many coefficients: each brings a value and a slope along every axis.
_MARGIN = 1.6
_CHECKS = 8
_SEED = 99
# Uncertainty of a ratio that nothing checks: a window of a single guide.
_UNCHECKED = 0.01


@dataclass(frozen=True)
class _Ratios:
    """At nodes: xi (B, d), ratio (B), its slopes (B, d) in unit coordinates."""

    xi: Array
    value: Array
    slope: Array


def bend_ratio(
    window: MapWindow, pool: NodePool, weakest: float, job: Callable[[CrossSection, float], NodeJob]
) -> BendRatio:
    """The ratio over a window. weakest: effective index where the mode is bound most weakly; job makes one of a guide
    and the method's index. Where hardly a guide of the window holds the mode in a bend the ratio is 1, with an
    uncertainty of 1."""
    dimension = len(window.active)
    mesh, radius_um = _whole_mesh(window, weakest)
    degree = _DEGREE if dimension else 0
    count = int(np.ceil(_MARGIN * exponents(dimension, degree).shape[0] / (1 + dimension)))
    nodes = design_nodes(dimension, degree, count) if dimension else np.zeros((1, 0))
    data = _ratios(window, nodes, radius_um, pool, mesh, job)
    while degree and data.value.size * (1 + dimension) < exponents(dimension, degree).shape[0]:
        degree -= 1
    if not data.value.size:
        return BendRatio(0, np.ones((1, 1, 1)), 1.0, radius_um)
    powers = exponents(dimension, degree)
    coefficients = fit(data.xi, data.value, data.slope, powers, degree)
    error = _UNCHECKED
    if dimension:
        points = np.random.default_rng(_SEED).uniform(-1, 1, (_CHECKS, dimension))
        held = _ratios(window, points, radius_um, pool, mesh, job)
        error = float(np.abs(coefficients @ basis(held.xi, powers)[0] - held.value).max(initial=0.0)) or 1.0
    return BendRatio(degree, Halves(dimension, degree).table(coefficients[:, None], powers), error, radius_um)


def _ratios(
    window: MapWindow,
    xi: Array,
    radius_um: float,
    pool: NodePool,
    mesh: GuideMesh,
    job: Callable[[CrossSection, float], NodeJob],
) -> _Ratios:
    """Ratios at those of the points (B, d) whose guides have the mode, straight and bent."""
    section, index_slopes = window.section_at(window.from_unit(xi))
    plain = base_modes(section, window.tm, window.order)
    turned = base_modes(section, window.tm, window.order, radius_um)
    straight = [job(single(section, k), float(plain.N[k])) for k in range(xi.shape[0])]
    bends = [
        replace(j, near=j.near + float(np.nan_to_num(turned.N[k] - plain.N[k])), radius_um=radius_um)
        for k, j in enumerate(straight)
    ]
    found = pool.solve([*straight, *bends], mesh)
    pairs = list(zip(found[: xi.shape[0]], found[xi.shape[0] :]))
    rows = [k for k, (a, b) in enumerate(pairs) if a and b and np.isfinite(turned.N[k] - plain.N[k])]
    if not rows:
        return _Ratios(xi[rows], np.zeros(0), np.zeros((0, xi.shape[1])))
    vector = [stacked([m for m in (pairs[k][which] for k in rows) if m]) for which in (0, 1)]
    method = [taken(m, rows) for m in (plain, turned)]
    shift, model = vector[1].N - vector[0].N, method[1].N - method[0].N
    rates = [
        axis_slopes(window, b, index_slopes[rows]) - axis_slopes(window, a, index_slopes[rows])
        for a, b in (vector, method)
    ]
    ratio = shift / model
    slope = (rates[0] - ratio[:, None] * rates[1]) / model[:, None] * window.half_extent()
    return _Ratios(xi[rows], ratio, slope)


def _whole_mesh(window: MapWindow, weakest: float) -> tuple[GuideMesh, float]:
    """A mesh of the whole guide, and the radius at which its box has room for the weakest mode."""
    middle, _ = window.section_at((window.low + window.high) / 2)
    slim = merged(replace(middle, n=without_substrate(middle.n)[0]))[0]
    beside = side_index(slim)
    N = max(weakest, beside + 1e-4)
    mesh = lay_out(slim, N, beside, FINE, whole=True)
    return mesh, mesh.frame.margins[0] / bend_room_um(1.0, N, beside)
