"""Makes templates/prism.xlsx, the blank workbook: `python tests/reference/make_prism_template.py`."""

from __future__ import annotations

import sys
from pathlib import Path

import openpyxl
from openpyxl.comments import Comment
from openpyxl.styles import Alignment, Font, PatternFill
from openpyxl.worksheet.datavalidation import DataValidation

TARGET = Path(__file__).resolve().parents[2] / "templates" / "prism.xlsx"
ROWS = 2000

COLUMNS = [
    ("lot", 12, "Name of the lot. May stay blank if the file holds one lot."),
    ("wafer", 10, "Name of the wafer."),
    ("site", 8, "Name or number of the site on the wafer. A table without site, wafer and lot is one site."),
    ("x_mm", 8, "Place on the wafer in mm, for the wafer map. May stay blank."),
    ("y_mm", 8, "Place on the wafer in mm, for the wafer map. May stay blank."),
    ("wavelength_nm", 15, 'Wavelength in nm, in vacuum unless the stack file says wavelength_reference = "air".'),
    ("pol", 6, "TE or TM."),
    ("mode", 7, "Mode number from 0, where it is known. Leave blank where it is not: it is found from the readings."),
    ("angle_deg", 12, "Coupling angle on the entrance face, from its normal, in degrees. Blank or n/a: not read."),
    (
        "u",
        8,
        "Standard uncertainty (k = 1) of this angle in degrees, if it is not the stack file's angle_u_deg.",
    ),
    ("temperature_C", 15, "Temperature of the wafer. May stay blank."),
    ("measured_at", 18, "When it was read, e.g. 2026-03-05 14:10. May stay blank."),
    ("tool", 10, "Which instrument. May stay blank."),
]
GUIDE = [
    "How to fill in the sheet 'readings'",
    "",
    "One row a reading: one mode at one wavelength and polarisation of one site. Rows in any order; columns may be",
    "moved, left out or renamed in plain words; title rows may be added above. Units belong into the headings.",
    "",
    "Each column's note (the red corner of its heading) says what it takes.",
    "",
    "An invented example, in words: wafer W01, site 1, 632.8 nm, TE, mode 0, read at 3.94 degrees; the next mode of",
    "the same site, its number not known, read at -16.85 degrees: the same entries with mode left blank.",
    "",
    "A film with unknown index and thickness needs two modes at least; three or more let the fit check itself.",
    "Readings that were tried and not seen: leave the angle blank or write n/a. They are listed, not counted.",
    "",
    "Instead of angle_deg the column may be effective_index; then give u for every row.",
    "",
    "Then:  layerlot inspect FILE  shows what was understood;  layerlot fit STACK FILE --out FOLDER  fits it.",
    "",
    "Laser light at the prism, and pressure on glass: follow local laser-safety rules and licensed practice.",
]


def main(target: Path = TARGET) -> None:
    book = openpyxl.Workbook()
    sheet = book.active
    sheet.title = "readings"
    for k, (name, width, note) in enumerate(COLUMNS, start=1):
        cell = sheet.cell(1, k, name)
        cell.font = Font(bold=True)
        cell.fill = PatternFill("solid", fgColor="E6E6E6")
        cell.comment = Comment(note, "Layerlot", width=320, height=80)
        sheet.column_dimensions[cell.column_letter].width = width
    sheet.freeze_panes = "A2"
    choice = DataValidation(type="list", formula1='"TE,TM"', allow_blank=True)
    choice.error, choice.errorTitle = "TE or TM", "pol"
    sheet.add_data_validation(choice)
    choice.add(f"G2:G{ROWS}")
    for row in sheet.iter_rows(min_row=2, max_row=50, min_col=9, max_col=9):
        row[0].number_format = "0.0000"
    words = book.create_sheet("how to fill in")
    words.column_dimensions["A"].width = 120
    for r, line in enumerate(GUIDE, start=1):
        words.cell(r, 1, line).alignment = Alignment(wrap_text=True, vertical="top")
    words["A1"].font = Font(bold=True, size=13)
    book.save(target)


if __name__ == "__main__":
    main(*(Path(p) for p in sys.argv[1:]))
