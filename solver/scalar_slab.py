"""One slab at a time, in plain floats: for a handful of stacks numpy's overhead per call costs more than the sums.

The same mode condition as in `phase` and the same integrals as in `fields`, which hold the derivation; here with the
unknown phi in q = low + (high - low) cos^2 phi, low the cut-off and high the ceiling of q = N^2. In phi the phase is
smooth from cut-off to ceiling.
"""

from __future__ import annotations

from math import asin, atan2, ceil, cos, exp, inf, isnan, log, nan, pi, sin, sinh, sqrt
from typing import NamedTuple

from .layers import SMALLEST_WAVE_NUMBER

_STEPS = 120
_ROUNDING = 9e-16  # as in `slab`
_NO_DECAY = 1e-30  # as in `phase`
_TINY = 1e-300
_THICK = 1.0  # as in `fields`
_STEEP = pi / 2 - 1e-6  # nearer to cut-off phi is finer than the rounding of q


class SlabMode(NamedTuple):
    """Effective index of one mode and its derivatives, all NaN where it is not guided: N; dn, a list of L; dt_per_um, a
    list of L-2; dwavelength_per_um at fixed indices; dn_normal, a list of L, zero where layers are isotropic."""

    N: float
    dn: list[float]
    dt_per_um: list[float]
    dwavelength_per_um: float
    dn_normal: list[float]


class _Stack(NamedTuple):
    """Coefficients as in `layers`: w, a, b of all layers, tau of the films."""

    w: list[float]
    a: list[float]
    b: list[float]
    tau: list[float]


class _Integrals(NamedTuple):
    """Of a mode's field: integrals of psi^2 and w psi'^2 over all layers, h of the films, psi^2 at the two ends."""

    psi2: list[float]
    wpsi1: list[float]
    h: list[float]
    ends: tuple[float, float]


class _Edge(NamedTuple):
    """Where a sweep enters a film: angle, its sine and cosine, integral of b psi^2 so far over R^2, log R^2."""

    theta: float
    sin: float
    cos: float
    wron: float
    log_r2: float


def slab_mode(
    n: list[float],
    t_um: list[float],
    wavelength_um: float,
    order: int,
    tm: bool,
    n_normal: list[float] | None = None,
    near: float = nan,
) -> SlabMode:
    """Mode `order` of one stack with its derivatives; arguments and accuracy as for `slab.mode_index`, unchecked.

    n: L indices from the substrate up; t_um: L-2 thicknesses, zero allowed; n_normal: indices along the normal where
    layers are uniaxial (TM); near: an index to start from, which saves steps.
    """
    stack = _coefficients(n, t_um, wavelength_um, tm, n_normal)
    first, last = _core(stack)
    N = sqrt(_root(_trimmed(stack, first, last), order, near)) if first <= last else nan
    if isnan(N):
        return SlabMode(nan, [nan] * len(n), [nan] * len(t_um), nan, [nan] * len(n))
    q = N * N
    field = _whole_field(stack, q, first, last)
    return _derivatives(stack, q, field, n, n_normal, wavelength_um, tm)


def slab_index(n: list[float], t_um: list[float], wavelength_um: float, order: int, tm: bool) -> float:
    """The effective index alone, as by `slab_mode`."""
    stack = _coefficients(n, t_um, wavelength_um, tm, None)
    first, last = _core(stack)
    return sqrt(_root(_trimmed(stack, first, last), order)) if first <= last else nan


def slab_phase(
    n: list[float], t_um: list[float], wavelength_um: float, tm: bool, N: float, n_normal: list[float] | None = None
) -> float:
    """Phase over pi, less one, at an effective index N: as many modes lie above N as there are whole numbers from zero
    up to below it. At or below cut-off N is taken as cut-off."""
    stack = _coefficients(n, t_um, wavelength_um, tm, n_normal)
    first, last = _core(stack)
    if first > last:
        return -1.0
    stack = _trimmed(stack, first, last)
    low, high = _range(stack)
    q = N * N
    if q >= high or low >= high:
        return -1.0
    return _total_phase(stack, max(q, low), q <= low)[0] / pi - 1


def slab_count(
    n: list[float], t_um: list[float], wavelength_um: float, tm: bool, n_normal: list[float] | None = None
) -> int:
    """Number of guided modes of one stack; arguments as for `slab_mode`."""
    return max(ceil(slab_phase(n, t_um, wavelength_um, tm, 0.0, n_normal)), 0)


def _coefficients(
    n: list[float], t_um: list[float], wavelength_um: float, tm: bool, n_normal: list[float] | None
) -> _Stack:
    k0 = 2 * pi / wavelength_um
    tau = [k0 * t for t in t_um]
    if not tm:
        return _Stack([1.0] * len(n), [x * x for x in n], [1.0] * len(n), tau)
    w = [1 / (x * x) for x in n]
    return _Stack(w, [1.0] * len(n), w if n_normal is None else [1 / (x * x) for x in n_normal], tau)


def _core(stack: _Stack) -> tuple[int, int]:
    """First and last film that differ from the half-space on their side; those beyond have its index or no thickness.
    The first exceeds the last where there is none."""
    w, a, b, tau = stack
    first, last = 1, len(tau)
    while first <= last and (tau[first - 1] == 0 or (w[first], a[first], b[first]) == (w[0], a[0], b[0])):
        first += 1
    while first <= last and (tau[last - 1] == 0 or (w[last], a[last], b[last]) == (w[-1], a[-1], b[-1])):
        last -= 1
    return first, last


def _trimmed(stack: _Stack, first: int, last: int) -> _Stack:
    """The stack without the films that `_core` leaves out."""
    w, a, b, tau = stack
    if first == 1 and last == len(tau):
        return stack
    w, a, b = ([x[0], *x[first : last + 1], x[-1]] for x in (w, a, b))
    return _Stack(w, a, b, tau[first - 1 : last])


def _range(s: _Stack) -> tuple[float, float]:
    """Cut-off and ceiling of q; films without thickness carry nothing."""
    a, b = s.a, s.b
    low = max(a[0] / b[0], a[-1] / b[-1])
    high = max((a[j + 1] / b[j + 1] for j, tau in enumerate(s.tau) if tau > 0), default=-inf)
    return low, high


def _wave_numbers(stack: _Stack, q: float) -> tuple[list[float], list[bool]]:
    s, osc = [], []
    for w, a, b in zip(stack.w, stack.a, stack.b):
        g = (a - q * b) / w
        s.append(max(sqrt(abs(g)), SMALLEST_WAVE_NUMBER))
        osc.append(g > 0)
    return s, osc


def _sweep(stack: _Stack, s: list[float], osc: list[bool], path: range, sized: bool = False) -> list[_Edge]:
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
    out = [_Edge(theta, sn, cs, wron, size)]
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
        out.append(_Edge(theta, sn, cs, wron, size))
    return out


def _total_phase(stack: _Stack, q: float, at_cut_off: bool = False, film: int = 0) -> tuple[float, float, int]:
    """Phase in an oscillating film, its slope in q, and the number of that film: the one given, if the films that
    oscillate lie side by side, else the flattest. See `phase.total_phase`."""
    s, osc = _wave_numbers(stack, q)
    if at_cut_off:
        for i in (0, -1):
            s[i] = _NO_DECAY if stack.a[i] / stack.b[i] >= q else s[i]
    last = len(s) - 1
    if film and osc[film] and not _parted(osc):
        up = _sweep(stack, s, osc, range(0, film + 1))[-1]
        down = _sweep(stack, s, osc, range(last, film - 1, -1))[-1]
        return *_joined(stack, s, film, up, down), film
    ups = _sweep(stack, s, osc, range(0, last))
    downs = _sweep(stack, s, osc, range(last, 0, -1))[::-1]
    best = (0.0, -inf, 0)
    for j in range(1, last):
        if osc[j] and stack.tau[j - 1] > 0:
            phase, slope = _joined(stack, s, j, ups[j - 1], downs[j - 1])
            if slope > best[1]:
                best = (phase, slope, j)
    return best


def _parted(osc: list[bool]) -> bool:
    """Whether films that do not oscillate lie between some that do."""
    return sum(x and not y for x, y in zip(osc[1:], osc)) > 1


def _joined(stack: _Stack, s: list[float], film: int, up: _Edge, down: _Edge) -> tuple[float, float]:
    """Phase in a film and its slope in q."""
    w, b, sj, tau = stack.w[film], stack.b[film], s[film], stack.tau[film - 1]
    slope = w * sj * (up.wron + down.wron) + b / (2 * w * sj) * (tau + (up.sin * up.cos + down.sin * down.cos) / sj)
    return up.theta + sj * tau + down.theta, -max(slope, _TINY)


def _root(stack: _Stack, order: int, near: float = nan) -> float:
    """q of mode `order`, NaN where it is not guided."""
    low, high = _range(stack)
    if not high > low or order < 0:
        return nan
    if len(stack.tau) == 1:
        return _three_layer_root(stack, order, low, high)
    target, span = (order + 1) * pi, high - low
    bottom, top = 0.0, pi / 2  # of phi: the phase rises with it
    phi = _start(stack, target, low, span) if isnan(near) else asin(sqrt(min(max((high - near**2) / span, 0.0), 1.0)))
    if isnan(phi):
        return nan
    before, rise_before, film = inf, 0.0, 0
    for _ in range(_STEPS):
        sn, cs = sin(phi), cos(phi)
        q = min(low + span * cs * cs, high * (1 - 1e-15))
        phase, slope, film = _total_phase(stack, q, film=film)
        miss = phase - target
        bottom, top = (phi if miss <= 0 else bottom), (phi if miss >= 0 else top)
        rise = -slope * 2 * span * sn * cs
        step = miss / rise if rise > 0 else inf
        ends = low + span * cos(top) ** 2, low + span * cos(bottom) ** 2
        # Steps that shrink by squares while the phase stays as steep: the next would be below rounding.
        even = abs(rise - rise_before) < 1e-2 * rise and phi < _STEEP
        if even and abs(step) ** 3 < 1e-16 * before * before and not _parted(_wave_numbers(stack, q)[1]):
            return low + span * cos(phi - step) ** 2
        if abs(miss) <= _ROUNDING * target or ends[1] - ends[0] <= 4 * _ROUNDING * q:
            if not isnan(near):
                return _root(stack, order)  # the start was none: does the mode exist?
            return min(max(q - miss / slope, ends[0]), ends[1])
        # Half way between nearly degenerate modes Newton's step vanishes far from either: a step below rounding counts
        # only once the far side of the root has been seen.
        shortest = max(_ROUNDING * q / (span * max(sn * cs, 1e-9)), 2.5e-16 * phi)
        if abs(step) < shortest:
            step = shortest if step > 0 else -shortest
        before, rise_before = step, rise
        new = phi - step
        phi = new if bottom <= new <= top and abs(step) <= (top - bottom) / 2 else (bottom + top) / 2
    raise ArithmeticError(f"mode search did not converge for mode {order} of the stack {stack}")


def _start(stack: _Stack, target: float, low: float, span: float) -> float:
    """A first phi from the phase at cut-off, NaN where that falls short of the target: no mode."""
    phase = _total_phase(stack, low, True)[0]
    # as `slab._roots` decides it
    if not phase / pi > target / pi:
        return nan
    x = target / phase
    strong = sqrt(span) * sum(stack.tau)
    return asin(min((strong * x + pi / 2 * sin(pi / 2 * x)) / (strong + pi / 2), 1.0))


def _three_layer_root(stack: _Stack, order: int, low: float, high: float) -> float:
    """The same for a single film, whose condition needs no sweep: see `three_layer`."""
    w, a, b = stack.w, stack.a, stack.b
    tau = stack.tau[0]
    shares = []
    for i in (0, 2):
        # R^2 = p - d s^2 for a half-space, s the film's wave number
        share = b[i] / (b[1] * w[i])
        scale = (w[i] / w[1]) ** 2
        shares.append((scale * (a[1] * share - a[i] / w[i]), scale * w[1] * share))
    (bl, dl), (bo, do) = sorted(shares, key=lambda x: x[0] / x[1])
    edge = sqrt(max(bl / dl, 0.0))
    other = sqrt(max(bo - do * edge * edge, 0.0))
    excess = edge * tau - order * pi - atan2(other, edge)
    if not excess > 0:
        return nan
    root = sqrt(dl)
    bottom, top = 0.0, pi / 2
    x = (order + 1) * pi / (excess + (order + 1) * pi)
    phi = pi / 2 * x if edge * tau < 4 else atan2(x, sqrt(1 - x * x)) if x < 1 else pi / 2
    for _ in range(_STEPS):
        sn, cs = sin(phi), cos(phi)
        s, across = edge * sn, edge * cs
        rl = root * across
        ro2 = max(bo - do * s * s, 1e-30)
        ro = sqrt(ro2)
        f = s * tau - order * pi - atan2(rl, s) - atan2(ro, s)
        vl, vo = s * s + rl * rl, s * s + ro2
        k, u = bl / (root * vl), bo / (ro * vo)
        slope = across * (tau + u) + k
        bend = across * across * s * u * (do / ro2 - 2 * (1 - do) / vo) - s * (tau + u + 2 * k * across * (1 - dl) / vl)
        newton = f / slope
        half = newton * bend / (2 * slope)
        step = newton / max(1 - half, 0.3)
        bottom, top = (bottom, phi) if f > 0 else (phi, top)
        new = phi - step
        inside = bottom < new < top
        if (inside and abs(step) * (abs(step) + 2 * abs(half)) ** 2 <= 1e-16) or abs(step) <= 4e-16:
            phi = new if inside else phi
            break
        phi = new if inside else (bottom + top) / 2
        if top - bottom <= 4.5e-16:
            break
    else:
        raise ArithmeticError(f"three-layer mode search did not converge for mode {order} of the stack {stack}")
    s = edge * sin(phi)
    return (a[1] - w[1] * s * s) / b[1]


def _derivatives(
    stack: _Stack,
    q: float,
    field: _Integrals,
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


def _whole_field(stack: _Stack, q: float, first: int, last: int) -> _Integrals:
    """The field of the trimmed stack, and the layers left out filled in: there it falls as in the half-space."""
    core = _trimmed(stack, first, last)
    psi2, wpsi1, h, ends = (_film_field if first == last else _field)(core, q)
    films = len(stack.tau)
    if last - first == films - 1:
        return _Integrals(psi2, wpsi1, h, ends)
    low = _tail(stack, q, 0, range(first - 1, 0, -1), ends[0])
    high = _tail(stack, q, films + 1, range(last + 1, films + 1), ends[1])
    psi2, wpsi1, h = (x[::-1] + y + z for x, y, z in zip(low, (psi2[1:-1], wpsi1[1:-1], h), high))
    return _Integrals(psi2, wpsi1, h, ends)


def _tail(
    stack: _Stack, q: float, end: int, films: range, psi_squared: float
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


def _film_field(stack: _Stack, q: float) -> _Integrals:
    """The field of three layers, in the film a sine of amplitude 1."""
    w, a, b, tau = stack
    gap = a[1] - q * b[1]
    s = [max(sqrt(abs(x - q * y) / z), SMALLEST_WAVE_NUMBER) for x, y, z in zip(a, b, w)]
    g0, g1, g2 = (x * y for x, y in zip(w, s))
    rest0, rest2 = 1 / (g1 * g1 + g0 * g0), 1 / (g1 * g1 + g2 * g2)
    bow, height = g0 * rest0 + g2 * rest2, 1 / w[1]
    psi2 = [rest0 / (2 * s[0]), (tau[0] * height + bow) / (2 * gap), rest2 / (2 * s[2])]
    wpsi1 = [g0 * rest0 / 2, (tau[0] * height - bow) / 2, g2 * rest2 / 2]
    return _Integrals(psi2, wpsi1, [height], (rest0, rest2))


def _field(stack: _Stack, q: float) -> _Integrals:
    """The field of any stack, the two sweeps joined in the film where the phase is flattest."""
    w, a, b, tau = stack
    s, osc = _wave_numbers(stack, q)
    films = len(tau)
    up = _sweep(stack, s, osc, range(0, films + 1), sized=True)
    down = _sweep(stack, s, osc, range(films + 1, 0, -1), sized=True)[::-1]
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
    return _Integrals(psi2, wpsi1, h, (psi_l[0] ** 2, psi_h[-1] ** 2))


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
