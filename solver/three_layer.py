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

_BLOCK = 8192
_THREADS = 2
_COARSE_STEPS = 2
_EXTRA_STEPS = 2
_STEPS = 80
# What a third-order step leaves, in radians of phi, when it counts as converged.
_DONE = 1e-16
_TINY = 1e-30
_OPEN = -1.0  # marks a mode that needs more steps
_HALF_PI = np.pi / 2


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
    with np.errstate(invalid="ignore", divide="ignore"):
        s = _wave_number(_edge(layers, order), order, finish)
        N = np.sqrt((layers.a[1] - layers.w[1] * s * s) / layers.b[1])
    return np.asarray(N) if finish else np.where(s == _OPEN, _OPEN, N)


def _isotropic(n: Array, t_um: Array, wavelength_um: Array, tm: Array, order: Array, finish: bool) -> Array:
    """As `solve_layers` for isotropic layers, whose coefficients need no setting up; here s is sqrt(n_film^2 - N^2),
    so that R_i^2 = r_i (n_film^2 - n_i^2 - s^2) with r_i = (n_film / n_i)^4 for TM and 1 for TE."""
    square = np.ascontiguousarray(n.T)
    square = square * square
    film, high, low = square[1], np.maximum(square[0], square[2]), np.minimum(square[0], square[2])
    with np.errstate(invalid="ignore"):
        dl, do = (np.where(tm, (film / x) ** 2, 1.0) for x in (high, low))
        gap = film - high
        tau = t_um * (2 * np.pi / wavelength_um)
        edge = _Edge(np.sqrt(gap), tau, order * np.pi, dl * gap, dl, do * (film - low), do, np.sqrt(dl))
        s = _wave_number(edge, order, finish)
        N = np.sqrt(film - s * s)
    return np.asarray(N) if finish else np.where(s == _OPEN, _OPEN, N)


def _wave_number(edge: _Edge, order: Array, finish: bool) -> Array:
    """s of each mode, NaN where it is not guided."""
    # At cut-off the limiting half-space adds nothing to the phase.
    other = np.sqrt(np.maximum(edge.bo - edge.do * edge.top * edge.top, 0.0))
    excess = edge.top * edge.tau - edge.mpi - np.arctan(other / edge.top)
    guided = (excess > 0) & (order >= 0)
    if guided.all():
        return _settled(edge, excess, finish)
    s = np.full(order.size, np.nan)
    rows = np.flatnonzero(guided)
    if rows.size:
        s[rows] = _settled(edge.take(rows), excess[rows], finish)
    return s


def _settled(edge: _Edge, excess: Array, finish: bool) -> Array:
    s, settled = _solve(edge, excess, _EXTRA_STEPS if finish else 0)
    if settled.all():
        return s
    if not finish:
        return np.where(settled, s, _OPEN)
    rest = np.flatnonzero(~settled)
    few = edge.take(rest)
    s[rest] = few.top * _bracketed(few)
    return s


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


def _solve(e: _Edge, excess: Array, extra: int) -> tuple[Array, NDArray[np.bool_]]:
    """s of the mode after a fixed number of free steps, and whether they were enough.

    Two steps in single precision come within its rounding at half the cost, one in double precision does the rest.
    """
    # F runs from -(m + 1) pi at phi = 0 to `excess` at cut-off, as a sine where the film is thick, as phi where it is
    # thin.
    x = (e.mpi + np.pi) / (excess + e.mpi + np.pi)
    strong = e.top * e.tau
    x2 = x * x
    sine = x * (1.5707963 + x2 * (-0.6459641 + x2 * (0.0796926 - 0.0045248 * x2)))
    sin = np.minimum((strong * x + 1.5708 * sine) / (strong + 1.5708), 1 - 1e-6)
    coarse = _Edge(*(y.astype(np.float32) for y in e))
    sin32: Real = sin.astype(np.float32)
    cos32: Real = np.sqrt((1 - sin32) * (1 + sin32))
    for _ in range(_COARSE_STEPS):
        _, step, _, _ = _halley(sin32, cos32, coarse)
        sin32, cos32 = _turn(sin32, cos32, np.minimum(np.maximum(step, -0.7 * cos32), 0.7 * sin32))
    sin, cos = sin32.astype(float), cos32.astype(float)
    # back onto the circle, which single precision only meets to its rounding
    size = 1 / np.sqrt(sin * sin + cos * cos)
    sin, cos = sin * size, cos * size
    _, step, half, first = _halley(sin, cos, e)
    sin, cos = _turn(sin, cos, np.minimum(np.maximum(step, -0.7 * cos), 0.7 * sin))
    settled = _left(first, half) <= _DONE
    if extra and not settled.all():
        rest = np.flatnonzero(~settled)
        few = e.take(rest)
        for _ in range(extra):
            _, step, half, first = _halley(sin[rest], cos[rest], few)
            step = np.minimum(np.maximum(step, -0.7 * cos[rest]), 0.7 * sin[rest])
            sin[rest], cos[rest] = _turn(sin[rest], cos[rest], step)
        settled[rest] = _left(first, half) <= _DONE
    return e.top * sin, settled


def _left(step: Real, half: Real) -> Real:
    """What a Halley step leaves, estimated from its size and its curvature term."""
    return np.asarray(np.abs(step) * (np.abs(step) + 2 * np.abs(half)) ** 2)


def _halley(sin: Real, cos: Real, e: _Edge) -> tuple[Real, Real, Real, Real]:
    """F, the step to take off phi, its curvature term, and the step once more before any limit."""
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
    bend = across * across * s * u * (e.do / ro2 - 2 * (1 - e.do) / vo) - s * (inner + 2 * k * across * (1 - e.dl) / vl)
    newton = f / slope
    half = 0.5 * newton * bend / slope
    step = newton / np.maximum(1 - half, 0.3)
    return f, step, half, step


def _turn(sin: Real, cos: Real, step: Real) -> tuple[Real, Real]:
    """phi less `step`, to third order in the step and exactly on the circle, without a trigonometric call."""
    h = 0.5 * step
    over = 1 / (1 + h * h)
    c, s = (1 - h * h) * over, 2 * h * over
    return sin * c - cos * s, cos * c + sin * s


def _bracketed(e: _Edge) -> Array:
    """sin(phi) by bracketed steps in phi, for modes that the free steps have not settled."""
    phi = np.full(e.top.size, np.pi / 4)
    lo, hi = np.zeros_like(phi), np.full_like(phi, np.pi / 2)
    out = np.empty_like(phi)
    index = np.arange(phi.size)
    for _ in range(_STEPS):
        f, step, half, _ = _halley(np.sin(phi), np.cos(phi), e)
        hi, lo = np.where(f > 0, phi, hi), np.where(f > 0, lo, phi)
        new = phi - step
        bad = (new <= lo) | (new >= hi)
        new = np.where(bad, 0.5 * (lo + hi), new)
        done = ((_left(step, half) <= _DONE) & ~bad) | (hi - lo <= 4e-16)
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
