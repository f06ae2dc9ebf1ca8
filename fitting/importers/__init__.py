"""Prism-coupler tables as engineers keep them, into readings; what was understood, what was left out, what is wrong.

    imported = read_tables([Path("monitors.xlsx")])
    if imported.faults: refuse;  else: fit imported.readings
    print(describe(imported))

The way of a file: `sources` (is it a table?) -> `workbook` or `textfile` (cells) -> `layout` (where the tables are) ->
`plan` (what the columns mean) -> `rows` (readings) -> `crosschecks` (over all files).
"""

from .describe import describe
from .outcome import ColumnReport, Imported, TableReport
from .tables import read_tables

__all__ = ["ColumnReport", "Imported", "TableReport", "describe", "read_tables"]
