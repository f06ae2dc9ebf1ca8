"""First look at a site: which readings are which modes, what is a stray, and is there an answer at all."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from ..flags import flag
from ..observables.film import predict
from ..records import Array, Flag, IntArray
from .assignment import FAR, LABEL_PRICE, Assignment, rank, stray_price
from .descent import Prior, descend, linearise
from .hopeless import reach, remedies
from .problem import SiteProblem, stack_sites

# A fit less likely than this is called poor (common practice, no source).
POOR = 1e-3
# A reading decides between two films if their modes lie this many u apart there.
_DECIDES = 5.0
# Orders are certain when all rivals together have less than this; below the second limit no number is given.
AMBIGUOUS = 0.002
UNDECIDED = 0.2


@dataclass
class Settled:
    """orders (R) and unknowns (P) of the accepted assignment, None if there is none; rivals with their price
    difference."""

    orders: IntArray | None
    theta: Array | None
    rivals: tuple[Assignment, ...] = ()
    price: float = 0.0
    flags: list[Flag] = field(default_factory=list)
    notes: list[Flag] = field(default_factory=list)
    remarks: dict[int, str] = field(default_factory=dict)
    withhold: bool = False

    @property
    def good(self) -> bool:
        return self.orders is not None and not self.flags and not self.withhold


def settle_all(problems: Sequence[SiteProblem]) -> list[Settled]:
    """Decide the orders of several sites with the stated priors alone.

    Fully labelled sites under one layout are first tried together, as labelled, from the answer of the first of them;
    those in which every reading fits are done. The others, and unlabelled ones, go the long way of `settle`.
    """
    out: dict[int, Settled] = {}
    groups: dict[int, list[int]] = {}
    for i, p in enumerate(problems):
        if (p.label >= 0).all():
            groups.setdefault(id(p.layout), []).append(i)
    for members in groups.values():
        first = out[members[0]] = settle(problems[members[0]])
        if first.good and first.theta is not None and len(members) > 1:
            out.update(_try_labels(problems, members[1:], first.theta))
    return [out[i] if i in out else settle(p) for i, p in enumerate(problems)]


def _try_labels(problems: Sequence[SiteProblem], members: Sequence[int], hint: Array) -> dict[int, Settled]:
    """Sites of one layout as labelled, in one batch: those that fit without a reservation."""
    mine = [problems[i] for i in members]
    layout = mine[0].layout
    data, orders = stack_sites(mine, [p.label for p in mine])
    fit = descend(layout, data, orders, np.tile(hint, (len(mine), 1)), Prior.of(layout), max_steps=12, tolerance=1e-5)
    low, high = layout.bounds()
    inside = np.all((fit.theta > low) & (fit.theta < high) & fit.linear.exists.all(axis=1, keepdims=True), axis=1)
    out = {}
    for k, i in enumerate(members):
        dof = problems[i].label.size - int(layout.fitted.sum())
        if inside[k] and dof > 0 and p_value(float(fit.cost[k]), dof) > POOR:
            out[i] = Settled(problems[i].label.copy(), fit.theta[k])
    return out


def settle(problem: SiteProblem) -> Settled:
    """Decide one site's orders by the search over assignments."""
    layout, data, label = problem.layout, problem.data, problem.label
    prior = Prior.of(layout)
    labelled = bool((label >= 0).all())
    ranked = rank(layout, data, label, prior)
    out = Settled(None, None)
    if (label >= 0).any():
        ranked = _doubt_labels(problem, ranked, prior, out)
    if not ranked:
        out.flags += [flag("no_mode_possible", reach(problem)), *remedies(problem, None)]
        return out
    best = ranked[0]
    out.orders, out.theta, out.price = best.orders, best.theta, best.price
    out.rivals = tuple(ranked[1:])
    _judge(problem, out, best, labelled)
    return out


def p_value(chi2: float, dof: int) -> float:
    """Probability of a larger chi-squared."""
    from scipy.special import gammaincc

    return float(gammaincc(dof / 2, chi2 / 2))


def _doubt_labels(problem: SiteProblem, ranked: list[Assignment], prior: Prior, out: Settled) -> list[Assignment]:
    """Believe the labels unless other orders fit far better, or the labels fit nothing."""
    layout, data = problem.layout, problem.data
    dof = problem.label.size - int(layout.fitted.sum())
    if ranked and (ranked[0].orders >= 0).all() and (dof < 1 or p_value(ranked[0].chi2, dof) > POOR):
        return ranked
    free = rank(layout, data, np.full_like(problem.label, -1), prior)
    few_left = bool(free) and 3 * int((free[0].orders >= 0).sum()) < 2 * problem.label.size
    if not free or few_left or (ranked and free[0].price + LABEL_PRICE > ranked[0].price):
        return ranked
    typed, found = problem.label, free[0].orders
    changed = [
        f"{r.pol}{t} at {r.value:g} reads as {r.pol}{f}"
        for r, t, f in zip(problem.readings, typed, found, strict=True)
        if t >= 0 and f >= 0 and t != f
    ]
    out.flags.append(flag("label_doubtful", "; ".join(changed) + "." if changed else ""))
    return free


def _judge(problem: SiteProblem, out: Settled, best: Assignment, labelled: bool) -> None:
    """Flags and notes on strays and rivals."""
    used = best.orders >= 0
    rejected = int((~used).sum())
    if rejected * 2 > used.size:
        out.orders = out.theta = None
        out.rivals, out.flags = (), [flag("no_mode_possible", reach(problem)), *remedies(problem, best)]
        return
    if rejected:
        _explain_strays(problem, out, best)
        unchecked = int(used.sum()) <= int(problem.layout.fitted.sum())
        if rejected * 3 > used.size or unchecked:
            out.flags.append(flag("many_rejected", f"{rejected} of {used.size} readings."))
            out.withhold = True
            out.flags += remedies(problem, best)
    doubt = 1 - best.probability
    if doubt > AMBIGUOUS:
        decide = _deciding_reading(problem, best, out.rivals[0]) if out.rivals else ""
        out.flags.append(flag("order_ambiguous", f"The best one has probability {best.probability:.3f}.{decide}"))
        out.withhold |= doubt > UNDECIDED
    elif not labelled:
        out.notes.append(flag("orders_found"))


def _deciding_reading(problem: SiteProblem, best: Assignment, rival: Assignment) -> str:
    """The unread mode of the best film that lies farthest from every mode of the rival's."""
    layout, data = problem.layout, problem.data
    films = np.array([best.theta, rival.theta])
    most = int(max(best.orders.max(), rival.orders.max())) + 2
    found: tuple[float, str] = (0.0, "")
    for c in np.unique(data.context[0]):
        first = int(np.flatnonzero(data.context[0] == c)[0])
        row = replace(
            data, context=np.full((1, most), c), is_angle=np.full((1, most), data.is_angle[0, first]),
            measured=np.zeros((1, most)), u=np.full((1, most), data.u[0, first]), valid=np.ones((1, most), dtype=bool),
        )  # fmt: skip
        modes = predict(layout, row, films, np.tile(np.arange(most), (2, 1)))
        taken = set(best.orders[data.context[0] == c].tolist())
        there = modes.value[1][modes.exists[1]]
        for m in np.flatnonzero(modes.exists[0]):
            gap = float(np.abs(modes.value[0, m] - there).min()) if there.size else 90.0
            gap /= float(row.u[0, 0])
            if int(m) not in taken and gap > max(found[0], _DECIDES):
                reading = problem.readings[first]
                text = f"{reading.pol}{m} at {reading.wavelength_um * 1000:g} nm, near {modes.value[0, m]:.3f}"
                found = (gap, f" A reading of {text}, would decide: the first rival has no mode there.")
    return found[1]


def _explain_strays(problem: SiteProblem, out: Settled, best: Assignment) -> None:
    """Say of each rejected reading how far it is from a mode, and whether a whole degree would mend it."""
    price = stray_price(problem.data)
    for r in np.flatnonzero(best.orders < 0):
        reading = problem.readings[r]
        hint = _whole_degree(problem, best, int(r), float(price[r])) if problem.data.is_angle[0, r] else ""
        text = f"fits no mode of this film{hint or '.'}"
        out.remarks[int(r)] = text
        where = f"row {reading.place.row}" if reading.place.row is not None else "reading"
        out.notes.append(flag("reading_rejected", f"{where}: {reading.pol} {reading.value:g} {text}"))


def _whole_degree(problem: SiteProblem, best: Assignment, r: int, price: float) -> str:
    """A mode with no reading that the angle would meet if its whole degrees were typed wrongly."""
    taken = {
        int(best.orders[k])
        for k in np.flatnonzero(best.orders >= 0)
        if problem.data.context[0, k] == problem.data.context[0, r]
    }
    trial = np.full(best.orders.size, -1)
    for m in range(max(taken, default=-1) + 3):
        trial[r] = m
        lin = linearise(problem.layout, problem.data, best.theta[None, :], trial[None, :])
        if m in taken or not lin.exists[0, r]:
            continue
        off = problem.data.measured[0, r] - lin.predicted[0, r]
        whole = round(off)
        if whole != 0 and abs(off - whole) < 4 * problem.data.u[0, r] and abs(whole) <= 10:
            return f"; as {problem.readings[r].pol}{m} it is {whole:+d} degrees off: a typing error?"
    return ""


def rivals_far(rivals: Sequence[Assignment], price: float) -> list[Assignment]:
    """Rivals worth listing: those that the data do not rule out at one in a thousand."""
    return [r for r in rivals if r.price - price < FAR and r.probability > 1e-3]
