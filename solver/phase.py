"""Accumulated phase (Prüfer angle) of a stack: the mode condition in a form that is monotone in N.

In layer j, with s = sqrt|(a - q b) / w| and gamma = w s, the angle is theta = atan2(gamma psi, v). In an oscillating
layer it grows by s tau; elsewhere, and across an interface, it moves by less than a quarter turn that is known in
closed form. A sweep from the substrate gives theta_L at the lower edge of every layer, one from the cover theta_R at
the upper edge, and for every oscillating layer

    F = theta_L + s tau + theta_R - (m + 1) pi

falls monotonically with q = N^2 and is zero at mode m, the same root for every layer chosen (Sturm oscillation
theorem). So the modes are counted, and a root is refined in the layer where F is flattest, which keeps nearly
degenerate modes of coupled cores apart. dF/dq is the confinement integral of psi^2 b carried along by the sweep.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from .layers import SMALLEST_WAVE_NUMBER, Array, Layers

_TINY = 1e-300
# Decay, in k0, of a half-space at its own light line: far below the rounding of a - q b, which would hide modes that
# have just appeared.
_NO_DECAY = 1e-30


def wave_numbers(layers: Layers, q: Array) -> tuple[Array, NDArray[np.bool_]]:
    """Transverse wave number s (in k0, floored) and whether the layer oscillates; both (L, B)."""
    g = (layers.a - q * layers.b) / layers.w
    return np.maximum(np.sqrt(np.abs(g)), SMALLEST_WAVE_NUMBER), g > 0


def _oscillate(theta: Array, s: Array, tau: Array, gamma: Array) -> tuple[Array, Array, Array]:
    """Cross an oscillating layer: new angle, growth of R^2 (none), integral of psi^2 for R^2 = 1 at entry."""
    end = theta + s * tau
    integral = (tau / 2 - (np.sin(2 * end) - np.sin(2 * theta)) / (4 * s)) / gamma**2
    return end, np.ones_like(theta), integral


def _tunnel(theta: Array, s: Array, tau: Array, gamma: Array) -> tuple[Array, Array, Array]:
    """Cross an evanescent layer; R^2 at the far edge and the integral are both scaled by exp(-2 s tau)."""
    sin, cos = np.sin(theta), np.cos(theta)
    grow, fall = (sin + cos) / 2, (sin - cos) / 2
    decay = np.exp(-2 * s * tau)
    # 1 + tanh(s tau) sin 2 theta without its cancellation where the field falls almost purely: there the little that
    # grows is all that one core knows of the other.
    across = (sin + cos) ** 2 + decay * (cos - sin) ** 2
    end = theta + np.arctan2((cos - sin) * (cos + sin) * (1 - decay), across)
    r2 = 2 * (grow**2 + (fall * decay) ** 2)
    integral = (grow**2 + fall**2 * decay) * (1 - decay) / (2 * s) + 2 * grow * fall * tau * decay
    return end, r2, np.maximum(integral, 0.0) / gamma**2


def sweep(layers: Layers, s: Array, osc: NDArray[np.bool_], *, upward: bool) -> tuple[Array, Array, Array]:
    """Shoot from one half-space over all interior layers.

    Returns theta, wron and log_r2, each (L - 2, B), at the edge where the sweep enters each interior layer, in that
    layer's own scaling: the angle; the integral of b psi^2 so far over R^2; and log R^2 with psi = 1 at the start.
    """
    films = layers.tau.shape[0]
    order = range(1, films + 1) if upward else range(films, 0, -1)
    start = 0 if upward else films + 1
    gamma = layers.w * s
    theta_out = np.empty_like(layers.tau)
    wron_out = np.empty_like(layers.tau)
    log_out = np.empty_like(layers.tau)
    first = order[0]
    theta = np.arctan2(gamma[first], gamma[start])
    r2 = gamma[first] ** 2 + gamma[start] ** 2
    wron = layers.b[start] / (2 * s[start]) / r2
    log_r2 = np.log(r2)
    for j in order:
        theta_out[j - 1], wron_out[j - 1], log_out[j - 1] = theta, wron, log_r2
        if j == order[-1]:
            break
        following = j + 1 if upward else j - 1
        theta, wron, log_r2 = _step(layers, s, osc, gamma, j, following, theta, wron, log_r2)
    return theta_out, wron_out, log_out


def _step(
    layers: Layers,
    s: Array,
    osc: NDArray[np.bool_],
    gamma: Array,
    j: int,
    following: int,
    theta: Array,
    wron: Array,
    log_r2: Array,
) -> tuple[Array, Array, Array]:
    """Cross layer j and rescale the angle to the layer that follows."""
    tau, sj, gj = layers.tau[j - 1], s[j], gamma[j]
    o_end, o_r2, o_int = _oscillate(theta, sj, tau, gj)
    if osc[j].all():
        end, r2, integral, decay = o_end, o_r2, o_int, np.ones_like(theta)
    else:
        t_end, t_r2, t_int = _tunnel(theta, sj, tau, gj)
        inside = osc[j]
        end = np.where(inside, o_end, t_end)
        r2 = np.where(inside, o_r2, t_r2)
        integral = np.where(inside, o_int, t_int)
        decay = np.where(inside, 1.0, np.exp(-2 * sj * tau))
    r2 = np.maximum(r2, _TINY)
    wron = (wron * decay + layers.b[j] * integral) / r2
    log_r2 = log_r2 + np.log(r2) - np.log(np.maximum(decay, _TINY))
    ratio = gamma[following] / gj
    sin, cos = np.sin(end), np.cos(end)
    turned = end + np.arctan2((ratio - 1) * sin * cos, cos**2 + ratio * sin**2)
    stretch = (ratio * sin) ** 2 + cos**2
    return turned, wron / stretch, log_r2 + np.log(stretch)


def total_phase(layers: Layers, q: Array, *, at_cut_off: bool = False) -> tuple[Array, Array, NDArray[np.intp]]:
    """Phase in the flattest oscillating layer, its slope in q, and which interior layer that is.

    Mode m lies where the phase is (m + 1) pi. Shapes (B,). q must lie below the stack's ceiling. at_cut_off: q is the
    stack's cut-off, where the half-space that stops guiding first does not decay.
    """
    s, osc = wave_numbers(layers, q)
    if at_cut_off:
        ends = [0, -1]
        s[ends] = np.where(layers.a[ends] / layers.b[ends] >= q, _NO_DECAY, s[ends])
    up, up_wron, _ = sweep(layers, s, osc, upward=True)
    down, down_wron, _ = sweep(layers, s, osc, upward=False)
    si, wi, bi = s[1:-1], layers.w[1:-1], layers.b[1:-1]
    gamma = wi * si
    phase = up + si * layers.tau + down
    bend = wi * bi / (2 * gamma**2) * (np.sin(2 * up) + np.sin(2 * down)) / 2
    slope = -gamma * (up_wron + down_wron) - bend - layers.tau * bi / (2 * wi * si)
    best = np.where(osc[1:-1], -slope, np.inf).argmin(axis=0)
    pick = (best, np.arange(q.size))
    return phase[pick], np.minimum(slope[pick], -_TINY), best
