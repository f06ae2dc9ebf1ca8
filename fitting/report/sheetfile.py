"""Long sheets written fast: openpyxl makes workbook, heads and styles, the rows are set into its sheets as text.

Row text follows ECMA-376 part 1 (SpreadsheetML, 18.3.1.4 `c`, 18.3.1.73 `row`). Nine in ten cells are plain figures
and words, for which building an object and an XML element each costs five times the writing: 1,225 sites took six
seconds that way.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from io import BytesIO
from pathlib import Path
from typing import Any
from xml.sax.saxutils import escape
from zipfile import ZIP_DEFLATED, ZipFile

# More than 9 decimals never mean anything in nm, degrees or index.
MOST_DECIMALS = 9
_LONGEST_TEXT = 32767  # ECMA-376, 18.18.89: characters in a cell
_ILLEGAL = re.compile("[\x00-\x08\x0b\x0c\x0e-\x1f\ufffe\uffff]")  # not allowed in XML 1.0
_EMPHASIS = ("FLAGGED", "FAILED", "NO")


@dataclass(frozen=True, slots=True)
class Number:
    """A figure with the number of decimals it is shown to; the cell keeps all digits."""

    value: float
    decimals: int

    @property
    def format(self) -> str:
        """Spreadsheet number format."""
        n = min(max(self.decimals, 0), MOST_DECIMALS)
        return "0." + "0" * n if n else "0"


Cell = str | float | int | Number | None


class Book:
    """A workbook under construction. `add_sheet` for each sheet, then `save`."""

    def __init__(self, title: str, creator: str) -> None:
        from openpyxl import Workbook

        self._book: Any = Workbook()
        self._book.remove(self._book.active)
        self._book.properties.title = title
        self._book.properties.creator = creator
        self._rows: list[tuple[int, int, str]] = []
        self._styles: dict[str, int] = {}

    def add_sheet(
        self, name: str, notes: Sequence[str], heads: Sequence[str], rows: Iterable[Sequence[Cell]], frozen_columns: int
    ) -> None:
        """Title lines, a head row that stays in view with a filter on it, then the rows."""
        from openpyxl.styles import Alignment, Font, PatternFill
        from openpyxl.utils import get_column_letter

        sheet = self._book.create_sheet(name)
        head_row = len(notes) + 1
        letters = [get_column_letter(i + 1) for i in range(len(heads))]
        for i, text in enumerate(notes):
            sheet.cell(i + 1, 1, text).font = Font(italic=True)
        for i, head in enumerate(heads):
            cell = sheet.cell(head_row, i + 1, head)
            cell.font, cell.fill = Font(bold=True), PatternFill("solid", fgColor="E6E6E6")
            cell.alignment = Alignment(wrap_text=True, vertical="top")
            sheet.column_dimensions[letters[i]].width = _width(head)
        body, last = self._body(sheet, rows, letters, head_row)
        self._rows.append((last, len(heads), body))
        sheet.freeze_panes = f"{get_column_letter(frozen_columns + 1)}{head_row + 1}"
        sheet.auto_filter.ref = f"A{head_row}:{letters[-1]}{last}"
        sheet.print_title_rows = f"{head_row}:{head_row}"
        sheet.page_setup.orientation = "landscape"
        sheet.page_setup.fitToHeight = 0
        sheet.sheet_properties.pageSetUpPr.fitToPage = True

    def _body(self, sheet: Any, rows: Iterable[Sequence[Cell]], letters: Sequence[str], row: int) -> tuple[str, int]:
        parts = []
        for cells in rows:
            row += 1
            inner = "".join(self._text(sheet, f"{x}{row}", c) for x, c in zip(letters, cells) if _shown(c))
            parts.append(f'<row r="{row}">{inner}</row>')
        return "".join(parts), row

    def _text(self, sheet: Any, at: str, cell: Cell) -> str:
        if isinstance(cell, Number):
            return f'<c r="{at}" s="{self._style(sheet, cell.format)}"><v>{float(cell.value)!r}</v></c>'
        if isinstance(cell, str):
            # Text from a data file stays text, also where it begins with an equals sign.
            text = escape(_ILLEGAL.sub("\ufffd", cell)[:_LONGEST_TEXT])
            style = f' s="{self._style(sheet, "bold")}"' if cell in _EMPHASIS else ""
            return f'<c r="{at}"{style} t="inlineStr"><is><t xml:space="preserve">{text}</t></is></c>'
        return f'<c r="{at}"><v>{cell}</v></c>'

    def _style(self, sheet: Any, kind: str) -> int:
        """Number of a style in the workbook's own table."""
        if kind not in self._styles:
            from openpyxl.cell import WriteOnlyCell
            from openpyxl.styles import Font

            cell = WriteOnlyCell(sheet)
            if kind == "bold":
                cell.font = Font(bold=True)
            else:
                cell.number_format = kind
            self._styles[kind] = cell.style_id
        return self._styles[kind]

    def save(self, path: Path) -> None:
        """Write the file. Raises OSError where the path cannot be written."""
        from openpyxl.utils import get_column_letter

        shell = BytesIO()
        self._book.save(shell)
        with ZipFile(shell) as old, ZipFile(path, "w", ZIP_DEFLATED) as new:
            for name in old.namelist():
                data = old.read(name)
                match = re.fullmatch(r"xl/worksheets/sheet(\d+)\.xml", name)
                if match:
                    last, width, body = self._rows[int(match[1]) - 1]
                    data = _splice(data, f"A1:{get_column_letter(width)}{last}", body)
                new.writestr(name, data)


def _shown(cell: Cell) -> bool:
    """An empty cell for what is missing or is no number."""
    if isinstance(cell, str):
        return True
    number = cell.value if isinstance(cell, Number) else cell
    return number is not None and math.isfinite(number)


def _splice(sheet: bytes, extent: str, body: str) -> bytes:
    """The sheet with its rows in place and its stated extent corrected."""
    text, found = re.subn(r'<dimension ref="[^"]*" ?/>', f'<dimension ref="{extent}"/>', sheet.decode("utf-8"))
    before, end, after = text.partition("</sheetData>")
    if found != 1 or not end:
        raise RuntimeError("a sheet came out of openpyxl without extent or rows; check its version")
    return (before + body + end + after).encode("utf-8")


def _width(head: str) -> float:
    """Wide enough for figures and for the longest word of the head."""
    if head in ("flags and what to do", "text", "remark"):
        return 60.0
    if head in ("quantity", "subject", "file"):
        return 34.0
    return max(11.0, max(len(w) for w in head.split()) + 3.0)
