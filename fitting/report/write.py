"""All three files of one fit."""

from __future__ import annotations

from pathlib import Path

from ..records import FitResult
from .document import document_text, results_document

FILES = ("results.json", "results.xlsx", "report.html")


def write_reports(result: FitResult, out_dir: Path) -> None:
    """Write results.json, results.xlsx and report.html into an existing folder.

    Raises BareNumberError, before anything is written, where an estimate lacks a finite uncertainty; OSError where the
    folder cannot be written. The caller gives an empty folder and moves it into place when all three are there.
    """
    from .page import page
    from .workbook import write_workbook

    document = document_text(results_document(result))
    (out_dir / FILES[0]).write_text(document, encoding="utf-8")
    write_workbook(result, out_dir / FILES[1])
    (out_dir / FILES[2]).write_text(page(result), encoding="utf-8")
