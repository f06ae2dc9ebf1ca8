"""What was recognised, in plain text for a person: the answer first, then what stops the fit, then table by table."""

from __future__ import annotations

from collections.abc import Sequence

from .outcome import Imported, TableReport

SHOWN = 12  # rows left out are listed one by one up to here in the text; `Imported.skipped` holds them all


def describe(imported: Imported) -> str:
    """The text that `inspect` prints."""
    sites = sum(table.sites for table in imported.tables)
    lines = [
        f"{_count(len(imported.readings), 'reading')} of {_count(sites, 'site')}"
        f" in {_count(len(imported.tables), 'table')} of {_count(len(imported.inputs), 'file')}."
    ]
    if imported.faults:
        lines.append(f"A fit would be refused: {_count(len(imported.faults), 'fault')}.")
        lines += [f"  {fault}" for fault in imported.faults]
    else:
        lines.append("Nothing stands in the way of a fit.")
    if imported.skipped:
        lines.append(f"{_count(len(imported.skipped), 'row')} left out; the reasons stand below.")
    for table in imported.tables:
        lines += ["", *_table(table)]
    apart = [f"{place}: {text}" for place, text in imported.remarks]
    if apart:
        lines += ["", "Besides:", *(f"  {text}" for text in apart)]
    return "\n".join(lines) + "\n"


def _count(number: int, noun: str) -> str:
    return f"{number} {noun}" if number == 1 else f"{number:,} {noun}s"


def _table(table: TableReport) -> list[str]:
    lines = [f"{table.title}: {_count(table.kept, 'reading')} of {_count(table.sites, 'site')}"]
    width = max((len(column.heading) for column in table.columns), default=0)
    lines += [f"  column {c.name:>2}  {c.heading:<{width}}  {c.words}" for c in table.columns]
    lines += [f"  remark: {text}" for text in table.remarks]
    lines += _left_out(table.skipped)
    return lines


def _left_out(skipped: Sequence[tuple[object, str]]) -> list[str]:
    lines = [f"  left out: row {getattr(place, 'row', '?')}: {reason}" for place, reason in skipped[:SHOWN]]
    if len(skipped) > SHOWN:
        lines.append(f"  left out: {len(skipped) - SHOWN} rows more")
    return lines
