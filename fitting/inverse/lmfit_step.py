"""The final fit, carried by lmfit: named parameters, bounds, analytic Jacobian, Levenberg-Marquardt (MINPACK)."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from ..records import Array, BoolArray

# An unknown this close to its bound, as a share of the window, counts as held by it.
EDGE = 1e-6


@dataclass(frozen=True)
class Solution:
    """Minimum of a sum of squares. covariance: inverse of J^T J at the minimum, for residuals already divided by
    their u (scale by chi2 / dof where the noise is unknown); NaN where J^T J is singular. at_edge: held by a bound."""

    values: Array
    covariance: Array
    chi2: float
    residual: Array
    jacobian: Array
    evaluations: int
    success: bool
    message: str
    at_edge: BoolArray


def minimise(
    residual: Callable[[Array], Array],
    jacobian: Callable[[Array], Array],
    names: Sequence[str],
    start: Array,
    low: Array | None = None,
    high: Array | None = None,
    tolerance: float = 1e-14,
    max_evaluations: int = 2000,
) -> Solution:
    """Least squares of residual(x) (n) with Jacobian d residual / dx (n, p), x of length p, from `start`, low <= x <=
    high.

    tolerance: relative, on the fall of the sum of squares; the default asks for all that double precision gives.
    max_evaluations: of the residual, after which the fit counts as not converged.
    Raises ValueError if the start lies outside the bounds or a residual there is not finite.
    """
    import lmfit

    x0 = np.asarray(start, dtype=float)
    lo = np.full(x0.size, -np.inf) if low is None else np.asarray(low, dtype=float)
    hi = np.full(x0.size, np.inf) if high is None else np.asarray(high, dtype=float)
    if np.any((x0 < lo) | (x0 > hi)):
        raise ValueError(f"start outside its bounds: {[n for n, a, b, c in zip(names, x0, lo, hi) if a < b or a > c]}")
    if not np.all(np.isfinite(residual(x0))):
        raise ValueError("a residual is not finite at the start values")
    parameters = lmfit.Parameters()
    keys = [f"p{i}" for i in range(x0.size)]
    for key, value, a, b, name in zip(keys, x0, lo, hi, names):
        parameters.add(key, value=value, min=a, max=b, user_data=name)

    def vector(p: lmfit.Parameters) -> Array:
        return np.array([p[k].value for k in keys])

    fitter = lmfit.Minimizer(
        lambda p: residual(vector(p)), parameters, scale_covar=False, calc_covar=False, nan_policy="propagate"
    )
    out = fitter.leastsq(
        Dfun=lambda p: jacobian(vector(p)),
        max_nfev=max_evaluations,
        ftol=tolerance,
        xtol=max(1e-12, tolerance),
        gtol=0.0,
    )
    x = vector(out.params)
    r, jac = residual(x), jacobian(x)
    # MINPACK's codes 1 to 3 are convergence; 6 to 8 say that the tolerance is below what rounding allows: a minimum
    # too.
    success = out.ier in {1, 2, 3, 4, 6, 7, 8}
    span = np.where(np.isfinite(hi - lo), hi - lo, np.inf)
    at_edge = (x - lo <= EDGE * span) & np.isfinite(lo) | (hi - x <= EDGE * span) & np.isfinite(hi)
    return Solution(
        values=x,
        covariance=invert(jac.T @ jac),
        chi2=float(r @ r),
        residual=r,
        jacobian=jac,
        evaluations=int(out.nfev),
        success=success,
        message=str(out.message),
        at_edge=at_edge,
    )


def invert(information: Array) -> Array:
    """Inverse of a symmetric positive matrix after scaling to a unit diagonal; NaN if it is singular to 1e-13."""
    diag = np.sqrt(np.diag(information))
    if np.any(diag == 0) or not np.all(np.isfinite(diag)):
        return np.full_like(information, np.nan)
    scaled = information / np.outer(diag, diag)
    values, vectors = np.linalg.eigh(scaled)
    if values[0] < 1e-13:
        return np.full_like(information, np.nan)
    inverse: Array = (vectors / values) @ vectors.T / np.outer(diag, diag)
    return inverse
