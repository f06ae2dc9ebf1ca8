"""Accumulated phase of one stack in plain floats: the same sweeps as in `phase`, which holds the derivation."""

from __future__ import annotations

from math import atan2, cos, exp, inf, log, pi, sin, sqrt
from typing import NamedTuple

from .layers import SMALLEST_WAVE_NUMBER

_NO_DECAY = 1e-30  # as in `phase`
_TINY = 1e-300


class Stack(NamedTuple):
    """Coefficients as in `layers`: w, a, b of all layers, tau of the films."""

    w: list[float]
    a: list[float]
    b: list[float]
    tau: list[float]


class Edge(NamedTuple):
    """Where a sweep enters a film: angle, its sine and cosine, integral of b psi^2 so far over R^2, log R^2."""

    theta: float
    sin: float
    cos: float
    wron: float
    log_r2: float


def coefficients(
    n: list[float], t_um: list[float], wavelength_um: float, tm: bool, n_normal: list[float] | None
) -> Stack:
    k0 = 2 * pi / wavelength_um
    tau = [k0 * t for t in t_um]
    if not tm:
        return Stack([1.0] * len(n), [x * x for x in n], [1.0] * len(n), tau)
    w = [1 / (x * x) for x in n]
    return Stack(w, [1.0] * len(n), w if n_normal is None else [1 / (x * x) for x in n_normal], tau)


def core_films(stack: Stack) -> tuple[int, int]:
    """First and last film that differ from the half-space on their side; those beyond have its index or no thickness.
    The first exceeds the last where there is none."""
    w, a, b, tau = stack
    first, last = 1, len(tau)
    while first <= last and (tau[first - 1] == 0 or (w[first], a[first], b[first]) == (w[0], a[0], b[0])):
        first += 1
    while first <= last and (tau[last - 1] == 0 or (w[last], a[last], b[last]) == (w[-1], a[-1], b[-1])):
        last -= 1
    return first, last


def trimmed(stack: Stack, first: int, last: int) -> Stack:
    """The stack without the films that `core_films` leaves out."""
    w, a, b, tau = stack
    if first == 1 and last == len(tau):
        return stack
    w, a, b = ([x[0], *x[first : last + 1], x[-1]] for x in (w, a, b))
    return Stack(w, a, b, tau[first - 1 : last])


def phase_range(s: Stack) -> tuple[float, float]:
    """Cut-off and ceiling of q; films without thickness carry nothing."""
    a, b = s.a, s.b
    low = max(a[0] / b[0], a[-1] / b[-1])
    high = max((a[j + 1] / b[j + 1] for j, tau in enumerate(s.tau) if tau > 0), default=-inf)
    return low, high


def wave_numbers(stack: Stack, q: float) -> tuple[list[float], list[bool]]:
    s, osc = [], []
    for w, a, b in zip(stack.w, stack.a, stack.b):
        g = (a - q * b) / w
        s.append(max(sqrt(abs(g)), SMALLEST_WAVE_NUMBER))
        osc.append(g > 0)
    return s, osc


def sweep(stack: Stack, s: list[float], osc: list[bool], path: range, sized: bool = False) -> list[Edge]:
    """Shoot from one half-space over the layers of `path`, itself first: what `phase.sweep` does, at the entrance of
    each. log R^2 only if `sized`."""
    w, b, tau = stack.w, stack.b, stack.tau
    start, film = path[0], path[1]
    gamma, before = w[film] * s[film], w[start] * s[start]
    r2 = gamma * gamma + before * before
    r = sqrt(r2)
    sn, cs = gamma / r, before / r
    theta, wron = atan2(gamma, before), b[start] / (2 * s[start] * r2)
    size = log(r2) if sized else 0.0
    out = [Edge(theta, sn, cs, wron, size)]
    for following in path[2:]:
        t, sj = tau[film - 1], s[film]
        decay = 1.0
        if osc[film]:
            theta += sj * t
            x, y = sin(theta), cos(theta)
            wron += b[film] * (t - (x * y - sn * cs) / sj) / (2 * gamma * gamma)
        elif t > 0:
            grow, fall = (sn + cs) / 2, (sn - cs) / 2
            decay = exp(-2 * sj * t)
            ebb = fall * decay
            # as in `phase`: without the cancellation where the field falls almost purely
            theta -= atan2(2 * grow * fall * (1 - decay), 2 * (grow * grow + fall * ebb))
            integral = (grow * grow + fall * ebb) * (1 - decay) / (2 * sj) + 2 * grow * ebb * t
            x, y = grow + ebb, grow - ebb
            wron = wron * decay + b[film] * max(integral, 0.0) / (gamma * gamma)
        else:
            x, y = sn, cs
        new = w[following] * s[following]
        ratio = new / gamma
        theta += atan2((ratio - 1) * x * y, y * y + ratio * x * x)
        x *= ratio
        r2 = max(x * x + y * y, _TINY)
        r = sqrt(r2)
        sn, cs = x / r, y / r
        wron /= r2
        if sized:
            size += log(r2) - log(max(decay, _TINY))
        film, gamma = following, new
        out.append(Edge(theta, sn, cs, wron, size))
    return out


def total_phase(stack: Stack, q: float, at_cut_off: bool = False, film: int = 0) -> tuple[float, float, int]:
    """Phase in an oscillating film, its slope in q, and the number of that film: the one given, if the films that
    oscillate lie side by side, else the flattest. See `phase.total_phase`."""
    s, osc = wave_numbers(stack, q)
    if at_cut_off:
        for i in (0, -1):
            s[i] = _NO_DECAY if stack.a[i] / stack.b[i] >= q else s[i]
    last = len(s) - 1
    if film and osc[film] and not parted(osc):
        up = sweep(stack, s, osc, range(0, film + 1))[-1]
        down = sweep(stack, s, osc, range(last, film - 1, -1))[-1]
        return *joined(stack, s, film, up, down), film
    ups = sweep(stack, s, osc, range(0, last))
    downs = sweep(stack, s, osc, range(last, 0, -1))[::-1]
    best = (0.0, -inf, 0)
    for j in range(1, last):
        if osc[j] and stack.tau[j - 1] > 0:
            phase, slope = joined(stack, s, j, ups[j - 1], downs[j - 1])
            if slope > best[1]:
                best = (phase, slope, j)
    return best


def parted(osc: list[bool]) -> bool:
    """Whether films that do not oscillate lie between some that do."""
    return sum(x and not y for x, y in zip(osc[1:], osc)) > 1


def joined(stack: Stack, s: list[float], film: int, up: Edge, down: Edge) -> tuple[float, float]:
    """Phase in a film and its slope in q."""
    w, b, sj, tau = stack.w[film], stack.b[film], s[film], stack.tau[film - 1]
    slope = w * sj * (up.wron + down.wron) + b / (2 * w * sj) * (tau + (up.sin * up.cos + down.sin * down.cos) / sj)
    return up.theta + sj * tau + down.theta, -max(slope, _TINY)
