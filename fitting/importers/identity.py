"""Which lot, wafer and site a row belongs to.

The rule for blanks. A merged cell holds for all its rows. A blank lot, wafer or site takes the value last stated above
it in the same table, as sheets are kept that name a wafer once and leave the cells below blank; a new lot ends the
wafer before it, a new wafer the site. After a blank row at least one of the three must be stated. Nothing else
(wavelength, polarisation, mode, reading) is ever filled down from above unless its cells are merged.
"""

from __future__ import annotations

from .figures import Unreadable

LEVELS = ("lot", "wafer", "site")


class Identity:
    """The state carried down one table. columns: the levels that have a column with at least one entry."""

    def __init__(self, columns: tuple[str, ...], given: dict[str, str]) -> None:
        self.columns = columns
        self.given = given  # what titles say for the whole table
        self.carried: dict[str, str | None] = dict.fromkeys(LEVELS)
        self.gap = False

    def blank_row(self) -> None:
        self.gap = True

    def heading(self, stated: dict[str, str]) -> None:
        """A line that only names a lot, wafer or site for the rows below it."""
        self._state(stated)
        self.gap = False

    def row(self, stated: dict[str, str]) -> tuple[str | None, str | None, str | None]:
        """Lot, wafer and site of a row that states some of them. Raises Unreadable where that is not certain."""
        after_gap, self.gap = self.gap, False
        if self.columns and not stated and after_gap and any(self.carried.values()):
            raise Unreadable(
                "a row after a blank row names no lot, wafer or site",
                "say which site it is, or delete the blank row above",
            )
        self._state(stated)
        for level in self.columns:
            if self.carried[level] is None and not (level == "site" and self._names_above_site()):
                raise Unreadable(f"no {level}: the cell is blank and none stands above it", f"type the {level}")
        lot, wafer, site = (self.carried[level] or self.given.get(level) for level in LEVELS)
        return lot, wafer, site

    def _names_above_site(self) -> bool:
        return any(self.carried[level] for level in ("lot", "wafer"))

    def _state(self, stated: dict[str, str]) -> None:
        for position, level in enumerate(LEVELS):
            value = stated.get(level)
            if value is None:
                continue
            if value != self.carried[level]:
                for lower in LEVELS[position + 1 :]:
                    self.carried[lower] = None
            self.carried[level] = value
