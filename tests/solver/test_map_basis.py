"""The polynomial basis of the correction map against numpy's Chebyshev series."""

from __future__ import annotations

import numpy as np
import pytest
from layerlot.solver.map_basis import Halves, basis, chebyshev, design_nodes, exponents, fit, fit_values
from numpy.polynomial import chebyshev as cheb

RNG = np.random.default_rng(11)


def test_chebyshev_values_and_slopes():
    """Values and slopes equal numpy's up to the highest degree in use."""
    x = RNG.uniform(-1, 1, 50)
    value, slope = chebyshev(x, 9)
    for k in range(10):
        one = np.eye(10)[k]
        # 2^8 is the largest coefficient, so some three digits of sixteen cancel; slopes are up to 81 times as large.
        assert np.allclose(value[:, k], cheb.chebval(x, one), atol=1e-12)
        assert np.allclose(slope[:, k], cheb.chebval(x, cheb.chebder(one)) if k else 0, atol=1e-10)


@pytest.mark.parametrize("dimension, degree, count", [(1, 5, 6), (2, 3, 10), (4, 5, 126), (6, 4, 210)])
def test_number_of_products(dimension, degree, count):
    """There are (p + d choose d) products of total degree p, each once, none above it."""
    powers = exponents(dimension, degree)
    assert powers.shape == (count, dimension)
    assert len({tuple(p) for p in powers}) == count
    assert powers.sum(axis=1).max() == degree


@pytest.mark.parametrize("dimension, degree", [(0, 0), (1, 5), (2, 4), (3, 4), (4, 5), (5, 3), (6, 3)])
def test_fit_returns_a_polynomial_of_its_degree(dimension, degree):
    """Values and slopes at the chosen nodes determine every polynomial of the basis, to rounding."""
    powers = exponents(dimension, degree)
    wanted = RNG.normal(size=powers.shape[0])
    count = max(int(np.ceil(1.6 * powers.shape[0] / (1 + dimension))), 1)
    nodes = design_nodes(dimension, degree, count) if dimension else np.zeros((1, 0))
    value, gradient = basis(nodes, powers)
    found = fit(nodes, wanted @ value, (wanted @ gradient).T, powers, degree)
    assert np.allclose(found, wanted, atol=1e-10)


def test_chosen_nodes_beat_random_ones():
    """The chosen nodes lie in the cube and give a better conditioned problem than as many random ones."""
    powers = exponents(4, 5)
    chosen = design_nodes(4, 5, 40)
    assert np.abs(chosen).max() <= 1
    random = RNG.uniform(-1, 1, chosen.shape)

    def condition(nodes: np.ndarray) -> float:
        value, gradient = basis(nodes, powers)
        return float(np.linalg.cond(np.concatenate([value.T, gradient.transpose(2, 0, 1).reshape(-1, 126) / 6])))

    assert condition(chosen) < 0.2 * condition(random)


def test_nodes_can_be_added():
    """Nodes chosen after others complete them: together they determine the higher degree."""
    first = design_nodes(3, 4, 14)
    more = design_nodes(3, 6, 22, first)
    powers = exponents(3, 6)
    wanted = RNG.normal(size=powers.shape[0])
    nodes = np.concatenate([first, more])
    value, gradient = basis(nodes, powers)
    assert np.allclose(fit(nodes, wanted @ value, (wanted @ gradient).T, powers, 6), wanted, atol=1e-9)


@pytest.mark.parametrize("dimension", [0, 1, 2, 3, 5])
def test_halves_evaluate_the_same_polynomials(dimension):
    """The fast form gives the values of the plain one, the slopes of the first polynomial, and of a mixture."""
    powers = exponents(dimension, 4)
    coefficients = RNG.normal(size=(powers.shape[0], 3))
    halves = Halves(dimension, 4)
    table = halves.table(coefficients, powers)
    xi = RNG.uniform(-1, 1, (7, dimension))
    mix = RNG.normal(size=(7, 3))
    value, gradient = basis(xi, powers)
    plain, slope = halves.evaluate(table, xi, None)
    _, mixed = halves.evaluate(table, xi, mix)
    assert np.allclose(plain, (value.T @ coefficients).T)
    slopes = np.einsum("dmb,mp->pbd", gradient, coefficients)
    assert np.allclose(slope, slopes[0])
    assert np.allclose(mixed, slopes[0] + np.einsum("pbd,bp->bd", slopes, mix))


def test_fit_of_values_alone():
    """Without slopes as many nodes as products determine the polynomial."""
    powers = exponents(2, 3)
    wanted = RNG.normal(size=(10, 2))
    nodes = RNG.uniform(-1, 1, (14, 2))
    assert np.allclose(fit_values(nodes, basis(nodes, powers)[0].T @ wanted, powers), wanted)
