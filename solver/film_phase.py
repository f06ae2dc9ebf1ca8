"""The mode condition solved for thickness: how thick one layer must be for a stated effective index to be mode m.

For a layer that oscillates at N, the phase condition of `phase` reads  alpha(N) + k t = (m + 1) pi  with alpha the
sum of the two edge angles, which depends on the other layers only. So t follows in closed form for every m, and an
order that is not an integer says how far a reading is from any mode.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from .layers import Array, Layers, batch_shape, check_stack, flatten
from .phase import sweep, wave_numbers

# Stands for "the field is zero here" in place of a half-space of far higher index: its decay length is a millionth of
# 1/k0.
_WALL = -1e12


class FilmPhase(NamedTuple):
    """alpha (...): sum of edge angles in radians; k (...): transverse wave number of the layer in rad/µm; NaN where
    the layer does not oscillate at N (index at or below N)."""

    alpha: Array
    k_per_um: Array


def film_phase(
    n: ArrayLike,
    t_um: ArrayLike,
    wavelength_um: ArrayLike,
    film: int,
    N: ArrayLike,
    tm: ArrayLike = False,
    n_normal: ArrayLike | None = None,
) -> FilmPhase:
    """Edge angles and wave number of layer `film` (1 to L-2) at effective index N; arguments as for `slab.mode_index`.

    A half-space whose index is not below N cannot hold a decaying field. Its nearest layer stands in for it, or, where
    that is the film itself, a wall: the closed companion of a leaky stack.
    """
    n_, t, lam = check_stack(n, t_um, wavelength_um)
    N_ = np.asarray(N, dtype=float)
    extra = () if n_normal is None else (np.asarray(n_normal, dtype=float)[..., 0],)
    shape = batch_shape(n_, t, lam, tm, N_, *extra)
    layers = flatten(n_, n_normal, t, lam, tm, shape)
    q = np.broadcast_to(N_, shape).reshape(-1) ** 2
    layers = close(layers, q, film)
    s, osc = wave_numbers(layers, q)
    up, _, _ = sweep(layers, s, osc, upward=True)
    down, _, _ = sweep(layers, s, osc, upward=False)
    inside = osc[film]
    alpha = np.where(inside, up[film - 1] + down[film - 1], np.nan)
    k0 = 2 * np.pi / np.broadcast_to(lam, shape).reshape(-1)
    k = np.where(inside, s[film] * k0, np.nan)
    return FilmPhase(alpha.reshape(shape), k.reshape(shape))


def close(layers: Layers, q: Array, film: int) -> Layers:
    """The closed companion: half-spaces that would radiate at q replaced by their neighbour, or by a wall at the
    film."""
    w, a, b = (x.copy() for x in (layers.w, layers.a, layers.b))
    for outer, inner in ((0, 1), (-1, -2)):
        radiates = a[outer] > q * b[outer]
        if not radiates.any():
            continue
        if inner % a.shape[0] == film:
            put: tuple[Any, ...] = (1.0, _WALL, 0.0)
        else:
            neighbour_decays = a[inner] < q * b[inner]
            put = tuple(np.where(neighbour_decays, x[inner], y) for x, y in ((w, 1.0), (a, _WALL), (b, 0.0)))
        for x, value in zip((w, a, b), put):
            x[outer] = np.where(radiates, value, x[outer])
    return Layers(w, a, b, layers.tau)
