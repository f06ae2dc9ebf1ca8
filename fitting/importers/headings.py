"""One heading cell: what the column means, in which unit, and for which wavelength, polarisation and mode.

`Angle θ [°]`, `Wellenlänge/nm`, `TE0 @ 632.8 nm (deg)`, `angle_TM1_deg`, `1550 nm` are all headings.
"""

from __future__ import annotations

import re
import unicodedata
from dataclasses import dataclass, replace
from functools import lru_cache

from .figures import clean
from .vocabulary import SUFFIX_UNITS, UNITS, meaning_of, normal

READINGS = frozenset({"angle", "effective_index", "reading"})


@dataclass(frozen=True, slots=True)
class Heading:
    """meaning: a key of `vocabulary.MEANINGS`, or 'reading' where only a mode or wavelength is named, or None."""

    text: str
    meaning: str | None = None
    unit: str | None = None
    pol: str | None = None
    order: int | None = None
    wavelength_um: float | None = None
    expanded: bool = False  # the heading speaks of an expanded uncertainty

    @property
    def says_mode(self) -> bool:
        return self.pol is not None or self.order is not None or self.wavelength_um is not None

    @property
    def known(self) -> bool:
        return self.meaning is not None or self.says_mode


PER_UM = {"nm": 1000.0, "um": 1.0, "angstrom": 10_000.0}


def to_um(value: float, unit: str) -> float:
    """A length in µm, rounded to a femtometre so that 632.8 nm and 0.6328 µm are the same number."""
    return round(value / PER_UM[unit], 9)


_WAVELENGTH = re.compile(
    r"(?:@|\bat\b|\bbei\b|\bà\b)?\s*(?:λ|lambda|wavelength|wl)?\s*=?\s*(\d+(?:[.,]\d+)?)\s*(nm|μm|um|å)(?![a-zμ])", re.I
)
_MODE = re.compile(r"(?<![a-z])(te|tm)(?![a-z])[\s_\-]*(?:\(?\s*(?:m\s*=\s*)?(\d{1,2})\s*\)?(?![\d.,]))?", re.I)
_MODE_JOINED = re.compile(r"(?<![a-z])(te|tm)(\d{1,2})(?![\d.,]|\s*nm)", re.I)
_S_OR_P = re.compile(r"(?<![a-z])([sp])[\s\-]?pol(?:aris|ariz)?(?:ed|ation)?(?![a-z])\.?", re.I)
_ORDER = re.compile(r"(?<![a-z])(?:m\s*=\s*|mode\s+|m)(\d{1,2})(?![\d.,])", re.I)
_BRACKET = re.compile(r"[(\[{]\s*([^()\[\]{}]*?)\s*[)\]}]\s*$")
_SLASH = re.compile(r"(?:/|,|\bin\b)\s*([^\s/,]+)\s*$")
_EXPANDED = re.compile(r"k\s*=\s*[23]|95\s*%|expanded|erweitert|élargie|elargie|2\s*[σs]\b", re.I)


def neat(value: str) -> str:
    """Text as typed, on one line, subscripts as digits and signs in one spelling."""
    text = unicodedata.normalize("NFKC", clean(value)).translate({0xB5: 0x3BC})
    return clean(text).lstrip("#%").strip()


@lru_cache(maxsize=65536)
def parse_heading(value: str) -> Heading:
    """Read one heading cell; `meaning` and the mode fields stay None where nothing is understood."""
    typed = clean(value)
    text = neat(value)
    if not text or len(text) > 80:
        return Heading(typed)
    if meaning_of(text) is not None and meaning_of(text) != "later":
        return Heading(typed, meaning_of(text))
    expanded = bool(_EXPANDED.search(text))
    name, wavelength = _take_wavelength(text)
    name, unit = _take_unit(name)
    if normal(name) in ("te tm", "s p"):
        return Heading(typed, "pol")
    if meaning_of(name) is not None and not (wavelength is not None and meaning_of(name) == "wavelength"):
        return _settled(Heading(typed, meaning_of(name), unit, None, None, wavelength, expanded))
    name, pol, order = _take_mode(name)
    if unit is None:
        name, unit = _take_unit(name)
    return _named(Heading(typed, None, unit, pol, order, wavelength, expanded), name)


def _named(found: Heading, name: str) -> Heading:
    rest = re.sub(r"[\s@,;:_\-()\[\]/=]+", " ", name).strip()
    without_note = _BRACKET.sub("", name).strip()
    if not rest:
        return replace(found, meaning="reading") if found.says_mode else Heading(found.text)
    for candidate in (name, rest, without_note):
        meaning = meaning_of(candidate.strip())
        if meaning is not None:
            return _settled(replace(found, meaning=meaning))
    if normal(rest) == "t" and found.unit in ("C", "K", "F"):
        return replace(found, meaning="temperature_C")
    return Heading(found.text)


def _settled(found: Heading) -> Heading:
    """A wavelength or mode heading that carries its own value names readings, not a column of wavelengths or modes."""
    if (found.meaning == "wavelength" and found.wavelength_um is not None) or (
        found.meaning == "mode" and found.order is not None
    ):
        return replace(found, meaning="reading")
    return found


def _take_wavelength(text: str) -> tuple[str, float | None]:
    match = _WAVELENGTH.search(text)
    if match is None:
        return text, None
    unit = UNITS[match.group(2).casefold()]
    value = to_um(float(match.group(1).replace(",", ".")), unit)
    rest = (text[: match.start()] + " " + text[match.end() :]).strip()
    return re.sub(r"[(\[]\s*[)\]]", "", rest).strip(), value


def _take_unit(text: str) -> tuple[str, str | None]:
    for pattern in (_BRACKET, _SLASH):
        match = pattern.search(text)
        if match and match.group(1).casefold() in UNITS and match.start() > 0:
            return text[: match.start()].strip(), UNITS[match.group(1).casefold()]
    match = _BRACKET.fullmatch(text)
    if match and match.group(1).casefold() in UNITS:
        return "", UNITS[match.group(1).casefold()]
    parts = re.split(r"[\s_]+", text)
    if len(parts) > 1 and parts[-1].casefold() in SUFFIX_UNITS:
        return text[: len(text) - len(parts[-1])].rstrip(" _"), UNITS[parts[-1].casefold()]
    if len(text) > 1 and text.endswith("°"):
        return text[:-1].strip(), "deg"
    return text, None


def _take_mode(text: str) -> tuple[str, str | None, int | None]:
    match = _MODE_JOINED.search(text) or _MODE.search(text)
    if match:
        order = None if match.group(2) is None else int(match.group(2))
        return _without(text, match), match.group(1).upper(), order
    match = _S_OR_P.search(text)
    pol = None
    if match:
        pol = "TE" if match.group(1).casefold() == "s" else "TM"
        text = _without(text, match)
    match = _ORDER.search(text)
    if match:
        return _without(text, match), pol, int(match.group(1))
    return text, pol, None


def _without(text: str, match: re.Match[str]) -> str:
    rest = f"{text[: match.start()].rstrip(' _-')} {text[match.end() :].lstrip(' _-')}"
    return re.sub(r"[(\[]\s*[)\]]", "", rest).strip()


def unit_of(value: object) -> str | None:
    """The unit that a cell holds and nothing else, with or without brackets."""
    if not isinstance(value, str):
        return None
    return UNITS.get(neat(value).strip("[]()").strip().casefold())


def combine(parts: list[Heading]) -> Heading:
    """One heading from the cells stacked above a column, uppermost first; the lowest that names a meaning wins."""
    if len(parts) == 1:
        return parts[0]
    lowest = parts[-1].meaning
    if lowest is not None and lowest not in READINGS and lowest != "later":
        return parts[-1]  # a title over a column of names says nothing about it
    joined = parse_heading(" ".join(part.text for part in parts))
    if joined.meaning not in (None, "reading") and not any(part.says_mode for part in parts):
        return joined
    merged = Heading(" / ".join(dict.fromkeys(part.text for part in parts)))
    for part in parts:
        merged = replace(
            merged,
            unit=part.unit or merged.unit,
            pol=part.pol or merged.pol,
            order=part.order if part.order is not None else merged.order,
            wavelength_um=part.wavelength_um or merged.wavelength_um,
            expanded=part.expanded or merged.expanded,
        )
    meanings = [part.meaning for part in parts if part.meaning not in (None, "reading")]
    named = [name for name in meanings if not (name in ("wavelength", "mode", "pol") and merged.says_mode)]
    if named:
        meaning: str | None = named[-1]
    elif merged.says_mode:
        meaning = "reading"
    else:
        meaning = meanings[-1] if meanings else None
    if meaning in READINGS and merged.unit in PER_UM:
        merged = replace(merged, unit=None)  # the unit belonged to the wavelength over the column
    return replace(merged, meaning=meaning)
