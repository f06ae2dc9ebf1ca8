"""report.html: one file that opens offline. This module gathers what the page shows; the template lays it out.

up to FEW_SITES sites      every site in the answers, its readings and residuals plotted
up to FEW_WAFERS wafers    a map and residual plots for each wafer
more                       answers are the means; one plot over all wafers; details of flagged sites only
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from ..records import Estimate, FitResult, FittedReading, SiteResult, Status
from .figures import measured_predicted, residuals_by_mode, residuals_by_wafer, site_residuals
from .maps import wafer_map, wafer_means, wafer_tiles
from .rounding import COVERAGE, expanded, format_number, format_u, format_value
from .rounding import decimals as places
from .summary import KEY
from .view import (
    FEW_SITES,
    Budget,
    MeanRow,
    asymmetric,
    budgets,
    by_column,
    columns,
    in_trouble,
    left_out,
    mean_columns,
    mean_rows,
    mode_name,
    normalised,
    reading_unit,
    wafers,
    wavelength_nm,
)
from .words import (
    ALL_SITES,
    Column,
    FlagGroup,
    column_of,
    count_words,
    flag_groups,
    note_groups,
    place_levels,
    site_name,
    unit_mark,
    verdict,
    wafer_name,
    with_unit,
)

FEW_WAFERS = 6
_SITES_IN_DETAIL = 6  # of the flagged and failed ones, in a table of many
_LIST_AT_MOST = 100
_DETAILS_OF_MANY = 12
_STATE = {Status.OK: "● ok", Status.FLAGGED: "◆ FLAGGED", Status.FAILED: "✕ FAILED"}
_READING_NAME = {"deg": "angle (°)", "1": "effective index"}
_READING_DIGITS = {"deg": 4, "1": 6}

Part = dict[str, Any]


def page(result: FitResult) -> str:
    """The whole page as text."""
    from importlib.resources import files

    from jinja2 import Environment, StrictUndefined

    source = files("layerlot.templates").joinpath("report.html.j2").read_text(encoding="utf-8")
    environment = Environment(autoescape=True, undefined=StrictUndefined, trim_blocks=True, lstrip_blocks=True)
    return environment.from_string(source).render(_parts(result))


def _parts(result: FitResult) -> Part:
    few = len(result.sites) <= FEW_SITES
    rows = mean_rows(result)
    several = [r for r in rows if r.first.sites + r.first.sites_left_out > 1]
    bad = in_trouble(result)
    by_means = not few and bool(several)
    shown = bad[:_LIST_AT_MOST] if by_means else list(result.sites)
    detailed = list(result.sites) if few else bad[:_SITES_IN_DETAIL]
    return {
        "title": result.title,
        "version": result.version,
        "verdict": verdict(result),
        "is_bad": bool(bad) or result.interrupted or bool(result.shared_flags),
        "key": KEY,
        "by_means": by_means,
        "answers": _site_table(shown, _answers_caption(by_means, len(bad))) if shown else None,
        "means": _mean_table(several) if several else None,
        "flags": [_flag(g, few) for g in flag_groups(result)],
        "notes": [_flag(g, few) for g in note_groups(result)],
        "table_figures": _table_figures(result),
        "wafers": _wafer_tables(result),
        "wafers_first": len(wafers(result)) <= FEW_WAFERS,
        "details": [_detail(s) for s in detailed],
        "details_more": 0 if few else len(bad) - len(detailed),
        "budgets": [_budget(b) for b in budgets(result.sites)],
        "rivals": [_rival(s, k) for s in result.sites for k in range(len(s.rivals))][:_LIST_AT_MOST],
        "rivals_more": max(0, sum(len(s.rivals) for s in result.sites) - _LIST_AT_MOST),
        "left_out": [_stray(s, r) for s, r in left_out(result)[:_LIST_AT_MOST]],
        "left_out_more": max(0, len(left_out(result)) - _LIST_AT_MOST),
        "skipped": [{"place": str(p), "why": why} for p, why in result.skipped_rows[:_LIST_AT_MOST]],
        "skipped_more": max(0, len(result.skipped_rows) - _LIST_AT_MOST),
        "shared": [_shared(e) for e in result.shared],
        "conventions": result.conventions,
        "inputs": [{"file": f.file, "sha256": f.sha256} for f in result.inputs],
    }


def _answers_caption(by_means: bool, bad: int) -> str:
    if not by_means:
        return "Each site: value ± U."
    return f"Sites flagged or failed{', the first ' + str(_LIST_AT_MOST) if bad > _LIST_AT_MOST else ''}: value ± U."


def _heads(cols: Sequence[Column]) -> list[Part]:
    return [{"short": c.short, "direction": c.direction, "below": _below(c)} for c in cols]


def _below(c: Column) -> str:
    return c.wavelength or (f"({unit_mark(c.unit)})" if c.unit != "1" else "")


def _site_table(
    sites: Sequence[SiteResult], caption: str, *, levels: list[str] | None = None, quality: bool = False
) -> Part:
    """Rows of value ± U; quality adds what the residuals say of the fit."""
    cols = columns(sites)
    own = place_levels(sites) if levels is None else levels
    foot = [[e.u_shared for s in sites for e in s.estimates if column_of(e) == c] for c in cols]
    return {
        "caption": caption,
        "levels": own or [""],
        "columns": _heads(cols),
        "rows": [_site_row(s, own, cols) for s in sites],
        "foot": [f"± {format_u(max(u), COVERAGE)}" for u in foot],
        "quality": quality,
    }


def _site_row(s: SiteResult, levels: Sequence[str], cols: Sequence[Column]) -> Part:
    found = by_column(s)
    fit = s.fit
    return {
        "place": [getattr(s, level) or "" for level in levels] or ["all readings"],
        "cells": [_cell(found.get(c), "not determined" if found else "no answer") for c in cols],
        "status": s.status.value,
        "state": _STATE[s.status],
        "chi2": "" if fit is None else f"{fit.chi2:.1f} ({fit.dof})",
        "p": "" if fit is None or fit.p_value is None else _probability(fit.p_value),
        "readings": "" if fit is None else _used(fit.readings_used, fit.readings_rejected),
    }


def _probability(p: float, equals: str = "") -> str:
    return f"{equals}{p:.2g}" if p >= 1e-4 else "< 0.0001"


def _used(used: int, rejected: int) -> str:
    return f"{used}" if not rejected else f"{used} of {used + rejected}"


def _cell(e: Estimate | None, otherwise: str) -> Part:
    if e is None:
        return {"text": otherwise, "number": False, "extra": ""}
    extra = f"95 %: {_interval(e)}" if asymmetric(e) else ""
    return {"text": expanded(e.value, e.u), "number": True, "extra": extra}


def _interval(e: Estimate) -> str:
    n = places(e.u)
    return f"{format_number(e.low95, n)} to {format_number(e.high95, n)}"


def _mean_table(rows: Sequence[MeanRow]) -> Part:
    cols = mean_columns(rows)
    body = []
    for r in rows:
        spelt_out = r.first.level == "lot" or len(rows) <= FEW_SITES
        cells = []
        for c in cols:
            m = r.cells.get(c)
            if m is None:
                cells.append({"text": "not determined", "number": False, "spread": "", "parts": ""})
                continue
            spread = "" if m.spread is None else f"s {format_u(m.spread)}"
            if m.spread_process is not None:
                spread += f", of the film {format_u(m.spread_process)}"
            parts = f"random ± {format_u(m.u_random, COVERAGE)}, shared ± {format_u(m.u_shared, COVERAGE)}"
            cells.append(
                {"text": expanded(m.value, m.u), "number": True, "spread": spread, "parts": parts if spelt_out else ""}
            )
        body.append(
            {
                "lot": r.first.lot or "",
                "wafer": r.first.wafer or "all",
                "level": r.first.level,
                "cells": cells,
                "sites": _of(r),
            }
        )
    return {"columns": _heads(cols), "rows": body}


def _of(r: MeanRow) -> str:
    return _used(r.first.sites, r.first.sites_left_out)


def _flag(g: FlagGroup, few: bool) -> Part:
    """A flag with the sites that carry it."""
    at_most = _LIST_AT_MOST if few else _DETAILS_OF_MANY
    names = {name for name, _ in g.sites}
    where = ALL_SITES if names == {ALL_SITES} else count_words(len(names), "site")
    cases = [name + (f": {detail}" if detail else "") for name, detail in g.sites[:at_most]]
    return {"code": g.code, "where": where, "text": g.text, "cases": cases, "more": max(0, len(g.sites) - at_most)}


def _figure(svg: str | None, alt: str, caption: str) -> list[Part]:
    return [] if svg is None else [{"svg": svg, "alt": alt, "caption": caption}]


def _map_columns(result: FitResult) -> list[Column]:
    """Thickness first, then the index at the shortest wavelength: two maps a wafer."""
    cols = columns(result.sites)
    thick = [c for c in cols if c.quantity == "thickness"]
    return (thick[:1] + [c for c in cols if c.quantity == "index"] + thick[1:])[:2]


def _capital(text: str) -> str:
    return text[:1].upper() + text[1:]


_SHAPES = "Circle: ok; diamond: flagged; cross: failed; white: no number. Random U: median of the random part of U."


def _table_figures(result: FitResult) -> list[Part]:
    """Plots over all wafers."""
    out: list[Part] = []
    many = len(wafers(result)) > FEW_WAFERS
    cols = _map_columns(result)
    out += _figure(
        wafer_means(result, cols), "Means of each wafer; the figures stand in the table of means.",
        "Wafer by wafer: grey dots, sites; cross-bar, mean; thin bar, U of the mean; thick bar, its random part. Two "
        "wafers measured on one instrument are as uncertain against each other as their thick bars say.",
    )  # fmt: skip
    if many:
        for c in cols:
            text = f"{_capital(c.name)}, all wafers on one scale. {_SHAPES} The figures stand in the wafers' tables."
            out += _figure(wafer_tiles(result, c), f"Maps of {c.name}, wafer by wafer.", text)
        for unit, readings in _by_unit(result.sites):
            out += _fit_figure(readings, unit, "all wafers")
    what = (
        "dot, mean; bar, one standard deviation either way; expected: mean 0, bar up to ±1 (dashed), shorter where a "
        "fit has few readings to spare. A mean away from 0 "
    )
    if len(result.sites) > 2:
        out += _figure(
            residuals_by_mode(result), "Mean and scatter of the normalised residuals of each mode.",
            f"Normalised residuals, mode by mode: {what}points to a wrong constant of the prism or of a layer.",
        )  # fmt: skip
    if many:
        out += _figure(
            residuals_by_wafer(result), "Mean and scatter of the normalised residuals of each wafer.",
            f"Normalised residuals, wafer by wafer: {what}points to a wafer that was measured otherwise.",
        )  # fmt: skip
    return out


def _by_unit(sites: Sequence[SiteResult]) -> list[tuple[str, list[FittedReading]]]:
    groups: dict[str, list[FittedReading]] = {}
    for s in sites:
        for r in s.readings:
            groups.setdefault(reading_unit(r), []).append(r)
    return [(u, rs) for u, rs in groups.items() if any(normalised(r) is not None for r in rs)]


def _fit_figure(readings: Sequence[FittedReading], unit: str, where: str) -> list[Part]:
    used = sum(r.used for r in readings)
    worst = max(abs(z) for r in readings if (z := normalised(r)) is not None)
    alt = f"{where}: {used} readings against the model; the largest normalised residual is {worst:.1f}."
    counts = f"{count_words(used, 'reading')} used, {len(readings) - used} left out (crosses)"
    words = f"{_capital(where)}: {counts}. Largest normalised residual {worst:.1f}."
    return _figure(measured_predicted(readings, _READING_NAME[unit]), alt, words)


def _wafer_tables(result: FitResult) -> list[Part]:
    """Table of each wafer; map and residuals too where the wafers are few."""
    groups = wafers(result)
    plots = len(groups) <= FEW_WAFERS
    out = []
    for k, (lot, wafer, sites) in enumerate(groups):
        name = wafer_name(lot, wafer)
        figures: list[Part] = []
        if plots:
            cols = _map_columns(result)
            figures += _figure(
                wafer_map(sites, cols),
                f"Wafer map of {name}; the figures stand in the table.",
                f"Map of {name}. {_SHAPES}",
            )
            for unit, readings in _by_unit(sites):
                figures += _fit_figure(readings, unit, name)
        levels = ["site"] if any(s.site is not None for s in sites) else []
        table = _site_table(
            sites, f"Sites of {name}: value ± U, and what the residuals say.", levels=levels, quality=True
        )
        out.append({"id": f"wafer-{k + 1}", "name": name, "table": table, "figures": figures})
    return out


def _detail(s: SiteResult) -> Part:
    """Readings of one site with their residuals."""
    rows = []
    for r in s.readings:
        unit = reading_unit(r)
        n, z = _READING_DIGITS[unit], normalised(r)
        rows.append(
            {
                "mode": mode_name(r),
                "wave": f"{wavelength_nm(r):g}",
                "measured": with_unit(format_number(r.reading.value, n), unit),
                "predicted": "" if r.predicted is None else with_unit(format_number(r.predicted, n), unit),
                "u": with_unit(f"{r.u:.2g}", unit),
                "z": "" if z is None else f"{z:+.2f}",
                "remark": r.reason or "",
                "used": r.used,
                "place": str(r.reading.place),
            }
        )
    alt = f"Normalised residuals of {site_name(s)}; the figures stand in the table."
    figures = _figure(site_residuals(s), alt, "Normalised residuals: filled TE, open TM, crosses readings left out.")
    return {"name": site_name(s), "state": _STATE[s.status], "status": s.status.value, "rows": rows, "figures": figures,
            "flags": [f.text for f in s.flags], "fit": _fit_words(s)}  # fmt: skip


def _fit_words(s: SiteResult) -> str:
    if s.fit is None:
        return "Not fitted."
    p = "" if s.fit.p_value is None else f", p {_probability(s.fit.p_value, '= ')}"
    return f"χ² = {s.fit.chi2:.1f} for {s.fit.dof} degrees of freedom{p}."


def _budget(b: Budget) -> Part:
    top = max((s.fraction for s in b.shares), default=1.0)
    shares = [
        {"source": s.source, "kind": s.kind, "u": format_u(s.u), "percent": f"{100 * s.fraction:.1f}",
         "width": f"{100 * s.fraction / top:.1f}"}
        for s in b.shares
    ]  # fmt: skip
    over = f", root mean square over {count_words(b.sites, 'site')}" if b.sites > 1 else ""
    unit = f" ({unit_mark(b.column.unit)})" if b.column.unit != "1" else ""
    return {
        "name": b.column.heading,
        "u": format_u(b.u),
        "u_random": format_u(b.u_random),
        "u_shared": format_u(b.u_shared),
        "shares": shares,
        "over": over,
        "unit": unit,
    }


def _rival(s: SiteResult, k: int) -> Part:
    r = s.rivals[k]
    numbers = [f"{column_of(e).name}: {with_unit(expanded(e.value, e.u), e.unit)}" for e in r.estimates]
    return {
        "site": site_name(s),
        "orders": r.orders,
        "probability": _probability(r.probability),
        "delta": f"{r.delta_chi2:.1f}",
        "numbers": numbers,
    }


def _stray(s: SiteResult, r: FittedReading) -> Part:
    unit = reading_unit(r)
    value = with_unit(format_number(r.reading.value, _READING_DIGITS[unit]), unit)
    return {
        "site": site_name(s),
        "reading": f"{r.reading.pol} {value} at {wavelength_nm(r):g} nm",
        "why": r.reason or "left out",
        "place": str(r.reading.place),
    }


def _shared(e: Estimate) -> Part:
    stated = moved = "none stated"
    if e.prior is not None:
        stated = with_unit(format_value(e.prior[0], e.prior[1], COVERAGE), e.unit)
        moved = f"{(e.value - e.prior[0]) / e.prior[1]:+.2f} u" if e.prior[1] > 0 else ""
    return {
        "name": column_of(e).name,
        "stated": stated,
        "result": with_unit(expanded(e.value, e.u), e.unit),
        "moved": moved,
        "origin": "sharpened by the readings" if e.origin == "fitted" else "as stated",
    }
