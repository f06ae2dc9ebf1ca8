"""Refractive index of dry air, and wavelengths between vacuum and air.

P. E. Ciddor, Appl. Opt. 35, 1566-1573 (1996), doi 10.1364/AO.35.001566: dispersion at 15 °C, 101325 Pa, 450 ppm CO2,
scaled with the density of real air (BIPM 1981/91 equation). Humidity is left out: half-saturated air at 20 °C has a
refractivity 4e-7 smaller (order of magnitude from memory), far below what a film measurement resolves.

Stated for 0.23 to 1.69 µm. Longer wavelengths are extrapolated, since materials tabulated against air in the infrared
need a value there; the refractivity has all but reached its limit and the error stays of the order of 1e-6.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from .ranges import Array, within

STANDARD_TEMPERATURE_C = 15.0
STANDARD_PRESSURE_PA = 101325.0
LABORATORY_TEMPERATURE_C = 20.0
SHORTEST_UM, LONGEST_STATED_UM = 0.23, 1.69

# Ciddor 1996, appendix A: dispersion constants in µm^-2, refractivity times 1e8.
_POLES = ((5792105.0, 238.0185), (167917.0, 57.362))
# Compressibility of dry air, same appendix.
_A0, _A1, _A2, _D = 1.58123e-6, -2.9331e-8, 1.1043e-10, 1.83e-11


def air_index(
    wavelength_um: ArrayLike,
    temperature_C: float = STANDARD_TEMPERATURE_C,
    pressure_Pa: float = STANDARD_PRESSURE_PA,
) -> Array:
    """Index of dry air at vacuum wavelengths in µm (any shape). Raises OutOfRangeError below 0.23 µm."""
    refractivity, _ = _dispersion(_checked(wavelength_um))
    return 1 + refractivity * density_ratio(temperature_C, pressure_Pa)


def air_index_slope_per_um(
    wavelength_um: ArrayLike,
    temperature_C: float = STANDARD_TEMPERATURE_C,
    pressure_Pa: float = STANDARD_PRESSURE_PA,
) -> Array:
    """Derivative of `air_index` with respect to the vacuum wavelength, per µm."""
    _, slope = _dispersion(_checked(wavelength_um))
    return slope * density_ratio(temperature_C, pressure_Pa)


def vacuum_to_air_um(wavelength_um: ArrayLike, temperature_C: float = LABORATORY_TEMPERATURE_C) -> Array:
    """Wavelength in air (µm) of light whose vacuum wavelength is given."""
    vacuum = np.asarray(wavelength_um, dtype=float)
    return vacuum / air_index(vacuum, temperature_C)


def air_to_vacuum_um(wavelength_um: ArrayLike, temperature_C: float = LABORATORY_TEMPERATURE_C) -> Array:
    """Vacuum wavelength (µm) of light whose wavelength in air is given."""
    in_air = np.asarray(wavelength_um, dtype=float)
    vacuum = in_air
    # n changes by 1e-5 per µm at most above 0.3 µm, so that each turn gains five digits or more.
    for _ in range(4):
        vacuum = in_air * air_index(vacuum, temperature_C)
    return vacuum


def density_ratio(temperature_C: float, pressure_Pa: float) -> float:
    """Density of dry air over its density at 15 °C and 101325 Pa. Raises ValueError for other than -40 to 100 °C and
    10 to 140 kPa, where the equation holds."""
    if not -40 <= temperature_C <= 100:
        raise ValueError(f"air temperature {temperature_C:g} °C: the equation holds from -40 to 100 °C")
    if not 10e3 <= pressure_Pa <= 140e3:
        raise ValueError(f"air pressure {pressure_Pa:g} Pa: the equation holds from 10000 to 140000 Pa")
    return _density(temperature_C, pressure_Pa) / _density(STANDARD_TEMPERATURE_C, STANDARD_PRESSURE_PA)


def _density(t: float, p: float) -> float:
    """Density of dry air up to a constant factor: p / (Z T)."""
    ratio = p / (t + 273.15)
    compressibility = 1 - ratio * (_A0 + _A1 * t + _A2 * t**2) + ratio**2 * _D
    return ratio / compressibility


def _checked(wavelength_um: ArrayLike) -> Array:
    return within(wavelength_um, SHORTEST_UM, np.inf, material="air", what="wavelengths", unit="nm", scale=1000)


def _dispersion(wavelength_um: Array) -> tuple[Array, Array]:
    """Refractivity of standard air and its derivative per µm."""
    wavenumber2 = wavelength_um**-2.0
    n = np.zeros_like(wavelength_um)
    slope = np.zeros_like(wavelength_um)
    for strength, pole in _POLES:
        n = n + strength * 1e-8 / (pole - wavenumber2)
        slope = slope - 2 * strength * 1e-8 * wavelength_um**-3.0 / (pole - wavenumber2) ** 2
    return n, slope
