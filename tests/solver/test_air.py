"""Index of air against the published table of its equation, and wavelengths between vacuum and air."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from layerlot.solver.air import air_index, air_index_slope_per_um, air_to_vacuum_um, vacuum_to_air_um
from layerlot.solver.ranges import OutOfRangeError

REFERENCE = json.loads((Path(__file__).parents[1] / "reference" / "dispersion.json").read_text(encoding="utf-8"))


@pytest.mark.parametrize("point", REFERENCE["air_refractivity"]["points"])
def test_refractivity_follows_temperature_and_pressure(point: dict[str, float]) -> None:
    """Dry air at five temperatures and pressures has the refractivity of Ciddor's Table 1 (from memory)."""
    wave = REFERENCE["air_refractivity"]["wavelength_um_vacuum"]
    found = (air_index(wave, point["temperature_C"], point["pressure_Pa"]) - 1) * 1e8
    # 0.1 of 1e-8: one unit of the last printed digit.
    assert found == pytest.approx(point["refractivity"], abs=REFERENCE["air_refractivity"]["tolerance"])
    assert found * 1.001 != pytest.approx(point["refractivity"], abs=REFERENCE["air_refractivity"]["tolerance"])


def test_known_line_in_air() -> None:
    """The helium-neon line, 632.9914 nm in vacuum, is 632.8165 nm in standard air (common practice, from memory)."""
    assert vacuum_to_air_um(0.6329914, 15.0) == pytest.approx(0.6328164, abs=3e-7)


def test_wavelengths_return_from_air_to_vacuum() -> None:
    """Vacuum to air and back is the same wavelength to rounding, over the whole range and three temperatures."""
    vacuum = np.geomspace(0.24, 20, 400)
    for temperature_C in (0.0, 20.0, 60.0):
        back = air_to_vacuum_um(vacuum_to_air_um(vacuum, temperature_C), temperature_C)
        # A few units in the last place of a double.
        np.testing.assert_allclose(back, vacuum, rtol=1e-15)


def test_slope_is_the_derivative() -> None:
    """The closed-form slope equals a central difference of the refractivity."""
    lam, h = np.linspace(0.3, 3, 200), 1e-4
    numeric = (air_index(lam + h) - air_index(lam - h)) / (2 * h)
    # The refractivity carries 2e-16 of n = 1: 1e-12 in the quotient. Curvature adds 1e-6 of the slope at 0.3 µm.
    np.testing.assert_allclose(air_index_slope_per_um(lam), numeric, rtol=1e-5, atol=3e-12)


def test_too_short_a_wavelength_is_refused() -> None:
    """Below 0.23 µm, where the equation ends, air has no index, and the error carries value and limits."""
    with pytest.raises(OutOfRangeError, match="air is known for wavelengths from 230 nm, not at 200 nm") as caught:
        air_index([0.5, 0.2])
    assert (caught.value.material, caught.value.value, caught.value.low) == ("air", 200.0, 230.0)


@pytest.mark.parametrize(("temperature_C", "pressure_Pa"), [(150.0, 1e5), (20.0, 1013.25)])
def test_impossible_air_is_refused(temperature_C: float, pressure_Pa: float) -> None:
    """A temperature or pressure outside the equation (hPa typed for Pa, say) is an error, not an extrapolation."""
    with pytest.raises(ValueError, match="the equation holds from"):
        air_index(0.6, temperature_C, pressure_Pa)
