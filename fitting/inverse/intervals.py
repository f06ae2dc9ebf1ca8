"""95 % intervals from the likelihood: the parabola where it holds, the profile where it does not.

Each unknown is held at trial values while the others, shared ones included, find their conditional best; the interval
ends where the cost has risen by 3.841, the 95 % point of chi-squared with one degree of freedom (D. J. Venzon and S.
H. Moolgavkar, Applied Statistics 37, 87, 1988).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..records import Array, BoolArray, IntArray
from .descent import Prior, descend, linearise
from .final import SiteFit
from .problem import SiteProblem

RISE = 3.841458820694124
REACH = 1.959963984540054
# The parabola is taken where the true rise at its ends is within this share of 3.84: the end is then right to 2 %.
PARABOLIC = 0.04
_STEPS = 12


@dataclass(frozen=True)
class Interval:
    low: float
    high: float
    profile: bool
    cut: bool  # the window ends before the likelihood has fallen


def intervals(problem: SiteProblem, orders: IntArray, fit: SiteFit, which: IntArray) -> dict[int, Interval]:
    """Interval of each unknown listed in `which`, in working units."""
    if not which.size:
        return {}
    layout, prior = problem.layout, fit.prior
    low, high = layout.bounds()
    u = np.sqrt(np.diag(fit.covariance))
    target = np.repeat(which, 2)
    side = np.tile([-1.0, 1.0], which.size)
    x = np.clip(fit.theta[target] + side * REACH * u[target], low[target], high[target])
    rise, theta = _conditional(problem, orders, fit, prior, target, x, np.tile(fit.theta, (target.size, 1)))
    bent = np.abs(rise - RISE) > PARABOLIC * RISE
    unknown = np.isin(target, target[bent])
    if not unknown.any():
        return {int(p): Interval(*_ends(x, target, p), False, False) for p in which}
    rows = np.flatnonzero(unknown)
    x[rows], rise[rows] = _search(problem, orders, fit, target[rows], x[rows], rise[rows], theta[rows])
    cut = unknown & (rise < RISE * (1 - 2 * PARABOLIC))
    return {
        int(p): Interval(*_ends(x, target, p), bool(unknown[target == p].any()), bool(cut[target == p].any()))
        for p in which
    }


def _ends(x: Array, target: IntArray, p: int) -> tuple[float, float]:
    low, high = x[target == p]
    return float(low), float(high)


def _conditional(
    problem: SiteProblem, orders: IntArray, fit: SiteFit, prior: Prior, target: IntArray, x: Array, theta: Array
) -> tuple[Array, Array]:
    """Rise of the cost with unknown `target` (K) held at x (K) and the rest at their conditional best; and where that
    is."""
    layout = problem.layout
    rows = np.arange(target.size)
    low, high = layout.bounds()
    # The covariance says where the others go to first order.
    lead = fit.covariance[:, target].T / np.diag(fit.covariance)[target][:, None]
    start = np.clip(theta + lead * (x - theta[rows, target])[:, None], low, high)
    start[rows, target] = x
    order = np.tile(orders, (target.size, 1))
    lin = linearise(layout, problem.data, start, order)
    cost = lin.chi2 + prior.cost(start)
    rise = cost - fit.chi2
    near = np.abs(rise - RISE) <= PARABOLIC * RISE
    if near.all():
        return rise, start
    free = np.ones(start.shape, dtype=bool)
    free[rows, target] = False
    out = descend(layout, problem.data, order, start, prior, free=free, max_steps=6, tolerance=0.01)
    return out.cost - fit.chi2, out.theta


def _search(
    problem: SiteProblem, orders: IntArray, fit: SiteFit, target: IntArray, x: Array, rise: Array, theta: Array
) -> tuple[Array, Array]:
    """Move each end until the rise is 3.84 to 1 %: a secant on the root of the rise, which is near straight."""
    low, high = (b[target] for b in problem.layout.bounds())
    centre = fit.theta[target]
    inner, outer = centre.copy(), np.where(x < centre, low, high)
    for _ in range(_STEPS):
        done = (np.abs(rise - RISE) < 0.01 * RISE) | ((np.abs(x - outer) < 1e-9 * (high - low)) & (rise < RISE))
        if done.all():
            break
        inner = np.where(rise < RISE, x, inner)
        outer = np.where(rise > RISE, x, outer)
        scale = np.sqrt(RISE / np.maximum(rise, 1e-6))
        trial = centre + (x - centre) * np.clip(scale, 0.3, 3.0)
        inside = (trial - inner) * (trial - outer) < 0
        new = np.where(done, x, np.where(inside, trial, (inner + outer) / 2))
        beyond = np.abs(trial - centre) >= np.abs(outer - centre)
        new = np.where(~done & beyond & (rise < RISE) & _at_window(outer, low, high), outer, new)
        rise, theta = _conditional(problem, orders, fit, fit.prior, target, new, theta)
        x = new
    return x, rise


def _at_window(x: Array, low: Array, high: Array) -> BoolArray:
    return np.asarray((x == low) | (x == high))
