"""An independent model of film modes and prism coupling, for tests alone: no code or method shared with the solver.

The solver counts and solves modes by an accumulated phase. Here the field itself is carried through the stack by 2x2
transfer matrices (M. Born and E. Wolf, Principles of Optics, section 1.6), the mismatch at the substrate is sampled
on a fine grid, and sign changes are bisected in double precision to the last bits of the film's transverse wave number.
`test_field_model.py` checks it against phase and Fresnel relations at 30 digits. Lengths in µm, exp(+j w t - j beta z).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

# Grid points per half wave across the film: one film's roots are about one half wave apart, so none share one.
_PER_HALF_WAVE = 24


def mismatch(N: np.ndarray, eps: Array, eps_n: Array, t_um: Array, k0: Array, tm: bool, *, leaky: bool) -> np.ndarray:
    """Field mismatch at the substrate's top, zero for a mode. N (...); eps, eps_n (..., L); t_um (..., L-2); k0 (...).

    psi is E_y (TE) or H_y (TM) and chi = psi' / (k0 w), w = 1 or eps: both continuous. The wave decays into the cover;
    in the substrate it decays, or, if `leaky`, runs away from the film.
    """
    q = np.asarray(N, dtype=complex)[..., None] ** 2
    kappa2 = eps * (1 - q / eps_n) if tm else eps - q
    w = eps if tm else np.ones_like(eps)
    psi = np.ones(kappa2.shape[:-1], dtype=complex)
    chi = -np.sqrt(-kappa2[..., -1]) / w[..., -1]
    for i in range(eps.shape[-1] - 2, 0, -1):
        s = np.sqrt(kappa2[..., i])
        s = np.where(s == 0, 1e-30, s)
        phi = s * k0 * t_um[..., i - 1]
        cos, sin = np.cos(phi), np.sin(phi)
        psi, chi = psi * cos - chi * w[..., i] / s * sin, psi * s / w[..., i] * sin + chi * cos
    outer = 1j * np.sqrt(kappa2[..., 0]) if leaky else np.sqrt(-kappa2[..., 0])
    return np.asarray(chi - outer / w[..., 0] * psi)


def guided_modes(
    n: Array, t_um: Array, wavelength_um: Array | float, tm: bool, n_normal: Array | None = None, film: int = -2
) -> Array:
    """All guided modes of S stacks whose layer `film` alone can hold them: (S, M), descending, padded with NaN.

    n (S, L), t_um (S, L-2), wavelength (S) or one for all; n_normal (S, L) for uniaxial layers.
    """
    n = np.asarray(n, dtype=float)
    nn = n if n_normal is None else np.asarray(n_normal, dtype=float)
    eps, eps_n = n**2, nn**2
    k0 = np.broadcast_to(2 * np.pi / np.asarray(wavelength_um, dtype=float), n.shape[:1])
    top = (eps_n if tm else eps)[:, film]
    floor = (eps_n if tm else eps)[:, [0, -1]].max(axis=1)
    span = np.sqrt(np.maximum(top - floor, 0.0))
    stretch = n[:, film] / nn[:, film] if tm else np.ones(len(n))
    half_waves = span * stretch * k0 * t_um[:, film + 1 if film < -1 else film - 1] / np.pi
    points = int(_PER_HALF_WAVE * (half_waves.max(initial=0) + 2))
    share = np.linspace(1e-9, 1 - 1e-12, points)

    def f(s: np.ndarray, rows: np.ndarray) -> np.ndarray:
        N = np.sqrt(top[rows] - s**2)
        return mismatch(N, eps[rows], eps_n[rows], t_um[rows], k0[rows], tm, leaky=False).real

    grid = span[:, None] * share
    every = np.arange(len(n))
    value = np.stack([f(grid[:, i], every) for i in range(points)], axis=1)
    row, col = np.nonzero((value[:, :-1] * value[:, 1:] < 0) & (span > 0)[:, None])
    lo, hi, f_lo = grid[row, col], grid[row, col + 1], value[row, col]
    for _ in range(60):
        mid = (lo + hi) / 2
        f_mid = f(mid, row)
        left = f_mid * f_lo > 0
        lo, f_lo, hi = np.where(left, mid, lo), np.where(left, f_mid, f_lo), np.where(left, hi, mid)
    N = np.sqrt(top[row] - ((lo + hi) / 2) ** 2)
    number = np.arange(row.size) - np.searchsorted(row, row)
    out = np.full((len(n), int(number.max(initial=-1)) + 1), np.nan)
    out[row, number] = N
    return out


def leaky_modes(n: Array, t_um: Array, wavelength_um: Array | float, tm: bool) -> NDArray[np.complex128]:
    """Modes of a film on a lower-index layer on a high-index substrate, above that layer's index: (S, M) complex.

    Starts are the guided modes with the layer below the film made infinitely thick; a complex secant takes them to the
    roots of the open stack with an outgoing wave in the substrate. Raises ArithmeticError if one does not settle.
    """
    k0_all = np.broadcast_to(2 * np.pi / np.asarray(wavelength_um, dtype=float), n.shape[:1])
    start = guided_modes(n[:, 1:], t_um[:, 1:], wavelength_um, tm)
    row, col = np.nonzero(np.isfinite(start))
    eps, t, k0 = n[row] ** 2, t_um[row], k0_all[row]

    def f(z: np.ndarray) -> np.ndarray:
        return mismatch(z, eps, eps, t, k0, tm, leaky=True)

    a = start[row, col].astype(complex)
    b = a + 1e-7
    fa, fb = f(a), f(b)
    for _ in range(60):
        slope = (fb - fa) / np.where(b == a, 1.0, b - a)
        move = np.where((b == a) | (slope == 0), 0.0, fb / np.where(slope == 0, 1.0, slope))
        a, fa = b, fb
        b = b - move
        fb = f(b)
        if np.all(np.abs(move) < 1e-15):
            break
    if np.any(np.abs(b - a) > 1e-12):
        raise ArithmeticError("a leaky mode of the reference model did not settle")
    out = np.full(start.shape, np.nan + 0j)
    out[row, col] = b
    return out


def coupling_angle_deg(N: Array, n_p: Array | float, base_deg: Array | float) -> Array:
    """Entrance angle: the ray (N, sqrt(n_p^2 - N^2)) in the base's frame turned into the face's; NaN if none."""
    a = np.deg2rad(base_deg)
    across = np.sqrt(np.where(n_p > N, n_p**2 - np.asarray(N) ** 2, np.nan))
    tangential = N * np.cos(a) - across * np.sin(a)
    return np.asarray(np.rad2deg(np.arcsin(np.where(np.abs(tangential) <= 1, tangential, np.nan))))


def index_from_angle(angle_deg: Array, n_p: Array | float, base_deg: Array | float) -> Array:
    """The same rotation backwards: effective index of a ray entering at an angle."""
    a = np.deg2rad(base_deg)
    tangential = np.sin(np.deg2rad(angle_deg))
    return np.asarray(tangential * np.cos(a) + np.sqrt(n_p**2 - tangential**2) * np.sin(a))
