"""The machine-readable result: one JSON document, schema `layerlot/results/1`, no NaN in it and no bare number."""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Sequence
from typing import Any

from ..records import BudgetLine, Estimate, FitResult, FittedReading, Flag, GroupMean, Rival, SiteResult
from .view import reading_unit, wavelength_nm
from .words import column_of, mean_name, site_name

SCHEMA = "layerlot/results/1"


class BareNumberError(ValueError):
    """Estimates that lack a finite value, uncertainty or interval; `found` lists them. Nothing is written then."""

    def __init__(self, found: Sequence[str]) -> None:
        self.found = tuple(found)
        super().__init__("numbers without a finite uncertainty cannot be reported: " + "; ".join(self.found))


def results_document(result: FitResult) -> dict[str, Any]:
    """The contents of results.json. Raises BareNumberError where any estimate or mean is not finite throughout."""
    check_numbers(result)
    return {
        "schema": SCHEMA,
        "version": result.version,
        "title": result.title,
        "inputs": [{"file": f.file, "sha256": f.sha256} for f in result.inputs],
        "interrupted": result.interrupted,
        "conventions": list(result.conventions),
        "shared": [_estimate(e) for e in result.shared],
        "shared_flags": _flags(result.shared_flags),
        "means": [_mean(m) for m in result.means],
        "skipped_rows": [
            {"file": p.file, "sheet": p.sheet, "row": p.row, "column": p.column, "reason": why}
            for p, why in result.skipped_rows
        ],
        "sites": [_site(s) for s in result.sites],
    }


def document_text(document: dict[str, Any]) -> str:
    """JSON text, one line a top-level field and one a site, so that files can be searched and compared by line."""
    lines = []
    for key, value in document.items():
        if key == "sites":
            rows = ",\n".join(_dump(site) for site in value)
            lines.append(f'"sites": [\n{rows}\n]' if value else '"sites": []')
        else:
            lines.append(f"{json.dumps(key)}: {_dump(value)}")
    return "{" + ",\n".join(lines) + "}\n"


def _dump(value: object) -> str:
    return json.dumps(value, ensure_ascii=False, allow_nan=False)


def check_numbers(result: FitResult) -> None:
    """Every estimate and mean carries finite value, u, parts and interval, and low95 <= value <= high95, u >= 0."""
    found = [f"{name}: {column_of(e).name}" for name, e in _all_numbers(result) if not _complete(e)]
    if found:
        raise BareNumberError(found)


def _all_numbers(result: FitResult) -> Iterable[tuple[str, Estimate | GroupMean]]:
    for e in result.shared:
        yield "shared", e
    for m in result.means:
        yield mean_name(m), m
    for s in result.sites:
        for e in s.estimates:
            yield site_name(s), e
        for rival in s.rivals:
            for e in rival.estimates:
                yield f"{site_name(s)}, rival", e


def _complete(e: Estimate | GroupMean) -> bool:
    numbers = (e.value, e.u, e.u_random, e.u_shared, e.low95, e.high95)
    return all(math.isfinite(x) for x in numbers) and e.u >= 0 and e.low95 <= e.value <= e.high95


def _site(s: SiteResult) -> dict[str, Any]:
    return {
        "lot": s.lot,
        "wafer": s.wafer,
        "site": s.site,
        "x_mm": _finite(s.x_mm),
        "y_mm": _finite(s.y_mm),
        "measured_at": s.measured_at,
        "status": s.status.value,
        "flags": _flags(s.flags),
        "notes": _flags(s.notes),
        "estimates": [_estimate(e) for e in s.estimates],
        "correlation": [[_finite(float(c)) for c in row] for row in s.correlation],
        "fit": None
        if s.fit is None
        else {
            "chi2": _finite(s.fit.chi2),
            "dof": s.fit.dof,
            "p_value": _finite(s.fit.p_value),
            "readings_used": s.fit.readings_used,
            "readings_rejected": s.fit.readings_rejected,
        },
        "readings": [_reading(r) for r in s.readings],
        "rivals": [_rival(r) for r in s.rivals],
        "budget": [_budget(b) for b in s.budget],
    }


def _finite(x: float | None) -> float | None:
    """A number, or None (null in the file) for one that is missing or not finite."""
    return None if x is None or not math.isfinite(x) else x


def _flags(flags: Sequence[Flag]) -> list[dict[str, str]]:
    return [{"code": f.code, "text": f.text} for f in flags]


def _estimate(e: Estimate) -> dict[str, Any]:
    return {
        "layer": e.layer,
        "quantity": e.quantity,
        "axis": e.axis,
        "wavelength_nm": e.wavelength_nm,
        "value": e.value,
        "u": e.u,
        "u_random": e.u_random,
        "u_shared": e.u_shared,
        "low95": e.low95,
        "high95": e.high95,
        "unit": e.unit,
        "origin": e.origin,
        "interval": e.interval,
        "prior": None if e.prior is None else {"value": e.prior[0], "u": e.prior[1]},
    }


def _mean(m: GroupMean) -> dict[str, Any]:
    return {
        "level": m.level,
        "lot": m.lot,
        "wafer": m.wafer,
        "layer": m.layer,
        "quantity": m.quantity,
        "axis": m.axis,
        "wavelength_nm": m.wavelength_nm,
        "value": m.value,
        "u": m.u,
        "u_random": m.u_random,
        "u_shared": m.u_shared,
        "low95": m.low95,
        "high95": m.high95,
        "unit": m.unit,
        "spread": _finite(m.spread),
        "spread_process": _finite(m.spread_process),
        "sites": m.sites,
        "sites_left_out": m.sites_left_out,
    }


def _reading(r: FittedReading) -> dict[str, Any]:
    place = r.reading.place
    return {
        "kind": "prism",
        "structure": None,
        "wavelength_nm": wavelength_nm(r),
        "pol": r.reading.pol,
        "order": r.order,
        "measured": _finite(r.reading.value),
        "predicted": _finite(r.predicted),
        "u": _finite(r.u),
        "unit": reading_unit(r),
        "used": r.used,
        "reason": r.reason,
        "file": place.file,
        "sheet": place.sheet,
        "row": place.row,
    }


def _rival(r: Rival) -> dict[str, Any]:
    return {
        "delta_chi2": _finite(r.delta_chi2),
        "probability": _finite(r.probability),
        "orders": r.orders,
        "estimates": [_estimate(e) for e in r.estimates],
    }


def _budget(b: BudgetLine) -> dict[str, Any]:
    return {
        "source": b.source,
        "kind": b.kind,
        "layer": b.layer,
        "quantity": b.quantity,
        "axis": b.axis,
        "wavelength_nm": b.wavelength_nm,
        "u": _finite(b.u),
        "unit": b.unit,
    }
