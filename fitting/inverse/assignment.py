"""Which reading is which mode: candidates refined, priced and ranked; what remains possible is a rival.

The price of an assignment is -2 ln of its likelihood with the priors at their best, plus

    a stray reading    2 ln( (1 - p) / p * span / (sqrt(2 pi) u) ),  p = 0.02, span the range of the readings
    a skipped order    2 ln( 1 / 0.03 ): a mode below the highest one read that has no reading
    unread orders      2 ln( 1 / 0.30 ) once for a channel that stops before the film does

(our own stated rule; the shares are common practice, no source). Probabilities follow from exp(-price / 2).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..observables.film import FilmReadings
from ..observables.parameters import Layout
from ..records import Array, BoolArray, IntArray
from . import candidates as cand
from .descent import Descent, Prior, descend

STRAY_SHARE = 0.02
SKIP_PRICE = 2 * np.log(1 / 0.03)
STOP_PRICE = 2 * np.log(1 / 0.30)
# A labelled sheet is believed unless other orders are this much better: e^-10 against one sheet in a hundred
# mislabelled.
LABEL_PRICE = 20.0
# Assignments this much dearer than the best weigh less than 1e-6 together and are not kept.
FAR = 40.0
_REFINE = 16


@dataclass(frozen=True)
class Assignment:
    """orders (R), -1 for a stray; unknowns (P) at the best fit; price; chi2 of readings and priors."""

    orders: IntArray
    theta: Array
    price: float
    chi2: float
    probability: float = 1.0


def stray_price(data: FilmReadings) -> Array:
    """Price of calling each reading a stray, (R)."""
    span = np.where(data.is_angle[0], max(np.ptp(data.measured[0]), 1.0), 0.1)
    return np.asarray(2 * np.log((1 - STRAY_SHARE) / STRAY_SHARE * np.maximum(span / (2.5066 * data.u[0]), 1.0)))


def rank(layout: Layout, data: FilmReadings, label: IntArray, prior: Prior) -> list[Assignment]:
    """Distinct assignments of one site (S = 1), cheapest first, with probabilities; empty if no film fits two
    readings."""
    found = cand.find(layout, data, label)
    if not len(found):
        return []
    sc = cand.scene(layout, data, label)
    orders, theta = found.orders[:_REFINE], found.theta[:_REFINE]
    for _ in range(2):
        fit = descend(layout, data, orders, theta, prior, max_steps=6, tolerance=1e-2)
        keep = _hopeful(data, orders, fit)
        orders, theta = orders[keep], fit.theta[keep]
        again, _score = cand.assign(sc, theta)
        if np.array_equal(again, orders):
            break
        orders, first = np.unique(again, axis=0, return_index=True)
        theta = theta[first]
    orders, fit = _drop_strays(layout, data, orders, theta, prior)
    return _priced(sc, data, orders, fit)


def _hopeful(data: FilmReadings, orders: IntArray, fit: Descent) -> IntArray:
    """Assignments that could still come within reach of the best, were every bad reading of theirs a stray."""
    price = stray_price(data)
    used = orders >= 0
    hope = np.where(used, np.minimum(fit.linear.residual**2, price), price).sum(axis=1)
    # A gross error drags good readings along: allow one price on top before giving an assignment up.
    return np.flatnonzero(hope <= hope.min() + FAR + price.max())


def _drop_strays(
    layout: Layout, data: FilmReadings, orders: IntArray, theta: Array, prior: Prior
) -> tuple[IntArray, Descent]:
    """Leave out, one at a time, the reading whose residual costs more than calling it a stray."""
    price = stray_price(data)
    orders = orders.copy()
    for _ in range(max(1, orders.shape[1] // 2)):
        fit = descend(layout, data, orders, theta, prior, max_steps=12, tolerance=1e-3)
        theta = fit.theta
        excess = fit.linear.residual**2 - price
        gone = _worst_out(layout, data, orders, fit, prior, excess)
        if not gone.any():
            break
        orders[gone] = -1
    fit = descend(layout, data, orders, theta, prior, max_steps=20, tolerance=1e-5)
    return orders, fit


def _worst_out(
    layout: Layout, data: FilmReadings, orders: IntArray, fit: Descent, prior: Prior, excess: Array
) -> BoolArray:
    """For each assignment the one reading (mask (A, R)) whose leaving lowers the price most, where any does.

    A gross error drags the fit along, so the largest residual need not be the wrong reading: every single one is tried.
    """
    gone = np.zeros(orders.shape, dtype=bool)
    poor = np.flatnonzero(((orders >= 0) & (fit.linear.residual**2 > 12)).any(axis=1))
    rows, cols = np.nonzero(orders[poor] >= 0)
    if not rows.size:
        return gone
    trial = orders[poor][rows].copy()
    trial[np.arange(rows.size), cols] = -1
    out = descend(layout, data, trial, fit.theta[poor][rows], prior, max_steps=8, tolerance=1e-2)
    change = out.cost + stray_price(data)[cols] - fit.cost[poor][rows]
    for k, a in enumerate(poor):
        mine = np.flatnonzero(rows == k)
        if mine.size > 1 and change[mine].min() < 0:
            gone[a, cols[mine[change[mine].argmin()]]] = True
    return gone


def _priced(sc: cand.Scene, data: FilmReadings, orders: IntArray, fit: Descent) -> list[Assignment]:
    unseen = cand.unseen_modes(sc, fit.theta, orders)
    price = fit.cost + ((orders < 0) * stray_price(data)).sum(axis=1)
    price = price + SKIP_PRICE * unseen[:, 0] + STOP_PRICE * unseen[:, 1]
    best: list[Assignment] = []
    for a in np.argsort(price, kind="stable"):
        if price[a] - price.min() > FAR:
            break
        mine = Assignment(orders[a], fit.theta[a], float(price[a]), float(fit.cost[a]))
        if not any(_same_modes(mine.orders, other.orders) for other in best):
            best.append(mine)
    weight = np.exp(-(np.array([x.price for x in best]) - best[0].price) / 2)
    return [
        Assignment(x.orders, x.theta, x.price, x.chi2, float(p))
        for x, p in zip(best, weight / weight.sum(), strict=True)
    ]


def _same_modes(a: IntArray, b: IntArray) -> bool:
    """Two assignments differ only in what they call a stray: every reading that both use has the same order."""
    both = (a >= 0) & (b >= 0)
    return bool(both.any() and (a[both] == b[both]).all())
