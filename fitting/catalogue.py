"""The catalogue of materials in datasets/materials.toml, as `Material` by name."""

from __future__ import annotations

import tomllib
from functools import cache
from typing import Any

from layerlot.datasets import read_text
from layerlot.solver.materials import (
    Formula,
    GlassThermo,
    LinearThermo,
    Material,
    Poles,
    StandardAir,
    Table,
    sellmeier,
)


@cache
def catalogue() -> dict[str, Material]:
    """Every entry by its name. An entry that does not hold together raises: it ships with the program."""
    entries = [_material(e) for e in tomllib.loads(read_text("materials.toml"))["material"]]
    return {m.name: m for m in entries}


def find(name: str) -> Material | None:
    """The entry of that name, whatever the case and the spaces; None if there is none."""
    wanted = _plain(name)
    return next((m for key, m in catalogue().items() if _plain(key) == wanted), None)


def _plain(name: str) -> str:
    return " ".join(name.casefold().split())


def _material(entry: dict[str, Any]) -> Material:
    low, high = entry["range_um"]
    thermo, absent = entry.get("thermo"), entry.get("thermo_absent", "")
    if (thermo is None) == (not absent):
        raise ValueError(f"{entry['name']}: give thermo or thermo_absent")
    doi = f", doi {entry['doi']}" if "doi" in entry else ""
    return Material(
        name=entry["name"],
        formula=_formula(entry),
        range_um=(float(low), float(high)),
        source=entry["source"] + doi,
        index_medium=entry["reference"],
        wavelength_medium=entry["reference"],
        temperature_C=entry.get("temperature_C"),
        thermo=None if thermo is None else _thermo(thermo),
        thermo_absent=absent,
    )


def _formula(entry: dict[str, Any]) -> Formula:
    kind = entry["formula"]
    if kind == "sellmeier":
        return sellmeier(entry["B"], entry["C_um"], entry.get("constant", 1.0))
    if kind == "poles":
        poles = tuple((float(s), float(p), float(q)) for s, p, q in entry["poles"])
        return Poles(entry["constant"], poles, tuple((float(c), float(e)) for c, e in entry.get("powers", [])))
    if kind == "table":
        return Table(tuple(float(w) for w, _ in entry["table"]), tuple(float(n) for _, n in entry["table"]))
    if kind == "air":
        return StandardAir()
    raise ValueError(f"{entry['name']}: unknown formula {kind}")


def _thermo(term: dict[str, Any]) -> LinearThermo | GlassThermo:
    if "dn_dT_per_K" in term:
        return LinearThermo(term["dn_dT_per_K"], term["source"])
    d0, d1, d2 = term["D"]
    e0, e1 = term["E"]
    return GlassThermo((d0, d1, d2), (e0, e1), term["L_um"], term["source"])
