"""The rows of one table into readings.

`row_kinds` says which rows hold readings; here everything that does not fit in one of them is a fault, and all faults
of a row are told at once.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Callable
from dataclasses import dataclass
from typing import TypeVar, cast

from ..records import Quantity, Reading
from . import fields
from .figures import Unreadable, clean, split_note
from .grid import Cell, Findings, is_blank
from .modes import mode_label, polarisation
from .plan import Plan, ReadingColumn
from .row_kinds import RowSorter
from .titles import Context

T = TypeVar("T")
V = TypeVar("V", str, int, float)
ONE_LASER = 0.002  # relative: 633 in a title and 632.8 in a row are the same laser, 632.8 and 635 are not
REQUIRED = {
    "lot": "a name is required",
    "wafer": "a name is required",
    "site": "a name is required",
    "tool": "a name is required",
    "x_mm": "a number of millimetres is required",
    "y_mm": "a number of millimetres is required",
    "temperature_C": "a temperature is required",
    "measured_at": "a date is required",
    "wavelength": "one wavelength is required",
    "pol": "TE or TM is required",
    "mode": "a whole mode number from 0, a label such as TE0, or a blank is required",
    "u": "a standard uncertainty above zero, or a blank, is required",
    "angle": "an angle in degrees is required",
    "effective_index": "an effective index is required",
}


@dataclass(frozen=True, slots=True)
class RowFacts:
    """What a row says apart from its readings."""

    site: tuple[str | None, str | None, str | None]
    wavelength_um: float | None
    pol: str | None
    order: int | None
    u: float | None
    extras: dict[str, object]


class RowReader:
    """Reads one table row by row, carrying down what the rules of `identity` allow."""

    def __init__(self, plan: Plan, context: Context, findings: Findings) -> None:
        self.plan = plan
        self.grid = plan.table.grid
        self.findings = findings
        self.sorter = RowSorter(plan, context, findings)
        self.heading_has_unit = (
            plan.single["wavelength"].heading.unit is not None if "wavelength" in plan.single else False
        )
        self.carried: dict[str, object] = {}
        self.carried_for: tuple[str | None, str | None, str | None] | None = None
        self.blank_cells = 0
        self.notes: list[str] = []
        self.s_or_p = False
        self.known: dict[str, dict[tuple[type, Cell], object]] = defaultdict(dict)

    def read(self) -> list[Reading]:
        """All readings of the table, top to bottom."""
        return [reading for row in self.sorter.data_rows() for reading in self._row(row)]

    def _row(self, row: int) -> list[Reading]:
        if row in self.grid.hidden_rows:
            self.findings.fault(
                self.grid.place(row),
                "a hidden row (or one filtered out) that holds a reading",
                "rows that can be seen are required",
                "unhide it or clear the filter, or delete the row",
            )
            return []
        before = len(self.findings.faults)
        self._refuse_shared_cells(row)
        facts = self._facts(row)
        found = [self._reading(row, column, facts) for column in self.plan.readings]
        return [reading for reading in found if reading is not None] if len(self.findings.faults) == before else []

    def _refuse_shared_cells(self, row: int) -> None:
        """A merged cell in a column of readings, modes or uncertainties, and formulas stored without their value."""
        for index, heading in self._number_columns():
            span = self.grid.merged.get((row, index)) if self.grid.merged else None
            if span is not None and (span.top, span.left) == (row, index):
                self.findings.fault(
                    self.grid.place(row, index, heading),
                    "a merged cell",
                    "one cell for each number is required",
                    "unmerge it",
                )
        if self.grid.unvalued:
            for column in self.plan.table.columns:
                if (row, column.index) in self.grid.unvalued and column.heading.meaning is not None:
                    self.findings.fault(
                        self.grid.place(row, column.index, column.heading.text),
                        "a formula stored without its value",
                        "a value is required",
                        "open the workbook in the spreadsheet, let it calculate and save it, or paste the values",
                    )

    def _number_columns(self) -> list[tuple[int, str]]:
        columns = [(c.index, c.heading) for c in self.plan.readings]
        return columns + [(c.index, c.heading.text) for k, c in self.plan.single.items() if k in ("mode", "u")]

    def _refuse(self, row: int, meaning: str, index: int | None, heading: str | None, problem: Unreadable) -> None:
        self.findings.fault(self.grid.place(row, index, heading), problem.was, REQUIRED[meaning], problem.remedy)

    def _field(self, row: int, meaning: str, read: Callable[[Cell], T]) -> T | None:
        """One single-valued field of a row; None where it is blank or, with a fault, unreadable."""
        column = self.plan.single.get(meaning)
        if column is None:
            return None
        value = self.grid.merged_down(row, column.index)
        if value is None:
            return None
        known = self.known[meaning]  # most cells of such a column repeat: each figure is read once
        key = (value.__class__, value)
        if key in known:
            return cast("T", known[key])
        if is_blank(value):
            return None
        try:
            found = read(value)
        except Unreadable as problem:
            self._refuse(row, meaning, column.index, column.heading.text, problem)
            return None
        if meaning != "measured_at":  # it may depend on a time of day in another column
            known[key] = found
        return found

    def _facts(self, row: int) -> RowFacts:
        style, units = self.plan.style, self.plan.units
        stated: dict[str, str] = {}
        faults = len(self.findings.faults)
        for level in self.sorter.identity.columns:
            value = self._field(row, level, fields.name)
            if value is not None:
                stated[level] = value
        site: tuple[str | None, str | None, str | None] = (None, None, None)
        if len(self.findings.faults) == faults:
            try:
                site = self.sorter.identity.row(stated)
            except Unreadable as problem:
                self._refuse(row, "site", None, None, problem)
        unit = units.get("wavelength", "nm")
        wavelength = self._field(
            row, "wavelength", lambda value: fields.wavelength_um(value, style, unit, self.heading_has_unit)
        )
        quantity = self.plan.readings[0].quantity
        u = self._field(
            row,
            "u",
            lambda value: None if fields.no_reading(value) else fields.uncertainty(value, style, units["u"], quantity),
        )
        pol, order = self._mode(row)
        return RowFacts(site, wavelength, pol, order, u, self._extras(row, site))

    def _mode(self, row: int) -> tuple[str | None, int | None]:
        """Polarisation and order from the two columns that can state them; a contradiction is a fault."""
        pol = self._field(row, "pol", self._polarisation)
        label = self._field(row, "mode", mode_label)
        from_label, order = label if label is not None else (None, None)
        if pol is not None and from_label is not None and pol != from_label:
            column = self.plan.single["mode"]
            self.findings.fault(
                self.grid.place(row, column.index, column.heading.text),
                f"mode label '{self.sorter.cell(row, 'mode')}' beside polarisation {pol}",
                "label and polarisation must agree",
                "correct one of the two",
            )
        return pol or from_label, order

    def _polarisation(self, value: Cell) -> str:
        if not isinstance(value, str):
            raise Unreadable(f"polarisation '{value}' is not known", "write TE or TM (s and p are understood too)")
        self.s_or_p |= clean(value)[:1] in "sSpP"
        return polarisation(value)

    def _extras(self, row: int, site: tuple[str | None, str | None, str | None]) -> dict[str, object]:
        """Position, time, temperature and tool; blanks take the value stated above for the same site (or wafer)."""
        style, units = self.plan.style, self.plan.units
        if self.carried_for is not None and site != self.carried_for:
            same_wafer = site[:2] == self.carried_for[:2]
            self.carried = {k: v for k, v in self.carried.items() if same_wafer and k not in ("x_mm", "y_mm")}
        self.carried_for = site
        found: dict[str, object | None] = {
            "x_mm": self._field(row, "x_mm", lambda v: fields.millimetres(v, style, units.get("x_mm", "mm"))),
            "y_mm": self._field(row, "y_mm", lambda v: fields.millimetres(v, style, units.get("y_mm", "mm"))),
            "temperature_C": self._field(
                row, "temperature_C", lambda v: fields.celsius(v, style, units.get("temperature_C", "C"))
            ),
            "tool": self._field(row, "tool", fields.name),
            "measured_at": self._field(row, "measured_at", lambda v: fields.moment(v, self.sorter.cell(row, "clock"))),
        }
        self.carried |= {key: value for key, value in found.items() if value is not None}
        return self.carried

    # --- one reading -------------------------------------------------------------------------------------------

    def _reading(self, row: int, column: ReadingColumn, facts: RowFacts) -> Reading | None:
        value = self.grid.cell(row, column.index)
        if fields.no_reading(value):
            self.blank_cells += 1
            return None
        if isinstance(value, str):
            value, note = split_note(clean(value))
            if note is not None:
                self.notes.append(f"row {row + 1}: '{note}'")
        angle = column.quantity == "angle"
        try:
            if angle:
                figure = fields.angle(value, self.plan.style, column.unit)
            else:
                figure = fields.effective_index(value, self.plan.style)
        except Unreadable as problem:
            self._refuse(row, column.quantity, column.index, column.heading, problem)
            return None
        wavelength = self._wavelength(row, column, facts)
        pol = self._agreed(row, column, "polarisation", column.pol, facts.pol) or self.sorter.context.pol
        order = self._agreed(row, column, "mode", column.order, facts.order)
        if pol is None and self.sorter.cell(row, "pol") in (None, ""):  # an unreadable one has had its fault
            self._refuse(row, "pol", self.plan.index("pol"), None, Unreadable("no polarisation", "fill in TE or TM"))
        if pol is None or wavelength is None:
            return None
        names = self.sorter.context.names
        extras = facts.extras
        temperature = extras.get("temperature_C", names.get("temperature_C"))
        return Reading(
            Quantity.ANGLE if angle else Quantity.EFFECTIVE_INDEX,
            figure,
            wavelength,
            pol,
            self.grid.place(row, column.index, column.heading),
            order,
            facts.u,
            *facts.site,
            x_mm=_float(extras.get("x_mm")),
            y_mm=_float(extras.get("y_mm")),
            measured_at=_text(extras.get("measured_at", fields.titled_moment(names.get("measured_at")))),
            temperature_C=_float(temperature),
            tool=_text(extras.get("tool", names.get("tool"))),
        )

    def _agreed(self, row: int, column: ReadingColumn, what: str, heading: V | None, stated: V | None) -> V | None:
        if heading is not None and stated is not None and heading != stated:
            self.findings.fault(
                self.grid.place(row, column.index, column.heading),
                f"the heading says {what} {heading}, the row {what} {stated}",
                "heading and row must agree",
                "correct one of the two",
            )
        return heading if heading is not None else stated

    def _wavelength(self, row: int, column: ReadingColumn, facts: RowFacts) -> float | None:
        stated = self._agreed(row, column, "wavelength (µm)", column.wavelength_um, facts.wavelength_um)
        titled = self.sorter.context.wavelengths_um
        index = self.plan.index("wavelength")
        if stated is not None:
            if titled and not any(abs(stated - value) <= ONE_LASER * value for value in titled):
                listed = ", ".join(f"{value * 1e3:g} nm" for value in titled)
                self.findings.fault(
                    self.grid.place(row, index if index is not None else column.index),
                    f"a wavelength of {stated * 1e3:g} nm below a title (or sheet name) that says {listed}",
                    "title and rows must agree",
                    "correct one of the two",
                )
            return stated
        unread = index is not None and not is_blank(self.grid.merged_down(row, index))
        if len(titled) == 1 and not unread:
            return titled[0]
        if not unread:
            self._refuse(
                row,
                "wavelength",
                index,
                None,
                Unreadable("no wavelength", "fill it in (blanks are not filled from above)"),
            )
        return None


def _float(value: object) -> float | None:
    return float(value) if isinstance(value, int | float | str) else None


def _text(value: object) -> str | None:
    return None if value is None else str(value)
