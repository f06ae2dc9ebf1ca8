"""What the rows above a table, its sheet's name and lines between its rows say for all readings below them.

A wavelength counts only where it is called one (λ = 632.8 nm, "Wavelength: 1550 nm", "@ 633 nm", a laser) or where
the cell or the sheet's name holds nothing else; so "SiN 500 nm on 3 µm oxide" stays a title.
"""

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import dataclass, field, replace

from .figures import Unreadable, clean, number
from .grid import Cell, Grid, is_blank
from .headings import PER_UM, neat, parse_heading, to_um
from .modes import POLARISATIONS

_UM = r"(\d+(?:[.,]\d+)?)\s*(nm|μm|um|å)(?![a-zμ])"
_TAGGED = re.compile(
    r"(?:λ|lambda|wavelengths?|wellenl(?:ä|ae)ngen?|laser|longueurs? d'onde|longitud de onda|lunghezza d'onda|@)"
    rf"[^\d\n]{{0,25}}{_UM}((?:\s*(?:,|;|/|&|and|und|et|y|e)\s*{_UM})*)",
    re.I,
)
_LASER = re.compile(rf"{_UM}\s*(?:laser|line|linie|hene|he-ne)", re.I)
_ALONE = re.compile(rf"{_UM}", re.I)
_POL = re.compile(r"(?<![a-z0-9])(te|tm)(?![a-z0-9])", re.I)
_NAME = r"\s*(?:(?:id|no|nr|number|nummer)\b\.?)?\s*(?:([:=#])\s*|\s+|(?=[-_]?\d)|[-_])([\w./\-]*[\w])"
_NAMES = {
    "lot": re.compile(rf"(?<![a-z])(?:lot|batch|los|charge|lote|lotto){_NAME}", re.I),
    "wafer": re.compile(rf"(?<![a-z])(?:wafer|oblea|scheibe|sample){_NAME}", re.I),
    "site": re.compile(rf"(?<![a-z])(?:site|messpunkt|sitio){_NAME}", re.I),
    "tool": re.compile(r"(?<![a-z])(?:tool|instrument|anlage|ger(?:ä|ae)t)\s*([:=])\s*([^,;]+)", re.I),
    "measured_at": re.compile(
        r"(?<![a-z])(?:date|datum|fecha|measured(?: at| on)?)\s*([:=]?)\s*(\d[\d./:\-T ]*\d)", re.I
    ),
}
_WAFER_SHEET = re.compile(r"w(?:af(?:er)?)?[\s_\-#]*(\d+[a-z]?)", re.I)


@dataclass(frozen=True)
class Context:
    """What holds for all rows of a table unless they say otherwise. Wavelengths in µm."""

    wavelengths_um: tuple[float, ...] = ()
    pol: str | None = None
    names: dict[str, str] = field(default_factory=dict)  # lot, wafer, site, tool, measured_at, temperature_C
    quantity: str | None = None  # angle or effective_index, where a title cell says so with its unit
    unit: str | None = None

    def over(self, wider: Context) -> Context:
        """This context, with what it leaves open taken from a wider one; a new lot or wafer ends the old sites."""
        kept = dict(wider.names)
        for level, below in (("lot", ("wafer", "site")), ("wafer", ("site",))):
            if level in kept and self.names.get(level, kept[level]) != kept[level]:
                for name in below:
                    kept.pop(name, None)
        return Context(
            self.wavelengths_um or wider.wavelengths_um,
            self.pol or wider.pol,
            {**kept, **self.names},
            self.quantity or wider.quantity,
            self.unit if self.quantity else wider.unit,
        )

    @property
    def empty(self) -> bool:
        return not (self.wavelengths_um or self.pol or self.names or self.quantity)


def from_rows(grid: Grid, rows: Iterable[int], left: int, right: int) -> Context:
    """Everything said in the cells of some rows between two columns (right excluded)."""
    found = Context()
    for row in rows:
        cells = [(column, value) for column, value in enumerate(grid.rows[row]) if not is_blank(value)]
        for position, (column, value) in enumerate(cells):
            if not left <= column < right or not isinstance(value, str):
                continue
            beside = cells[position + 1][1] if position + 1 < len(cells) else None
            pair = _pair(value, beside)
            found = (pair if not pair.empty else from_text(value)).over(found)
    return found


def from_sheet_name(name: str) -> Context:
    """What a sheet's name says: `TE 632.8 nm`, `W07`, `Wafer 7`; other names say nothing."""
    text = neat(name)
    wafer = _WAFER_SHEET.fullmatch(text)
    if wafer:
        return Context(names={"wafer": text if text.casefold().startswith("w") and " " not in text else wafer.group(1)})
    words = _ALONE.sub("", text)
    bare = not re.sub(r"[\s_\-@,]|(?<![a-z])(te|tm)(?![a-z])", "", words, flags=re.I)
    found = from_text(name)
    if bare:
        wavelengths = tuple(_um(*match) for match in _ALONE.findall(text))
        pols = {match.upper() for match in _POL.findall(words)}
        found = replace(found, wavelengths_um=wavelengths, pol=pols.pop() if len(pols) == 1 else None)
    return found


def from_text(value: str) -> Context:
    """What one cell of free text says."""
    text = neat(value)
    wavelengths = []
    for match in _TAGGED.finditer(text):
        wavelengths.append(_um(match.group(1), match.group(2)))
        wavelengths += [_um(*more) for more in _ALONE.findall(match.group(3) or "")]
    wavelengths += [_um(*match) for match in _LASER.findall(text)]
    if not wavelengths and _ALONE.fullmatch(text):
        wavelengths = [_um(*_ALONE.findall(text)[0])]
    pols = {match.upper() for match in _POL.findall(text)} if len(text) <= 60 else set()
    names = {}
    for key, pattern in _NAMES.items():
        named = pattern.search(text)
        if named and (named.group(1) or _is_name(named.group(2))):
            names[key] = named.group(2).strip()
    return Context(tuple(dict.fromkeys(wavelengths)), pols.pop() if len(pols) == 1 else None, names, *_quantity(text))


def _is_name(word: str) -> bool:
    """`Lot A17` and `Lot B` name a lot, `Lot release` and `Wafer map` do not."""
    return any(mark.isdigit() for mark in word) or (len(word) == 1 and word.isupper())


def _quantity(text: str) -> tuple[str | None, str | None]:
    heading = parse_heading(text)
    if heading.meaning == "effective_index" or (heading.meaning == "angle" and heading.unit):
        return heading.meaning, heading.unit
    return None, None


def _pair(label: str, beside: Cell) -> Context:
    """A label in one cell and its value in the next: `Lot:` | `A17`, `λ (nm)` | 632.8."""
    heading = parse_heading(neat(label).rstrip(" :="))
    if (
        is_blank(beside)
        or heading.meaning is None
        or (isinstance(beside, str) and parse_heading(beside).known and heading.meaning != "pol")
    ):
        return Context()
    if heading.meaning == "wavelength":
        return _wavelength_pair(heading.unit, beside)
    if heading.meaning == "pol" and isinstance(beside, str):
        said = clean(beside).casefold()
        return Context(pol=POLARISATIONS.get(said))
    names = {}
    if heading.meaning in ("lot", "wafer", "site", "tool", "measured_at"):
        names[heading.meaning] = beside.isoformat() if hasattr(beside, "isoformat") else plain_text(beside)
    elif heading.meaning == "temperature_C" and heading.unit in (None, "C") and isinstance(beside, int | float):
        names["temperature_C"] = str(float(beside))
    return Context(names=names)


def _wavelength_pair(unit: str | None, beside: Cell) -> Context:
    text = neat(str(beside))
    typed = _ALONE.findall(text)
    if typed:
        return Context(tuple(_um(*match) for match in typed))
    try:
        value = number(beside, None, 0.15, 20_000.0)
    except Unreadable:
        return Context()
    guessed = unit or ("nm" if value > 100.0 else "um")
    return Context((to_um(value, guessed if guessed in PER_UM else "nm"),))


def _um(value: str, unit: str, *_: str) -> float:
    name = "angstrom" if unit.casefold() == "å" else unit.casefold().replace("μ", "u")
    return to_um(float(value.replace(",", ".")), name)


def plain_text(value: Cell) -> str:
    """A name as text: 7.0 typed in a number cell is `7`."""
    if isinstance(value, float) and value.is_integer():
        return str(int(value))
    return " ".join(str(value).split())
