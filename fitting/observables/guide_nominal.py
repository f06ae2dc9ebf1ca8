"""A stack with every quantity exact, at the value that a prediction starts from."""

from __future__ import annotations

from dataclasses import replace

from layerlot.solver.materials import Cauchy, Material

from ..stack import IndexSpec, Layer, Quantity, Stack
from ..stack_schema import WAVELENGTH_NM
from .guide_index import nominal
from .parameters import near_curve


def at_nominal(stack: Stack, mean_x: float, keep_bias: bool = False) -> Stack:
    """The stack with its layers and its guide at nominal values: a window of such guides spans their drawn widths and
    wavelengths alone. mean_x: 1/µm², of the wavelengths as typed, where curves to be fitted have their first term;
    keep_bias: leave the width bias as it is."""
    guide = stack.guide
    if guide is not None:
        guide = replace(
            guide,
            etch_depth_um=None if guide.etch_depth_um is None else _exact(guide.etch_depth_um),
            width_bias_um=guide.width_bias_um if keep_bias else _exact(guide.width_bias_um),
            sidewall_deg=_exact(guide.sidewall_deg),
        )
    return replace(stack, layers=tuple(_layer(stack, layer, mean_x) for layer in stack.layers), guide=guide)


def _exact(q: Quantity) -> Quantity:
    return Quantity("exact", value=nominal(q))


def _layer(stack: Stack, layer: Layer, mean_x: float) -> Layer:
    thickness = None if layer.thickness_um is None else _exact(layer.thickness_um)
    return replace(layer, index=_index(stack, layer.index, mean_x), thickness_um=thickness)


def _index(stack: Stack, spec: IndexSpec, mean_x: float) -> IndexSpec:
    if spec.quantity is not None:
        return replace(spec, quantity=_exact(spec.quantity))
    if spec.kind == "material":
        return replace(spec, shift=None if spec.shift is None else _exact(spec.shift))
    start, slope = near_curve(stack, spec, mean_x)
    low, high = WAVELENGTH_NM
    curve = Material(
        name="curve that a fit starts from",
        formula=Cauchy((start - slope * mean_x, slope)),
        range_um=(low / 1000, high / 1000),
        source="as the stack file gives it",
        index_medium=stack.index_reference,
        wavelength_medium=stack.wavelength_reference,
        temperature_C=stack.air_temperature_C,
    )
    return IndexSpec("material", material=curve)
