"""What the readings cannot say: directions in the space of the unknowns that the data leave as wide as the fit
windows."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..observables.parameters import Layout, Parameter
from ..records import Array, BoolArray
from .descent import Prior
from .problem import SiteProblem

# A direction is loose when its standard uncertainty exceeds this share of the window (an even spread over it has 0.29).
LOOSE_SHARE = 0.2
# Unknowns with more than this share of a loose direction get no number.
TOUCHED = 0.05


@dataclass(frozen=True)
class Rank:
    """Loose directions over the fitted unknowns, and for each unknown (P) whether one of them touches it."""

    directions: tuple[Array, ...]
    touched: BoolArray
    condition: float


def examine(layout: Layout, jacobian: Array, prior: Prior) -> Rank:
    """Rank test at a solution. jacobian: (R, P), divided by the readings' u; prior of the unknowns that have one."""
    fitted = layout.fitted
    low, high = layout.bounds()
    # Unknowns with a prior are taken in units of it, the fitted ones in units of their windows.
    _, prior_u = layout.prior()
    width = np.where(fitted, high - low, np.where(np.isfinite(prior_u), prior_u, 1.0))
    information = (jacobian.T @ jacobian + prior.precision) * np.outer(width, width)
    f, r = np.flatnonzero(fitted), np.flatnonzero(~fitted)
    marginal = information[np.ix_(f, f)]
    if r.size:
        cross = information[np.ix_(f, r)]
        marginal = marginal - cross @ np.linalg.solve(information[np.ix_(r, r)], cross.T)
    values, vectors = np.linalg.eigh((marginal + marginal.T) / 2)
    loose = values < 1 / LOOSE_SHARE**2
    touched = np.zeros(fitted.size, dtype=bool)
    directions = []
    for k in np.flatnonzero(loose):
        full = np.zeros(fitted.size)
        full[f] = vectors[:, k]
        directions.append(full)
        touched |= np.abs(full) > TOUCHED
    condition = float(np.sqrt(values[-1] / values[0])) if values[0] > 0 else float("inf")
    return Rank(tuple(directions), touched, condition)


def describe(problem: SiteProblem, rank: Rank) -> str:
    """Names the loose directions and the measurement that would fix them."""
    return " ".join(_one(problem, direction) for direction in rank.directions)


def _one(problem: SiteProblem, direction: Array) -> str:
    parts = [(p, d) for p, d in zip(problem.layout.parameters, direction, strict=True) if abs(d) > 0.15]
    parts.sort(key=lambda x: -abs(x[1]))
    names = [p.label for p, _ in parts]
    if len(parts) == 1:
        loose = f"Loose: {names[0]} alone."
    else:
        sign = "rise together" if parts[0][1] * parts[1][1] > 0 else "trade off against each other"
        loose = f"Loose: {' and '.join(names)} {sign}."
    return f"{loose} {_remedy(problem, [p for p, _ in parts])}"


def _remedy(problem: SiteProblem, loose: list[Parameter]) -> str:
    """The reading that would help, from what the sheet lacks."""
    waves = {p.wavelength_nm for p in loose if p.wavelength_nm is not None}
    here = [r for r in problem.readings if not waves or round(r.wavelength_um * 1000, 6) in waves]
    pols = {r.pol for r in here}
    modes = {(r.wavelength_um, r.pol, r.value) for r in here}
    if any(p.axis == "normal" for p in loose) and "TM" not in pols:
        return "Read TM modes: only they see the index along the normal."
    if any(p.axis == "in_plane" for p in loose) and "TE" not in pols:
        return "Read TE modes: they see the index in the plane alone."
    if any(p.quantity.startswith("curve_term") for p in loose):
        return "Read at one more wavelength, or ask for fewer terms of the curve."
    fix = f"or give {loose[0].label} as a known quantity {{ value, u }} from another instrument"
    if len(modes) <= 1 or len({m[2] for m in modes}) <= 1:
        other = "TE" if pols == {"TM"} else "TM"
        return f"Read a second mode ({other}, or the next order), {fix}."
    return f"Read a further mode (the other polarisation, a higher order) or another wavelength, {fix}."
