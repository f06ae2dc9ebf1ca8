"""The corrected model on a grid of silicon wires computed by another full-vector program (reference/channel.json)."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from layerlot.fitting.catalogue import find
from layerlot.solver.correction import corrected_modes
from layerlot.solver.cross_section import cross_section
from layerlot.solver.guide import eim_modes
from layerlot.solver.map_build import MapGoal, build_map
from layerlot.solver.map_window import index_points_um, map_window

ENTRY = next(
    c
    for c in json.loads((Path(__file__).parents[1] / "reference" / "channel.json").read_text())["checks"]
    if c["id"] == "geom-grid"
)
GRID = ENTRY["expected"]
LAYERS = ("fused silica", "silicon (Salzberg and Villa 1957)", "fused silica")


def indices(wavelength_um: np.ndarray) -> np.ndarray:
    """(K, 3) as the formulas themselves state them, without conversion between media: so the entry does."""
    return np.stack([find(name).formula.index(wavelength_um) for name in LAYERS], axis=-1)


@pytest.mark.parametrize("tm", [False, True], ids=["TE", "TM"])
def test_grid(tm):
    """25 wires of 440 to 520 by 210 to 230 nm: effective index to 1e-6 and the map's own error, group index to the
    entry's 2e-4 and the map's error; the plain method is off by 0.035 and more."""
    low, high = (0.43, 0.205, 0, 90, 0, 1.53), (0.53, 0.235, 0, 90, 0, 1.57)
    waves = index_points_um(1.53, 1.57)
    window = map_window(low, high, indices(waves), [0.22], 1, True, tm)
    a_map = build_map(window, MapGoal(index=2e-6, group=1e-4), workers=1)
    width, height = (np.array([g[key] for g in GRID]) for key in ("w_um", "h_um"))
    n = indices(np.array([1.55]))[0]
    slopes = (indices(np.array([1.5501])) - indices(np.array([1.5499])))[0] / 2e-4
    wires = cross_section(n, height[:, None], 1, width, 1.55)
    modes = corrected_modes(wires, a_map)
    pol = "TM" if tm else "TE"
    index, group = (np.array([g[f"{key}_{pol}"] for g in GRID]) for key in ("neff", "ng"))
    # 5e-8 is half a unit of the entry's last digit, 1e-6 its tolerance.
    assert np.abs(modes.N - index).max() < 1e-6 + 3 * a_map.error
    assert a_map.error < 4e-6
    assert np.abs(modes.group_index(1.55, slopes) - group).max() < 2e-4 + 3 * a_map.group_error
    assert a_map.group_error < 2e-4
    assert np.abs(eim_modes(wires, tm).N - index).min() > 0.035
