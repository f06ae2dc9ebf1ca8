"""A prediction as text: answers first, then sensitivities, flags, and what numbers are relative to."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from .flags import FLAGS
from .observables.guide_index import layer_indices
from .predict_film import FilmMode
from .predict_guide import SENSITIVITY, SHIFT, GuidePrediction
from .stack import Stack, conventions

_MODELS = {
    "corrected": "Guide model: effective index method, corrected to a full-vector finite-element reference; u is "
    "the standard uncertainty that the model leaves.",
    "eim": "Guide model: plain effective index method, whose error is not known; in silicon wires it may be 0.1 in "
    "n_eff. Not for dimensions.",
}


def prediction_text(
    stack: Stack,
    modes: Sequence[FilmMode],
    guides: Sequence[GuidePrediction],
    film_nm: Sequence[float],
    guide_nm: Sequence[float],
    chosen: bool,
) -> str:
    """The whole text. film_nm, guide_nm: wavelengths asked of films and guides; chosen: whether the user named them."""
    lines = [stack.title, ""]
    if not chosen:
        lines += [*_taken(film_nm, guide_nm), ""]
    if stack.structures:
        lines += _guide_text(stack, guides)
    lines += _film_text(stack, modes, film_nm)
    if guides:
        lines += ["", *_guide_conventions(stack, guides)]
    return "\n".join([*lines, "", *conventions(stack)]) + "\n"


def _taken(film_nm: Sequence[float], guide_nm: Sequence[float]) -> list[str]:
    def listed(waves: Sequence[float]) -> str:
        return ", ".join(f"{nm:g}" for nm in waves)

    if not guide_nm or list(film_nm) == list(guide_nm):
        return [f"No wavelength was asked for: {listed(film_nm)} nm taken."]
    return [f"No wavelength was asked for: {listed(guide_nm)} nm taken for guides, {listed(film_nm)} nm for films."]


def _guide_text(stack: Stack, guides: Sequence[GuidePrediction]) -> list[str]:
    if not guides:
        return ["Guides: no structure has the polarisation asked for.", ""]
    core = stack.guide.core if stack.guide is not None else ""
    names = (
        "width/nm", f"{core} thickness/nm", "etch depth/nm", "sidewall/deg", f"{core} index/0.001", "temperature/°C",
    )  # fmt: skip
    left = ["structure", "wavelength/nm", "mode"]
    head = [*left, "n_eff", "u(n_eff)", "n_g", "u(n_g)", "spacing/nm", "nearest/nm"]
    steps = {key: 1e-3 if key == "core_index" else 1.0 for key in SENSITIVITY}
    changes = [[*_left(g), *_cells(g.sensitivity, SENSITIVITY, "{:.2e}", steps)] for g in guides]
    shifts = [[*_left(g), *_cells(g.shift, SHIFT, "{:.4g}", {})] for g in guides]
    return [
        "Guides",
        *columns([head, *(_answer(g) for g in guides)]),
        "",
        "Shift of a resonance or fringe at fixed order, in pm per",
        *columns([[*left, *names], *shifts]),
        "",
        "Change of n_eff per",
        *columns([[*left, *names], *changes]),
        "",
        *_flag_lines(guides),
        "Films",
    ]


def _left(g: GuidePrediction) -> list[str]:
    return [g.structure, f"{g.wavelength_nm:g}", f"{g.pol}{g.order}"]


def _answer(g: GuidePrediction) -> list[str]:
    numbers = ((g.n_eff, ".6f"), (g.model_u, ".1e"), (g.n_g, ".5f"), (g.model_u_group, ".1e"), (g.spacing_nm, ".4f"))
    nearest = "-" if g.nearest is None else f"{g.nearest[1]:.3f} (m = {g.nearest[0]})"
    return [*_left(g), *("-" if x is None else format(x, digits) for x, digits in numbers), nearest]


def _cells(values: Mapping[str, float | None], keys: Sequence[str], form: str, steps: Mapping[str, float]) -> list[str]:
    found = ((values[key], steps.get(key, 1.0)) for key in keys)
    return ["-" if x is None else form.format(x * step) for x, step in found]


def _flag_lines(guides: Sequence[GuidePrediction]) -> list[str]:
    """Flags, then notes, each once with the guides that carry it."""
    lines = []
    for is_flag, title in ((True, "FLAGS AND WHAT TO DO"), (False, "Notes")):
        texts = dict.fromkeys(f.text for g in guides for f in g.flags if (f.code in FLAGS) == is_flag)
        if texts:
            places = {text: _places([g for g in guides if any(f.text == text for f in g.flags)]) for text in texts}
            lines += [title, *(f"  {places[text]}: {text}" for text in texts), ""]
    return lines


def _places(guides: Sequence[GuidePrediction]) -> str:
    waves = list(dict.fromkeys(g.wavelength_nm for g in guides))
    return "; ".join(f"{', '.join(g.structure for g in guides if g.wavelength_nm == nm)} at {nm:g} nm" for nm in waves)


def _guide_conventions(stack: Stack, guides: Sequence[GuidePrediction]) -> list[str]:
    lines = [_MODELS[model] for model in ("corrected", "eim") if any(g.model == model for g in guides)]
    lines.append("Width is that at half the etch depth: made width = drawn width + width bias.")
    lines.append("spacing: of neighbouring resonances or fringes, wavelength²/(n_g length).")
    lines.append(
        "nearest: where the path, or the difference of the arms, holds m whole waves: a resonance or a fringe."
    )
    without = layer_indices(stack, stack.to_vacuum_um(guides[0].wavelength_nm / 1000)).without_thermo
    line = "temperature: by the materials' thermo-optic terms, without expansion"
    if without:
        line += f"; none is known for {', '.join(without)}"
        core = stack.guide.core if stack.guide is not None else ""
        line += ", so no number is given" if core in without else ", counted as zero"
    return [*lines, f"{line}."]


def _film_text(stack: Stack, modes: Sequence[FilmMode], asked: Sequence[float]) -> list[str]:
    films = [layer.name for layer in stack.layers[1:-1]]
    head = ["wavelength/nm", "mode", "n_eff", "loss/(dB/cm)"] + (["angle/deg"] if stack.prism else [])
    head += [text for film in films for text in (f"per index, {film}", f"per nm, {film}")]
    lines = columns([head, *(_row(m, stack.prism is not None) for m in modes)])
    empty = [nm for nm in asked if not any(m.wavelength_nm == round(nm, 6) for m in modes)]
    lines += [f"No mode at {nm:g} nm: the film is too thin, or its index too low." for nm in empty]
    lines += ["", "per index, per nm: change of n_eff with a film's index, and with its thickness."]
    if any(m.loss_dB_per_cm > 0 for m in modes):
        lines.append("Modes with a loss leak into a half-space of higher index.")
    if stack.prism is not None:
        if any(m.angle_deg is None for m in modes):
            lines.append("angle -: the prism cannot reach the mode.")
        lines.append("Laser light at the prism: follow local laser-safety rules and licensed practice.")
    return lines


def _row(m: FilmMode, has_prism: bool) -> list[str]:
    row = [f"{m.wavelength_nm:g}", f"{m.pol}{m.order}", f"{m.n_eff:.6f}", f"{m.loss_dB_per_cm:.3g}"]
    if has_prism:
        row.append("-" if m.angle_deg is None else f"{m.angle_deg:.4f}")
    pairs = zip(m.d_index, m.d_thickness_per_nm, strict=True)
    return row + [text for dn, dt in pairs for text in (f"{dn:.4f}", f"{dt:.3e}")]


def columns(rows: Sequence[Sequence[str]]) -> list[str]:
    """Lines of a table, cells to the right."""
    widths = [max(len(row[k]) for row in rows) for k in range(len(rows[0]))]
    return ["  ".join(cell.rjust(width) for cell, width in zip(row, widths, strict=True)) for row in rows]
