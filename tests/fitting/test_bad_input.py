"""Hand-made faults in data files: each is refused with its place, what it was and what to do. All figures are invented."""

from __future__ import annotations

import gzip
import io
import zipfile
from collections.abc import Callable
from dataclasses import dataclass
from datetime import datetime, time
from pathlib import Path

import openpyxl
import pytest
from layerlot.fitting.cli import main
from layerlot.fitting.importers import read_tables

Rows = list[list[object]]
HEAD: list[object] = ["wafer", "site", "wavelength_nm", "pol", "mode", "angle_deg"]
GOOD: list[object] = ["W1", 1, 632.8, "TE", 0, 12.61]
LIMIT_MB = 50  # as the importer states it in its message


@dataclass(frozen=True)
class Case:
    """One fault: how to build the file, the end of the place it must name, and words its message must hold."""

    name: str
    build: Callable[[Path], Path | list[Path]]
    place: str
    words: tuple[str, ...]


def sheet(*rows: list[object], finish: Callable[[openpyxl.Workbook], None] | None = None) -> Callable[[Path], Path]:
    """A builder of a workbook with one sheet S."""

    def build(folder: Path) -> Path:
        book = openpyxl.Workbook()
        book.active.title = "S"
        for row in rows:
            book.active.append(row)
        if finish is not None:
            finish(book)
        path = folder / "readings.xlsx"
        book.save(path)
        return path

    return build


def cell(column: str, value: object) -> Callable[[Path], Path]:
    """A builder of a good row with one bad cell, below a good row."""
    row = [value if heading == column else good for heading, good in zip(HEAD, GOOD)]
    return sheet(HEAD, ["W1", 2, 632.8, "TE", 0, 12.7], row)


def content(data: bytes | str, name: str = "readings.csv") -> Callable[[Path], Path]:
    """A builder of a file with given bytes."""

    def build(folder: Path) -> Path:
        path = folder / name
        path.write_bytes(data.encode() if isinstance(data, str) else data)
        return path

    return build


def heading(old: str, new: str, value: object | None = None) -> Callable[[Path], Path]:
    """A builder of a good table with one heading changed, and the cell below it if a value is given."""
    head = [new if text == old else text for text in HEAD]
    row = [value if text == old and value is not None else good for text, good in zip(HEAD, GOOD)]
    return sheet(head, row)


def archive(names: dict[str, bytes]) -> bytes:
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w", zipfile.ZIP_DEFLATED) as packed:
        for name, data in names.items():
            packed.writestr(name, data)
    return buffer.getvalue()


def hide_column(book: openpyxl.Workbook) -> None:
    book["S"].column_dimensions["F"].hidden = True


def hide_row(book: openpyxl.Workbook) -> None:
    book["S"].row_dimensions[2].hidden = True


def hide_sheet(book: openpyxl.Workbook) -> None:
    book.create_sheet("Cover").append(["nothing to read"])
    book["S"].sheet_state = "hidden"


def stray_cell(book: openpyxl.Workbook) -> None:
    book["S"].cell(1_000_000, 50).value = "x"


def merge_angles(book: openpyxl.Workbook) -> None:
    book["S"].merge_cells("F2:F3")


def sparse(folder: Path) -> Path:
    path = folder / "readings.csv"
    with path.open("wb") as file:
        file.truncate(100_000_000)
    return path


def huge_sheet(folder: Path) -> Path:
    path = folder / "readings.xlsx"
    parts = {"xl/workbook.xml": b"<workbook/>", "xl/worksheets/sheet1.xml": b" " * 100_000_000}
    path.write_bytes(archive(parts))
    return path


def unpacks_too_large(folder: Path) -> Path:
    path = folder / "readings.csv.gz"
    with gzip.open(path, "wb", compresslevel=1) as file:
        file.write(b" " * (LIMIT_MB * 1_000_000 + 10))
    return path


def same_file_twice(folder: Path) -> list[Path]:
    first = sheet(HEAD, GOOD)(folder)
    second = folder / "copy.xlsx"
    second.write_bytes(first.read_bytes())
    return [first, second]


def lots_not_named(folder: Path) -> list[Path]:
    paths = []
    for name, angle in (("one.csv", 12.61), ("two.csv", 12.7)):
        path = folder / name
        path.write_text(f"wafer,site,wavelength_nm,pol,mode,angle_deg\nW1,1,632.8,TE,0,{angle}\n")
        paths.append(path)
    return paths


ANGLE = 'S/row 3/column F "angle_deg"'
TWO_PLACES: Rows = [
    ["wafer", "site", "x_mm", "wavelength_nm", "pol", "angle_deg"],
    ["W1", 1, 0, 632.8, "TE", 12.61],
    ["W1", 1, 30, 632.8, "TM", 15.2],
]
CASES = [
    # cells of readings
    Case("text in a number", cell("angle_deg", "see notebook"), ANGLE, ("'see notebook'", "number alone")),
    Case("a guessed mark", cell("angle_deg", "12.6?"), ANGLE, ("'12.6?'", "number alone")),
    Case("digits in brackets", cell("angle_deg", "12.61(5)"), ANGLE, ("12.61(5)", "uncertainty", "column u")),
    Case("a truth value", cell("angle_deg", True), ANGLE, ("True", "type the number")),
    Case("a date", cell("angle_deg", datetime(2031, 6, 12)), ANGLE, ("date 2031-06-12", "type the figure again")),
    Case("a time of day", cell("angle_deg", time(12, 36)), ANGLE, ("12:36:00", "12°36'")),
    Case("text like a date", cell("angle_deg", "12. Jun"), ANGLE, ("'12. Jun' looks like a date",)),
    Case("#VALUE!", cell("angle_deg", "#VALUE!"), ANGLE, ("#VALUE!", "mend the formula")),
    Case("#REF!", cell("angle_deg", "#REF!"), ANGLE, ("#REF!", "mend the formula")),
    Case("NaN", cell("angle_deg", "NaN"), ANGLE, ("'NaN'", "leave the cell blank")),
    Case("beyond 90 degrees", cell("angle_deg", 126.1), ANGLE, ("126.1 degrees", "between -90 and 90")),
    Case("60 minutes", cell("angle_deg", "12°75'"), ANGLE, ("12°75'", "60 or more")),
    Case("radians in a cell", cell("angle_deg", "0.22 rad"), ANGLE, ("radians", "convert it to degrees")),
    Case("a length under an angle", cell("angle_deg", "632.8 nm"), ANGLE, ("no angle", "degrees")),
    Case("index below one", heading("angle_deg", "n_eff", 0.98), 'row 2/column F "n_eff"', ("0.98", "between 1 and 5")),
    Case(
        "angle under index",
        heading("angle_deg", "N", 12.61),
        'row 2/column F "N"',
        ("12.61", "is this column an angle"),
    ),
    Case(
        "formula without value",
        cell("angle_deg", "=12+0.61"),
        ANGLE,
        ("formula stored without its value", "let it calculate"),
    ),
    Case(
        "merged readings",
        sheet(HEAD, GOOD, ["W1", 1, 632.8, "TE", 1, None], finish=merge_angles),
        'S/row 2/column F "angle_deg"',
        ("merged cell", "unmerge"),
    ),
    # wavelengths
    Case(
        "micrometres under nm",
        cell("wavelength_nm", 0.6328),
        "row 3/column C",
        ("0.6328 nm", "in µm", "unit in the heading"),
    ),
    Case("nm under µm", heading("wavelength_nm", "λ (µm)"), 'row 2/column C "λ (µm)"', ("632.8 µm", "in nm")),
    Case("nm under Å", heading("wavelength_nm", "λ (Å)"), "row 2/column C", ("632.8 Å", "in nm")),
    Case(
        "degrees over wavelengths",
        heading("wavelength_nm", "wavelength (°)"),
        "S/row 1/column C",
        ("in degrees", "nm or µm"),
    ),
    Case(
        "a swept range",
        cell("wavelength_nm", "1520-1580"),
        "row 3/column C",
        ("1520-1580", "range", "one number a row"),
    ),
    Case("a laser's name", cell("wavelength_nm", "HeNe"), "row 3/column C", ("'HeNe'", "one wavelength is required")),
    Case(
        "wavelength missing in a row",
        cell("wavelength_nm", None),
        "S/row 3/column C",
        ("no wavelength", "not filled from above"),
    ),
    Case(
        "units mixed without a heading",
        sheet(["site", "wavelength", "pol", "angle_deg"], [1, 632.8, "TE", 12.0], [1, 1.55, "TE", 5.0]),
        'row 1/column B "wavelength"',
        ("1.55 among them", "wavelength_nm"),
    ),
    Case(
        "own unit against the heading",
        cell("wavelength_nm", "0.6328 µm"),
        "row 3/column C",
        ("heading in nm", "one unit"),
    ),
    Case(
        "against the title",
        sheet(["λ = 1550 nm"], [], HEAD, GOOD),
        "S/row 4/column C",
        ("632.8 nm", "says 1550 nm", "must agree"),
    ),
    Case(
        "against the heading",
        sheet(["site", "wavelength_nm", "TE0 @ 1550 nm (°)", "TM0 @ 1550 nm (°)"], [1, 632.8, 12.6, 15.0]),
        "row 2/column C",
        ("1.55", "0.6328", "must agree"),
    ),
    Case(
        "one laser in two ways",
        sheet(HEAD, GOOD, ["W1", 1, 633, "TM", 0, 15.2]),
        "S/row 3/column F",
        ("633 nm", "632.8 nm", "write it the same"),
    ),
    Case(
        "several in the title",
        sheet(["λ = 632.8 nm, 1550 nm"], ["site", "pol", "angle_deg"], [1, "TE", 12.0]),
        "S/row 2",
        ("several wavelengths", "add a column wavelength_nm"),
    ),
    Case(
        "no wavelength at all",
        sheet(["site", "pol", "mode", "angle_deg"], [1, "TE", 0, 12.6]),
        "S/row 1",
        ("no wavelength", "λ = 632.8 nm"),
    ),
    Case(
        "wavelength in air",
        heading("wavelength_nm", "wavelength in air (nm)"),
        "S/row 1/column C",
        ("in air", "vacuum"),
    ),
    # polarisation and mode
    Case("unknown polarisation", cell("pol", "horizontal"), "row 3/column D", ("'horizontal'", "TE or TM")),
    Case("polarisation as a number", cell("pol", 0), "row 3/column D", ("'0'", "TE or TM")),
    Case("polarisation blank", cell("pol", None), "row 3/column D", ("no polarisation", "fill in TE or TM")),
    Case(
        "no polarisation at all",
        sheet(["site", "wavelength_nm", "angle_deg"], [1, 632.8, 12.6]),
        "S/row 1",
        ("no polarisation", "add a column pol"),
    ),
    Case("mixed labels", cell("mode", "TM0"), 'row 3/column E "mode"', ("'TM0' beside polarisation TE", "must agree")),
    Case("negative mode", cell("mode", -1), "row 3/column E", ("negative", "from 0")),
    Case("fractional mode", cell("mode", 0.5), "row 3/column E", ("0.5 is not a whole number",)),
    Case("mode in words", cell("mode", "second one"), "row 3/column E", ("'second one'", "TE0")),
    Case("mode of a guide", cell("mode", "TE01"), "row 3/column E", ("'TE01'", "two numbers")),
    Case(
        "mode as a date", cell("mode", datetime(2031, 1, 2)), "row 3/column E", ("date or time", "set the cell to text")
    ),
    # headings
    Case(
        "radians in the heading",
        heading("angle_deg", "angle (rad)", 0.22),
        "S/row 1/column F",
        ("radians", "convert the column"),
    ),
    Case(
        "perhaps radians",
        sheet(["site", "λ (nm)", "pol", "angle"], *[[1, 632.8, "TE", v] for v in (0.22, 0.31, 0.41, 0.5)]),
        'row 1/column D "angle"',
        ("may be radians", "angle_deg"),
    ),
    Case(
        "angle in the prism",
        heading("angle_deg", "internal angle (deg)"),
        "S/row 1",
        ("inside the prism", "entrance face"),
    ),
    Case("gon", heading("angle_deg", "angle (gon)"), "S/row 1/column F", ("gon", "degrees", "convert")),
    Case("nm over angles", heading("angle_deg", "angle (nm)"), "S/row 1/column F", ("in nm", "degrees")),
    Case(
        "two columns that mean the same",
        sheet([*HEAD, "θ (°)"], [*GOOD, 12.7]),
        'row 1/column G "θ (°)"',
        ("column F", "rename or delete"),
    ),
    Case("no column of readings", sheet(HEAD[:5], GOOD[:5]), "S/row 1", ("no column of readings", "angle_deg")),
    Case(
        "refractive index n",
        heading("angle_deg", "n", 1.85),
        "S/row 1",
        ("no column of readings", "effective_index if"),
    ),
    Case(
        "no heading",
        sheet(GOOD, ["W1", 2, 632.8, "TE", 0, 12.7]),
        "readings.xlsx",
        ("no table of readings", "right file and sheet"),
    ),
    Case(
        "another sheet altogether",
        sheet(["Invoice", "Amount"], ["Cleaning", 120.5]),
        "readings.xlsx",
        ("no table of readings", "wavelength_nm"),
    ),
    Case(
        "ring data",
        sheet(["site", "structure", "resonance_nm"], [1, "R20", 1550.123]),
        "S/row 1",
        ("ring, fringe or spectrum", "prism-coupler tables only"),
    ),
    Case(
        "angle or index unknown",
        sheet(["λ = 632.8 nm"], ["site", "TE0", "TE1"], [1, 1.85, 1.71]),
        "S/row 2/column B",
        ("can be angles or effective indices", "N TE0"),
    ),
    Case(
        "unit row against heading",
        sheet(["site", "wavelength (nm)", "pol", "angle_deg"], [None, "µm", None, None], [1, 0.6328, "TE", 12.6]),
        "S/row 1/column B",
        ("heading says nm", "µm", "one unit"),
    ),
    Case("headings only", sheet(HEAD), "readings.xlsx", ("no reading below", "fill the table in")),
    # uncertainties and places
    Case("u of zero", sheet([*HEAD, "u"], [*GOOD, 0]), 'row 2/column G "u"', ("uncertainty of 0", "above zero")),
    Case("negative u", sheet([*HEAD, "u"], [*GOOD, -0.01]), 'row 2/column G "u"', ("-0.01", "above zero")),
    Case(
        "expanded uncertainty",
        sheet([*HEAD, "U (k=2)"], [*GOOD, 0.02]),
        "S/row 1/column G",
        ("expanded", "divide by k"),
    ),
    Case("capital U", sheet([*HEAD, "U (°)"], [*GOOD, 0.02]), "S/row 1/column G", ("capital U", "divide by k")),
    Case(
        "u in the other unit",
        sheet(["site", "λ (nm)", "pol", "N", "u (deg)"], [1, 632.8, "TE", 1.85, 0.01]),
        "S/row 1/column E",
        ("degrees beside effective indices",),
    ),
    Case("u too large", sheet([*HEAD, "u"], [*GOOD, 45]), "row 2/column G", ("uncertainty of 45", "check unit")),
    Case(
        "x beyond the wafer",
        sheet(["site", "x_mm", "λ (nm)", "pol", "angle_deg"], [1, 15000, 632.8, "TE", 12.6]),
        "row 2/column B",
        ("15000 mm", "check the unit"),
    ),
    Case(
        "kelvin as Celsius",
        sheet(["site", "temperature_C", "λ (nm)", "pol", "angle_deg"], [1, 295, 632.8, "TE", 12.6]),
        "row 2/column B",
        ("295 °C", "kelvin"),
    ),
    Case("one site in two places", sheet(*TWO_PLACES), "S/row 3/column F", ("30 mm here", "0 mm in row 2")),
    Case(
        "site turned into a date",
        cell("site", datetime(2031, 2, 1)),
        "row 3/column B",
        ("date or time", "type it as text"),
    ),
    Case("error in a name", cell("wafer", "#N/A"), "row 3/column A", ("#N/A", "type the name")),
    Case(
        "two spellings of a wafer",
        sheet(HEAD, GOOD, ["w1", 2, 632.8, "TE", 0, 12.7]),
        "S/row 3/column F",
        ("'w1'", "'W1'", "same everywhere"),
    ),
    Case(
        "no site above a blank",
        sheet(["site", *HEAD[2:]], [None, 632.8, "TE", 0, 12.6], ["a", 632.8, "TM", 0, 15.0]),
        "S/row 2",
        ("no site", "type the site"),
    ),
    Case(
        "no name after a blank row",
        sheet(HEAD, GOOD, [], [None, None, 632.8, "TE", 1, 22.0]),
        "S/row 4",
        ("after a blank row", "which site"),
    ),
    # what cannot be seen
    Case(
        "hidden column",
        sheet(HEAD, GOOD, finish=hide_column),
        'row 1/column F "angle_deg"',
        ("hidden column", "unhide"),
    ),
    Case("hidden row", sheet(HEAD, GOOD, finish=hide_row), "S/row 2", ("hidden row", "clear the filter")),
    Case("hidden sheet", sheet(HEAD, GOOD, finish=hide_sheet), "sheet S", ("hidden sheet", "unhide or delete")),
    Case("duplicate rows", sheet(HEAD, GOOD, GOOD), "S/row 3/column F", ("same reading as in row 2", "delete one")),
    Case("the same file twice", same_file_twice, "copy.xlsx", ("same content as", "name it once")),
    Case("lots not named", lots_not_named, 'row 2/column 6 "angle_deg"', ("no lot is named", "add a column lot")),
    # files
    Case("missing file", lambda folder: folder / "gone.xlsx", "gone.xlsx", ("no such file", "check the name")),
    Case("a folder", lambda folder: folder, "", ("a folder", "name the files")),
    Case("empty file", content(b""), "readings.csv", ("empty", "check the export")),
    Case("blank text", content("\n\n  \n"), "readings.csv", ("empty", "check the export")),
    Case(
        "zip that is no workbook",
        content(archive({"a.txt": b"x"}), "readings.xlsx"),
        "readings.xlsx",
        ("zip archive that is not a workbook", "unpack"),
    ),
    Case(
        "csv named xlsx",
        content("site,pol\n1,TE\n", "readings.xlsx"),
        "readings.xlsx",
        ("not a workbook", "name it .csv"),
    ),
    Case(
        "workbook named csv",
        lambda folder: sheet(HEAD, GOOD)(folder).rename(folder / "a.csv"),
        "a.csv",
        ("workbook or zip archive named .csv", "name it .xlsx"),
    ),
    Case(
        "old or encrypted workbook",
        content(b"\xd0\xcf\x11\xe0\xa1\xb1\x1a\xe1" + b"\0" * 600, "readings.xlsx"),
        "readings.xlsx",
        ("encrypted", "xls", "save it as xlsx"),
    ),
    Case(
        "damaged workbook",
        content(archive({"[Content_Types].xml": b"<", "xl/workbook.xml": b"<workbook"}), "readings.xlsx"),
        "readings.xlsx",
        ("cannot be read", "save it again"),
    ),
    Case(
        "cut workbook",
        lambda folder: content(sheet(HEAD, GOOD)(folder).read_bytes()[:-400], "cut.xlsx")(folder),
        "cut.xlsx",
        ("damaged", "copy or save it again"),
    ),
    Case(
        "cut gz",
        content(gzip.compress(b"site,pol\n" * 500)[:-20], "readings.csv.gz"),
        "readings.csv.gz",
        ("gz file is damaged", "pack it again"),
    ),
    Case("a PDF", content(b"%PDF-1.7 ...", "readings.csv"), "readings.csv", ("PDF", "export the table")),
    Case("another ending", content("site,pol\n", "readings.ods"), "readings.ods", (".ods", "xlsx or csv")),
    Case(
        "bytes of a picture",
        content(b"\x89PNG\r\n\x1a\n\0\0\0\rIHDR\0\1\2\3\4\5" * 9),
        "readings.csv",
        ("not readable as text", "UTF-8"),
    ),
    Case(
        "two encodings",
        content("site,λ (nm)\n".encode() + "Süd,632.8\n".encode("cp1252")),
        "readings.csv",
        ("line 2 is not UTF-8", "two encodings"),
    ),
    Case("100 MB of text", sparse, "readings.csv", ("100 MB", f"at most {LIMIT_MB} MB", "split it by lot")),
    Case("100 MB sheet", huge_sheet, "readings.xlsx", ("sheet1.xml", "100 MB unpacked", "split the workbook")),
    Case("gz of too much", unpacks_too_large, "readings.csv.gz", (f"more than {LIMIT_MB} MB", "split it by lot")),
    Case(
        "a stray cell far out",
        sheet(HEAD, GOOD, finish=stray_cell),
        "sheet S",
        ("row 1000000 and column 50", "stray cell"),
    ),
    Case(
        "decimal commas between commas",
        content("site,wavelength_nm,pol,angle_deg\n1,632,8,TE,12,61\n"),
        "row 2",
        ("6 fields under a heading of 4", "semicolons"),
    ),
    Case(
        "a lost separator",
        content("site;wavelength_nm;pol;angle_deg\n1;632.8;TE12.61\n"),
        "row 2",
        ("3 fields under a heading of 4", "missing separator"),
    ),
    Case(
        "two decimal marks",
        content("site;wavelength_nm;pol;angle_deg\n1;632.8;TE;12.61\n2;632.8;TE;12,345\n"),
        "row 3/column 4",
        ("12,345", "one decimal mark"),
    ),
    Case(
        "a quotation mark left open",
        content('site,wavelength_nm,pol,angle_deg\n1,632.8,TE,"12.61\n' + "2,632.8,TE,12.7\n" * 9000),
        "row 2",
        ("cannot be split", "quotation mark"),
    ),
]
by_name = pytest.mark.parametrize("case", CASES, ids=lambda case: case.name.replace(" ", "-"))


def paths_of(case: Case, folder: Path) -> list[Path]:
    built = case.build(folder)
    return built if isinstance(built, list) else [built]


@by_name
def test_fault_names_place_and_remedy(case: Case, tmp_path: Path) -> None:
    """Each faulty file gives a fault at the right place that says what it was and what to do."""
    imported = read_tables(paths_of(case, tmp_path))
    told = [str(fault) for fault in imported.faults]
    matching = [fault for fault in imported.faults if str(fault.place).endswith(case.place)] or [
        fault for fault in imported.faults if case.place in str(fault.place)
    ]
    assert matching, told
    assert any(all(word in str(fault) for word in case.words) for fault in matching), told


STACK = """
[[layer]]
name = "substrate"
index = 1.457
[[layer]]
name = "core"
index = { fit = [1.90, 2.05] }
thickness_nm = { fit = [300, 700] }
[[layer]]
name = "cover"
index = 1.0
[prism]
index = 2.1745
base_angle_deg = 60.0
angle_u_deg = 0.01
"""


@by_name
def test_fit_refuses_and_leaves_nothing(case: Case, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """`layerlot fit` on each faulty file prints every fault, ends with status 2 and leaves no output folder."""
    stack, out = tmp_path / "stack.toml", tmp_path / "out"
    stack.write_text(STACK, encoding="utf-8")
    inputs = tmp_path / "in"
    inputs.mkdir()
    status = main(["fit", str(stack), *(str(p) for p in paths_of(case, inputs)), "--out", str(out)])
    printed = capsys.readouterr()
    assert status == 2
    assert all(word in printed.err for word in case.words)
    assert "Traceback" not in printed.err and printed.out == ""
    assert not out.exists() and {p.name for p in tmp_path.iterdir()} == {"in", "stack.toml"}


def test_at_least_sixty_faults_are_tried() -> None:
    """The list of faults is as long as the work asks for, each under its own name."""
    assert len({case.name for case in CASES}) >= 60


def test_all_faults_come_at_once(tmp_path: Path) -> None:
    """Faults of different rows, sheets and files are all listed in one go."""
    first = sheet(HEAD, ["W1", 1, 632.8, "XX", 0, 12.61], ["W1", 1, 632.8, "TE", -1, "bad"])(tmp_path)
    second = content("site,wavelength_nm,pol,angle_deg\n1,632.8,TE,95\n", "b.csv")(tmp_path)
    faults = read_tables([first, second, tmp_path / "gone.csv"]).faults
    told = "\n".join(map(str, faults))
    assert all(word in told for word in ("'XX'", "negative", "'bad'", "95 degrees", "no such file"))


def test_many_faults_of_one_kind_are_counted(tmp_path: Path) -> None:
    """A column with the same fault in 500 rows does not print 500 lines, but says how many and how far."""
    rows: Rows = [["W1", number, 632.8, "TE", 0, "bad"] for number in range(500)]
    faults = read_tables([sheet(HEAD, *rows)(tmp_path)]).faults
    assert 5 < len(faults) < 20
    assert any("490 more of this kind, to row 501" in str(fault) for fault in faults)
