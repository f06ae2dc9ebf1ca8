"""What a stack file lacks for a prediction: starts, indices at the wavelengths asked for, a guide that can be."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence

from .observables.guide_index import layer_indices
from .observables.parameters import Context, build_layout
from .records import Fault, Place
from .stack import Guide, IndexSpec, Stack, Structure
from .stack_schema import WAVELENGTH_NM

# Slopes of walls that the guide models take.
_WALL_DEG = (45.0, 135.0)


def start_faults(stack: Stack) -> list[Fault]:
    """A fault for each quantity to be fitted that states no value to predict from."""
    places = []
    for number, layer in enumerate(stack.layers, start=1):
        where = f"layer[{number}]"
        for key, spec in (("index", layer.index), ("index_normal", layer.index_normal)):
            if spec is not None and _lacks_start(spec):
                places.append(f"{where}.{key}")
        if layer.thickness_um is not None and layer.thickness_um.nominal is None:
            places.append(f"{where}.thickness_nm")
    prism = stack.prism
    if prism is not None:
        keys = (
            {"index": prism.index_TE} if prism.one_index else {"index_TE": prism.index_TE, "index_TM": prism.index_TM}
        )
        places += [f"prism.{key}" for key, spec in keys.items() if _lacks_start(spec)]
        plain = {"base_angle_deg": prism.base_angle_deg, "angle_offset_deg": prism.angle_offset_deg}
        places += [f"prism.{key}" for key, q in plain.items() if q.nominal is None]
    return [_no_start(stack, place) for place in places]


def _lacks_start(spec: IndexSpec) -> bool:
    return any(q is not None and q.nominal is None for q in (spec.quantity, spec.shift))


def wavelength_faults(stack: Stack, film_nm: Sequence[float], guide_nm: Sequence[float]) -> list[Fault]:
    """A fault for each wavelength that is none, or at which an index is unknown: of the stack and the prism where film
    modes are asked for, of the stack where guides are."""

    def films(nm: float) -> object:
        return build_layout(stack, [Context(nm / 1000, False, None), Context(nm / 1000, True, None)])

    def guides(nm: float) -> object:
        return layer_indices(stack, float(stack.to_vacuum_um(nm / 1000)))

    asked = [*((nm, films) for nm in film_nm), *((nm, guides) for nm in guide_nm if nm not in film_nm)]
    found = (_wavelength_fault(nm, indices) for nm, indices in asked)
    return [fault for fault in found if fault is not None]


def _wavelength_fault(nm: float, indices: Callable[[float], object]) -> Fault | None:
    low, high = WAVELENGTH_NM
    place, was = Place("command line", column="--wavelength-nm"), f"{nm:g} nm"
    if not low <= nm <= high:
        remedy = f"if µm was meant, write {nm * 1000:g}" if 0.1 <= nm <= 50 else "correct the wavelength"
        return Fault(place, was, f"wavelengths are in nm, {low:g} to {high:g}", remedy)
    try:
        indices(nm)
    except ValueError as error:
        remedy = "ask for another wavelength, or give that index as a number or a table"
        return Fault(place, was, str(error), remedy)
    return None


def guide_faults(stack: Stack) -> list[Fault]:
    """A fault for each start that the guides lack, and for each dimension that no guide can have."""
    guide = stack.guide
    if guide is None or not stack.structures:
        return []
    plain = {
        "guide.etch_depth_nm": guide.etch_depth_um,
        "guide.width_bias_nm": guide.width_bias_um,
        "guide.sidewall_deg": guide.sidewall_deg,
    }
    for number, s in enumerate(stack.structures, start=1):
        lengths = {"radius_um": s.radius_um, "length_um": s.length_um, "delta_length_um": s.delta_length_um}
        plain |= {f"structure[{number}].{key}": q for key, q in lengths.items()}
    without = [_no_start(stack, place) for place, q in plain.items() if q is not None and q.nominal is None]
    return [*without, *_depth_faults(stack, guide), *_width_faults(stack, guide)]


def _depth_faults(stack: Stack, guide: Guide) -> list[Fault]:
    out = []
    depth_um, thick_um, wall = _depth_um(stack, guide), _thickness_um(stack, guide), guide.sidewall_deg.nominal
    if depth_um is not None and thick_um is not None and depth_um > thick_um * (1 + 1e-12):
        was, required = f"{depth_um * 1000:g} nm", f"the etch stays within {guide.core}, {thick_um * 1000:g} nm thick"
        remedy = 'correct the depth, or write "full"'
        out.append(Fault(Place(stack.file, column="guide.etch_depth_nm"), was, required, remedy))
    if wall is not None and not _WALL_DEG[0] < wall < _WALL_DEG[1]:
        required = f"walls slope between {_WALL_DEG[0]:g} and {_WALL_DEG[1]:g} degrees, 90 being vertical"
        place = Place(stack.file, column="guide.sidewall_deg")
        out.append(Fault(place, f"{wall:g} degrees", required, "correct the angle"))
    return out


def _width_faults(stack: Stack, guide: Guide) -> list[Fault]:
    out = []
    bias_um, depth_um, wall = guide.width_bias_um.nominal, _depth_um(stack, guide), guide.sidewall_deg.nominal
    if bias_um is None:
        return []
    for number, s in enumerate(stack.structures, start=1):
        place = Place(stack.file, column=f"structure[{number}].drawn_width_nm")
        made_um = s.drawn_width_um + bias_um
        was = f"{_name(s)}: {s.drawn_width_um * 1000:g} nm drawn, bias {bias_um * 1000:g} nm"
        if made_um <= 0:
            out.append(Fault(place, was, "the width made is positive", "correct the drawn width or the bias"))
        elif depth_um is not None and wall is not None and _WALL_DEG[0] < wall < _WALL_DEG[1]:
            walls_um = abs(depth_um / math.tan(math.radians(wall))) if wall != 90 else 0.0
            if walls_um >= made_um:
                required = f"walls of {wall:g} degrees take {walls_um * 1000:.4g} nm and must not meet"
                remedy = "correct width, etch depth or sidewall angle"
                out.append(Fault(place, f"{_name(s)}: {made_um * 1000:g} nm wide", required, remedy))
    return out


def _name(structure: Structure) -> str:
    return f'"{structure.name}"'


def _thickness_um(stack: Stack, guide: Guide) -> float | None:
    core = next(layer for layer in stack.layers if layer.name == guide.core)
    return None if core.thickness_um is None else core.thickness_um.nominal


def _depth_um(stack: Stack, guide: Guide) -> float | None:
    return _thickness_um(stack, guide) if guide.etch_depth_um is None else guide.etch_depth_um.nominal


def _no_start(stack: Stack, column: str) -> Fault:
    required, remedy = "a prediction needs a value", "add start = ... beside fit"
    return Fault(Place(stack.file, column=column), "to be fitted, without a start", required, remedy)
