"""What is wrong with a stack file, all of it, in the three parts of a `Fault`."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from pydantic import ValidationError
from pydantic_core import ErrorDetails

from .records import Fault, Place
from .stack_schema import MODELS, UNION_TEXT, nearest

_TYPES = {
    "float_type": ("a number is required", "write it without quotes, with a decimal point"),
    "int_type": ("a whole number is required", "write it without quotes"),
    "string_type": ("a text is required", "put it in double quotes"),
    "list_type": ("a list in square brackets is required", "write [ ..., ... ]"),
    "model_type": ("a section or { key = value } is required", "write it as in `layerlot template stack`"),
    "finite_number": ("a finite number is required", "correct the number"),
    "string_too_short": ("a text is required", "fill it in"),
}
_EXAMPLES = {
    "layer": "start each layer with [[layer]], from the substrate up",
    "name": 'add name = "..."',
    "index": "add index = a number, a catalogue name in quotes, or { fit = [low, high] }",
    "base_angle_deg": "add base_angle_deg, the angle between entrance face and base",
    "angle_u_deg": "add angle_u_deg, the standard uncertainty of one angle reading",
    "near": "add near = a number or a catalogue name that the curve lies near",
    "u": "add u, the standard uncertainty, or write the number alone if it is exact",
}


def faults_of(error: ValidationError, file: str) -> list[Fault]:
    """One fault for each error of the schema; a missing key that is present misspelt is told once, as misspelt."""
    details = error.errors(include_url=False)
    misspelt = {(_path(d["loc"][:-1]), nearest([d["loc"][-1]], _keys(d["loc"]))) for d in details if _is_unknown_key(d)}
    missing = [d for d in details if d["type"] == "missing"]
    told = [d for d in missing if (_path(d["loc"][:-1]), str(d["loc"][-1])) in misspelt]
    return [_fault(d, file) for d in details if d not in told]


def whole_document(raw: Mapping[str, Any], file: str) -> list[Fault]:
    """What only several keys together show; looks at the document as typed, so that it runs beside other faults."""
    layers = [x for x in raw["layer"] if isinstance(x, dict)] if isinstance(raw.get("layer"), list) else []
    found = _layer_faults(layers) if layers else []
    if isinstance(raw.get("prism"), dict):
        found += _prism_faults(raw["prism"])
    structures = raw.get("structure", [])
    found += _guide_faults(raw.get("guide"), layers, bool(structures))
    found += _structure_faults([s for s in structures if isinstance(s, dict)] if isinstance(structures, list) else [])
    return [Fault(Place(file, column=where), *parts) for where, parts in found]


Found = tuple[str, tuple[str, str, str]]


def _layer_faults(layers: Sequence[Mapping[str, Any]]) -> list[Found]:
    found: list[Found] = []
    if len(layers) < 3:
        was = f"{len(layers)} layer{'s' if len(layers) > 1 else ''}"
        found.append(("layer", (was, "substrate, film and cover at least are required", "add the missing [[layer]]")))
    for number, layer in enumerate(layers, start=1):
        where = f"layer[{number}].thickness_nm"
        if number in (1, len(layers)):
            if "thickness_nm" in layer:
                role = "first" if number == 1 else "last"
                required = f"the {role} layer is a half-space and has no thickness"
                found.append((where, (_show(layer["thickness_nm"]), required, "remove it, or add the layer beyond")))
        elif not any(nearest([key], ["thickness_nm"]) for key in layer):
            remedy = "add thickness_nm = a number, { value, u } or { fit = [low, high] }"
            found.append((where, ("missing", "every layer between the half-spaces has a thickness", remedy)))
    return found + _repeated("layer", layers)


def _repeated(kind: str, entries: Sequence[Mapping[str, Any]]) -> list[Found]:
    found: list[Found] = []
    seen: dict[str, int] = {}
    for number, entry in enumerate(entries, start=1):
        name = entry.get("name")
        if not isinstance(name, str):
            continue
        if name in seen:
            was = f'"{name}", the name of {kind}[{seen[name]}] too'
            found.append((f"{kind}[{number}].name", (was, f"each {kind} has its own name", "rename one of them")))
        seen.setdefault(name, number)
    return found


def _prism_faults(prism: Mapping[str, Any]) -> list[Found]:
    both, given = {"index_TE", "index_TM"}, set(prism)
    if "index" in given and both & given:
        was = f"index beside {' and '.join(sorted(both & given))}"
        return [("prism", (was, "one index, or one for each polarisation", "keep index, or index_TE with index_TM"))]
    if "index" not in given and not both <= given:
        if not both & given and nearest(sorted(given), ["index"]):
            return []
        was = "no index" if not both & given else f"{(both & given).pop()} alone"
        return [("prism.index", (was, "the prism's index is required", "add index, or index_TE with index_TM"))]
    return []


def _guide_faults(guide: Any, layers: Sequence[Mapping[str, Any]], has_structures: bool) -> list[Found]:
    if guide is None:
        if not has_structures:
            return []
        was, required = "[[structure]] without [guide]", "structures need to know which layer is etched"
        return [("guide", (was, required, 'add [guide] with core = "..."'))]
    core = guide.get("core") if isinstance(guide, dict) else None
    films = [str(layer.get("name")) for layer in layers[1:-1]]
    if isinstance(core, str) and layers and core not in films:
        close = nearest([core], films)
        remedy = f'did you mean "{close}"?' if close else f"name one of: {', '.join(films)}"
        return [("guide.core", (f'"{core}"', "the name of a layer between the half-spaces is required", remedy))]
    return []


def _structure_faults(structures: Sequence[Mapping[str, Any]]) -> list[Found]:
    found = _repeated("structure", structures)
    for number, s in enumerate(structures, start=1):
        sizes = {"radius_um", "length_um", "delta_length_um"} & set(s)
        allowed = {"ring": ({"radius_um"}, {"length_um"}), "mzi": ({"delta_length_um"},)}.get(str(s.get("kind")))
        if allowed and sizes not in allowed:
            was = " and ".join(sorted(sizes)) or "no length"
            required = {
                "ring": "a ring has radius_um, or length_um for any closed path",
                "mzi": "an interferometer has delta_length_um",
            }[str(s["kind"])]
            found.append((f"structure[{number}]", (was, required, "give that one alone")))
    return found


def _fault(d: ErrorDetails, file: str) -> Fault:
    place = Place(file, column=_path(d["loc"]) or None)
    was, required, remedy = _parts(d)
    return Fault(place, was, required, remedy)


def _parts(d: ErrorDetails) -> tuple[str, str, str]:
    """was, required, remedy."""
    kind, context, was = d["type"], d.get("ctx", {}), _show(d["input"])
    key = str(d["loc"][-1]) if d["loc"] else ""
    if kind == "fault":
        return context["was"] or was, context["required"], context["remedy"]
    if kind == "missing":
        return "missing", f"{key} is required", _EXAMPLES.get(key, f"add {key}")
    if _is_unknown_key(d):
        return _unknown_key(d, key)
    return (was, *_requirement(kind, context, key, isinstance(d["input"], dict)))


_LIMITS = {"greater_than": ">", "greater_than_equal": ">=", "less_than": "<", "less_than_equal": "<="}


def _requirement(kind: str, context: Mapping[str, Any], key: str, is_section: bool) -> tuple[str, str]:
    """required, remedy."""
    if kind in UNION_TEXT:
        return UNION_TEXT[kind]
    if kind == "literal_error":
        return f"{context['expected']} is required".replace("'", '"'), "write one of these"
    if kind in _LIMITS:
        remedy = "write degrees Celsius" if key.endswith("_C") else "correct the number"
        return f"a number {_LIMITS[kind]} {next(iter(context.values())):g} is required", remedy
    if kind in ("too_short", "too_long"):
        limit = context.get("min_length") if kind == "too_short" else context.get("max_length")
        return f"{'at least' if kind == 'too_short' else 'at most'} {limit} numbers are required", "correct the list"
    required, remedy = _TYPES.get(kind, (kind.replace("_", " "), "correct it as in `layerlot template stack`"))
    if kind == "list_type" and is_section:
        remedy = f"write [[{key}]] with double brackets"
    return required, remedy


def _unknown_key(d: ErrorDetails, key: str) -> tuple[str, str, str]:
    keys = _keys(d["loc"])
    if key == "u" and "fit" in keys:
        remedy = "write { value, u } for a known quantity, { fit = [low, high] } for an unknown one"
        return f"u = {_show(d['input'])}", "a fitted quantity has no u of its own", remedy
    close = nearest([key], keys)
    remedy = f"did you mean {close}?" if close else f"remove it; known are {', '.join(keys)}"
    stem, _, unit = close.rpartition("_")
    if stem and key.startswith(f"{stem}_"):
        remedy = f"write {close}, in {unit}"
    return f"unknown key {key}", "only known keys are read", remedy


def _is_unknown_key(d: ErrorDetails) -> bool:
    return d["type"] == "extra_forbidden"


def _keys(loc: tuple[int | str, ...]) -> list[str]:
    """Keys that the section around the last part of a path knows."""
    around = next((str(p) for p in reversed(loc[:-1]) if not isinstance(p, int) and str(p) in MODELS), "")
    return list(MODELS[around].model_fields)


def _path(loc: tuple[int | str, ...]) -> str:
    """layer[2].thickness_nm.fit: numbers count from one, tags of unions left out."""
    out = ""
    for part in loc:
        if isinstance(part, int):
            out += f"[{part + 1}]"
        elif not part.startswith("<"):
            out += f".{part}" if out else part
    return out


def _show(value: Any) -> str:
    """A value as the file has it, shortened."""
    if isinstance(value, bool):
        text = "true" if value else "false"
    elif isinstance(value, str):
        text = f'"{value}"'
    elif isinstance(value, dict):
        text = "{ " + ", ".join(f"{k} = {_show(v)}" for k, v in value.items()) + " }"
    elif isinstance(value, list):
        text = "[" + ", ".join(_show(v) for v in value) + "]"
    else:
        text = f"{value:g}" if isinstance(value, float) else str(value)
    return text if len(text) <= 60 else text[:57] + "..."
