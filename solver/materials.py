"""Refractive index of materials: dispersion formulas, thermo-optic terms, and the medium that a source refers to.

    the source gives                                   use
    B, C of a Sellmeier formula                        sellmeier
    poles in µm² ("C not squared"), powers, rutile     Poles
    A + B/λ² + C/λ⁴                                    Cauchy
    a table                                            Table (monotone cubic between its points)
    air                                                StandardAir

A formula answers in the source's own terms. `Material` adds range, medium and temperature, and answers in absolute
index at vacuum wavelength: the conversion between air and vacuum stands here and nowhere else.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, Protocol

import numpy as np
from numpy.typing import ArrayLike

from .air import LABORATORY_TEMPERATURE_C, air_index, air_index_slope_per_um
from .ranges import Array, within

Medium = Literal["vacuum", "air"]
# A thermo-optic term is the start of a series: refused further than this from the temperature of the constants.
THERMO_SPAN_K = 60.0


class Formula(Protocol):
    """A dispersion formula in its source's own terms: wavelengths in µm, any shape."""

    def index(self, wavelength_um: ArrayLike) -> Array: ...

    def slope_per_um(self, wavelength_um: ArrayLike) -> Array: ...


@dataclass(frozen=True, slots=True)
class Poles:
    """n² = constant + Σ s λ^p / (λ² − q) + Σ c λ^e, with poles (s, p, q in µm²) and powers (c, e)."""

    constant: float
    poles: tuple[tuple[float, float, float], ...] = ()
    powers: tuple[tuple[float, float], ...] = ()

    def index(self, wavelength_um: ArrayLike) -> Array:
        """n; NaN where the formula gives a negative n²."""
        square, _ = self._square(np.asarray(wavelength_um, dtype=float))
        return np.asarray(np.sqrt(np.where(square > 0, square, np.nan)))

    def slope_per_um(self, wavelength_um: ArrayLike) -> Array:
        """dn/dλ per µm, in closed form."""
        square, slope = self._square(np.asarray(wavelength_um, dtype=float))
        return np.asarray(slope / (2 * np.sqrt(np.where(square > 0, square, np.nan))))

    def _square(self, lam: Array) -> tuple[Array, Array]:
        """n² and d(n²)/dλ."""
        square, slope = np.full_like(lam, self.constant), np.zeros_like(lam)
        for strength, power, pole_um2 in self.poles:
            gap = lam**2 - pole_um2
            square = square + strength * lam**power / gap
            slope = slope + strength * lam ** (power - 1) * (power / gap - 2 * lam**2 / gap**2)
        for coefficient, exponent in self.powers:
            square = square + coefficient * lam**exponent
            slope = slope + coefficient * exponent * lam ** (exponent - 1)
        return square, slope


def sellmeier(B: ArrayLike, C_um: ArrayLike, constant: float = 1.0) -> Poles:
    """n² = constant + Σ B λ² / (λ² − C²), C in µm. Raises ValueError where B and C differ in length."""
    strengths, poles = np.atleast_1d(np.asarray(B, dtype=float)), np.atleast_1d(np.asarray(C_um, dtype=float))
    if strengths.shape != poles.shape:
        raise ValueError(
            f"{strengths.size} B and {poles.size} C: a Sellmeier formula takes as many of one as the other"
        )
    return Poles(constant, tuple((float(b), 2.0, float(c) ** 2) for b, c in zip(strengths, poles, strict=True)))


@dataclass(frozen=True, slots=True)
class Cauchy:
    """n = A + B/λ² + C/λ⁴ + ..., coefficients in µm^0, µm², µm⁴."""

    coefficients: tuple[float, ...]

    def index(self, wavelength_um: ArrayLike) -> Array:
        lam = np.asarray(wavelength_um, dtype=float)
        return np.asarray(np.polynomial.polynomial.polyval(lam**-2.0, np.array(self.coefficients)))

    def slope_per_um(self, wavelength_um: ArrayLike) -> Array:
        lam = np.asarray(wavelength_um, dtype=float)
        terms = [-2 * k * c * lam ** (-2.0 * k - 1) for k, c in enumerate(self.coefficients)]
        return np.asarray(sum(terms, np.zeros_like(lam)))


@dataclass(frozen=True, slots=True)
class Table:
    """n at wavelengths in rising order; monotone cubic (PCHIP) between them, a straight line for two points.

    F. N. Fritsch, R. E. Carlson, SIAM J. Numer. Anal. 17, 238 (1980), doi 10.1137/0717021. It invents no extremum and
    has a continuous slope, so that a group index has no jumps.
    """

    wavelength_um: tuple[float, ...]
    n: tuple[float, ...]

    def __post_init__(self) -> None:
        lam = np.array(self.wavelength_um)
        if lam.size != len(self.n) or lam.size < 2 or not (np.diff(lam) > 0).all():
            raise ValueError("a table needs two or more wavelengths in rising order and as many indices")

    def index(self, wavelength_um: ArrayLike) -> Array:
        return self._curve(wavelength_um, 0)

    def slope_per_um(self, wavelength_um: ArrayLike) -> Array:
        return self._curve(wavelength_um, 1)

    def _curve(self, wavelength_um: ArrayLike, derivative: int) -> Array:
        from scipy.interpolate import PchipInterpolator  # noqa: PLC0415 (slow to load, and few materials are tables)

        curve = PchipInterpolator(np.array(self.wavelength_um), np.array(self.n), extrapolate=False)
        return np.asarray(curve(np.asarray(wavelength_um, dtype=float), nu=derivative), dtype=float)


@dataclass(frozen=True, slots=True)
class StandardAir:
    """Dry air at 15 °C and 101325 Pa, `layerlot.solver.air`."""

    def index(self, wavelength_um: ArrayLike) -> Array:
        return air_index(wavelength_um)

    def slope_per_um(self, wavelength_um: ArrayLike) -> Array:
        return air_index_slope_per_um(wavelength_um)


@dataclass(frozen=True, slots=True)
class LinearThermo:
    """Δn = dn_dT ΔT, the same at all wavelengths."""

    dn_dT_per_K: float
    source: str

    def change(self, n: Array, dn_per_um: Array, wavelength_um: Array, delta_K: float) -> tuple[Array, Array]:
        """Change of index, and of its slope per µm."""
        return np.full_like(n, self.dn_dT_per_K * delta_K), np.zeros_like(n)


@dataclass(frozen=True, slots=True)
class GlassThermo:
    """Δn = (n²−1)/(2n) [D0 ΔT + D1 ΔT² + D2 ΔT³ + (E0 ΔT + E1 ΔT²)/(λ² − L²)], L in µm: the makers' form for optical
    glass, in absolute index."""

    D: tuple[float, float, float]
    E: tuple[float, float]
    L_um: float
    source: str

    def change(self, n: Array, dn_per_um: Array, wavelength_um: Array, delta_K: float) -> tuple[Array, Array]:
        """Change of index, and of its slope per µm."""
        gap = wavelength_um**2 - self.L_um**2
        even = sum(d * delta_K**k for k, d in enumerate(self.D, start=1))
        pole = self.E[0] * delta_K + self.E[1] * delta_K**2
        bracket = even + pole / gap
        factor, factor_slope = (n**2 - 1) / (2 * n), (1 + n**-2.0) / 2 * dn_per_um
        return factor * bracket, factor_slope * bracket - factor * pole * 2 * wavelength_um / gap**2


@dataclass(frozen=True, slots=True)
class Material:
    """A formula with all that its source says of it.

    range_um: where the formula holds, in the source's own wavelengths. index_medium, wavelength_medium: what index and
    wavelength are relative to ("air": dry, 101325 Pa, at `temperature_C`, or 20 °C where that is unknown).
    temperature_C: of the constants. thermo: None where no term is known; `thermo_absent` then says so in words.
    """

    name: str
    formula: Formula
    range_um: tuple[float, float]
    source: str
    index_medium: Medium = "vacuum"
    wavelength_medium: Medium = "vacuum"
    temperature_C: float | None = None
    thermo: LinearThermo | GlassThermo | None = None
    thermo_absent: str = ""

    def index(self, wavelength_um: ArrayLike, temperature_C: float | None = None) -> Array:
        """Absolute index at vacuum wavelengths in µm (any shape), at a temperature if one is given and a thermo-optic
        term is known, else at that of the constants. Raises OutOfRangeError (a ValueError)."""
        return self._absolute(np.asarray(wavelength_um, dtype=float), temperature_C)[0]

    def slope_per_um(self, wavelength_um: ArrayLike, temperature_C: float | None = None) -> Array:
        """Derivative of `index` with respect to the vacuum wavelength, per µm."""
        return self._absolute(np.asarray(wavelength_um, dtype=float), temperature_C)[1]

    def group_index(self, wavelength_um: ArrayLike, temperature_C: float | None = None) -> Array:
        """n − λ dn/dλ, absolute, at vacuum wavelengths in µm."""
        lam = np.asarray(wavelength_um, dtype=float)
        return group_index(*self._absolute(lam, temperature_C), lam)

    def _absolute(self, lam: Array, temperature_C: float | None) -> tuple[Array, Array]:
        own, own_slope = lam, np.ones_like(lam)
        air_at_C = LABORATORY_TEMPERATURE_C if self.temperature_C is None else self.temperature_C
        if "air" in (self.index_medium, self.wavelength_medium):
            air, air_slope = air_index(lam, air_at_C), air_index_slope_per_um(lam, air_at_C)
        if self.wavelength_medium == "air":
            own, own_slope = lam / air, (air - lam * air_slope) / air**2
        own = within(own, *self.range_um, material=self.name, what="wavelengths", unit="nm", scale=1000)
        n, slope = self.formula.index(own), self.formula.slope_per_um(own) * own_slope
        if not np.isfinite(n).all():
            at_nm = float(own[~np.isfinite(n)].flat[0]) * 1000
            raise ValueError(f"{self.name} gives no real index at {at_nm:g} nm")
        if self.index_medium == "air":
            n, slope = n * air, slope * air + n * air_slope
        if temperature_C is None or self.thermo is None or self.temperature_C is None:
            return n, slope
        low, high = self.temperature_C - THERMO_SPAN_K, self.temperature_C + THERMO_SPAN_K
        within(temperature_C, low, high, material=self.name, what="temperatures", unit="°C")
        change, change_slope = self.thermo.change(n, slope, lam, temperature_C - self.temperature_C)
        return n + change, slope + change_slope


def group_index(n: ArrayLike, dn_per_um: ArrayLike, wavelength_um: ArrayLike) -> Array:
    """n − λ dn/dλ; n, slope per µm and wavelength in µm broadcast and refer to the same medium."""
    slope = np.asarray(wavelength_um, dtype=float) * np.asarray(dn_per_um, dtype=float)
    return np.asarray(np.asarray(n, dtype=float) - slope)
