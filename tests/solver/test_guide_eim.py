"""The effective index method against the checks, textbook dispersion relations at 30 digits, and its limits."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from layerlot.solver import guide
from layerlot.solver.cross_section import CrossSection, GuideFlag, cross_section
from layerlot.solver.fields import mode_field
from layerlot.solver.guide import SideRule, eim_modes
from layerlot.solver.slab import mode_index
from mpmath import mp

from tests.reference import mp_slab

CHECKS = {c["id"]: c for c in json.loads((Path(__file__).parents[1] / "reference" / "eim.json").read_text())["checks"]}
POLARISATIONS = pytest.mark.parametrize("tm", [False, True], ids=["quasi-TE", "quasi-TM"])


def rib(name: str) -> CrossSection:
    """The rib of an entry of the checks."""
    x = CHECKS[name]["inputs"]
    etch = x["H_total_um"] - x["outer_slab_um"]
    n = [x["n_sub"], x["n_rib"], x["n_cover"]]
    return cross_section(n, [x["H_total_um"]], 1, x["w_um"], x["wavelength_um"], etch_um=etch)


def film_mode(n: tuple, t_um: float, wavelength_um: float, tm: bool, order: int = 0) -> mp.mpf | None:
    """Mode of a film between half-spaces by the textbook relation, at 30 digits; None where it is cut off.

    kappa t = m pi + sum of atan(eta gamma / kappa), eta = 1 for TE, (n_film / n)^2 for TM (H. Kogelnik, Topics in
    Applied Physics 7, ch. 2, 1975, eqs. 2.1.18 on; from memory).
    """
    with mp.workdps(30):
        low, film, high = (mp.mpf(float(x)) if not isinstance(x, mp.mpf) else x for x in n)
        k0 = 2 * mp.pi / mp.mpf(float(wavelength_um))

        def relation(N: mp.mpf) -> mp.mpf:
            kappa = mp.sqrt(film**2 - N**2)
            bent = [mp.atan2((film / x) ** 2 * mp.sqrt(N**2 - x**2) if tm else mp.sqrt(N**2 - x**2), kappa)
                    for x in (low, high)]  # fmt: skip
            return k0 * mp.mpf(float(t_um)) * kappa - order * mp.pi - sum(bent)

        bottom, top = max(low, high), film
        if top <= bottom or relation(bottom) <= 0:
            return None
        for _ in range(110):
            middle = (bottom + top) / 2
            bottom, top = (middle, top) if relation(middle) > 0 else (bottom, middle)
        return bottom


def textbook(s: CrossSection, tm: bool, order: int = 0) -> float:
    """Index of a guide with three layers and vertical walls, its side at cut-off where that holds no mode."""
    n = [float(x) for x in s.n]
    t, lam = float(s.t_um[0]), float(s.wavelength_um)
    centre = film_mode(tuple(n), t, lam, tm)
    side = film_mode(tuple(n), t - float(s.depth_um), lam, tm) or mp.mpf(max(n[0], n[2]))
    return float(film_mode((side, centre, side), float(s.width_um), lam, not tm, order))


@pytest.mark.parametrize(
    ("name", "te", "tm"),
    [
        ("rib-BT1", "EIM_quasiTE", "EIM_quasiTM"),
        ("rib-BT2", "EIM_quasiTE", "EIM_quasiTM"),
        ("rib-RD-t0.1", "EIM_qTE", "EIM_qTM"),
        ("rib-RD-t0.7", "EIM_qTE", "EIM_qTM"),
    ],
)
def test_ribs_of_the_checks(name, te, tm):
    """Ribs meet the checks' seven digits, and textbook relations at 30 digits to 1e-9."""
    for key, is_tm in ((te, False), (tm, True)):
        found = float(eim_modes(rib(name), is_tm).N)
        assert abs(found - CHECKS[name]["expected"][key]) <= 0.51e-7  # half of the last digit
        assert abs(found - textbook(rib(name), is_tm)) <= 1e-12  # the slab solver's accuracy


def test_wire_and_buried_square_of_the_checks():
    """Silicon wire and buried silica square meet the checks' digits and the textbook relations."""
    wire = cross_section([1.444, 3.476, 1.444], [0.22], 1, 0.5, 1.55)
    square = cross_section([1.444, 1.4548, 1.444], [6.0], 1, 6.0, 1.55)
    expected = CHECKS["eim-0.5x0.22"]["expected"]
    cases = [
        (wire, False, expected["EIM_quasiTE"]),
        (wire, True, expected["EIM_quasiTM"]),
        (square, False, CHECKS["buried-50"]["expected"]["EIM"]),
    ]
    for section, tm, value in cases:
        found = float(eim_modes(section, tm).N)
        assert abs(found - value) <= 0.51e-7
        assert abs(found - textbook(section, tm)) <= 1e-12


def test_scalar_rectangles_of_the_checks():
    """The two slab steps, both TE as for a scalar guide, give the checks' b(V) in either order of the steps."""
    for name, expected in CHECKS["eim-rect-scalar"]["expected"].items():
        aspect, V = (float(x.split("=")[1]) for x in name.split()[2:])
        clad, core = 1.0, np.sqrt(2.0)  # a numerical aperture of 1
        height, width = V / (2 * np.pi), aspect * V / (2 * np.pi)
        for first, second, key in ((height, width, "EIM_h_then_w"), (width, height, "EIM_w_then_h")):
            column = mode_index([clad, core, clad], [first], 1.0, 0)
            N = float(mode_index(np.array([clad, float(column), clad]), [second], 1.0, 0))
            # the checks have five digits
            assert abs((N**2 - clad**2) / (core**2 - clad**2) - expected[key]) <= 0.51e-5


def test_comparison_sees_a_wrong_index():
    """The textbook relations tell an index off by 1e-9 from the right one."""
    assert abs(float(eim_modes(rib("rib-BT2"), False).N) * (1 + 1e-9) - textbook(rib("rib-BT2"), False)) > 1e-9


@POLARISATIONS
@pytest.mark.parametrize("wall", [81.0, 96.0])
def test_sloped_walls_column_by_column(tm, wall):
    """A guide with sloped walls equals columns and lateral slab put together by hand at 30 digits."""
    n, t, depth, width, lam = (1.444, 3.476, 1.6, 1.0), (0.22, 0.3), 0.15, 0.6, 1.55
    s = cross_section(n, t, 1, width, lam, etch_um=depth, sidewall_deg=wall)

    def column(share: float) -> mp.mpf:
        if wall < 90:
            films, thick = (n[1], n[2]), (t[0] - share * depth, t[1] + share * depth)
        else:
            films = (n[1], n[2], n[1], n[2])
            thick = (t[0] - depth, share * depth, (1 - share) * depth, t[1])
        kept = [(x, y) for x, y in zip(films, thick) if y > 1e-15]
        return mp_slab.all_modes(mp_slab.Stack([n[0], *(x for x, _ in kept), n[3]], [y for _, y in kept], lam, tm))[0]

    shares = [(k + 0.5) / guide.WALL_COLUMNS for k in range(guide.WALL_COLUMNS)]
    outwards = [float(column(x)) for x in (*shares, 1.0)]
    extent = abs(depth / np.tan(np.radians(wall)))
    each = [extent / guide.WALL_COLUMNS] * guide.WALL_COLUMNS
    stack = mp_slab.Stack([*outwards[::-1], float(column(0.0)), *outwards], [*each, width - extent, *each], lam, not tm)
    # columns handed on in double precision
    assert abs(float(eim_modes(s, tm).N) - float(mp_slab.all_modes(stack)[0])) <= 1e-12


def random_sections(rng: np.random.Generator, size: int, kind: str) -> CrossSection:
    """Invented guides of one kind, from hardly guiding to multi-mode."""
    width, lam = rng.uniform(0.2, 2.0, size), rng.uniform(1.2, 1.7, size)
    thick = rng.uniform(0.1, 0.5, size)
    low, high = rng.uniform(1.0, 1.6, (2, size))
    core = rng.uniform(1.7, 3.6, size)
    three, four = (
        np.stack([low, core, high], axis=-1),
        np.stack([low, core, rng.uniform(1.0, 1.9, size), high], axis=-1),
    )
    films = np.stack([thick, rng.uniform(0.1, 0.8, size)], axis=-1)
    if kind == "strip":
        return cross_section(three, thick[:, None], 1, width, lam)
    if kind == "rib":
        return cross_section(three, thick[:, None], 1, width, lam, etch_um=thick * rng.uniform(0.1, 0.9, size))
    if kind == "covered rib":
        return cross_section(four, films, 1, width, lam, etch_um=thick * rng.uniform(0.1, 0.9, size))
    if kind == "loaded":
        return cross_section(four, films, 2, width, lam)
    walls = rng.uniform(75, 105, size)
    walls[::7] = 90.0
    return cross_section(
        four, films, 1, width + 0.3, lam, etch_um=thick * rng.uniform(0.1, 1.0, size), sidewall_deg=walls
    )


@pytest.mark.parametrize("kind", ["strip", "rib", "covered rib", "loaded", "walls"])
def test_bulk_and_single_guides_agree(kind, monkeypatch):
    """A batch by arrays and the same guides one by one in plain floats agree, NaN and flags included."""
    rng = np.random.default_rng(3)
    s = random_sections(rng, 60, kind)
    tm, order = rng.random(60) < 0.5, rng.integers(0, 3, 60)
    many = eim_modes(s, tm, order)
    monkeypatch.setattr(guide, "FEW", 1000)
    single = eim_modes(s, tm, order)
    assert np.isfinite(many.N).sum() > 10
    assert (many.flags == single.flags).all()
    for name in ("N", "dwidth_per_um", "dt_per_um", "detch_per_um", "dsidewall_per_deg", "dn", "dwavelength_per_um"):
        a, b = getattr(many, name), getattr(single, name)
        # rounding of both slab steps; derivatives lose up to four digits near cut-off
        np.testing.assert_allclose(a, b, rtol=1e-8, atol=1e-13 if name == "N" else 1e-9, err_msg=name)


def test_shapes_broadcast():
    """Polarisation and order broadcast with the batch, and every field has the broadcast shape."""
    s = cross_section([1.444, 3.476, 1.444], [0.22], 1, np.array([0.4, 0.5, 0.6]), 1.55)
    g = eim_modes(s, np.array([[False], [True]]), 0)
    assert g.N.shape == g.flags.shape == g.error.shape == (2, 3)
    assert g.dt_per_um.shape == (2, 3, 1) and g.dn.shape == (2, 3, 3)
    assert float(g.N[1, 2]) == float(eim_modes(cross_section([1.444, 3.476, 1.444], [0.22], 1, 0.6, 1.55), True).N)
    assert np.isnan(g.error).all() and np.isnan(g.group_error).all()


@POLARISATIONS
def test_a_wide_guide_is_the_slab(tm):
    """As the width grows the index goes over into that of the core's slab, as one over the width squared."""
    slab = float(mode_index([1.444, 3.476, 1.0], [0.22], 1.55, 0, tm))
    s = cross_section([1.444, 3.476, 1.0], [0.22], 1, np.array([1e2, 1e3, 1e4]), 1.55)
    gap = slab - eim_modes(s, tm).N
    assert gap[2] < 1e-7 and (gap > 0).all()  # (lambda / 2 w)^2 / (2 N) is 1e-9
    assert np.allclose(gap[:2] / gap[1:], 100, rtol=0.02)  # the field reaches 1 % beyond the narrowest


def test_no_lateral_mode():
    """A second lateral mode of a narrow wire does not exist, and the flag says so."""
    g = eim_modes(cross_section([1.444, 3.476, 1.444], [0.22], 1, 0.2, 1.55), False, 1)
    assert np.isnan(g.N) and g.flags & GuideFlag.NO_LATERAL_MODE and not g.flags & GuideFlag.NO_VERTICAL_MODE
    assert np.isnan(g.dn).all() and np.isnan(g.dt_per_um).all() and np.isnan(g.dwidth_per_um)


def test_no_vertical_mode():
    """A film too thin above its substrate holds no slab mode: no number, and the flag says so."""
    s = cross_section([1.444, 1.47, 1.0], [0.3], 1, 2.0, 1.55)
    g = eim_modes(s, False)
    assert np.isnan(g.N) and g.flags & GuideFlag.NO_VERTICAL_MODE and not g.flags & GuideFlag.NO_LATERAL_MODE
    assert np.isnan(g.dn).all()


def test_second_mode():
    """The flag for a second mode goes up at the width where the mode of order 1 appears."""
    widths = np.linspace(0.3, 0.8, 101)
    s = cross_section([1.444, 3.476, 1.444], [0.22], 1, widths, 1.55)
    flagged = (eim_modes(s, False).flags & GuideFlag.SECOND_MODE) != 0
    assert flagged.any() and not flagged.all()
    assert (flagged == np.isfinite(eim_modes(s, False, 1).N)).all()


def test_a_shallow_rib_leaks_its_tm_mode():
    """Rib BT2: the quasi-TM mode lies below the outer slab's TE index and is flagged; the quasi-TE one is not."""
    assert eim_modes(rib("rib-BT2"), True).flags & GuideFlag.LEAKS_SIDEWAYS
    assert not eim_modes(rib("rib-BT2"), False).flags & GuideFlag.LEAKS_SIDEWAYS
    outer = CHECKS["rib-BT2"]["expected"]["slab_outer"]
    assert outer[1] < float(eim_modes(rib("rib-BT2"), True).N) < outer[0]
    batch = cross_section([3.36, 3.44, 1.0], [1.0], 1, np.full(50, 3.0), 1.55, etch_um=0.1)
    assert (eim_modes(batch, True).flags & GuideFlag.LEAKS_SIDEWAYS != 0).all()


def test_silicon_below_a_buffer():
    """A silicon substrate is replaced by its buffer, whose index then counts; only a thin buffer is flagged."""
    n = [3.476, 1.444, 3.476, 1.444]
    thick, thin = (eim_modes(cross_section(n, [t, 0.22], 2, 0.5, 1.55), True) for t in (2.0, 0.5))
    assert float(thick.N) == pytest.approx(CHECKS["eim-0.5x0.22"]["expected"]["EIM_quasiTM"], abs=1e-7)
    assert thin.flags & GuideFlag.LEAKS_DOWN and not thick.flags & GuideFlag.LEAKS_DOWN
    bare = eim_modes(cross_section(n[1:], [0.22], 1, 0.5, 1.55), True)
    np.testing.assert_allclose(thick.dn, [0.0, *bare.dn], rtol=1e-10)  # rounding


def test_near_cut_off():
    """A guide that hardly holds its mode is flagged, a strong one is not."""
    s = cross_section([1.444, 1.4445, 1.444], [30.0], 1, np.array([0.2, 30.0]), 1.55)
    flags = eim_modes(s, False).flags
    assert flags[0] & GuideFlag.NEAR_CUT_OFF and not flags[1] & GuideFlag.NEAR_CUT_OFF


def test_etching_through_equals_an_etch_depth_of_the_whole_core():
    """A depth that leaves no core beside the guide gives the index of the strip."""
    n, t = [1.444, 3.476, 1.6, 1.0], [0.22, 0.3]
    strip = eim_modes(cross_section(n, t, 1, 0.5, 1.55), False)
    deep = eim_modes(cross_section(n, t, 1, 0.5, 1.55, etch_um=0.22), False)
    assert float(strip.N) == float(deep.N)
    assert float(strip.detch_per_um) == 0.0
    np.testing.assert_allclose(strip.dt_per_um[0], deep.dt_per_um[0] + deep.detch_per_um, rtol=1e-12)


def test_no_etch_is_no_guide():
    """Without an etch there is nothing that guides sideways."""
    g = eim_modes(cross_section([1.444, 3.476, 1.0], [0.22], 1, 0.5, 1.55, etch_um=0.0), False)
    assert np.isnan(g.N) and g.flags & GuideFlag.NO_LATERAL_MODE


def test_rules_for_sides_that_guide_nothing():
    """Each rule puts its own index beside the strip, and the flag says that a rule was needed."""
    n, t, lam = (1.46, 1.9, 1.52, 1.0), (0.3, 0.1), 1.55
    s = cross_section(n, t, 1, 1.0, lam)
    centre = float(mode_index(n, t, lam, 0))
    x = np.linspace(-6, 6, 240_001)
    psi2 = mode_field(centre, np.array(n), np.array(t), lam, x) ** 2
    beside = np.select([x < 0, x < 0.4], [n[0] ** 2, n[2] ** 2], n[3] ** 2)
    sides = {
        SideRule.CUT_OFF: 1.46,
        SideRule.FILL: 1.52,
        SideRule.WEIGHTED: float(np.sqrt((psi2 * beside).sum() / psi2.sum())),
    }
    for rule, side in sides.items():
        g = eim_modes(s, False, side_rule=rule)
        expected = float(film_mode((side, centre, side), 1.0, lam, True))
        # the weighted mean is a sum over steps of 50 pm, cut in mid-step at the edges
        assert abs(float(g.N) - expected) <= (1e-4 if rule is SideRule.WEIGHTED else 1e-12)
        assert g.flags & GuideFlag.SIDES_GUIDE_NOTHING
    assert not eim_modes(rib("rib-BT2"), False).flags & GuideFlag.SIDES_GUIDE_NOTHING


def test_the_index_is_continuous_where_the_side_comes_to_guide():
    """Through the etch depth at which the side's slab mode appears the index runs smoothly under the default rule."""
    depth = np.linspace(0.15, 0.21, 6001)
    N = eim_modes(cross_section([1.444, 3.476, 1.0], [0.22], 1, 0.5, 1.55, etch_um=depth), False)
    guided = (N.flags & GuideFlag.SIDES_GUIDE_NOTHING) == 0
    assert guided.any() and not guided.all()
    # steps of 10 pm at slopes below 1 per µm, and the slope itself has no jump
    assert np.abs(np.diff(N.N)).max() < 1e-4
    assert np.abs(np.diff(N.detch_per_um)).max() < 1e-2


def test_a_mode_below_a_half_space_is_none():
    """Where the rule would put a mode below the index of the substrate, it is not guided."""
    s = cross_section([1.46, 1.9, 1.0], [0.3], 1, 0.25, 1.55)
    g = eim_modes(s, True, side_rule=SideRule.FILL)
    assert np.isnan(g.N) and g.flags & GuideFlag.NO_LATERAL_MODE


def test_radius_must_be_positive():
    """A radius of zero or NaN is refused."""
    s = cross_section([1.444, 3.476, 1.444], [0.22], 1, 0.5, 1.55)
    for radius in (0.0, -5.0, np.nan):
        with pytest.raises(ValueError, match="radius_um"):
            eim_modes(s, False, radius_um=radius)
