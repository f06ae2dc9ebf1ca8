"""Text tables (csv, tsv, txt, plain or gz) into a grid: encoding and separator found, never asked for.

Encoding: by byte-order mark, else UTF-8, else Windows-1252; a file that mixes the last two is refused.
Separator: the one of tab, semicolon, bar, comma and blanks under which a heading row is understood best.
"""

from __future__ import annotations

import codecs
import csv
import io
import math
import re

from ..records import Place
from .grid import Cell, Findings, Grid
from .headings import parse_heading

SEPARATORS = {"\t": "tab", ";": "semicolon", "|": "bar", ",": "comma", "  ": "two or more blanks", " ": "blanks"}
_MULTIBYTE = re.compile(rb"[\xc2-\xdf][\x80-\xbf]|[\xe0-\xef][\x80-\xbf]{2}")
HEADING_ROWS = 60  # the heading must stand within the first rows for the separator to be found


def read_text(name: str, data: bytes, findings: Findings) -> list[Grid]:
    """The one grid of a text file; on an unreadable file a fault and none."""
    decoded = _decode(name, data, findings)
    if decoded is None:
        return []
    text, encoding = decoded
    if not text.strip():
        findings.fault(Place(name), "the file is empty", "a table of readings is required", "check the export")
        return []
    lines = text.splitlines()
    first_row = 0
    separator = None
    if lines[0].casefold().startswith("sep=") and len(lines[0]) == 5:
        separator, first_row = lines[0][4], 1
    if separator is None:
        separator = _separator(lines[:HEADING_ROWS])
    rows = _split(name, text, lines, separator, findings)
    if rows is None:
        return []
    if first_row:
        rows[0] = ()
    grid = Grid(name, None, rows, is_text=True, delimiter=separator)
    grid.remarks.append(f"text in {encoding}, columns separated by {SEPARATORS.get(separator, repr(separator))}")
    return [grid]


def _decode(name: str, data: bytes, findings: Findings) -> tuple[str, str] | None:
    try:
        for mark, encoding in (
            (codecs.BOM_UTF8, "utf-8-sig"),
            (codecs.BOM_UTF16_LE, "utf-16"),
            (codecs.BOM_UTF16_BE, "utf-16"),
        ):
            if data.startswith(mark):
                return data.decode(encoding), encoding.removesuffix("-sig").upper()
        if b"\0" in data:
            odd, even = data[1::2].count(0), data[0::2].count(0)
            if max(odd, even) < 0.4 * len(data) / 2 or odd == even:
                raise UnicodeError("it holds zero bytes, as programs and pictures do")
            return data.decode("utf-16-le" if odd > even else "utf-16-be"), "UTF-16"
        try:
            return data.decode("utf-8"), "UTF-8"
        except UnicodeDecodeError as error:
            if _MULTIBYTE.search(data):
                line = data.count(b"\n", 0, error.start) + 1
                raise UnicodeError(
                    f"line {line} is not UTF-8 while other lines are: two encodings are mixed"
                ) from error
            return data.decode("cp1252"), "Windows-1252"
    except UnicodeError as error:
        findings.fault(
            Place(name),
            f"not readable as text ({error})",
            "one text encoding is required",
            "save the file again as UTF-8",
        )
        return None


def _separator(lines: list[str]) -> str:
    """The separator that makes most headings readable; ties go to the one standing first in SEPARATORS.

    Blanks separate only where no mark does: a heading such as `Angle θ [°]` holds blanks of its own.
    """
    for group in ("\t;|,", ("  ", " ")):
        scores = {separator: _understood(lines, separator) for separator in group}
        best = max(scores, key=lambda separator: scores[separator])
        if scores[best] > -math.inf:
            return best
    counts = {mark: sum(mark in line for line in lines) for mark in "\t;|,"}
    return max(counts, key=lambda mark: counts[mark])


def _understood(lines: list[str], separator: str) -> float:
    """How well the best line reads as headings under a separator; minus infinity where fewer than two are known."""
    best = -math.inf
    for line in lines:
        cells = [cell for cell in _fields(line, separator) if cell]
        known = sum(parse_heading(cell).known for cell in cells)
        if known >= 2:
            best = max(best, known - 0.5 * (len(cells) - known))
    return best


def _fields(line: str, separator: str) -> list[str]:
    if separator.isspace() and separator != "\t":
        bare = line.strip().lstrip("#%").strip()
        return re.split(r"\s{2,}", bare) if separator == "  " else bare.split()
    return [cell.strip().strip('"') for cell in line.split(separator)]


def _split(name: str, text: str, lines: list[str], separator: str, findings: Findings) -> list[tuple[Cell, ...]] | None:
    if separator in ("  ", " "):
        return _split_at_blanks(lines, separator)
    rows: list[tuple[Cell, ...]] = []
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=separator, skipinitialspace=True)
    try:
        for cells in reader:
            if cells and cells[0][:1] in "#%" and cells[0]:
                cells[0] = cells[0].lstrip("#% ")
            rows.append(tuple(cell.strip() or None for cell in cells))
    except csv.Error as error:
        findings.fault(
            Place(name, None, len(rows) + 1),
            f"the line cannot be split into columns ({error})",
            "one row a line is required",
            "look for a quotation mark that is opened and not closed",
        )
        return None
    return rows


def _split_at_blanks(lines: list[str], separator: str) -> list[tuple[Cell, ...]]:
    """Lines cut at blanks; titles above the heading, remarks behind a # and lines without a figure stay whole."""
    scores = [sum(parse_heading(cell).known for cell in _fields(line, separator)) for line in lines[:HEADING_ROWS]]
    heading = scores.index(max(scores))
    rows: list[tuple[Cell, ...]] = []
    for number, line in enumerate(lines):
        remark = number != heading and line.lstrip()[:1] in ("#", "%")
        words = number > heading and scores[heading] > 1 and not any(mark.isdigit() for mark in line)
        if not line.strip():
            rows.append(())
        elif number < heading or remark or words:
            rows.append((line.strip().lstrip("#% "),))
        else:
            rows.append(tuple(_fields(line, separator)))
    return rows
