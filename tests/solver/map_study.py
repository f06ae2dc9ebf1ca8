"""The corrected model against the vector reference at fresh points of five windows: prints a table.

python -m tests.solver.map_study [points] [window ...]       200 points in every window unless told otherwise
"""

from __future__ import annotations

import sys
import time
from dataclasses import dataclass

import numpy as np
from layerlot.solver.correction import CorrectionMap, corrected_modes
from layerlot.solver.guide import eim_modes
from layerlot.solver.map_build import build_map

from tests.solver.map_windows import CASES, fresh_points, solve_points


@dataclass(frozen=True)
class Study:
    """Errors at the points: of the corrected model, of plain EIM, effective and group index; slopes as shares."""

    a_map: CorrectionMap
    seconds: float
    index: np.ndarray
    group: np.ndarray
    plain_index: np.ndarray
    plain_group: np.ndarray
    width_slope: np.ndarray
    thickness_slope: np.ndarray


def study(name: str, count: int, seed: int, workers: int = 2) -> Study:
    case = CASES[name]
    window = case.window()
    start = time.perf_counter()
    a_map = build_map(window, workers=workers)
    seconds = time.perf_counter() - start
    section, slopes = fresh_points(window, count, seed)
    reference = solve_points(section, slopes, case.tm, workers)
    ours, plain = corrected_modes(section, a_map), eim_modes(section, case.tm)
    groups = [m.group_index(section.wavelength_um, slopes) - reference.group for m in (ours, plain)]
    return Study(
        a_map, seconds, ours.N - reference.N, groups[0], plain.N - reference.N, groups[1],
        ours.dwidth_per_um / reference.dwidth_per_um - 1, ours.dt_per_um[:, 0] / reference.dthickness_per_um - 1,
    )  # fmt: skip


def main() -> None:
    count = int(sys.argv[1]) if len(sys.argv) > 1 else 200
    for name in sys.argv[2:] or CASES:
        s = study(name, count, seed=20261)
        m = s.a_map
        print(f"{name}: {len(m.window.active)} axes, degree {m.degree}, nodes {m.nodes}, {s.seconds:.1f} s")
        for what, ours, plain, stated in (
            ("effective index", s.index, s.plain_index, m.error),
            ("group index", s.group, s.plain_group, m.group_error),
        ):
            a, b = np.abs(ours), np.abs(plain)
            print(
                f"  {what}: 95 % {np.quantile(a, 0.95):.1e}, largest {a.max():.1e} = {a.max() / stated:.2f} of the "
                f"stated {stated:.1e}; plain EIM 95 % {np.quantile(b, 0.95):.1e}, largest {b.max():.1e}"
            )
        slopes = [np.abs(x).max() for x in (s.width_slope, s.thickness_slope)]
        print(f"  slopes: width {slopes[0]:.1e}, thickness {slopes[1]:.1e} off at most", flush=True)


if __name__ == "__main__":
    main()
