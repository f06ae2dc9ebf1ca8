"""What a stack file may say, as pydantic models: keys, types, ranges. `stack_faults` words what they refuse.

Every check that looks at one value stands here and runs whatever else is wrong; checks that look at several keys are in
`stack_faults.whole_document`. Units are those of the file: nm, µm, degrees, °C.
"""

from __future__ import annotations

from collections.abc import Callable
from difflib import get_close_matches
from itertools import pairwise
from typing import Annotated, Any, Literal, NoReturn

from pydantic import AfterValidator, BaseModel, ConfigDict, Discriminator, Field, Tag
from pydantic_core import PydanticCustomError

from .catalogue import catalogue, find

WAVELENGTH_NM = (100.0, 50000.0)
INDEX = (0.01, 10.0)


def refuse(was: str, required: str, remedy: str) -> NoReturn:
    """Refuse a value in the three parts of a `Fault`; an empty `was` stands for the value itself."""
    raise PydanticCustomError("fault", "{required}", {"was": was, "required": required, "remedy": remedy})


class Strict(BaseModel):
    model_config = ConfigDict(extra="forbid", strict=True, frozen=True, allow_inf_nan=False)


class Known(Strict):
    value: float
    u: float = Field(ge=0)


def _window(fit: list[float]) -> list[float]:
    if len(fit) != 2:
        refuse("", "a fit window has two numbers", "write fit = [low, high]")
    if fit[0] >= fit[1]:
        refuse("", "the window must rise", f"write fit = [{min(fit):g}, {max(fit):g}] with low below high")
    return fit


class Fit(Strict):
    fit: Annotated[list[float], AfterValidator(_window)]
    start: float | None = None
    value: float | None = None


def _start_inside(q: Fit) -> Fit:
    if q.start is not None and q.value is not None:
        refuse(f"start = {q.start:g} and value = {q.value:g}", "one start value", "keep start alone")
    start = q.start if q.start is not None else q.value
    if start is not None and not q.fit[0] <= start <= q.fit[1]:
        remedy = "widen the window or move the start"
        refuse(f"start {start:g}", f"the start lies inside the window {q.fit[0]:g} to {q.fit[1]:g}", remedy)
    return q


def _quantity_kind(value: Any) -> str | None:
    """Which form of a quantity was meant, by its keys; None where none is near."""
    if not isinstance(value, dict):
        return "<number>" if isinstance(value, (int, float)) and not isinstance(value, bool) else None
    if "fit" in value:
        return "<fit>"
    if "value" in value or "u" in value:
        return "<known>"
    return {"fit": "<fit>", "start": "<fit>", "value": "<known>"}.get(nearest(value, ["fit", "value", "start"]))


def nearest(keys: Any, known: list[str]) -> str:
    """The known key nearest to the first of `keys` that is near any; empty if none is."""
    for key in keys:
        close = get_close_matches(str(key).lower(), known, n=1, cutoff=0.6)
        if close:
            return str(close[0])
    return ""


# What to say where none of the forms of a union was meant: error type -> (required, remedy).
UNION_TEXT = {
    "quantity": (
        "a number, { value = ..., u = ... } or { fit = [low, high] } is required",
        "write one of the three, numbers without quotes",
    ),
    "index": (
        "a quantity, a catalogue name or a dispersion curve is required",
        "write a number, { value, u }, { fit = [low, high] }, a name in quotes, or { table = [[nm, n], ...] }",
    ),
}


def _by(kind: Callable[[Any], str | None], error: str) -> Discriminator:
    return Discriminator(kind, custom_error_type=error, custom_error_message=UNION_TEXT[error][0])


AnyQuantity = Annotated[
    Annotated[float, Tag("<number>")]
    | Annotated[Known, Tag("<known>")]
    | Annotated[Fit, AfterValidator(_start_inside), Tag("<fit>")],
    _by(_quantity_kind, "quantity"),
]


def _extremes(q: float | Known | Fit) -> list[float]:
    return q.fit if isinstance(q, Fit) else [q.value if isinstance(q, Known) else q]


def between(low: float, high: float, what: str, remedy: str) -> AfterValidator:
    """Every value that the quantity can take lies strictly between the limits."""

    def check(q: Any) -> Any:
        for x in _extremes(q) if isinstance(q, (int, float, Known, Fit)) else ():
            if not low < x < high:
                refuse(f"{x:g}", f"{what} lies between {low:.7g} and {high:.7g}", remedy)
        return q

    return AfterValidator(check)


def check_name(name: str) -> str:
    if find(name) is not None:
        return name
    try:
        float(name.replace(",", "."))
    except ValueError:
        close = _near_materials(name)
        known = f"did you mean {' or '.join(close)}?" if close else f"known are: {'; '.join(sorted(catalogue()))}"
        refuse(f'"{name}"', "the name of a material in the catalogue is required", known)
    refuse(f'"{name}"', "a number is typed without quotes", f"write {name.replace(',', '.')}")


def _near_materials(name: str) -> list[str]:
    """Catalogue names that contain the words typed, else those spelt nearly so."""
    wanted = name.casefold().strip()
    held = [key for key in catalogue() if len(wanted) > 2 and wanted in key.casefold()]
    by_fold = {key.casefold(): key for key in catalogue()}
    return held or [by_fold[k] for k in get_close_matches(wanted, list(by_fold), n=3, cutoff=0.55)]


Name = Annotated[str, AfterValidator(check_name)]
_index_remedy = "correct the index"
AnyIndexQuantity = Annotated[AnyQuantity, between(*INDEX, "a refractive index", _index_remedy)]


class Dispersive(Strict):
    shift: Annotated[AnyQuantity, between(-1, 1, "an index shift", "correct the shift")] | None = None


class Entry(Dispersive):
    material: Name


def _as_many(curve: SellmeierCurve) -> SellmeierCurve:
    b, c = len(curve.sellmeier_B), len(curve.sellmeier_C_um)
    if b != c:
        refuse(f"{b} B and {c} C", "as many sellmeier_C_um as sellmeier_B are required", "give one C for each B")
    return curve


class SellmeierCurve(Dispersive):
    sellmeier_B: list[float] = Field(min_length=1)
    sellmeier_C_um: list[float] = Field(min_length=1)
    range_nm: Annotated[list[float], AfterValidator(_window)] | None = None


class CauchyCurve(Dispersive):
    cauchy: list[float] = Field(min_length=1, max_length=4)
    range_nm: Annotated[list[float], AfterValidator(_window)] | None = None


def _rows(table: list[list[float]]) -> list[list[float]]:
    for number, row in enumerate(table, start=1):
        if len(row) != 2:
            refuse(f"row {number} has {len(row)} values", "a row is [wavelength_nm, n]", "write two numbers a row")
        if row[0] < INDEX[1] and row[1] >= WAVELENGTH_NM[0]:
            refuse(f"row {number}: [{row[0]:g}, {row[1]:g}]", "a row is [wavelength_nm, n]", "swap the two columns")
        check_wavelength_nm(row[0], f"row {number}: ")
        if not INDEX[0] < row[1] < INDEX[1]:
            required = f"a refractive index lies between {INDEX[0]:g} and {INDEX[1]:g}"
            refuse(f"row {number}: index {row[1]:g}", required, "write [wavelength_nm, n]")
    if len(table) < 2:
        refuse(f"{len(table)} row", "a table has two rows or more", "for one wavelength write the index as a number")
    for before, after in pairwise(table):
        if after[0] <= before[0]:
            refuse(
                f"{after[0]:g} nm after {before[0]:g} nm",
                "wavelengths rise from row to row",
                "sort, drop repeated rows",
            )
    return table


def check_wavelength_nm(nm: float, prefix: str = "") -> None:
    if not WAVELENGTH_NM[0] <= nm <= WAVELENGTH_NM[1]:
        low, high = WAVELENGTH_NM
        hint = f"if µm was meant, write {nm * 1000:g}" if 0.1 <= nm <= 50 else "write the wavelength in nm"
        refuse(f"{prefix}wavelength {nm:g} nm", f"wavelengths are in nm, {low:g} to {high:g}", hint)


class TableCurve(Dispersive):
    table: Annotated[list[list[float]], AfterValidator(_rows)]


def _near(value: float | str) -> float | str:
    if isinstance(value, str):
        return check_name(value)
    if not INDEX[0] < value < INDEX[1]:
        refuse("", f"a refractive index lies between {INDEX[0]:g} and {INDEX[1]:g}", _index_remedy)
    return value


class FitCurve(Strict):
    fit_cauchy: Literal[2, 3]
    near: Annotated[float | str, AfterValidator(_near)]


_INDEX_KEYS = {
    "material": "<material>",
    "sellmeier_B": "<sellmeier>",
    "sellmeier_C_um": "<sellmeier>",
    "cauchy": "<cauchy>",
    "table": "<table>",
    "fit_cauchy": "<curve>",
    "near": "<curve>",
}


def _index_kind(value: Any) -> str | None:
    if isinstance(value, str):
        return "<name>"
    if not isinstance(value, dict):
        return _quantity_kind(value)
    for key, kind in _INDEX_KEYS.items():
        if key in value:
            return kind
    if {"fit", "value", "u"} & set(value):
        return _quantity_kind(value)
    key = nearest(value, [k.lower() for k in _INDEX_KEYS])
    exact = next((k for k in _INDEX_KEYS if k.lower() == key), "")
    return _INDEX_KEYS.get(exact) or _quantity_kind(value)


AnyIndex = Annotated[
    Annotated[float, between(*INDEX, "a refractive index", _index_remedy), Tag("<number>")]
    | Annotated[Known, between(*INDEX, "a refractive index", _index_remedy), Tag("<known>")]
    | Annotated[Fit, AfterValidator(_start_inside), between(*INDEX, "a refractive index", _index_remedy), Tag("<fit>")]
    | Annotated[Name, Tag("<name>")]
    | Annotated[Entry, Tag("<material>")]
    | Annotated[SellmeierCurve, AfterValidator(_as_many), Tag("<sellmeier>")]
    | Annotated[CauchyCurve, Tag("<cauchy>")]
    | Annotated[TableCurve, Tag("<table>")]
    | Annotated[FitCurve, Tag("<curve>")],
    _by(_index_kind, "index"),
]


def length(what: str, remedy: str, high: float = 1e6) -> AfterValidator:
    return between(0.0, high, what, remedy)


def _not_micrometres(q: float | Known | Fit | None) -> float | Known | Fit | None:
    """No film is thinner than 1 nm: such a number was meant in µm."""
    if q is not None and 0 < max(_extremes(q)) < 1:
        hint = " to ".join(f"{x * 1000:g}" for x in _extremes(q))
        refuse("", "thicknesses are in nm, and no film is thinner than 1 nm", f"if µm was meant, write {hint}")
    return q


class LayerDocument(Strict):
    name: str = Field(min_length=1)
    index: AnyIndex
    index_normal: AnyIndex | None = None
    thickness_nm: (
        Annotated[
            AnyQuantity,
            length("a thickness in nm", "write the thickness in nm"),
            AfterValidator(_not_micrometres),
        ]
        | None
    ) = None


class PrismDocument(Strict):
    index: AnyIndex | None = None
    index_TE: AnyIndex | None = None
    index_TM: AnyIndex | None = None
    base_angle_deg: Annotated[AnyQuantity, between(0, 90, "a base angle", "write the angle in degrees")]
    angle_offset_deg: Annotated[AnyQuantity, between(-90, 90, "a table zero", "write the angle in degrees")] = 0.0
    angle_u_deg: float = Field(gt=0, lt=10)
    angle_sign: Literal[1, -1] = 1


def _etch_kind(value: Any) -> str | None:
    return "<full>" if isinstance(value, str) else _quantity_kind(value)


AnyEtch = Annotated[
    Annotated[Literal["full"], Tag("<full>")]
    | Annotated[float, Tag("<number>")]
    | Annotated[Known, Tag("<known>")]
    | Annotated[Fit, AfterValidator(_start_inside), Tag("<fit>")],
    _by(_etch_kind, "quantity"),
]


class GuideDocument(Strict):
    core: str
    etch_depth_nm: Annotated[AnyEtch, length("an etch depth", "write the depth in nm")] = "full"
    width_bias_nm: Annotated[AnyQuantity, between(-1e4, 1e4, "a width bias", "write the bias in nm")] = 0.0
    sidewall_deg: Annotated[AnyQuantity, between(30, 150, "a sidewall angle", "90 is a vertical wall")] = 90.0


class StructureDocument(Strict):
    name: str = Field(min_length=1)
    kind: Literal["ring", "mzi"]
    radius_um: Annotated[AnyQuantity, length("a radius", "write the radius in µm")] | None = None
    length_um: Annotated[AnyQuantity, length("a path length", "write the length in µm", 1e9)] | None = None
    delta_length_um: Annotated[AnyQuantity, length("a path difference", "write it in µm", 1e9)] | None = None
    drawn_width_nm: Annotated[float, length("a drawn width", "write the width in nm")]
    pol: Literal["TE", "TM"]


class StackDocument(Strict):
    title: str = ""
    reference_temperature_C: float | None = Field(default=None, ge=-40, le=100)
    index_reference: Literal["vacuum", "air"] = "vacuum"
    wavelength_reference: Literal["vacuum", "air"] = "vacuum"
    layer: list[LayerDocument]
    prism: PrismDocument | None = None
    guide: GuideDocument | None = None
    structure: list[StructureDocument] = []


# The model behind a place of the document, by the last part of its path that is a name or a union's tag.
MODELS: dict[str, type[Strict]] = {
    "": StackDocument,
    "layer": LayerDocument,
    "prism": PrismDocument,
    "guide": GuideDocument,
    "structure": StructureDocument,
    "<known>": Known,
    "<fit>": Fit,
    "<material>": Entry,
    "<sellmeier>": SellmeierCurve,
    "<cauchy>": CauchyCurve,
    "<table>": TableCurve,
    "<curve>": FitCurve,
}
