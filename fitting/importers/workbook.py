"""Excel workbooks (xlsx, xlsm) into grids. Nothing is loaded before the size of every part is known."""

from __future__ import annotations

import gc
import io
import warnings
import zipfile
from typing import Any

from ..records import Place
from .grid import Cell, Findings, Grid, Span

LIMIT_MB = 50  # of any one part, unpacked: some 100,000 rows of readings; a season of monitor wafers needs less
LIMIT_CELLS = 2_000_000


def read_workbook(name: str, data: bytes, findings: Findings) -> list[Grid]:
    """The sheets of a workbook; on anything that is no readable workbook a fault and no sheets."""
    if not _acceptable(name, data, findings):
        return []
    try:
        book = _load(data, values=False, lean=False)
    except Exception as error:  # the parser raises whatever the damaged part led to; the cause is passed on
        findings.fault(
            Place(name),
            f"the workbook cannot be read ({type(error).__name__}: {error})",
            "a whole workbook is required",
            "open it in the spreadsheet, save it again as xlsx and try once more",
        )
        return []
    grids = [_grid(name, sheet, findings) for sheet in book.worksheets]
    found = [grid for grid in grids if grid is not None]
    if any(formulas for _, formulas in found):
        _fill_formulas(data, found)
    return [grid for grid, _ in found]


def _acceptable(name: str, data: bytes, findings: Findings) -> bool:
    try:
        with zipfile.ZipFile(io.BytesIO(data)) as archive:
            parts = {part.filename: part for part in archive.infolist()}
    except zipfile.BadZipFile as error:
        findings.fault(
            Place(name), f"the file is damaged ({error})", "a whole xlsx workbook is required", "copy or save it again"
        )
        return False
    if "xl/workbook.bin" in parts:
        findings.fault(Place(name), "a binary workbook (xlsb)", "xlsx is required", "save it as xlsx")
        return False
    if "xl/workbook.xml" not in parts:
        findings.fault(
            Place(name),
            "a zip archive that is not a workbook",
            "an xlsx workbook is required",
            "unpack it and name the table inside",
        )
        return False
    for part in parts.values():
        encrypted = bool(part.flag_bits & 1)
        if encrypted or part.file_size > LIMIT_MB * 1_000_000:
            was = "is encrypted" if encrypted else f"holds {part.file_size / 1e6:.0f} MB unpacked"
            findings.fault(
                Place(name),
                f"the part {part.filename} {was}",
                f"at most {LIMIT_MB} MB a sheet, not encrypted, is required",
                "delete what is no reading (also empty formatted rows), or split the workbook",
            )
            return False
    return True


def _load(data: bytes, values: bool, lean: bool) -> Any:
    import openpyxl

    collecting = gc.isenabled()
    gc.disable()  # a hundred thousand cells are made and none dropped: looking for garbage costs a third of the time
    try:
        with warnings.catch_warnings():
            # openpyxl warns of styles, validations and extensions it will not write back; nothing is written back here
            warnings.simplefilter("ignore")
            return openpyxl.load_workbook(io.BytesIO(data), data_only=values, read_only=lean, keep_links=False)
    finally:
        if collecting:
            gc.enable()


Formulas = set[tuple[int, int]]


def _grid(name: str, sheet: Any, findings: Findings) -> tuple[Grid, Formulas] | None:
    height, width = sheet.max_row, sheet.max_column
    if height * width > LIMIT_CELLS:
        findings.fault(
            Place(name, sheet.title),
            f"the sheet reaches to row {height} and column {width}",
            f"at most {LIMIT_CELLS:,} cells are required",
            "delete the stray cell or format far from the table, or split the sheet",
        )
        return None
    rows: list[tuple[Cell, ...]] = list(sheet.iter_rows(values_only=True))
    merged = {}
    for area in sheet.merged_cells.ranges:
        span = Span(area.min_row - 1, area.min_col - 1, area.max_row - 1, area.max_col - 1)
        for row in range(span.top, span.bottom + 1):
            for column in range(span.left, span.right + 1):
                merged[row, column] = span
    formulas = {
        (row, column)
        for row, cells in enumerate(rows)
        for column, value in enumerate(cells)
        if (value.__class__ is str and value[:1] == "=" and sheet.cell(row + 1, column + 1).data_type == "f")
        or hasattr(value, "ref")  # array and table formulas
    }
    hidden_rows = frozenset(row - 1 for row, shape in sheet.row_dimensions.items() if shape.hidden)
    hidden_columns = frozenset(
        column - 1
        for shape in sheet.column_dimensions.values()
        if shape.hidden
        for column in range(shape.min or 1, min(shape.max or 1, width) + 1)
    )
    hidden = sheet.sheet_state != "visible"
    grid = Grid(name, sheet.title, rows, merged, hidden_rows, hidden_columns, hidden_sheet=hidden)
    return grid, formulas


def _fill_formulas(data: bytes, found: list[tuple[Grid, Formulas]]) -> None:
    """Put the stored values in place of the formulas, and note the formulas that have none."""
    book = _load(data, values=True, lean=True)
    for grid, formulas in found:
        if not formulas:
            continue
        unvalued = set()
        wanted: dict[int, list[int]] = {}
        for row, column in formulas:
            wanted.setdefault(row, []).append(column)
        for row, cells in enumerate(book[grid.sheet].iter_rows(values_only=True, max_row=max(wanted) + 1)):
            if row not in wanted:
                continue
            values = list(grid.rows[row])
            for column in wanted[row]:
                values[column] = cells[column] if column < len(cells) else None
                if values[column] is None:
                    unvalued.add((row, column))
            grid.rows[row] = tuple(values)
        grid.unvalued = frozenset(unvalued)
        grid.remarks.append(f"{len(formulas)} cells are formulas; the values stored with them were read")
    book.close()
