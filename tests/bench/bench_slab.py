"""100,000 three-layer modes at once against a loop of scipy's brentq on the textbook dispersion relation.

Run by hand: `python tests/bench/bench_slab.py`. Both sides get the same random films (TE and TM, every order possible)
and must agree to 1e-12. The loop is written as one would write it for speed: math module, bracket known, one call a
mode, and it is asked for the accuracy that the batch gives; a second one with numpy functions on scalars, as often
seen, is timed for information.
"""

from __future__ import annotations

import math
import sys
import time
from pathlib import Path

import numpy as np
from scipy.optimize import brentq

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from layerlot.solver.slab import mode_count, mode_index

from tests.bench.machine import best_seconds, describe

MODES = 100_000
TARGET = 150.0


def draw(seed: int = 1) -> tuple[np.ndarray, ...]:
    """Random guided modes: n (B, 3), t (B, 1) and wavelength (B) in µm, TM (B), order (B)."""
    rng = np.random.default_rng(seed)
    size = 2 * MODES
    n = np.column_stack([rng.uniform(1.4, 1.8, size), np.zeros(size), rng.uniform(1.0, 1.4, size)])
    n[:, 1] = n[:, 0] + 10 ** rng.uniform(-2.5, 0.2, size)
    t, wavelength = rng.uniform(0.2, 4.0, (size, 1)), rng.uniform(0.4, 1.7, size)
    tm = rng.random(size) < 0.5
    count = mode_count(n, t, wavelength, tm)
    keep = np.flatnonzero(count > 0)[:MODES]
    order = np.floor(rng.random(keep.size) * count[keep]).astype(int)
    return n[keep], t[keep], wavelength[keep], tm[keep], order


def relation(maths):  # type: ignore[no-untyped-def]
    """The dispersion relation of a film, kappa t - phase at either face - m pi, in the functions of `maths`."""
    sqrt, atan = maths.sqrt, maths.atan if maths is math else maths.arctan

    def miss(N, ns, nf, nc, kt, rs, rc, mpi):  # type: ignore[no-untyped-def]
        kappa = sqrt(nf * nf - N * N)
        gamma_s, gamma_c = sqrt(N * N - ns * ns), sqrt(N * N - nc * nc)
        return kt * kappa - atan(rs * gamma_s / kappa) - atan(rc * gamma_c / kappa) - mpi

    return miss


def loop(maths, n, t, wavelength, tm, order):  # type: ignore[no-untyped-def]
    miss = relation(maths)
    out = []
    rows = zip(n.tolist(), t[:, 0].tolist(), wavelength.tolist(), tm.tolist(), order.tolist(), strict=True)
    for (ns, nf, nc), thick, lam, is_tm, m in rows:
        rs, rc = ((nf / ns) ** 2, (nf / nc) ** 2) if is_tm else (1.0, 1.0)
        args = (ns, nf, nc, 2 * math.pi * thick / lam, rs, rc, m * math.pi)
        low, high = max(ns, nc), nf * (1 - 1e-15)
        out.append(brentq(miss, low, high, args=args, xtol=1e-15, rtol=8.9e-16))
    return np.array(out)


def main() -> int:
    case = draw()
    print(describe())
    print(f"{MODES} modes of random three-layer films, TE and TM, orders 0 to {case[-1].max()}\n")
    n, t, wavelength, tm, order = case
    mode_index(n[:100], t[:100], wavelength[:100], order[:100], tm[:100])
    fasts, slows, found = [], [], []
    for part in np.array_split(np.arange(MODES), 5):
        # Taken in turns, so that whatever else the machine does falls on both.
        fasts.append(best_seconds(lambda: mode_index(n, t, wavelength, order, tm), 5))
        start = time.perf_counter()
        found.append(loop(math, *(x[part] for x in case)))
        slows.append((time.perf_counter() - start) * 5)
    fast, slow, exact = float(np.median(fasts)), float(np.median(slows)), np.concatenate(found)
    few = tuple(x[:10_000] for x in case)
    start = time.perf_counter()
    loop(np, *few)
    scalar = (time.perf_counter() - start) * MODES / few[0].shape[0]
    worst = float(np.abs(mode_index(n, t, wavelength, order, tm) - exact).max())
    print("| way | µs a mode | times slower |\n|---|---|---|")
    for name, seconds in (
        ("layerlot, all at once", fast),
        ("brentq, math module", slow),
        ("brentq, numpy scalars", scalar),
    ):
        print(f"| {name} | {seconds / MODES * 1e6:.3f} | {seconds / fast:.0f} |")
    print(f"\nlargest difference {worst:.1e} (limit 1e-12); ratio {slow / fast:.0f} (target {TARGET:.0f})")
    return 0 if worst <= 1e-12 and slow / fast >= TARGET else 1


if __name__ == "__main__":
    raise SystemExit(main())
