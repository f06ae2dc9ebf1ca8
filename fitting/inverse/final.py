"""The final fit of one site by lmfit, with covariance split into random and shared parts and its budget."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..records import Array, BoolArray, IntArray
from .descent import Linear, Prior, linearise
from .lmfit_step import Solution, minimise
from .problem import SiteProblem


@dataclass(frozen=True)
class SiteFit:
    """Best unknowns (P), covariance (P, P) with the shared unknowns as the whole table leaves them, the random part
    of the covariance, and the prior used. chi2 and dof count readings and priors; jacobian (R, P) is divided by u."""

    theta: Array
    covariance: Array
    random: Array
    information: Array
    chi2: float
    dof: int
    jacobian: Array
    predicted: Array
    exists: BoolArray
    at_edge: BoolArray
    success: bool
    prior: Prior


class _Cached:
    """Residuals and Jacobian come from one mode solve: remembered for every point of one fit, a dozen at most."""

    def __init__(self, problem: SiteProblem, orders: IntArray, prior: Prior) -> None:
        self.problem, self.orders = problem, orders[None, :]
        layout = problem.layout
        self.root, self.mean = _root(prior.precision), prior.mean
        if int((orders >= 0).sum()) + self.root.shape[0] < len(layout.parameters):
            # Fewer equations than unknowns: the windows' trace makes up the number, and the rank test says so.
            self.root = np.concatenate([self.root, np.sqrt(layout.window_weight())[layout.fitted]])
            self.mean = np.where(layout.fitted, layout.starts(), self.mean)
        self.seen: dict[bytes, Linear] = {}

    def look(self, x: Array) -> Linear:
        key = x.tobytes()
        if key not in self.seen:
            self.seen[key] = linearise(self.problem.layout, self.problem.data, x[None, :], self.orders)
        return self.seen[key]

    def residual(self, x: Array) -> Array:
        return np.concatenate([self.look(x).residual[0], self.root @ (self.mean - x)])

    def jacobian(self, x: Array) -> Array:
        return np.concatenate([-self.look(x).jacobian[0], -self.root])


def _root(precision: Array) -> Array:
    """Square root of the prior's precision, rows only where there is a prior."""
    has = np.flatnonzero(np.diag(precision) > 0)
    out = np.zeros((has.size, precision.shape[0]))
    if has.size:
        out[:, has] = np.linalg.cholesky(precision[np.ix_(has, has)]).T
    return out


def fit_site(problem: SiteProblem, orders: IntArray, theta: Array, prior: Prior) -> SiteFit:
    """lmfit from a start close to the minimum; orders (R) with -1 for readings left out."""
    layout = problem.layout
    low, high = layout.bounds()
    cached = _Cached(problem, orders, prior)
    span = high - low
    start = np.clip(theta, low + 1e-7 * span, high - 1e-7 * span)
    names = [p.name for p in layout.parameters]
    # 1e-9 of chi-squared is far below what any u can resolve
    s = minimise(cached.residual, cached.jacobian, names, start, low, high, tolerance=1e-9, max_evaluations=60)
    lin = cached.look(s.values)
    return _split(problem, orders, s, lin, prior)


def _split(problem: SiteProblem, orders: IntArray, s: Solution, lin: Linear, prior: Prior) -> SiteFit:
    layout = problem.layout
    used = int((orders >= 0).sum())
    local = ~layout.shared
    jac = lin.jacobian[0]
    information = jac.T @ jac + prior.precision + layout.window_weight()
    covariance, random = covariances(jac, information, local)
    return SiteFit(
        theta=s.values,
        covariance=covariance,
        random=random,
        information=information,
        chi2=s.chi2,
        dof=used - int(layout.fitted.sum()),
        jacobian=jac,
        predicted=lin.predicted[0],
        exists=lin.exists[0],
        at_edge=s.at_edge & layout.fitted,
        success=s.success,
        prior=prior,
    )


def covariances(jac: Array, information: Array, local: BoolArray) -> tuple[Array, Array]:
    """Covariance (P, P) and its random part. jac (R, P) divided by u; information of readings and priors; local: not
    shared.

    Random is what this site's reading noise does with the shared unknowns held; the rest, the shared unknowns and the
    known thicknesses of the stack, is common to the sites.
    """
    covariance = np.asarray(np.linalg.inv(information), dtype=float)
    a = np.flatnonzero(local)
    random = np.zeros_like(covariance)
    if a.size:
        held = np.linalg.inv(information[np.ix_(a, a)])
        random[np.ix_(a, a)] = held @ (jac.T @ jac)[np.ix_(a, a)] @ held
    return covariance, random


def shared_gain(fit: SiteFit, local: BoolArray) -> Array:
    """How the local unknowns follow the shared ones: d(local)/d(shared), (local, shared)."""
    a, b = np.flatnonzero(local), np.flatnonzero(~local)
    if not a.size or not b.size:
        return np.zeros((a.size, b.size))
    return np.asarray(-np.linalg.solve(fit.information[np.ix_(a, a)], fit.information[np.ix_(a, b)]), dtype=float)
