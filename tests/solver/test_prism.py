"""Prism coupling: slopes in closed form, the relation's inverse, and the angles no prism reaches.

Angles of two films on glass stand in test_slab_published.py (reference/slab.json).
"""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from layerlot.solver.prism import coupling_angle_deg, coupling_slopes, effective_index
from mpmath import mp

# Index, prism index, base angle in degrees: rutile, garnet and dense glass prisms, their usual angles.
CASES = [(1.58372015, 2.8719, 45.0), (1.46, 1.9648, 60.0), (2.0, 2.4, 33.0), (1.7, 1.83, 65.5), (1.9, 2.8719, 41.0)]


def mp_angle_deg(N, n_p, base_deg):
    """The coupling angle by Snell's law at 40 digits (R. Ulrich and R. Torge, Appl. Opt. 12, 2901, 1973)."""
    inner = mp.asin(mp.mpmathify(N) / n_p) - mp.radians(base_deg)
    return mp.degrees(mp.asin(n_p * mp.sin(inner)))


def mp_slopes(N, n_p, base_deg) -> list[float]:
    """Central differences in N, prism index and base angle, step 1e-12 at 40 digits: truncation below 1e-20."""
    with mp.workdps(40):
        h = mp.mpf(10) ** -12
        exact = [mp.mpf(N), mp.mpf(n_p), mp.mpf(base_deg)]
        out = []
        for k in range(3):
            up, down = ([x + s * h * (i == k) for i, x in enumerate(exact)] for s in (1, -1))
            out.append(float((mp_angle_deg(*up) - mp_angle_deg(*down)) / (2 * h)))
        return out


@pytest.mark.parametrize("case", CASES)
def test_angle_meets_snell_at_40_digits(case):
    """The angle is right to 1e-12 degrees, and an angle off by a thousandth is told from it."""
    with mp.workdps(40):
        expected = float(mp_angle_deg(*case))
    found = float(coupling_angle_deg(*case))
    assert found == pytest.approx(expected, abs=1e-12)
    assert found * 1.001 != pytest.approx(expected, abs=1e-12)


@pytest.mark.parametrize("case", CASES)
def test_slopes_meet_differences_at_40_digits(case):
    """Slopes of the angle in N, prism index and base angle are right to 1e-12 relative."""
    found = np.array(coupling_slopes(*case))
    assert found == pytest.approx(mp_slopes(*case), rel=1e-12)
    assert found * 1.001 != pytest.approx(mp_slopes(*case), rel=1e-12)


def test_light_straight_through_the_face_selects_the_index_below_the_base():
    """At zero angle N = n_p sin A, for a prism of index 2 and 30 degrees exactly 1."""
    assert effective_index(0.0, 2.0, 30.0) == pytest.approx(1.0, abs=1e-15)
    assert coupling_angle_deg(1.0, 2.0, 30.0) == pytest.approx(0.0, abs=1e-13)


@settings(deadline=None, derandomize=True, max_examples=300)  # the same cases in every run, on any machine
@given(
    angle=st.floats(-85.0, 85.0),
    n_p=st.floats(1.5, 3.0),
    base=st.floats(25.0, 70.0),
)
def test_angle_of_the_index_of_an_angle_is_that_angle(angle, n_p, base):
    """Forward and back returns the angle, wherever the beam meets the base below grazing."""
    inside = base + np.rad2deg(np.arcsin(np.sin(np.deg2rad(angle)) / n_p))
    index = effective_index(angle, n_p, base)
    if inside <= 89.0:
        # Two inverse sines near grazing: 1/cos(85 deg) / cos(89 deg) is 660 times the rounding of 90 degrees.
        assert coupling_angle_deg(index, n_p, base) == pytest.approx(angle, abs=1e-10)
    else:
        assert index <= n_p


def test_unreachable_indices_are_nan():
    """No angle, and no slope, at or above the prism's index or where the beam cannot leave the entrance face."""
    for N, n_p, base in [(2.0, 1.9, 45.0), (1.0, 2.8719, 80.0), (2.8, 2.8719, 20.0)]:
        assert np.isnan(coupling_angle_deg(N, n_p, base))
        assert np.isnan(np.array(coupling_slopes(N, n_p, base))).all()


def test_arrays_broadcast():
    """A column of indices and a row of prism indices give a table of angles, each as if alone."""
    N, n_p = np.array([[1.5], [1.6]]), np.array([1.9648, 2.2, 2.8719])
    table = coupling_angle_deg(N, n_p, 45.0)
    assert table.shape == (2, 3)
    assert table[1, 2] == coupling_angle_deg(1.6, 2.8719, 45.0)
