"""Single cells into the fields of a reading, in the units of the records; each raises Unreadable with its reason."""

from __future__ import annotations

import datetime
import re
from collections.abc import Callable

from .figures import Unreadable, angle_deg, clean, number, split_unit
from .grid import Cell
from .headings import PER_UM, to_um
from .plan import NM_RANGE, TO_MM
from .titles import plain_text
from .vocabulary import NO_READING, UNITS

MAX_XY_MM = 300.0  # no wafer reaches further from its centre
TEMPERATURE_C = (-50.0, 250.0)  # a prism coupler with a heated stage, generously
MAX_INDEX = 5.0  # above any film a prism can couple to
MAX_U = {"angle": 5.0, "effective_index": 0.2}  # a reading worse than this is no reading of a mode


def name(value: Cell) -> str:
    """A lot, wafer, site or tool as text."""
    if isinstance(value, datetime.date | datetime.time | datetime.timedelta):
        raise Unreadable(
            f"the cell holds the date or time {value}",
            "the spreadsheet turned a name such as 1-2 into it: type it as text",
        )
    text = plain_text(value)
    if text.startswith("#") and re.fullmatch(r"#[A-Z/0]+[!?]?|#N/A", text):
        raise Unreadable(f"the cell holds the spreadsheet error {text}", "mend the formula or type the name")
    return text


def no_reading(value: Cell) -> bool:
    """Whether a reading cell is blank or says in words that there is no reading."""
    return value is None or (isinstance(value, str) and clean(value).casefold() in NO_READING)


def wavelength_um(value: Cell, style: str | None, unit: str, heading_has_unit: bool) -> float:
    """A wavelength in µm as typed; the cell may carry its own unit if that agrees with the heading."""
    low, high = (limit * 1e-3 * PER_UM[unit] for limit in NM_RANGE)
    if isinstance(value, str):
        value, typed = split_unit(clean(value))
        own = UNITS.get((typed or "").casefold().replace("µ", "μ"))
        if own in PER_UM and own != unit:
            if heading_has_unit:
                raise Unreadable(f"'{value} {typed}' under a heading in {_shown(unit)}", "use one unit in the column")
            unit = str(own)
            low, high = (limit * 1e-3 * PER_UM[unit] for limit in NM_RANGE)
        elif typed is not None and own not in PER_UM:
            raise Unreadable(f"'{value} {typed}' is no wavelength", "give the wavelength in nm")
    found = number(value, style, low, high)
    if low <= found <= high:
        return to_um(found, unit)
    fits = [other for other in PER_UM if 0.2 <= found / PER_UM[other] <= 3.0 and other != unit]
    hint = f"it may be in {' or '.join(_shown(other) for other in fits)}: " if fits else ""
    raise Unreadable(
        f"{found:g} {_shown(unit)} is no possible wavelength", f"{hint}correct the number or the unit in the heading"
    )


def _shown(unit: str) -> str:
    return {"nm": "nm", "um": "µm", "angstrom": "Å"}[unit]


def angle(value: Cell, style: str | None, unit: str) -> float:
    """A coupling angle in degrees, between -90 and 90."""
    found = angle_deg(value, style, unit)
    if not -90.0 < found < 90.0:
        raise Unreadable(
            f"an angle of {found:g} degrees", "it must lie between -90 and 90: look for a lost decimal mark"
        )
    return found


def effective_index(value: Cell, style: str | None) -> float:
    """An effective index, above 1 and below MAX_INDEX."""
    found = number(clean(value) if isinstance(value, str) else value, style, 1.0, MAX_INDEX)
    if not 1.0 <= found <= MAX_INDEX:
        raise Unreadable(
            f"an effective index of {found:g}", f"it must lie between 1 and {MAX_INDEX:g}: is this column an angle?"
        )
    return found


def uncertainty(value: Cell, style: str | None, unit: str, quantity: str) -> float:
    """A standard uncertainty in the unit of the records (degrees, or 1)."""
    scale = {"deg": 1.0, "arcmin": 1.0 / 60.0, "arcsec": 1.0 / 3600.0, "1": 1.0}[unit]
    if isinstance(value, str):
        value = split_unit(clean(value))[0] if unit != "1" else clean(value)
    found = number(value, style, 0.0, MAX_U[quantity] / scale) * scale
    if found <= 0.0:
        raise Unreadable(
            f"a standard uncertainty of {found:g}", "it must be above zero: leave it blank if it is not known"
        )
    if found > MAX_U[quantity]:
        raise Unreadable(
            f"a standard uncertainty of {found:g}",
            f"at most {MAX_U[quantity]:g} can be that of a mode: check unit and column",
        )
    return found


def millimetres(value: Cell, style: str | None, unit: str) -> float:
    """A position on the wafer in mm."""
    if isinstance(value, str):
        value = split_unit(clean(value))[0]
    found = number(value, style, -MAX_XY_MM / TO_MM[unit], MAX_XY_MM / TO_MM[unit]) * TO_MM[unit]
    if abs(found) > MAX_XY_MM:
        raise Unreadable(
            f"a position of {found:g} mm", f"it must lie within {MAX_XY_MM:g} mm of the centre: check the unit"
        )
    return found


def celsius(value: Cell, style: str | None, unit: str) -> float:
    """A temperature in °C."""
    convert: dict[str, Callable[[float], float]] = {
        "C": lambda t: t,
        "K": lambda t: t - 273.15,
        "F": lambda t: (t - 32.0) / 1.8,
    }
    if isinstance(value, str):
        value = split_unit(clean(value))[0]
    found = convert[unit](number(value, style, -500.0, 1000.0))
    if not TEMPERATURE_C[0] <= found <= TEMPERATURE_C[1]:
        raise Unreadable(
            f"a temperature of {found:g} °C",
            f"it must lie between {TEMPERATURE_C[0]:g} and {TEMPERATURE_C[1]:g} °C: is the column in kelvin?",
        )
    return found


def moment(day: Cell, clock: Cell = None) -> str:
    """When it was measured: ISO 8601 where the order of day and month is certain, else as typed."""
    if isinstance(day, datetime.datetime | datetime.date):
        if isinstance(clock, datetime.time):
            return datetime.datetime.combine(day, clock).isoformat(timespec="minutes")
        midnight = isinstance(day, datetime.datetime) and day.time() == datetime.time()
        return day.date().isoformat() if isinstance(day, datetime.datetime) and midnight else day.isoformat()
    if isinstance(day, int | float):
        raise Unreadable(f"the number {day} where a date is due", "type the date as 2031-05-17")
    text = plain_text(day)
    dotted = re.fullmatch(r"(\d{1,2})\.(\d{1,2})\.(\d{4})(.*)", text)
    slashed = re.fullmatch(r"(\d{4})/(\d{1,2})/(\d{1,2})(.*)", text)
    if dotted:
        text = f"{dotted.group(3)}-{int(dotted.group(2)):02d}-{int(dotted.group(1)):02d}{dotted.group(4)}"
    elif slashed:
        text = f"{slashed.group(1)}-{int(slashed.group(2)):02d}-{int(slashed.group(3)):02d}{slashed.group(4)}"
    if clock is not None and re.fullmatch(r"\d{4}-\d{2}-\d{2}", text):
        text = f"{text}T{clock.isoformat('minutes') if isinstance(clock, datetime.time) else plain_text(clock)}"
    return text


def titled_moment(said: str | None) -> str | None:
    """The date of a title in the form that `moment` gives."""
    return None if said is None else moment(said)
