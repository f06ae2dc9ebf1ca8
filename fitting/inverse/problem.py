"""Readings of a table sorted into sites, each with its unknowns and its arrays."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from ..observables.film import FilmReadings
from ..observables.parameters import Context, Layout, build_layout
from ..records import Fault, InputRefused, IntArray, Place, Quantity, Reading
from ..stack import Stack


@dataclass(frozen=True)
class SiteProblem:
    """One site: its readings in file order, unknowns, arrays with S = 1, and labels (R), -1 where blank."""

    readings: tuple[Reading, ...]
    layout: Layout
    data: FilmReadings
    label: IntArray


def build_problems(stack: Stack, readings: Sequence[Reading]) -> list[SiteProblem]:
    """Group readings by lot, wafer and site, in file order. Raises InputRefused if a reading cannot be used with the
    stack."""
    _check(stack, readings)
    sites: dict[tuple[str | None, ...], list[Reading]] = {}
    for reading in readings:
        sites.setdefault(reading.site_key, []).append(reading)
    layouts: dict[tuple[Context, ...], Layout] = {}
    return [_problem(stack, group, layouts) for group in sites.values()]


def _context(reading: Reading) -> Context:
    return Context(reading.wavelength_um, reading.pol == "TM", reading.temperature_C)


def _problem(stack: Stack, group: list[Reading], layouts: dict[tuple[Context, ...], Layout]) -> SiteProblem:
    key = tuple(sorted({_context(r) for r in group}, key=lambda c: (c.wavelength_um, c.tm, c.temperature_C or 0.0)))
    if key not in layouts:
        layouts[key] = build_layout(stack, key)
    layout = layouts[key]
    where = {c: i for i, c in enumerate(key)}
    u = [r.u if r.u is not None else stack.prism.angle_u_deg if stack.prism else np.nan for r in group]
    data = FilmReadings(
        context=np.array([[where[_context(r)] for r in group]]),
        is_angle=np.array([[r.quantity is Quantity.ANGLE for r in group]]),
        measured=np.array([[r.value for r in group]], dtype=float),
        u=np.array([u], dtype=float),
        valid=np.ones((1, len(group)), dtype=bool),
    )
    label = np.array([-1 if r.order is None else r.order for r in group])
    return SiteProblem(tuple(group), layout, data, label)


def _check(stack: Stack, readings: Sequence[Reading]) -> None:
    """What only stack and readings together can show."""
    faults: list[Fault] = []
    place = Place(stack.file)
    if stack.prism is None and any(r.quantity is Quantity.ANGLE for r in readings):
        faults.append(
            Fault(place, "no [prism] section", "coupling angles need the prism's index and base angle", "add [prism]")
        )
    for r in readings:
        if r.quantity is Quantity.EFFECTIVE_INDEX and r.u is None:
            faults.append(
                Fault(
                    r.place,
                    f"effective index {r.value:g} without uncertainty",
                    "a standard uncertainty is required",
                    "add a column u with the standard uncertainty of the effective index",
                )
            )
    if not any(_is_fitted(stack)):
        faults.append(
            Fault(
                place, "no quantity with { fit = [...] }", "a fit needs one unknown at least", "mark index or thickness"
            )
        )
    faults += _wavelength_faults(stack, readings)
    if faults:
        raise InputRefused(faults)


def _is_fitted(stack: Stack) -> list[bool]:
    out = []
    for layer in stack.layers:
        for spec in (layer.index, layer.index_normal):
            if spec is not None:
                out += [spec.kind == "fit_cauchy"]
                out += [q is not None and q.kind == "fit" for q in (spec.quantity, spec.shift)]
        out.append(layer.thickness_um is not None and layer.thickness_um.kind == "fit")
    return out


def _wavelength_faults(stack: Stack, readings: Sequence[Reading]) -> list[Fault]:
    """A wavelength outside a material's range is a fault of the row, found before anything is fitted."""
    faults = []
    first: dict[float, Reading] = {}
    for r in readings:
        first.setdefault(r.wavelength_um, r)
    for wave, r in sorted(first.items()):
        try:
            build_layout(stack, [Context(wave, False, r.temperature_C), Context(wave, True, r.temperature_C)])
        except ValueError as error:
            faults.append(
                Fault(
                    r.place,
                    f"wavelength {wave * 1000:g} nm",
                    str(error),
                    "give that layer's index as a number or a table at this wavelength, or correct the wavelength",
                )
            )
    return faults


def stack_sites(problems: Sequence[SiteProblem], orders: Sequence[IntArray]) -> tuple[FilmReadings, IntArray]:
    """One batch (S, R) from sites of the same layout, padded to the longest."""
    most = max(p.data.measured.shape[1] for p in problems)

    def pad(rows: list[np.ndarray], fill: float) -> np.ndarray:
        return np.array([np.concatenate([r, np.full(most - r.size, fill, dtype=r.dtype)]) for r in rows])

    data = FilmReadings(
        context=pad([p.data.context[0] for p in problems], 0),
        is_angle=pad([p.data.is_angle[0] for p in problems], 0),
        measured=pad([p.data.measured[0] for p in problems], 0.0),
        u=pad([p.data.u[0] for p in problems], 1.0),
        valid=pad([p.data.valid[0] for p in problems], 0),
    )
    return data, pad([np.asarray(o) for o in orders], -1)
