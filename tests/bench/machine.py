"""The lines every benchmark prints first: machine and versions. A claim of speed is a table, with these above it."""

from __future__ import annotations

import os
import platform
import time
from collections.abc import Callable
from importlib.metadata import version


def describe() -> str:
    names = ("numpy", "scipy", "scikit-fem", "lmfit", "openpyxl", "layerlot")
    versions = ", ".join(f"{n} {version(n)}" for n in names)
    return f"{_processor()}, {os.cpu_count()} cores\nPython {platform.python_version()}, {versions}"


def _processor() -> str:
    try:
        with open("/proc/cpuinfo", encoding="ascii", errors="replace") as lines:
            return next(line.split(":", 1)[1].strip() for line in lines if line.startswith("model name"))
    except (OSError, StopIteration):
        return platform.processor() or platform.machine()


def best_seconds(task: Callable[[], object], repeats: int) -> float:
    """Shortest of several runs: what the task takes when nothing else disturbs it."""
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        task()
        times.append(time.perf_counter() - start)
    return min(times)
