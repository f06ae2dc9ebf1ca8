"""All complex modes of one stack in a window: antiresonant and leaky guides, absorbing films, metals, surface plasmons.

The mode equation (w psi')' + a psi = q b psi is discretised by spectral elements (Gauss-Lobatto-Legendre nodes, one
or more elements a film), the half-spaces on a rotated complex coordinate in which outgoing and decaying waves both
die out. Its eigenvalues are seeds; each is polished on the exact mode condition of `leaky` and kept if it stays where
the seed was, so the discretisation's accuracy does not enter the answer. Eigenvalues of the rotated continuum fall
away in that step.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .leaky import Complex, Stack, _radiates, loss_dB_per_cm, polish

_NODES = 24
# Rotation of the half-spaces' coordinate: bound and leaky modes both decay along it.
_ROTATION = np.exp(-0.7j)
_OUTER = (0.5, 1.5, 4.0, 10.0, 25.0)  # lengths of the outer elements, in 1/k0 times the scale of the slowest wave
_RADIANS_PER_ELEMENT = 10.0
# A polished root this far from its seed belongs to another eigenvalue, or to none.
_SEED_DISTANCE = 2e-3
_DISTINCT = 1e-9


def complex_modes(
    n: ArrayLike,
    t_um: ArrayLike,
    wavelength_um: float,
    tm: bool = False,
    n_normal: ArrayLike | None = None,
    re_range: tuple[float, float] | None = None,
    loss_limit_dB_per_cm: float | None = None,
) -> Complex:
    """Complex effective indices of one stack, by falling real part.

    n (L,) complex, loss as a negative imaginary part, from the substrate up; t_um (L-2,); scalars wavelength_um (µm)
    and tm. re_range: real parts looked at, by default from 1e-3 above the lower light line of the half-spaces to the
    largest index (three times on a layer with an index below 1: plasmons). loss_limit_dB_per_cm: modes with more loss
    are left out (default 2,000). Modes that leak so strongly that the rotated continuum hides them are not found.
    """
    n_ = np.asarray(n, dtype=complex)[None, :]
    normal = None if n_normal is None else np.asarray(n_normal, dtype=complex)[None, :]
    t = np.asarray(t_um, dtype=float)[None, :]
    stack = Stack(n_, normal, t, np.array([wavelength_um], dtype=float), np.array([tm]))
    low, high = re_range or _default_range(stack)
    limit = 2000.0 if loss_limit_dB_per_cm is None else loss_limit_dB_per_cm
    seeds = np.sqrt(_eigenvalues(stack))
    seeds = np.where(seeds.real < 0, -seeds, seeds)
    seeds = seeds[(seeds.real > low) & (seeds.real < high) & (seeds.imag < 1e-6)]
    seeds = seeds[loss_dB_per_cm(seeds, wavelength_um) < 1.05 * limit + 1e-3]
    if not seeds.size:
        return np.empty(0, dtype=complex)
    many = stack.take(np.zeros(seeds.size, dtype=int))
    roots, done = polish(many, seeds, _radiates(many, seeds.real))
    keep = done & (np.abs(roots - seeds) < _SEED_DISTANCE) & (loss_dB_per_cm(roots, wavelength_um) < limit)
    return _distinct(roots[keep])


def _default_range(stack: Stack) -> tuple[float, float]:
    lines = np.sqrt(stack.a[[0, -1], 0] / stack.b[[0, -1], 0]).real
    index = np.sqrt(np.where(stack.a[:, 0] == 1, 1 / stack.w[:, 0], stack.a[:, 0])).real
    # Only a plasmon, on a layer of negative permittivity, has an index above every layer's own.
    above = 3.0 if (index < 1).any() else 1.0
    return float(lines.min()) + 1e-3, float(index.max()) * above


def _distinct(roots: Complex) -> Complex:
    roots = roots[np.argsort(-roots.real, kind="stable")]
    out: list[complex] = []
    for r in roots:
        if all(abs(r - o) > _DISTINCT for o in out):
            out.append(complex(r))
    return np.array(out, dtype=complex)


def lobatto(count: int) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Nodes on [-1, 1], weights and differentiation matrix of Gauss-Lobatto-Legendre quadrature (Abramowitz and Stegun
    25.4.32)."""
    p = np.polynomial.legendre.Legendre.basis(count - 1)
    x = np.concatenate([[-1.0], np.sort(p.deriv().roots().real), [1.0]])
    lx = p(x)
    weights = 2 / (count * (count - 1) * lx**2)
    gap = x[:, None] - x[None, :]
    np.fill_diagonal(gap, 1.0)
    d = lx[:, None] / lx[None, :] / gap
    np.fill_diagonal(d, 0.0)
    d[0, 0], d[-1, -1] = -count * (count - 1) / 4, count * (count - 1) / 4
    return x, weights, d


def _elements(stack: Stack) -> list[tuple[int, complex]]:
    """Layer and (complex) length in 1/k0 of every element, from the far end of the substrate to that of the cover."""
    out: list[tuple[int, complex]] = [(0, length * _ROTATION) for length in _OUTER[::-1]]
    for j in range(1, stack.w.shape[0] - 1):
        tau = float(stack.tau[j - 1, 0])
        index = abs(np.sqrt(stack.a[j, 0] / stack.w[j, 0]))
        parts = max(1, int(np.ceil(tau * index / _RADIANS_PER_ELEMENT)))
        out += [(j, tau / parts)] * parts
    last = stack.w.shape[0] - 1
    return out + [(last, length * _ROTATION) for length in _OUTER]


def _eigenvalues(stack: Stack) -> Complex:
    """q of the discretised problem, zero field at the far ends."""
    _, weights, d = lobatto(_NODES)
    elements = _elements(stack)
    size = len(elements) * (_NODES - 1) + 1
    stiff = np.zeros((size, size), dtype=complex)
    mass_a, mass_b = np.zeros(size, dtype=complex), np.zeros(size, dtype=complex)
    unit = d.T @ (weights[:, None] * d)
    for k, (layer, length) in enumerate(elements):
        at = slice(k * (_NODES - 1), k * (_NODES - 1) + _NODES)
        stiff[at, at] += stack.w[layer, 0] * unit * (2 / length)
        mass_a[at] += stack.a[layer, 0] * weights * (length / 2)
        mass_b[at] += stack.b[layer, 0] * weights * (length / 2)
    inside = slice(1, -1)
    matrix = (np.diag(mass_a) - stiff)[inside, inside] / mass_b[inside, None]
    return np.asarray(np.linalg.eigvals(matrix))
