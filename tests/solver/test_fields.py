"""Mode fields against closed forms, numerical integration of the mode equation, and what every mode must satisfy."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from layerlot.solver.fields import mode_derivatives, mode_field
from layerlot.solver.slab import all_modes, mode_index
from numpy.polynomial import Legendre
from numpy.polynomial.legendre import leggauss
from scipy.integrate import solve_ivp

from tests.reference.slab_stacks import generic

BOTH = pytest.mark.parametrize("tm", [False, True], ids=["TE", "TM"])
# Substrate up: indices, those along the normal where they differ, thicknesses in µm.
STACKS = {
    "three films": ([1.45, 1.75, 1.5, 1.9, 1.0], None, [0.5, 0.3, 0.4]),
    "two uniaxial films": ([1.46, 1.66, 1.5, 1.64, 1.3], [1.46, 1.61, 1.5, 1.67, 1.3], [0.9, 0.35, 0.8]),
    "six films": ([1.52, 2.1, 1.46, 2.1, 1.46, 2.3, 1.0, 1.2], None, [0.1, 0.2, 0.12, 0.1, 0.09, 0.05]),
}
WAVELENGTH = 0.6328


def coefficients(n, normal, tm: bool) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """w, a, b of (w psi')' = -k0^2 (a - N^2 b) psi (H. Kogelnik, Topics in Applied Physics 7, ch. 2, 1975)."""
    n2 = np.array(n) ** 2
    m2 = n2 if normal is None else np.array(normal) ** 2
    one = np.ones_like(n2)
    return (1 / n2, one, 1 / m2) if tm else (one, n2, one)


def quadrature(t, extent_um: float = 12.0) -> list[tuple[np.ndarray, np.ndarray]]:
    """Gauss-Legendre points and weights of each layer, half-spaces cut where the field has long died away."""
    edges = np.concatenate([[0.0], np.cumsum(t)])
    bounds = [(-extent_um, 0.0), *pairwise(edges), (edges[-1], edges[-1] + extent_um)]
    u, w = leggauss(120)
    return [((a + b) / 2 + (b - a) / 2 * u, (b - a) / 2 * w) for a, b in bounds]


@BOTH
def test_three_layer_field_is_a_cosine_between_two_exponentials(tm):
    """Every mode of one film on glass has the textbook field, to 1e-12."""
    n, t = [1.457, 1.59, 1.0], 2.0
    k0 = 2 * np.pi / WAVELENGTH
    x = np.linspace(-1.0, 3.0, 801)
    for N in all_modes(n, [t], WAVELENGTH, tm):
        kappa = k0 * np.sqrt(n[1] ** 2 - N**2)
        below, above = (k0 * np.sqrt(N**2 - k**2) for k in (n[0], n[2]))
        weight = (n[1] / n[0]) ** 2 if tm else 1.0
        phase = np.arctan(weight * below / kappa)
        film = np.cos(kappa * x - phase)
        closed = np.where(x < 0, np.cos(phase) * np.exp(below * np.minimum(x, 0)), film)
        closed = np.where(x > t, np.cos(kappa * t - phase) * np.exp(-above * np.maximum(x - t, 0)), closed)
        found = mode_field(N, n, [t], WAVELENGTH, x, tm)
        # cos reaches 1 inside the film for every one of these modes, so the scale is the same
        assert np.abs(found - closed).max() < 1e-12
        assert np.abs(1.001 * found - closed).max() > 1e-4


@BOTH
@pytest.mark.parametrize("which", STACKS)
def test_field_obeys_the_mode_equation(which, tm):
    """Runge-Kutta steps from the substrate (scipy's solve_ivp) follow the field of every mode over all films."""
    n, normal, t = STACKS[which]
    w, a, b = coefficients(n, normal, tm)
    k0 = 2 * np.pi / WAVELENGTH
    modes = all_modes(n, t, WAVELENGTH, tm, normal)
    assert modes.size
    for N in modes:
        g = k0**2 * (a - N**2 * b) / w
        psi, v = 1.0, w[0] * np.sqrt(-g[0])
        heights, values, x0 = [], [], 0.0
        for i, d in enumerate(t, start=1):
            at = np.linspace(0, d, 21)
            run = solve_ivp(
                lambda _, y, wi=w[i], gi=g[i]: [y[1] / wi, -gi * wi * y[0]],
                (0, d), [psi, v], method="DOP853", t_eval=at, rtol=1e-12, atol=1e-14,
            )  # fmt: skip
            heights.append(x0 + at)
            values.append(run.y[0])
            psi, v, x0 = run.y[0, -1], run.y[1, -1], x0 + d
        x, y = np.concatenate(heights), np.concatenate(values)
        found = mode_field(N, n, t, WAVELENGTH, x, tm, normal)
        scale = found @ y / (y @ y)
        # 1e-12 of the integrator, magnified by the films the field tunnels through: e^3 at most, twice
        assert np.abs(found - scale * y).max() < 1e-9
        # and the cover takes it over with the field decaying
        assert v == pytest.approx(-w[-1] * np.sqrt(-g[-1]) * psi, abs=1e-8 * np.abs(y).max() * np.sqrt(-g[-1]))
        assert np.abs(found - scale * np.interp(x, x + 1e-3, y)).max() > 1e-5


@BOTH
@pytest.mark.parametrize("which", STACKS)
def test_modes_are_orthogonal(which, tm):
    """The integral of b psi_a psi_b over all heights vanishes for two modes, and is the norm for one."""
    n, normal, t = STACKS[which]
    b = coefficients(n, normal, tm)[2]
    modes = all_modes(n, t, WAVELENGTH, tm, normal)
    points = quadrature(t)
    fields = [[mode_field(N, n, t, WAVELENGTH, x, tm, normal) for x, _ in points] for N in modes]
    overlap = np.array(
        [[sum(bi * w @ (p * q) for bi, (_, w), p, q in zip(b, points, f, h)) for h in fields] for f in fields]
    )
    norm = np.sqrt(np.diag(overlap))
    relative = overlap / np.outer(norm, norm)
    # what the 12 µm of half-space kept leave out of the slowest decay is below 1e-9
    assert np.abs(relative - np.eye(norm.size)).max() < 1e-9
    # the weight matters: left out, TM modes are not orthogonal
    if tm and modes.size > 1:
        bare = sum(w @ (p * q) for (_, w), p, q in zip(points, fields[0], fields[1]))
        assert abs(bare) > 1e-6


@BOTH
@pytest.mark.parametrize("which", ["three films", "six films"])
def test_index_slopes_are_integrals_of_the_field(which, tm):
    """dN/dn of an isotropic layer is the field's share in it, by quadrature of the field.

    TE: n_i int_i psi^2 / (N int psi^2); TM: int_i (N^2 psi^2 + psi'^2 / k0^2) / n_i^3 / (N int psi^2 / n^2)
    (H. Kogelnik, Topics in Applied Physics 7, ch. 2, 1975).
    """
    n, _, t = STACKS[which]
    b = coefficients(n, None, tm)[2]
    k0 = 2 * np.pi / WAVELENGTH
    for N in all_modes(n, t, WAVELENGTH, tm):
        points = quadrature(t)
        square, slope2 = [], []
        for (x, weight), index in zip(points, n):
            psi = mode_field(N, n, t, WAVELENGTH, x, tm)
            square.append(weight @ psi**2)
            slope = Legendre.fit(x, psi, 80).deriv()(x)  # exact to rounding for waves and decays of this length
            slope2.append(weight @ slope**2 / (k0 * index) ** 2 if tm else 0.0)
        norm = N * (b @ np.array(square))
        index = np.array(n)
        share = (N**2 * np.array(square) / index**3 + np.array(slope2) / index if tm else index * square) / norm
        found = mode_derivatives(N, n, t, WAVELENGTH, tm).dn
        # rounding in the slope, and the quadrature's cut at 12 µm
        assert np.abs(found - share).max() < 1e-9
        assert np.abs(1.001 * found - share).max() > 1e-6


@BOTH
def test_field_and_its_flux_are_continuous(tm):
    """At every interface psi, and w psi' taken one-sidedly, have no step; psi' alone has one for TM."""
    n, normal, t = STACKS["two uniaxial films"]
    w = coefficients(n, normal, tm)[0]
    h = 1e-4
    for N in all_modes(n, t, WAVELENGTH, tm, normal):
        for i, edge in enumerate(np.concatenate([[0.0], np.cumsum(t)])):
            x = edge + h * np.array([-2, -1, 0, 1, 2])
            f = mode_field(N, n, t, WAVELENGTH, x, tm, normal)
            up, down = (-1.5 * f[2] + 2 * f[3] - 0.5 * f[4]) / h, (1.5 * f[2] - 2 * f[1] + 0.5 * f[0]) / h
            # one-sided differences of second order: h^2 psi''' / 3 with psi''' below (20/µm)^3
            assert abs(w[i] * down - w[i + 1] * up) < 5e-5
            # a nanometre to either side of the edge
            assert (
                np.abs(mode_field(N, n, t, WAVELENGTH, edge + 1e-9 * np.array([-1, 1]), tm, normal) - f[2]).max() < 1e-7
            )
    slopes = np.abs(down - up)
    assert slopes > 1e-3 if tm else slopes < 1e-4


def test_field_has_as_many_zeros_as_its_order_and_a_peak_of_one():
    """Sturm's oscillation theorem and the stated scale hold for all modes of 60 random stacks of six layers."""
    b = generic(np.random.default_rng(64), 60, 6)
    modes = 0
    for i in range(60):
        stack = b.n[i], b.t_um[i], b.wavelength_um[i]
        x = np.linspace(0, b.t_um[i].sum(), 4001)
        for order, N in enumerate(all_modes(*stack, bool(b.tm[i]), b.n_normal[i])):
            f = mode_field(N, *stack, x, bool(b.tm[i]), b.n_normal[i])
            strong = f[np.abs(f) > 1e-9]
            assert int((strong[1:] * strong[:-1] < 0).sum()) == order, b.describe(i)
            # 4,001 heights miss a crest by a phase of 1e-2 at most
            assert 1 - 1e-4 < np.abs(f).max() < 1 + 1e-12
            modes += 1
    assert modes > 60


@BOTH
def test_twin_cores_hold_an_even_and_an_odd_field(tm):
    """Two equal cores that couple by 1e-4 to 1e-6 share even and odd modes half and half."""
    n, width = [1.5, 1.7, 1.5, 1.7, 1.5], 0.5
    for gap in (0.8, 1.3):
        t = [width, gap, width]
        x = np.linspace(-1.0, width + gap / 2, 300)
        mirror = 2 * width + gap - x
        pair = mode_index(n, t, WAVELENGTH, np.array([0, 1]), tm)
        assert 1e-8 < pair[0] - pair[1] < 1e-3
        for N, parity in zip(pair, (1, -1)):
            here, there = (mode_field(N, n, t, WAVELENGTH, at, tm) for at in (x, mirror))
            # The rounding of N, 2e-16, mixes the pair by that over the splitting.
            assert np.abs(here - parity * there).max() < 1e-14 * 10 / (pair[0] - pair[1])
            assert np.abs(here).max() > 0.99


def test_deep_barrier_neither_overflows_nor_leaks():
    """Behind 40 µm of low index the field of a single core stays below rounding, and finite."""
    n, t = [1.5, 2.0, 1.2, 1.9, 1.5], [0.4, 40.0, 0.4]
    N = mode_index(n, t, WAVELENGTH, 0)
    f = mode_field(N, n, t, WAVELENGTH, np.linspace(-2, 43, 2000))
    assert np.isfinite(f).all()
    assert np.abs(f[-60:]).max() < 1e-100
