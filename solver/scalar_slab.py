"""One slab at a time, in plain floats: for a handful of stacks numpy's overhead per call costs more than the sums.

The same mode condition as in `phase` and the same integrals as in `fields`, which hold the derivation; here with the
unknown phi in q = low + (high - low) cos^2 phi, low the cut-off and high the ceiling of q = N^2. In phi the phase is
smooth from cut-off to ceiling.
"""

from __future__ import annotations

from math import asin, atan2, ceil, cos, inf, isnan, nan, pi, sin, sqrt

from .scalar_field import SlabMode, derivatives, whole_field
from .scalar_phase import Stack, coefficients, core_films, parted, phase_range, total_phase, trimmed, wave_numbers

_STEPS = 120
_ROUNDING = 9e-16  # as in `slab`
_TINY = 1e-300
_STEEP = pi / 2 - 1e-6  # nearer to cut-off phi is finer than the rounding of q


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
    stack = coefficients(n, t_um, wavelength_um, tm, n_normal)
    first, last = core_films(stack)
    N = sqrt(_root(trimmed(stack, first, last), order, near)) if first <= last else nan
    if isnan(N):
        return SlabMode(nan, [nan] * len(n), [nan] * len(t_um), nan, [nan] * len(n))
    q = N * N
    field = whole_field(stack, q, first, last)
    return derivatives(stack, q, field, n, n_normal, wavelength_um, tm)


def slab_index(n: list[float], t_um: list[float], wavelength_um: float, order: int, tm: bool) -> float:
    """The effective index alone, as by `slab_mode`."""
    stack = coefficients(n, t_um, wavelength_um, tm, None)
    first, last = core_films(stack)
    return sqrt(_root(trimmed(stack, first, last), order)) if first <= last else nan


def slab_phase(
    n: list[float], t_um: list[float], wavelength_um: float, tm: bool, N: float, n_normal: list[float] | None = None
) -> float:
    """Phase over pi, less one, at an effective index N: as many modes lie above N as there are whole numbers from zero
    up to below it. At or below cut-off N is taken as cut-off."""
    stack = coefficients(n, t_um, wavelength_um, tm, n_normal)
    first, last = core_films(stack)
    if first > last:
        return -1.0
    stack = trimmed(stack, first, last)
    low, high = phase_range(stack)
    q = N * N
    if q >= high or low >= high:
        return -1.0
    return total_phase(stack, max(q, low), q <= low)[0] / pi - 1


def slab_count(
    n: list[float], t_um: list[float], wavelength_um: float, tm: bool, n_normal: list[float] | None = None
) -> int:
    """Number of guided modes of one stack; arguments as for `slab_mode`."""
    return max(ceil(slab_phase(n, t_um, wavelength_um, tm, 0.0, n_normal)), 0)


def _root(stack: Stack, order: int, near: float = nan) -> float:
    """q of mode `order`, NaN where it is not guided."""
    low, high = phase_range(stack)
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
        phase, slope, film = total_phase(stack, q, film=film)
        miss = phase - target
        bottom, top = (phi if miss <= 0 else bottom), (phi if miss >= 0 else top)
        rise = -slope * 2 * span * sn * cs
        step = miss / rise if rise > 0 else inf
        ends = low + span * cos(top) ** 2, low + span * cos(bottom) ** 2
        # Steps that shrink by squares while the phase stays as steep: the next would be below rounding.
        even = abs(rise - rise_before) < 1e-2 * rise and phi < _STEEP
        if even and abs(step) ** 3 < 1e-16 * before * before and not parted(wave_numbers(stack, q)[1]):
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


def _start(stack: Stack, target: float, low: float, span: float) -> float:
    """A first phi from the phase at cut-off, NaN where that falls short of the target: no mode."""
    phase = total_phase(stack, low, True)[0]
    # as `slab._roots` decides it
    if not phase / pi > target / pi:
        return nan
    x = target / phase
    strong = sqrt(span) * sum(stack.tau)
    return asin(min((strong * x + pi / 2 * sin(pi / 2 * x)) / (strong + pi / 2), 1.0))


def _three_layer_root(stack: Stack, order: int, low: float, high: float) -> float:
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
