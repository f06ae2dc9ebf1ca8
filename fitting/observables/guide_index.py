"""Absolute layer indices of a stack at vacuum wavelengths, with their slopes along wavelength and temperature.

Quantities without a value count at their start, those without a start in the middle of their window.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from layerlot.solver.air import air_index, air_index_slope_per_um
from layerlot.solver.materials import THERMO_SPAN_K, Material
from numpy.typing import ArrayLike

from ..records import Array
from ..stack import IndexSpec, Layer, Quantity, Stack
from .parameters import near_curve

_CURVE_TERMS = ("curve0", "curve1", "curve2")


@dataclass(frozen=True, slots=True)
class LayerIndices:
    """n (C, L) absolute, dn_dwavelength (C, L) per µm of vacuum wavelength, dn_dtemperature (C, L) per °C, zero for the
    layers in `without_thermo`: their material states no thermo-optic term."""

    n: Array
    dn_dwavelength: Array
    dn_dtemperature: Array
    without_thermo: tuple[str, ...]


def nominal(q: Quantity) -> float:
    """The value that a quantity counts at: its own, its start, or the middle of its window."""
    if q.nominal is not None:
        return q.nominal
    assert q.low is not None and q.high is not None
    return (q.low + q.high) / 2


def layer_indices(
    stack: Stack,
    wavelength_um: ArrayLike,
    temperature_C: Sequence[float | None] | None = None,
    values: Mapping[str, float] | None = None,
    mean_x: float | None = None,
) -> LayerIndices:
    """Indices of all layers at vacuum wavelengths (C) in µm.

    temperature_C (C): None, for all or for one, stands for the stack's reference temperature. values: in place of
    nominal ones, as typed: `index:LAYER` where the index is one quantity, `index_shift:LAYER` for a material,
    `curve0:LAYER` and so on for a curve to be fitted. mean_x: 1/µm², of the wavelengths as typed, where such a curve
    has its first term; the mean over those given if left out. For uniaxial layers the index in the plane.
    Raises OutOfRangeError (a ValueError) where a material is unknown.
    """
    lam = np.atleast_1d(np.asarray(wavelength_um, dtype=float))
    at = [None] * lam.size if temperature_C is None else list(temperature_C)
    own = values or {}
    if mean_x is None:
        mean_x = float(np.mean(1 / _typed_um(stack, lam)[0] ** 2))
    found = [_index(stack, layer, lam, at, own, mean_x) for layer in stack.layers]
    n, slope, thermal = (np.stack([f[k] for f in found], axis=-1) for k in range(3))
    without = tuple(x.name for x in stack.layers if x.index.material is None or x.index.material.thermo is None)
    return LayerIndices(n, slope, thermal, without)


def _index(
    stack: Stack,
    layer: Layer,
    lam: Array,
    temperature_C: Sequence[float | None],
    values: Mapping[str, float],
    mean_x: float,
) -> tuple[Array, Array, Array]:
    """Index (C) of one layer, its slope per µm and per °C."""
    spec = layer.index
    if spec.kind == "material":
        n, slope, thermal = _material(stack, spec, lam, temperature_C)
        shift = values.get(f"index_shift:{layer.name}", 0.0 if spec.shift is None else nominal(spec.shift))
        more, more_slope = _inside(stack, np.full_like(lam, shift), np.zeros_like(lam), lam)
        return n + more, slope + more_slope, thermal
    if spec.kind == "quantity":
        assert spec.quantity is not None
        typed = np.full_like(lam, values.get(f"index:{layer.name}", nominal(spec.quantity)))
        by_typed = np.zeros_like(lam)
    else:
        typed, by_typed = _curve(stack, spec, lam, [values.get(f"{k}:{layer.name}") for k in _CURVE_TERMS], mean_x)
    return (*_inside(stack, typed, by_typed, lam), np.zeros_like(lam))


def _inside(stack: Stack, typed: Array, slope: Array, lam: Array) -> tuple[Array, Array]:
    """Absolute index and slope of an index as typed, both by vacuum wavelength."""
    if stack.index_reference == "vacuum":
        return typed, slope
    air, air_slope = air_index(lam, stack.air_temperature_C), air_index_slope_per_um(lam, stack.air_temperature_C)
    return typed * air, slope * air + typed * air_slope


def _typed_um(stack: Stack, lam: Array) -> tuple[Array, Array]:
    """Wavelengths as the file types them, and their slope, by vacuum wavelength."""
    if stack.wavelength_reference == "vacuum":
        return lam, np.ones_like(lam)
    air, air_slope = air_index(lam, stack.air_temperature_C), air_index_slope_per_um(lam, stack.air_temperature_C)
    return lam / air, (air - lam * air_slope) / air**2


def _curve(
    stack: Stack, spec: IndexSpec, lam: Array, terms: Sequence[float | None], mean_x: float
) -> tuple[Array, Array]:
    """The curve that a Cauchy fit starts from, as in `parameters`, and its slope by vacuum wavelength."""
    start = [*near_curve(stack, spec, mean_x), 0.0]
    c = [s if t is None else t for s, t in zip(start, terms)]
    typed, typed_slope = _typed_um(stack, lam)
    x, x_slope = typed**-2.0, -2 * typed**-3.0 * typed_slope
    return c[0] + c[1] * (x - mean_x) + c[2] * (x**2 - mean_x**2), (c[1] + 2 * c[2] * x) * x_slope


def _material(
    stack: Stack, spec: IndexSpec, lam: Array, temperature_C: Sequence[float | None]
) -> tuple[Array, Array, Array]:
    assert spec.material is not None
    n, slope, thermal = np.empty_like(lam), np.empty_like(lam), np.zeros_like(lam)
    for at_C in set(temperature_C):
        rows = np.array([t == at_C for t in temperature_C])
        n[rows] = spec.index_inside(stack, lam[rows], at_C)
        slope[rows] = spec.dn_dwavelength(stack, lam[rows], at_C)
        thermal[rows] = _thermal(spec.material, lam[rows], stack.temperature_or_reference(at_C))
    return n, slope, thermal


def _thermal(material: Material, lam: Array, temperature_C: float | None) -> Array:
    """dn/dT per °C by a difference over 2 °C, exact for terms up to the second power of the temperature."""
    if material.thermo is None or material.temperature_C is None:
        return np.zeros_like(lam)
    at_C = material.temperature_C if temperature_C is None else temperature_C
    low = max(at_C - 1, material.temperature_C - THERMO_SPAN_K)
    high = min(at_C + 1, material.temperature_C + THERMO_SPAN_K)
    return np.asarray((material.index(lam, high) - material.index(lam, low)) / (high - low))
