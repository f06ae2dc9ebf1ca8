"""From stack files with guides to cross-sections and windows."""

from __future__ import annotations

import numpy as np
import pytest
from layerlot.fitting.observables.guide import GuideContext, guide_parts, guide_windows, mean_x, path_um
from layerlot.fitting.observables.guide_index import layer_indices
from layerlot.fitting.observables.guide_nominal import at_nominal
from layerlot.fitting.observables.parameters import Context, build_layout
from layerlot.fitting.stack import Stack, parse_stack
from layerlot.solver.map_window import AXES, index_points_um, map_window
from layerlot.solver.ranges import OutOfRangeError

from tests.fitting.guide_cases import STRIP, rib

# Index of air at 1550 nm and 20 °C: P. E. Ciddor, Appl. Opt. 35, 1566 (1996), 1.00027326 at 15 °C (from memory), by the
# ideal-gas law. The last digit and the compressibility leave 1e-8.
AIR_20 = 1 + 2.7326e-4 * 288.15 / 293.15


def contexts(stack: Stack, *nm: float) -> list[GuideContext]:
    return [GuideContext(s, w / 1000, s.pol == "TM") for s in stack.structures for w in nm or (1550.0,)]


def test_sections_of_structures() -> None:
    """Each structure has its drawn width plus the bias's start, the layers' thicknesses and a core etched through."""
    stack = parse_stack(STRIP, "strip.toml")
    parts = guide_parts(stack, contexts(stack, 1500.0, 1550.0))
    s = parts.section
    assert parts.names == ("R20", "R20", "M38", "M38")
    assert s.width_um == pytest.approx([0.455, 0.455, 0.425, 0.425], abs=1e-12)
    assert s.t_um.tolist() == [[2.0, 0.22]] * 4
    assert (s.core, s.etch_um) == (2, None)
    assert s.wavelength_um.tolist() == parts.wavelength_um.tolist() == [1.5, 1.55, 1.5, 1.55]
    assert parts.radius_um.tolist() == [20.0, 20.0, np.inf, np.inf]
    assert not parts.tm.any() and not parts.order.any()


def test_indices_of_materials() -> None:
    """Indices are absolute, at the stack's temperature, with slopes along wavelength and temperature.

    Fused silica: formula of I. H. Malitson, J. Opt. Soc. Am. 55, 1205 (1965), relative to air at 20 °C. dn/dT as in
    datasets/materials.toml: 1.0e-5 /K and, for silicon, 1.86e-4 /K.
    """
    stack = parse_stack(STRIP, "strip.toml")
    parts = guide_parts(stack, contexts(stack, 1550.0))
    in_air = 1.55 / AIR_20
    terms = [(0.6961663, 0.0684043), (0.4079426, 0.1162414), (0.8974794, 9.896161)]
    silica = np.sqrt(1 + sum(b * in_air**2 / (in_air**2 - c**2) for b, c in terms))
    assert parts.section.n[0, 3] == pytest.approx(silica * AIR_20 + 5 * 1.0e-5, abs=3e-8)
    assert parts.dn_dtemperature[0] == pytest.approx([1.86e-4, 1.0e-5, 1.86e-4, 1.0e-5], rel=1e-6)
    step = 1e-3
    ahead, behind = (guide_parts(stack, contexts(stack, 1550.0 + s * step * 1000)) for s in (1, -1))
    difference = (ahead.section.n - behind.section.n) / (2 * step)
    # 1550 nm may be a point of silicon's table, where the second derivative jumps by parts in a thousand per µm².
    assert parts.dn_dwavelength == pytest.approx(difference, abs=2e-6)
    warmer = guide_parts(parse_stack(STRIP.replace("_C = 25.0", "_C = 27.0"), "x"), contexts(stack, 1550.0))
    assert (warmer.section.n - parts.section.n) / 2 == pytest.approx(parts.dn_dtemperature, rel=1e-6)


def test_temperature_of_a_context() -> None:
    """A context's own temperature goes before the stack's, context by context."""
    stack = parse_stack(STRIP, "strip.toml")
    cold, warm = (GuideContext(stack.structures[0], 1.55, False, t) for t in (None, 35.0))
    n = guide_parts(stack, [cold, warm]).section.n
    assert n[1] - n[0] == pytest.approx([1.86e-3, 1e-4, 1.86e-3, 1e-4], rel=1e-6)


AIR = 'index_reference = "air"\nwavelength_reference = "air"\nreference_temperature_C = 20.0\n'


def test_numbers_relative_to_air() -> None:
    """Indices and wavelengths typed relative to air come out absolute and in vacuum; a plain index has air's slope."""
    stack = parse_stack(AIR + rib((1.45, 2.0, 1.0), 300, 100.0, 1000), "air.toml")
    parts = guide_parts(stack, contexts(stack, 1550.0))
    assert parts.section.n[0] == pytest.approx(np.array([1.45, 2.0, 1.0]) * AIR_20, abs=3e-8)
    assert parts.wavelength_um[0] == pytest.approx(1.55 * AIR_20, abs=3e-8)
    step = 1e-3
    ahead, behind = (guide_parts(stack, contexts(stack, 1550.0 + s * step * 1000)) for s in (1, -1))
    run = (ahead.wavelength_um - behind.wavelength_um)[:, None]
    assert parts.dn_dwavelength == pytest.approx((ahead.section.n - behind.section.n) / run, rel=1e-4)
    assert (parts.dn_dwavelength < 0).all()


@pytest.mark.parametrize("reference", ["", AIR], ids=["vacuum", "air"])
@pytest.mark.parametrize(
    "index",
    [
        "{ fit = [1.9, 2.1], start = 1.97 }",
        "{ table = [[1400, 2.0], [1500, 1.99], [1700, 1.98]], shift = 0.01 }",
        '{ fit_cauchy = 3, near = "silicon nitride (Luke 2015)" }',
        "{ fit_cauchy = 2, near = 1.95 }",
    ],
)
def test_guides_and_films_share_their_indices(index: str, reference: str) -> None:
    """The index that a guide starts from is the one that a film fit at the same wavelengths starts from."""
    text = reference + rib((1.45, 2.0, 1.0), 300, 100.0, 1000).replace("index = 2.0", f"index = {index}")
    stack = parse_stack(text, "x.toml")
    parts = guide_parts(stack, contexts(stack, 1450.0, 1550.0, 1600.0))
    layout = build_layout(stack, [Context(w, False, None) for w in (1.45, 1.55, 1.6)])
    film = layout.n_fixed + layout.n_map @ layout.starts()
    assert stack.index_typed(parts.section.n, parts.wavelength_um[:, None]) == pytest.approx(film, abs=1e-12)
    middle = mean_x(contexts(stack, 1450.0, 1550.0, 1600.0))
    ahead, behind = (layer_indices(stack, parts.wavelength_um + s, None, None, middle).n for s in (1e-4, -1e-4))
    # Steps of 0.1 nm: a tenth of 1e-8 of curvature, and of rounding 1e-16 / 1e-4.
    assert parts.dn_dwavelength == pytest.approx((ahead - behind) / 2e-4, abs=2e-6)


@pytest.mark.parametrize("reference", ["", AIR], ids=["vacuum", "air"])
@pytest.mark.parametrize("near", ['"silicon nitride (Luke 2015)"', "1.95"])
def test_stack_at_nominal_values(near: str, reference: str) -> None:
    """A stack at its nominal values has the same guides as the stack itself, and windows without extent but for drawn
    widths and wavelengths, or for the bias where that is kept."""
    text = STRIP.replace('"full"', "{ fit = [100, 200], start = 150 }").replace(
        "_deg = 90.0", "_deg = { value = 85, u = 1 }"
    )
    text = reference + text.replace("reference_temperature_C = 25.0\n", "").replace(
        'name = "cover"\nindex = "fused silica"', 'name = "cover"\nindex = { value = 1.45, u = 0.01 }'
    )
    core = "thickness_nm = { value = 220, u = 1 }"
    text = text.replace(f'index = "silicon (Li 1980)"\n{core}', f"index = {{ fit_cauchy = 2, near = {near} }}\n{core}")
    stack = parse_stack(text, "x.toml")
    asked = contexts(stack, 1500.0, 1550.0)
    fixed = at_nominal(stack, mean_x(asked))
    before, after = guide_parts(stack, asked), guide_parts(fixed, asked)
    for field in ("n", "t_um", "width_um", "etch_um", "sidewall_deg", "wavelength_um"):
        assert getattr(after.section, field) == pytest.approx(getattr(before.section, field), abs=1e-12)
    assert after.dn_dwavelength == pytest.approx(before.dn_dwavelength, abs=1e-12)
    windows = guide_windows(fixed, asked)
    assert [w.names for w in windows] == [("M38",), ("R20",)]
    for w in windows:
        low, high = w.ends()
        assert (high - low)[:5] == pytest.approx(np.zeros(5), abs=1e-12)
    (shared,) = guide_windows(at_nominal(stack, mean_x(asked), keep_bias=True), asked)
    assert shared.width_um == pytest.approx((0.36, 0.51))
    assert shared.etch_um == pytest.approx((0.15, 0.15))


def test_values_in_place_of_nominal_ones() -> None:
    """Values by name move the quantity they name, and no other; what goes by no name is refused."""
    text = rib((1.45, 2.0, 1.0), 300, 100.0, 1000).replace("index = 1.45", 'index = "fused silica"')
    stack = parse_stack(text, "x.toml")
    asked = contexts(stack)
    before = guide_parts(stack, asked).section
    values = {"width_bias": 0.03, "etch_depth": 0.12, "sidewall": 84.0, "thickness:film": 0.31, "index:film": 2.02,
              "index_shift:substrate": 1e-3}  # fmt: skip
    after = guide_parts(stack, asked, values).section
    assert after.width_um - before.width_um == pytest.approx([0.03])
    assert (after.etch_um[0], after.sidewall_deg[0], after.t_um[0, 0]) == (0.12, 84.0, 0.31)
    assert after.n[0] - before.n[0] == pytest.approx([1e-3, 0.02, 0.0], abs=1e-12)
    for name in ("width", "index:substrate", "thickness:cover", "index_shift:film"):
        with pytest.raises(ValueError, match=name):
            guide_parts(stack, asked, {name: 1.0})
    through = parse_stack(STRIP, "strip.toml")
    with pytest.raises(ValueError, match="etch_depth"):
        guide_parts(through, contexts(through), {"etch_depth": 0.1})


def test_without_a_start_the_middle_counts() -> None:
    """A quantity to be fitted without a start stands in the middle of its window."""
    stack = parse_stack(STRIP.replace("[-60, 60], start = 5", "[-60, 20]"), "strip.toml")
    assert guide_parts(stack, contexts(stack)).section.width_um == pytest.approx([0.43, 0.40])


def test_what_guides_cannot_be_made_of() -> None:
    """A uniaxial layer, and a wavelength at which a material is unknown, are refused by name."""
    uniaxial = rib((1.45, 2.0, 1.0), 300, 100.0, 1000).replace("index = 2.0", "index = 2.0\nindex_normal = 1.99")
    stack = parse_stack(uniaxial, "x.toml")
    with pytest.raises(ValueError, match="index_normal of film"):
        guide_parts(stack, contexts(stack))
    stack = parse_stack(STRIP, "strip.toml")
    with pytest.raises(OutOfRangeError, match="silicon"):
        guide_parts(stack, contexts(stack, 800.0))


def test_lengths_of_paths() -> None:
    """A ring's path is its circumference or its length, an interferometer's the difference."""
    stack = parse_stack(STRIP + STRUCTURE, "strip.toml")
    assert [path_um(s) for s in stack.structures] == pytest.approx([40 * np.pi, 38.0, 250.0])


STRUCTURE = '[[structure]]\nname = "L"\nkind = "ring"\nlength_um = 250.0\ndrawn_width_nm = 600\npol = "TM"\n'


def test_windows_of_quantities() -> None:
    """A window runs from end to end of what is fitted, four u about what is known, and is a point where exact."""
    text = STRIP.replace('"full"', "{ value = 150, u = 2 }").replace(
        "_deg = 90.0", "_deg = { fit = [80, 90], start = 88 }"
    )
    text = text.replace("220, u = 1", "220, u = 0.5")
    (window,) = guide_windows(stack := parse_stack(text, "x.toml"), contexts(stack, 1500.0, 1600.0))
    low, high = window.ends()
    # 420 and 450 nm drawn, bias of -60 to 60 nm.
    assert dict(zip(AXES, zip(low, high))) == {
        "width_um": pytest.approx((0.36, 0.51)),
        "thickness_um": pytest.approx((0.218, 0.222)),
        "etch_um": pytest.approx((0.142, 0.158)),
        "sidewall_deg": (80.0, 90.0),
        "core_index_offset": (0.0, 0.0),
        "wavelength_um": (1.5, 1.6),
    }
    assert (window.names, window.rows, window.full_etch, window.tightest_um) == (
        ("M38", "R20"),
        (2, 3, 0, 1),
        False,
        20.0,
    )


def test_windows_are_shared_within_the_bias_window() -> None:
    """Widths that the bias can make alike share a window; others, and other polarisations, have their own."""
    exact = STRIP.replace("{ fit = [-60, 60], start = 5 }", "0.0")
    assert [w.names for w in _windows(exact)] == [("M38",), ("R20",)]
    assert [w.names for w in _windows(STRIP)] == [("M38", "R20")]
    assert [w.names for w in _windows(STRIP.replace("= 420", "= 300"))] == [("M38",), ("R20",)]
    both = _windows(STRIP.replace('420\npol = "TE"', '420\npol = "TM"'))
    assert [(w.names, w.tm) for w in both] == [(("R20",), False), (("M38",), True)]


def _windows(text: str) -> list:
    stack = parse_stack(text, "x.toml")
    return guide_windows(stack, contexts(stack))


@pytest.mark.parametrize(
    ("index", "offset"),
    [
        ("{ fit = [1.95, 2.1], start = 2.0 }", (-0.05, 0.1)),
        ("{ value = 2.0, u = 0.001 }", (-0.004, 0.004)),
        ("{ cauchy = [1.98, 0.01], shift = { fit = [-0.02, 0.03] } }", (-0.025, 0.025)),
        ("{ cauchy = [1.98, 0.01] }", (0.0, 0.0)),
    ],
)
def test_index_window_counts_from_the_nominal_index(index: str, offset: tuple[float, float]) -> None:
    """The core's index window is an offset from its nominal index, absolute where numbers are relative to air."""
    text = rib((1.45, 2.0, 1.0), 300, 100.0, 1000).replace("index = 2.0", f"index = {index}")
    assert _windows(text)[0].core_index_offset == pytest.approx(offset, abs=1e-12)
    assert _windows(AIR + text)[0].core_index_offset == pytest.approx(np.array(offset) * AIR_20, abs=1e-8)


def test_other_temperatures_widen_the_index_window() -> None:
    """Readings at other temperatures are inside the window: silicon moves by 1.86e-4 per °C."""
    stack = parse_stack(STRIP, "strip.toml")
    asked = [GuideContext(stack.structures[0], 1.55, False, t) for t in (None, 30.0, 22.0)]
    (window,) = guide_windows(stack, asked)
    assert window.core_index_offset == pytest.approx((-3 * 1.86e-4, 5 * 1.86e-4), rel=1e-6)


@pytest.mark.parametrize(
    "text",
    [
        STRIP,
        STRIP.replace('"full"', "{ fit = [100, 400], start = 150 }"),
        STRIP.replace("_deg = 90.0", "_deg = { fit = [35, 140], start = 80 }"),
        STRIP.replace("[-60, 60], start = 5", "[-600, 60], start = -200"),
    ],
)
def test_every_window_can_be_mapped(text: str) -> None:
    """What `guide_windows` returns is a window that maps take and that holds every guide at its nominal values."""
    stack = parse_stack(text, "x.toml")
    asked = contexts(stack, 1520.0, 1580.0)
    parts = guide_parts(stack, asked)
    for w in guide_windows(stack, asked):
        low, high = w.ends()
        n = layer_indices(stack, index_points_um(*w.wavelength_um)).n
        window = map_window(low, high, n, parts.section.t_um[0], parts.section.core, w.full_etch, w.tm, w.order)
        for corner in np.stack([low, high, [low[0], *high[1:]]]):
            window.section_at(corner)
        points = window.points_of(parts.section, window.nominal_index(parts.wavelength_um)[0])[list(w.rows)]
        axes = window.active
        assert (points[:, axes] >= low[axes] - 1e-9).all() and (points[:, axes] <= high[axes] + 1e-9).all()
