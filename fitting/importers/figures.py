"""Numbers and angles out of cells, with decimal commas, thousands separators, and degrees, minutes and seconds.

| the cell holds             | it is read as                                                                      |
|----------------------------|------------------------------------------------------------------------------------|
| 12.61 / 12,61              | a decimal number; both marks are understood                                        |
| 1.234,5 / 1,234.5 / 1 550  | the last mark is the decimal one, the other must stand before groups of three      |
| 1,550                      | as the rest of the table writes its decimals; with no other hint, by what is       |
|                            | possible in that column; if both or neither is possible it is refused              |
| 1.550                      | decimal point, unless the table writes decimal commas                              |
| 12°36', 12 36 30, 12:36    | degrees, minutes, seconds, in an angle column only                                 |
| 12.61 (weak)               | the number; the note in brackets is passed on                                      |
| 12.61(5), ~12.6, 12.6?, <9 | refused: what was meant is not certain                                             |
"""

from __future__ import annotations

import datetime
import math
import re
from collections.abc import Iterable
from functools import lru_cache

from .grid import Cell


class Unreadable(Exception):  # noqa: N818 (a finding to report, not a failure of the program)
    """A cell that does not say what its column needs: what it was, and what to do."""

    def __init__(self, was: str, remedy: str) -> None:
        self.was = was
        self.remedy = remedy
        super().__init__(f"{was}, {remedy}")


_SIGNS = str.maketrans(
    {
        "\u2212": "-",
        "\u2010": "-",
        "\u2011": "-",
        "\u2012": "-",
        "\u2013": "-",
        "\u2014": "-",
        "\u00a0": " ",
        "\u2007": " ",
        "\u2009": " ",
        "\u202f": " ",
        "\u2032": "'",
        "\u2019": "'",
        "\u2018": "'",
        "\u00b4": "'",
        "\u2033": '"',
        "\u201d": '"',
        "\u201c": '"',
        "\u00ba": "°",
        "\u02da": "°",
    }
)
_PLAIN = re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?")
_DECIMAL = re.compile(r"([+-]?)(\d*)([.,])(\d+)(?:[eE][+-]?\d+)?")
_GROUPED = re.compile(r"[+-]?[1-9]\d{0,2}(?:([., '])\d{3})(?:\1\d{3})*")
_NOTE = re.compile(r"^(.*\d.*?)\s*[(\[]([^()\[\]]*[^\W\d_]{2}[^()\[\]]*)[)\]]$")
_MONTH = re.compile(r"\b(jan|feb|m[aä]r|apr|ma[yi]|jun|jul|aug|sep|o[ck]t|nov|de[cz])[a-z]*\b", re.I)
_RANGE = re.compile(r"\d\s*(?:-|to|bis|\.\.+|…)\s*\d")
_MINUTES_ONLY = re.compile(r"([+-]?\d+(?:[.,]\d+)?)\s*'")
_SEXAGESIMAL = re.compile(
    r"([+-]?)\s*(\d{1,3})\s*(?:°|deg|:|\s)\s*(\d{1,2}(?:[.,]\d+)?)\s*(?:'|min|:|\s)?"
    r"\s*(?:(\d{1,2}(?:[.,]\d+)?)\s*(?:\"|''|sec)?)?\s*"
)
_UNIT_SUFFIX = re.compile(r"\s*(°|degrees?|deg|grad|nm|µm|μm|um|Å|mm|cm|°C|rad|mrad)\s*$", re.I)


@lru_cache(maxsize=65536)
def clean(text: str) -> str:
    """Typographic signs and odd spaces as plain ones, ends trimmed."""
    return " ".join(text.translate(_SIGNS).split())


def looks_numeric(value: Cell) -> bool:
    """A number cell, or text that begins and reads like one: the quick test that tells data from headings."""
    if isinstance(value, int | float):
        return not isinstance(value, bool)
    if not isinstance(value, str):
        return False
    text = clean(value)
    return bool(text) and (text[0].isdigit() or text[0] in "+-.") and _first_figure(text)


@lru_cache(maxsize=65536)
def _first_figure(text: str) -> bool:
    body = _UNIT_SUFFIX.sub("", text)
    return bool(re.fullmatch(r"[+-]?[\d.,]+(?:[eE][+-]?\d+)?", body)) or bool(_SEXAGESIMAL.fullmatch(text))


def decimal_style(texts: Iterable[str]) -> str | None:
    """The decimal mark a table uses, from the cells that leave no doubt; None without such a cell or with both."""
    seen = set()
    for text in texts:
        body = split_unit(clean(text))[0]
        match = _DECIMAL.fullmatch(body)
        if match:
            digits = match.group(2)
            if len(match.group(4)) != 3 or len(digits) > 3 or digits in ("", "0"):
                seen.add(match.group(3))
        elif "." in body and "," in body:
            seen.add(max(".,", key=body.rfind))
    return seen.pop() if len(seen) == 1 else None


def split_unit(text: str) -> tuple[str, str | None]:
    """A figure and the unit typed behind it in the same cell."""
    match = _UNIT_SUFFIX.search(text)
    return (text[: match.start()], match.group(1)) if match else (text, None)


def split_note(text: str) -> tuple[str, str | None]:
    """A figure and the words in brackets behind it; bracketed digits are no note (they may be an uncertainty)."""
    match = _NOTE.match(text)
    return (match.group(1), match.group(2)) if match else (text, None)


def number(value: Cell, style: str | None, low: float, high: float) -> float:
    """The number in a cell.

    low, high: what is possible in this column, in its own unit; used only to tell 1,550 (thousands) from 1,550
    (decimals) where the table gives no other hint. Raises Unreadable.
    """
    if isinstance(value, bool):
        raise Unreadable(f"the cell holds the truth value {value}", "type the number")
    if isinstance(value, int | float):
        if math.isfinite(value):
            return float(value)
        raise Unreadable(f"the cell holds {value}", "measure again or leave the cell blank")
    if not isinstance(value, str):
        raise _date_problem(value)
    return _text_number(clean(value), style, low, high)


def _date_problem(value: Cell) -> Unreadable:
    kind = "date" if isinstance(value, datetime.date) else "time of day"
    return Unreadable(
        f"the cell holds the {kind} {value}",
        "the spreadsheet turned the typed number into it: set the cell to text or number and type the figure again",
    )


def _text_number(text: str, style: str | None, low: float, high: float) -> float:
    if _PLAIN.fullmatch(text) and not (style == "," and _GROUPED.fullmatch(text) and "." in text):
        return _finite(text, text)
    body = text.replace(" ", "") if re.fullmatch(r"[+-]?\d{1,3}(?: \d{3})+(?:[.,]\d+)?", text) else text
    if re.fullmatch(r"[+-]?\d{1,3}(?:'\d{3})+(?:[.,]\d+)?", body):
        body = body.replace("'", "")
    marks = {mark: body.count(mark) for mark in ".,"}
    if marks["."] and marks[","]:
        decimal = max(".,", key=body.rfind)
        group = "," if decimal == "." else "."
        whole, fraction = body.rsplit(decimal, 1)
        if marks[decimal] == 1 and _GROUPED.fullmatch(whole):
            return _finite(whole.replace(group, "") + "." + fraction, text)
        raise _not_a_number(text)
    if _GROUPED.fullmatch(body) and (marks["."] or marks[","]):
        return _grouped(body, style, low, high)
    plain = body.replace(",", ".") if marks[","] == 1 else body
    if _PLAIN.fullmatch(plain):
        return _finite(plain, text)
    raise _not_a_number(text)


def _finite(plain: str, text: str) -> float:
    value = float(plain)
    if math.isfinite(value):
        return value
    raise Unreadable(f"'{text}' is too large for a number", "type the number again")


def _grouped(body: str, style: str | None, low: float, high: float) -> float:
    """1,550 or 1.550: thousands or decimals. The table's own decimal mark decides, else what is possible here."""
    mark = "," if "," in body else "."
    thousands = float(body.replace(mark, ""))
    if body.count(mark) > 1:
        return thousands
    decimals = float(body.replace(mark, "."))
    if style == mark:
        return decimals
    if style is not None or mark == ".":
        if low <= thousands <= high:
            return thousands
        raise Unreadable(
            f"'{body}' beside numbers whose decimal mark is '{style}'", "use one decimal mark in the whole table"
        )
    possible = [value for value in (decimals, thousands) if low <= value <= high]
    if len(possible) == 1:
        return possible[0]
    raise Unreadable(
        f"'{body}' can mean {decimals:g} or {thousands:g}",
        "write it without a thousands separator, or with more decimals",
    )


def _not_a_number(text: str) -> Unreadable:
    if text.startswith("#"):
        return Unreadable(f"the cell holds the spreadsheet error {text}", "mend the formula or leave the cell blank")
    if text.casefold() in ("nan", "inf", "-inf", "+inf", "infinity"):
        return Unreadable(f"the cell holds '{text}'", "measure again or leave the cell blank")
    if _MONTH.search(text):
        return Unreadable(
            f"'{text}' looks like a date", "the spreadsheet may have turned a number into it: type it again"
        )
    if _RANGE.search(text):
        return Unreadable(f"'{text}' looks like a range", "give one number a row")
    if re.fullmatch(r"[+-]?\d+(?:[.,]\d+)?\s*\(\d+\)", text):
        return Unreadable(
            f"'{text}' carries digits in brackets", "give the number here and its uncertainty in a column u"
        )
    return Unreadable(f"text '{text}' in a number cell", "type the number alone and move words to a column of notes")


def angle_deg(value: Cell, style: str | None, unit: str) -> float:
    """An angle in degrees. unit: 'deg', 'arcmin', 'arcsec' or 'dms' (as the heading says). Raises Unreadable."""
    scale = {"deg": 1.0, "dms": 1.0, "arcmin": 1.0 / 60.0, "arcsec": 1.0 / 3600.0}[unit]
    if isinstance(value, datetime.time | datetime.timedelta):
        raise Unreadable(
            f"the cell holds the time of day {value}",
            "the spreadsheet took degrees:minutes for a time: set the cell to text and type it again, as 12°36'",
        )
    if not isinstance(value, str):
        degrees = number(value, style, -90.0, 90.0)
        if unit == "dms" and not degrees.is_integer():
            raise Unreadable(
                f"{degrees:g} under a heading of degrees and minutes", "write it as 12°36', or head it (deg)"
            )
        return degrees * scale
    text = clean(value)
    body, typed_unit = split_unit(text)
    if typed_unit is not None and typed_unit.casefold().endswith("rad") and typed_unit.casefold() != "grad":
        raise Unreadable(f"'{text}' is in radians", "convert it to degrees")
    if typed_unit is not None and typed_unit.casefold() not in ("°", "deg", "degree", "degrees", "grad"):
        raise Unreadable(f"'{text}' has a unit that is no angle", "give the angle in degrees")
    sexagesimal = _sexagesimal(text)
    if sexagesimal is not None:
        return sexagesimal
    if unit == "dms" and re.search(r"[.,]", body):
        raise Unreadable(f"'{text}' under a heading of degrees and minutes", "write it as 12°36', or head it (deg)")
    if typed_unit is not None and unit in ("arcmin", "arcsec"):
        raise Unreadable(f"'{text}' in degrees under a heading in {unit}", "use one unit in the column")
    limit = 90.0 / scale
    return _text_number(body, style, -limit, limit) * scale


def _sexagesimal(text: str) -> float | None:
    only = _MINUTES_ONLY.fullmatch(text)
    if only:
        return float(only.group(1).replace(",", ".")) / 60.0
    match = _SEXAGESIMAL.fullmatch(text)
    if match is None or _PLAIN.fullmatch(text):
        return None
    minutes = float(match.group(3).replace(",", "."))
    seconds = float((match.group(4) or "0").replace(",", "."))
    if minutes >= 60.0 or seconds >= 60.0 or (match.group(4) and not minutes.is_integer()):
        raise Unreadable(f"'{text}' has minutes or seconds of 60 or more, or fractions of both", "type the angle again")
    degrees = float(match.group(2)) + minutes / 60.0 + seconds / 3600.0
    return -degrees if match.group(1) == "-" else degrees
