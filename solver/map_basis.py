"""Chebyshev polynomials of total degree in several variables, and nodes chosen for them.

Each node gives a value and a full gradient. Nodes are picked one after another, each the one that adds most to the
determinant of the information about the coefficients (D-optimal design, see V. V. Fedorov, Theory of Optimal
Experiments, 1972; greedy choice and update formulas are standard linear algebra).
"""

from __future__ import annotations

from functools import cache
from itertools import combinations_with_replacement

import numpy as np
from numpy.polynomial import chebyshev as cheb
from numpy.typing import NDArray

from .layers import Array

_RIDGE = 1e-6
_SEED = 20240611


def exponents(dimension: int, degree: int) -> NDArray[np.intp]:
    """Degrees (M, d) of all products of total degree up to `degree`, low ones first."""
    rows = []
    for total in range(degree + 1):
        for chosen in combinations_with_replacement(range(dimension), total):
            rows.append(np.bincount(np.array(chosen, dtype=np.intp), minlength=dimension))
    return np.array(rows, dtype=np.intp).reshape(len(rows), dimension)


def basis(xi: Array, powers: NDArray[np.intp]) -> tuple[Array, Array]:
    """Products (M, B) at points (B, d) and their slopes (d, M, B)."""
    dimension = powers.shape[1]
    value, slope = (np.ascontiguousarray(x.transpose(1, 2, 0)) for x in chebyshev(xi, int(powers.max(initial=0))))
    picked = [value[k][powers[:, k]] for k in range(dimension)]
    risen = [slope[k][powers[:, k]] for k in range(dimension)]
    # products of all but one factor, from both ends, so that nothing is divided
    one = np.ones((powers.shape[0], xi.shape[0]))
    before, after = [one], [one]
    for k in range(dimension):
        before.append(before[-1] * picked[k])
        after.append(after[-1] * picked[dimension - 1 - k])
    gradient = np.empty((dimension, *one.shape))
    for k in range(dimension):
        np.multiply(before[k], after[dimension - 1 - k], out=gradient[k])
        gradient[k] *= risen[k]
    return before[-1], gradient


def chebyshev(xi: Array, highest: int) -> tuple[Array, Array]:
    """T_0 ... T_highest and their derivatives at xi (...): (..., highest + 1) each."""
    value, slope = _monomials(highest)
    powers = xi[..., None] ** np.arange(highest + 1)
    return powers @ value, powers @ slope


@cache
def _monomials(highest: int) -> tuple[Array, Array]:
    """T_0 ... and their derivatives in powers of xi, by columns. Up to degree 9 no more than three digits cancel."""
    value, slope = (np.zeros((highest + 1, highest + 1)) for _ in range(2))
    for k in range(highest + 1):
        p = cheb.cheb2poly(np.eye(highest + 1)[k])[: k + 1]
        value[: k + 1, k] = p
        slope[:k, k] = p[1:] * np.arange(1, k + 1)
    return value, slope


def gradient_weight(degree: int) -> float:
    """Weight of a slope against a value: what is cut off of a series is steeper by about its degree."""
    return 1.0 / (1 + degree)


def design_nodes(dimension: int, degree: int, count: int, start: Array | None = None) -> Array:
    """Nodes (count, d) in the unit cube for value-and-gradient data, after `start` (S, d) nodes that are there."""
    rng = np.random.default_rng(_SEED + dimension)
    candidates = np.cos(np.pi * rng.random((60 * dimension + 4 * count, dimension)))
    powers = exponents(dimension, degree)
    rows = _rows(candidates, powers, degree)
    information = _RIDGE * np.eye(powers.shape[0])
    if start is not None and start.size:
        old = _rows(start, powers, degree).reshape(-1, powers.shape[0])
        information = information + old.T @ old
    inverse = np.linalg.inv(information)
    gains = np.linalg.slogdet(np.eye(1 + dimension) + rows @ inverse @ rows.transpose(0, 2, 1))[1]
    chosen: list[int] = []
    while len(chosen) < count:
        # Gains only fall as nodes are added: whoever still leads after a fresh look is the best of all.
        best = int(gains.argmax())
        carried = rows[best] @ inverse
        gain = np.eye(1 + dimension) + carried @ rows[best].T
        gains[best] = np.linalg.slogdet(gain)[1]
        if gains[best] < gains.max():
            continue
        chosen.append(best)
        gains[best] = -np.inf
        inverse -= carried.T @ np.linalg.solve(gain, carried)
    return candidates[chosen]


def _rows(xi: Array, powers: NDArray[np.intp], degree: int) -> Array:
    """Value row and weighted slope rows of each point: (B, 1 + d, M)."""
    value, gradient = basis(xi, powers)
    return np.concatenate([value.T[:, None], gradient_weight(degree) * gradient.transpose(2, 0, 1)], axis=1)


def fit(xi: Array, values: Array, gradients: Array, powers: NDArray[np.intp], degree: int) -> Array:
    """Coefficients (M) of the least-squares fit to values (B) and gradients (B, d) in unit coordinates."""
    rows = _rows(xi, powers, degree).reshape(-1, powers.shape[0])
    weight = gradient_weight(degree)
    data = np.concatenate([values[:, None], weight * gradients], axis=1).reshape(-1)
    return np.asarray(np.linalg.lstsq(rows, data, rcond=1e-12)[0])


def fit_values(xi: Array, values: Array, powers: NDArray[np.intp]) -> Array:
    """Coefficients (M, P) of the least-squares fit to values (B, P) alone."""
    return np.asarray(np.linalg.lstsq(basis(xi, powers)[0].T, values, rcond=1e-12)[0])


class Halves:
    """The basis in the form in which it is evaluated fast: each product is one of the first half of the variables
    times one of the second, so a polynomial is a matrix between two short vectors.

    first, second: degrees (H1, d1), (H2, d2) of the products of either half.
    """

    def __init__(self, dimension: int, degree: int) -> None:
        self.split = (dimension + 1) // 2
        self.first, self.second = exponents(self.split, degree), exponents(dimension - self.split, degree)

    def table(self, coefficients: Array, powers: NDArray[np.intp]) -> Array:
        """Matrices (P, H1, H2) of polynomials with coefficients (M, P) for products of degrees powers (M, d)."""
        rows = {tuple(p): k for k, p in enumerate(self.first.tolist())}
        columns = {tuple(p): k for k, p in enumerate(self.second.tolist())}
        out = np.zeros((coefficients.shape[1], len(rows), len(columns)))
        for p, c in zip(powers.tolist(), coefficients):
            out[:, rows[tuple(p[: self.split])], columns[tuple(p[self.split :])]] = c
        return out

    def evaluate(self, table: Array, xi: Array, mix: Array | None) -> tuple[Array, Array]:
        """Values (P, B) of polynomials at points (B, d), and the slopes (B, d) of the first one or, with mix (B, P), of
        the first plus that mixture of all."""
        a, da = basis(xi[:, : self.split], self.first)
        b, db = basis(xi[:, self.split :], self.second)
        over = np.matmul(table, b)
        values = (over * a).sum(axis=1)
        under = np.matmul(table.transpose(0, 2, 1), a) if mix is not None else table[0].T @ a
        if mix is None:
            right, left = over[0], under
        else:
            right = over[0] + (over * mix.T[:, None]).sum(axis=0)
            left = under[0] + (under * mix.T[:, None]).sum(axis=0)
        return values, np.concatenate([(da * right).sum(axis=1), (db * left).sum(axis=1)]).T
