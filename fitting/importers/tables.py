"""The front door of the importers: all files, all sheets, all tables, with every fault at once."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

from ..records import Fault, InputFile, Place, Reading
from .crosschecks import cross_check
from .grid import Findings, Grid, is_blank
from .headings import READINGS
from .layout import Table, find_tables, title_context
from .outcome import ColumnReport, Imported, TableReport
from .plan import Plan, make_plan
from .rows import RowReader
from .sources import read_source
from .titles import Context, from_sheet_name
from .vocabulary import AMBIGUOUS, UNIT_WORDS, WORDS, normal

NOT_DATA = "not data"  # a sheet whose first filled cell begins so is left out: instructions, examples, scrap
FAULTS_OF_A_KIND = 10  # the rest of the same fault in the same column is counted, not repeated


def read_tables(paths: Sequence[Path]) -> Imported:
    """Read prism-coupler tables from xlsx, csv, tsv and txt files (the text ones also as gz).

    Never raises for bad content: whatever is wrong, in whichever file, is in `faults`, all of it; a fit must be
    refused while there are any. Rows left out by rule are in `skipped` with the reason.
    """
    findings = Findings()
    inputs: list[InputFile] = []
    reports: list[TableReport] = []
    batches: list[list[Reading]] = []
    seen: dict[str, str] = {}
    for path in paths:
        grids, source = read_source(Path(path), findings)
        if source is None:
            continue
        if source.sha256 in seen and grids:
            findings.fault(
                Place(source.file),
                f"the same content as {seen[source.sha256]}",
                "each file once is required",
                "name it once",
            )
            continue
        seen[source.sha256] = source.file
        inputs.append(source)
        _read_file(source.file, grids, findings, reports, batches)
    readings = [reading for batch in _named_apart(batches, reports) for reading in batch]
    cross_check(readings, findings)
    return Imported(
        tuple(readings),
        tuple(reports),
        tuple(_condensed(findings.faults)),
        tuple(findings.skipped),
        tuple(inputs),
        tuple(findings.remarks),
    )


def _read_file(
    name: str, grids: list[Grid], findings: Findings, reports: list[TableReport], batches: list[list[Reading]]
) -> None:
    faults, tables = len(findings.faults), 0
    first_batch = len(batches)
    for grid in grids:
        tables += _read_grid(grid, findings, reports, batches)
    if not grids or len(findings.faults) > faults:
        return
    if tables == 0:
        findings.fault(
            Place(name),
            "no table of readings: no row of headings with a column of angles or effective indices was found",
            "headings such as wafer, site, wavelength_nm, pol, mode, angle_deg are required",
            "check that this is the right file and sheet; `template prism` writes a blank workbook",
        )
    elif not any(batches[first_batch:]):
        findings.fault(
            Place(name), "headings but no reading below them", "at least one reading is required", "fill the table in"
        )


def _read_grid(grid: Grid, findings: Findings, reports: list[TableReport], batches: list[list[Reading]]) -> int:
    """All tables of one sheet; returns how many were found."""
    place = Place(grid.file, grid.sheet)
    first = next((value for cells in grid.rows for value in cells if not is_blank(value)), None)
    if isinstance(first, str) and first.strip().casefold().startswith(NOT_DATA):
        findings.remark(place, "left out: its first cell begins with NOT DATA")
        return 0
    tables = find_tables(grid)
    full = [table for table in tables if table.having(*READINGS, "later", "inner_angle")]
    tables = full or tables
    if not tables:
        if first is not None:
            findings.remark(place, "left out: no table of readings on it")
        return 0
    if grid.hidden_sheet:
        findings.fault(
            place,
            "a hidden sheet with a table of readings",
            "sheets that can be seen are required",
            "unhide or delete it",
        )
        return len(tables)
    context = from_sheet_name(grid.sheet) if grid.sheet else Context()
    for position, table in enumerate(tables):
        row_mates = [other for other in tables if other.top == table.top]
        own = title_context(row_mates, row_mates.index(table)).over(context)
        batches.append(_read_table(table, own, findings, reports, position == 0))
        if table is row_mates[-1]:
            context = title_context(row_mates, 0).over(context)
    return len(tables)


def _read_table(
    table: Table, context: Context, findings: Findings, reports: list[TableReport], first: bool
) -> list[Reading]:
    local = Findings()
    plan = make_plan(table, context, local)
    readings: list[Reading] = []
    if plan is not None:
        reader = RowReader(plan, context, local)
        readings = reader.read()
        _remarks(plan, context, readings, reader, local)
    remarks = [text for _, text in local.remarks]
    if first:
        remarks = [*table.grid.remarks, *remarks]
    reports.append(
        TableReport(
            table.grid.file,
            table.grid.sheet,
            table.header + 1,
            tuple(_columns(table, plan)),
            len(readings),
            len({reading.site_key for reading in readings}),
            len(local.faults),
            tuple(local.skipped),
            tuple(remarks),
        )
    )
    findings.faults += local.faults
    findings.skipped += local.skipped
    return readings


def _columns(table: Table, plan: Plan | None) -> list[ColumnReport]:
    used = {column.index: column for column in plan.readings} if plan is not None else {}
    found = []
    for column in table.columns:
        heading, reading = column.heading, used.get(column.index)
        meaning, unit = heading.meaning, heading.unit
        if reading is not None:
            meaning, unit = reading.quantity, reading.unit
        elif plan is not None and meaning in plan.units:
            unit = plan.units[meaning]
        name = table.grid.column_name(column.index)
        if meaning is None or (plan is not None and meaning in READINGS and reading is None):
            hint = AMBIGUOUS.get(normal(heading.text))
            found.append(ColumnReport(name, heading.text, None, None, "not used" + (f" ({hint})" if hint else "")))
            continue
        words = WORDS[meaning] + (f" in {UNIT_WORDS[unit]}" if unit not in (None, "1") else "")
        labels = [heading.pol, None if heading.order is None else f"mode {heading.order}"]
        if heading.wavelength_um is not None:
            labels.append(f"{heading.wavelength_um * 1e3:g} nm")
        words += "".join(f", {label}" for label in labels if label) + _conversion(meaning, unit)
        found.append(ColumnReport(name, heading.text, meaning, unit, words))
    return found


def _conversion(meaning: str, unit: str | None) -> str:
    kept = {"wavelength": "um", "x_mm": "mm", "y_mm": "mm", "temperature_C": "C", "angle": "deg", "u": "deg"}.get(
        meaning
    )
    if unit in (None, "1") or kept is None or unit == kept or meaning == "wavelength":
        return ""
    return f", converted to {UNIT_WORDS[kept]}"


def _remarks(plan: Plan, context: Context, readings: list[Reading], reader: RowReader, local: Findings) -> None:
    place = plan.table.grid.place(plan.table.header)
    titles = [f"{value * 1e3:g} nm" for value in context.wavelengths_um] if "wavelength" not in plan.single else []
    titles += (
        [context.pol] if context.pol and any(c.pol is None for c in plan.readings) and "pol" not in plan.single else []
    )
    titles += [f"{key} {value}" for key, value in context.names.items() if key not in plan.single]
    if titles:
        local.remark(place, f"from the title or sheet name: {', '.join(titles)}")
    orders = {reading.order for reading in readings}
    if orders and None not in orders and 0 not in orders:
        local.remark(place, "no reading is labelled mode 0; modes are counted from 0 here")
    angles = [abs(reading.value) for reading in readings if reading.quantity.value == "angle_deg"]
    if len(angles) >= 4 and max(angles) < 1.5708:
        local.remark(place, "all angles lie below 1.571; they are taken as degrees, as the heading says")
    if len(plan.readings) > 1 and reader.blank_cells:
        local.remark(place, f"cells without a reading in rows that hold others: {reader.blank_cells}")
    if reader.notes:
        local.remark(place, "notes in cells of readings: " + "; ".join(reader.notes[:FAULTS_OF_A_KIND]))
    if reader.s_or_p:
        local.remark(place, "polarisation s is read as TE and p as TM (as seen from the film plane)")
    hidden = [c.heading.text for c in plan.table.columns if c.index in plan.table.grid.hidden_columns]
    if hidden:
        local.remark(place, f"hidden columns, not used: {', '.join(hidden)}")


def _named_apart(batches: list[list[Reading]], reports: list[TableReport]) -> list[list[Reading]]:
    """Tables without lot, wafer and site are one site each; where there are several, each is named by its place."""
    nameless = [i for i, batch in enumerate(batches) if batch and all(not any(r.site_key) for r in batch)]
    if len(nameless) < 2:
        return batches
    per_sheet: dict[tuple[str, str | None], int] = defaultdict(int)
    for index, report in enumerate(reports):
        per_sheet[report.file, report.sheet] += index in nameless
    for index in nameless:
        report = reports[index]
        name = report.sheet or Path(report.file).name
        if per_sheet[report.file, report.sheet] > 1:
            name = f"{name} row {report.header_row}"
        batches[index] = [replace(reading, site=name) for reading in batches[index]]
        text = f"no lot, wafer or site: taken as one site, named '{name}'"
        reports[index] = replace(report, remarks=(*report.remarks, text))
    return batches


def _condensed(faults: list[Fault]) -> list[Fault]:
    """At most FAULTS_OF_A_KIND of one fault in one column, then how many more and where."""
    groups: dict[tuple[object, ...], list[Fault]] = defaultdict(list)
    for fault in faults:
        groups[fault.place.file, fault.place.sheet, fault.place.column, fault.required].append(fault)
    kept = []
    for same in groups.values():
        kept += same[:FAULTS_OF_A_KIND]
        more = same[FAULTS_OF_A_KIND:]
        if more:
            last = more[-1]
            place = replace(last.place, row=more[0].place.row)
            kept.append(
                Fault(place, f"{len(more)} more of this kind, to row {last.place.row}", last.required, last.remedy)
            )
    return kept
