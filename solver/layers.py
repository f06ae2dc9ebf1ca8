"""Coefficients of the one-dimensional mode equation for a stack of homogeneous layers.

With x in units of 1/k0, psi = E_y (TE) or H_y (TM), v = w psi' and q = N^2 (N the effective index):

    psi' = v / w,     v' = -(a - q b) psi

    TE:  w = 1,         a = n^2,  b = 1
    TM:  w = 1 / n^2,   a = 1,    b = 1 / n_normal^2        (n in the film plane, n_normal along its normal)

psi and v are continuous across interfaces (H. Kogelnik, Topics in Applied Physics 7, ch. 2, 1975; the uniaxial
case follows from Maxwell's equations with the axis along the normal).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]

# Below this transverse wave number (in k0) a layer is treated as if it had it: g changes by 1e-18, under the
# rounding of n^2 - N^2, and no division by zero remains.
SMALLEST_WAVE_NUMBER = 1e-9


@dataclass(frozen=True, slots=True)
class Layers:
    """Stack coefficients, layer index first: w, a, b of shape (L, B); tau = k0 t of shape (L - 2, B)."""

    w: Array
    a: Array
    b: Array
    tau: Array

    def take(self, index: Any) -> Layers:
        """The same stack for a subset of the batch."""
        return Layers(self.w[:, index], self.a[:, index], self.b[:, index], self.tau[:, index])

    def repeat(self, counts: Any) -> Layers:
        return Layers(*(np.repeat(x, counts, axis=1) for x in (self.w, self.a, self.b, self.tau)))

    def cut_off(self) -> Array:
        """Smallest q of a guided mode: the larger light line of the two half-spaces. Shape (B,)."""
        line = self.a[[0, -1]] / self.b[[0, -1]]
        return np.asarray(line.max(axis=0))

    def ceiling(self) -> Array:
        """Largest q that any interior layer could carry. Shape (B,)."""
        return np.asarray((self.a[1:-1] / self.b[1:-1]).max(axis=0))


def check_stack(n: ArrayLike, t_um: ArrayLike, wavelength_um: ArrayLike) -> tuple[Array, Array, Array]:
    """Validate shapes and signs; returns float arrays n (..., L), t_um (..., L-2), wavelength_um (...)."""
    n_ = np.asarray(n, dtype=float)
    t = np.asarray(t_um, dtype=float)
    lam = np.asarray(wavelength_um, dtype=float)
    if n_.ndim < 1 or n_.shape[-1] < 3:
        raise ValueError(f"n has shape {n_.shape}; its last axis must hold at least 3 layers, half-spaces included")
    if t.ndim < 1 or t.shape[-1] != n_.shape[-1] - 2:
        raise ValueError(f"t_um has shape {t.shape}; its last axis must hold {n_.shape[-1] - 2} thicknesses")
    if not (np.all(n_ > 0) and np.all(t >= 0) and np.all(lam > 0)):
        raise ValueError("n and wavelength_um must be positive, t_um must not be negative, none may be NaN")
    return n_, t, lam


def batch_shape(n: Array, t_um: Array, *others: Any) -> tuple[int, ...]:
    """Broadcast shape of the stack's leading axes and any further arguments."""
    return np.broadcast_shapes(n.shape[:-1], t_um.shape[:-1], *(np.shape(x) for x in others))


def flatten(
    n: Array,
    n_normal: ArrayLike | None,
    t_um: Array,
    wavelength_um: Array,
    tm: ArrayLike,
    shape: tuple[int, ...],
) -> Layers:
    """Coefficients of a broadcast batch, flattened to (L, B)."""
    size = int(np.prod(shape))
    layers, films = n.shape[-1], t_um.shape[-1]

    def flat(x: ArrayLike) -> Array:
        y = np.asarray(x, dtype=float)
        return y.reshape(size) if y.shape == shape else np.broadcast_to(y, shape).reshape(size)

    def flat_layers(x: ArrayLike, count: int) -> Array:
        y = np.asarray(x, dtype=float)
        full = (*shape, count)
        y = y if y.shape == full else np.broadcast_to(y, full)
        return np.ascontiguousarray(y.reshape(size, count).T)

    n2 = flat_layers(n, layers) ** 2
    m2 = n2 if n_normal is None else flat_layers(n_normal, layers) ** 2
    is_tm = flat(tm) != 0
    one = np.ones_like(n2)
    tau = flat_layers(t_um, films) * (2 * np.pi / flat(wavelength_um))
    if not is_tm.any():
        return Layers(one, n2, one, tau)
    return Layers(np.where(is_tm, 1 / n2, one), np.where(is_tm, one, n2), np.where(is_tm, 1 / m2, one), tau)
