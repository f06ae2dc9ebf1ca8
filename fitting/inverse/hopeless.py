"""A sheet that no film inside the windows explains: what would make it fit, as remedies, never as numbers."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from ..flags import flag
from ..records import Flag, IntArray
from .assignment import LABEL_PRICE, Assignment, rank
from .candidates import scene
from .descent import Prior
from .problem import SiteProblem


def reach(problem: SiteProblem) -> str:
    """What the readings state as effective indices."""
    N = scene(problem.layout, problem.data, problem.label).N
    return f"As stated, the readings mean effective indices from {N.min():.4f} to {N.max():.4f}."


def remedies(problem: SiteProblem, best: Assignment | None) -> list[Flag]:
    """Flags for what would explain every reading: TE and TM exchanged, or a film outside the windows."""
    price = np.inf if best is None else best.price
    out = []
    if _would_fit(*_exchanged(problem), price):
        out.append(flag("polarisation_doubtful"))
    wide = _widened(problem)
    for label in (problem.label, np.full_like(problem.label, -1)):
        found = _would_fit(wide, label, price)
        if found:
            out.append(flag("at_window_edge", _outside(problem, found)))
            break
    return out


def _would_fit(problem: SiteProblem | None, label: IntArray, price: float) -> Assignment | None:
    """The best assignment if it uses every reading and is far cheaper than what the sheet gives as it stands."""
    if problem is None:
        return None
    ranked = rank(problem.layout, problem.data, label, Prior.of(problem.layout))
    good = ranked and (ranked[0].orders >= 0).all() and ranked[0].price + LABEL_PRICE < price
    return ranked[0] if good else None


def _exchanged(problem: SiteProblem) -> tuple[SiteProblem | None, IntArray]:
    blank = np.full_like(problem.label, -1)
    contexts = problem.layout.contexts
    partner = [next((k for k, d in enumerate(contexts) if d == replace(c, tm=not c.tm)), -1) for c in contexts]
    mine = np.array([partner[c] for c in problem.data.context[0]])
    if (mine < 0).any():
        return None, blank
    return replace(problem, data=replace(problem.data, context=mine[None, :])), blank


def _widened(problem: SiteProblem) -> SiteProblem:
    """The same with every fit window three times as wide, kept physical."""

    def low(value: float, width: float, quantity: str) -> float:
        return max(value - width, 1.0 if quantity == "index" else 0.001 if quantity == "thickness" else -np.inf)

    wide = tuple(
        replace(p, low=low(p.low, p.high - p.low, p.quantity), high=p.high + (p.high - p.low)) if p.fitted else p
        for p in problem.layout.parameters
    )
    return replace(problem, layout=replace(problem.layout, parameters=wide))


def _outside(problem: SiteProblem, found: Assignment) -> str:
    parts = []
    for p, value in zip(problem.layout.parameters, found.theta, strict=True):
        if p.fitted and not p.low <= value <= p.high:
            parts.append(f"{p.label} {'above' if value > p.high else 'below'} its window")
    return f"Every reading would fit with {' and '.join(parts)}." if parts else ""
