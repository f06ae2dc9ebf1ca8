"""Closed-form derivatives: fast three-layer path against the general one, and identities every mode obeys.

Differences at 50 digits stand in test_slab_random.py.
"""

from __future__ import annotations

import numpy as np
import pytest
from layerlot.solver.fields import _stack_derivatives, mode_derivatives
from layerlot.solver.layers import SMALLEST_WAVE_NUMBER, Layers, flatten
from layerlot.solver.slab import _roots, mode_count, mode_index
from layerlot.solver.three_layer import solve_layers, three_layer_derivatives

from tests.reference.slab_stacks import Batch, generic, near_cut_off, thin

STACKS = 20_000


def three_layer_stacks() -> Batch:
    """20,000 three-layer stacks: any, very thin, within 1e-10 of cut-off, and up to 200 wavelengths thick."""
    rng = np.random.default_rng(60)
    parts = [generic(rng, 8000, 3), thin(rng, 4000, 3), near_cut_off(rng, 4000, 3), generic(rng, 4000, 3)]
    thick = parts[-1]
    stretched = thick.t_um * 10 ** rng.uniform(0, 2, thick.t_um.shape)
    parts[-1] = Batch(thick.n, np.minimum(stretched, 200.0), thick.wavelength_um, thick.tm, thick.n_normal)
    return Batch(*(np.concatenate(x) for x in zip(*(p.arguments()[:4] + (p.n_normal,) for p in parts))))


def modes_of(b: Batch) -> tuple[Layers, np.ndarray, np.ndarray]:
    """Coefficients, a random guided order and the vacuum wavelength of every stack that guides at all."""
    counts = mode_count(*b.arguments())
    rows = np.flatnonzero(counts)
    order = np.random.default_rng(61).integers(0, counts[rows]).astype(float)
    n, t, wavelength, tm, normal = (x[rows] for x in b.arguments())
    return flatten(n, normal, t, wavelength, tm, order.shape), order, wavelength


def apart(first: np.ndarray, second: np.ndarray) -> np.ndarray:
    """Difference (B) over the largest entry of its mode; arrays (k, B)."""
    return np.abs(first - second).max(axis=0) / np.maximum(np.abs(second).max(axis=0), 1e-300)


def test_three_layer_path_finds_the_modes_of_the_general_path():
    """The fast path and the phase sweep have the same index, to 1e-13 in N, in 20,000 stacks."""
    stacks = three_layer_stacks()
    assert stacks.tm.size == STACKS
    layers, order, _ = modes_of(stacks)
    assert order.size > STACKS / 2
    fast, general = solve_layers(layers, order), np.sqrt(_roots(layers, order))
    assert np.abs(fast - general).max() < 1e-13
    assert not np.abs(fast * (1 + 1e-12) - general).max() < 1e-13


def test_three_layer_path_has_the_derivatives_of_the_general_path():
    """In-plane, normal, thickness and wavelength slopes agree between the two paths to the rounding of N itself."""
    layers, order, wavelength = modes_of(three_layer_stacks())
    N = solve_layers(layers, order)
    # A wave number is the root of the difference n^2 - N^2, so the rounding of N, magnified by N^2 over it, is in both
    # results; 20 units in the last place leave room for the sums. Half of the stacks then agree to 2e-12.
    s2 = np.maximum(np.abs(layers.a - N**2 * layers.b) / layers.w, SMALLEST_WAVE_NUMBER**2)
    bound = 20 * np.finfo(float).eps * (1 + (N**2 * layers.b / layers.w / s2).max(axis=0))
    sharp = bound < 1e-6  # all but stacks put at cut-off
    assert np.median(bound) < 2e-12 and sharp.mean() > 0.85
    fast = three_layer_derivatives(layers, N, wavelength)
    general = _stack_derivatives(layers, N, wavelength)
    for one, other in zip(fast, general):
        assert (apart(one, other) <= bound).all()
        assert np.median(apart(one, other)) < 1e-14
        moves = sharp & (np.abs(other).max(axis=0) > 0)
        assert (apart(one * 1.001, other) > bound)[moves].all()


@pytest.mark.parametrize("layers", [3, 4, 6, 9])
def test_scaling_all_lengths_changes_nothing(layers):
    """N depends on thickness over wavelength only: sum t dN/dt + wavelength dN/dwavelength = 0 (Euler's theorem)."""
    b = generic(np.random.default_rng(62), 400, layers)
    N = mode_index(b.n, b.t_um, b.wavelength_um, 0, b.tm, b.n_normal)
    d = mode_derivatives(N, b.n, b.t_um, b.wavelength_um, b.tm, b.n_normal)
    held = np.isfinite(N)
    along = b.wavelength_um * d.dwavelength_per_um
    left = ((b.t_um * d.dt_per_um).sum(axis=1) + along)[held]
    # sums of a few terms of the size of the group index at most
    assert np.abs(left).max() < 1e-12
    assert np.abs(left - 1e-3 * along[held]).max() > 1e-6


@pytest.mark.parametrize("layers", [3, 4, 6, 9])
def test_scaling_all_indices_scales_the_mode(layers):
    """N(c n, c wavelength) = c N, so that sum n dN/dn = N - wavelength dN/dwavelength, the group index."""
    b = generic(np.random.default_rng(63), 400, layers)
    N = mode_index(b.n, b.t_um, b.wavelength_um, 0, b.tm, b.n_normal)
    d = mode_derivatives(N, b.n, b.t_um, b.wavelength_um, b.tm, b.n_normal)
    held = np.isfinite(N)
    total = (b.n * d.dn).sum(axis=1) + (b.n_normal * d.dn_normal).sum(axis=1)
    group = N - b.wavelength_um * d.dwavelength_per_um
    assert np.abs(total - group)[held].max() < 1e-12
    assert np.abs(1.001 * total - group)[held].max() > 1e-6


def test_group_index_from_the_wavelength_slope():
    """n_g = N - wavelength dN/dwavelength equals dk/domega between two neighbouring frequencies."""
    n, t = [1.444, 1.9963, 1.6, 1.0], [0.4, 0.3]
    for tm in (False, True):
        N = mode_index(n, t, 1.55, 0, tm)
        closed = float(N - 1.55 * mode_derivatives(N, n, t, 1.55, tm).dwavelength_per_um)

        def wave_number(wavelengths: np.ndarray, tm: bool = tm) -> np.ndarray:
            return np.asarray(mode_index(n, t, wavelengths, 0, tm) * 2 * np.pi / wavelengths)

        frequency = 2 * np.pi / 1.55 * (1 + np.array([-2e-3, -1e-3, 1e-3, 2e-3]))
        k = wave_number(2 * np.pi / frequency)
        h = frequency[3] - 2 * np.pi / 1.55
        # five-point difference: truncation h^4, 1e-11 here; rounding 1e-15 / h
        numeric = (8 * (k[2] - k[1]) - (k[3] - k[0])) / (6 * h)
        assert numeric == pytest.approx(closed, abs=1e-9)
        assert numeric != pytest.approx(1.001 * closed, abs=1e-9)


def test_index_of_nan_has_derivatives_of_nan_and_leaves_its_neighbours_alone():
    """Rows whose mode is not guided come out NaN, the others as if they stood alone."""
    n, t = [1.457, 1.59, 1.0], [2.0]
    N = mode_index(n, t, 0.6328, np.array([0, 9, 3]))
    d = mode_derivatives(N, n, t, 0.6328)
    assert np.isnan(d.dn[1]).all() and np.isnan(d.dwavelength_per_um[1])
    assert np.array_equal(d.dn[2], mode_derivatives(N[2], n, t, 0.6328).dn)
