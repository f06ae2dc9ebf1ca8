"""What an import hands back: the readings, what each table was understood as, and everything that was not used."""

from __future__ import annotations

from dataclasses import dataclass

from ..records import Fault, InputFile, Place, Reading


@dataclass(frozen=True, slots=True)
class ColumnReport:
    """One column: where, its heading as typed, what it was taken for (None: not used), its unit, and both in words."""

    name: str
    heading: str
    meaning: str | None
    unit: str | None
    words: str


@dataclass(frozen=True, slots=True)
class TableReport:
    """One table. header_row: 1-based row of its (lowest) heading; kept, sites: readings and sites taken from it."""

    file: str
    sheet: str | None
    header_row: int
    columns: tuple[ColumnReport, ...]
    kept: int
    sites: int
    faults: int
    skipped: tuple[tuple[Place, str], ...]
    remarks: tuple[str, ...]

    @property
    def title(self) -> str:
        sheet = f", sheet {self.sheet}" if self.sheet is not None else ""
        return f"{self.file}{sheet}, heading in row {self.header_row}"


@dataclass(frozen=True, slots=True)
class Imported:
    """The outcome of reading one or more files. With `faults` the readings are incomplete and must not be fitted."""

    readings: tuple[Reading, ...]
    tables: tuple[TableReport, ...]
    faults: tuple[Fault, ...]
    skipped: tuple[tuple[Place, str], ...]
    inputs: tuple[InputFile, ...]
    remarks: tuple[tuple[Place, str], ...] = ()
