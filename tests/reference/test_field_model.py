"""The tests' own film model against 30-digit phase and Fresnel relations (mpmath, a general-purpose library)."""

from __future__ import annotations

from functools import partial

import mpmath as mp
import numpy as np
import pytest

from tests.reference.field_model import (
    coupling_angle_deg,
    guided_modes,
    index_from_angle,
    leaky_modes,
)


def _phase_miss(N, m, n, t, wavelength, tm, nn):
    """Textbook three-layer relation kappa t - atan(...) - atan(...) - m pi, at mpmath's precision."""
    ns, nf, nc = (mp.mpf(float(x)) for x in n)
    ms, mf, mc = (mp.mpf(float(x)) for x in nn)
    k0 = 2 * mp.pi / mp.mpf(wavelength)
    if tm:
        kappa = nf * mp.sqrt(1 - (N / mf) ** 2)
        gs, gc = ns * mp.sqrt((N / ms) ** 2 - 1), nc * mp.sqrt((N / mc) ** 2 - 1)
        rs, rc = nf**2 / ns**2, nf**2 / nc**2
    else:
        kappa, gs, gc, rs, rc = mp.sqrt(nf**2 - N**2), mp.sqrt(N**2 - ns**2), mp.sqrt(N**2 - nc**2), 1, 1
    return k0 * kappa * mp.mpf(float(t)) - mp.atan(rs * gs / kappa) - mp.atan(rc * gc / kappa) - m * mp.pi


def _resonance_miss(N, n, t, wavelength, tm):
    """1 - r_up r_down exp(-2 j kappa t) of a film by Fresnel's coefficients; outgoing wave in the substrate."""
    n = [mp.mpf(float(x)) for x in n]
    k0 = 2 * mp.pi / mp.mpf(wavelength)
    kz = [mp.sqrt(x**2 - N**2) for x in n]
    kz = [-k if i in (1, 3) and mp.im(k) > 0 else k for i, k in enumerate(kz)]
    y = [k / x**2 if tm else k for k, x in zip(kz, n, strict=True)]

    def r(i, j):
        return (y[i] - y[j]) / (y[i] + y[j])

    turn = mp.exp(-2j * k0 * kz[1] * mp.mpf(float(t[0])))
    down = (r(2, 1) + r(1, 0) * turn) / (1 + r(2, 1) * r(1, 0) * turn)
    return 1 - down * r(2, 3) * mp.exp(-2j * k0 * kz[2] * mp.mpf(float(t[1])))


@pytest.mark.parametrize("tm", [False, True])
@pytest.mark.parametrize("uniaxial", [False, True])
def test_guided_modes_meet_the_phase_relation(tm, uniaxial):
    """Every mode of a film is a root of the 30-digit phase relation, none is missing and none is extra."""
    rng = np.random.default_rng(20)
    n = np.column_stack([rng.uniform(1.44, 1.5, 12), rng.uniform(1.52, 2.05, 12), np.ones(12)])
    nn = n.copy()
    if uniaxial:
        nn[:, 1] -= rng.uniform(0.002, 0.015, 12)
    t = rng.uniform(0.3, 6.0, (12, 1))
    found = guided_modes(n, t, 0.6328, tm, nn if uniaxial else None)
    with mp.workdps(30):
        for i in range(12):
            have = found[i][np.isfinite(found[i])]
            low = mp.mpf(float(max(nn[i, 0], nn[i, 2]) if tm else n[i, 0]))
            count = max(0, int(mp.ceil(_phase_miss(low, 0, n[i], t[i, 0], 0.6328, tm, nn[i]) / mp.pi)))
            assert have.size == count
            for m, N in enumerate(have):
                miss = partial(_phase_miss, m=m, n=n[i], t=t[i, 0], wavelength=0.6328, tm=tm, nn=nn[i])
                exact = mp.findroot(miss, mp.mpf(float(N)))
                # Double precision of n^2 - N^2 at N near 2, a few roundings deep.
                assert abs(complex(exact) - float(N)) < 5e-15


@pytest.mark.parametrize("tm", [False, True])
def test_leaky_modes_meet_the_fresnel_relation(tm):
    """Modes of a film on oxide on silicon are roots of the 30-digit Fresnel resonance, loss included."""
    rng = np.random.default_rng(21)
    n = np.column_stack([np.full(10, 3.882), np.full(10, 1.457), rng.uniform(1.9, 2.05, 10), np.ones(10)])
    t = np.column_stack([rng.uniform(1.0, 3.0, 10), rng.uniform(0.3, 0.7, 10)])
    found = leaky_modes(n, t, 0.6328, tm)
    checked = 0
    with mp.workdps(30):
        for i in range(10):
            for z in found[i][np.isfinite(found[i]) & (found[i].real > 1.47)]:
                exact = mp.findroot(
                    partial(_resonance_miss, n=n[i], t=t[i], wavelength=0.6328, tm=tm), mp.mpc(z.real, z.imag)
                )
                # The matrices grow like exp(gamma t): a thousand roundings at the thickest oxide.
                assert abs(complex(exact) - z) < 2e-13
                # Loss only, down to where it drowns in rounding.
                assert z.imag < 1e-15
                checked += 1
    assert checked > 15


def test_coupling_angle_follows_snells_law():
    """Angle and index are inverse to each other and obey Snell's law written with angles."""
    N = np.linspace(1.5, 2.2, 50)
    angle = coupling_angle_deg(N, 2.5, 45.0)
    inside = np.arcsin(np.sin(np.deg2rad(angle)) / 2.5)
    # Rounding of a few elementary functions.
    assert np.allclose(2.5 * np.sin(np.deg2rad(45.0) + inside), N, rtol=0, atol=1e-14)
    assert np.allclose(index_from_angle(angle, 2.5, 45.0), N, rtol=0, atol=1e-14)
    assert np.isnan(coupling_angle_deg(np.array([2.6]), 2.5, 45.0))[0]
