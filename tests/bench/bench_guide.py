"""Guides: a correction map built, and the corrected model against one vector solve.

Run by hand: `OMP_NUM_THREADS=1 python tests/bench/bench_guide.py`. The map is that of a silicon strip over width,
thickness, core index and wavelength. A vector solve is what the nodes of the map cost, derivatives included; it is
timed in this process. Exits 1 if a target is missed.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from layerlot.solver.correction import corrected_modes
from layerlot.solver.guide import eim_modes
from layerlot.solver.map_build import build_map
from layerlot.solver.map_nodes import single
from layerlot.solver.vector_modes import vector_mode

from tests.bench.machine import best_seconds, describe
from tests.solver.map_windows import CASES, fresh_points

BUILD_SECONDS, RATIO, SINGLE_MS = 60.0, 2000.0, 1.0
MANY = 20_000


def main() -> None:
    print(describe())
    window = CASES["silicon strip"].window()
    start = time.perf_counter()
    a_map = build_map(window, workers=2)
    build = time.perf_counter() - start
    print(f"map, 4 axes, 2 processes: {build:.1f} s for nodes (solved, held back, without mode) {a_map.nodes}, "
          f"degree {a_map.degree}, stated error {a_map.error:.1e} and {a_map.group_error:.1e}")  # fmt: skip

    section, _ = fresh_points(window, MANY, seed=1)
    one = single(section, 0)
    near = vector_mode(one, False)
    solve = best_seconds(lambda: vector_mode(one, False, near=near.N.real - 1e-3, mesh=near.mesh), 5)
    corrected = best_seconds(lambda: corrected_modes(section, a_map), 3) / MANY
    plain = best_seconds(lambda: eim_modes(section, False), 3) / MANY
    alone = best_seconds(lambda: corrected_modes(one, a_map), 300)
    alone_plain = best_seconds(lambda: eim_modes(one, False), 300)
    print(f"vector solve, {near.unknowns} unknowns: {solve * 1e3:.0f} ms")
    print(f"corrected model, {MANY} at once: {corrected * 1e6:.1f} µs, {solve / corrected:.0f} times faster "
          f"(plain EIM {plain * 1e6:.1f} µs)")  # fmt: skip
    print(f"corrected model, one at a time: {alone * 1e3:.2f} ms (plain EIM {alone_plain * 1e3:.2f} ms)")
    if build > BUILD_SECONDS or solve / corrected < RATIO or alone * 1e3 > SINGLE_MS:
        sys.exit("a target was missed")


if __name__ == "__main__":
    main()
