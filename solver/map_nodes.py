"""Vector solves at the nodes of a correction map, spread over processes.

The result does not depend on how many processes share the work: every node is solved on the same mesh, from the same
start, by one thread.
"""

from __future__ import annotations

import os
import signal
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from contextlib import contextmanager
from dataclasses import dataclass, fields
from functools import partial
from multiprocessing import get_context
from typing import Any

import numpy as np

from .cross_section import CrossSection, GuideModes
from .layers import Array
from .vector_mesh import GuideMesh

Progress = Callable[[str, int, int], None]
# Importing the numerical libraries takes a process a second or two: fewer nodes are solved at home.
_WORTH_A_PROCESS = 8
_THREAD_VARIABLES = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")


@dataclass(frozen=True)
class NodeJob:
    """One guide to solve (empty batch shape), the effective index expected, and the radius of its bend, if any."""

    section: CrossSection
    tm: bool
    order: int
    near: float
    radius_um: float | None = None


def usable_cores() -> int:
    """Cores that this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


class NodePool:
    """Solves batches of jobs; as a context manager it keeps its processes from batch to batch.

    workers: processes, by default one a core; with one, and for small batches before any process has started, work is
    done at home. progress(what, done, all) is called as nodes are finished.
    """

    def __init__(self, workers: int | None = None, progress: Progress | None = None) -> None:
        self.progress = progress
        self.workers = workers or usable_cores()
        self._pool: ProcessPoolExecutor | None = None

    def __enter__(self) -> NodePool:
        return self

    def __exit__(self, *_: object) -> None:
        if self._pool is not None:
            self._pool.shutdown(cancel_futures=True)
            self._pool = None

    def solve(self, jobs: Sequence[NodeJob], mesh: GuideMesh) -> list[GuideModes | None]:
        """Modes of all jobs on one mesh, in their order; None where no such mode was found."""
        out: list[GuideModes | None] = []
        for mode in self._results(jobs, mesh):
            out.append(mode)
            if self.progress is not None:
                self.progress("vector reference", len(out), len(jobs))
        return out

    def _results(self, jobs: Sequence[NodeJob], mesh: GuideMesh) -> Iterator[GuideModes | None]:
        if self.workers < 2 or (self._pool is None and len(jobs) < _WORTH_A_PROCESS):
            return (_solve_one(job, mesh) for job in jobs)
        with _one_thread_each():
            if self._pool is None:
                self._pool = ProcessPoolExecutor(self.workers, get_context("spawn"), initializer=_deaf)
            # Processes start as work is handed over, so the environment must hold until then.
            return self._pool.map(partial(_solve_one, mesh=mesh), jobs)


def _deaf() -> None:
    """An interrupt is for the process that hands out the work, which then stops the others."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)


def _solve_one(job: NodeJob, mesh: GuideMesh) -> GuideModes | None:
    from .vector_modes import NoSuchModeError, vector_mode

    try:
        mode = vector_mode(job.section, job.tm, job.order, near=job.near, mesh=mesh, radius_um=job.radius_um)
    except NoSuchModeError:
        return None
    return mode.modes


@contextmanager
def _one_thread_each() -> Iterator[None]:
    """Processes started here find their libraries told to use one thread."""
    before: dict[str, Any] = {name: os.environ.get(name) for name in _THREAD_VARIABLES}
    os.environ.update(dict.fromkeys(_THREAD_VARIABLES, "1"))
    try:
        yield
    finally:
        for name, value in before.items():
            if value is None:
                os.environ.pop(name, None)
            else:
                os.environ[name] = value


def single(section: CrossSection, row: int) -> CrossSection:
    """One guide of a flat batch, with empty batch shape."""
    etch = None if section.etch_um is None else np.asarray(section.etch_um[row])
    parts: tuple[Array, ...] = tuple(
        np.asarray(x[row]) for x in (section.width_um, section.wavelength_um, section.sidewall_deg)
    )
    return CrossSection(section.n[row], section.t_um[row], section.core, parts[0], parts[1], etch, parts[2])


def stacked(modes: Sequence[GuideModes]) -> GuideModes:
    """One batch of single modes."""
    names = [f.name for f in fields(GuideModes)]
    return GuideModes(**{name: np.stack([getattr(m, name) for m in modes]) for name in names})


def taken(modes: GuideModes, rows: list[int]) -> GuideModes:
    """Some of a flat batch."""
    return GuideModes(**{f.name: getattr(modes, f.name)[rows] for f in fields(GuideModes)})
