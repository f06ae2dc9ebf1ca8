"""Where the tables of a sheet are: heading rows, the columns under them, the title rows above, the rows below.

A heading row holds no numbers, at least two cells that are understood, and one that heads readings. One to three
rows may share the work (wavelength over polarisation over mode number). Tables follow each other downwards, or stand
side by side with an empty column between.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

from .figures import clean, looks_numeric
from .grid import Cell, Grid, is_blank
from .headings import PER_UM, READINGS, Heading, combine, parse_heading, to_um, unit_of
from .titles import Context, from_rows

MAX_HEADING_ROWS = 3


@dataclass(frozen=True, slots=True)
class Column:
    index: int
    heading: Heading


@dataclass(frozen=True)
class Table:
    """One table of a grid: heading rows top..header (0-based), data in rows start..stop (stop excluded)."""

    grid: Grid
    top: int
    header: int
    start: int
    stop: int
    columns: tuple[Column, ...]
    titles: tuple[int, ...]  # rows above that may say what holds for all rows
    left: int
    right: int

    def having(self, *meanings: str) -> list[Column]:
        return [column for column in self.columns if column.heading.meaning in meanings]


Band = tuple[int, tuple[Column, ...]]  # the last heading row, and its columns


def find_tables(grid: Grid) -> list[Table]:
    """All tables of a sheet, in reading order; empty where no heading row is found."""
    bands: list[tuple[int, Band]] = []
    row = 0
    while row < len(grid.rows):
        band = _band(grid, row)
        if band is None or _says_more_without(grid, row, band) or (bands and _repeats(grid, bands[-1][1], band, row)):
            row += 1
            continue
        bands.append((row, band))
        row = band[0] + 1
    tables: list[Table] = []
    first_title = 0
    for position, (top, (header, columns)) in enumerate(bands):
        following = bands[position + 1][0] if position + 1 < len(bands) else len(grid.rows)
        stop = following if position + 1 == len(bands) else _last_data(grid, header + 1, following, columns) + 1
        tables += _segments(grid, top, header, stop, columns, tuple(range(first_title, top)))
        first_title = stop
    return tables


def _says_more_without(grid: Grid, top: int, band: Band) -> bool:
    """Whether the first row adds nothing to the heading: then it is a title above it."""
    lower = _band(grid, top + 1) if band[0] > top else None
    return lower is not None and _score(lower[1]) >= _score(band[1])


def _repeats(grid: Grid, earlier: Band, band: Band, row: int) -> bool:
    """Whether a heading only repeats the one before, right below a row of data, as printed lists do on every page."""
    same = [(c.index, c.heading) for c in earlier[1]] == [(c.index, c.heading) for c in band[1]]
    return same and _last_data(grid, earlier[0] + 1, row, earlier[1]) == row - 1


def _band(grid: Grid, top: int) -> Band | None:
    """The heading whose first row is `top`: of one to three rows, those that say most."""
    if not _may_head(grid.rows[top]):
        return None
    best: Band | None = None
    best_score = 0
    for height in range(1, MAX_HEADING_ROWS + 1):
        bottom = top + height - 1
        if bottom >= len(grid.rows) or (height > 1 and not _may_continue(grid, top, bottom)):
            break
        columns = _columns(grid, top, bottom)
        score = _score(columns)
        if score > best_score:
            best, best_score = (bottom, columns), score
    return best


def _may_head(cells: tuple[Cell, ...]) -> bool:
    filled = 0
    for value in cells:
        if value is None:
            continue
        if not isinstance(value, str) or (looks_numeric(value) and not parse_heading(value).says_mode):
            return False
        filled += 1
    return filled > 0


GROUPS = ("wavelength", "mode", "pol")  # headings that may stand over several columns of readings


def _may_continue(grid: Grid, top: int, row: int) -> bool:
    """Whether a row can be the next heading row: words, or numbers under words that call for them."""
    filled = [(column, value) for column, value in enumerate(grid.rows[row]) if not is_blank(value)]
    if not filled or all(unit_of(value) is not None for _, value in filled):
        return False
    return all(_continues(grid, top, row, column, value) for column, value in filled)


def _continues(grid: Grid, top: int, row: int, column: int, value: Cell) -> bool:
    over = [parse_heading(text) for text in _stack(grid, top, row - 1, column, row)]
    if looks_numeric(value) and not (isinstance(value, str) and parse_heading(value).says_mode):
        figure = _figure(value)
        if any(part.meaning == "wavelength" for part in over):
            return figure is not None and figure > 0.1
        first = is_blank(grid.cell(row - 1, column)) or figure in (0.0, 1.0)  # TE over 0, 1, 2 or 1, 2, 3
        calls = any(part.pol is not None or part.meaning == "mode" for part in over)
        return calls and first and figure is not None and figure.is_integer() and 0 <= figure < 100
    if not isinstance(value, str):
        return False
    named = [part for part in over if part.meaning is not None and part.meaning not in GROUPS and not part.says_mode]
    if not named or parse_heading(value).known:
        return True
    return parse_heading(" ".join([part.text for part in over] + [value])).known


def _figure(value: Cell) -> float | None:
    try:
        return float(str(value).replace(",", "."))
    except ValueError:
        return None


def _stack(grid: Grid, top: int, bottom: int, column: int, lowest: int | None = None) -> list[str]:
    """The texts over a column from row `top` to `bottom`; a group heading holds for the blanks to its right.

    lowest: the last row of the heading, if that is below `bottom`.
    """
    lowest = bottom if lowest is None else lowest
    texts: list[str] = []
    for row in range(top, bottom + 1):
        value = grid.merged_over(row, column)
        if is_blank(value) and row < lowest:
            value = _group_to_the_left(grid, row, lowest, column)
        if not is_blank(value):
            text = clean(str(value)).lstrip("#% ")
            if not texts or texts[-1] != text:
                texts.append(text)
    return texts


def _group_to_the_left(grid: Grid, row: int, lowest: int, column: int) -> Cell:
    """The group heading that a blank belongs to: the next filled cell to the left, if that heads readings too."""
    for left in range(column, -1, -1):
        under = grid.merged_over(lowest, left)
        heads = looks_numeric(under) or (isinstance(under, str) and parse_heading(under).meaning in READINGS)
        if not heads:
            return None
        value = grid.cell(row, left)
        if not is_blank(value):
            part = parse_heading(str(value))
            return value if part.says_mode or part.meaning in READINGS or part.meaning in GROUPS else None
    return None


def _columns(grid: Grid, top: int, bottom: int) -> tuple[Column, ...]:
    columns = []
    width = max(len(grid.rows[row]) for row in range(top, bottom + 1))
    for index in range(width):
        texts = _stack(grid, top, bottom, index)
        if texts:
            columns.append(Column(index, _stacked_heading(texts)))
    return tuple(columns)


def _stacked_heading(texts: list[str]) -> Heading:
    parts: list[Heading] = []
    for text in texts:
        if parts and looks_numeric(text) and not parse_heading(text).says_mode:
            parts.append(_numeric_part(text, parts))
        else:
            parts.append(parse_heading(text))
    return combine(parts)


def _numeric_part(text: str, over: list[Heading]) -> Heading:
    """A bare number below a group heading: a wavelength below `Wavelength (nm)`, a mode number below TE or `Mode`."""
    value = _figure(text)
    above = over[-1]
    if value is None:
        return Heading(text)
    if above.meaning == "wavelength" and value > 0.0:
        unit = above.unit or ("nm" if value > 100.0 else "um")
        return Heading(text, "reading", None, None, None, to_um(value, unit if unit in PER_UM else "nm"))
    if value >= 0.0 and value.is_integer() and value < 100:
        return Heading(text, "reading", None, None, int(value))
    return Heading(text)


def _score(columns: tuple[Column, ...]) -> int:
    """How much a heading says; 0 if it heads no table of readings."""
    known = [column.heading for column in columns if column.heading.known]
    named = [heading for heading in known if heading.meaning not in (None, "reading")]
    labelled = {(h.pol, h.order, h.wavelength_um) for h in known if h.meaning in READINGS and h.order is not None}
    heads = [heading for heading in known if heading.meaning in READINGS or heading.meaning in ("later", "inner_angle")]
    near = {heading.meaning for heading in named} & {"wavelength", "pol", "mode"}
    if not ((named and len(known) >= 2) or len(labelled) >= 2):
        return 0
    if not heads and not (len({heading.meaning for heading in named}) >= 3 and near):
        return 0
    score = 10 * len(known)
    for heading in heads:
        score += sum(x is not None for x in (heading.pol, heading.order, heading.wavelength_um)) * 2
        score += (heading.meaning != "reading") + (heading.unit is not None)
    return score


def _last_data(grid: Grid, start: int, stop: int, columns: tuple[Column, ...]) -> int:
    """The last row that holds something in a column of readings; what follows are titles of the next table."""
    reading = [column.index for column in columns if column.heading.meaning in READINGS] or [columns[-1].index]
    for row in range(stop - 1, start - 1, -1):
        if (
            any(not is_blank(grid.cell(row, index)) for index in reading)
            and sum(not is_blank(value) for value in grid.rows[row]) > 1
        ):
            return _with_followers(grid, row, stop)
    return start - 1


def _with_followers(grid: Grid, row: int, stop: int) -> int:
    """The last row of a block of rows with two cells or more each: rows whose reading is blank belong to the table."""
    while row + 1 < stop and sum(not is_blank(value) for value in grid.rows[row + 1]) > 1:
        row += 1
    return row


def _segments(
    grid: Grid, top: int, header: int, stop: int, columns: tuple[Column, ...], titles: tuple[int, ...]
) -> list[Table]:
    groups = _side_by_side(columns)
    tables = []
    for position, group in enumerate(groups):
        left = 0 if position == 0 else group[0].index
        right = groups[position + 1][0].index if position + 1 < len(groups) else max(grid.width, group[-1].index + 1)
        tables.append(Table(grid, top, header, header + 1, stop, group, titles, left, right))
    return tables


def title_context(tables: list[Table], position: int) -> Context:
    """What the title rows say for one of several tables that stand side by side (or for the only one).

    A title over the first table alone holds for the others too where they have none of their own.
    """
    table = tables[position]
    grid = table.grid
    own = from_rows(grid, table.titles, table.left, table.right)
    if position == 0:
        return own
    shared = [
        row for row in table.titles if not any(not is_blank(value) for value in grid.rows[row][tables[0].right :])
    ]
    return own.over(from_rows(grid, shared, 0, tables[0].right))


def _side_by_side(columns: tuple[Column, ...]) -> list[tuple[Column, ...]]:
    """Split at empty columns where one table would have two columns of one meaning."""
    if not repeated(columns):
        return [columns]
    groups: list[list[Column]] = [[columns[0]]]
    for before, column in pairwise(columns):
        if column.index > before.index + 1:
            groups.append([])
        groups[-1].append(column)
    if len(groups) < 2 or any(_score(tuple(group)) == 0 for group in groups):
        return [columns]
    return [tuple(group) for group in groups]


def repeated(columns: tuple[Column, ...]) -> list[tuple[Column, Column]]:
    """Pairs of columns that mean the same, readings with the same mode and wavelength included."""
    first: dict[tuple[object, ...], Column] = {}
    pairs = []
    for column in columns:
        heading = column.heading
        if heading.meaning is None or heading.meaning == "later":
            continue
        key: tuple[object, ...] = (heading.meaning, heading.pol, heading.order, heading.wavelength_um)
        if key in first:
            pairs.append((first[key], column))
        else:
            first[key] = column
    return pairs
