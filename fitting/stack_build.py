"""From a checked stack document to the records of `stack`: nm to µm, every curve to a `Material`."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from layerlot.solver.materials import Cauchy, Formula, Material, Table, sellmeier

from .catalogue import find
from .stack import Guide, IndexSpec, Layer, Prism, Quantity, Stack, Structure
from .stack_schema import (
    WAVELENGTH_NM,
    CauchyCurve,
    Entry,
    Fit,
    FitCurve,
    GuideDocument,
    Known,
    LayerDocument,
    PrismDocument,
    SellmeierCurve,
    StackDocument,
    StructureDocument,
    TableCurve,
)

NM_PER_UM = 1000.0


def build(document: StackDocument, file: str) -> Stack:
    return Stack(
        title=document.title or Path(file).stem,
        file=file,
        reference_temperature_C=document.reference_temperature_C,
        index_reference=document.index_reference,
        wavelength_reference=document.wavelength_reference,
        layers=tuple(_layer(x, document) for x in document.layer),
        prism=None if document.prism is None else _prism(document.prism, document),
        guide=None if document.guide is None else _guide(document.guide),
        structures=tuple(_structure(x) for x in document.structure),
    )


def _quantity(q: float | Known | Fit, per: float = 1.0) -> Quantity:
    if isinstance(q, Known):
        return Quantity("known", value=q.value / per, u=q.u / per)
    if isinstance(q, Fit):
        start = q.value if q.start is None else q.start
        low, high = q.fit
        return Quantity("fit", low=low / per, high=high / per, start=None if start is None else start / per)
    return Quantity("exact", value=q / per)


def _layer(x: LayerDocument, document: StackDocument) -> Layer:
    return Layer(
        name=x.name,
        index=_index(x.index, x.name, document),
        index_normal=None if x.index_normal is None else _index(x.index_normal, f"{x.name} (normal)", document),
        thickness_um=None if x.thickness_nm is None else _quantity(x.thickness_nm, NM_PER_UM),
    )


def _index(given: Any, owner: str, document: StackDocument) -> IndexSpec:
    if isinstance(given, str):
        return _entry(given, None)
    if isinstance(given, Entry):
        return _entry(given.material, given.shift)
    if isinstance(given, FitCurve):
        near = find(given.near) if isinstance(given.near, str) else given.near
        return IndexSpec("fit_cauchy", cauchy_terms=given.fit_cauchy, near=near)
    if isinstance(given, (SellmeierCurve, CauchyCurve, TableCurve)):
        shift = None if given.shift is None else _quantity(given.shift)
        return IndexSpec("material", material=_curve(given, owner, document), shift=shift)
    return IndexSpec("quantity", quantity=_quantity(given))


def _entry(name: str, shift: float | Known | Fit | None) -> IndexSpec:
    material = find(name)
    assert material is not None, f"{name} passed the schema"
    moved = None if shift is None else _quantity(shift)
    return IndexSpec("material", material=material, shift=moved, name=material.name)


def _curve(given: SellmeierCurve | CauchyCurve | TableCurve, owner: str, document: StackDocument) -> Material:
    formula: Formula
    if isinstance(given, TableCurve):
        formula = Table(tuple(w / NM_PER_UM for w, _ in given.table), tuple(n for _, n in given.table))
        low, high, kind, how = given.table[0][0], given.table[-1][0], "table", ", monotone cubic between its points"
    else:
        low, high = given.range_nm or WAVELENGTH_NM
        how = ""
        if isinstance(given, SellmeierCurve):
            formula, kind = sellmeier(given.sellmeier_B, given.sellmeier_C_um), "Sellmeier formula"
        else:
            formula, kind = Cauchy(tuple(given.cauchy)), "Cauchy formula"
    return Material(
        name=f"{kind} of {owner}",
        formula=formula,
        range_um=(low / NM_PER_UM, high / NM_PER_UM),
        source=f"as the stack file gives it{how}",
        index_medium=document.index_reference,
        wavelength_medium=document.wavelength_reference,
        temperature_C=document.reference_temperature_C,
    )


def _prism(p: PrismDocument, document: StackDocument) -> Prism:
    one = p.index is not None
    te = _index(p.index if one else p.index_TE, "the prism", document)
    return Prism(
        index_TE=te,
        index_TM=te if one else _index(p.index_TM, "the prism (TM)", document),
        one_index=one,
        base_angle_deg=_quantity(p.base_angle_deg),
        angle_offset_deg=_quantity(p.angle_offset_deg),
        angle_u_deg=p.angle_u_deg,
        angle_sign=p.angle_sign,
    )


def _guide(g: GuideDocument) -> Guide:
    return Guide(
        core=g.core,
        etch_depth_um=None if isinstance(g.etch_depth_nm, str) else _quantity(g.etch_depth_nm, NM_PER_UM),
        width_bias_um=_quantity(g.width_bias_nm, NM_PER_UM),
        sidewall_deg=_quantity(g.sidewall_deg),
    )


def _structure(s: StructureDocument) -> Structure:
    def maybe(q: float | Known | Fit | None) -> Quantity | None:
        return None if q is None else _quantity(q)

    return Structure(
        name=s.name,
        kind=s.kind,
        radius_um=maybe(s.radius_um),
        length_um=maybe(s.length_um),
        delta_length_um=maybe(s.delta_length_um),
        drawn_width_um=s.drawn_width_nm / NM_PER_UM,
        pol=s.pol,
    )
