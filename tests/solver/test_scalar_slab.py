"""One slab at a time in plain floats against the vectorised solver and against indices at 30 digits."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pytest
from layerlot.solver.fields import mode_derivatives
from layerlot.solver.scalar_slab import slab_count, slab_index, slab_mode, slab_phase
from layerlot.solver.slab import mode_count, mode_index
from mpmath import mp

from tests.reference import mp_slab, slab_stacks
from tests.reference.slab_stacks import Batch

SIZE = 120
KINDS = {
    "one film": (slab_stacks.generic, 3),
    "two films": (slab_stacks.generic, 4),
    "three films": (slab_stacks.generic, 5),
    "six films": (slab_stacks.generic, 8),
    "thin films": (slab_stacks.thin, 5),
    "twin cores": (slab_stacks.coupled, 2),
    "triple cores": (slab_stacks.coupled, 3),
    "one film near cut-off": (slab_stacks.near_cut_off, 3),
    "three films near cut-off": (slab_stacks.near_cut_off, 5),
}


def arguments(b: Batch, i: int) -> tuple:
    """n, t_um, wavelength_um, tm, n_normal of one stack in plain floats."""
    return b.n[i].tolist(), b.t_um[i].tolist(), float(b.wavelength_um[i]), bool(b.tm[i]), b.n_normal[i].tolist()


@pytest.mark.parametrize("kind", KINDS)
def test_counts_and_indices_meet_the_vectorised_solver(kind):
    """Counts are equal and indices agree to 1e-12 for random stacks, lowest and highest mode of each."""
    maker, k = KINDS[kind]
    rng = np.random.default_rng(11)
    b = maker(rng, SIZE, k)
    count = mode_count(*b.arguments())
    order = np.where(rng.random(SIZE) < 0.5, 0, np.maximum(count - 1, 0))
    N = mode_index(b.n, b.t_um, b.wavelength_um, order, b.tm, b.n_normal)
    assert (count > 0).sum() > SIZE / 4
    for i in range(SIZE):
        n, t, lam, tm, normal = arguments(b, i)
        assert slab_count(n, t, lam, tm, normal) == count[i], b.describe(i)
        found = slab_mode(n, t, lam, int(order[i]), tm, normal).N
        assert math.isnan(found) == math.isnan(N[i]), b.describe(i)
        assert math.isnan(found) or abs(found - N[i]) <= 1e-12, b.describe(i)


@pytest.mark.parametrize("kind", ["one film", "two films", "three films", "six films", "thin films"])
def test_derivatives_meet_the_vectorised_solver(kind):
    """Derivatives agree with the closed form of `fields` for random stacks."""
    maker, k = KINDS[kind]
    b = maker(np.random.default_rng(12), SIZE, k)
    N = mode_index(b.n, b.t_um, b.wavelength_um, 0, b.tm, b.n_normal)
    d = mode_derivatives(N, b.n, b.t_um, b.wavelength_um, b.tm, b.n_normal)
    for i in np.flatnonzero(np.isfinite(N)):
        n, t, lam, tm, normal = arguments(b, i)
        found = slab_mode(n, t, lam, 0, tm, normal)
        pairs = (
            (found.dn, d.dn[i]),
            (found.dn_normal, d.dn_normal[i]),
            (found.dt_per_um, d.dt_per_um[i]),
            ([found.dwavelength_per_um], [d.dwavelength_per_um[i]]),
        )
        for one, two in pairs:
            # the last bit of N, which the two round apart, weighs up to 1e7 in stacks near cut-off
            assert np.allclose(one, two, rtol=1e-8, atol=1e-8 * np.abs(two).max()), b.describe(i)


def test_a_stack_at_30_digits():
    """Four films, two of them split off equal neighbours: index and derivatives at 30 digits."""
    n, t = [1.444, 1.444, 3.4, 1.9, 1.0], [0.7, 0.2, 0.15]
    for tm in (False, True):
        stack = mp_slab.Stack(n, t, 1.55, tm)
        N = mp_slab.all_modes(stack)[0]
        found = slab_mode(n, t, 1.55, 0, tm)
        assert abs(mp.mpf(found.N) - N) <= 1e-15 * 4  # rounding
        slopes = mp_slab.derivatives(stack, N)
        for one, two in ((found.dn, slopes["dn"]), (found.dt_per_um, slopes["dt_per_um"])):
            assert max(abs(mp.mpf(a) - b) for a, b in zip(one, two)) <= 1e-13  # rounding, times the index over the gap
        assert abs(found.dwavelength_per_um - slopes["dwavelength_per_um"][0]) <= 1e-13


def test_layers_without_thickness():
    """A layer of no thickness changes nothing, and its own slope is that at which it would start to grow."""
    n, t = [1.444, 3.4, 1.0], [0.2]
    for tm in (False, True):
        plain = slab_mode(n, t, 1.55, 0, tm)
        for place in (1, 2):
            more = [*n[:place], 1.9, *n[place:]]
            zero, grown = [*t[: place - 1], 0.0, *t[place - 1 :]], [*t[: place - 1], 1e-6, *t[place - 1 :]]
            found = slab_mode(more, zero, 1.55, 0, tm)
            assert abs(found.N - plain.N) <= 1e-15 * 4
            slope = (slab_mode(more, grown, 1.55, 0, tm).N - found.N) / 1e-6
            # a difference over 1 pm: curvature leaves 1e-5 of it
            assert slope == pytest.approx(found.dt_per_um[place - 1], rel=1e-4)
            assert found.dn[place] == 0.0


def test_a_start_near_the_mode_leads_to_it():
    """A start, good or bad, and none at all lead to the same mode."""
    n, t = [1.444, 3.4, 1.9, 2.5, 1.0], [0.2, 0.15, 0.4]
    for order in (0, 1, 2):
        N = slab_mode(n, t, 1.55, order, True).N
        for near in (N + 1e-4, N - 0.1, 3.5, 1.0):
            other = slab_mode(n, t, 1.55, order, True, near=near).N
            assert (math.isnan(N) and math.isnan(other)) or abs(other - N) <= 1e-12


def test_no_mode():
    """Films that guide nothing, or nothing of that order, give NaN throughout and no count."""
    for n, t in (
        ([1.5, 1.5, 1.0], [0.3]),
        ([1.5, 2.0, 1.0], [0.0]),
        ([1.5, 1.55, 1.0], [0.1]),
        ([1.5, 1.2, 1.3, 1.0], [1.0, 2.0]),
    ):
        found = slab_mode(n, t, 1.55, 0, False)
        assert math.isnan(found.N) and all(math.isnan(x) for x in (*found.dn, *found.dt_per_um))
        assert math.isnan(slab_index(n, t, 1.55, 0, False))
        assert slab_count(n, t, 1.55, False) == 0
    assert math.isnan(slab_mode([1.5, 2.0, 1.0], [0.5], 1.55, -1, False).N)


def test_phase_counts_the_modes_above():
    """The phase at an index between two modes tells how many lie above it."""
    n, t = [1.444, 2.2, 1.6, 2.1, 1.0], [0.8, 0.3, 0.7]
    for tm in (False, True):
        modes = [float(x) for x in mp_slab.all_modes(mp_slab.Stack(n, t, 0.8, tm))]
        assert len(modes) > 3
        for above, (high, low) in enumerate(pairwise(modes), start=1):
            assert math.ceil(slab_phase(n, t, 0.8, tm, (high + low) / 2)) == above
        assert slab_phase(n, t, 0.8, tm, 2.3) == -1.0
