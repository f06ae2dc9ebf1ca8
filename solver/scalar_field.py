"""Field integrals of one mode in plain floats, and the derivatives that follow: the same as in `fields`."""

from __future__ import annotations

from math import cos, exp, inf, pi, sin, sinh, sqrt
from typing import NamedTuple

from .layers import SMALLEST_WAVE_NUMBER
from .scalar_phase import Stack, sweep, trimmed, wave_numbers

_THICK = 1.0  # as in `fields`


class SlabMode(NamedTuple):
    """Effective index of one mode and its derivatives, all NaN where it is not guided: N; dn, a list of L; dt_per_um, a
    list of L-2; dwavelength_per_um at fixed indices; dn_normal, a list of L, zero where layers are isotropic."""

    N: float
    dn: list[float]
    dt_per_um: list[float]
    dwavelength_per_um: float
    dn_normal: list[float]


class Integrals(NamedTuple):
    """Of a mode's field: integrals of psi^2 and w psi'^2 over all layers, h of the films, psi^2 at the two ends."""

    psi2: list[float]
    wpsi1: list[float]
    h: list[float]
    ends: tuple[float, float]


def derivatives(
    stack: Stack,
    q: float,
    field: Integrals,
    n: list[float],
    n_normal: list[float] | None,
    wavelength_um: float,
    tm: bool,
) -> SlabMode:
    """The variation theorem of `fields`."""
    N = sqrt(q)
    psi2, wpsi1, h, _ends = field
    total = 2 * N * sum(x * y for x, y in zip(stack.b, psi2))
    if tm:
        dn = [2 * y / (x * total) for x, y in zip(n, wpsi1)]
        normal = n if n_normal is None else n_normal
        dn_normal = [2 * q * x / (y * y * y * total) for x, y in zip(psi2, normal)]
        if n_normal is None:
            dn, dn_normal = [x + y for x, y in zip(dn, dn_normal)], [0.0] * len(n)
    else:
        dn, dn_normal = [2 * x * y / total for x, y in zip(n, psi2)], [0.0] * len(n)
    k0 = 2 * pi / wavelength_um
    dwavelength = -2 * sum(wpsi1) / (total * wavelength_um)
    return SlabMode(N, dn, [x / total * k0 for x in h], dwavelength, dn_normal)


def whole_field(stack: Stack, q: float, first: int, last: int) -> Integrals:
    """The field of the trimmed stack, and the layers left out filled in: there it falls as in the half-space."""
    core = trimmed(stack, first, last)
    psi2, wpsi1, h, ends = (_film_field if first == last else _field)(core, q)
    films = len(stack.tau)
    if last - first == films - 1:
        return Integrals(psi2, wpsi1, h, ends)
    low = _tail(stack, q, 0, range(first - 1, 0, -1), ends[0])
    high = _tail(stack, q, films + 1, range(last + 1, films + 1), ends[1])
    psi2, wpsi1, h = (x[::-1] + y + z for x, y, z in zip(low, (psi2[1:-1], wpsi1[1:-1], h), high))
    return Integrals(psi2, wpsi1, h, ends)


def _tail(
    stack: Stack, q: float, end: int, films: range, psi_squared: float
) -> tuple[list[float], list[float], list[float]]:
    """Integrals of psi^2 and w psi'^2 and h outwards over the films left out on one side, the half-space `end` last."""
    w, b = stack.w[end], stack.b[end]
    s = max(sqrt(abs((stack.a[end] - q * b) / w)), SMALLEST_WAVE_NUMBER)
    v_squared = (w * s) ** 2 * psi_squared
    psi2, wpsi1, h = [], [], []
    here = 1.0
    for j in films:
        there = here * exp(-2 * s * stack.tau[j - 1])
        psi2.append(psi_squared * (here - there) / (2 * s))
        wpsi1.append(w * s * s * psi2[-1])
        h.append((v_squared / stack.w[j] + (stack.a[j] - q * stack.b[j]) * psi_squared) * here)
        here = there
    psi2.append(psi_squared * here / (2 * s))
    wpsi1.append(w * s * s * psi2[-1])
    return psi2, wpsi1, h


def _film_field(stack: Stack, q: float) -> Integrals:
    """The field of three layers, in the film a sine of amplitude 1."""
    w, a, b, tau = stack
    gap = a[1] - q * b[1]
    s = [max(sqrt(abs(x - q * y) / z), SMALLEST_WAVE_NUMBER) for x, y, z in zip(a, b, w)]
    g0, g1, g2 = (x * y for x, y in zip(w, s))
    rest0, rest2 = 1 / (g1 * g1 + g0 * g0), 1 / (g1 * g1 + g2 * g2)
    bow, height = g0 * rest0 + g2 * rest2, 1 / w[1]
    psi2 = [rest0 / (2 * s[0]), (tau[0] * height + bow) / (2 * gap), rest2 / (2 * s[2])]
    wpsi1 = [g0 * rest0 / 2, (tau[0] * height - bow) / 2, g2 * rest2 / 2]
    return Integrals(psi2, wpsi1, [height], (rest0, rest2))


def _field(stack: Stack, q: float) -> Integrals:
    """The field of any stack, the two sweeps joined in the film where the phase is flattest."""
    w, a, b, tau = stack
    s, osc = wave_numbers(stack, q)
    films = len(tau)
    up = sweep(stack, s, osc, range(0, films + 1), sized=True)
    down = sweep(stack, s, osc, range(films + 1, 0, -1), sized=True)[::-1]
    gamma = [x * y for x, y in zip(w, s)]
    slopes = [
        gamma[j + 1] * (up[j].wron + down[j].wron) + tau[j] * b[j + 1] / (2 * gamma[j + 1])
        if osc[j + 1] and tau[j] > 0
        else inf
        for j in range(films)
    ]
    m = slopes.index(min(slopes))
    end = up[m].theta + s[m + 1] * tau[m]
    sign = -1.0 if cos(end + down[m].theta) > 0 else 1.0
    psi_l, v_l, psi_h, v_h = ([0.0] * films for _ in range(4))
    for j in range(films):
        if j <= m:
            scale = exp((up[j].log_r2 - up[m].log_r2) / 2)
            psi_l[j], v_l[j] = up[j].sin * scale / gamma[j + 1], up[j].cos * scale
        if j > m:
            scale = exp((down[j].log_r2 - down[m].log_r2) / 2) * sign
            psi_h[j], v_h[j] = down[j].sin * scale / gamma[j + 1], -down[j].cos * scale
    psi_h[:m], v_h[:m] = psi_l[1 : m + 1], v_l[1 : m + 1]
    psi_l[m + 1 :], v_l[m + 1 :] = psi_h[m:-1], v_h[m:-1]
    sn, cs = sin(s[m + 1] * tau[m]), cos(s[m + 1] * tau[m])
    psi_h[m] = psi_l[m] * cs + v_l[m] / gamma[m + 1] * sn
    v_h[m] = v_l[m] * cs - psi_l[m] * gamma[m + 1] * sn
    if m + 1 < films:
        psi_l[m + 1], v_l[m + 1] = psi_h[m], v_h[m]
    psi2 = [psi_l[0] ** 2 / (2 * s[0])]
    wpsi1 = [gamma[0] * psi_l[0] ** 2 / 2]
    h = []
    for j in range(films):
        one, two = _integrals(w[j + 1], s[j + 1], osc[j + 1], tau[j], psi_l[j], v_l[j], psi_h[j])
        psi2.append(one)
        wpsi1.append(two)
        psi, v = (psi_l[j], v_l[j]) if abs(psi_l[j]) <= abs(psi_h[j]) else (psi_h[j], v_h[j])
        h.append(v * v / w[j + 1] + (a[j + 1] - q * b[j + 1]) * psi * psi)
    psi2.append(psi_h[-1] ** 2 / (2 * s[-1]))
    wpsi1.append(gamma[-1] * psi_h[-1] ** 2 / 2)
    return Integrals(psi2, wpsi1, h, (psi_l[0] ** 2, psi_h[-1] ** 2))


def _integrals(
    w: float, s: float, oscillates: bool, tau: float, psi: float, v: float, far: float
) -> tuple[float, float]:
    """Integrals of psi^2 and w psi'^2 over one film: `fields`."""
    if tau == 0:
        return 0.0, 0.0
    x = s * tau
    if not oscillates and x > _THICK:
        e = exp(-x)
        share = 1 - e * e
        grow, fall = (far - psi * e) / share, (psi - far * e) / share
        square, cross = (grow**2 + fall**2) * share / (2 * s), 2 * grow * fall * tau * e
        return square + cross, w * s * s * (square - cross)
    sign = 1.0 if oscillates else -1.0
    g, z = sign * s * s, sign * x * x
    wave = sin if oscillates else sinh
    sigma = wave(x) / x if x > 1e-150 else 1.0
    if abs(z) < 0.02:
        rest = 1 / 3 - z / 15 * (1 - 2 * z / 21 * (1 - z / 18 * (1 - 2 * z / 55 * (1 - z / 39))))
    else:
        rest = (1 - wave(2 * x) / (2 * x)) / (2 * z)
    cc, cs, ss = tau * (1 - z * rest), (tau * sigma) ** 2 / 2, tau**3 * rest
    slope = v / w
    psi2 = psi * psi * cc + 2 * psi * slope * cs + slope * slope * ss
    wpsi1 = w * (slope * slope * cc - 2 * g * psi * slope * cs + (g * psi) ** 2 * ss)
    return psi2, wpsi1
