"""Everyday layouts of prism-coupler tables; all figures are invented."""

from __future__ import annotations

import gzip
from collections.abc import Callable
from pathlib import Path

import openpyxl
import pytest
from layerlot.fitting.importers import Imported, describe, read_tables
from layerlot.fitting.records import Reading

Rows = list[list[object]]


def workbook(path: Path, sheets: dict[str, Rows], finish: Callable[[openpyxl.Workbook], None] | None = None) -> Path:
    """Write a workbook of plain rows; `finish` may merge or hide before it is saved."""
    book = openpyxl.Workbook()
    book.remove(book.active)
    for name, rows in sheets.items():
        sheet = book.create_sheet(name)
        for row in rows:
            sheet.append(row)
    if finish is not None:
        finish(book)
    book.save(path)
    return path


def text(path: Path, content: str, encoding: str = "utf-8") -> Path:
    path.write_bytes(content.encode(encoding))
    return path


def good(*paths: Path) -> Imported:
    """Read files that must hold no fault."""
    imported = read_tables(paths)
    assert not imported.faults, "\n".join(map(str, imported.faults))
    return imported


def brief(readings: tuple[Reading, ...]) -> list[tuple[object, ...]]:
    """What identifies a reading, in a short form: site key, wavelength in nm, polarisation, order, value."""
    return [(*r.site_key, round(r.wavelength_um * 1e3, 6), r.pol, r.order, round(r.value, 9)) for r in readings]


CONTRACT_TEXT = "lot wafer site x_mm y_mm measured_at temperature_C tool wavelength_nm pol mode angle_deg u"
CONTRACT_HEADINGS = CONTRACT_TEXT.split()


def test_every_column_of_the_contract(tmp_path: Path) -> None:
    """The columns by their plain names fill every field of a reading, in the units of the records."""
    row = ["A1", "W3", 5, 10.5, -20, "2031-05-17", 22.5, "PC-2", 632.8, "TE", 0, 12.61, 0.01]
    imported = good(workbook(tmp_path / "a.xlsx", {"Readings": [CONTRACT_HEADINGS, row]}))
    (reading,) = imported.readings
    assert reading.site_key == ("A1", "W3", "5")
    assert (reading.x_mm, reading.y_mm, reading.temperature_C, reading.u) == (10.5, -20.0, 22.5, 0.01)
    assert (reading.tool, reading.measured_at, reading.pol, reading.order) == ("PC-2", "2031-05-17", "TE", 0)
    assert reading.wavelength_um == pytest.approx(0.6328, abs=1e-15)  # one rounding of a double
    assert reading.value == 12.61
    assert str(reading.place).endswith('sheet Readings/row 2/column L "angle_deg"')


def test_titles_units_and_notes(tmp_path: Path) -> None:
    """Title rows above, units in headings, a column of notes and a unit nobody asked for do not disturb."""
    rows: Rows = [
        ["Prism readings of SiN 500 nm on 3 µm oxide"],
        ["Operator", "K. Example"],
        ["Lot:", "A17"],
        [],
        ["Wafer-ID", "Site No.", "λ (µm)", "Polarisation", "Mode", "Angle θ [°]", "Remark"],
        ["W1", 1, 0.6328, "TE", "TE0", 12.61, "sharp"],
        ["W1", 1, 0.6328, "TM", "TM0", 15.2, None],
    ]
    imported = good(workbook(tmp_path / "a.xlsx", {"Tabelle1": rows}))
    assert brief(imported.readings) == [
        ("A17", "W1", "1", 632.8, "TE", 0, 12.61),
        ("A17", "W1", "1", 632.8, "TM", 0, 15.2),
    ]
    (table,) = imported.tables
    assert table.header_row == 5
    assert "not used" in table.columns[-1].words


def test_german_text_with_decimal_commas(tmp_path: Path) -> None:
    """German headings, semicolons, decimal commas, thousands points and Windows-1252 are read."""
    content = (
        "Los;Scheibe;Messpunkt;Wellenlänge/nm;Polarisation;Ordnung;Einkoppelwinkel [°]\r\n"
        "L5;1;Mitte;632,8;TE;0;12,61\r\nL5;1;Mitte;1.550;TM;;-3,25\r\n"
    )
    imported = good(text(tmp_path / "a.csv", content, "cp1252"))
    assert brief(imported.readings) == [
        ("L5", "1", "Mitte", 632.8, "TE", 0, 12.61),
        ("L5", "1", "Mitte", 1550.0, "TM", None, -3.25),
    ]


@pytest.mark.parametrize(
    "heading",
    [
        "wafer,site,longueur d'onde (nm),polarisation,ordre,angle de couplage (degrés)",
        "oblea,punto,longitud de onda (nm),polarización,orden,ángulo (grados)",
        "fetta,sito,lunghezza d'onda [nm],polarizzazione,ordine,angolo (°)",
        "wafer,plek,golflengte nm,polarisatie,modus,inkoppelhoek (°)",
        "ウェハ,測定点,波長 (nm),偏光,モード,角度 (°)",
        "晶圆,测点,波长(nm),偏振,模式,角度(°)",
        "WAFER NO,POINT,WL_NM,POL,M,THETA_DEG",
        "Wafer #,Pos.,lambda [nm],TE/TM,mode no.,coupling angle / deg",
    ],
)
def test_headings_in_many_spellings(tmp_path: Path, heading: str) -> None:
    """Common languages and spellings of the same six headings give the same readings."""
    imported = good(text(tmp_path / "a.csv", f"{heading}\n7,2,632.8,TE,1,12.61\n7,2,632.8,TM,0,15.5\n"))
    assert brief(imported.readings) == [
        (None, "7", "2", 632.8, "TE", 1, 12.61),
        (None, "7", "2", 632.8, "TM", 0, 15.5),
    ]


def test_merged_cells_and_blanks_below_the_first(tmp_path: Path) -> None:
    """A merged wafer holds for all its rows; a blank takes the value above; a new wafer ends the site."""
    rows: Rows = [
        ["Lot", "Wafer", "Site", "Wavelength (nm)", "Pol", "Mode", "Angle (deg)"],
        ["L1", "W1", "a", 632.8, "TE", 0, 12.0],
        [None, None, None, None, "TE", 1, 20.0],
        [None, None, "b", None, "TE", 0, 12.1],
        [],
        [None, "W2", None, 1550, "TE", 0, 5.0],
    ]

    def merge(book: openpyxl.Workbook) -> None:
        book["S"].merge_cells("B2:B4")
        book["S"].merge_cells("D2:D4")

    imported = good(workbook(tmp_path / "a.xlsx", {"S": rows}, merge))
    assert brief(imported.readings) == [
        ("L1", "W1", "a", 632.8, "TE", 0, 12.0),
        ("L1", "W1", "a", 632.8, "TE", 1, 20.0),
        ("L1", "W1", "b", 632.8, "TE", 0, 12.1),
        ("L1", "W2", None, 1550.0, "TE", 0, 5.0),
    ]


def test_names_on_lines_of_their_own(tmp_path: Path) -> None:
    """A line that only names a wafer holds for the rows below it; a line of words is a note and holds for nothing."""
    rows: Rows = [
        ["Wafer", "Site", "Wavelength nm", "Pol", "Angle (deg)"],
        ["W1"],
        [None, 1, 632.8, "TE", 12.0],
        ["prism cleaned here"],
        [None, 2, 632.8, "TE", 12.1],
        ["W2"],
        [None, 1, 632.8, "TE", 12.2],
    ]
    imported = good(workbook(tmp_path / "a.xlsx", {"S": rows}))
    assert [r.site_key[1:] for r in imported.readings] == [("W1", "1"), ("W1", "2"), ("W2", "1")]
    assert "note ('prism cleaned here')" in [reason for _, reason in imported.skipped]


def test_wide_table_with_wavelength_in_the_title(tmp_path: Path) -> None:
    """One row a site, a column a mode: wavelength from the title, polarisation and order from the headings."""
    rows: Rows = [
        ["Coupling angles (°), λ = 632,8 nm"],
        ["Wafer", "Site", "TE₀", "TE-1", "TM 0", "TM_1"],
        ["W1", 1, 12.61, 22.4, 15.2, "-"],
        ["W1", 2, 12.63, 22.5, None, 25.5],
    ]
    imported = good(workbook(tmp_path / "a.xlsx", {"S": rows}))
    assert brief(imported.readings) == [
        (None, "W1", "1", 632.8, "TE", 0, 12.61),
        (None, "W1", "1", 632.8, "TE", 1, 22.4),
        (None, "W1", "1", 632.8, "TM", 0, 15.2),
        (None, "W1", "2", 632.8, "TE", 0, 12.63),
        (None, "W1", "2", 632.8, "TE", 1, 22.5),
        (None, "W1", "2", 632.8, "TM", 1, 25.5),
    ]


@pytest.mark.parametrize("merged", [True, False])
def test_wide_table_under_three_rows_of_headings(tmp_path: Path, merged: bool) -> None:
    """Wavelength over polarisation over mode number, merged or with blanks to the right, is one heading."""
    rows: Rows = [
        [None, "632.8 nm", None, None, "1550 nm", None],
        [None, "TE", None, "TM", "TE", "TM"],
        ["Site", 0, 1, 0, 0, 0],
        ["c", 12.6, 22.4, 15.2, 30.1, 33.3],
    ]

    def merge(book: openpyxl.Workbook) -> None:
        for area in ("B1:D1", "E1:F1", "B2:C2"):
            book["S"].merge_cells(area)

    imported = good(workbook(tmp_path / "a.xlsx", {"S": rows}, merge if merged else None))
    assert brief(imported.readings) == [
        (None, None, "c", 632.8, "TE", 0, 12.6),
        (None, None, "c", 632.8, "TE", 1, 22.4),
        (None, None, "c", 632.8, "TM", 0, 15.2),
        (None, None, "c", 1550.0, "TE", 0, 30.1),
        (None, None, "c", 1550.0, "TM", 0, 33.3),
    ]


def test_wide_table_with_everything_in_one_heading(tmp_path: Path) -> None:
    """`N TE0 @ 1550 nm` names quantity, polarisation, order and wavelength at once."""
    content = "wafer\tsite\tN TE0 @ 632.8 nm\tN_TM0 (1550 nm)\nW1\t1\t1.8532\t1.6101\n"
    imported = good(text(tmp_path / "a.tsv", content))
    assert [r.quantity.value for r in imported.readings] == ["effective_index", "effective_index"]
    assert brief(imported.readings) == [
        (None, "W1", "1", 632.8, "TE", 0, 1.8532),
        (None, "W1", "1", 1550.0, "TM", 0, 1.6101),
    ]


def test_polarisation_as_columns_beside_a_mode_column(tmp_path: Path) -> None:
    """Columns TE and TM beside a column of mode numbers are two readings a row."""
    content = "site;wavelength nm;m;TE (°);TM (°)\n1;632,8;0;12,61;15,2\n1;632,8;1;22,4;k.A.\n"
    imported = good(text(tmp_path / "a.csv", content))
    assert [(r.pol, r.order, r.value) for r in imported.readings] == [
        ("TE", 0, 12.61),
        ("TM", 0, 15.2),
        ("TE", 1, 22.4),
    ]


def test_degrees_minutes_and_seconds(tmp_path: Path) -> None:
    """12°36', 12 36 30, 12:36 and a minus sign before the degrees are degrees and minutes."""
    content = (
        "site\twavelength (nm)\tpol\tangle\n1\t632.8\tTE\t12°36'\n1\t632.8\tTE\t12 36 30\n1\t632.8\tTM\t-0:30\n"
        "1\t632.8\tTM\t20° 15′ 36″\n1\t632.8\tTM\t30\n"
    )
    imported = good(text(tmp_path / "a.txt", content))
    # 36/60, 36/60 + 30/3600, 30/60, 15/60 + 36/3600 by hand
    expected = [12.6, 12.0 + 36 / 60 + 30 / 3600, -0.5, 20.26, 30.0]
    assert [r.value for r in imported.readings] == pytest.approx(expected, abs=1e-12)  # rounding of a double


def test_several_tables_and_sheets(tmp_path: Path) -> None:
    """Tables one below the other with their own titles, and sheets named after a wafer, keep their readings apart."""
    block: Rows = [["Site", "Pol", "Mode", "Angle (°)"], [1, "TE", 0, 12.0], [1, "TM", 0, 15.0], []]
    rows: Rows = [["Lot", "L9"], ["Wafer 7, λ = 632.8 nm"], *block, ["Wafer 8"], *block]
    other: Rows = [["λ (nm)", 1550], *block]
    imported = good(workbook(tmp_path / "a.xlsx", {"first": rows, "W11": other, "notes": [["nothing here"]]}))
    assert [(*r.site_key, r.wavelength_um, r.pol) for r in imported.readings] == [
        ("L9", "7", "1", pytest.approx(0.6328), "TE"),
        ("L9", "7", "1", pytest.approx(0.6328), "TM"),
        ("L9", "8", "1", pytest.approx(0.6328), "TE"),
        ("L9", "8", "1", pytest.approx(0.6328), "TM"),
        (None, "W11", "1", 1.55, "TE"),
        (None, "W11", "1", 1.55, "TM"),
    ]
    assert any("no table of readings" in words for _, words in imported.remarks)


def test_tables_side_by_side(tmp_path: Path) -> None:
    """Two tables beside each other, each under its own title, are two tables."""
    rows: Rows = [
        ["Lot L3"],
        ["Wafer 1", None, None, None, None, "Wafer 2"],
        ["Site", "λ", "Pol", "Angle (°)", None, "Site", "λ", "Pol", "Angle (°)"],
        ["a", 632.8, "TE", 12.0, None, "a", 632.8, "TE", 12.5],
        ["b", 632.8, "TE", 12.1, None, "b", 632.8, "TM", 15.5],
    ]
    imported = good(workbook(tmp_path / "a.xlsx", {"S": rows}))
    assert brief(imported.readings) == [
        ("L3", "1", "a", 632.8, "TE", None, 12.0),
        ("L3", "1", "b", 632.8, "TE", None, 12.1),
        ("L3", "2", "a", 632.8, "TE", None, 12.5),
        ("L3", "2", "b", 632.8, "TM", None, 15.5),
    ]


def test_summaries_marks_units_and_repeated_headings_are_left_out(tmp_path: Path) -> None:
    """Rows of units, means, spreads, 'no dip' marks and repeated headings are left out, each with its reason."""
    head: list[object] = ["Wafer", "Site", "Wavelength", "Pol", "Mode", "Angle"]
    rows: Rows = [
        head,
        [None, None, "nm", None, None, "°"],
        ["W1", 1, 632.8, "TE", 0, 12.0],
        ["W1", 2, 632.8, "TE", 0, "no dip"],
        head,
        ["W1", 3, 632.8, "TE", 0, 12.2],
        ["W1", 4, 632.8, "TE", 0, None],
        ["mean", None, None, None, None, 12.1],
        ["Std. dev", None, None, None, None, 0.1],
        [],
        ["* lamp replaced in the week before"],
    ]
    imported = good(workbook(tmp_path / "a.xlsx", {"S": rows}))
    assert [r.site for r in imported.readings] == ["1", "3"]
    assert [(place.row, reason) for place, reason in imported.skipped] == [
        (2, "units of the columns"),
        (4, "no reading ('no dip')"),
        (5, "the heading repeated"),
        (7, "no reading (the cell is blank)"),
        (8, "summary row ('mean')"),
        (9, "summary row ('Std. dev')"),
        (11, "note ('* lamp replaced in the week before')"),
    ]


def test_angle_and_index_side_by_side(tmp_path: Path) -> None:
    """Where a sheet has both angle and effective index of a mode, the angle is used and the report says so."""
    content = "site,wavelength_nm,pol,mode,angle_deg,N\n1,632.8,TE,0,12.61,1.8532\n"
    imported = good(text(tmp_path / "a.csv", content))
    assert [r.quantity.value for r in imported.readings] == ["angle_deg"]
    assert any("not used" in remark for remark in imported.tables[0].remarks)


def test_s_and_p_are_te_and_tm(tmp_path: Path) -> None:
    """s is read as TE and p as TM (common practice, no source), and a remark says so."""
    imported = good(text(tmp_path / "a.csv", "site,wavelength_nm,pol,angle_deg\n1,632.8,s,12.61\n1,632.8,p,15.5\n"))
    assert [r.pol for r in imported.readings] == ["TE", "TM"]
    assert any("s is read as TE" in remark for remark in imported.tables[0].remarks)


@pytest.mark.parametrize("encoding", ["utf-8", "utf-8-sig", "utf-16", "utf-16-le", "utf-16-be", "cp1252"])
@pytest.mark.parametrize("packed", [True, False])
def test_encodings_and_gz(tmp_path: Path, encoding: str, packed: bool) -> None:
    """The usual encodings, with and without byte-order mark, plain and as gz, give the same reading."""
    data = "# Wafer: Ä7\nsite;Wellenlänge (µm);Pol;Winkel (°)\nMitte;0,6328;TE;12,61\n".encode(encoding)
    path = tmp_path / ("a.csv.gz" if packed else "a.csv")
    path.write_bytes(gzip.compress(data) if packed else data)
    imported = good(path)
    assert brief(imported.readings) == [(None, "Ä7", "Mitte", 632.8, "TE", None, 12.61)]


@pytest.mark.parametrize(
    "content",
    [
        "site\tλ (nm)\tpol\tmode\tAngle θ [°]\nc\t632.8\tTE\t0\t12.61\n",
        "sep=;\nsite;wavelength_nm;pol;mode;angle_deg\nc;632.8;TE;0;12.61\n",
        "# lambda = 632.8 nm\n# site pol mode angle_deg\nc TE 0 12.61\n",
        "site   wavelength (nm)   pol   mode   angle (deg)\nc      632.8             TE    0      12.61\n",
        "site | wavelength (nm) | pol | mode | angle\nc | 632.8 | TE | 0 | 12.61 deg\n",
        'site,wavelength_nm,pol,mode,"angle,\nin deg"\nc,"632,8",TE,0,"12,61"\n',
        "site\twavelength [Å]\tpol\tmode\tangle (arcmin)\nc\t6328\tTE\t0\t756.6\n",
        "site,temperature (K),x (cm),wavelength,pol,mode,angle\nc,295.65,1.5,0.6328,TE,0,12.61\n",
        "site,date,time,wavelength,pol,mode,angle\nc,17.05.2031,14:20,632.8 nm,TE,TE0,12.61°\n",
        "site,wavelength_nm,pol,mode,angle_deg\nc,632.8,TE,m=0,12.61 (weak)\n",
    ],
)
def test_text_layouts(tmp_path: Path, content: str) -> None:
    """Separators, comment signs, quotes, units in cells and other units all lead to the same reading."""
    imported = good(text(tmp_path / "a.txt", content))
    assert brief(imported.readings) == [(None, None, "c", 632.8, "TE", 0, 12.61)]
    reading = imported.readings[0]
    assert reading.temperature_C in (None, pytest.approx(22.5, abs=1e-9))  # 295.65 K - 273.15 K, rounding
    assert reading.x_mm in (None, 15.0)
    assert reading.measured_at in (None, "2031-05-17T14:20")


def test_sections_with_their_own_wavelength(tmp_path: Path) -> None:
    """A line between the rows that states the wavelength holds for the rows below it, and a titled date becomes ISO."""
    content = (
        "Lot B, Wafer 12\nDate: 17.05.2031\n\nsite;pol;m;angle (deg)\n"
        "λ = 632.8 nm;;;\n1;TE;0;12.61\nλ = 1550 nm;;;\n1;TE;0;5.61\n"
    )
    imported = good(text(tmp_path / "a.csv", content))
    assert brief(imported.readings) == [
        ("B", "12", "1", 632.8, "TE", 0, 12.61),
        ("B", "12", "1", 1550.0, "TE", 0, 5.61),
    ]
    assert {r.measured_at for r in imported.readings} == {"2031-05-17"}


def test_tables_without_any_name_are_sites_of_their_own(tmp_path: Path) -> None:
    """A table without lot, wafer and site is one site; several such are named by sheet and do not mix."""
    rows: Rows = [["λ = 632.8 nm"], ["pol", "mode", "angle_deg"], ["TE", 0, 12.0]]
    one = good(workbook(tmp_path / "one.xlsx", {"S": rows}))
    assert [r.site_key for r in one.readings] == [(None, None, None)]
    two = good(workbook(tmp_path / "two.xlsx", {"left": rows, "right": rows}))
    assert [r.site for r in two.readings] == ["left", "right"]


def test_formulas_with_stored_values_are_read(tmp_path: Path) -> None:
    """A formula that was saved with its value counts as that value, and a remark says how many there were."""
    rows: Rows = [["site", "wavelength_nm", "pol", "angle_deg"], [1, 632.8, "TE", "=12+0.61"]]
    path = workbook(tmp_path / "a.xlsx", {"S": rows})
    import zipfile

    parts = {}
    with zipfile.ZipFile(path) as archive:
        for name in archive.namelist():
            parts[name] = archive.read(name)
    sheet = "xl/worksheets/sheet1.xml"
    parts[sheet] = parts[sheet].replace(b"<v></v>", b"<v>12.61</v>").replace(b"<v />", b"<v>12.61</v>")
    with zipfile.ZipFile(path, "w") as archive:
        for name, data in parts.items():
            archive.writestr(name, data)
    imported = good(path)
    assert imported.readings[0].value == 12.61
    assert any("formulas" in remark for remark in imported.tables[0].remarks)


def test_sheet_marked_not_data_is_left_out(tmp_path: Path) -> None:
    """A sheet whose first cell begins with NOT DATA is not read, however much it looks like readings."""
    rows: Rows = [["site", "wavelength_nm", "pol", "angle_deg"], [1, 632.8, "TE", 12.6]]
    imported = good(workbook(tmp_path / "a.xlsx", {"How to": [["NOT DATA: an example"], *rows], "Data": rows}))
    assert len(imported.readings) == 1
    assert any("NOT DATA" in words for _, words in imported.remarks)


def test_description_answers_first(tmp_path: Path) -> None:
    """The text for a person begins with the count of readings and sites and names every column and left-out row."""
    content = "site,wavelength_nm,pol,mode,angle_deg,comment\n1,632.8,TE,0,12.61,\n2,632.8,TE,0,-,no dip seen\n"
    told = describe(good(text(tmp_path / "a.csv", content)))
    assert told.startswith("1 reading of 1 site in 1 table of 1 file.\nNothing stands in the way of a fit.\n")
    assert "coupling angle in degrees" in told
    assert "left out: row 3: no reading ('-')" in told
