"""Five windows in which the corrected model is held to the vector reference, and fresh points in them.

Geometries are the everyday ones of the trade (common practice, no source); indices from the catalogue.
"""

from __future__ import annotations

from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from multiprocessing import get_context

import numpy as np
from layerlot.fitting.catalogue import find
from layerlot.solver.cross_section import CrossSection
from layerlot.solver.map_nodes import single
from layerlot.solver.map_window import MapWindow, index_points_um, map_window
from layerlot.solver.vector_modes import PRECISE, vector_mode

OXIDE, SILICON, NITRIDE = "fused silica", "silicon (Salzberg and Villa 1957)", "silicon nitride (Luke 2015)"


@dataclass(frozen=True)
class Case:
    """Layers as catalogue names or numbers; low and high in the axes' order; etched through where `etch` is None."""

    layers: tuple[str | float, ...]
    low: tuple[float, ...]
    high: tuple[float, ...]
    full_etch: bool
    tm: bool

    def window(self) -> MapWindow:
        waves = index_points_um(self.low[5], self.high[5])
        index = np.array([[_index(x, w) for x in self.layers] for w in waves])
        return map_window(self.low, self.high, index, [0.3], 1, self.full_etch, self.tm)


def _index(layer: str | float, wavelength_um: float) -> float:
    if not isinstance(layer, str):
        return layer
    material = find(layer)
    assert material is not None
    return float(material.index(wavelength_um, 22.0))


# Width, thickness, etch depth, sidewall, core index offset (1 % of the index), wavelength; µm and degrees.
CASES = {
    "silicon strip": Case(
        (OXIDE, SILICON, OXIDE), (0.38, 0.20, 0, 90, -0.035, 1.5), (0.62, 0.24, 0, 90, 0.035, 1.6), True, False
    ),
    "silicon rib": Case(
        (OXIDE, SILICON, OXIDE), (0.40, 0.21, 0.06, 82, -0.035, 1.5), (0.65, 0.23, 0.16, 90, 0.035, 1.6), False, False
    ),
    "nitride strip": Case(
        (OXIDE, NITRIDE, OXIDE), (0.7, 0.30, 0, 90, -0.02, 1.5), (1.4, 0.45, 0, 90, 0.02, 1.6), True, False
    ),
    "oxynitride buried": Case(
        (OXIDE, 1.51, OXIDE), (1.6, 1.6, 0, 90, -0.015, 1.5), (2.6, 2.4, 0, 90, 0.015, 1.6), True, False
    ),
    "silicon strip, quasi-TM": Case(
        (OXIDE, SILICON, OXIDE), (0.38, 0.20, 0, 90, -0.035, 1.5), (0.62, 0.24, 0, 90, 0.035, 1.6), True, True
    ),
}


def fresh_points(window: MapWindow, count: int, seed: int) -> tuple[CrossSection, np.ndarray]:
    """Guides drawn evenly over the window, and the slopes of their indices."""
    xi = np.random.default_rng(seed).uniform(-1, 1, (count, len(window.active)))
    return window.section_at(window.from_unit(xi))


def _solve(job: tuple[CrossSection, bool]) -> tuple[float, float, float, float, np.ndarray]:
    section, tm = job
    mode = vector_mode(section, tm, rule=PRECISE).modes
    return (
        float(mode.N), float(mode.dwidth_per_um), float(mode.dt_per_um[0]), float(mode.dwavelength_per_um), mode.dn
    )  # fmt: skip


@dataclass(frozen=True)
class Reference:
    N: np.ndarray
    dwidth_per_um: np.ndarray
    dthickness_per_um: np.ndarray
    group: np.ndarray


def solve_points(section: CrossSection, slopes: np.ndarray, tm: bool, workers: int) -> Reference:
    """The precise reference at every point, each on a mesh of its own, with two digits more than the map's."""
    jobs = [(single(section, k), tm) for k in range(section.width_um.size)]
    if workers > 1:
        with ProcessPoolExecutor(workers, get_context("spawn")) as pool:
            found = list(pool.map(_solve, jobs, chunksize=4))
    else:
        found = [_solve(job) for job in jobs]
    N, width, thickness, wave = (np.array([f[k] for f in found]) for k in range(4))
    along = wave + (np.array([f[4] for f in found]) * slopes).sum(axis=1)
    return Reference(N, width, thickness, N - section.wavelength_um * along)
