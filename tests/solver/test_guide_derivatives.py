"""Derivatives of the effective index method against differences of its own index, for every kind of guide and rule."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from layerlot.solver.cross_section import cross_section
from layerlot.solver.guide import SideRule, eim_modes

SILICON = {"n": [1.444, 3.476, 1.3], "t_um": [0.22], "core": 1, "width_um": 0.5, "wavelength_um": 1.55}
GUIDES: dict[str, dict[str, Any]] = {
    "strip": SILICON,
    "strip above silicon": {**SILICON, "n": [3.6, 1.444, 3.4, 1.3], "t_um": [2.0, 0.22], "core": 2},
    "rib": {**SILICON, "etch_um": 0.07},
    "rib whose side guides nothing": {**SILICON, "etch_um": 0.19},
    "covered rib": {**SILICON, "n": [1.444, 3.476, 1.9, 1.0], "t_um": [0.22, 0.3], "etch_um": 0.07},
    "covered strip": {**SILICON, "n": [1.444, 1.98, 1.5, 1.0], "t_um": [0.4, 0.6], "width_um": 1.0},
    "loaded": {**SILICON, "n": [1.444, 2.0, 1.5, 1.0], "t_um": [0.5, 0.3], "core": 2, "width_um": 1.0},
    "wide foot": {**SILICON, "etch_um": 0.12, "sidewall_deg": 84.0},
    "undercut": {**SILICON, "etch_um": 0.12, "sidewall_deg": 97.0},
    "covered, wide foot": {
        **SILICON, "n": [1.444, 1.98, 1.5, 1.0], "t_um": [0.4, 0.5], "width_um": 1.0, "sidewall_deg": 85.0,
    },
    "covered, undercut": {
        **SILICON, "n": [1.444, 1.98, 1.45, 1.0], "t_um": [0.4, 0.5], "width_um": 1.0, "sidewall_deg": 95.0,
    },
}  # fmt: skip
# Steps at which differences of fourth order are at their best: rounding 1e-16 over the step, curvature to the fourth.
STEPS = {"width_um": 2e-4, "t_um": 1e-4, "n": 2e-4, "wavelength_um": 2e-4, "etch_um": 1e-4, "sidewall_deg": 1e-2}


def difference(guide: dict[str, Any], key: str, index: int | None, *args: Any) -> float:
    """dN/d(key) by central differences of fourth order; all four guides in one batch."""
    moves = np.array([-2.0, -1.0, 1.0, 2.0]) * STEPS[key]
    base = np.asarray(guide[key], dtype=float)
    values = np.repeat(base[None], 4, axis=0)
    if index is None:
        values = values + moves
    else:
        values[:, index] += moves
    N = eim_modes(cross_section(**{**guide, key: values}), *args).N
    return float((8 * (N[2] - N[1]) - (N[3] - N[0])) / (12 * STEPS[key]))


@pytest.mark.parametrize("rule", SideRule)
@pytest.mark.parametrize("tm", [False, True], ids=["quasi-TE", "quasi-TM"])
@pytest.mark.parametrize("name", GUIDES)
def test_derivatives_equal_differences(name, tm, rule):
    """Every derivative equals a difference of fourth order of the index."""
    guide = GUIDES[name]
    args = (tm, 0, None, rule)
    g = eim_modes(cross_section(**guide), *args)
    assert np.isfinite(g.N)
    checks = [(g.dwidth_per_um, "width_um", None), (g.dwavelength_per_um, "wavelength_um", None)]
    checks += [(x, "n", j) for j, x in enumerate(g.dn)]
    checks += [(x, "t_um", j) for j, x in enumerate(g.dt_per_um)]
    if "etch_um" in guide:
        checks.append((g.detch_per_um, "etch_um", None))
    if "sidewall_deg" in guide:
        checks.append((g.dsidewall_per_deg, "sidewall_deg", None))
    for found, key, index in checks:
        # rounding over the step is 1e-11, curvature leaves 1e-9 where a half-space is nearly reached; the weighted rule
        # states 1e-8 for its own slopes
        limit = (1e-7 if rule is SideRule.WEIGHTED else 1e-8) * max(abs(float(found)), 0.01)
        assert abs(difference(guide, key, index, *args) - float(found)) <= limit, (key, index)


def test_comparison_sees_a_wrong_slope():
    """A slope off by one part in a million fails the comparison."""
    guide = GUIDES["strip"]
    slope = float(eim_modes(cross_section(**guide), False).dwidth_per_um)
    assert abs(difference(guide, "width_um", None, False) - slope * (1 + 1e-6)) > 1e-8 * slope


@pytest.mark.parametrize("tm", [False, True], ids=["quasi-TE", "quasi-TM"])
def test_higher_lateral_orders(tm):
    """The modes of order 1 and 2 of a wide guide have right derivatives as well."""
    guide = {**SILICON, "width_um": 1.6}
    for order in (1, 2):
        g = eim_modes(cross_section(**guide), tm, order)
        for found, key, index in (
            (g.dwidth_per_um, "width_um", None), (g.dn[1], "n", 1), (g.dt_per_um[0], "t_um", 0),
            (g.dwavelength_per_um, "wavelength_um", None),
        ):  # fmt: skip
            assert difference(guide, key, index, tm, order) == pytest.approx(float(found), rel=1e-8)


def test_group_index_needs_no_further_solve():
    """The group index from the derivatives equals a difference over wavelength along the dispersion of the layers."""
    slope = np.array([-0.012, -0.08, 0.0])  # invented dispersion per µm
    n0 = np.array(SILICON["n"])
    s = cross_section(**SILICON)
    found = float(eim_modes(s, False).group_index(1.55, slope))
    lam = 1.55 + np.array([-2.0, -1.0, 1.0, 2.0]) * 2e-4
    moved = cross_section(n0 + (lam - 1.55)[:, None] * slope, [0.22], 1, 0.5, lam)
    N = eim_modes(moved, False).N
    along = (8 * (N[2] - N[1]) - (N[3] - N[0])) / (12 * 2e-4)
    assert found == pytest.approx(float(eim_modes(s, False).N) - 1.55 * along, abs=1e-9)


@pytest.mark.parametrize("tm", [False, True], ids=["quasi-TE", "quasi-TM"])
def test_slope_by_the_angle_at_vertical_walls(tm):
    """At 90 degrees the slope lies in the middle of those on either side, where the model has a kink, and vanishes in a
    guide that is the same upside down."""
    even = eim_modes(cross_section(**{**SILICON, "n": [1.444, 3.476, 1.444]}), tm)
    assert abs(float(even.dsidewall_per_deg)) <= 1e-12
    guide = {**SILICON, "n": [1.444, 3.476, 1.0]}
    g = eim_modes(cross_section(**guide, sidewall_deg=np.array([89.99, 90.0, 90.01])), tm)
    below, above = np.diff(g.N) / 0.01
    found = float(g.dsidewall_per_deg[1])
    # Simpson's rule stands for four columns: a tenth of the jump
    assert abs(found - (below + above) / 2) <= 0.1 * abs(above - below)
    assert float(eim_modes(cross_section(**guide), tm).dsidewall_per_deg) == found
