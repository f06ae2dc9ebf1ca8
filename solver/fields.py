"""Closed-form derivatives of the effective index, and field profiles, from one pair of sweeps.

Variation theorem, with q = N^2, x in 1/k0, S = integral of b psi^2 over all x:

    dq = [ sum_i integral_i (da psi^2 - q db psi^2 - dw psi'^2) + sum_j h_j dtau_j ] / S
    h  = w psi'^2 + (a - q b) psi^2, constant within a layer
    dq / d ln k0 = 2 integral w psi'^2 / S

All integrals are elementary. Source: first-order perturbation of the Sturm-Liouville problem in `layers`; for TE and TM
guides see H. Kogelnik, Topics in Applied Physics 7, ch. 2 (1975), sec. 2.1.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .layers import Array, Layers, batch_shape, check_stack, flatten
from .phase import sweep, wave_numbers
from .three_layer import three_layer_derivatives

Flags = NDArray[np.bool_]

# Decay lengths from which a layer counts as thick: its field is then written by its values at both edges.
_THICK = 1.0


@dataclass(frozen=True, slots=True)
class SlabDerivatives:
    """dN/d(index) (..., L) per layer, dN/d(index along the normal) (..., L), dN/dt in 1/µm (..., L-2), and
    dN/d(wavelength) in 1/µm (...) at fixed indices. For isotropic layers `dn` is the whole derivative and `dn_normal`
    zero."""

    dn: Array
    dn_normal: Array
    dt_per_um: Array
    dwavelength_per_um: Array


@dataclass(frozen=True, slots=True)
class _Profile:
    """Field of each mode, scaled to a common amplitude: psi and v at the lower edge of every interior layer, at the
    upper edge, (L - 2, B); and the integrals of psi^2 and w psi'^2 over every layer, (L, B)."""

    psi_low: Array
    v_low: Array
    psi_high: Array
    v_high: Array
    psi2: Array
    wpsi1: Array


def mode_derivatives(
    N: ArrayLike,
    n: ArrayLike,
    t_um: ArrayLike,
    wavelength_um: ArrayLike,
    tm: ArrayLike = False,
    n_normal: ArrayLike | None = None,
) -> SlabDerivatives:
    """Derivatives of the effective index of a guided mode.

    N: (...) effective indices as `mode_index` gives them (NaN gives NaN); other arguments as there. No further solve.
    """
    n_, t, lam = check_stack(n, t_um, wavelength_um)
    N_ = np.asarray(N, dtype=float)
    extra = () if n_normal is None else (np.asarray(n_normal, dtype=float)[..., 0],)
    shape = batch_shape(n_, t, lam, tm, N_, *extra)
    layers = flatten(n_, n_normal, t, lam, tm, shape)
    index = np.broadcast_to(N_, shape).reshape(-1)
    known = np.isfinite(index)
    count, films = n_.shape[-1], t.shape[-1]
    out: Sequence[Array] = [np.full((k, index.size), np.nan) for k in (count, count, films, 1)]
    if known.all():
        out = _derivatives(layers, index, np.broadcast_to(lam, shape).reshape(-1), n_normal is None)
    elif known.any():
        wave = np.broadcast_to(lam, shape).reshape(-1)[known]
        parts = _derivatives(layers.take(known), index[known], wave, n_normal is None)
        for whole, part in zip(out, parts):
            whole[:, known] = part
    dn, dnn, dt, dl = (x.T.reshape(*shape, x.shape[0]) for x in out)
    return SlabDerivatives(dn, dnn, dt, dl[..., 0])


def _derivatives(layers: Layers, N: Array, wavelength_um: Array, isotropic: bool) -> tuple[Array, Array, Array, Array]:
    general = _stack_derivatives if layers.w.shape[0] > 3 else three_layer_derivatives
    along, normal, dt, dl = general(layers, N, wavelength_um)
    if isotropic:
        along, normal = along + normal, np.zeros_like(normal)
    return along, normal, dt, dl


def _stack_derivatives(layers: Layers, N: Array, wavelength_um: Array) -> tuple[Array, Array, Array, Array]:
    profile = _profile(layers, N)
    w, a, b, q = layers.w, layers.a, layers.b, N**2
    total = 2 * N * (b * profile.psi2).sum(axis=0)
    tm = (a == 1).all(axis=0)
    along = np.where(tm, 2 * np.sqrt(w) * profile.wpsi1, 2 * np.sqrt(a) * profile.psi2) / total
    normal = np.where(tm, 2 * q * b * np.sqrt(b) * profile.psi2, 0.0) / total
    # h at the edge with the smaller field, where less cancels
    low = np.abs(profile.psi_low) <= np.abs(profile.psi_high)
    psi, v = np.where(low, profile.psi_low, profile.psi_high), np.where(low, profile.v_low, profile.v_high)
    h = v**2 / w[1:-1] + (a[1:-1] - q * b[1:-1]) * psi**2
    dt = h / total * (2 * np.pi / wavelength_um)
    dl = -2 * profile.wpsi1.sum(axis=0) / (total * wavelength_um)
    return along, normal, dt, dl[None]


def _profile(layers: Layers, N: Array) -> _Profile:
    """Join the two sweeps in the layer where the accumulated phase is flattest."""
    q = N**2
    s, osc = wave_numbers(layers, q)
    up, up_wron, up_log = sweep(layers, s, osc, upward=True)
    down, down_wron, down_log = sweep(layers, s, osc, upward=False)
    gamma = (layers.w * s)[1:-1]
    slope = gamma * (up_wron + down_wron) + layers.tau * layers.b[1:-1] / (2 * layers.w[1:-1] * s[1:-1])
    m = np.where(osc[1:-1], slope, np.inf).argmin(axis=0)
    pick = (m, np.arange(q.size))
    up_scale = np.exp((up_log - up_log[pick]) / 2)
    down_scale = np.exp((down_log - down_log[pick]) / 2)
    # The field is continuous, not only its size: the sweep from the cover may come in with the other sign.
    end = up[pick] + s[1:-1][pick] * layers.tau[pick]
    sign = np.where(np.cos(end) * -np.cos(down[pick]) + np.sin(end) * np.sin(down[pick]) < 0, -1.0, 1.0)
    psi_low = np.sin(up) * up_scale / gamma
    v_low = np.cos(up) * up_scale
    psi_high = np.sin(down) * down_scale / gamma * sign
    v_high = -np.cos(down) * down_scale * sign
    # Below the joining layer the sweep from below holds both edges of every layer, above it the other one; only the
    # joining layer, which oscillates, is crossed. No step runs along a falling field.
    rows = np.arange(layers.tau.shape[0])[:, None]
    far_psi, far_v = _cross(layers, s, psi_low, v_low)
    psi_l = np.where(rows <= m, psi_low, np.roll(psi_high, 1, axis=0))
    v_l = np.where(rows <= m, v_low, np.roll(v_high, 1, axis=0))
    psi_h = np.where(rows < m, np.roll(psi_low, -1, axis=0), np.where(rows == m, far_psi, psi_high))
    v_h = np.where(rows < m, np.roll(v_low, -1, axis=0), np.where(rows == m, far_v, v_high))
    psi2, wpsi1 = _integrals(layers, s, osc, psi_l, v_l, psi_h)
    ends = []
    for psi, k in ((psi_l[0], 0), (psi_h[-1], -1)):
        ends.append((psi**2 / (2 * s[k]), layers.w[k] * s[k] * psi**2 / 2))
    psi2 = np.concatenate([ends[0][0][None], psi2, ends[1][0][None]])
    wpsi1 = np.concatenate([ends[0][1][None], wpsi1, ends[1][1][None]])
    return _Profile(psi_l, v_l, psi_h, v_h, psi2, wpsi1)


def _waves(layers: Layers, s: Array, osc: Flags) -> tuple[Array, Array]:
    """sin(x)/x and (1 - sinc 2x) / (2 x^2) of every interior layer, entire in g tau^2 = x^2."""
    x = s[1:-1] * layers.tau
    inside = osc[1:-1]
    flat = np.minimum(x, 2 * _THICK)  # beyond, `_integrals` takes the exponential form
    x_safe = np.where(x < 1e-150, 1e-150, x)
    f_safe = np.maximum(flat, 1e-150)
    sigma = np.where(inside, np.sin(x_safe) / x_safe, np.sinh(f_safe) / f_safe)
    z = np.where(inside, x**2, -(flat**2))
    sinc2 = np.where(inside, np.sin(2 * x_safe) / (2 * x_safe), np.sinh(2 * f_safe) / (2 * f_safe))
    # (1 - sinc(2 sqrt z)) / (2 z) = sum (-1)^k (4 z)^k * 2 / (2k + 3)!, used where the difference would cancel
    series = 1 / 3 - z / 15 * (1 - 2 * z / 21 * (1 - z / 18 * (1 - 2 * z / 55 * (1 - z / 39))))
    rest = np.where(np.abs(z) < 0.02, series, (1 - sinc2) / (2 * np.where(z == 0, 1, z)))
    return sigma, rest


def _integrals(layers: Layers, s: Array, osc: Flags, psi: Array, v: Array, far_psi: Array) -> tuple[Array, Array]:
    """Integrals of psi^2 and w psi'^2 over each interior layer, (L - 2, B), from psi and v at its lower edge and, in
    thick evanescent layers, from psi at both edges."""
    w, tau, si = layers.w[1:-1], layers.tau, s[1:-1]
    thick = ~osc[1:-1] & (si * tau > _THICK)
    g = np.where(osc[1:-1], si**2, -(si**2))
    sigma, rest = _waves(layers, s, osc)
    cc = tau * (1 - g * tau**2 * rest)
    cs = (tau * sigma) ** 2 / 2
    ss = tau**3 * rest
    slope = v / w
    psi2 = psi**2 * cc + 2 * psi * slope * cs + slope**2 * ss
    wpsi1 = w * (slope**2 * cc - 2 * g * psi * slope * cs + (g * psi) ** 2 * ss)
    if thick.any():
        # psi = grow exp(-s (t - x)) + fall exp(-s x): nothing here can overflow
        e = np.exp(-si * tau)
        share = np.where(thick, 1 - e * e, 1.0)
        grow, fall = (far_psi - psi * e) / share, (psi - far_psi * e) / share
        square = (grow**2 + fall**2) * share / (2 * si)
        cross = 2 * grow * fall * tau * e
        psi2 = np.where(thick, square + cross, psi2)
        wpsi1 = np.where(thick, w * si**2 * (square - cross), wpsi1)
    return psi2, wpsi1


def _cross(layers: Layers, s: Array, psi: Array, v: Array) -> tuple[Array, Array]:
    """psi and v at the upper edge of each interior layer, as if it oscillated."""
    gamma = (layers.w * s)[1:-1]
    sin, cos = np.sin(s[1:-1] * layers.tau), np.cos(s[1:-1] * layers.tau)
    return psi * cos + v / gamma * sin, v * cos - psi * gamma * sin


def mode_field(
    N: ArrayLike,
    n: ArrayLike,
    t_um: ArrayLike,
    wavelength_um: ArrayLike,
    x_um: ArrayLike,
    tm: bool = False,
    n_normal: ArrayLike | None = None,
) -> Array:
    """Field of one mode: E_y (TE) or H_y (TM) at heights x_um, scaled to a largest absolute value of 1.

    N and wavelength_um: scalars; n (L,), t_um (L-2,); x_um: (...) heights in µm, 0 at the top of the substrate.
    """
    n_, t, lam = check_stack(n, t_um, wavelength_um)
    layers = flatten(n_, n_normal, t, lam, tm, (1,))
    k0 = 2 * np.pi / float(lam)
    profile = _profile(layers, np.atleast_1d(np.asarray(N, dtype=float)))
    waves, oscillating = wave_numbers(layers, np.atleast_1d(np.asarray(N, dtype=float)) ** 2)
    s, osc = waves[:, 0], oscillating[:, 0]
    edges = np.concatenate([[0.0], np.cumsum(t)])
    x = np.asarray(x_um, dtype=float)
    out = np.where(x < 0, profile.psi_low[0, 0] * np.exp(np.minimum(x, 0) * k0 * s[0]), 0.0)
    above = np.maximum(x - edges[-1], 0) * k0
    out = np.where(x > edges[-1], profile.psi_high[-1, 0] * np.exp(-above * s[-1]), out)
    for j in range(t.size):
        inside = (x >= edges[j]) & (x <= edges[j + 1])
        up, down = (x - edges[j]) * k0, (edges[j + 1] - x) * k0
        sj, w = s[j + 1], layers.w[j + 1, 0]
        psi0, psi1 = profile.psi_low[j, 0], profile.psi_high[j, 0]
        if osc[j + 1]:
            value = psi0 * np.cos(sj * up) + profile.v_low[j, 0] / (w * sj) * np.sin(sj * up)
        else:
            # from both edges, each in its falling direction: no growth of rounding error
            span = sj * k0 * t[j]
            f0 = np.exp(-sj * np.clip(up, 0, None)) * -np.expm1(-2 * sj * np.clip(down, 0, None))
            f1 = np.exp(-sj * np.clip(down, 0, None)) * -np.expm1(-2 * sj * np.clip(up, 0, None))
            value = (psi0 * f0 + psi1 * f1) / -np.expm1(-2 * span)
        out = np.where(inside, value, out)
    grid = _peak(layers, profile, s, osc)
    return np.asarray(out / grid)


def _peak(layers: Layers, profile: _Profile, s: Array, osc: Flags) -> float:
    """Largest |psi| over the stack: at an edge, or the amplitude of an oscillating layer that holds a crest."""
    best = float(max(np.abs(profile.psi_low).max(), np.abs(profile.psi_high).max()))
    for j in range(layers.tau.shape[0]):
        if osc[j + 1]:
            start = np.arctan2(profile.psi_low[j, 0] * layers.w[j + 1, 0] * s[j + 1], profile.v_low[j, 0])
            end = start + s[j + 1] * layers.tau[j, 0]
            crest = np.ceil((start - np.pi / 2) / np.pi) * np.pi + np.pi / 2
            if crest <= end:
                slope = profile.v_low[j, 0] / (layers.w[j + 1, 0] * s[j + 1])
                best = max(best, float(np.hypot(profile.psi_low[j, 0], slope)))
    return best
