"""From results to what a person or a script reads.

write_reports       results.json, results.xlsx and report.html into a folder
results_document    the contents of results.json
summary_text        the answers on a terminal
"""

from __future__ import annotations

from .document import results_document
from .rounding import format_value
from .summary import summary_text
from .write import write_reports

__all__ = ["format_value", "results_document", "summary_text", "write_reports"]
