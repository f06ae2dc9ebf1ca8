"""Guides of a stack as it is stated: effective and group index, sensitivities, what they do to a resonance, flags."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from layerlot.solver.cross_section import GuideModes

from .flags import FLAGS, flag
from .observables.guide import (
    GuideContext,
    GuideParts,
    core_number,
    guide_flags,
    guide_parts,
    mean_x,
    path_um,
    uniaxial_layers,
)
from .observables.guide_map import Progress, guide_modes
from .observables.guide_nominal import at_nominal
from .observables.guide_response import nearest_order, order_spacing, per_degree, resonance_shift
from .records import Array, Flag
from .stack import Stack

Model = Literal["corrected", "eim"]

# Keys of the sensitivities, and of the shifts of a resonance that go with them. Shifts are per nm, degree, 0.001 of
# index and °C: what goes with a unit of index is no small change.
SENSITIVITY = (
    "width_per_nm", "thickness_per_nm", "etch_per_nm", "sidewall_per_deg", "core_index", "temperature_per_C",
)  # fmt: skip
SHIFT = (
    "width_pm_per_nm", "thickness_pm_per_nm", "etch_pm_per_nm", "sidewall_pm_per_deg", "core_index_pm_per_1e-3",
    "temperature_pm_per_C",
)  # fmt: skip
# Up to this many widths each has a map of its own: quicker than one map over all widths that the bias may make.
_FEW_WIDTHS = 3
_SHIFT_STEP = (1.0, 1.0, 1.0, 1.0, 1e-3, 1.0)


@dataclass(frozen=True)
class GuidePrediction:
    """One mode; indices relative to the stack's index reference, wavelengths as typed. None where there is no number.

    model_u, model_u_group: standard uncertainty that the model brings to n_eff and n_g; spacing_nm: of neighbouring
    resonances or fringes; nearest: number of whole waves on the path, and the wavelength in nm where it holds them;
    sensitivity, shift: by the keys above, None where the quantity does not exist (etch depth of
    a core etched through) or is not known (temperature, where the core's material states no thermo-optic term);
    films: change of n_eff with index and thickness (nm) of each film; flags: flags and notes.
    """

    structure: str
    wavelength_nm: float
    pol: str
    order: int
    n_eff: float | None
    n_g: float | None
    model: Model
    model_u: float | None
    model_u_group: float | None
    spacing_nm: float | None
    nearest: tuple[int, float] | None
    sensitivity: Mapping[str, float | None]
    shift: Mapping[str, float | None]
    films: Mapping[str, tuple[float | None, float | None]]
    flags: tuple[Flag, ...]

    @property
    def flagged(self) -> bool:
        return any(f.code in FLAGS for f in self.flags)


def guide_contexts(stack: Stack, wavelengths_nm: Sequence[float], pols: Sequence[str]) -> list[GuideContext]:
    """Every structure of the polarisations named, at every wavelength (nm, as typed)."""
    return [
        GuideContext(s, nm / 1000, s.pol == "TM") for s in stack.structures if s.pol in pols for nm in wavelengths_nm
    ]


def predict_guide(
    stack: Stack, contexts: Sequence[GuideContext], plain: bool = False, progress: Progress | None = None
) -> list[GuidePrediction]:
    """Fundamental guide modes of contexts, of a stack without faults. plain: by the effective index method alone."""
    if not contexts:
        return []
    if uniaxial_layers(stack):
        return [_none(stack, c, plain) for c in contexts]
    parts = guide_parts(stack, contexts)
    # Nominal values need no map over the whole window of the file, which may take minutes. Many widths share one.
    keep_bias = len({(c.tm, c.structure.drawn_width_um) for c in contexts}) > _FEW_WIDTHS
    modes = guide_modes(at_nominal(stack, mean_x(contexts), keep_bias), contexts, parts, plain, progress)
    return [_prediction(stack, c, parts, modes, k, plain) for k, c in enumerate(contexts)]


def _prediction(
    stack: Stack, context: GuideContext, parts: GuideParts, modes: GuideModes, k: int, plain: bool
) -> GuidePrediction:
    lam_um = float(parts.wavelength_um[k])
    typed_share = context.wavelength_um / lam_um
    group = float(modes.group_index(parts.wavelength_um, parts.dn_dwavelength)[k])
    reference = float(stack.index_inside(1.0, lam_um))
    changes = _changes(stack, parts, modes, k, reference)
    shift_um = resonance_shift(changes * np.array(_SHIFT_STEP), lam_um, group) * typed_share
    length_um = path_um(context.structure)
    spacing_um = np.nan if length_um is None else float(order_spacing(lam_um, group, length_um)) * typed_share
    nearest = None
    if length_um is not None and np.isfinite(group):
        waves, at_um = nearest_order(float(modes.N[k]), lam_um, group, length_um)
        nearest = waves, at_um * typed_share * 1e3
    corrected = np.isfinite(modes.error[k]) or (np.isnan(modes.N[k]) and not plain)
    films = zip(stack.layers[1:-1], modes.dn[k, 1:-1], modes.dt_per_um[k] / 1000 / reference, strict=True)
    notes = () if corrected else (flag("guide_plain_model"),)
    return GuidePrediction(
        structure=context.structure.name,
        wavelength_nm=_nm(context),
        pol="TM" if context.tm else "TE",
        order=context.order,
        n_eff=_known(modes.N[k] / reference),
        n_g=_known(group / reference),
        model="corrected" if corrected else "eim",
        model_u=_known(modes.error[k] / reference),
        model_u_group=_known(modes.group_error[k] / reference),
        spacing_nm=_known(spacing_um * 1e3),
        nearest=nearest,
        sensitivity=dict(zip(SENSITIVITY, map(_known, changes / reference), strict=True)),
        shift=dict(zip(SHIFT, map(_known, shift_um * 1e6), strict=True)),
        films={film.name: (_known(dn), _known(dt)) for film, dn, dt in films},
        flags=(*guide_flags(int(modes.flags[k])), *notes),
    )


def _changes(stack: Stack, parts: GuideParts, modes: GuideModes, k: int, reference: float) -> Array:
    """Change of the absolute effective index in the order of `SENSITIVITY`; NaN where there is none. reference: index
    of the medium that a typed core index is relative to."""
    core = core_number(stack)
    etched_through = parts.section.etch_um is None
    no_thermo = stack.layers[core].name in parts.without_thermo
    return np.array(
        [
            modes.dwidth_per_um[k] / 1000,
            modes.dt_per_um[k, core - 1] / 1000,
            np.nan if etched_through else modes.detch_per_um[k] / 1000,
            modes.dsidewall_per_deg[k],
            modes.dn[k, core] * reference,
            np.nan if no_thermo else float(per_degree(modes.dn[k], parts.dn_dtemperature[k])),
        ]
    )


def _none(stack: Stack, context: GuideContext, plain: bool) -> GuidePrediction:
    """What stands for a guide that the models know nothing of."""
    return GuidePrediction(
        context.structure.name, _nm(context), "TM" if context.tm else "TE", context.order, None, None,
        "eim" if plain else "corrected", None, None, None, None, dict.fromkeys(SENSITIVITY), dict.fromkeys(SHIFT),
        {layer.name: (None, None) for layer in stack.layers[1:-1]},
        (flag("guide_uniaxial", f"Uniaxial: {', '.join(uniaxial_layers(stack))}."),),
    )  # fmt: skip


def _nm(context: GuideContext) -> float:
    return round(context.wavelength_um * 1000, 6)


def _known(x: float) -> float | None:
    return float(x) if np.isfinite(x) else None


def _whole(nearest: tuple[int, float] | None) -> dict[str, float] | None:
    return None if nearest is None else {"waves": nearest[0], "wavelength_nm": nearest[1]}


def guide_record(p: GuidePrediction) -> dict[str, Any]:
    """A prediction as `predict --json` gives it."""
    return {
        "structure": p.structure, "wavelength_nm": p.wavelength_nm, "pol": p.pol, "order": p.order,
        "n_eff": p.n_eff, "n_g": p.n_g, "model": p.model, "model_u": p.model_u, "model_u_group": p.model_u_group,
        "spacing_nm": p.spacing_nm, "nearest": _whole(p.nearest), "sensitivity": dict(p.sensitivity),
        "resonance_shift": dict(p.shift),
        "film_sensitivity": {name: {"index": dn, "thickness_per_nm": dt} for name, (dn, dt) in p.films.items()},
        "flags": [{"code": f.code, "text": f.text} for f in p.flags if f.code in FLAGS],
        "notes": [{"code": f.code, "text": f.text} for f in p.flags if f.code not in FLAGS],
    }  # fmt: skip
