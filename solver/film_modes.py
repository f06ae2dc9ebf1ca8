"""One door to the modes of a film stack: guided where the stack guides, leaky where a half-space outranks the film."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from .fields import mode_derivatives
from .layers import Array, check_stack, flatten
from .leaky import leaky_derivatives, leaky_index
from .slab import mode_index
from .three_layer import solve_layers, three_layer_derivatives


class FilmModes(NamedTuple):
    """Real effective index (...), its derivatives as in `fields.SlabDerivatives`, and the imaginary part (0 if
    guided)."""

    N: Array
    dn: Array
    dn_normal: Array
    dt_per_um: Array
    loss_index: Array


def is_leaky(n: ArrayLike) -> bool:
    """True where a half-space has at least the index of every film, so that strictly nothing is guided."""
    n_ = np.asarray(n, dtype=float)
    outer = np.maximum(n_[..., 0], n_[..., -1])
    return bool(np.all(outer >= n_[..., 1:-1].max(axis=-1)))


def film_modes(
    n: ArrayLike,
    t_um: ArrayLike,
    wavelength_um: ArrayLike,
    order: ArrayLike,
    tm: ArrayLike = False,
    n_normal: ArrayLike | None = None,
) -> FilmModes:
    """Effective index and closed-form derivatives of given orders; NaN where the mode does not exist.

    Arguments as for `slab.mode_index`. For a leaky stack the real part and the derivatives of the real part are
    returned.
    """
    n_, t, lam = check_stack(n, t_um, wavelength_um)
    if is_leaky(n_):
        z = leaky_index(n, t_um, wavelength_um, order, tm, n_normal)
        d = leaky_derivatives(z, n, t_um, wavelength_um, tm, n_normal)
        return FilmModes(z.real, d.dn.real, d.dn_normal.real, d.dt_per_um.real, z.imag)
    if n_.ndim == 2 and n_.shape[1] == 3:
        return _three(n_, t, lam, np.asarray(order, dtype=float), tm, n_normal)
    N = mode_index(n, t_um, wavelength_um, order, tm, n_normal)
    g = mode_derivatives(N, n, t_um, wavelength_um, tm, n_normal)
    return FilmModes(N, g.dn, g.dn_normal, g.dt_per_um, np.zeros_like(N))


def _three(n: Array, t: Array, lam: Array, order: Array, tm: ArrayLike, n_normal: ArrayLike | None) -> FilmModes:
    """A plain list of three-layer modes: stack coefficients are set up once for index and derivatives."""
    layers = flatten(n, n_normal, t, lam, tm, order.shape)
    N = solve_layers(layers, order)
    with np.errstate(invalid="ignore"):
        along, normal, dt, _ = three_layer_derivatives(layers, N, np.broadcast_to(lam, order.shape))
    if n_normal is None:
        return FilmModes(N, (along + normal).T, np.zeros((order.size, 3)), dt.T, np.zeros(order.size))
    return FilmModes(N, along.T, normal.T, dt.T, np.zeros(order.size))
