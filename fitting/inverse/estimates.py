"""From a site's fit to its estimates, correlation, budget and the way its numbers follow the shared quantities."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..observables.parameters import Layout, Parameter
from ..records import Array, BoolArray, BudgetLine, Estimate
from .final import SiteFit, shared_gain
from .intervals import REACH, Interval
from .joint import Shared, columns
from .problem import SiteProblem

# A prior that the data have not narrowed by a tenth is still the prior.
SHARPENED = 0.9


@dataclass(frozen=True)
class Output:
    """One number to report: a row over the unknowns, an offset, and what it is called."""

    parameter: Parameter
    row: Array
    offset: float
    origin: str
    position: int | None  # of the unknown itself, None for a derived quantity


@dataclass(frozen=True)
class SiteNumbers:
    """Estimates with their correlation; rows of sensitivity to the table's shared unknowns (E, Q), signed shares of
    known quantities of the site's own stack by name (E each)."""

    estimates: tuple[Estimate, ...]
    correlation: Array
    budget: tuple[BudgetLine, ...]
    to_shared: Array
    to_known: dict[str, Array]


def outputs(layout: Layout, withheld: BoolArray) -> list[Output]:
    """Numbers of a site, fitted unknowns first; those that a loose direction touches are left out."""
    count = len(layout.parameters)
    out = []
    for i, p in enumerate(layout.parameters):
        if p.shared or (p.fitted and withheld[i]) or p.quantity.startswith("curve_term") or p.quantity == "index_shift":
            continue
        row = np.zeros(count)
        row[i] = 1.0
        out.append(Output(p, row, 0.0, "fitted" if p.fitted else "known", i))
    out.sort(key=lambda o: o.origin != "fitted")
    for layer, axis, nm, row, offset in layout.curves:
        if withheld[row != 0].any():
            continue
        p = Parameter(
            f"index:{layer}:{axis}:{nm:g}", f"index of {layer} at {nm:g} nm", layer, "index", "1", 1.0, False, False,
            0.0, -np.inf, np.inf, axis=axis, wavelength_nm=nm,
        )  # fmt: skip
        out.append(Output(p, row, offset, "derived", None))
    return out


def numbers(
    problem: SiteProblem, fit: SiteFit, shared: Shared, spans: dict[int, Interval], withheld: BoolArray, enlarge: float
) -> SiteNumbers:
    """Estimates of one site. enlarge: factor on the random part (1 unless the fit is poor)."""
    layout = problem.layout
    outs = outputs(layout, withheld)
    rows = np.array([o.row for o in outs]).reshape(len(outs), len(layout.parameters))
    random = rows @ fit.random @ rows.T * enlarge**2
    total = rows @ (fit.covariance - fit.random) @ rows.T + random
    u = np.sqrt(np.maximum(np.diag(total), 0))
    estimates = tuple(_estimate(o, fit, float(u[k]), float(random[k, k]), spans, enlarge) for k, o in enumerate(outs))
    correlation = total / np.where(u > 0, u, 1)[:, None] / np.where(u > 0, u, 1)
    np.fill_diagonal(correlation, 1.0)
    to_shared, to_known = _follow(layout, fit, shared, rows)
    budget = _budget(outs, fit, shared, random, to_shared, to_known)
    return SiteNumbers(estimates, correlation, budget, to_shared, to_known)


def _estimate(o: Output, fit: SiteFit, u: float, random: float, spans: dict[int, Interval], enlarge: float) -> Estimate:
    p, s = o.parameter, o.parameter.scale
    value = float(o.row @ fit.theta + o.offset)
    low, high, how = value - REACH * u, value + REACH * u, "parabolic"
    span = spans.get(o.position) if o.position is not None else None
    if span is not None and span.profile:
        plain = float(np.sqrt(o.row @ fit.covariance @ o.row))
        wide = u / plain if plain > 0 else 1.0
        low, high, how = value - (value - span.low) * wide, value + (span.high - value) * wide, "profile"
    origin = o.origin
    if origin == "known" and u < SHARPENED * p.prior_u:
        origin = "fitted"
    u_random = min(float(np.sqrt(max(random, 0.0))), u)
    return Estimate(
        layer=p.layer, quantity=p.quantity, value=value * s, u=u * s, u_random=u_random * s,
        u_shared=float(np.sqrt(max(u**2 - u_random**2, 0.0))) * s, low95=low * s, high95=high * s, unit=p.unit,
        origin=origin, axis=p.axis, wavelength_nm=p.wavelength_nm, interval=how,
        prior=None if np.isinf(p.prior_u) else (p.prior_mean * s, p.prior_u * s),
    )  # fmt: skip


def _follow(layout: Layout, fit: SiteFit, shared: Shared, rows: Array) -> tuple[Array, dict[str, Array]]:
    """d(output)/d(shared of the table) (E, Q), and u-sized shares of each known quantity of the site's own stack."""
    local = ~layout.shared
    mine, where = columns(layout, shared.parameters)
    gain = shared_gain(fit, local)
    to_shared = np.zeros((rows.shape[0], len(shared.parameters)))
    if mine.size:
        to_shared[:, where] = rows[:, local] @ gain + rows[:, mine]
    to_known: dict[str, Array] = {}
    held = np.linalg.inv(fit.information[np.ix_(local, local)])
    for k, i in enumerate(np.flatnonzero(local)):
        p = layout.parameters[i]
        if np.isfinite(p.prior_u):
            to_known[p.name] = rows[:, local] @ held[:, k] / p.prior_u
    return to_shared, to_known


def _budget(
    outs: list[Output], fit: SiteFit, shared: Shared, random: Array, to_shared: Array, to_known: dict[str, Array]
) -> tuple[BudgetLine, ...]:
    """Shares whose squares add up to u²: reading noise, each stated prior, and what the table's readings left in the
    shared quantities while they calibrated them."""
    cov = shared.covariance
    lines = []
    labels = {p.name: p.label for p in shared.parameters}
    known = {o.parameter.name: o.parameter.label for o in outs}
    for e, o in enumerate(outs):
        p, s = o.parameter, o.parameter.scale

        def line(source: str, kind: str, u: float, p: Parameter = p, s: float = s) -> None:
            lines.append(BudgetLine(source, kind, p.layer, p.quantity, p.axis, p.wavelength_nm, u * s, p.unit))

        line("reading noise", "random", float(np.sqrt(max(random[e, e], 0.0))))
        for name, share in to_known.items():
            line(known.get(name, name), "shared", abs(float(share[e])))
        if cov.size:
            weight = to_shared[e] @ cov
            stated = (weight / shared.prior_u) ** 2
            for k, q in enumerate(shared.parameters):
                line(labels[q.name], "shared", float(np.sqrt(stated[k])))
            rest = float(weight @ to_shared[e]) - float(stated.sum())
            line("noise of all readings, through the shared quantities", "shared", float(np.sqrt(max(rest, 0.0))))
    return tuple(lines)
