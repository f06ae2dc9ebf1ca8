"""Which rows of a table hold readings, and what the others say.

A row is left out, and listed, when it holds no reading (blank, or a mark such as "no dip", "-", "n/a"), when it is a
summary (mean, sd, ...), a repeated heading, a row of units, or a note. A line of one text cell that names a
wavelength, polarisation, lot, wafer or site holds for the rows below it.
"""

from __future__ import annotations

from collections.abc import Iterator

from . import fields
from .figures import Unreadable, clean, looks_numeric
from .grid import Cell, Findings, is_blank
from .identity import LEVELS, Identity
from .plan import Plan, unit_row_index
from .titles import Context, from_text
from .vocabulary import NO_READING, is_summary


class RowSorter:
    """Tells rows of readings from the rest; `context` and `identity` change as lines between the rows say so."""

    def __init__(self, plan: Plan, context: Context, findings: Findings) -> None:
        self.plan = plan
        self.grid = plan.table.grid
        self.context = context
        self.findings = findings
        filled = tuple(level for level in LEVELS if self._has_entries(plan.index(level)))
        self.identity = Identity(filled, {k: v for k, v in context.names.items() if k in LEVELS})
        self.headings = {self.grid.rows[row] for row in range(plan.table.top, plan.table.header + 1)}
        self.unit_row = unit_row_index(plan.table)

    def _has_entries(self, index: int | None) -> bool:
        table = self.plan.table
        return index is not None and any(
            not is_blank(self.grid.cell(row, index)) for row in range(table.start, table.stop)
        )

    def data_rows(self) -> Iterator[int]:
        """The rows that hold readings, top to bottom; the others are dealt with on the way."""
        table = self.plan.table
        for row in range(table.start, table.stop):
            filled = [value for value in self.grid.rows[row][table.left : table.right] if not is_blank(value)]
            if filled:
                if self._is_data(row, filled):
                    yield row
            elif not self._inside_merge(row):
                self.identity.blank_row()

    def _inside_merge(self, row: int) -> bool:
        return bool(self.grid.merged) and any(
            not is_blank(self.grid.merged_down(row, c.index)) for c in self.plan.table.columns
        )

    def cell(self, row: int, meaning: str) -> Cell:
        """The cell of a single-valued field, or None where the table has no such column."""
        index = self.plan.index(meaning)
        return None if index is None else self.grid.merged_down(row, index)

    def _is_data(self, row: int, filled: list[Cell]) -> bool:
        """Whether a row is to be read; if not, it is listed with the reason, and lines that name things are heeded."""
        place = self.grid.place(row)
        summary = self._summary_word(row, filled[0])
        if row == self.unit_row or self.grid.rows[row] in self.headings or summary:
            reason = f"summary row ('{summary}')" if summary else "the heading repeated"
            self.findings.skip(place, "units of the columns" if row == self.unit_row else reason)
            return False
        if self.grid.is_text and not self._whole(row, len(filled)):
            return False
        holds = [c for c in self.plan.readings if not fields.no_reading(self.grid.cell(row, c.index))]
        unvalued = [c for c in self.plan.readings if (row, c.index) in self.grid.unvalued]
        if len(filled) == 1 and isinstance(filled[0], str) and not looks_numeric(filled[0]) and not unvalued:
            self._line(row, filled[0])
            return False
        if holds or unvalued:
            return True
        self._without_reading(row, filled)
        return False

    def _summary_word(self, row: int, first: Cell) -> str | None:
        candidates = [first] + [
            self.grid.cell(row, i) for k in (*LEVELS, "mode") if (i := self.plan.index(k)) is not None
        ]
        return next((value for value in candidates if isinstance(value, str) and is_summary(value)), None)

    def _whole(self, row: int, filled: int) -> bool:
        """Whether a text row has as many fields as the heading; a lost or surplus separator shifts every number."""
        cells = self.grid.rows[row]
        expected = len(self.grid.rows[self.plan.table.header])
        surplus = any(not is_blank(value) for value in cells[expected:])
        if filled == 1 or (len(cells) >= expected and not surplus):
            return True
        self.findings.fault(
            self.grid.place(row),
            f"{len(cells)} fields under a heading of {expected}",
            "as many fields as headings are required",
            "look for a missing separator, or a decimal comma in a file separated by commas (then use semicolons)",
        )
        return False

    def _line(self, row: int, text: str) -> None:
        """A row with one text cell: it names what follows, or it is a note."""
        place = self.grid.place(row)
        left = self.plan.table.left
        index = next(i for i, value in enumerate(self.grid.rows[row]) if i >= left and not is_blank(value))
        level = next((name for name in LEVELS if self.plan.index(name) == index), None)
        said = from_text(text)
        short = len(text.split()) <= 2 and any(mark.isdigit() for mark in text)
        names = {k: v for k, v in said.names.items() if k in LEVELS}
        if said.wavelengths_um or names or (said.pol and len(text.split()) <= 3):
            self.context = said.over(self.context)
            self.identity.given = {k: v for k, v in self.context.names.items() if k in LEVELS}
            self.identity.heading({k: v for k, v in names.items() if k in self.identity.columns})
            self.findings.skip(place, f"line '{text}', heeded for the rows below it")
        elif level is not None and short:
            self.identity.heading({level: fields.name(text)})
            self.findings.skip(place, f"{level} '{text}' named for the rows below it")
        elif clean(text).casefold() in NO_READING:
            self.findings.skip(place, "no reading")
        else:
            self.findings.skip(place, f"note ('{text}')")

    def _without_reading(self, row: int, filled: list[Cell]) -> None:
        place = self.grid.place(row)
        marks = [str(v) for c in self.plan.readings if not is_blank(v := self.grid.cell(row, c.index))]
        try:
            stated = self._stated(row)
        except Unreadable as problem:
            self.findings.skip(place, f"no reading ({problem.was})")
            return
        others = len(filled) - len([k for k in LEVELS if not is_blank(self.cell(row, k))])
        if stated and not marks and others == 0:
            self.identity.heading(stated)
            self.findings.skip(
                place, "names only, heeded for the rows below: " + ", ".join(f"{k} {v}" for k, v in stated.items())
            )
            return
        if stated:
            self.identity.heading(stated)
        self.findings.skip(place, f"no reading ('{marks[0]}')" if marks else "no reading (the cell is blank)")

    def _stated(self, row: int) -> dict[str, str]:
        stated = {}
        for level in self.identity.columns:
            value = self.cell(row, level)
            if not is_blank(value):
                stated[level] = fields.name(value)
        return stated
