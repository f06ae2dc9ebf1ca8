"""A sheet as it stands, before anybody asks what it means: cells, merges, what is hidden, formulas without a value."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

from ..records import Fault, Place

Cell = Any  # None, str, int, float, bool, or a date, time or duration of the spreadsheet


@dataclass(frozen=True, slots=True)
class Span:
    """A merged range, 0-based, both ends included."""

    top: int
    left: int
    bottom: int
    right: int


@dataclass
class Grid:
    """One sheet, or one text file. Rows and columns count from 0 inside and from 1 (or A) in every message."""

    file: str
    sheet: str | None
    rows: list[tuple[Cell, ...]]
    merged: dict[tuple[int, int], Span] = field(default_factory=dict)
    hidden_rows: frozenset[int] = frozenset()
    hidden_columns: frozenset[int] = frozenset()
    unvalued: frozenset[tuple[int, int]] = frozenset()  # formulas stored without their value
    hidden_sheet: bool = False
    is_text: bool = False
    delimiter: str | None = None
    remarks: list[str] = field(default_factory=list)

    def cell(self, row: int, column: int) -> Cell:
        cells = self.rows[row]
        return cells[column] if column < len(cells) else None

    def merged_down(self, row: int, column: int) -> Cell:
        """The cell, or the value of the cell above it that it is merged with."""
        value = self.cell(row, column)
        if value is None and self.merged:
            span = self.merged.get((row, column))
            if span is not None and span.left == column:
                return self.cell(span.top, column)
        return value

    def merged_over(self, row: int, column: int) -> Cell:
        """The cell, or the value of the range it is merged into, whichever way that runs."""
        value = self.cell(row, column)
        if value is None and self.merged:
            span = self.merged.get((row, column))
            if span is not None:
                return self.cell(span.top, span.left)
        return value

    @property
    def width(self) -> int:
        return max((len(row) for row in self.rows), default=0)

    def place(self, row: int | None = None, column: int | None = None, heading: str | None = None) -> Place:
        """Where a cell stands, as the person who opens the file sees it."""
        name = None if column is None else self.column_name(column)
        if name is not None and heading:
            name = f'{name} "{heading}"'
        return Place(self.file, self.sheet, None if row is None else row + 1, name)

    def column_name(self, column: int) -> str:
        """A, B, ... in a workbook; 1, 2, ... in a text file."""
        if self.is_text:
            return str(column + 1)
        name, number = "", column + 1
        while number:
            number, digit = divmod(number - 1, 26)
            name = chr(ord("A") + digit) + name
        return name


def is_blank(value: Cell) -> bool:
    return value is None or (isinstance(value, str) and not value.strip())


@dataclass
class Findings:
    """What one pass collects: faults (the input is refused), rows left out, remarks."""

    faults: list[Fault] = field(default_factory=list)
    skipped: list[tuple[Place, str]] = field(default_factory=list)
    remarks: list[tuple[Place, str]] = field(default_factory=list)

    def fault(self, place: Place, was: str, required: str, remedy: str) -> None:
        self.faults.append(Fault(place, was, required, remedy))

    def skip(self, place: Place, reason: str) -> None:
        self.skipped.append((place, reason))

    def remark(self, place: Place, text: str) -> None:
        if (place, text) not in self.remarks:
            self.remarks.append((place, text))
