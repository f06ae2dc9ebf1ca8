"""From a stack file with a guide to cross-sections: what the guide models are asked for, and over which window.

    guide_parts      the guides of given structures, wavelengths and temperatures, at nominal or other values
    guide_windows    the window that the file's quantities span, a group of structures each

A guide's width is that at half its etch depth: made width = drawn width + width bias. Lengths in µm, absolute indices,
vacuum wavelengths.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from layerlot.solver.cross_section import CrossSection, GuideFlag, cross_section

from ..flags import flag
from ..records import Array, BoolArray, Flag, IntArray
from ..stack import Guide, Layer, Quantity, Stack, Structure
from .guide_index import layer_indices, nominal

# A known quantity is taken to lie within so many standard uncertainties of its value.
_KNOWN_SPAN = 4.0
# Half of the index window of a core whose curve is to be fitted near a given one.
_CURVE_HALF = 0.1
# Slopes of walls and widths that a window holds at the most, see `cross_section`.
_WALL_DEG = (45.5, 134.5)
_LEAST_WIDTH_UM = 0.02

CODES = {
    GuideFlag.NO_VERTICAL_MODE: "guide_no_vertical_mode",
    GuideFlag.NO_LATERAL_MODE: "guide_no_lateral_mode",
    GuideFlag.SIDES_GUIDE_NOTHING: "guide_sides_guide_nothing",
    GuideFlag.SECOND_MODE: "guide_second_mode",
    GuideFlag.LEAKS_SIDEWAYS: "guide_leaks_sideways",
    GuideFlag.LEAKS_DOWN: "guide_leaks_down",
    GuideFlag.BEND_RADIATES: "guide_bend_radiates",
    GuideFlag.BEND_OUT_OF_RANGE: "guide_bend_out_of_range",
    GuideFlag.NEAR_CUT_OFF: "guide_near_cut_off",
    GuideFlag.OUTSIDE_MAP: "guide_outside_map",
    GuideFlag.MAP_GOAL_MISSED: "guide_map_error",
    GuideFlag.NO_MAP: "guide_no_map",
}


@dataclass(frozen=True, slots=True)
class GuideContext:
    """One guide asked for: a structure at a wavelength (µm, as typed) and a temperature (None: the stack's reference);
    order: number of lateral nodes."""

    structure: Structure
    wavelength_um: float
    tm: bool
    temperature_C: float | None = None
    order: int = 0


@dataclass(frozen=True)
class GuideParts:
    """Guides in the order of their contexts (C). section: batch of cross-sections (C); dn_dwavelength (C, L) per µm of
    vacuum wavelength; dn_dtemperature (C, L) per °C, zero for the layers named in `without_thermo`; radius_um: of the
    centre line, infinite for interferometers and for paths given by length alone; names: of the structures."""

    section: CrossSection
    tm: BoolArray
    order: IntArray
    dn_dwavelength: Array
    dn_dtemperature: Array
    without_thermo: tuple[str, ...]
    radius_um: Array
    wavelength_um: Array
    names: tuple[str, ...]


@dataclass(frozen=True)
class GuideWindow:
    """(low, high) of each quantity that a guide's mode depends on, equal where it is exact.

    thickness_um: of the core as deposited; etch_um: zeros where `full_etch`; core_index_offset: absolute core index
    minus that at nominal values, the reference temperature and the same wavelength; wavelength_um: vacuum. rows: which
    contexts lie in it; names: of their structures; tightest_um: their smallest radius.
    """

    tm: bool
    order: int
    rows: tuple[int, ...]
    names: tuple[str, ...]
    width_um: tuple[float, float]
    thickness_um: tuple[float, float]
    etch_um: tuple[float, float]
    sidewall_deg: tuple[float, float]
    core_index_offset: tuple[float, float]
    wavelength_um: tuple[float, float]
    full_etch: bool
    tightest_um: float

    def ends(self) -> tuple[Array, Array]:
        """Low and high ends (6), in the order of `layerlot.solver.map_window.AXES`."""
        axes = (
            self.width_um, self.thickness_um, self.etch_um, self.sidewall_deg, self.core_index_offset,
            self.wavelength_um,
        )  # fmt: skip
        return np.array([a[0] for a in axes]), np.array([a[1] for a in axes])


def guide_flags(bits: int) -> tuple[Flag, ...]:
    """The registered flags and notes of a mode's `GuideFlag` bits."""
    return tuple(flag(code) for bit, code in CODES.items() if bits & bit)


def core_number(stack: Stack) -> int:
    """Which layer is etched, counted from the substrate as 0."""
    guide = _guide(stack)
    return next(k for k, layer in enumerate(stack.layers) if layer.name == guide.core)


def uniaxial_layers(stack: Stack) -> tuple[str, ...]:
    """Names of the layers with an index of their own along the normal: the guide models know none."""
    return tuple(layer.name for layer in stack.layers if layer.index_normal is not None)


def path_um(structure: Structure) -> float | None:
    """Length that a phase of 2 pi n_eff / wavelength runs over: circumference, path, or path difference."""
    if structure.radius_um is not None:
        return 2 * float(np.pi) * nominal(structure.radius_um)
    q = structure.delta_length_um if structure.kind == "mzi" else structure.length_um
    return None if q is None else nominal(q)


def guide_parts(
    stack: Stack, contexts: Sequence[GuideContext], values: Mapping[str, float] | None = None
) -> GuideParts:
    """Cross-sections of contexts (C) at nominal values.

    values: in place of nominal ones: `width_bias`, `etch_depth` (µm), `sidewall` (degrees), `thickness:LAYER` (µm) and
    those of `layer_indices`. Raises OutOfRangeError where a material is unknown, ValueError for values that no guide
    can have, for names that nothing goes by, and for stacks with a uniaxial layer.
    """
    own = dict(values or {})
    uniaxial = uniaxial_layers(stack)
    if uniaxial:
        raise ValueError(f"index_normal of {', '.join(uniaxial)}: guides of uniaxial layers cannot be modelled")
    unknown = set(own) - _known_names(stack)
    if unknown:
        raise ValueError(f"no quantity goes by {', '.join(sorted(unknown))}")
    guide = _guide(stack)
    lam = np.array([float(stack.to_vacuum_um(c.wavelength_um)) for c in contexts])
    indices = layer_indices(stack, lam, [c.temperature_C for c in contexts], own, mean_x(contexts))
    bias = own.get("width_bias", nominal(guide.width_bias_um))
    films = [(x, x.thickness_um) for x in stack.layers[1:-1] if x.thickness_um is not None]
    etch = None if guide.etch_depth_um is None else own.get("etch_depth", nominal(guide.etch_depth_um))
    section = cross_section(
        indices.n,
        [own.get(f"thickness:{layer.name}", nominal(q)) for layer, q in films],
        core_number(stack),
        [c.structure.drawn_width_um + bias for c in contexts],
        lam,
        etch,
        own.get("sidewall", nominal(guide.sidewall_deg)),
    )
    return GuideParts(
        section=section,
        tm=np.array([c.tm for c in contexts], dtype=bool),
        order=np.array([c.order for c in contexts], dtype=np.intp),
        dn_dwavelength=indices.dn_dwavelength,
        dn_dtemperature=indices.dn_dtemperature,
        without_thermo=indices.without_thermo,
        radius_um=np.array([_radius_um(c.structure) for c in contexts]),
        wavelength_um=lam,
        names=tuple(c.structure.name for c in contexts),
    )


def guide_windows(stack: Stack, contexts: Sequence[GuideContext]) -> list[GuideWindow]:
    """Windows that hold the guides of contexts, whatever values their quantities take.

    One for each polarisation, lateral order and cluster of drawn widths, a cluster being the widths within the bias
    window of its narrowest. Ends that no guide can have are cut off.
    """
    groups: dict[tuple[bool, int], list[int]] = {}
    for k, c in enumerate(contexts):
        groups.setdefault((c.tm, c.order), []).append(k)
    bias = _ends(_guide(stack).width_bias_um)
    out = []
    for rows in groups.values():
        rows.sort(key=lambda k: contexts[k].structure.drawn_width_um)
        cluster: list[int] = []
        for k in rows:
            reach = contexts[cluster[0]].structure.drawn_width_um + bias[1] - bias[0] if cluster else np.inf
            if contexts[k].structure.drawn_width_um > reach + 1e-9:
                out.append(_window(stack, contexts, cluster))
                cluster = []
            cluster.append(k)
        out.append(_window(stack, contexts, cluster))
    return out


def _window(stack: Stack, contexts: Sequence[GuideContext], rows: Sequence[int]) -> GuideWindow:
    guide, mine = _guide(stack), [contexts[k] for k in rows]
    drawn = [c.structure.drawn_width_um for c in mine]
    bias, now = _ends(guide.width_bias_um), nominal(guide.width_bias_um)
    core = stack.layers[core_number(stack)]
    assert core.thickness_um is not None
    thick = _ends(core.thickness_um)
    thick = max(thick[0], 0.2 * nominal(core.thickness_um)), thick[1]
    wall = _ends(guide.sidewall_deg)
    wall = max(wall[0], _WALL_DEG[0]), min(wall[1], _WALL_DEG[1])
    etch = (0.0, 0.0) if guide.etch_depth_um is None else _ends(guide.etch_depth_um)
    etch = max(etch[0], 0.0), min(etch[1], 0.999 * thick[0])
    depth = thick[1] if guide.etch_depth_um is None else etch[1]
    steepest = max(1 / np.tan(np.radians(wall[0])), -1 / np.tan(np.radians(wall[1])), 0.0)
    least = min(max(_LEAST_WIDTH_UM, 1.05 * depth * float(steepest)), min(drawn) + now)
    lam = [float(stack.to_vacuum_um(c.wavelength_um)) for c in mine]
    return GuideWindow(
        tm=mine[0].tm,
        order=mine[0].order,
        rows=tuple(rows),
        names=tuple(dict.fromkeys(c.structure.name for c in mine)),
        width_um=(max(min(drawn) + bias[0], least), max(drawn) + bias[1]),
        thickness_um=thick,
        etch_um=(min(etch), etch[1]),
        sidewall_deg=wall,
        core_index_offset=_index_window(stack, core, contexts, rows),
        wavelength_um=(min(lam), max(lam)),
        full_etch=guide.etch_depth_um is None,
        tightest_um=min(_radius_um(c.structure) for c in mine),
    )


def _index_window(
    stack: Stack, core: Layer, contexts: Sequence[GuideContext], rows: Sequence[int]
) -> tuple[float, float]:
    """How far the core's absolute index may lie from the nominal one, that of other temperatures included."""
    mine = [contexts[k] for k in rows]
    lam = np.array([float(stack.to_vacuum_um(c.wavelength_um)) for c in mine])
    number, middle = core_number(stack), mean_x(contexts)
    here = layer_indices(stack, lam, [c.temperature_C for c in mine], mean_x=middle).n[:, number]
    moved = here - layer_indices(stack, lam, mean_x=middle).n[:, number]
    low, high = 0.0, 0.0
    q = core.index.quantity if core.index.kind == "quantity" else core.index.shift
    if core.index.kind == "fit_cauchy":
        low, high = -_CURVE_HALF, _CURVE_HALF
    elif q is not None:
        low, high = (end - nominal(q) for end in _ends(q))
    ends = [stack.index_inside(x, lam) for x in (low, high)]
    return float((ends[0] + moved).min()), float((ends[1] + moved).max())


def mean_x(contexts: Sequence[GuideContext]) -> float:
    """Mean of 1/wavelength² in µm^-2, as typed: where a curve to be fitted has its first term, as in a film fit."""
    return float(np.mean([1 / w**2 for w in {c.wavelength_um for c in contexts}]))


def _ends(q: Quantity) -> tuple[float, float]:
    if q.kind == "fit":
        assert q.low is not None and q.high is not None
        return q.low, q.high
    return nominal(q) - _KNOWN_SPAN * q.u, nominal(q) + _KNOWN_SPAN * q.u


def _radius_um(structure: Structure) -> float:
    return np.inf if structure.radius_um is None else nominal(structure.radius_um)


def _guide(stack: Stack) -> Guide:
    if stack.guide is None:
        raise ValueError("the stack file has no [guide]")
    return stack.guide


def _known_names(stack: Stack) -> set[str]:
    guide = _guide(stack)
    known = {"width_bias", "sidewall"} | (set() if guide.etch_depth_um is None else {"etch_depth"})
    for layer in stack.layers:
        names = {
            "quantity": ("index",),
            "material": ("index_shift",),
            "fit_cauchy": ("curve0", "curve1", "curve2")[: layer.index.cauchy_terms],
        }[layer.index.kind]
        known |= {f"{name}:{layer.name}" for name in names}
    return known | {f"thickness:{layer.name}" for layer in stack.layers[1:-1]}
