"""The shared unknowns of a table (prism, base angle, table zero, constants) from all its good sites together.

Each site, its own unknowns minimised out, adds information and a gradient on the shared ones; the sum with the priors
gives their joint best and covariance (the arrow-shaped normal equations, solved exactly). A site's own fit then takes
as prior what all the others and the stated priors say: nothing is counted twice, and nothing shared is averaged away.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from ..observables.film import FilmReadings
from ..observables.parameters import Layout, Parameter
from ..records import Array, IntArray
from .descent import Prior, linearise
from .problem import SiteProblem, stack_sites

_STEPS = 8


@dataclass(frozen=True)
class Shared:
    """Joint best (Q) and information (Q, Q) of the shared unknowns; each site's part of the information, its
    gradient, and its unknowns at the joint best."""

    parameters: tuple[Parameter, ...]
    best: Array
    information: Array
    prior_u: Array
    site_information: dict[int, Array]
    site_gradient: dict[int, Array]
    site_theta: dict[int, Array]

    @property
    def covariance(self) -> Array:
        return np.asarray(np.linalg.inv(self.information), dtype=float) if self.best.size else np.zeros((0, 0))

    def without(self, site: int) -> tuple[Array, Array]:
        """Mean and information of the shared unknowns from the priors and all sites but this one."""
        information, best = self.information, self.best
        if site in self.site_information:
            information = information - self.site_information[site]
            best = best - np.linalg.solve(information, self.site_gradient[site])
        return best, information


def shared_parameters(problems: Sequence[SiteProblem]) -> tuple[Parameter, ...]:
    """Shared unknowns over all layouts of a table, each once."""
    seen: dict[str, Parameter] = {}
    for layout in {id(p.layout): p.layout for p in problems}.values():
        for parameter in layout.parameters:
            if parameter.shared:
                seen.setdefault(parameter.name, parameter)
    return tuple(seen.values())


def columns(layout: Layout, parameters: Sequence[Parameter]) -> tuple[IntArray, IntArray]:
    """Positions of the layout's shared unknowns, and of each of them among the table's."""
    names = [p.name for p in parameters]
    mine = np.flatnonzero(layout.shared)
    return mine, np.array([names.index(layout.parameters[i].name) for i in mine], dtype=int)


def solve_shared(
    problems: Sequence[SiteProblem], orders: Sequence[IntArray], theta: Sequence[Array], good: Sequence[int]
) -> Shared:
    """Joint step over the sites listed in `good`, from each site's own solution."""
    parameters = shared_parameters(problems)
    mean = np.array([p.prior_mean for p in parameters])
    prior_u = np.array([p.prior_u for p in parameters])
    prior = np.diag(1 / prior_u**2)
    best = mean.copy()
    local = {i: theta[i].copy() for i in good}
    batches = _batches(problems, orders, good)
    parts: dict[int, tuple[Array, Array]] = {}
    information = prior
    for _ in range(_STEPS if parameters else 0):
        parts = {}
        moves: dict[int, tuple[Array, Array]] = {}
        for members, batch in batches:
            _site_parts(problems, members, batch, parameters, best, local, parts, moves)
        information = prior + sum(h for h, _ in parts.values())
        gradient = prior @ (mean - best) + sum(g for _, g in parts.values())
        step = np.linalg.solve(information, gradient)
        for i, (to_best, gain) in moves.items():
            _, where = columns(problems[i].layout, parameters)
            own = np.flatnonzero(~problems[i].layout.shared)
            local[i][own] += to_best + gain @ step[where]
        best = best + step
        if float(step @ gradient) < 1e-8 * max(1, len(good)):
            break
    for i, theta_i in local.items():
        mine, where = columns(problems[i].layout, parameters)
        theta_i[mine] = best[where]
    by_site = {i: p[0] for i, p in parts.items()}, {i: p[1] for i, p in parts.items()}
    return Shared(parameters, best, information, prior_u, *by_site, local)


Batch = tuple[FilmReadings, IntArray]


def _batches(
    problems: Sequence[SiteProblem], orders: Sequence[IntArray], good: Sequence[int]
) -> list[tuple[list[int], Batch]]:
    groups: dict[int, list[int]] = {}
    for i in good:
        groups.setdefault(id(problems[i].layout), []).append(i)
    return [
        (members, stack_sites([problems[i] for i in members], [orders[i] for i in members]))
        for members in groups.values()
    ]


def _site_parts(
    problems: Sequence[SiteProblem],
    members: list[int],
    batch: Batch,
    parameters: Sequence[Parameter],
    best: Array,
    local: dict[int, Array],
    parts: dict[int, tuple[Array, Array]],
    moves: dict[int, tuple[Array, Array]],
) -> None:
    """Information and gradient on the shared unknowns of every site of one layout, its own unknowns minimised out."""
    layout = problems[members[0]].layout
    mine, where = columns(layout, parameters)
    own = np.flatnonzero(~layout.shared)
    theta = np.array([local[i] for i in members])
    theta[:, mine] = best[where]
    low, high = layout.bounds()
    theta[:, own] = np.clip(theta[:, own], low[own], high[own])
    data, order = batch
    lin = linearise(layout, data, theta, order)
    own_prior = Prior.of(layout)
    hess = np.einsum("srp,srq->spq", lin.jacobian, lin.jacobian)
    grad = np.einsum("srp,sr->sp", lin.jacobian, lin.residual)
    haa = hess[:, own[:, None], own] + (own_prior.precision + layout.window_weight())[own[:, None], own]
    ga = grad[:, own] + (own_prior.mean - theta)[:, own] @ own_prior.precision[own[:, None], own]
    hab = hess[:, own[:, None], mine]
    solved = np.linalg.solve(haa, np.concatenate([ga[..., None], hab], axis=2))
    to_best, gain = solved[..., 0], -solved[..., 1:]
    hbb = hess[:, mine[:, None], mine] + np.swapaxes(hab, 1, 2) @ gain
    gb = grad[:, mine] + np.einsum("sba,sa->sb", np.swapaxes(gain, 1, 2), ga)
    for k, i in enumerate(members):
        local[i] = theta[k]
        full_h = np.zeros((len(parameters), len(parameters)))
        full_g = np.zeros(len(parameters))
        full_h[where[:, None], where] = (hbb[k] + hbb[k].T) / 2
        full_g[where] = gb[k]
        parts[i] = (full_h, full_g)
        moves[i] = (to_best[k], gain[k])


def site_prior(problem: SiteProblem, shared: Shared, site: int) -> Prior:
    """Prior of one site's final fit: stated priors on its own unknowns, the rest of the table on the shared ones."""
    layout = problem.layout
    own = Prior.of(layout)
    mine, where = columns(layout, shared.parameters)
    if not mine.size:
        return own
    best, information = shared.without(site)
    # Shared unknowns that this site's layout does not see are marginalised out.
    covariance = np.linalg.inv(information)[where[:, None], where]
    precision, mean = own.precision.copy(), own.mean.copy()
    precision[mine[:, None], mine] = np.linalg.inv(covariance)
    mean[mine] = best[where]
    return Prior(mean, precision)
