"""Builds correction maps: solves the vector reference at chosen nodes and fits what the effective index method lacks.

The difference and its slopes along the window's axes are fitted by Chebyshev polynomials of total degree; the degree is
raised until held-back nodes are met to the goal or the cap is reached. Slopes with respect to everything else (other
indices, other thicknesses, fixed axes) are fitted too, to first order about their nominal values. All slopes come from
the same solve as the value, see `vector_modes`.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from .correction import BendRatio, CorrectionMap
from .cross_section import CrossSection, GuideFlag, GuideModes, without_substrate
from .layers import Array
from .map_basis import Halves, basis, design_nodes, exponents, fit, fit_values
from .map_bend import bend_ratio
from .map_nodes import NodeJob, NodePool, Progress, single, stacked, taken
from .map_terms import axis_slopes, base_modes, slopes_by_quantity
from .map_window import WAVELENGTH, MapWindow
from .vector_mesh import lay_out
from .vector_modes import FINE, NoSuchModeError, expected_index, merged, side_index, vector_mode

_HOLD_SEED = 7130
_LEAST_HELD = 10
# The worst of two dozen held-back nodes is not the worst of the window: of 200 further points up to 2.3 times as much.
_UNSEEN = 1.5
# Of the guides of a window at least this share must have the mode.
_LEAST_SHARE = 0.7
# Share of the middle's binding that is taken for a corner which has lost the mode.
_JUST_BOUND = 0.05
# Two meshes can agree by chance: no less is stated for what they leave of error in effective and group index.
_FLOOR = (5e-7, 1e-5)


class MapError(RuntimeError):
    """No map can be made: too few nodes of the window have the mode. found, wanted: numbers of nodes."""

    def __init__(self, found: int, wanted: int) -> None:
        self.found, self.wanted = found, wanted
        super().__init__(f"only {found} of {wanted} guides of the window have this mode; narrow the window")


@dataclass(frozen=True, slots=True)
class MapGoal:
    """When to stop. index, group: error of the effective and the group index to reach at the held-back nodes; nodes,
    degree: caps."""

    index: float = 2e-5
    group: float = 5e-4
    nodes: int = 420
    degree: int = 9


@dataclass(frozen=True)
class _Data:
    """Differences at nodes: xi (B, d), value (B), slope (B, d) in unit coordinates, others (B, P)."""

    xi: Array
    value: Array
    slope: Array
    others: Array

    def take(self, rows: slice) -> _Data:
        return _Data(self.xi[rows], self.value[rows], self.slope[rows], self.others[rows])

    def join(self, more: _Data) -> _Data:
        pairs = zip((self.xi, self.value, self.slope, self.others), (more.xi, more.value, more.slope, more.others))
        return _Data(*(np.concatenate(p) for p in pairs))


def build_map(
    window: MapWindow, goal: MapGoal | None = None, workers: int | None = None, progress: Progress | None = None
) -> CorrectionMap:
    """Solve, fit, check, and refine; for straight guides. Raises MapError where the window holds too few guides with
    the mode."""
    target = MapGoal() if goal is None else goal
    solver = _Solver(window, workers, progress)
    with solver.pool:
        return _refined(window, target, solver)


def build_bend(window: MapWindow, workers: int | None = None, progress: Progress | None = None) -> BendRatio:
    """What the method's shift of a bend is to be multiplied by over a window. Raises MapError where the window does not
    hold the mode."""
    solver = _Solver(window, workers, progress)
    with solver.pool:
        return bend_ratio(window, solver.pool, solver.bound, solver.job)


def _refined(window: MapWindow, goal: MapGoal, solver: _Solver) -> CorrectionMap:
    dimension = len(window.active)
    held = solver.data(_held_points(dimension))
    degree = _first_degree(dimension)
    data = solver.data(design_nodes(dimension, degree, _node_count(dimension, degree)))
    while True:
        made = _fitted(window, data, held, degree)
        met = made.held_error[0] <= goal.index and made.held_error[1] <= goal.group
        following = _node_count(dimension, degree + 1)
        if met or degree >= goal.degree or following > goal.nodes or not dimension:
            break
        degree += 1
        more = max(following - data.xi.shape[0], 1)
        data = data.join(solver.data(design_nodes(dimension, degree, more, data.xi)))
    reference = solver.reference_error()
    error, group = (float(np.hypot(_UNSEEN * a, b)) for a, b in zip(made.held_error, reference))
    return replace(
        made, error=error, group_error=group, reference_error=reference, met=met,
        nodes=(data.xi.shape[0], held.xi.shape[0], solver.missing),
    )  # fmt: skip


def _first_degree(dimension: int) -> int:
    return {0: 0, 1: 5, 2: 5, 3: 5, 4: 5, 5: 4, 6: 4}[dimension]


def _node_count(dimension: int, degree: int) -> int:
    """Nodes for a degree: each brings a value and a slope along every axis, half as many again as needed."""
    terms = exponents(dimension, degree).shape[0]
    return max(int(np.ceil(1.6 * terms / (1 + dimension))), 1)


def _held_points(dimension: int) -> Array:
    """Points (H, d) to check at, spread evenly over the window."""
    if not dimension:
        return np.zeros((1, 0))
    from scipy.stats import qmc

    count = _LEAST_HELD + 2 * dimension
    return np.asarray(2 * qmc.Halton(dimension, seed=_HOLD_SEED).random(count) - 1)


def _fitted(window: MapWindow, data: _Data, held: _Data, degree: int) -> CorrectionMap:
    dimension = len(window.active)
    powers = exponents(dimension, degree)
    coefficients = fit(data.xi, data.value, data.slope, powers, degree)
    lower = degree
    while lower > 0 and exponents(dimension, lower).shape[0] > 0.6 * data.xi.shape[0]:
        lower -= 1
    few = exponents(dimension, lower)
    rest = np.zeros((powers.shape[0], data.others.shape[1]))
    rest[: few.shape[0]] = fit_values(data.xi, data.others, few)
    table = Halves(dimension, degree).table(np.column_stack([coefficients, rest]), powers)
    value, gradient = basis(held.xi, powers)
    miss = float(np.abs(coefficients @ value - held.value).max())
    missed = (miss, _group_miss(window, held, (coefficients @ gradient).T))
    return CorrectionMap(window, degree, table, miss, missed[1], missed, (0.0, 0.0), (0, 0, 0), False)


def _group_miss(window: MapWindow, held: _Data, slope: Array) -> float:
    """Largest miss of the group index; without a wavelength axis slopes are known to first order only."""
    if WAVELENGTH not in window.active:
        return 0.0
    k = window.active.index(WAVELENGTH)
    wave = window.from_unit(held.xi)[:, WAVELENGTH]
    off = (slope - held.slope)[:, k] / window.half_extent()[k]
    return float(np.abs(off * wave).max())


class _Solver:
    """Differences between reference and method at points of one window, on one mesh."""

    def __init__(self, window: MapWindow, workers: int | None, progress: Progress | None) -> None:
        self.window, self.missing = window, 0
        self.middle, self.weak = (window.section_at(p) for p in (_middle(window), window.weakest()))
        weak, middle = (merged(replace(s, n=without_substrate(s.n)[0]))[0] for s in (self.weak[0], self.middle[0]))
        beside = side_index(weak)
        self.bound = bound = self._weakest_bound(weak, middle, beside)
        # Laid out in the middle of the window, wide enough for its weakest mode.
        self.mesh = lay_out(middle, max(bound, beside + 1e-4), beside, FINE)
        self.pool = NodePool(workers, progress)
        method = float(base_modes(self.weak[0], window.tm, window.order).N)
        self.shortfall = bound - method if np.isfinite(method) else 0.0

    def _weakest_bound(self, weak: CrossSection, middle: CrossSection, beside: float) -> float:
        """Effective index where the mode is bound most weakly; if that corner has lost it, a little above cut-off."""
        window, rule = self.window, replace(FINE, step=1.2)
        try:
            return vector_mode(weak, window.tm, window.order, rule=rule).N.real
        except NoSuchModeError:
            pass
        try:
            inside = vector_mode(middle, window.tm, window.order, rule=rule).N.real
        except NoSuchModeError:
            raise MapError(0, 2) from None
        return beside + _JUST_BOUND * max(inside - beside, 0.0)

    def data(self, xi: Array) -> _Data:
        window = self.window
        section, slopes = window.section_at(window.from_unit(xi))
        plain = base_modes(section, window.tm, window.order)
        jobs = [self.job(single(section, k), float(plain.N[k])) for k in range(xi.shape[0])]
        found = self.pool.solve(jobs, self.mesh)
        # In a closed box a mode that leaks sideways is a mixture with modes of the box: no node to fit to.
        leaks = int(GuideFlag.LEAKS_SIDEWAYS)
        known = [(k, m) for k, m in enumerate(found) if m and np.isfinite(plain.N[k]) and not m.flags & leaks]
        self.missing += len(found) - len(known)
        if len(known) < _LEAST_SHARE * len(found):
            raise MapError(len(known), len(found))
        rows = [k for k, _ in known]
        return _difference(window, xi[rows], stacked([m for _, m in known]), taken(plain, rows), slopes[rows])

    def job(self, section: CrossSection, method: float) -> NodeJob:
        near = (
            method + 0.7 * self.shortfall
            if np.isfinite(method)
            else expected_index(section, self.window.tm, self.window.order)
        )
        return NodeJob(section, self.window.tm, self.window.order, near)

    def reference_error(self) -> tuple[float, float]:
        """What the map's mesh and box leave of error in effective and group index: the change to a finer mesh in a
        wider box, in the middle of the window and where the mode is bound most weakly, if that corner has it; the
        larger one."""
        found = [e for e in (self._mesh_error(*place) for place in (self.middle, self.weak)) if e is not None]
        if not found:
            raise MapError(0, 2)
        return max(_FLOOR[0], *(e[0] for e in found)), max(_FLOOR[1], *(e[1] for e in found))

    def _mesh_error(self, section: CrossSection, slopes: Array) -> tuple[float, float] | None:
        window = self.window
        finer = replace(FINE.finer(1.6), reach=1.5 * FINE.reach)
        near = self.job(section, float(base_modes(section, window.tm, window.order).N)).near
        try:
            usual = vector_mode(section, window.tm, window.order, near=near, mesh=self.mesh).modes
            better = vector_mode(section, window.tm, window.order, rule=finer).modes
        except NoSuchModeError:
            return None
        groups = [float(m.group_index(section.wavelength_um, slopes)) for m in (usual, better)]
        return abs(float(usual.N - better.N)), abs(groups[0] - groups[1])


def _middle(window: MapWindow) -> Array:
    return (window.low + window.high) / 2


def _difference(window: MapWindow, xi: Array, vector: GuideModes, plain: GuideModes, slopes: Array) -> _Data:
    axes = [axis_slopes(window, m, slopes) for m in (vector, plain)]
    return _Data(
        xi, vector.N - plain.N, (axes[0] - axes[1]) * window.half_extent(),
        slopes_by_quantity(window, vector) - slopes_by_quantity(window, plain),
    )  # fmt: skip
