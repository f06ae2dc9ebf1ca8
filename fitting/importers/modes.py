"""Polarisations and mode labels.

`s` is read as TE and `p` as TM: at the base of the prism the plane of incidence stands upright on the film, so light
polarised across it (s) has its electric field in the film plane. Common practice, no source. Words that depend on
what they are measured from (parallel, perpendicular, H, V) are refused.
A hyphen or underscore in a label separates: `TE-1` is mode 1 of TE.
"""

from __future__ import annotations

import re
import unicodedata
from functools import lru_cache

from .figures import Unreadable, clean
from .grid import Cell

POLARISATIONS = {
    "te": "TE",
    "t.e.": "TE",
    "transverse electric": "TE",
    "s": "TE",
    "s-pol": "TE",
    "s pol": "TE",
    "s-polarised": "TE",
    "s-polarized": "TE",
    "tm": "TM",
    "t.m.": "TM",
    "transverse magnetic": "TM",
    "p": "TM",
    "p-pol": "TM",
    "p pol": "TM",
    "p-polarised": "TM",
    "p-polarized": "TM",
}
UNLABELLED = frozenset({"", "?", "-", "--", "n/a", "na", "unknown", "unbekannt", "none", "x"})
_LABEL = re.compile(r"(te|tm)(?:[\s_\-–(\[,]*(?:m\s*=\s*)?(\d+|\?)\s*[)\]]?)?")
_NUMBER = re.compile(r"(?:m\s*=\s*|mode\s*|#\s*)?([+-]?\d+(?:[.,]\d+)?)(?:st|nd|rd|th|\.)?")
MAX_ORDER = 200  # a film with more modes than this cannot be labelled by hand; the number is a typing error


@lru_cache(maxsize=4096)
def polarisation(text: str) -> str:
    """TE or TM from the words of the trade. Raises Unreadable."""
    name = clean(unicodedata.normalize("NFKC", text)).casefold()
    found = POLARISATIONS.get(name)
    if found is None:
        raise Unreadable(f"polarisation '{text.strip()}' is not known", "write TE or TM (s and p are understood too)")
    return found


def mode_label(value: Cell) -> tuple[str | None, int | None]:
    """Polarisation and order that a mode cell states, each None where it does not. Raises Unreadable."""
    if isinstance(value, bool):
        raise Unreadable(f"mode {value}", "write the mode number, or leave it blank")
    if isinstance(value, int | float):
        return None, _order(float(value), f"{value:g}")
    if not isinstance(value, str):
        raise Unreadable(
            f"the mode cell holds the date or time {value}", "set the cell to text and type the label again, as TE0"
        )
    return _text_label(value)


@lru_cache(maxsize=4096)
def _text_label(value: str) -> tuple[str | None, int | None]:
    text = clean(unicodedata.normalize("NFKC", value)).casefold()
    if text in UNLABELLED:
        return None, None
    if text == "fundamental":
        return None, 0
    match = _LABEL.fullmatch(text)
    if match:
        digits = match.group(2)
        if digits in (None, "?"):
            return match.group(1).upper(), None
        if len(digits) > 1 and digits.startswith("0"):
            raise Unreadable(
                f"label '{value.strip()}' has two numbers, as the mode of a guide has",
                "write the film mode as TE0, TE1",
            )
        return match.group(1).upper(), _order(float(digits), value.strip())
    match = _NUMBER.fullmatch(text)
    if match:
        return None, _order(float(match.group(1).replace(",", ".")), value.strip())
    if text in POLARISATIONS:
        return POLARISATIONS[text], None
    raise Unreadable(f"mode '{value.strip()}' is not a label", "write it as 0, TE0 or TM1, or leave it blank")


def _order(number: float, typed: str) -> int:
    if not number.is_integer():
        raise Unreadable(f"mode {typed} is not a whole number", "write 0, 1, 2, ..., or leave it blank")
    if number < 0:
        raise Unreadable(f"mode {typed} is negative", "count the modes from 0, or leave it blank")
    if number > MAX_ORDER:
        raise Unreadable(f"mode {typed} is above {MAX_ORDER}", "write 0, 1, 2, ..., or leave it blank")
    return int(number)
