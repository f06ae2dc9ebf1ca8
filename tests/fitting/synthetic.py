"""From the synthetic tables of `tests.reference.truth` to the records that the fit takes."""

from __future__ import annotations

from collections.abc import Iterable, Mapping

from layerlot.fitting.records import Place, Quantity, Reading


def readings_of(rows: Iterable[Mapping[str, object]], wafer: str = "W1") -> list[Reading]:
    """Readings as an importer would make them of the rows; all on one wafer unless a row names its own."""
    return [
        Reading(
            quantity=Quantity.ANGLE,
            value=float(str(row["angle_deg"])),
            wavelength_um=float(str(row["wavelength_nm"])) / 1000,
            pol=str(row["pol"]),
            place=Place("synthetic.csv", None, number, None),
            order=None if row["mode"] is None else int(str(row["mode"])),
            lot="L1",
            wafer=wafer,
            site=str(row["site"]),
        )
        for number, row in enumerate(rows, start=2)
    ]
