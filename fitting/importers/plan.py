"""From the headings of a table to a plan: which column feeds which field, in which unit, and what is missing.

Rules worth knowing:
- An angle and an effective index for the same mode: the angle is used, the index beside it is not.
- A hidden column that would be used, or two columns that mean the same, are refused: nobody could see what was taken.
- Angles under a heading without a unit are degrees; if all of four or more lie below pi/2 the unit must be stated, for
  they may be radians. Under a heading that says degrees small angles are taken as they stand.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, replace

from .figures import Unreadable, angle_deg, decimal_style, looks_numeric, number
from .grid import Findings, Grid, is_blank
from .headings import READINGS, unit_of
from .layout import Column, Table, repeated
from .titles import Context
from .vocabulary import AMBIGUOUS, UNIT_WORDS, UNITS_OF, WORDS, normal

NM_RANGE = (150.0, 20_000.0)  # wavelengths a prism coupler can meet, generously; outside it the unit is wrong
TO_MM = {"mm": 1.0, "cm": 10.0, "um": 1e-3}
SINGLE = (
    "lot",
    "wafer",
    "site",
    "x_mm",
    "y_mm",
    "measured_at",
    "clock",
    "temperature_C",
    "tool",
    "wavelength",
    "pol",
    "mode",
    "u",
)


@dataclass(frozen=True, slots=True)
class ReadingColumn:
    """One column of readings. quantity: 'angle' or 'effective_index'; pol, order, wavelength_um as its heading says."""

    index: int
    heading: str
    quantity: str
    unit: str
    pol: str | None
    order: int | None
    wavelength_um: float | None


@dataclass(frozen=True)
class Plan:
    """How the rows of one table are read. `single`: field to column; units: field to unit."""

    table: Table
    single: dict[str, Column]
    units: dict[str, str]
    readings: tuple[ReadingColumn, ...]
    style: str | None

    def index(self, meaning: str) -> int | None:
        column = self.single.get(meaning)
        return None if column is None else column.index


def make_plan(table: Table, context: Context, findings: Findings) -> Plan | None:
    """Check the headings of a table; None, with faults, where its rows cannot be read."""
    before = len(findings.faults)
    if not _right_kind(table, findings):
        return None
    _refuse_repeats(table, findings)
    _refuse_air_wavelengths(table, findings)
    single = {column.heading.meaning: column for column in table.columns if column.heading.meaning in SINGLE}
    plan = Plan(table, {str(k): v for k, v in single.items()}, {}, (), _style(table))
    plan = replace(plan, readings=_reading_columns(plan, context, findings))
    plan = replace(plan, units=_units(plan, findings))
    _needed(plan, context, findings)
    _hidden(plan, findings)
    _expanded(plan, findings)
    return plan if len(findings.faults) == before else None


def _right_kind(table: Table, findings: Findings) -> bool:
    place = table.grid.place(table.header)
    inner = table.having("inner_angle")
    if table.having("later") and not table.having("angle", "effective_index"):
        names = ", ".join(f"'{column.heading.text}'" for column in table.having("later"))
        findings.fault(
            place,
            f"a table of ring, fringe or spectrum data ({names})",
            "this version reads prism-coupler tables only",
            "keep it for a later version and give the table of angles or effective indices",
        )
        return False
    if table.having("air_wavelength"):
        column = table.having("air_wavelength")[0]
        findings.fault(
            table.grid.place(table.header, column.index, column.heading.text),
            "wavelengths in air",
            "which medium wavelengths are in is said in one place only, the stack file (vacuum unless it says air)",
            'put wavelength_reference = "air" into the stack file and call the column wavelength, or give vacuum ones',
        )
        return False
    if not table.having(*READINGS):
        was = "no column of readings" if not inner else f"'{inner[0].heading.text}' is the angle inside the prism"
        hints = [AMBIGUOUS[normal(c.heading.text)] for c in table.columns if normal(c.heading.text) in AMBIGUOUS]
        findings.fault(
            place,
            f"{was} (headings: {', '.join(column.heading.text for column in table.columns)})",
            "a column angle_deg (on the entrance face, from its normal) or effective_index is required",
            hints[0] if hints else "name the column so, or export the angle as the instrument shows it",
        )
        return False
    return True


def _refuse_air_wavelengths(table: Table, findings: Findings) -> None:
    for column in table.having("air_wavelength"):
        findings.fault(
            table.grid.place(table.header, column.index, column.heading.text),
            "wavelengths in air",
            "vacuum wavelengths are required unless the stack file says otherwise (they differ by 3 in 10,000)",
            'head it wavelength_nm and write wavelength_reference = "air" in the stack file, or convert it',
        )


def _refuse_repeats(table: Table, findings: Findings) -> None:
    for first, second in repeated(table.columns):
        name = table.grid.column_name(first.index)
        findings.fault(
            table.grid.place(table.header, second.index, second.heading.text),
            f'it means the same as column {name} "{first.heading.text}" ({WORDS[str(second.heading.meaning)]})',
            "one column for each meaning is required",
            "rename or delete one of the two",
        )


def _style(table: Table) -> str | None:
    numeric = [c.index for c in table.columns if c.heading.meaning in UNITS_OF or c.heading.meaning == "reading"]
    rows = table.grid.rows[table.start : table.stop]
    return decimal_style(
        cells[index] for index in numeric for cells in rows if index < len(cells) and cells[index].__class__ is str
    )


def _reading_columns(plan: Plan, context: Context, findings: Findings) -> tuple[ReadingColumn, ...]:
    table = plan.table
    found: list[ReadingColumn] = []
    unnamed = [column for column in table.having("reading") if column.heading.unit is None]
    guessed = _guess_quantity(plan, unnamed, context, findings)
    for column in table.having(*READINGS):
        heading = column.heading
        quantity, unit = heading.meaning, heading.unit or _unit_row(table).get(column.index)
        if quantity == "reading":
            quantity = {"1": "effective_index", None: guessed}.get(unit, "angle")
        if quantity == context.quantity and unit is None:
            unit = context.unit
        if quantity == "angle" and unit is None:
            unit = _assumed_degrees(plan, column, findings)
        found.append(
            ReadingColumn(
                column.index,
                heading.text,
                str(quantity),
                unit or "1",
                heading.pol,
                heading.order,
                heading.wavelength_um,
            )
        )
    angles = {(c.pol, c.order, c.wavelength_um) for c in found if c.quantity == "angle"}
    doubled = [c for c in found if c.quantity == "effective_index" and (c.pol, c.order, c.wavelength_um) in angles]
    for beside in doubled:
        findings.remark(
            table.grid.place(table.header),
            f'column {table.grid.column_name(beside.index)} "{beside.heading}" is not used:'
            " the angle beside it is what was measured",
        )
    return tuple(kept for kept in found if kept not in doubled)


def _guess_quantity(plan: Plan, columns: list[Column], context: Context, findings: Findings) -> str:
    """What columns headed TE0, TE1, ... hold: the title says it, or numbers that can be angles only."""
    if context.quantity is not None or not columns:
        return context.quantity or "angle"
    units = _unit_row(plan.table)
    if all(column.index in units for column in columns):
        return "effective_index" if units[columns[0].index] == "1" else "angle"
    values = []
    for column in columns:
        for row in range(plan.table.start, plan.table.stop):
            value = plan.table.grid.cell(row, column.index)
            if looks_numeric(value):
                try:
                    values.append(angle_deg(value, plan.style, "deg"))
                except Unreadable:
                    continue  # the row itself will be refused with this reason when it is read
    if any(not 1.0 <= value < 5.0 for value in values) or not values:
        return "angle"
    place = plan.table.grid.place(plan.table.header, columns[0].index, columns[0].heading.text)
    findings.fault(
        place,
        "numbers between 1 and 5 that can be angles or effective indices",
        "the heading must say which",
        "head the columns as 'TE0 (deg)' or 'N TE0'",
    )
    return "angle"


def _assumed_degrees(plan: Plan, column: Column, findings: Findings) -> str:
    grid, table = plan.table.grid, plan.table
    numbers = [v for row in range(table.start, table.stop) if looks_numeric(v := grid.cell(row, column.index))]
    values = []
    for value in numbers:
        try:
            values.append(angle_deg(value, plan.style, "deg"))
        except Unreadable:
            continue  # refused with its reason when the row is read
    if len(values) >= 4 and all(abs(value) < math.pi / 2 for value in values):
        findings.fault(
            grid.place(table.header, column.index, column.heading.text),
            f"{len(values)} angles, all below 1.571, without a unit",
            "degrees are required, and these may be radians",
            "head the column angle_deg if they are degrees, else convert them",
        )
    else:
        findings.remark(grid.place(table.header), f"'{column.heading.text}' states no unit: read as degrees")
    return "deg"


def _unit_row(table: Table) -> dict[int, str]:
    """Units in the first row under the headings, where that row holds nothing but units."""
    row = table.start
    while row < table.stop and all(is_blank(value) for value in table.grid.rows[row]):
        row += 1
    if row >= table.stop:
        return {}
    units = {}
    for index, value in enumerate(table.grid.rows[row]):
        if is_blank(value):
            continue
        unit = unit_of(value)
        if unit is None:
            return {}
        if value.strip() != "-":
            units[index] = unit
    return units


def unit_row_index(table: Table) -> int | None:
    """The row that `_unit_row` was read from, to be left out of the data."""
    if not _unit_row(table):
        return None
    row = table.start
    while all(is_blank(value) for value in table.grid.rows[row]):
        row += 1
    return row


def _units(plan: Plan, findings: Findings) -> dict[str, str]:
    table = plan.table
    below = _unit_row(table)
    units: dict[str, str] = {}
    for column in table.columns:
        meaning = str(column.heading.meaning)
        if meaning not in UNITS_OF and meaning != "reading":
            continue
        unit, under = column.heading.unit, below.get(column.index)
        place = table.grid.place(table.header, column.index, column.heading.text)
        if unit is not None and under is not None and unit != under:
            findings.fault(
                place,
                f"the heading says {UNIT_WORDS[unit]}, the row below it {UNIT_WORDS[under]}",
                "one unit is required",
                "correct one of the two",
            )
        unit = unit or under
        kind = next((c.quantity for c in plan.readings if c.index == column.index), meaning)
        if unit is not None and unit not in UNITS_OF.get(kind, (unit,)):
            allowed = " or ".join(UNIT_WORDS[name] for name in UNITS_OF[kind])
            findings.fault(
                place,
                f"the column is in {UNIT_WORDS[unit]}",
                f"a {WORDS[kind]} in {allowed} is required",
                "convert the column, or correct the heading"
                if unit in ("rad", "mrad", "gon")
                else "correct the heading",
            )
        if unit is not None and meaning in SINGLE:
            units[meaning] = unit
    if "wavelength" in plan.single and "wavelength" not in units:
        units["wavelength"] = _wavelength_unit(plan, findings)
    if "u" in plan.single:
        units["u"] = _u_unit(plan, units.get("u"), findings)
    return units


def _wavelength_unit(plan: Plan, findings: Findings) -> str:
    """nm or µm for a column of wavelengths without a unit, by what is possible; refused where both or neither is."""
    column = plan.single["wavelength"]
    table = plan.table
    values = []
    for row in range(table.start, table.stop):
        value = table.grid.cell(row, column.index)
        if looks_numeric(value):
            try:
                values.append(number(value, plan.style, 0.2, 3000.0))
            except Unreadable:
                continue  # a figure with its own unit, or refused with its reason when the row is read
    nm = not values or all(200.0 <= value <= 3000.0 for value in values)
    if nm or all(0.2 <= value <= 3.0 for value in values):
        unit = "nm" if nm else "um"
        said = f"'{column.heading.text}' states no unit: read as {UNIT_WORDS[unit]} unless a cell has its own"
        findings.remark(table.grid.place(table.header), said)
        return unit
    odd = next(value for value in values if not 200.0 <= value <= 3000.0)
    findings.fault(
        table.grid.place(table.header, column.index, column.heading.text),
        f"wavelengths without a unit, {odd:g} among them",
        "nm (200 to 3000) or µm (0.2 to 3) throughout is required",
        "head the column wavelength_nm, or give its unit",
    )
    return "nm"


def _u_unit(plan: Plan, stated: str | None, findings: Findings) -> str:
    quantities = {column.quantity for column in plan.readings}
    reading_units = {column.unit for column in plan.readings}
    column = plan.single["u"]
    place = plan.table.grid.place(plan.table.header, column.index, column.heading.text)
    if len(quantities) > 1:
        findings.fault(
            place,
            "one column of uncertainties beside angles and effective indices",
            "readings of one kind are required where u is given",
            "put the two kinds in two tables",
        )
        return "1"
    wants_index = quantities == {"effective_index"}
    if stated is not None and (stated == "1") != wants_index and quantities:
        kind = "effective indices" if wants_index else "angles"
        findings.fault(
            place,
            f"an uncertainty in {UNIT_WORDS[stated]} beside {kind}",
            "the unit of the reading is required",
            "correct the heading or convert the column",
        )
    if stated is not None:
        return stated
    unit = next(iter(reading_units), "deg")
    return "deg" if unit == "dms" else unit


def _needed(plan: Plan, context: Context, findings: Findings) -> None:
    place = plan.table.grid.place(plan.table.header)
    if "wavelength" not in plan.single and any(column.wavelength_um is None for column in plan.readings):
        known = context.wavelengths_um
        if len(known) > 1:
            listed = ", ".join(f"{value * 1e3:g} nm" for value in known)
            findings.fault(
                place,
                f"the title names several wavelengths ({listed}) and no column says which row has which",
                "one wavelength for each reading is required",
                "add a column wavelength_nm",
            )
        elif not (known or plan.table.having("air_wavelength") or _says_wavelength_below(plan)):
            findings.fault(
                place,
                "no wavelength: no column, and none in the title, the sheet's name or the headings",
                "a wavelength for each reading is required",
                "add a column wavelength_nm, or a row 'λ = 632.8 nm' above the table",
            )
    if not ({"pol", "mode"} & plan.single.keys()) and context.pol is None and any(c.pol is None for c in plan.readings):
        findings.fault(
            place,
            "no polarisation: no column, and none in the title, the sheet's name or the headings",
            "TE or TM for each reading is required",
            "add a column pol, or write the modes as TE0, TM0",
        )


def _says_wavelength_below(plan: Plan) -> bool:
    """Whether lines between the rows state the wavelength, as in tables cut into sections."""
    from .titles import from_text

    for row in range(plan.table.start, plan.table.stop):
        filled = [value for value in plan.table.grid.rows[row] if not is_blank(value)]
        if len(filled) == 1 and isinstance(filled[0], str):
            return bool(from_text(filled[0]).wavelengths_um)
        if filled:
            return False
    return False


def _hidden(plan: Plan, findings: Findings) -> None:
    grid: Grid = plan.table.grid
    used = {column.index: column.heading.text for column in plan.single.values()}
    used |= {column.index: column.heading for column in plan.readings}
    for index in sorted(used.keys() & grid.hidden_columns):
        if any(not is_blank(grid.cell(row, index)) for row in range(plan.table.start, plan.table.stop)):
            findings.fault(
                grid.place(plan.table.header, index, used[index]),
                "a hidden column that holds data",
                "data that can be seen is required",
                "unhide the column, or delete it",
            )


def _expanded(plan: Plan, findings: Findings) -> None:
    column = plan.single.get("u")
    if column is None:
        return
    others = " ".join(c.heading.text for c in plan.table.columns if c is not column)
    capital = re.match(r"U(?![A-Za-z])", column.heading.text) is not None and others != others.upper()
    if column.heading.expanded or capital:
        findings.fault(
            plan.table.grid.place(plan.table.header, column.index, column.heading.text),
            "the heading speaks of an expanded uncertainty"
            if column.heading.expanded
            else "a capital U is an expanded uncertainty",
            "a standard uncertainty (k = 1) is required",
            "divide by k and head the column u",
        )
