"""Bends against Bessel functions, which solve the lateral slab in cylinder coordinates exactly, and at their limits."""

from __future__ import annotations

import numpy as np
import pytest
from layerlot.solver import bend, guide
from layerlot.solver.cross_section import CrossSection, GuideFlag, cross_section
from layerlot.solver.guide import eim_modes
from layerlot.solver.slab import mode_index
from mpmath import mp

POLARISATIONS = pytest.mark.parametrize("tm", [False, True], ids=["quasi-TE", "quasi-TM"])
WIRE = cross_section([1.444, 3.476, 1.444], [0.22], 1, 0.5, 1.55)
WIDE_WIRE = cross_section([1.444, 3.476, 1.444], [0.22], 1, 0.7, 1.55)
NITRIDE = cross_section([1.444, 1.98, 1.444], [0.4], 1, 1.2, 1.55)


def bessel_mode(s: CrossSection, tm: bool, radius_um: float, near: float) -> complex:
    """Index, referred to the radius, of the ring-shaped slab made of a strip's columns: J inside, J and Y in the core,
    H2 (which goes outwards for exp(+jwt)) outside; psi and w dpsi/dr continuous, w = 1 or 1/n^2.

    J. A. Stratton, Electromagnetic Theory (1941), ch. 6: cylindrical waves; from memory.
    """
    with mp.workdps(22):
        core = mp.mpf(float(mode_index(s.n, s.t_um, s.wavelength_um, 0, tm)))
        side = mp.mpf(float(s.n[0]))
        k0 = 2 * mp.pi / mp.mpf(float(s.wavelength_um))
        half = mp.mpf(float(s.width_um)) / 2
        weight = 1 / core**2 if not tm else mp.mpf(1), 1 / side**2 if not tm else mp.mpf(1)

        def pair(kind, nu, n, r):
            x = k0 * n * r
            return kind(nu, x), k0 * n * (kind(nu - 1, x) - kind(nu + 1, x)) / 2

        def mismatch(N):
            nu = N * k0 * radius_um
            (r1, r2), (wc, ws) = (radius_um - half, radius_um + half), weight
            inner, outer = pair(mp.besselj, nu, side, r1), pair(mp.hankel2, nu, side, r2)
            j1, y1 = pair(mp.besselj, nu, core, r1), pair(mp.bessely, nu, core, r1)
            j2, y2 = pair(mp.besselj, nu, core, r2), pair(mp.bessely, nu, core, r2)
            a = inner[0] * wc * y1[1] - inner[1] * ws * y1[0]
            b = inner[1] * ws * j1[0] - inner[0] * wc * j1[1]
            psi, v = a * j2[0] + b * y2[0], wc * (a * j2[1] + b * y2[1])
            return (psi * ws * outer[1] - v * outer[0]) / (outer[0] * inner[0])

        return complex(mp.findroot(mismatch, (near, near + 1e-6), solver="secant", tol=1e-30, verify=False))


CASES = [
    (WIRE, False, 5.0),
    (WIDE_WIRE, True, 8.0),
    (WIRE, False, 20.0),
    (NITRIDE, False, 50.0),
    (NITRIDE, True, 100.0),
]


@pytest.mark.parametrize(("s", "tm", "radius"), CASES)
def test_index_meets_bessel_functions(s, tm, radius):
    """The bent index equals the exact one of the ring-shaped slab."""
    found = float(eim_modes(s, tm, radius_um=radius).N)
    exact = bessel_mode(s, tm, radius, found)
    straight = float(eim_modes(s, tm).N)
    assert abs(found - exact.real) <= 1e-7  # what the cuts may leave
    assert abs(found - straight) > 1e-5  # a shift that is seen


def test_comparison_sees_an_isotropic_map():
    """The exact index tells the bent mode from the straight one and from a radius off by one part in a thousand."""
    exact = bessel_mode(WIRE, False, 5.0, float(eim_modes(WIRE, False).N)).real
    assert abs(float(eim_modes(WIRE, False, radius_um=5.005).N) - exact) > 3e-7


@POLARISATIONS
def test_error_falls_with_the_fourth_power_of_the_cuts(tm, monkeypatch):
    """Twice as many cuts leave a sixteenth of the error."""
    s = WIDE_WIRE
    N = []
    for factor in (1, 2, 4, 8):
        monkeypatch.setattr(bend, "CUTS", tuple(x * factor // 2 for x in (24, 4, 24)))
        N.append(float(eim_modes(s, tm, radius_um=5.0).N))
    errors = np.abs(np.diff(N))
    assert (errors[:-1] / errors[1:] > 10).all() and (errors[:-1] / errors[1:] < 30).all()


@POLARISATIONS
@pytest.mark.parametrize("wall", [90.0, 84.0])
def test_a_large_radius_goes_over_into_the_straight_guide(tm, wall):
    """The shift falls as one over the radius squared, and an infinite radius is the straight guide exactly."""
    s = cross_section([1.444, 3.476, 1.444], [0.22], 1, 0.6, 1.55, sidewall_deg=wall)
    straight = eim_modes(s, tm)
    shift = [float(eim_modes(s, tm, radius_um=R).N - straight.N) for R in (50.0, 500.0, 5000.0)]
    assert shift[0] > 0
    # the next term falls as the fourth power; rounding is 1e-15 of a shift of 1e-8
    assert shift[0] / shift[1] == pytest.approx(100, rel=0.01)
    assert shift[1] / shift[2] == pytest.approx(100, rel=1e-3)
    infinite = eim_modes(s, tm, radius_um=np.inf)
    assert float(infinite.N) == float(straight.N)
    assert (infinite.dn == straight.dn).all()


SLOPES = {
    "width_um": (lambda g: g.dwidth_per_um, 2e-4),
    "wavelength_um": (lambda g: g.dwavelength_per_um, 2e-4),
    "etch_um": (lambda g: g.detch_per_um, 1e-4),
    "sidewall_deg": (lambda g: g.dsidewall_per_deg, 1e-2),
}


@POLARISATIONS
@pytest.mark.parametrize("wall", [86.0, 96.0])
@pytest.mark.parametrize("radius", [4.0, 10.0, 100.0])
def test_derivatives_equal_differences(tm, wall, radius):
    """Derivatives of a bent guide equal differences of fourth order, in a bend that radiates as in a wide one."""
    base = {
        "n": [1.444, 3.476, 1.3], "t_um": [0.22], "core": 1, "width_um": 0.6, "wavelength_um": 1.55, "etch_um": 0.2,
        "sidewall_deg": wall,
    }  # fmt: skip
    g = eim_modes(cross_section(**base), tm, radius_um=radius)
    assert np.isfinite(g.N)

    def difference(key: str, index: int | None, step: float) -> float:
        N = []
        for times in (-2, -1, 1, 2):
            value = np.array(base[key], dtype=float)
            value[() if index is None else index] += times * step
            N.append(float(eim_modes(cross_section(**{**base, key: value}), tm, radius_um=radius).N))
        return (8 * (N[2] - N[1]) - (N[3] - N[0])) / (12 * step)

    checks = [(float(get(g)), key, None, step) for key, (get, step) in SLOPES.items()]
    checks += [(float(g.dn[j]), "n", j, 2e-4) for j in range(3)] + [(float(g.dt_per_um[0]), "t_um", 0, 1e-4)]
    for found, key, index, step in checks:
        # rounding over the step, 1e-11, and a little curvature
        assert abs(difference(key, index, step) - found) <= 1e-8 * max(abs(found), 0.01), (key, index)


def test_a_batch_of_radii_equals_single_bends(monkeypatch):
    """Straight and bent guides, some out of range, in one batch equal the same one by one."""
    rng = np.random.default_rng(4)
    size = 12
    s = cross_section([1.444, 1.98, 1.444], [0.4], 1, rng.uniform(0.8, 1.4, size), 1.55, sidewall_deg=88.0)
    radius = 10 ** rng.uniform(0, 2.5, size)
    radius[::4] = np.inf
    tm = rng.random(size) < 0.5
    single = eim_modes(s, tm, 0, radius)
    monkeypatch.setattr(guide, "FEW", 0)
    many = eim_modes(s, tm, 0, radius)
    assert 4 < np.isfinite(many.N).sum() < size
    assert (many.flags == single.flags).all()
    for name in ("N", "dwidth_per_um", "dt_per_um", "dsidewall_per_deg", "dn", "dwavelength_per_um"):
        np.testing.assert_allclose(getattr(many, name), getattr(single, name), rtol=1e-9, atol=1e-12, err_msg=name)


@pytest.mark.parametrize(("s", "tm", "low", "high"), [(NITRIDE, False, 12.0, 24.0), (WIDE_WIRE, True, 3.5, 8.0)])
def test_radiation_is_flagged_where_the_exact_loss_is_high(s, tm, low, high):
    """The flag goes up near the stated loss, by the exact loss of the ring; till then N keeps its digits."""
    flagged, silent = [], []
    for radius in np.geomspace(low, high, 5):
        g = eim_modes(s, tm, radius_um=radius)
        exact = bessel_mode(s, tm, radius, float(g.N))
        k0 = 2 * np.pi / float(s.wavelength_um)
        assert abs(float(g.N) - exact.real) <= 0.3 * abs(exact.imag) + 1e-7  # as `LOUD_DB` says, and the cuts
        loss = 20 / np.log(10) * abs(exact.imag) * k0 * radius * np.pi / 2
        (flagged if g.flags & GuideFlag.BEND_RADIATES else silent).append(loss)
    assert flagged and silent
    # the WKB estimate is good to a factor of about two
    assert min(flagged) > bend.LOUD_DB / 2.5
    assert max(silent) < bend.LOUD_DB * 2.5


def test_bends_out_of_range():
    """A radius of less than two widths, or a turning point within the guide, gives no number and the flag."""
    small = eim_modes(WIRE, False, radius_um=0.9)
    loose = eim_modes(cross_section([1.444, 1.4548, 1.444], [6.0], 1, 6.0, 1.55), False, radius_um=200.0)
    for g in (small, loose):
        assert np.isnan(g.N) and g.flags & GuideFlag.BEND_OUT_OF_RANGE
        assert np.isnan(g.dn).all() and np.isnan(g.dwidth_per_um)
    assert not eim_modes(WIRE, False, radius_um=5.0).flags & (GuideFlag.BEND_OUT_OF_RANGE | GuideFlag.BEND_RADIATES)


def test_a_guide_without_a_straight_mode_has_no_bent_one():
    """A lateral order that the straight guide does not hold is missing, not out of range."""
    g = eim_modes(WIRE, False, 3, 20.0)
    assert np.isnan(g.N) and g.flags & GuideFlag.NO_LATERAL_MODE and not g.flags & GuideFlag.BEND_OUT_OF_RANGE
