"""One site's final answer: fit, intervals, rank test, flags, numbers, rivals."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from ..flags import flag
from ..records import Array, FitQuality, FittedReading, Flag, IntArray, Rival, SiteResult, Status
from .assignment import Assignment
from .descent import Prior
from .estimates import SiteNumbers, numbers
from .final import SiteFit, fit_site
from .identify import Rank, describe, examine
from .intervals import intervals
from .joint import Shared
from .problem import SiteProblem
from .settle import POOR, Settled, p_value, rivals_far


@dataclass(frozen=True)
class SiteAnswer:
    """The record for the reports, and what the wafer means need. trusted: may enter a mean."""

    result: SiteResult
    numbers: SiteNumbers | None
    trusted: bool


def unanswered(problem: SiteProblem, flags: Sequence[Flag], notes: Sequence[Flag] = ()) -> SiteAnswer:
    """A site with no number at all: flags say why."""
    readings = tuple(
        FittedReading(r, r.order, None, float(u), False, "not fitted")
        for r, u in zip(problem.readings, problem.data.u[0], strict=True)
    )
    result = _site(problem, Status.FAILED, flags, notes, readings)
    return SiteAnswer(result, None, False)


def answer(
    problem: SiteProblem, settled: Settled, prior: Prior, shared: Shared, start: Array | None = None
) -> SiteAnswer:
    """Final fit of a settled site with the rest of the table as prior; `start`: where the table left it."""
    if settled.orders is None or settled.theta is None:
        return unanswered(problem, settled.flags, settled.notes)
    fit = fit_site(problem, settled.orders, settled.theta if start is None else start, prior)
    flags, notes = list(settled.flags), list(settled.notes)
    rank = examine(problem.layout, fit.jacobian, Prior.of(problem.layout))
    withheld = rank.touched.copy()
    quality = _quality(settled.orders, fit)
    blocked = _block(problem, fit, rank, flags) or settled.withhold
    enlarge = 1.0 if blocked else _misfit(quality, flags)
    if not rank.directions and quality.dof == 0:
        notes.append(flag("no_redundancy"))
    if blocked:
        withheld[:] = True
    which = np.flatnonzero(problem.layout.fitted & ~withheld)
    spans = intervals(problem, settled.orders, fit, which)
    if any(s.cut for s in spans.values()):
        cut = [problem.layout.parameters[i].label for i, s in spans.items() if s.cut]
        flags.append(flag("at_window_edge", f"The 95 % interval of {' and '.join(cut)} reaches the window's end."))
    if any(s.profile for s in spans.values()):
        notes.append(flag("not_parabolic"))
    found: SiteNumbers | None = numbers(problem, fit, shared, spans, withheld, enlarge)
    if blocked or found is None or not any(e.origin != "known" for e in found.estimates):
        found, status = None, Status.FAILED
    else:
        status = Status.FLAGGED if flags else Status.OK
    rivals = tuple(_rival(problem, r, settled, shared) for r in rivals_far(settled.rivals, settled.price))
    readings = _readings(problem, settled, fit)
    result = _site(problem, status, flags, notes, readings, found, quality, rivals)
    trusted = found is not None and not any(f.code in _UNTRUSTED for f in flags)
    return SiteAnswer(result, found, trusted)


_UNTRUSTED = {"order_ambiguous", "label_doubtful", "many_rejected", "at_window_edge", "not_converged"}


def _block(problem: SiteProblem, fit: SiteFit, rank: Rank, flags: list[Flag]) -> bool:
    """Flags that leave no number standing; adds them and says whether any was found."""
    before = len(flags)
    if rank.directions:
        flags.append(flag("loose_direction", describe(problem, rank)))
        before += 1
    held = fit.at_edge & ~rank.touched
    if held.any():
        names = [p.label for p, h in zip(problem.layout.parameters, held, strict=True) if h]
        flags.append(flag("at_window_edge", f"Held by its window: {' and '.join(names)}."))
    if not fit.success and len(flags) == before and not rank.directions:
        flags.append(flag("not_converged"))
    below = _prism_below(problem, fit)
    if below:
        flags.append(flag("prism_below_film", below))
    return len(flags) > before


def _prism_below(problem: SiteProblem, fit: SiteFit) -> str:
    """A film index at or above the prism's means that modes above the prism's reach were never seen."""
    layout, theta = problem.layout, fit.theta
    if not problem.data.is_angle.any():
        return ""
    for c, context in enumerate(layout.contexts):
        n = layout.n_fixed[c] + layout.n_map[c] @ theta
        if context.tm and layout.uniaxial:
            n = layout.normal_fixed[c] + layout.normal_map[c] @ theta
        n_p = layout.prism_fixed[c] + layout.prism_map[c] @ theta
        if n[1:-1].max() >= n_p:
            return f"Film {n[1:-1].max():.4f}, prism {n_p:.4f} at {context.wavelength_um * 1000:g} nm."
    return ""


def _quality(orders: IntArray, fit: SiteFit) -> FitQuality:
    used = int((orders >= 0).sum())
    dof = max(fit.dof, 0)
    p = p_value(fit.chi2, dof) if dof > 0 else None
    return FitQuality(fit.chi2, dof, p, used, orders.size - used)


def _misfit(quality: FitQuality, flags: list[Flag]) -> float:
    """Factor on the random part of u where the residuals exceed what was stated (Birge ratio)."""
    if quality.p_value is None or quality.p_value >= POOR:
        return 1.0
    factor = float(np.sqrt(quality.chi2 / quality.dof))
    flags.append(flag("poor_fit", f"chi-squared {quality.chi2:.1f} for {quality.dof}, factor {factor:.2f}."))
    return factor


def _rival(problem: SiteProblem, rival: Assignment, settled: Settled, shared: Shared) -> Rival:
    """A rival's own numbers, with the stated priors."""
    fit = fit_site(problem, rival.orders, rival.theta, Prior.of(problem.layout))
    rank = examine(problem.layout, fit.jacobian, Prior.of(problem.layout))
    which = np.flatnonzero(problem.layout.fitted & ~rank.touched)
    spans = intervals(problem, rival.orders, fit, which)
    alone = Shared(shared.parameters, shared.best, np.diag(1 / shared.prior_u**2), shared.prior_u, {}, {}, {})
    found = numbers(problem, fit, alone, spans, rank.touched, 1.0)
    words = ", ".join(
        f"{r.pol}{o}" if o >= 0 else f"{r.pol} {r.value:g} stray"
        for r, o in zip(problem.readings, rival.orders, strict=True)
    )
    fitted = tuple(e for e in found.estimates if e.origin != "known")
    return Rival(rival.price - settled.price, rival.probability, words, fitted)


def _readings(problem: SiteProblem, settled: Settled, fit: SiteFit) -> tuple[FittedReading, ...]:
    assert settled.orders is not None
    out = []
    for i, reading in enumerate(problem.readings):
        order = int(settled.orders[i])
        used = order >= 0
        predicted = float(fit.predicted[i]) if used else None
        out.append(
            FittedReading(
                reading, order if used else reading.order, predicted, float(problem.data.u[0, i]), used,
                settled.remarks.get(i),
            )
        )  # fmt: skip
    return tuple(out)


def _site(
    problem: SiteProblem,
    status: Status,
    flags: Sequence[Flag],
    notes: Sequence[Flag],
    readings: tuple[FittedReading, ...],
    found: SiteNumbers | None = None,
    quality: FitQuality | None = None,
    rivals: tuple[Rival, ...] = (),
) -> SiteResult:
    first = problem.readings[0]
    return SiteResult(
        lot=first.lot, wafer=first.wafer, site=first.site, x_mm=first.x_mm, y_mm=first.y_mm,
        measured_at=first.measured_at, status=status, flags=tuple(flags), notes=tuple(notes),
        estimates=found.estimates if found else (), correlation=found.correlation if found else np.zeros((0, 0)),
        fit=quality, readings=readings, rivals=rivals, budget=found.budget if found else (),
    )  # fmt: skip
