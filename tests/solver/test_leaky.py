"""Complex modes of leaky, absorbing and metal-clad stacks (reference/leaky.json names the source of every number)."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from layerlot.solver.complex_search import complex_modes
from layerlot.solver.film_modes import film_modes, is_leaky
from layerlot.solver.leaky import leaky_derivatives, leaky_index, loss_dB_per_cm
from layerlot.solver.slab import mode_index
from mpmath import mp

CHECKS = {
    c["id"]: c for c in json.loads((Path(__file__).parents[1] / "reference" / "leaky.json").read_text())["checks"]
}
FILM_ON_SILICON = ([3.85, 1.457, 1.98, 1.0], [0.4, 0.5], 0.6328)


def number(entry) -> complex:
    if isinstance(entry, dict):
        return complex(entry["re"], entry["im"])
    return complex(entry.replace(" ", "").strip("()"))


def nearest(found: np.ndarray, wanted: complex) -> complex:
    assert found.size, "no mode found"
    return complex(found[np.abs(found - wanted).argmin()])


def close(found: complex, wanted: complex, re: float, im_relative: float) -> bool:
    # Half a unit of the last printed digit of the loss (7 digits) comes on top.
    return (
        abs(found.real - wanted.real) <= re and abs(found.imag - wanted.imag) <= im_relative * abs(wanted.imag) + 6e-17
    )


@pytest.mark.parametrize("tm", [False, True], ids=["TE", "TM"])
@pytest.mark.parametrize("which", ["1e-4", "1e-3"])
def test_absorbing_films(which, tm):
    """Four films of which two absorb: every listed mode to 1e-9, and no other."""
    loss = 1j * float(which)
    expected = CHECKS[f"slab-CH4-lossy-{which}"]["expected"]["TM" if tm else "TE"]
    n = [1.5, 1.66 - loss, 1.6, 1.53, 1.66 - loss, 1.0]
    found = complex_modes(n, [0.5] * 4, 0.6328, tm, re_range=(1.5, 1.67))
    assert found.size == len(expected)
    for entry in expected:
        mode = nearest(found, number(entry))
        assert abs(mode - number(entry)) < 1e-9


@pytest.mark.parametrize("tm", [False, True], ids=["TE", "TM"])
def test_antiresonant_guide(tm):
    """A guide held by antiresonance, all its modes leaking into silicon: 1e-9 in Re N, 1e-5 of the loss."""
    found = complex_modes([3.85, 1.46, 2.3, 1.46, 1.0], [2.0, 0.089, 4.0], 0.6328, tm)
    for entry in CHECKS["leaky-ARROW-18"]["expected"]["TM" if tm else "TE"]:
        mode = nearest(found, number(entry))
        assert close(mode, number(entry), 1e-9, 1e-5)
        assert loss_dB_per_cm(mode, 0.6328) == pytest.approx(entry["loss_dB_cm"], rel=1e-4, abs=6e-6)


@pytest.mark.parametrize("tm", [False, True], ids=["TE", "TM"])
def test_film_on_oxide_on_its_own_material(tm):
    """A silicon film over a thin oxide on silicon: order 0 by companion and by search agree with the check."""
    entry = CHECKS["leaky-SOI-19"]["expected"]["TM" if tm else "TE"][0]
    stack = ([3.476, 1.444, 3.476, 1.0], [0.5, 0.22], 1.55)
    by_order = complex(leaky_index(*stack, 0, tm))
    assert close(by_order, number(entry), 1e-9, 1e-5)
    assert abs(nearest(complex_modes(*stack, tm), number(entry)) - by_order) < 1e-12
    assert loss_dB_per_cm(by_order, 1.55) == pytest.approx(entry["loss_dB_cm"], rel=1e-5)


@pytest.mark.parametrize("tm", [False, True], ids=["TE", "TM"])
@pytest.mark.parametrize("metal", ["Al", "Ag", "Au"])
def test_metal_cover(metal, tm):
    """Films under a metal: the lowest three modes to 1e-8."""
    check = CHECKS["metal-clad"]
    n = [1.512, 1.6, complex(check["inputs"]["metal_index"][metal])]
    found = complex_modes(n, [2.0], 0.6328, tm, loss_limit_dB_per_cm=1e5)
    for entry in check["expected"][f"metal-clad {metal} / 1.60 (2um) / 1.512 {'TM' if tm else 'TE'}"]:
        assert abs(nearest(found, number(entry)) - number(entry)) < 1e-8


def test_plasmons():
    """One interface's plasmon is sqrt(em ed / (em + ed)); a thin film splits it in two (1e-10)."""
    metal = np.sqrt(-19 - 0.53j)
    one = CHECKS["spp-single"]["expected"]
    found = complex_modes([2.0, 2.0, metal], [0.1], 0.633, True, loss_limit_dB_per_cm=1e5)
    assert abs(nearest(found, number(one)) - number(one)) < 1e-11
    found = complex_modes([2.0, metal, 2.0], [0.02], 0.633, True, loss_limit_dB_per_cm=1e5)
    for entry in CHECKS["lrspp-20nm"]["expected"].values():
        assert abs(nearest(found, number(entry)) - number(entry)) < 1e-10


def mp_leaky(n, t, lam, seed, tm, normal=None):
    """The outgoing mode of a stack at 30 digits: field and flux by cosines upwards from a radiating substrate."""
    mp.dps = 30
    normal = normal or n
    k0 = 2 * mp.pi / mp.mpf(lam)

    def miss(N):
        w = [1 / mp.mpf(x) ** 2 if tm else mp.mpf(1) for x in n]
        kappa2 = [
            mp.mpf(x) ** 2 * (1 - N**2 / mp.mpf(m) ** 2) if tm else mp.mpf(x) ** 2 - N**2
            for x, m in zip(n, normal, strict=True)
        ]
        # exp(+jwt), substrate below: a wave that travels away towards -x is exp(+j kappa x), Re kappa > 0
        psi, v = mp.mpc(1), w[0] * 1j * mp.sqrt(kappa2[0])
        for i, thick in enumerate(t, start=1):
            kappa = mp.sqrt(kappa2[i])
            x = kappa * k0 * mp.mpf(thick)
            psi, v = psi * mp.cos(x) + v / (w[i] * kappa) * mp.sin(x), v * mp.cos(x) - psi * w[i] * kappa * mp.sin(x)
        return v + w[-1] * mp.sqrt(-kappa2[-1]) * psi

    return complex(mp.findroot(miss, mp.mpc(seed), tol=1e-40))


@pytest.mark.parametrize("tm", [False, True], ids=["TE", "TM"])
def test_random_films_on_silicon(tm):
    """Random nitride films on oxide on silicon, uniaxial ones among them, agree with mpmath to 1e-12."""
    rng = np.random.default_rng(5)
    for k in range(25):
        n = [3.85, 1.457, rng.uniform(1.8, 2.1), 1.0]
        normal = [3.85, 1.457, n[2] - rng.uniform(0, 0.03), 1.0] if k % 2 else None
        t = [rng.uniform(0.3, 2.0), rng.uniform(0.3, 1.2)]
        found = leaky_index(n, t, 0.6328, np.arange(4), tm, normal)
        for N in found[np.isfinite(found)]:
            assert abs(N - mp_leaky(n, t, 0.6328, N, tm, normal)) < 1e-12
            assert N.imag <= 0  # a leak below rounding is none


def test_mpmath_comparison_sees_a_wrong_number():
    """A mode moved by 1e-9 is caught by the comparison with mpmath."""
    N = complex(leaky_index(*FILM_ON_SILICON, 0)) + 1e-9
    assert abs(N - mp_leaky(*FILM_ON_SILICON, N, False)) > 1e-10


@pytest.mark.parametrize("tm", [False, True], ids=["TE", "TM"])
def test_derivatives_against_differences(tm):
    """Closed-form derivatives, real and imaginary part, meet 30-digit differences to 1e-8."""
    n, t, lam = FILM_ON_SILICON
    N = complex(leaky_index(n, t, lam, 1, tm))
    d = leaky_derivatives(N, n, t, lam, tm)
    h = 1e-5

    def slope(change):
        a, b = (mp_leaky(*change(s * h), N, tm) for s in (1, -1))
        c, e = (mp_leaky(*change(s * h / 2), N, tm) for s in (1, -1))
        return (4 * (c - e) / h - (a - b) / (2 * h)) / 3  # Richardson: the error falls to h^4, 1e-11 here

    for i in range(4):
        wanted = slope(lambda s, i=i: ([x + s * (k == i) for k, x in enumerate(n)], t, lam))
        assert abs(d.dn[i] - wanted) < 1e-8 * max(abs(d.dn).max(), 1e-3)
    for i in range(2):
        wanted = slope(lambda s, i=i: (n, [x + s * (k == i) for k, x in enumerate(t)], lam))
        assert abs(d.dt_per_um[i] - wanted) < 1e-8 * abs(d.dt_per_um).max()
    assert abs(d.dwavelength_per_um - slope(lambda s: (n, t, lam + s))) < 1e-8 * abs(d.dwavelength_per_um)


def test_thick_oxide_gives_the_guided_mode():
    """As the oxide grows the leak dies out and Re N tends to that of the film on oxide alone."""
    guided = mode_index([1.457, 1.98, 1.0], [0.5], 0.6328, np.arange(2))
    losses = []
    for oxide in (0.5, 1.0, 1.5):
        N = leaky_index([3.85, 1.457, 1.98, 1.0], [oxide, 0.5], 0.6328, np.arange(2))
        losses.append(-N.imag)
    assert (np.diff(losses, axis=0) < 0).all()
    assert np.abs(N.real - guided).max() < 1e-8  # the leak at 1.5 µm is below that


def test_film_directly_on_silicon():
    """A polymer film on bare silicon leaks strongly; its modes are found from a wall and are true modes."""
    n, t, lam = [3.85, 1.59, 1.0], [3.0], 0.6328
    found = leaky_index(n, t, lam, np.arange(4))
    assert np.isfinite(found).all() and (np.diff(found.real) < 0).all()
    for N in found:
        assert abs(N - mp_leaky(n, t, lam, N, False)) < 1e-12
    searched = complex_modes(n, t, lam, re_range=(1.5, 1.6))
    for N in found:
        assert abs(nearest(searched, N) - N) < 1e-11


def test_door_takes_the_right_solver():
    """A stack whose substrate outranks the film is leaky, one whose film outranks both sides is guided."""
    assert is_leaky([[3.85, 1.457, 1.98, 1.0]]) and not is_leaky([[1.457, 1.98, 1.0]])
    leaky = film_modes([[3.85, 1.457, 1.98, 1.0]], [[0.4, 0.5]], [0.6328], [0])
    assert leaky.loss_index[0] < 0
    guided = film_modes([[1.457, 1.98, 1.0]], [[0.5]], [0.6328], [0])
    assert guided.loss_index[0] == 0


def test_modes_that_are_not_there():
    """An order beyond the companion's last, or a stack that radiates on both sides, gives NaN."""
    assert np.isnan(leaky_index(*FILM_ON_SILICON, 9))
    assert np.isnan(leaky_index([3.85, 1.5, 3.85], [0.5], 0.6328, 0))
