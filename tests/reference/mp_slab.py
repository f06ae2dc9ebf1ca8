"""An independent reference for planar stacks: counts by dynamic stiffness, modes by transfer matrix at 30 digits.

For tests alone; no code or method shared with the solver, which follows an accumulated phase.

Count: every layer is a two-node element with its exact stiffness; half-spaces load the end nodes. The number of modes
above an effective index is the number of clamped-layer modes plus the number of negative pivots of the assembled
tridiagonal matrix (W. H. Wittrick and F. W. Williams, Q. J. Mech. Appl. Math. 24, 263, 1971, from memory).
`count_above` does it in double precision and says where rounding could decide; `mp_count_above` does it at any number
of digits.

Mode: fields carried upwards by 2x2 matrices (M. Born and E. Wolf, Principles of Optics, section 1.6), the mismatch at
the cover brought to zero by the secant rule. A root is taken for mode m only if the count says so on both sides of it.

Units: lengths in µm, N the effective index; psi = E_y (TE) or H_y (TM); exp(+j w t - j beta z), loss as negative
imaginary part.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from mpmath import mp

DIGITS = 30
# Relative size of a pivot, and distance of a layer from a clamped mode, below which rounding could decide a count.
_DOUBTFUL = 1e-9
# Relative rounding of one stiffness, from its sine, cosine and square root.
_ROUNDING = 1e-15


@dataclass(frozen=True)
class Stack:
    """One stack, numbers exact as given (float, complex or mpmath): n, n_normal (L), t_um (L-2)."""

    n: Sequence[Any]
    t_um: Sequence[Any]
    wavelength_um: Any
    tm: bool = False
    n_normal: Sequence[Any] | None = None

    def coefficients(self) -> tuple[list[Any], list[Any], list[Any], list[Any]]:
        """w, a, b (L) and k0 t (L-2) in (w psi')' + (a - N^2 b) psi = 0, x in 1/k0."""
        n2 = [mp.mpmathify(x) ** 2 for x in self.n]
        m2 = n2 if self.n_normal is None else [mp.mpmathify(x) ** 2 for x in self.n_normal]
        k0 = 2 * mp.pi / mp.mpmathify(self.wavelength_um)
        tau = [k0 * mp.mpmathify(x) for x in self.t_um]
        if self.tm:
            return [1 / x for x in n2], [mp.mpf(1)] * len(n2), [1 / x for x in m2], tau
        return [mp.mpf(1)] * len(n2), n2, [mp.mpf(1)] * len(n2), tau


# --- counts in double precision, vectorised ------------------------------------------------------------------------


def _element(g: np.ndarray, w: np.ndarray, tau: np.ndarray) -> tuple[np.ndarray, ...]:
    """Diagonal and off-diagonal stiffness, clamped count and whether it is in doubt; g = (a - q b) / w."""
    x = np.sqrt(np.abs(g)) * tau
    wave = g > 0
    safe = np.where(x < 1e-4, 1.0, x)
    turns = np.where(wave, np.floor(x / np.pi), 0.0)
    rest = np.where(wave, x / np.pi - np.round(x / np.pi), 0.5)
    doubtful = wave & (np.abs(rest) < _DOUBTFUL) & (np.round(x / np.pi) > 0)
    e = np.exp(-np.where(wave, 0.0, safe))
    cot = np.where(wave, np.cos(safe) / np.where(wave, np.sin(safe), 1.0), 0.0)
    csc = np.where(wave, 1 / np.where(wave, np.sin(safe), 1.0), 0.0)
    coth, csch = (1 + e * e) / np.where(wave, 1.0, 1 - e * e), 2 * e / np.where(wave, 1.0, 1 - e * e)
    z = np.sign(g) * x**2
    diagonal = np.where(x < 1e-4, 1 - z / 3, safe * np.where(wave, cot, coth))
    off = np.where(x < 1e-4, 1 + z / 6, safe * np.where(wave, csc, csch))
    return w / tau * diagonal, w / tau * off, turns.astype(int), doubtful


def count_above(
    N: np.ndarray, n: np.ndarray, t_um: np.ndarray, wavelength_um: np.ndarray, tm: np.ndarray, n_normal: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Number of modes with an effective index above N, and whether rounding could have decided it; both (B).

    N, wavelength_um, tm: (B); n, n_normal: (B, L); t_um: (B, L-2), positive. N at or above the half-spaces' cut-off.
    """
    n2, m2, tau = n.T**2, n_normal.T**2, t_um.T * (2 * np.pi / wavelength_um)
    q = N**2
    # a - q b as a product, so that an N equal to an index gives exactly zero
    gap = np.where(tm, (n_normal.T - N) * (n_normal.T + N) / m2, (n.T - N) * (n.T + N))
    w = np.where(tm, 1 / n2, np.ones_like(n2))
    g = gap / w
    load = w[[0, -1]] * np.sqrt(np.maximum(-g[[0, -1]], 0.0))
    diagonal, off, turns, doubtful = _element(g[1:-1], w[1:-1], tau)
    doubt = doubtful.any(axis=0)
    count = turns.sum(axis=0)
    pivot, error = None, np.zeros_like(q)
    for i in range(tau.shape[0] + 1):
        below = load[0] if i == 0 else diagonal[i - 1]
        above = load[1] if i == tau.shape[0] else diagonal[i]
        carry = np.zeros_like(q) if pivot is None else off[i - 1] ** 2 / pivot
        # Stiffnesses of thin films nearly cancel; the rounding left is handed on, magnified, to the next pivot.
        size = np.abs(below) + np.abs(above) + np.abs(carry)
        error = _ROUNDING * size + (0.0 if pivot is None else np.abs(carry / pivot) * error)
        pivot = below + above - carry
        doubt |= np.abs(pivot) < np.maximum(_DOUBTFUL * size, 10 * error)
        pivot = np.where(pivot == 0, 1e-300, pivot)
        count = count + (pivot < 0)
    return count, doubt | ~np.isfinite(pivot) | (q < 0)


def cut_off(n: np.ndarray, tm: np.ndarray, n_normal: np.ndarray) -> np.ndarray:
    """Effective index (B) below which a half-space lets the field escape."""
    edge = np.where(np.asarray(tm)[:, None], n_normal[:, [0, -1]], n[:, [0, -1]])
    return np.asarray(edge.max(axis=1))


def independent_count(
    n: np.ndarray,
    t_um: np.ndarray,
    wavelength_um: np.ndarray,
    tm: np.ndarray,
    n_normal: np.ndarray,
    *,
    settle: bool = True,
) -> tuple[np.ndarray, int]:
    """Number of guided modes (B), borderline stacks counted again at 60 digits; and how many of those there were.

    settle=False leaves borderline stacks as double precision has them.
    """
    N = cut_off(n, tm, n_normal)
    count, doubt = count_above(N, n, t_um, wavelength_um, tm, n_normal)
    rows = np.flatnonzero(doubt & settle)
    for r in rows:
        stack = Stack(list(n[r]), list(t_um[r]), float(wavelength_um[r]), bool(tm[r]), list(n_normal[r]))
        with mp.workdps(60):
            count[r] = mp_count_above(stack, mp.mpf(float(N[r])))
    return count, rows.size


# --- counts and modes at any number of digits ----------------------------------------------------------------------


def mp_count_above(stack: Stack, N: Any) -> int:
    """Number of modes with an effective index above N (mpmath, real stack), at the working precision."""
    w, a, b, tau = stack.coefficients()
    q = N**2
    g = [(x - q * y) / z for x, y, z in zip(a, b, w)]
    load = [w[i] * mp.sqrt(max(-g[i], mp.mpf(0))) for i in (0, -1)]
    count = 0
    diagonal, off = [], []
    for i, thick in enumerate(tau, start=1):
        x = mp.sqrt(abs(g[i])) * thick
        if x == 0:
            diagonal.append(w[i] / thick)
            off.append(w[i] / thick)
        elif g[i] > 0:
            count += int(mp.floor(x / mp.pi))
            cos, sin = mp.cos_sin(x)
            diagonal.append(w[i] / thick * x * cos / sin)
            off.append(w[i] / thick * x / sin)
        else:
            e = mp.exp(-x)
            diagonal.append(w[i] / thick * x * (1 + e * e) / (1 - e * e))
            off.append(w[i] / thick * x * 2 * e / (1 - e * e))
    pivot = None
    for i in range(len(tau) + 1):
        below = load[0] if i == 0 else diagonal[i - 1]
        above = load[1] if i == len(tau) else diagonal[i]
        pivot = below + above - (0 if pivot is None else off[i - 1] ** 2 / pivot)
        count += pivot < 0
        if pivot == 0:
            pivot = mp.mpf(10) ** -(2 * mp.dps)
    return count


def mismatch(stack: Stack, N: Any, outgoing: tuple[bool, bool] = (False, False)) -> Any:
    """Zero at a mode: v + w g psi at the cover, the field started in the substrate.

    Real or complex. A half-space's field is exp(-g |x|): Re g > 0 where it decays, and where `outgoing` (substrate,
    cover) g = +j kappa, Re kappa > 0, a wave that travels away.
    """
    w, a, b, tau = stack.coefficients()
    q = N**2
    ends = []
    for i, leaves in zip((0, -1), outgoing):
        g2 = (q * b[i] - a[i]) / w[i]
        ends.append(1j * mp.sqrt(-g2) if leaves else mp.sqrt(g2))
    psi, v = mp.mpf(1), w[0] * ends[0]
    for i, thick in enumerate(tau, start=1):
        g = (a[i] - q * b[i]) / w[i]
        if mp.im(g) == 0 and mp.re(g) < 0:
            k = mp.sqrt(-mp.re(g))
            up, down = mp.exp(k * thick), mp.exp(-k * thick)
            c, s, turn = (up + down) / 2, (up - down) / (2 * k), k * (up - down) / 2
        else:
            k = mp.sqrt(g)
            c, sin = mp.cos(k * thick), mp.sin(k * thick)
            s, turn = (sin / k, -k * sin) if k != 0 else (thick, mp.mpf(0))
        psi, v = psi * c + v / w[i] * s, psi * w[i] * turn + v * c
    return v + w[-1] * ends[1] * psi


def _digits_needed(stack: Stack, N: float) -> int:
    """Working digits: the transfer matrix loses what evanescent films make it grow by, twice."""
    n = np.asarray([abs(complex(x)) for x in stack.n])[1:-1]
    m = n if stack.n_normal is None else np.asarray([abs(complex(x)) for x in stack.n_normal])[1:-1]
    gap = (N**2 / m**2 - 1) * n**2 if stack.tm else N**2 - n**2
    depth = np.sqrt(np.maximum(gap, 0)) * np.asarray([float(x) for x in stack.t_um])
    return DIGITS + 15 + int(2 * depth.sum() * 2 * np.pi / float(stack.wavelength_um) / np.log(10))


def isolate(stack: Stack, count: int) -> np.ndarray:
    """Brackets (count, 2) in N around every mode: bisection on the double-precision count while it is sure."""
    n = np.asarray(stack.n, dtype=float)
    m = n if stack.n_normal is None else np.asarray(stack.n_normal, dtype=float)
    index = m if stack.tm else n
    lo, hi = np.full(count, max(index[0], index[-1])), np.full(count, index[1:-1].max())
    order = np.arange(count)
    live = np.ones(count, dtype=bool)
    for _ in range(60):
        mid = (lo + hi) / 2
        rows = [np.broadcast_to(x, (count, np.size(x))) for x in (n, np.asarray(stack.t_um, dtype=float), m)]
        wave, tm = np.full(count, float(stack.wavelength_um)), np.full(count, stack.tm)
        above, doubt = count_above(mid, rows[0], rows[1], wave, tm, rows[2])
        live &= ~doubt & (hi - lo > 1e-12)
        if not live.any():
            break
        lo, hi = np.where(live & (above > order), mid, lo), np.where(live & (above <= order), mid, hi)
    return np.stack([lo, hi], axis=1)


def _secant(stack: Stack, first: Any, second: Any, small: Any, outgoing: tuple[bool, bool] = (False, False)) -> Any:
    x0, x1 = first, second
    f0, f1 = mismatch(stack, x0, outgoing), mismatch(stack, x1, outgoing)
    for _ in range(30):
        if f1 == f0:
            return x1
        x0, f0, x1 = x1, f1, x1 - f1 * (x1 - x0) / (f1 - f0)
        if abs(x1 - x0) < small:
            return x1
        f1 = mismatch(stack, x1, outgoing)
    return x1


def _is_mode(stack: Stack, N: Any, order: int, width: Any) -> bool:
    return mp_count_above(stack, N + width) <= order < mp_count_above(stack, N - width)


def mode(stack: Stack, order: int, bracket: Sequence[float]) -> Any:
    """Effective index of mode `order` inside a bracket, to 30 digits.

    The secant rule proposes; the count on both sides, 1e-28 away, decides. Where it refuses, bisection on the count.
    """
    lo, hi = mp.mpf(float(bracket[0])), mp.mpf(float(bracket[1]))
    with mp.workdps(_digits_needed(stack, float(hi))):
        width = mp.mpf(10) ** (2 - DIGITS)
        N = _secant(stack, lo + (hi - lo) / 4, hi - (hi - lo) / 4, width / 100)
        inside = mp.im(N) == 0 and lo <= N <= hi
        if inside and _is_mode(stack, N, order, min(width, (N - lo) / 2) if lo < N else width):
            return N
        if not _bracketed(stack, lo, hi, order):
            raise ArithmeticError(f"bracket {bracket} does not hold mode {order}")
        while hi - lo > width:
            mid = (lo + hi) / 2
            lo, hi = (mid, hi) if mp_count_above(stack, mid) > order else (lo, mid)
        return (lo + hi) / 2


def _bracketed(stack: Stack, lo: Any, hi: Any, order: int) -> bool:
    return mp_count_above(stack, hi) <= order < mp_count_above(stack, lo)


def all_modes(stack: Stack) -> list[Any]:
    """Every guided mode of a real stack at 30 digits, by falling effective index; none is taken from the solver."""
    index = [float(x) for x in (stack.n_normal if stack.tm and stack.n_normal is not None else stack.n)]
    edge = max(index[0], index[-1])
    with mp.workdps(60):
        count = mp_count_above(stack, mp.mpf(edge))
    return [mode(stack, m, bracket) for m, bracket in enumerate(isolate(stack, count))]


def complex_mode(stack: Stack, seed: complex, outgoing: tuple[bool, bool] = (False, False)) -> Any:
    """The complex mode next to a seed, to 30 digits."""
    with mp.workdps(_digits_needed(stack, abs(seed))):
        start = mp.mpmathify(seed)
        return _secant(stack, start, start * (1 + mp.mpf(10) ** -9), mp.mpf(10) ** -DIGITS, outgoing)


# --- derivatives ---------------------------------------------------------------------------------------------------


def derivatives(stack: Stack, N: Any, outgoing: tuple[bool, bool] = (False, False)) -> dict[str, list[Any]]:
    """dN/dn (L), dN/dn_normal (L, where given), dN/dt (L-2) and dN/dwavelength (1), by central differences.

    The step is 1e-12, so the truncation error is 1e-24 of the third derivative. An isotropic layer's dn moves both
    indices.
    """
    out: dict[str, list[Any]] = {
        "dn": [_slope(stack, N, "n", i, outgoing) for i in range(len(stack.n))],
        "dt_per_um": [_slope(stack, N, "t_um", i, outgoing) for i in range(len(stack.t_um))],
        "dwavelength_per_um": [_slope(stack, N, "wavelength_um", None, outgoing)],
    }
    if stack.n_normal is not None:
        out["dn_normal"] = [_slope(stack, N, "n_normal", i, outgoing) for i in range(len(stack.n))]
    return out


def _slope(stack: Stack, N: Any, name: str, i: int | None, outgoing: tuple[bool, bool]) -> Any:
    with mp.workdps(_digits_needed(stack, abs(complex(N))) + 5):
        h = mp.mpf(10) ** -12
        ends = []
        for sign in (1, -1):
            old = getattr(stack, name)
            if i is None:
                new: Any = mp.mpmathify(old) + sign * h
            else:
                new = [mp.mpmathify(x) + (sign * h if k == i else 0) for k, x in enumerate(old)]
            ends.append(_secant(replace(stack, **{name: new}), N, N * (1 + h / 7), mp.mpf(10) ** -38, outgoing))
        return (ends[0] - ends[1]) / (2 * h)
