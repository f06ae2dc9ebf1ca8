"""Complex modes of open and absorbing stacks: modes that leak into a high-index half-space, or are absorbed.

Time dependence exp(+j w t - j beta z): loss is a negative imaginary part of N. In the notation of `layers`, with
complex a, b, w the field of the mode condition is carried upwards from the substrate and downwards from the cover by
2 x 2 matrices; the mismatch at a film is the mode condition, its derivative in q = N^2 comes from the same sweep. In
each half-space the branch of the transverse wave number is fixed: decaying where the half-space's index lies below Re
N, outgoing where it lies above (the wave of a leaky mode travels away and, in a lossless half-space, grows outwards).

    you want                                           use
    a film on a high-index substrate, given orders     leaky_index (vectorised; orders of the closed companion)
    all modes of one stack in a window                 layerlot.solver.complex_search.complex_modes
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .layers import batch_shape
from .slab import mode_index

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]
Flags = NDArray[np.bool_]

_MAX_STEPS = 40
# Newton from the companion's root may move N by its coupling to the half-space; more than this share of the distance
# to the neighbouring order would be another mode.
_FARTHEST_SHARE = 0.5
_ROUNDING = 1e-15
DB_PER_NEPER = 20 / np.log(10)


def loss_dB_per_cm(N: ArrayLike, wavelength_um: ArrayLike) -> Array:  # noqa: N802 (dB is the unit)
    """Power loss in dB/cm of a complex effective index (...); wavelength in µm. Positive for decay."""
    k0_per_cm = 2e4 * np.pi / np.asarray(wavelength_um, dtype=float)
    return np.asarray(-DB_PER_NEPER * k0_per_cm * np.asarray(N, dtype=complex).imag)


@dataclass(frozen=True, slots=True)
class ComplexDerivatives:
    """As `fields.SlabDerivatives`, complex: dN/dn (..., L), dN/dn_normal (..., L), dN/dt in 1/µm (..., L-2) and
    dN/dwavelength in 1/µm (...)."""

    dn: Complex
    dn_normal: Complex
    dt_per_um: Complex
    dwavelength_per_um: Complex


class Stack:
    """Complex coefficients (L, B) of a batch, and tau (L - 2, B)."""

    def __init__(self, n: Complex, n_normal: Complex | None, t_um: Array, wavelength_um: Array, tm: Flags) -> None:
        """n, n_normal: (B, L); t_um (B, L-2); wavelength_um, tm (B)."""
        n2 = n.T**2
        m2 = n2 if n_normal is None else n_normal.T**2
        one = np.ones_like(n2)
        self.w = np.where(tm, 1 / n2, one)
        self.a = np.where(tm, one, n2)
        self.b = np.where(tm, 1 / m2, one)
        self.tau = t_um.T * (2 * np.pi / wavelength_um)

    def take(self, rows: Any) -> Stack:
        out = object.__new__(Stack)
        out.w, out.a, out.b, out.tau = self.w[:, rows], self.a[:, rows], self.b[:, rows], self.tau[:, rows]
        return out


def half_space(stack: Stack, q: Complex, i: int, outgoing: Flags) -> Complex:
    """Decay constant g of half-space i, field exp(-g x) outwards: g^2 = (q b - a) / w on the branch asked for.

    Decaying: Re g > 0. Outgoing: with exp(+j w t), exp(-g x) travels outwards for Im g > 0.
    """
    g = np.sqrt((q * stack.b[i] - stack.a[i]) / stack.w[i])
    g = np.where(g.real < 0, -g, g)
    flip = outgoing & (g.imag < 0)
    return np.asarray(np.where(flip, -g, g))


def mismatch(stack: Stack, q: Complex, outgoing: Flags) -> tuple[Complex, Complex]:
    """Mode condition D(q) and dD/dq, scaled against overflow; outgoing: (2, B) for substrate and cover.

    D = v_L psi_R - psi_L v_R at the top of the last film, both fields normalised to its largest size.
    """
    g = half_space(stack, q, 0, outgoing[0])
    psi = np.ones_like(q)
    v = stack.w[0] * g
    dpsi = np.zeros_like(q)
    dv = stack.b[0] / (2 * g)
    for j in range(1, stack.w.shape[0] - 1):
        psi, v, dpsi, dv = _cross(stack, q, j, psi, v, dpsi, dv)
        size = np.maximum(np.abs(psi), np.abs(v))
        psi, v, dpsi, dv = psi / size, v / size, dpsi / size, dv / size
    g = half_space(stack, q, -1, outgoing[1])
    edge, dedge = -stack.w[-1] * g, -stack.b[-1] / (2 * g)
    return v - edge * psi, dv - edge * dpsi - dedge * psi


def _cross(
    stack: Stack, q: Complex, j: int, psi: Complex, v: Complex, dpsi: Complex, dv: Complex
) -> tuple[Complex, Complex, Complex, Complex]:
    """psi, v and their q-derivatives across film j: entire functions of z = g tau^2, g = (a - q b) / w."""
    w, b, tau = stack.w[j], stack.b[j], stack.tau[j - 1]
    g = (stack.a[j] - q * b) / w
    c, s, rest = waves(g, tau)
    dg = -b / w
    # dc/dg = -tau s / 2 ; ds/dg = (tau c - s) / (2 g) = -tau^3 rest, s = sin(sqrt(g) tau) / sqrt(g)
    dc, ds = -tau * s / 2 * dg, -rest * dg
    psi2 = c * psi + s / w * v
    v2 = -w * g * s * psi + c * v
    dpsi2 = c * dpsi + s / w * dv + dc * psi + ds / w * v
    dv2 = -w * g * s * dpsi + c * dv - w * (dg * s + g * ds) * psi + dc * v
    return psi2, v2, dpsi2, dv2


def waves(g: Complex, tau: Array) -> tuple[Any, Any, Any]:
    """cos(k tau), sin(k tau)/k and (sin(k tau)/k - tau cos(k tau)) / (2 k^2) with k = sqrt(g), all entire in g."""
    k = np.sqrt(g)
    x = k * tau
    z = x * x
    small = np.abs(z) < 0.05
    safe = np.where(small, 1.0, x)
    # Far into an evanescent film both grow alike; the caller rescales after every film.
    c, sinc = np.cos(x), np.where(small, 1 - z / 6 * (1 - z / 20 * (1 - z / 42 * (1 - z / 72))), np.sin(safe) / safe)
    series = (1 / 6) * (1 - z / 10 * (1 - z / 28 * (1 - z / 54 * (1 - z / 88))))
    rest = np.where(small, series, (sinc - c) / (2 * np.where(small, 1.0, z)))
    return c, tau * sinc, tau**3 * rest


def polish(stack: Stack, N: Complex, outgoing: Flags) -> tuple[Complex, Flags]:
    """Newton on the mode condition from seeds N (B); returns roots and whether each has converged."""
    q = N**2
    done = np.zeros(q.size, dtype=bool)
    best = q.copy()
    act = np.arange(q.size)
    for _ in range(_MAX_STEPS):
        part = stack.take(act)
        with np.errstate(all="ignore"):
            d, slope = mismatch(part, best[act], outgoing[:, act])
            step = d / slope
        # A step of more than a tenth of q has lost the mode; shortening it keeps the search where the seed was.
        size = np.abs(step)
        step = np.where(size > 0.1, step * 0.1 / np.where(size > 0, size, 1), step)
        ok = np.isfinite(step)
        best[act[ok]] -= step[ok]
        ready = ok & (size <= 2e-15 * np.abs(best[act]))
        done[act[ready]] = True
        act = act[ok & ~ready]
        if not act.size:
            break
    else:
        # Rounding can keep the last step just above the limit: a root is a root if it no longer moves by 1e-13.
        done[act[size[ok & ~ready] <= 1e-13]] = True
    return np.sqrt(best), done


def leaky_index(
    n: ArrayLike,
    t_um: ArrayLike,
    wavelength_um: ArrayLike,
    order: ArrayLike,
    tm: ArrayLike = False,
    n_normal: ArrayLike | None = None,
) -> Complex:
    """Complex effective index (...) of mode `order` of a film that leaks into its substrate or cover.

    n (..., L), real or complex, from the substrate up; other arguments as for `slab.mode_index`. The order is that of
    the closed companion: the stack without the half-space that radiates, or, where the film lies on it directly, with
    a wall there. NaN where the companion has no such mode, where both half-spaces radiate, or where Newton has left
    the mode or crossed a light line.
    """
    n_, t, lam, shape, normal, is_tm, m = _batch(n, t_um, wavelength_um, order, tm, n_normal)
    seed, step = _companion(n_.real, None if normal is None else normal.real, t, lam, is_tm, m)
    out = np.full(m.size, np.nan + 0j)
    known = np.flatnonzero(np.isfinite(seed))
    if known.size:
        stack = Stack(n_, normal, t, lam, is_tm).take(known)
        outgoing = _radiates(stack, seed[known])
        root, done = polish(stack, seed[known].astype(complex), outgoing)
        stays = done & (np.abs(root.real - seed[known]) < _FARTHEST_SHARE * step[known])
        # Across a light line the other branch would hold: such a root is no mode.
        stays &= (_radiates(stack, root.real) == outgoing).all(axis=0)
        # A leak below rounding must not come out as gain.
        root = np.where((root.imag > 0) & (root.imag < _ROUNDING), root.real + 0j, root)
        out[known] = np.where(stays, root, np.nan)
    return out.reshape(shape)


def _batch(
    n: ArrayLike,
    t_um: ArrayLike,
    wavelength_um: ArrayLike,
    order: ArrayLike,
    tm: ArrayLike,
    n_normal: ArrayLike | None,
) -> tuple[Complex, Array, Array, tuple[int, ...], Complex | None, Flags, Array]:
    n_, t, lam = np.asarray(n, dtype=complex), np.asarray(t_um, dtype=float), np.asarray(wavelength_um, dtype=float)
    if n_.shape[-1] < 3 or t.shape[-1] != n_.shape[-1] - 2:
        raise ValueError(f"n has {n_.shape[-1]} layers and t_um {t.shape[-1]} thicknesses; films need one each")
    normal = None if n_normal is None else np.asarray(n_normal, dtype=complex)
    extra = () if normal is None else (normal[..., 0],)
    shape = batch_shape(n_, t, lam, order, tm, *extra)
    count = n_.shape[-1]

    def rows(x: Any, k: int) -> Any:
        return np.broadcast_to(x, (*shape, k)).reshape(-1, k)

    flat = [np.broadcast_to(np.asarray(x), shape).reshape(-1) for x in (lam, tm, order)]
    flat_normal = None if normal is None else rows(normal, count)
    return rows(n_, count), rows(t, count - 2), flat[0], shape, flat_normal, flat[1] != 0, flat[2].astype(float)


def _radiates(stack: Stack, N: Array) -> Flags:
    """(2, B): whether substrate and cover carry an outgoing wave at N, by the real part of their light line."""
    line = np.sqrt(stack.a[[0, -1]] / stack.b[[0, -1]]).real
    return np.asarray(line > N)


def _companion(n: Array, normal: Array | None, t: Array, lam: Array, tm: Flags, order: Array) -> tuple[Array, Array]:
    """Real effective index of the closed companion's mode (B), and the distance to the next order up (B)."""
    top = n[:, 1:-1].max(axis=1)
    from_cover = n[:, -1] >= top
    if from_cover.any() and (n[:, 0] >= top).any():
        return np.full(order.size, np.nan), np.ones(order.size)
    if from_cover.all():
        n, t = n[:, ::-1], t[:, ::-1]
        normal = None if normal is None else normal[:, ::-1]
    film = int(np.argmax(n[:, 1:-1].mean(axis=0))) + 1
    if film > 1:
        n, t, normal = n[:, 1:], t[:, 1:], None if normal is None else normal[:, 1:]
        seed = mode_index(n, t, lam, order, tm, normal)
    else:
        seed = _walled(n, normal, t, lam, tm, order)
    thick = t[:, film - (2 if film > 1 else 1)]
    return seed, (2 * order + 3) * (lam / (2 * np.maximum(thick, 1e-6))) ** 2 / (2 * np.where(seed > 0, seed, 1.0))


def _walled(n: Array, normal: Array | None, t: Array, lam: Array, tm: Flags, order: Array) -> Array:
    """Real effective index (B) of a film that lies on the high-index half-space: its mode over a wall.

    The modes of the stack and its mirror image: odd ones vanish at the wall. A TM wave steeper than Brewster's angle
    comes back from the half-space without the change of sign (at that angle not at all), as over a wall where the
    slope vanishes: even modes. Along the modes' path the phase turns so that the order stays.
    """

    def mirror(x: Array) -> Array:
        return np.concatenate([x[:, :1:-1], x[:, 1:]], axis=1)

    twice = np.concatenate([t[:, :0:-1], 2 * t[:, :1], t[:, 1:]], axis=1)
    both = mirror(n), None if normal is None else mirror(normal)
    odd = mode_index(both[0], twice, lam, 2 * order + 1, tm, both[1])
    if not tm.any():
        return odd
    even = mode_index(both[0], twice, lam, 2 * order, tm, both[1])
    at = np.where(np.isfinite(odd), odd, even)
    m = n if normal is None else normal
    # w kappa of the film and of the half-space, in k0
    film, outer = (np.sqrt(np.maximum(1 - (at / m[:, i]) ** 2, 0)) / n[:, i] for i in (1, 0))
    return np.where(tm & (film > outer), even, odd)


def leaky_derivatives(
    N: ArrayLike,
    n: ArrayLike,
    t_um: ArrayLike,
    wavelength_um: ArrayLike,
    tm: ArrayLike = False,
    n_normal: ArrayLike | None = None,
) -> ComplexDerivatives:
    """Closed-form derivatives of a complex effective index, the bilinear (unconjugated) form of those in `fields`.

    Shapes and meaning as in `fields.SlabDerivatives`, complex: for a real change of a real index take the real part.
    """
    N_ = np.asarray(N, dtype=complex)
    n_, t, lam, shape, normal, is_tm, _ = _batch(n, t_um, wavelength_um, np.zeros(N_.shape), tm, n_normal)
    flat = np.broadcast_to(N_, shape).reshape(-1)
    count = n_.shape[1]
    out = [np.full((k, flat.size), np.nan + 0j) for k in (count, count, count - 2, 1)]
    known = np.flatnonzero(np.isfinite(flat))
    if known.size:
        stack = Stack(n_, normal, t, lam, is_tm).take(known)
        parts = _derivatives(stack, flat[known], lam[known], is_tm[known], isotropic=normal is None)
        for whole, part in zip(out, parts, strict=True):
            whole[:, known] = part
    dn, dnn, dt, dl = (x.T.reshape(*shape, x.shape[0]) for x in out)
    return ComplexDerivatives(dn, dnn, dt, dl[..., 0])


def _derivatives(
    stack: Stack, N: Complex, lam: Array, tm: Flags, *, isotropic: bool
) -> tuple[Complex, Complex, Complex, Complex]:
    w, a, b, q = stack.w, stack.a, stack.b, N**2
    psi2, wpsi1, h = _field_integrals(stack, q, _radiates(stack, N.real))
    total = 2 * N * (b * psi2).sum(axis=0)
    along = np.where(tm, 2 * np.sqrt(w) * wpsi1, 2 * np.sqrt(a) * psi2) / total
    normal = np.where(tm, 2 * q * b * np.sqrt(b) * psi2, 0.0) / total
    dt = h / total * (2 * np.pi / lam)
    dl = -2 * wpsi1.sum(axis=0) / (total * lam)
    if isotropic:
        along, normal = along + normal, np.zeros_like(normal)
    return along, normal, dt, dl[None]


def _field_integrals(stack: Stack, q: Complex, outgoing: Flags) -> tuple[Complex, Complex, Complex]:
    """Integrals of psi^2 and w psi'^2 over every layer (L, B), and h of every film (L - 2, B), on one common scale.

    Upward values serve the films up to the one of highest index, downward ones those above it.
    """
    films = stack.tau.shape[0]
    index = (stack.a / stack.b).real[1:-1].mean(axis=1)
    join = int(np.argmax(index))
    low, high = _half(stack, q, 0, outgoing[0]), _half(stack, q, -1, outgoing[1])
    psi2, wpsi1 = np.empty_like(stack.w), np.empty_like(stack.w)
    h = np.empty_like(stack.tau, dtype=complex)
    psi, v = np.ones_like(q), low[0]
    below: list[tuple[Complex, Complex]] = []
    for j in range(join + 1):
        below.append((psi, v))
        psi, v, _, _ = _cross(stack, q, j + 1, psi, v, 0 * psi, 0 * psi)
    top = psi
    psi, v = np.ones_like(q), high[0]
    above: list[tuple[Complex, Complex]] = []
    for j in range(films - 1, join, -1):
        above.append((psi, v))
        psi, v, _, _ = _cross(stack, q, j + 1, psi, v, 0 * psi, 0 * psi)
    # Join where the field is not near a node: psi if it is the larger, else v.
    scale = _ratio(stack, q, join, below[join], top, psi, v)
    for j in range(films):
        start = below[j] if j <= join else above[films - 1 - j]
        factor = np.ones_like(q) if j <= join else scale**2
        psi2[j + 1], wpsi1[j + 1], h[j] = (x * factor for x in _film(stack, q, j + 1, *start))
    psi2[0], wpsi1[0] = low[1], low[2]
    psi2[-1], wpsi1[-1] = high[1] * scale**2, high[2] * scale**2
    return psi2, wpsi1, h


def _ratio(
    stack: Stack, q: Complex, join: int, start: tuple[Complex, Complex], top: Complex, psi: Complex, v: Complex
) -> Complex:
    """Upward over downward field at the top of the joining film; v points inwards on the downward side."""
    _, v_up, _, _ = _cross(stack, q, join + 1, *start, 0 * psi, 0 * psi)
    by_psi = np.abs(psi) * np.abs(stack.w[join + 1]) > np.abs(v)
    safe_psi, safe_v = np.where(by_psi, psi, 1.0), np.where(by_psi, 1.0, v)
    return np.asarray(np.where(by_psi, top / safe_psi, -v_up / safe_v))


def _half(stack: Stack, q: Complex, i: int, outgoing: Flags) -> tuple[Complex, Complex, Complex]:
    """v, integral of psi^2 and of w psi'^2 of a half-space for psi = 1 at its edge (analytic where it grows
    outwards)."""
    g = half_space(stack, q, i, outgoing)
    return stack.w[i] * g, stack.b[i] * 0 + 1 / (2 * g), stack.w[i] * g / 2


def _film(stack: Stack, q: Complex, j: int, psi: Complex, v: Complex) -> tuple[Complex, Complex, Complex]:
    """Integrals of psi^2 and w psi'^2 over film j from its entry values, and h."""
    w, tau = stack.w[j], stack.tau[j - 1]
    gap = stack.a[j] - q * stack.b[j]
    g = gap / w
    h = v * v / w + gap * psi * psi
    end_psi, end_v, _, _ = _cross(stack, q, j, psi, v, 0 * psi, 0 * psi)
    bow = end_psi * end_v - psi * v
    thin = np.abs(g) * tau**2 < 0.05
    wpsi1 = (h * tau + bow) / 2
    psi2 = (h * tau - bow) / (2 * np.where(thin, 1.0, gap))
    z = g * tau**2
    rest = (1 / 3) * (1 - z / 5 * (1 - 2 * z / 21 * (1 - z / 18 * (1 - 2 * z / 55))))
    slope = v / w
    cc, ss = tau * (1 - z * rest), tau**3 * rest
    cs = (tau * (1 - z / 6 * (1 - z / 20 * (1 - z / 42 * (1 - z / 72))))) ** 2 / 2
    series2 = psi**2 * cc + 2 * psi * slope * cs + slope**2 * ss
    series1 = w * (slope**2 * cc - 2 * g * psi * slope * cs + (g * psi) ** 2 * ss)
    return np.where(thin, series2, psi2), np.where(thin, series1, wpsi1), h
