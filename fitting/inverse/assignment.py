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
from ..records import Array, IntArray
from . import candidates as cand
from .descent import Descent, Prior, descend, linearise

STRAY_SHARE = 0.02
SKIP_PRICE = 2 * np.log(1 / 0.03)
STOP_PRICE = 2 * np.log(1 / 0.30)
# A labelled sheet is believed unless other orders are this much better: e^-10 against one sheet in a hundred
# mislabelled.
LABEL_PRICE = 20.0
# A residual whose square exceeds this starts the search for a wrong reading (three and a half u).
SUSPECT = 12.0
# Wrong readings chosen otherwise stay in view if they are less than e^7 = 1100 times less likely.
NEAR_BEST = 14.0
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
        fit = descend(layout, data, orders, theta, prior, robust=True, max_steps=10, tolerance=1e-2)
        keep = _hopeful(data, orders, fit)
        orders, theta = orders[keep], fit.theta[keep]
        again, _score = cand.assign(sc, theta)
        if np.array_equal(again, orders):
            break
        # A gross error can drag the shared unknowns so far that the closed form, which holds them, loses good readings.
        orders, theta = _distinct(np.concatenate([orders, again]), np.concatenate([theta, theta]))
    orders, theta = _cut_far(layout, data, orders, theta, prior)
    orders, fit = _drop_strays(layout, data, orders, theta, prior)
    back = _take_back(sc, data, orders, fit)
    grown = (back != orders).any(axis=1)
    if grown.any():
        more, again_fit = _drop_strays(layout, data, back[grown], fit.theta[grown], prior)
        orders, theta = _distinct(np.concatenate([orders, more]), np.concatenate([fit.theta, again_fit.theta]))
        fit = descend(layout, data, orders, theta, prior, max_steps=20, tolerance=1e-5)
    return _priced(sc, data, orders, fit)


def _distinct(orders: IntArray, theta: Array) -> tuple[IntArray, Array]:
    kept, first = np.unique(orders, axis=0, return_index=True)
    return kept, theta[first]


def _cut_far(
    layout: Layout, data: FilmReadings, orders: IntArray, theta: Array, prior: Prior
) -> tuple[IntArray, Array]:
    """Beside each assignment the same without all that a robust fit leaves far off, at once."""
    fit = descend(layout, data, orders, theta, prior, robust=True, max_steps=10, tolerance=1e-2)
    far = (orders >= 0) & (fit.linear.residual**2 > 4 * stray_price(data))
    some = far.any(axis=1) & ((orders >= 0) & ~far).any(axis=1)
    cut = np.where(far, -1, orders)[some]
    return _distinct(np.concatenate([orders, cut]), np.concatenate([fit.theta, fit.theta[some]]))


def _take_back(sc: cand.Scene, data: FilmReadings, orders: IntArray, fit: Descent) -> IntArray:
    """Strays that the refined film does have as a mode after all, by its own prediction and not by the closed
    companion's."""
    if not (orders < 0).any():
        return orders
    near = np.where(sc.label >= 0, sc.label, np.maximum(np.round(cand.continuous_order(sc, fit.theta)), 0))
    near = np.nan_to_num(near, nan=-1.0).astype(int)
    out = orders.copy()
    for shift in (0, 1, -1):
        trial = np.where(out < 0, np.maximum(near + np.where(sc.label >= 0, 0, shift), 0), out)
        lin = linearise(sc.layout, data, fit.theta, trial)
        fits = (out < 0) & lin.exists & (lin.residual**2 < SUSPECT)
        for a, r in zip(*np.nonzero(fits), strict=True):
            same = (sc.tm == sc.tm[r]) & (sc.wave == sc.wave[r])
            if trial[a, r] not in out[a, same]:
                out[a, r] = trial[a, r]
    return out


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
    """Leave out, one at a time, readings that cost more than calling them strays.

    A gross error drags the fit along, so the largest residual need not be the wrong reading: every single one is
    tried, and every choice that comes near the best one is kept as an assignment of its own.
    """
    for _ in range(max(1, orders.shape[1] // 2)):
        fit = descend(layout, data, orders, theta, prior, max_steps=12, tolerance=1e-3)
        branches = _without_one(layout, data, orders, fit, prior)
        if branches is None:
            break
        orders, theta = _distinct(*branches)
    return orders, descend(layout, data, orders, theta, prior, max_steps=20, tolerance=1e-5)


def _without_one(
    layout: Layout, data: FilmReadings, orders: IntArray, fit: Descent, prior: Prior
) -> tuple[IntArray, Array] | None:
    """Assignments with one reading fewer where that pays, the others as they are; None if it pays nowhere."""
    bad = (orders >= 0) & (fit.linear.residual**2 > SUSPECT)
    poor = np.flatnonzero(bad.any(axis=1) & ((orders >= 0).sum(axis=1) > 1))
    rows, cols = np.nonzero(orders[poor] >= 0)
    if not rows.size:
        return None
    trial = orders[poor][rows].copy()
    trial[np.arange(rows.size), cols] = -1
    out = descend(layout, data, trial, fit.theta[poor][rows], prior, max_steps=8, tolerance=1e-2)
    change = out.cost + stray_price(data)[cols] - fit.cost[poor][rows]
    kept_orders = [orders[np.setdiff1d(np.arange(orders.shape[0]), poor)]]
    kept_theta = [fit.theta[np.setdiff1d(np.arange(orders.shape[0]), poor)]]
    paid = False
    for k, a in enumerate(poor):
        mine = np.flatnonzero(rows == k)
        best = change[mine].min()
        take = mine[(change[mine] < 0) & (change[mine] <= best + NEAR_BEST)]
        paid |= bool(take.size)
        kept_orders.append(trial[take] if take.size else orders[a : a + 1])
        kept_theta.append(out.theta[take] if take.size else fit.theta[a : a + 1])
    return (np.concatenate(kept_orders), np.concatenate(kept_theta)) if paid else None


def _priced(sc: cand.Scene, data: FilmReadings, orders: IntArray, fit: Descent) -> list[Assignment]:
    unseen = cand.unseen_modes(sc, fit.theta, orders)
    price = fit.cost + ((orders < 0) * stray_price(data)).sum(axis=1)
    price = price + SKIP_PRICE * unseen[:, 0] + STOP_PRICE * unseen[:, 1]
    u = np.sqrt(np.abs(np.diag(np.linalg.pinv(_information(sc.layout, fit, int(price.argmin()))))))
    best: list[Assignment] = []
    for a in np.argsort(price, kind="stable"):
        if price[a] - price.min() > FAR:
            break
        mine = Assignment(orders[a], fit.theta[a], float(price[a]), float(fit.cost[a]))
        if not any(_same_answer(mine, other, u) for other in best):
            best.append(mine)
    weight = np.exp(-(np.array([x.price for x in best]) - best[0].price) / 2)
    return [
        Assignment(x.orders, x.theta, x.price, x.chi2, float(p))
        for x, p in zip(best, weight / weight.sum(), strict=True)
    ]


def _information(layout: Layout, fit: Descent, a: int) -> Array:
    _, prior_u = layout.prior()
    jac = fit.linear.jacobian[a]
    return np.asarray(jac.T @ jac + np.diag(1 / prior_u**2))


def _same_answer(a: Assignment, b: Assignment, u: Array) -> bool:
    """Two assignments that differ only in what they call a stray: every reading that both use has the same order, and
    the unknowns agree within five of their standard uncertainties (P)."""
    both = (a.orders >= 0) & (b.orders >= 0)
    near = (np.abs(a.theta - b.theta) <= 5 * u).all()
    return bool(both.any() and (a.orders[both] == b.orders[both]).all() and near)
