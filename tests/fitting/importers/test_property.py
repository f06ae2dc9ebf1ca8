"""One table in every spelling of its columns and numbers is the same table."""

from __future__ import annotations

import csv
import tempfile
from dataclasses import astuple, replace
from pathlib import Path

from hypothesis import given, settings
from hypothesis import strategies as st
from layerlot.fitting.importers import read_tables
from layerlot.fitting.records import Place, Reading

HEADINGS = {
    "wafer": ["wafer", "Wafer-ID", "Scheibe", "oblea"],
    "site": ["site", "Messpunkt", "Point", "Pos."],
    "wavelength_nm": ["wavelength_nm", "λ (nm)", "Wellenlänge/nm", "longueur d'onde [nm]"],
    "pol": ["pol", "Polarisation", "TE/TM"],
    "mode": ["mode", "m", "Ordnung", "Mode No."],
    "angle_deg": ["angle_deg", "Angle θ [°]", "Winkel in Grad", "Coupling angle, deg"],
    "u": ["u", "u (°)", "Unsicherheit [deg]"],
}
rows = st.lists(
    st.tuples(
        st.sampled_from(["W1", "W2"]),
        st.integers(1, 4),
        st.sampled_from([632.8, 1064.0, 1550.0]),
        st.sampled_from(["TE", "TM"]),
        st.one_of(st.none(), st.integers(0, 6)),
        st.integers(-899_999, 899_999).map(lambda n: n / 1e4),  # four decimals, as the finest tables are printed
        st.integers(1, 999).map(lambda n: n / 1e4),
    ),
    min_size=1,
    max_size=8,
    unique_by=lambda row: row[5],
)


def write(value: object, mark: str) -> str:
    """A figure as a table with this decimal mark prints it; four decimals leave no doubt about the mark."""
    if value is None:
        return ""
    return f"{value:.4f}".replace(".", mark) if isinstance(value, float) else str(value)


def readings(head: list[str], lines: list[list[str]], separator: str) -> list[tuple[object, ...]]:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "t.csv"
        with path.open("w", encoding="utf-8", newline="") as file:
            csv.writer(file, delimiter=separator).writerows([head, *lines])
        imported = read_tables([path])
    assert not imported.faults, "\n".join(map(str, imported.faults))
    return [astuple(_placeless(reading)) for reading in imported.readings]


def _placeless(reading: Reading) -> Reading:
    return replace(reading, place=Place("t.csv", None, reading.place.row))


@settings(max_examples=60, deadline=None)
@given(
    table=rows,
    order=st.permutations(list(HEADINGS)),
    choice=st.fixed_dictionaries({key: st.sampled_from(words) for key, words in HEADINGS.items()}),
    style=st.sampled_from([(".", ","), (".", ";"), (",", ";"), (".", "\t"), (",", "\t"), (",", "|")]),
)
def test_columns_in_any_order_and_decimals_in_any_style(
    table: list[tuple[object, ...]], order: list[str], choice: dict[str, str], style: tuple[str, str]
) -> None:
    """Any order and spelling of the columns, decimal mark and separator give the same readings as the plain table."""
    mark, separator = style
    keys = list(HEADINGS)
    plain = readings(keys, [[write(value, ".") for value in row] for row in table], ",")
    lines = [[write(row[keys.index(key)], mark) for key in order] for row in table]
    assert len(plain) == len(table)
    assert readings([choice[key] for key in order], lines, separator) == plain
