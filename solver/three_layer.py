"""Three-layer slab, the commonest case, on a fast path.

With s the film's transverse wave number over k0 and R_i / s the ratio of the decay in half-space i to it, the
condition is

    F = s tau - atan(R_l / s) - atan(R_o / s) - m pi = 0,      R_i^2 = b_i - d_i s^2.

Half-space l is the one that stops guiding first, at s = top. With s = top sin(phi), R_l = top sqrt(d_l) cos(phi), F
is smooth and rising in phi right up to cut-off, its derivatives are rational in sin, cos and R, and Halley's step
(third order) needs one arc tangent an iteration. The batch runs through in blocks that stay in the processor's cache.
"""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from .layers import SMALLEST_WAVE_NUMBER, Array, Layers, flatten

_BLOCK = 16384
_THREADS = 2
_COARSE_STEPS = 2
_STEPS = 80
# What a step leaves, in radians of phi, when it counts as converged.
_DONE = 1e-16
# The same after the bent Newton step; N feels a tenth of it, and N's own rounding is 2e-16.
_FREE = 1e-15
_TINY = 1e-30
_OPEN = -1.0  # marks a mode that needs more steps
_HALF_PI = np.pi / 2
_PI32 = np.float32(np.pi)
# Share of the phase that single precision cannot tell from zero, with room to spare.
_CLOSE = 1e-4


Real = NDArray[np.floating[Any]]  # double, or single for the coarse steps


class _Edge(NamedTuple):
    """Constants of the mode condition; (bl, dl) the half-space that stops guiding first, (bo, do) the
    other; root is sqrt(dl)."""

    top: Real
    tau: Real
    mpi: Real
    bl: Real
    dl: Real
    bo: Real
    do: Real
    root: Real

    def take(self, rows: Any) -> _Edge:
        return _Edge(*(x[rows] for x in self))


def three_layer_index(
    n: Array, n_normal: Array | None, t_um: Array, wavelength_um: Array, tm: Array, order: Array
) -> Array:
    """Effective index of mode `order` (B) for stacks of three layers, NaN where it is not guided.

    n, n_normal: (B, 3); t_um: (B, 1); the rest (B). See `slab.mode_index`.
    """

    def run(p: Any, finish: bool) -> Array:
        if n_normal is None:
            return _isotropic(n[p], t_um[p, 0], wavelength_um[p], tm[p], order[p], finish)
        layers = flatten(n[p], n_normal[p], t_um[p], wavelength_um[p], tm[p], order[p].shape)
        return solve_layers(layers, order[p], finish)

    if order.size <= _BLOCK:
        return run(slice(None), True)
    parts = [slice(i, i + _BLOCK) for i in range(0, order.size, _BLOCK)]
    # numpy lets go of the interpreter lock inside its loops: two threads share the blocks
    with ThreadPoolExecutor(_THREADS) as pool:
        N = np.concatenate(list(pool.map(lambda p: run(p, False), parts)))
    # The few modes that the free steps leave open are cheaper together than block by block.
    rest = np.flatnonzero(N == _OPEN)
    if rest.size:
        N[rest] = run(rest, True)
    return N


def solve_layers(layers: Layers, order: Array, finish: bool = True) -> Array:
    """Effective index of one block (B), NaN where it is not guided; `_OPEN` where unsettled, if not to be finished."""
    with np.errstate(invalid="ignore", over="ignore", divide="ignore"):
        s = _wave_number(_edge(layers, order), order, finish)
        N = np.sqrt((layers.a[1] - layers.w[1] * s * s) / layers.b[1])
    return np.asarray(N) if finish else np.where(s == _OPEN, _OPEN, N)


def _isotropic(n: Array, t_um: Array, wavelength_um: Array, tm: Array, order: Array, finish: bool) -> Array:
    """As `solve_layers` for isotropic layers, whose coefficients need no setting up; here s is sqrt(n_film^2 - N^2),
    so that R_i^2 = r_i (n_film^2 - n_i^2 - s^2) with r_i = (n_film / n_i)^4 for TM and 1 for TE."""
    square = np.ascontiguousarray(n.T)
    square = square * square
    film, high, low = square[1], np.maximum(square[0], square[2]), np.minimum(square[0], square[2])
    with np.errstate(invalid="ignore", over="ignore", divide="ignore"):
        dl, do = (np.where(tm, (film / x) ** 2, 1.0) for x in (high, low))
        gap = film - high
        tau = t_um * (2 * np.pi / wavelength_um)
        edge = _Edge(np.sqrt(gap), tau, order * np.pi, dl * gap, dl, do * (film - low), do, np.sqrt(dl))
        s = _wave_number(edge, order, finish)
        N = np.sqrt(film - s * s)
    return np.asarray(N) if finish else np.where(s == _OPEN, _OPEN, N)


def _wave_number(edge: _Edge, order: Array, finish: bool) -> Array:
    """s of each mode, NaN where it is not guided."""
    coarse = _Edge(*(y.astype(np.float32) for y in edge))
    excess = _excess(coarse)
    close = np.abs(excess) < _CLOSE * (1 + np.abs(coarse.mpi))
    if close.any():  # at cut-off single precision cannot say whether the mode is there
        rows = np.flatnonzero(close)
        excess[rows] = np.where(_excess(edge.take(rows)) > 0, np.maximum(excess[rows], 1e-30), -1.0)
    guided = (excess > 0) & (order >= 0)
    if guided.all():
        return _settled(edge, coarse, excess, finish)
    s = np.full(order.size, np.nan)
    rows = np.flatnonzero(guided)
    if rows.size:
        s[rows] = _settled(edge.take(rows), coarse.take(rows), excess[rows], finish)
    return s


def _excess(e: _Edge) -> Real:
    """F at cut-off, where the limiting half-space adds nothing to the phase."""
    other = np.sqrt(np.maximum(e.bo - e.do * e.top * e.top, 0))
    return np.asarray(e.top * e.tau - e.mpi - np.arctan(other / e.top))


def _settled(edge: _Edge, coarse: _Edge, excess: Real, finish: bool) -> Array:
    sin, open_ = _free_steps(edge, coarse, excess)
    s = edge.top * sin
    if not open_.any():
        return s
    if not finish:
        return np.where(open_, _OPEN, s)
    rest = np.flatnonzero(open_)
    few = edge.take(rest)
    # At cut-off the coarse steps can overflow: any start will do for the brackets then.
    start = np.clip(np.where(np.isfinite(sin[rest]), sin[rest], 0.7), 1e-12, 1 - 1e-12)
    s[rest] = few.top * _finished(few, start)
    return s


def _finished(e: _Edge, sin: Real) -> Array:
    """Two full steps for modes that the free steps have left open, brackets for those that stay so."""
    cos: Real = np.sqrt((1 - sin) * (1 + sin))
    left: Real = np.ones_like(sin)
    for _ in range(2):
        newton, bend = _newton(sin, cos, e, bent=True)
        step = np.minimum(np.maximum(newton / np.maximum(1 - newton * bend, 0.3), -0.7 * cos), 0.7 * sin)
        left = _left(step, newton * bend)
        sin, cos = _turn(sin, cos, step)
    rest = np.flatnonzero(~(left <= _DONE))
    if rest.size:
        sin[rest] = _bracketed(e.take(rest), np.arcsin(np.clip(sin[rest], 1e-12, 1.0)))
    return np.asarray(sin, dtype=float)


def _left(step: Real, half: Real) -> Real:
    """What a Halley step leaves, estimated from its size and its curvature term."""
    return np.asarray(np.abs(step) * (np.abs(step) + 2 * np.abs(half)) ** 2)


def _edge(layers: Layers, order: Array) -> _Edge:
    # q = (a_f - w_f s^2) / b_f, so that -g_i = (q b_i - a_i) / w_i = p_i - q_i s^2.
    over = 1 / layers.b[1]
    (b0, d0), (b1, d1) = (_half_space(layers, over, i) for i in (0, 2))
    first = b0 * d1 <= b1 * d0
    bl, dl = np.where(first, b0, b1), np.where(first, d0, d1)
    bo, do = np.where(first, b1, b0), np.where(first, d1, d0)
    return _Edge(np.sqrt(bl / dl), layers.tau[0], order * np.pi, bl, dl, bo, do, np.sqrt(dl))


def _half_space(layers: Layers, over: Array, i: int) -> tuple[Array, Array]:
    """b and d of R^2 = b - d s^2 for half-space i."""
    w, a, b = layers.w, layers.a, layers.b
    share = b[i] * over / w[i]
    scale = (w[i] / w[1]) ** 2
    return scale * (a[1] * share - a[i] / w[i]), scale * w[1] * share


def _free_steps(e: _Edge, coarse: _Edge, excess: Real) -> tuple[Array, NDArray[np.bool_]]:
    """sin(phi) of the mode, and where the steps were not enough.

    Two Halley steps in single precision come within its rounding at less than half the cost. A Newton step in double
    precision, bent by the curvature that the last of them found, does the rest.
    """
    # F runs from -(m + 1) pi at phi = 0 to `excess` at cut-off, as a sine where the film is thick, as phi where it is
    # thin.
    x = (coarse.mpi + _PI32) / (excess + coarse.mpi + _PI32)
    strong = coarse.top * coarse.tau
    x2 = x * x
    sine = x * (np.float32(1.5707963) + x2 * (np.float32(-0.6459641) + x2 * np.float32(0.0751678)))
    sin32: Real = np.minimum((strong * x + _PI32 / 2 * sine) / (strong + _PI32 / 2), np.float32(1 - 1e-6))
    cos32: Real = np.sqrt((1 - sin32) * (1 + sin32))
    step: Real = x
    bend: Real = x
    for _ in range(_COARSE_STEPS):
        newton, bend = _newton(sin32, cos32, coarse, bent=True)
        step = newton / np.maximum(1 - newton * bend, np.float32(0.3))
        step = np.minimum(np.maximum(step, np.float32(-0.7) * cos32), np.float32(0.7) * sin32)
        sin32, cos32 = _turn(sin32, cos32, step)
    sin: Real = sin32.astype(float)
    cos: Real = np.sqrt((1 - sin) * (1 + sin))
    newton, _ = _newton(sin, cos, e, bent=False)
    last = newton * (1 + newton * bend)
    # The curvature was taken one single-precision step away: that share of the bent term is what is left.
    left = newton * newton * (1 + np.abs(bend)) * (4 * np.abs(step) + np.float32(1e-3))
    return np.asarray(sin - last * (cos + 0.5 * last * sin), dtype=float), ~(left < _FREE)


def _newton(sin: Real, cos: Real, e: _Edge, *, bent: bool) -> tuple[Real, Real]:
    """Newton's step to take off phi, and F'' / (2 F') where asked for (else zero)."""
    s = e.top * sin
    s2 = s * s
    across = e.top * cos
    rl = e.root * across
    ro2 = np.maximum(e.bo - e.do * s2, _TINY)
    ro = np.sqrt(ro2)
    # atan(R_l / s) + atan(R_o / s) in one, on (0, pi); s > 0, so the quotient is finite except at s = 0
    f = s * e.tau - (e.mpi + _HALF_PI) + np.arctan((s2 - rl * ro) / (s * (rl + ro)))
    # d atan(R/s)/ds = -u with u = b / (R V), V = s^2 + R^2; for the limiting side u ds/dphi = k stays finite.
    vl, vo = s2 + rl * rl, s2 + ro2
    k = e.bl / (e.root * vl)
    u = e.bo / (ro * vo)
    inner = e.tau + u
    slope = across * inner + k
    if not bent:
        return f / slope, np.zeros(())
    bend = across * across * s * u * (e.do / ro2 - 2 * (1 - e.do) / vo) - s * (inner + 2 * k * across * (1 - e.dl) / vl)
    half = 1 / (2 * slope)
    return 2 * f * half, bend * half


def _turn(sin: Real, cos: Real, step: Real) -> tuple[Real, Real]:
    """phi less `step`, to third order in the step and exactly on the circle, without a trigonometric call."""
    h = step / 2
    over = 1 / (1 + h * h)
    c, s = (1 - h * h) * over, 2 * h * over
    return sin * c - cos * s, cos * c + sin * s


def _bracketed(e: _Edge, phi: Array) -> Array:
    """sin(phi) by bracketed steps in phi, for modes that the free steps have not settled."""
    lo, hi = np.zeros_like(phi), np.full_like(phi, np.pi / 2)
    out = np.empty_like(phi)
    index = np.arange(phi.size)
    for _ in range(_STEPS):
        newton, bend = _newton(np.sin(phi), np.cos(phi), e, bent=True)
        half = newton * bend
        step = newton / np.maximum(1 - half, 0.3)
        hi, lo = np.where(newton > 0, phi, hi), np.where(newton > 0, lo, phi)
        new = phi - step
        bad = (new <= lo) | (new >= hi)
        new = np.where(bad, 0.5 * (lo + hi), new)
        still = np.abs(step) <= 4e-16  # below the rounding of phi; F rises everywhere, so this is the root
        new = np.where(still, phi, new)
        done = ((_left(step, half) <= _DONE) & ~bad) | still | (hi - lo <= 4.5e-16)
        out[index[done]] = np.sin(new[done])
        keep = ~done
        if not keep.any():
            return out
        index, lo, hi, phi = index[keep], lo[keep], hi[keep], new[keep]
        e = e.take(keep)
    raise ArithmeticError(f"three-layer mode search did not converge for {index.size} modes")


def three_layer_derivatives(layers: Layers, N: Array, wavelength_um: Array) -> tuple[Array, Array, Array, Array]:
    """dN/dn in the plane (3, B), along the normal (3, B), dN/dt (1, B) and dN/dwavelength (1, B); see `fields`.

    The film's field is a sine of amplitude 1, so edge values and integrals follow from the three wave numbers alone.
    """
    w, a, b, tau = layers.w, layers.a, layers.b, layers.tau[0]
    q = N * N
    gap = a - q * b
    s = np.sqrt(np.maximum(np.abs(gap / w), SMALLEST_WAVE_NUMBER**2))
    gamma = w * s
    square = gamma * gamma
    rest = 1 / (square[1] + square[0::2])  # psi^2 at the two edges, for v^2 + gamma^2 psi^2 = 1
    bow = (gamma[0::2] * rest).sum(axis=0)  # -[psi v] over the film
    height = 1 / w[1]
    psi2, wpsi1 = np.empty_like(w), np.empty_like(w)
    psi2[0::2], wpsi1[0::2] = rest / (2 * s[0::2]), gamma[0::2] * rest / 2
    psi2[1] = (tau * height + bow) / (2 * gap[1])
    wpsi1[1] = (tau * height - bow) / 2
    scale = 1 / (2 * N * (b * psi2).sum(axis=0))
    tm = (a == 1).all(axis=0)
    along = np.where(tm, 2 * np.sqrt(w) * wpsi1, 2 * np.sqrt(a) * psi2) * scale
    normal = np.where(tm, 2 * q * b * np.sqrt(b) * psi2 * scale, 0.0)
    dt = height * scale * (2 * np.pi / wavelength_um)
    dl = -2 * wpsi1.sum(axis=0) * scale / wavelength_um
    return along, normal, dt[None], dl[None]
