"""All guided modes of a planar stack: counted by phase, refined by a safeguarded Newton step.

    you want                                       use
    how many modes                                 mode_count
    the effective index of given orders            mode_index   (vectorised over stacks, wavelengths and orders)
    every mode of every stack of a batch           all_modes
    derivatives, group index, field profiles       layerlot.solver.fields
    high-index substrate or absorbing layers       layerlot.solver.leaky

Any number of layers, TE, TM, uniaxial layers with the axis along the film normal. Stacks run from the substrate up;
first and last layer are half-spaces.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .layers import Array, Layers, batch_shape, check_stack, flatten
from .phase import total_phase
from .three_layer import three_layer_index

_MAX_STEPS = 120
# Four units in the last place of q and of the phase: Newton cannot do better than the rounding of n^2 - N^2 and of the
# angles summed.
_ROUNDING = 9e-16


def mode_count(
    n: ArrayLike,
    t_um: ArrayLike,
    wavelength_um: ArrayLike,
    tm: ArrayLike = False,
    n_normal: ArrayLike | None = None,
) -> NDArray[np.int64]:
    """Number of guided modes.

    n: (..., L) indices from the substrate up; t_um: (..., L-2) thicknesses in µm; wavelength_um: (...), vacuum, if n is
    absolute; tm: False for TE, True for TM, or an array of both; n_normal: (..., L) indices along the normal where
    layers are uniaxial. All broadcast. Returns integers of the broadcast shape. Raises ValueError for bad shapes or
    signs.
    """
    n_, t, lam = check_stack(n, t_um, wavelength_um)
    shape = batch_shape(n_, t, lam, tm, *_normal_shape(n_normal))
    return _count(flatten(n_, n_normal, t, lam, tm, shape)).reshape(shape)


def mode_index(
    n: ArrayLike,
    t_um: ArrayLike,
    wavelength_um: ArrayLike,
    order: ArrayLike,
    tm: ArrayLike = False,
    n_normal: ArrayLike | None = None,
) -> Array:
    """Effective index of mode `order` (0 first), NaN where that mode is not guided.

    Arguments as for `mode_count`; order: (...) integers, broadcast with the rest. Accuracy: 1e-12 or better in N.
    """
    n_, t, lam = check_stack(n, t_um, wavelength_um)
    m = np.asarray(order)
    shape = batch_shape(n_, t, lam, tm, m, *_normal_shape(n_normal))
    flat_m = np.broadcast_to(m, shape).reshape(-1).astype(float)
    if n_.shape[-1] == 3:
        flat = [np.broadcast_to(x, (*shape, k)).reshape(-1, k) for x, k in ((n_, 3), (t, 1))]
        normal = None if n_normal is None else np.broadcast_to(n_normal, (*shape, 3)).reshape(-1, 3)
        wave, is_tm = (np.broadcast_to(x, shape).reshape(-1) for x in (lam, np.asarray(tm)))
        return three_layer_index(flat[0], normal, flat[1], wave, is_tm, flat_m).reshape(shape)
    return np.sqrt(_roots(flatten(n_, n_normal, t, lam, tm, shape), flat_m)).reshape(shape)


def all_modes(
    n: ArrayLike,
    t_um: ArrayLike,
    wavelength_um: ArrayLike,
    tm: ArrayLike = False,
    n_normal: ArrayLike | None = None,
) -> Array:
    """Every guided mode, descending in N: shape (..., M), M the largest count of the batch, padded with NaN."""
    n_, t, lam = check_stack(n, t_um, wavelength_um)
    shape = batch_shape(n_, t, lam, tm, *_normal_shape(n_normal))
    layers = flatten(n_, n_normal, t, lam, tm, shape)
    counts = _count(layers)
    most = int(counts.max(initial=0))
    out = np.full((counts.size, most), np.nan)
    orders = np.concatenate([np.arange(c) for c in counts]) if most else np.empty(0)
    rows = np.repeat(np.arange(counts.size), counts)
    if most:
        out[rows, orders.astype(int)] = np.sqrt(_roots(layers.repeat(counts), orders.astype(float)))
    # Modes of cores that hardly couple agree to rounding and may come out in either order.
    return -np.sort(-out, axis=-1).reshape(*shape, most)


def _normal_shape(n_normal: ArrayLike | None) -> tuple[Array, ...]:
    return () if n_normal is None else (np.asarray(n_normal, dtype=float)[..., 0],)


def _count(layers: Layers) -> NDArray[np.int64]:
    low, high = layers.cut_off(), layers.ceiling()
    counts = np.zeros(low.size, dtype=np.int64)
    can = np.flatnonzero(high > low)
    if can.size:
        phase, _, _ = total_phase(layers.take(can), low[can], at_cut_off=True)
        counts[can] = np.maximum(np.ceil(phase / np.pi - 1), 0)
    return counts


def _roots(layers: Layers, order: Array) -> Array:
    """q of mode `order` for each element of the batch, NaN where it is not guided."""
    low, high = layers.cut_off(), layers.ceiling()
    q = np.full(order.size, np.nan)
    can = np.flatnonzero((high > low) & (order >= 0))
    if not can.size:
        return q
    phase, _, _ = total_phase(layers.take(can), low[can], at_cut_off=True)
    held = phase / np.pi - 1 > order[can]
    act, phase = can[held], phase[held]
    lo, hi, target = low[act], high[act], (order[act] + 1) * np.pi
    fraction = (order[act] + 1) / (phase / np.pi + 1)
    x = np.clip(hi - (hi - lo) * fraction**2, lo, hi)
    for _ in range(_MAX_STEPS):
        if not act.size:
            return q
        phase, slope, _ = total_phase(layers.take(act), x)
        miss = phase - target
        lo, hi = np.where(miss >= 0, x, lo), np.where(miss <= 0, x, hi)
        step = miss / slope
        met = np.abs(miss) <= _ROUNDING * target
        # Half way between nearly degenerate modes F is so steep that Newton's step vanishes far from either: a step
        # below rounding counts only once the next point on has shown the root to lie between.
        shortest = 2 * _ROUNDING * x
        step = np.where(np.abs(step) < shortest, np.copysign(shortest, step), step)
        # x is an end of its bracket. Steps beyond the middle could swing from side to side for ever.
        free = (x - step >= lo) & (x - step <= hi) & (np.abs(step) <= (hi - lo) / 2)
        new = np.where(free, x - step, (lo + hi) / 2)
        done = met | (hi - lo <= 2 * shortest)
        q[act[done]] = np.clip(x - miss / slope, lo, hi)[done]
        keep = ~done
        act, x, lo, hi, target = act[keep], new[keep], lo[keep], hi[keep], target[keep]
    raise ArithmeticError(f"mode search did not converge for {act.size} modes (first at batch index {act[0]})")
