"""The body of `predict`: film modes, coupling angles and sensitivities of a stack as it is stated."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import click
import numpy as np
from layerlot.solver.film_modes import film_modes, is_leaky
from layerlot.solver.leaky import loss_dB_per_cm
from layerlot.solver.materials import Table
from layerlot.solver.prism import coupling_angle_deg
from layerlot.solver.slab import mode_count

from .observables.parameters import Context, Layout, build_layout
from .records import Array, Fault, InputRefused, IntArray, Place
from .stack import IndexSpec, Stack, conventions, load_stack
from .stack_schema import WAVELENGTH_NM

# The red helium-neon line, on which most prism couplers are built (common practice, no source).
USUAL_NM = 632.8
# Leaky modes are numbered, not counted: orders are asked for up to here.
_LEAKY_ORDERS = 64


@dataclass(frozen=True)
class FilmMode:
    """One mode; n_eff relative to the stack's index reference. angle_deg: None without a prism or where the prism
    cannot reach the mode. d_index, d_thickness_per_nm: change of n_eff, by film from the substrate up."""

    wavelength_nm: float
    pol: str
    order: int
    n_eff: float
    loss_dB_per_cm: float
    angle_deg: float | None
    d_index: tuple[float, ...]
    d_thickness_per_nm: tuple[float, ...]


def run_predict(stack_file: Path, wavelengths_nm: Sequence[float], pol: str | None, as_json: bool) -> int:
    """Print the prediction; returns the exit status. Raises InputRefused with every reason why there is none."""
    stack = load_stack(stack_file)
    asked = list(dict.fromkeys(wavelengths_nm)) or _default_nm(stack)
    modes = predict_film(stack, asked, [pol] if pol else ["TE", "TM"])
    if as_json:
        click.echo(json.dumps({"film_modes": [_record(m, stack) for m in modes], "guide": []}, allow_nan=False))
    else:
        click.echo(_text(stack, modes, asked, bool(wavelengths_nm)), nl=False)
    return 0


def _default_nm(stack: Stack) -> list[float]:
    """The wavelengths at which the file's tables state an index, else the usual line."""
    specs = [s for layer in stack.layers for s in (layer.index, layer.index_normal)]
    if stack.prism is not None:
        specs += [stack.prism.index_TE, stack.prism.index_TM]
    tables = [s.material.formula for s in specs if s and s.name is None and s.material]
    return sorted({round(w * 1000, 6) for t in tables if isinstance(t, Table) for w in t.wavelength_um}) or [USUAL_NM]


def predict_film(stack: Stack, wavelengths_nm: Sequence[float], pols: Sequence[str]) -> list[FilmMode]:
    """All film modes at wavelengths (nm, as typed), by wavelength, polarisation and order. Raises InputRefused where a
    fitted quantity has no start or a material is unknown at a wavelength."""
    faults = [*_without_start(stack), *_wavelength_faults(stack, wavelengths_nm)]
    if faults:
        raise InputRefused(faults)
    contexts = [Context(nm / 1000, pol == "TM", None) for nm in wavelengths_nm for pol in pols]
    layout = build_layout(stack, contexts)
    nominal = np.where(layout.fitted, layout.starts(), layout.prior()[0])
    return [mode for c in range(len(contexts)) for mode in _modes_at(layout, nominal, c)]


def _modes_at(layout: Layout, theta: Array, c: int) -> list[FilmMode]:
    """Modes of one wavelength and polarisation."""
    n = layout.n_fixed[c] + layout.n_map[c] @ theta
    normal = layout.normal_fixed[c] + layout.normal_map[c] @ theta if layout.uniaxial else None
    t, lam, tm = layout.t_fixed + layout.t_map @ theta, layout.working_um[c], layout.tm[c]
    count = _LEAKY_ORDERS if is_leaky(n) else int(mode_count(n, t, lam, tm, normal))
    order: IntArray = np.arange(count)
    if not count:
        return []
    rows = np.broadcast_to(n, (count, n.size))
    along = None if normal is None else np.broadcast_to(normal, rows.shape)
    found = film_modes(rows, np.broadcast_to(t, (count, t.size)), np.full(count, lam), order, np.full(count, tm), along)
    loss = loss_dB_per_cm(found.N + 1j * found.loss_index, lam)
    angle = np.full(count, np.nan)
    if layout.has_prism:
        n_p = layout.prism_fixed[c] + layout.prism_map[c] @ theta
        base, zero = layout.base_fixed + layout.base_map @ theta, layout.zero_fixed + layout.zero_map @ theta
        angle = layout.angle_sign * coupling_angle_deg(found.N, n_p, base) + zero
    return [
        FilmMode(
            wavelength_nm=round(layout.contexts[c].wavelength_um * 1000, 6),
            pol="TM" if tm else "TE",
            order=int(m),
            n_eff=float(found.N[m]),
            loss_dB_per_cm=float(loss[m]) if found.loss_index[m] else 0.0,
            angle_deg=float(angle[m]) if np.isfinite(angle[m]) else None,
            d_index=tuple(float(x) for x in (found.dn + found.dn_normal)[m, 1:-1]),
            d_thickness_per_nm=tuple(float(x) / 1000 for x in found.dt_per_um[m]),
        )
        for m in order
        if np.isfinite(found.N[m])
    ]


def _without_start(stack: Stack) -> list[Fault]:
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
    required, remedy = "a prediction needs a value", "add start = ... beside fit"
    return [Fault(Place(stack.file, column=p), "to be fitted, without a start", required, remedy) for p in places]


def _lacks_start(spec: IndexSpec) -> bool:
    return any(q is not None and q.nominal is None for q in (spec.quantity, spec.shift))


def _wavelength_faults(stack: Stack, wavelengths_nm: Sequence[float]) -> list[Fault]:
    faults = []
    low, high = WAVELENGTH_NM
    for nm in wavelengths_nm:
        place, was = Place("command line", column="--wavelength-nm"), f"{nm:g} nm"
        if not low <= nm <= high:
            remedy = f"if µm was meant, write {nm * 1000:g}" if 0.1 <= nm <= 50 else "correct the wavelength"
            faults.append(Fault(place, was, f"wavelengths are in nm, {low:g} to {high:g}", remedy))
            continue
        try:
            build_layout(stack, [Context(nm / 1000, False, None), Context(nm / 1000, True, None)])
        except ValueError as error:
            remedy = "ask for another wavelength, or give that index as a number or a table"
            faults.append(Fault(place, was, str(error), remedy))
    return faults


def _record(m: FilmMode, stack: Stack) -> dict[str, Any]:
    out: dict[str, Any] = {
        "wavelength_nm": m.wavelength_nm, "pol": m.pol, "order": m.order, "n_eff": m.n_eff,
        "loss_dB_per_cm": m.loss_dB_per_cm,
    }  # fmt: skip
    if stack.prism is not None:
        out["angle_deg"] = m.angle_deg
    films = zip(stack.layers[1:-1], m.d_index, m.d_thickness_per_nm, strict=True)
    out["sensitivity"] = {film.name: {"index": dn, "thickness_per_nm": dt} for film, dn, dt in films}
    return out


def _text(stack: Stack, modes: Sequence[FilmMode], asked: Sequence[float], chosen: bool) -> str:
    lines = [stack.title, ""]
    if not chosen:
        lines += [f"No wavelength was asked for: {', '.join(f'{nm:g}' for nm in asked)} nm taken.", ""]
    films = [layer.name for layer in stack.layers[1:-1]]
    head = ["wavelength/nm", "mode", "n_eff", "loss/(dB/cm)"] + (["angle/deg"] if stack.prism else [])
    head += [text for film in films for text in (f"per index, {film}", f"per nm, {film}")]
    lines += _columns([head, *(_row(m, stack.prism is not None) for m in modes)])
    empty = [nm for nm in asked if not any(m.wavelength_nm == round(nm, 6) for m in modes)]
    lines += [f"No mode at {nm:g} nm: the film is too thin, or its index too low." for nm in empty]
    lines += ["", "per index, per nm: change of n_eff with a film's index, and with its thickness."]
    if any(m.loss_dB_per_cm > 0 for m in modes):
        lines.append("Modes with a loss leak into a half-space of higher index.")
    if stack.prism is not None:
        if any(m.angle_deg is None for m in modes):
            lines.append("angle -: the prism cannot reach the mode.")
        lines.append("Laser light at the prism: follow local laser-safety rules and licensed practice.")
    return "\n".join([*lines, "", *conventions(stack)]) + "\n"


def _row(m: FilmMode, has_prism: bool) -> list[str]:
    row = [f"{m.wavelength_nm:g}", f"{m.pol}{m.order}", f"{m.n_eff:.6f}", f"{m.loss_dB_per_cm:.3g}"]
    if has_prism:
        row.append("-" if m.angle_deg is None else f"{m.angle_deg:.4f}")
    pairs = zip(m.d_index, m.d_thickness_per_nm, strict=True)
    return row + [text for dn, dt in pairs for text in (f"{dn:.4f}", f"{dt:.3e}")]


def _columns(rows: Sequence[Sequence[str]]) -> list[str]:
    widths = [max(len(row[k]) for row in rows) for k in range(len(rows[0]))]
    return ["  ".join(cell.rjust(width) for cell, width in zip(row, widths, strict=True)) for row in rows]
