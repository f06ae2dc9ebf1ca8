"""Guides of a stack file by the corrected model, against the vector reference solved for each of them."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from layerlot.fitting.observables.guide import GuideContext, guide_parts, guide_windows
from layerlot.fitting.observables.guide_map import guide_modes, solver_window
from layerlot.fitting.stack import Stack, parse_stack
from layerlot.solver.correction import held_to_sides
from layerlot.solver.cross_section import GuideFlag, cross_section
from layerlot.solver.guide import eim_modes
from layerlot.solver.map_nodes import single
from layerlot.solver.map_window import INDEX, SIDEWALL, THICKNESS, WAVELENGTH, WIDTH
from layerlot.solver.vector_modes import PRECISE, vector_mode

# An invented nitride line: film on oxide on a silicon wafer, oxide on top.
NITRIDE = """
title = "Nitride guides (invented)"
reference_temperature_C = 22.0
[[layer]]
name = "wafer"
index = "silicon (Salzberg and Villa 1957)"
[[layer]]
name = "buffer"
index = "fused silica"
thickness_nm = 3000
[[layer]]
name = "core"
index = { material = "silicon nitride (Luke 2015)", shift = { value = 0.0, u = 0.0001 } }
thickness_nm = { value = 400, u = 0.1 }
[[layer]]
name = "cladding"
index = "fused silica"
[guide]
core = "core"
width_bias_nm = WIDTH
sidewall_deg = { value = 87.0, u = 0.04 }
etch_depth_nm = "full"
[[structure]]
name = "ring"
kind = "ring"
radius_um = 60.0
drawn_width_nm = 1000
pol = "TE"
[[structure]]
name = "arms"
kind = "mzi"
delta_length_um = 80.0
drawn_width_nm = 1010
pol = "TE"
"""


def stack_of(bias: str = "{ fit = [-20, 20], start = 0 }", text: str = NITRIDE) -> Stack:
    return parse_stack(text.replace("WIDTH", bias), "guides.toml")


def contexts(stack: Stack, *nm: float) -> list[GuideContext]:
    return [GuideContext(s, x / 1000, s.pol == "TM") for s in stack.structures for x in nm]


def test_modes_are_those_of_the_reference():
    """Ring and interferometer, made wider and thinner than drawn: right to 5e-6 and within three times
    the stated error, the bend included; slopes to 1 %."""
    stack = stack_of()
    asked = contexts(stack, 1537.0)
    parts = guide_parts(stack, asked, {"width_bias": 0.012, "thickness:core": 0.3998})
    modes = guide_modes(stack, asked, parts, workers=1)
    for k, radius in enumerate(parts.radius_um):
        bent = float(radius) if np.isfinite(radius) else None
        exact = vector_mode(single(parts.section, k), False, rule=PRECISE, radius_um=bent).modes
        miss = float(modes.N[k] - exact.N)
        assert abs(miss) < min(5e-6, 3 * modes.error[k])
        slopes = parts.dn_dwavelength[k]
        group = float(modes.group_index(parts.wavelength_um, parts.dn_dwavelength)[k])
        assert abs(group - exact.group_index(parts.wavelength_um[k], slopes)) < 3 * modes.group_error[k]
        assert float(modes.dwidth_per_um[k]) == pytest.approx(float(exact.dwidth_per_um), rel=0.01)
        assert float(modes.dt_per_um[k, 1]) == pytest.approx(float(exact.dt_per_um[1]), rel=0.01)
    assert not (modes.flags & (GuideFlag.OUTSIDE_MAP | GuideFlag.MAP_GOAL_MISSED | GuideFlag.NO_MAP)).any()


def test_window_of_a_file():
    """Fitted quantities are axes, those known better than the correction bends are not; the wavelength is rounded out,
    and one window serves both structures."""
    stack = stack_of()
    (window,) = guide_windows(stack, contexts(stack, 1530.0, 1565.0))
    box = solver_window(stack, window)
    assert box.active == [WIDTH, WAVELENGTH]
    assert box.low[WIDTH] == pytest.approx(0.98 - 0.0005, abs=1e-9)
    assert box.high[WIDTH] == pytest.approx(1.03 + 0.0005, abs=1e-9)
    assert (box.low[WAVELENGTH], box.high[WAVELENGTH]) == (1.5, 1.6)
    fixed = [(box.low[k], box.high[k]) for k in (THICKNESS, SIDEWALL, INDEX)]
    assert fixed == [pytest.approx((x, x), abs=1e-9) for x in (0.4, 87.0, 0.0)]


def test_window_keeps_to_the_materials():
    """The wavelength axis does not leave the range of a material's formula."""
    stack = stack_of("0")
    (window,) = guide_windows(stack, contexts(stack, 1370.0)[:1])
    box = solver_window(stack, window)
    # Silicon's formula begins at 1357 nm (in air), above the 1350 nm to which the axis would go.
    assert 1.357 < box.low[WAVELENGTH] < 1.36
    assert box.high[WAVELENGTH] == 1.4


def test_switch_to_the_plain_method():
    """On request the plain method answers, without an error of its own and without a map."""
    stack = stack_of()
    asked = contexts(stack, 1550.0)
    modes = guide_modes(stack, asked, guide_parts(stack, asked), plain=True)
    assert np.isfinite(modes.N).all()
    assert np.isnan(modes.error).all()


def test_window_without_the_mode_gives_no_number():
    """Where the guides of the window hold no such mode there is no number, and a flag says why."""
    text = NITRIDE.replace("value = 400", "value = 90").replace("1000", "300").replace("1010", "300")
    stack = stack_of("0", text)
    asked = [GuideContext(s, 1.55, False, order=1) for s in stack.structures[:1]]
    modes = guide_modes(stack, asked, guide_parts(stack, asked), workers=1)
    assert (modes.flags & GuideFlag.NO_MAP).all()
    assert np.isnan(modes.N).all() and np.isnan(modes.error).all()


def test_near_substrate_enters_the_error():
    """On a thin buffer the wafer's pull is part of the stated error, and flagged."""
    stack = stack_of("0", NITRIDE.replace("thickness_nm = 3000", "thickness_nm = 900"))
    asked = contexts(stack, 1550.0)[1:]
    modes = guide_modes(stack, asked, guide_parts(stack, asked), workers=1)
    assert (modes.error > 1e-4).all()
    assert (modes.flags & GuideFlag.LEAKS_DOWN).all()


# An invented silicon rib with 150 of 220 nm left beside the guide: its quasi-TM mode lies below the slab's TE one.
SHALLOW = (
    NITRIDE.replace("3000", "2000")
    .replace('{ material = "silicon nitride (Luke 2015)", shift = { value = 0.0, u = 0.0001 } }', '"silicon (Li 1980)"')
    .replace("silicon (Salzberg and Villa 1957)", "silicon (Li 1980)")
    .replace("value = 400, u = 0.1", "value = 220, u = 0.1")
    .replace('etch_depth_nm = "full"', "etch_depth_nm = 70")
    .replace("drawn_width_nm = 1000", "drawn_width_nm = 500")
    .replace("drawn_width_nm = 1010", "drawn_width_nm = 500")
)


@pytest.mark.parametrize("pol", ["TE", "TM"])
def test_shallow_rib(pol):
    """The quasi-TE mode of a shallow rib is bound and unflagged; the quasi-TM mode leaks sideways and says so."""
    stack = stack_of("0", SHALLOW.replace('pol = "TE"', f'pol = "{pol}"'))
    asked = contexts(stack, 1550.0)[1:]
    modes = guide_modes(stack, asked, guide_parts(stack, asked), workers=1)
    leaks = bool(modes.flags[0] & GuideFlag.LEAKS_SIDEWAYS)
    assert leaks == (pol == "TM")
    if pol == "TM":
        assert modes.flags[0] & GuideFlag.NO_MAP
        assert np.isnan(modes.N).all()


def test_a_mode_lost_by_the_correction_is_no_number():
    """Where the corrected index falls below what the sides carry there is no mode, though the plain method has one."""
    section = cross_section([[1.444, 1.996, 1.0]], [0.4], 1, [1.0], [1.55])
    plain = eim_modes(section, False)
    high, low = (held_to_sides(section, replace(plain, N=np.array([x])), False) for x in (1.5, 1.43))
    assert high.N[0] == 1.5 and not high.flags[0] & GuideFlag.NO_LATERAL_MODE
    assert np.isnan(low.N[0]) and np.isnan(low.dn).all() and low.flags[0] & GuideFlag.NO_LATERAL_MODE
