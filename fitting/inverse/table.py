"""Front door of the inverse step: the readings of one table in, a `FitResult` out.

settle        each site alone: orders, strays, a first answer                      settle.py
solve_shared  prism, angles and constants from all good sites together             joint.py
fit_site      each site again by lmfit, the rest of the table as its prior         final.py
intervals     95 % from the likelihood                                             intervals.py
examine       what the readings cannot say                                         identify.py
group_means   wafers and lots                                                      means.py
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from functools import partial
from importlib.metadata import version
from typing import TypeVar

import numpy as np

from ..flags import flag
from ..records import Array, Estimate, FitResult, Flag, Reading
from ..stack import Stack, conventions
from .answer import SiteAnswer, answer, unanswered
from .descent import Prior
from .joint import Shared, site_prior, solve_shared
from .means import group_means
from .problem import SiteProblem, build_problems
from .settle import Settled, settle_all

A = TypeVar("A")
B = TypeVar("B")

Progress = Callable[[int, int], None]
_CHUNK = 32
_LEAKY = "A half-space has a higher index than the film: the modes leak into it, and the real part of N is fitted."
# A shared quantity this many of its own standard uncertainties from its stated value is not chance.
FAR_FROM_PRIOR = 3.5


def fit_table(
    stack: Stack,
    readings: Sequence[Reading],
    *,
    workers: int = 1,
    progress: Progress | None = None,
    should_stop: Callable[[], bool] | None = None,
) -> FitResult:
    """Fit every site of a table. Raises InputRefused where readings and stack do not go together.

    workers: processes; progress(done, total) and should_stop() are asked between chunks of sites. A stop keeps what
    is done.
    """
    problems = build_problems(stack, readings)
    total = 2 * len(problems)
    stop = should_stop or (lambda: False)
    with _Pool(workers if len(problems) > 2 * _CHUNK else 1) as pool:
        settled: list[Settled] = []
        for part in pool.map(settle_all, list(_chunks(problems))):
            settled += part
            _tell(progress, len(settled), total)
            if stop():
                break
        done = problems[: len(settled)]
        shared = _joint(done, settled)
        jobs = [
            (p, s, site_prior(p, shared, i), shared.site_theta.get(i))
            for i, (p, s) in enumerate(zip(done, settled, strict=True))
        ]
        answers: list[SiteAnswer] = []
        for some in pool.map(partial(_answer_chunk, shared), list(_chunks(jobs))):
            answers += some
            _tell(progress, len(problems) + len(answers), total)
            if stop():
                break
    answers += [unanswered(p, [flag("interrupted")]) for p in problems[len(answers) :]]
    notes = tuple(_LEAKY for p in problems[:1] if p.layout.leaks())
    return _result(stack, answers, notes, shared, interrupted=len(answers) > len(jobs) or _any_interrupted(answers))


def _any_interrupted(answers: Sequence[SiteAnswer]) -> bool:
    return any(f.code == "interrupted" for a in answers for f in a.result.flags)


def _tell(progress: Progress | None, done: int, total: int) -> None:
    if progress is not None:
        progress(done, total)


def _chunks(items: Sequence[A]) -> Iterator[Sequence[A]]:
    for i in range(0, len(items), _CHUNK):
        yield items[i : i + _CHUNK]


class _Pool:
    """Maps lazily in this process, or over worker processes in order."""

    def __init__(self, workers: int) -> None:
        self.executor = ProcessPoolExecutor(workers, initializer=_ignore_interrupt) if workers > 1 else None

    def __enter__(self) -> _Pool:
        return self

    def __exit__(self, *_: object) -> None:
        if self.executor is not None:
            self.executor.shutdown(wait=True, cancel_futures=True)

    def map(self, function: Callable[[A], B], items: Sequence[A]) -> Iterator[B]:
        return map(function, items) if self.executor is None else self.executor.map(function, items)


def _ignore_interrupt() -> None:
    """Ctrl-C reaches the whole process group; only the parent decides when to stop."""
    import signal

    signal.signal(signal.SIGINT, signal.SIG_IGN)


Job = tuple[SiteProblem, Settled, Prior, Array | None]


def _answer_chunk(shared: Shared, jobs: Sequence[Job]) -> list[SiteAnswer]:
    return [answer(p, s, prior, shared, start) for p, s, prior, start in jobs]


def _joint(problems: Sequence[SiteProblem], settled: Sequence[Settled]) -> Shared:
    good = [i for i, s in enumerate(settled) if s.good and _determined(problems[i], s)]
    orders = [s.orders if s.orders is not None else np.empty(0, dtype=int) for s in settled]
    theta = [s.theta if s.theta is not None else np.empty(0) for s in settled]
    return solve_shared(problems, orders, theta, good)


def _determined(problem: SiteProblem, s: Settled) -> bool:
    """A site joins the shared step only if it can be checked and stays off its windows."""
    assert s.orders is not None and s.theta is not None
    low, high = problem.layout.bounds()
    fitted = problem.layout.fitted
    inside = ((s.theta > low) & (s.theta < high))[fitted].all()
    return bool(inside) and int((s.orders >= 0).sum()) >= int(fitted.sum())


def _result(
    stack: Stack, answers: Sequence[SiteAnswer], notes: tuple[str, ...], shared: Shared, *, interrupted: bool
) -> FitResult:
    estimates = _shared_estimates(shared)
    sites = tuple(a.result for a in answers)
    means = group_means(sites, [a.numbers for a in answers], shared.covariance, [a.trusted for a in answers])
    return FitResult(
        title=stack.title,
        version=version("layerlot"),
        inputs=(),
        sites=sites,
        means=means,
        shared=estimates,
        shared_flags=_pulled(shared, estimates),
        conventions=(*conventions(stack), *notes),
        interrupted=interrupted,
    )


def _shared_estimates(shared: Shared) -> tuple[Estimate, ...]:
    u = np.sqrt(np.diag(shared.covariance)) if shared.best.size else np.empty(0)
    return tuple(
        Estimate(
            layer=p.layer, quantity=p.quantity, value=float(v), u=float(s), u_random=0.0, u_shared=float(s),
            low95=float(v - 1.96 * s), high95=float(v + 1.96 * s), unit=p.unit,
            origin="known" if s > 0.9 * p.prior_u else "fitted", axis=p.axis, wavelength_nm=p.wavelength_nm,
            prior=(p.prior_mean, p.prior_u),
        )
        for p, v, s in zip(shared.parameters, shared.best, u, strict=True)
    )  # fmt: skip


def _pulled(shared: Shared, estimates: Sequence[Estimate]) -> tuple[Flag, ...]:
    return tuple(
        flag("shared_out_of_prior", f"{p.label}: stated {p.prior_mean:g} with u {p.prior_u:g}, came out {e.value:.6g}.")
        for p, e in zip(shared.parameters, estimates, strict=True)
        if abs(e.value - p.prior_mean) > FAR_FROM_PRIOR * p.prior_u
    )
