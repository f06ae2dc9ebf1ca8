"""The stack file: layers, prism and guide as frozen records, lengths in µm inside.

    stack = load_stack(Path("wafer.toml"))            # InputRefused with every fault at once
    stack.to_vacuum_um(w), stack.index_inside(n, w), stack.index_typed(n, w)

Numbers of the file may be relative to air or to vacuum (`index_reference`, `wavelength_reference`). Inside, wavelengths
are vacuum wavelengths and indices absolute; the three methods above are the only way between the two.
"""

from __future__ import annotations

import re
import tomllib
from dataclasses import dataclass
from pathlib import Path
from typing import Literal

import numpy as np
from layerlot.solver.air import LABORATORY_TEMPERATURE_C, air_index, air_to_vacuum_um
from layerlot.solver.materials import Material
from numpy.typing import ArrayLike

from .records import Array, Fault, InputRefused, Place

Medium = Literal["vacuum", "air"]


@dataclass(frozen=True, slots=True)
class Quantity:
    """A number of the stack file: exact (value), known (value with standard uncertainty u: a prior), or to be fitted
    (between low and high; start where one is given). Units are those of the field that holds it."""

    kind: Literal["exact", "known", "fit"]
    value: float | None = None
    u: float = 0.0
    low: float | None = None
    high: float | None = None
    start: float | None = None

    @property
    def nominal(self) -> float | None:
        """The value to predict from; None for a fitted quantity without a start."""
        return self.start if self.kind == "fit" else self.value


@dataclass(frozen=True, slots=True)
class IndexSpec:
    """How the file gives an index.

    quantity: one number (as typed, relative to the stack's `index_reference`); material: a dispersion curve, with
    `shift` (as typed) the offset that the file adds to it at all wavelengths; fit_cauchy: a curve of `cauchy_terms`
    terms to be fitted, `near` a number (as typed) or a material. name: of the catalogue entry, if it is one.
    """

    kind: Literal["quantity", "material", "fit_cauchy"]
    quantity: Quantity | None = None
    material: Material | None = None
    shift: Quantity | None = None
    cauchy_terms: int | None = None
    near: float | Material | None = None
    name: str | None = None

    def index_inside(self, stack: Stack, wavelength_um: ArrayLike, temperature_C: float | None = None) -> Array:
        """Absolute index of a material at vacuum wavelengths in µm, without `shift`. temperature_C: None stands for
        the stack's reference temperature. Raises OutOfRangeError (a ValueError) outside the material's range."""
        at_C = stack.temperature_or_reference(temperature_C)
        return np.asarray(self._material().index(wavelength_um, at_C))

    def dn_dwavelength(self, stack: Stack, wavelength_um: ArrayLike, temperature_C: float | None = None) -> Array:
        """Slope of `index_inside` per µm of vacuum wavelength."""
        at_C = stack.temperature_or_reference(temperature_C)
        return np.asarray(self._material().slope_per_um(wavelength_um, at_C))

    def _material(self) -> Material:
        if self.material is None:
            raise TypeError(f"an index of kind {self.kind} has no material")
        return self.material


@dataclass(frozen=True, slots=True)
class Layer:
    """One layer; thickness_um is None for the half-spaces. index_normal: along the film normal, where uniaxial."""

    name: str
    index: IndexSpec
    index_normal: IndexSpec | None
    thickness_um: Quantity | None


@dataclass(frozen=True, slots=True)
class Prism:
    """one_index: TE and TM share one index and one unknown."""

    index_TE: IndexSpec
    index_TM: IndexSpec
    one_index: bool
    base_angle_deg: Quantity
    angle_offset_deg: Quantity
    angle_u_deg: float
    angle_sign: int


@dataclass(frozen=True, slots=True)
class Guide:
    """How a layer becomes a waveguide. etch_depth_um: None where the core is etched through."""

    core: str
    etch_depth_um: Quantity | None
    width_bias_um: Quantity
    sidewall_deg: Quantity


@dataclass(frozen=True, slots=True)
class Structure:
    """A ring (radius or closed path) or an interferometer (path difference)."""

    name: str
    kind: Literal["ring", "mzi"]
    radius_um: Quantity | None
    length_um: Quantity | None
    delta_length_um: Quantity | None
    drawn_width_um: float
    pol: Literal["TE", "TM"]


@dataclass(frozen=True, slots=True)
class Stack:
    """A stack file. Layers from the substrate up; the first and the last are half-spaces."""

    title: str
    file: str
    reference_temperature_C: float | None
    index_reference: Medium
    wavelength_reference: Medium
    layers: tuple[Layer, ...]
    prism: Prism | None
    guide: Guide | None
    structures: tuple[Structure, ...]

    @property
    def air_temperature_C(self) -> float:  # noqa: N802 (the unit)
        """Temperature of the air that typed numbers refer to."""
        return LABORATORY_TEMPERATURE_C if self.reference_temperature_C is None else self.reference_temperature_C

    def temperature_or_reference(self, temperature_C: float | None) -> float | None:
        """A reading's temperature, or the stack's where the reading has none."""
        return self.reference_temperature_C if temperature_C is None else temperature_C

    def to_vacuum_um(self, wavelength_um: ArrayLike) -> Array:
        """Vacuum wavelength of one typed, both in µm."""
        typed = np.asarray(wavelength_um, dtype=float)
        return air_to_vacuum_um(typed, self.air_temperature_C) if self.wavelength_reference == "air" else typed

    def index_inside(self, n_typed: ArrayLike, wavelength_um: ArrayLike) -> Array:
        """Absolute index of one typed, at vacuum wavelengths in µm."""
        typed = np.asarray(n_typed, dtype=float)
        return (
            np.asarray(typed * air_index(wavelength_um, self.air_temperature_C))
            if self.index_reference == "air"
            else typed
        )

    def index_typed(self, n_inside: ArrayLike, wavelength_um: ArrayLike) -> Array:
        """An absolute index at vacuum wavelengths in µm, relative to what the file's numbers are relative to."""
        inside = np.asarray(n_inside, dtype=float)
        return (
            np.asarray(inside / air_index(wavelength_um, self.air_temperature_C))
            if self.index_reference == "air"
            else inside
        )


def load_stack(path: Path) -> Stack:
    """Read a stack file. Raises InputRefused with every fault."""
    place = Place(str(path))
    try:
        data = path.read_bytes()
    except FileNotFoundError:
        raise InputRefused([Fault(place, "no such file", "a stack file is required", "check the path")]) from None
    except IsADirectoryError:
        raise InputRefused([Fault(place, "a folder", "a stack file is required", "name the file itself")]) from None
    except OSError as error:
        was = f"unreadable ({error.strerror})"
        raise InputRefused([Fault(place, was, "a file that may be read is required", "check its rights")]) from None
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        was = f"a byte that is not UTF-8 in line {data[: error.start].count(10) + 1}"
        raise InputRefused([Fault(place, was, "stack files are plain text in UTF-8", "save it as UTF-8")]) from None
    return parse_stack(text, str(path))


def parse_stack(text: str, file: str) -> Stack:
    """A stack from the text of a stack file; `file` is what faults name. Raises InputRefused with every fault."""
    from pydantic import ValidationError

    from .stack_build import build
    from .stack_faults import faults_of, whole_document
    from .stack_schema import StackDocument

    try:
        raw = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise InputRefused([_broken(str(error), text, file)]) from None
    faults = whole_document(raw, file)
    try:
        document = StackDocument.model_validate(raw)
    except ValidationError as error:
        raise InputRefused(faults_of(error, file) + faults) from None
    if faults:
        raise InputRefused(faults)
    return build(document, file)


def _broken(message: str, text: str, file: str) -> Fault:
    """A fault for text that is no TOML, with the line."""
    place = re.search(r" \(at line (\d+), column \d+\)", message)
    lines = text.splitlines()
    row = int(place[1]) if place else max(len(lines), 1)
    line = lines[row - 1].strip() if row <= len(lines) else ""
    what = re.sub(r" \(at .*\)$", "", message)
    was = f"{line[:60] or 'end of file'} ({what[0].lower() + what[1:]})"
    remedy = "correct this line: texts in double quotes, decimal points, every bracket closed"
    if re.search(r"=\s*\[?\s*\d+,\d", line):
        remedy = "write decimal points, not commas"
    elif "overwrite" in what or "twice" in what:
        remedy = "give each key once in a section"
    return Fault(Place(file, row=row), was, "the line is no valid TOML", remedy)


def conventions(stack: Stack) -> tuple[str, ...]:
    """Sentences for a report: references, temperature, and the material model of every dispersive layer."""
    air = f"dry air at {stack.air_temperature_C:g} °C and 101325 Pa"
    medium = {"vacuum": "vacuum", "air": air}
    out = [
        f"Wavelengths as typed are wavelengths in {medium[stack.wavelength_reference]}.",
        f"Indices as typed and as reported are relative to {medium[stack.index_reference]}.",
    ]
    if stack.prism is not None:
        out.append("Coupling angles are taken in that same medium: its index at the entrance face counts as 1.")
    if stack.reference_temperature_C is None:
        out.append("No reference temperature is stated; material constants hold at the temperature of their source.")
    else:
        out.append(f"Readings without a temperature of their own are taken at {stack.reference_temperature_C:g} °C.")
    specs = [(layer.name, s) for layer in stack.layers for s in (layer.index, layer.index_normal) if s is not None]
    if stack.prism is not None:
        prism = stack.prism
        specs += [("prism", prism.index_TE)] + ([] if prism.one_index else [("prism (TM)", prism.index_TM)])
    return (*out, *(_model_sentence(name, s.material) for name, s in specs if s.material is not None))


def _model_sentence(layer: str, m: Material) -> str:
    sentence = f"Index of {layer}: {m.name}, {m.source}; relative to {m.index_medium}"
    if m.temperature_C is not None:
        sentence += f", {m.temperature_C:g} °C"
    if m.thermo is not None:
        sentence += f"; thermo-optic term: {m.thermo.source}"
    elif m.thermo_absent:
        sentence += f"; no thermo-optic term ({m.thermo_absent})"
    return f"{sentence}."
