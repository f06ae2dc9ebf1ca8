"""What only shows when all tables are read: rows twice, one laser written in two ways, one site in two places.

Repeated readings with different values are kept: they are repeats. Two readings alike in every field are one typed
or pasted twice. Wavelengths 0.5 nm apart or less at one site are one laser written in two ways.
"""

from __future__ import annotations

from collections import defaultdict

from ..records import Place, Reading
from .grid import Findings

SAME_LASER_UM = 0.0005
SAME_PLACE_MM = 0.5


def cross_check(readings: list[Reading], findings: Findings) -> None:
    """Checks over all readings of all files; faults name the later of two places."""
    _duplicates(readings, findings)
    sites: dict[tuple[str | None, str | None, str | None], list[Reading]] = defaultdict(list)
    for reading in readings:
        sites[reading.site_key].append(reading)
    for found in sites.values():
        _one_laser(found, findings)
        _one_position(found, findings)
        _one_wafer(found, findings)
    _one_spelling(readings, findings)


def _same(place: Place, here: Place) -> str:
    """Where the other place is, as seen from here."""
    where = [place.file] if place.file != here.file else []
    where += [f"sheet {place.sheet}"] if place.sheet and (where or place.sheet != here.sheet) else []
    return ", ".join([*where, f"row {place.row}"])


def _fields(reading: Reading) -> tuple[object, ...]:
    r = reading
    return (
        *r.site_key,
        r.quantity,
        r.value,
        r.wavelength_um,
        r.pol,
        r.order,
        r.u,
        r.x_mm,
        r.y_mm,
        r.measured_at,
        r.tool,
        r.temperature_C,
    )


def _duplicates(readings: list[Reading], findings: Findings) -> None:
    seen: dict[tuple[object, ...], Reading] = {}
    for reading in readings:
        key = _fields(reading)
        first = seen.setdefault(key, reading)
        if first is not reading:
            findings.fault(
                reading.place,
                f"the same reading as in {_same(first.place, reading.place)}",
                "each reading once is required",
                "delete one of the two, or tell repeats apart by the time in a column measured_at",
            )


def _one_laser(readings: list[Reading], findings: Findings) -> None:
    lines: dict[float, Reading] = {}
    for reading in readings:
        for value, other in lines.items():
            if 0.0 < abs(value - reading.wavelength_um) <= SAME_LASER_UM and reading.wavelength_um not in lines:
                findings.fault(
                    reading.place,
                    f"{reading.wavelength_um * 1e3:g} nm here and {value * 1e3:g} nm"
                    f" in {_same(other.place, reading.place)} at one site",
                    "one wavelength for one laser is required",
                    "write it the same everywhere",
                )
                break
        lines.setdefault(reading.wavelength_um, reading)


def _one_position(readings: list[Reading], findings: Findings) -> None:
    for axis in ("x_mm", "y_mm"):
        first: Reading | None = None
        for reading in readings:
            value = getattr(reading, axis)
            if value is None:
                continue
            if first is None:
                first = reading
            elif abs(value - getattr(first, axis)) > SAME_PLACE_MM:
                findings.fault(
                    reading.place,
                    f"{axis[0]} of site {reading.site} is {value:g} mm here"
                    f" and {getattr(first, axis):g} mm in {_same(first.place, reading.place)}",
                    "one position for one site is required",
                    "correct one of the two, or name the sites apart",
                )
                break


def _one_wafer(readings: list[Reading], findings: Findings) -> None:
    """The same site, wavelength and polarisation in two tables that name no wafer (or two files that name no lot)."""
    first = readings[0]
    if first.lot is not None and first.wafer is not None:
        return
    sources: dict[tuple[float, str], Reading] = {}
    for reading in readings:
        key = (reading.wavelength_um, reading.pol)
        earlier = sources.setdefault(key, reading)
        other_file = earlier.place.file != reading.place.file
        if other_file or (first.wafer is None and earlier.place.sheet != reading.place.sheet):
            missing = "wafer" if first.wafer is None else "lot"
            findings.fault(
                reading.place,
                f"site {reading.site or 'without name'} is read at {reading.wavelength_um * 1e3:g} nm {reading.pol}"
                f" here and in {_same(earlier.place, reading.place)}, and no {missing} is named",
                f"a {missing} is required to tell the sites apart",
                f"add a column {missing}, or a row '{missing.capitalize()}: ...' above each table",
            )
            return


def _one_spelling(readings: list[Reading], findings: Findings) -> None:
    for level in ("lot", "wafer", "site", "tool"):
        spellings: dict[tuple[object, ...], Reading] = {}
        reported = set()
        for reading in readings:
            name = getattr(reading, level)
            if name is None:
                continue
            above = {"lot": (), "tool": (), "wafer": (reading.lot,), "site": (reading.lot, reading.wafer)}[level]
            key = (*above, name.casefold())
            first = spellings.setdefault(key, reading)
            if getattr(first, level) != name and (key, name) not in reported:
                reported.add((key, name))
                findings.fault(
                    reading.place,
                    f"{level} '{name}' here and '{getattr(first, level)}' in {_same(first.place, reading.place)}",
                    "one spelling of a name is required",
                    "write it the same everywhere",
                )
