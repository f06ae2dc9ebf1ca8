"""Damped Gauss-Newton for many small film problems at once: S sites or S rival assignments, the same unknowns in each.

Used where a batch pays: ranking assignments, conditional minima of a profile, the joint step over a table. The final
fit of a site is lmfit's (see `lmfit_step`).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..observables.film import FilmReadings, predict
from ..observables.parameters import Layout
from ..records import Array, BoolArray, IntArray

# Added to the residual of a reading whose mode does not exist there, in units of its u: a wall, not a slope.
ABSENT = 30.0
# Residuals beyond this many u are gross errors until shown otherwise.
HUBER = 5.0


@dataclass(frozen=True)
class Prior:
    """Gaussian prior on the unknowns: mean (P) or (S, P), precision (P, P) or (S, P, P); zero rows where there is
    none."""

    mean: Array
    precision: Array

    @classmethod
    def of(cls, layout: Layout) -> Prior:
        mean, u = layout.prior()
        return cls(mean, np.diag(1 / u**2))

    def cost(self, theta: Array) -> Array:
        d = theta - self.mean
        return np.asarray(np.einsum("...p,...pq,...q->...", d, self.precision, d))

    def at(self, s: int) -> Prior:
        return Prior(
            self.mean[s] if self.mean.ndim == 2 else self.mean,
            self.precision[s] if self.precision.ndim == 3 else self.precision,
        )


@dataclass(frozen=True)
class Linear:
    """Weighted residuals (S, R), weighted Jacobian (S, R, P) of the predictions, existence (S, R) at some unknowns."""

    residual: Array
    jacobian: Array
    exists: BoolArray
    predicted: Array

    @property
    def chi2(self) -> Array:
        return np.asarray((self.residual**2).sum(axis=1))


def linearise(layout: Layout, readings: FilmReadings, theta: Array, order: IntArray) -> Linear:
    """Residuals (measured - predicted) / u and d(predicted)/d(unknowns) / u; zero for readings left out."""
    p = predict(layout, readings, theta, order)
    used = np.broadcast_to(readings.valid, order.shape) & (order >= 0)
    r = np.where(used, (readings.measured - p.value) / readings.u, 0.0)
    r = np.where(used & ~p.exists, r + np.copysign(ABSENT, r), r)
    jac = np.where(used[..., None], p.jacobian / np.broadcast_to(readings.u, order.shape)[..., None], 0.0)
    return Linear(r, jac, p.exists | ~used, p.value)


@dataclass(frozen=True)
class Descent:
    theta: Array  # (S, P)
    cost: Array  # (S,) chi2 of readings and priors
    linear: Linear
    converged: BoolArray  # (S,)


def descend(
    layout: Layout,
    readings: FilmReadings,
    order: IntArray,
    theta: Array,
    prior: Prior,
    *,
    free: BoolArray | None = None,
    robust: bool = False,
    max_steps: int = 30,
    tolerance: float = 1e-6,
) -> Descent:
    """Minimise residuals and priors for each row of theta (S, P) within the layout's bounds.

    free: (P) or (S, P) booleans, False holds an unknown. tolerance: on the expected fall of the cost. robust: residuals
    beyond `HUBER` count linearly (P. J. Huber, Ann. Math. Stat. 35, 73, 1964), so that a gross error does not drag the
    fit along; the linearisation returned is the plain one all the same.
    """
    low, high = layout.bounds()
    theta = np.clip(theta, low, high)
    free = np.broadcast_to(np.ones(theta.shape, dtype=bool) if free is None else free, theta.shape)
    damping = np.full(theta.shape[0], 1e-4)
    weigh = _huber if robust else _plain
    lin = weigh(linearise(layout, readings, theta, order))
    cost = lin.chi2 + prior.cost(theta)
    converged = np.zeros(theta.shape[0], dtype=bool)
    for _ in range(max_steps):
        step, gain = _step(lin, prior, theta, free, damping, low, high)
        trial = np.clip(theta + step, low, high)
        new = weigh(linearise(layout, readings, trial, order))
        new_cost = new.chi2 + prior.cost(trial)
        better = new_cost <= cost
        theta = np.where(better[:, None], trial, theta)
        lin = _pick(better, new, lin)
        cost = np.where(better, new_cost, cost)
        converged |= gain < tolerance
        if converged.all():
            break
        damping = np.where(better, damping * 0.1, damping * 10)
        converged |= damping > 1e12
    return Descent(theta, cost, linearise(layout, readings, theta, order) if robust else lin, converged)


def _plain(lin: Linear) -> Linear:
    return lin


def _huber(lin: Linear) -> Linear:
    """Residuals and Jacobian scaled so that the square of a far residual grows as its size."""
    weight = np.sqrt(np.minimum(1.0, HUBER / np.maximum(np.abs(lin.residual), 1e-9)))
    return Linear(lin.residual * weight, lin.jacobian * weight[..., None], lin.exists, lin.predicted)


def _pick(better: BoolArray, new: Linear, old: Linear) -> Linear:
    row = better[:, None]
    return Linear(
        np.where(row, new.residual, old.residual),
        np.where(row[..., None], new.jacobian, old.jacobian),
        np.where(row, new.exists, old.exists),
        np.where(row, new.predicted, old.predicted),
    )


def _step(
    lin: Linear, prior: Prior, theta: Array, free: BoolArray, damping: Array, low: Array, high: Array
) -> tuple[Array, Array]:
    """Damped step and the fall of the cost that the undamped model expects of it."""
    grad = np.einsum("srp,sr->sp", lin.jacobian, lin.residual)
    grad = grad + np.einsum("...pq,...q->...p", prior.precision, prior.mean - theta)
    hess = np.einsum("srp,srq->spq", lin.jacobian, lin.jacobian) + prior.precision
    pinned = ((theta <= low) & (grad < 0)) | ((theta >= high) & (grad > 0)) | ~free
    grad = np.where(pinned, 0.0, grad)
    hess = np.where(pinned[:, :, None] | pinned[:, None, :], 0.0, hess)
    diag = np.einsum("spp->sp", hess)
    # An unknown that nothing determines moves no further than its window.
    width = np.where(np.isfinite(high - low) & (high > low), high - low, 1.0)
    extra = damping[:, None] * diag + 1e-9 / width**2 + np.where(pinned, 1.0, 0.0)
    step = np.linalg.solve(hess + extra[:, :, None] * np.eye(theta.shape[1]), grad[..., None])[..., 0]
    return step, np.einsum("sp,sp->s", step, grad)
