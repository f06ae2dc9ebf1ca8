"""The typed records that travel between the rooms: what was read, what was estimated, what went wrong.

A reading's way: file -> importer -> `Reading` -> observable -> fit -> `Estimate` -> report.
Inside the program lengths are µm and angles degrees; an `Estimate` carries edge units (nm, 1) with its `unit`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
IntArray = NDArray[np.intp]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class Place:
    """Where something stands: file, then sheet, row (1-based, as the spreadsheet shows it) and column."""

    file: str
    sheet: str | None = None
    row: int | None = None
    column: str | None = None

    def __str__(self) -> str:
        parts = []
        if self.sheet is not None:
            parts.append(f"sheet {self.sheet}")
        if self.row is not None:
            parts.append(f"row {self.row}")
        if self.column is not None:
            parts.append(f"column {self.column}")
        return f"{self.file}: {'/'.join(parts)}" if parts else self.file


@dataclass(frozen=True, slots=True)
class Fault:
    """One thing wrong with an input: what it was, what is required, what to do."""

    place: Place
    was: str
    required: str
    remedy: str

    def __str__(self) -> str:
        return f"{self.place}: {self.was}, {self.required}, {self.remedy}"


class InputRefused(Exception):  # noqa: N818 (the plain words that the docs use)
    """The input cannot be used; carries every fault found, not just the first."""

    def __init__(self, faults: Sequence[Fault]) -> None:
        self.faults = tuple(faults)
        super().__init__("\n".join(str(fault) for fault in self.faults))


class Quantity(StrEnum):
    """What a prism-coupler reading states."""

    ANGLE = "angle_deg"
    EFFECTIVE_INDEX = "effective_index"


@dataclass(frozen=True, slots=True)
class Reading:
    """One prism-coupler reading as the file states it.

    value: coupling angle in degrees, or effective index (see `quantity`); u: its standard uncertainty in the
    same unit, None where the file gives none (the stack file's `angle_u_deg` then serves).
    order: mode number as labelled, None where blank. wavelength_um: as typed, not yet converted between media.
    """

    quantity: Quantity
    value: float
    wavelength_um: float
    pol: str  # "TE" or "TM"
    place: Place
    order: int | None = None
    u: float | None = None
    lot: str | None = None
    wafer: str | None = None
    site: str | None = None
    x_mm: float | None = None
    y_mm: float | None = None
    measured_at: str | None = None
    temperature_C: float | None = None
    tool: str | None = None

    @property
    def site_key(self) -> tuple[str | None, str | None, str | None]:
        return (self.lot, self.wafer, self.site)


@dataclass(frozen=True, slots=True)
class InputFile:
    """A file that was read, with the SHA-256 of its bytes."""

    file: str
    sha256: str


class Status(StrEnum):
    OK = "ok"
    FLAGGED = "flagged"
    FAILED = "failed"


@dataclass(frozen=True, slots=True)
class Flag:
    """Something the reader of a number must know; codes stand in `layerlot.fitting.flags`."""

    code: str
    text: str


@dataclass(frozen=True, slots=True)
class Estimate:
    """One number with all that must travel with it. u: standard uncertainty (k = 1), u² = u_random² + u_shared²."""

    layer: str | None
    quantity: str  # index, thickness, ... and nuisances (prism_index, base_angle, angle_offset)
    value: float
    u: float
    u_random: float
    u_shared: float
    low95: float
    high95: float
    unit: str
    origin: str  # fitted | known | derived
    axis: str | None = None  # any | in_plane | normal, for an index
    wavelength_nm: float | None = None
    interval: str = "parabolic"  # parabolic | profile: how low95 and high95 were found
    prior: tuple[float, float] | None = None  # stated value and u of a known quantity, in `unit`


@dataclass(frozen=True, slots=True)
class FittedReading:
    """A reading with what became of it. measured, predicted and u are in the reading's own unit."""

    reading: Reading
    order: int | None
    predicted: float | None
    u: float
    used: bool
    reason: str | None = None  # why not used, or a remark


@dataclass(frozen=True, slots=True)
class Rival:
    """Another order assignment that the readings do not rule out. probability: relative to all considered."""

    delta_chi2: float
    probability: float
    orders: str  # in words: which reading would be which mode
    estimates: tuple[Estimate, ...]


@dataclass(frozen=True, slots=True)
class FitQuality:
    chi2: float
    dof: int
    p_value: float | None  # None where dof is 0
    readings_used: int
    readings_rejected: int


@dataclass(frozen=True, slots=True)
class BudgetLine:
    """One source's share of the standard uncertainty of one estimate, in that estimate's unit."""

    source: str  # "reading noise", "prism index", "base angle", ...
    kind: str  # random | shared
    layer: str | None
    quantity: str
    axis: str | None
    wavelength_nm: float | None
    u: float
    unit: str


@dataclass(frozen=True)
class SiteResult:
    """What one site gave. Flags change the status, notes do not; `correlation` follows the order of `estimates`."""

    lot: str | None
    wafer: str | None
    site: str | None
    x_mm: float | None
    y_mm: float | None
    measured_at: str | None
    status: Status
    flags: tuple[Flag, ...]
    notes: tuple[Flag, ...]
    estimates: tuple[Estimate, ...]
    correlation: Array
    fit: FitQuality | None
    readings: tuple[FittedReading, ...]
    rivals: tuple[Rival, ...] = ()
    budget: tuple[BudgetLine, ...] = ()


@dataclass(frozen=True, slots=True)
class GroupMean:
    """Mean of one quantity over the sites of a wafer or the wafers of a lot; the shared part is not averaged away.

    spread: standard deviation of the site values; spread_process: the same with the known random measurement
    uncertainty taken out (None where the spread is smaller than the noise explains, or one site only).
    """

    level: str  # wafer | lot
    lot: str | None
    wafer: str | None
    layer: str | None
    quantity: str
    axis: str | None
    wavelength_nm: float | None
    unit: str
    value: float
    u: float
    u_random: float
    u_shared: float
    low95: float
    high95: float
    spread: float | None
    spread_process: float | None
    sites: int
    sites_left_out: int


@dataclass(frozen=True)
class FitResult:
    """The outcome of one `fit`: everything the reports show, and nothing else."""

    title: str
    version: str
    inputs: tuple[InputFile, ...]
    sites: tuple[SiteResult, ...]
    means: tuple[GroupMean, ...] = ()
    shared: tuple[Estimate, ...] = ()  # the shared nuisances as the whole table leaves them
    shared_flags: tuple[Flag, ...] = ()
    conventions: tuple[str, ...] = ()  # sentences: wavelength and index reference, material models, assumptions
    interrupted: bool = False
    skipped_rows: tuple[tuple[Place, str], ...] = field(default_factory=tuple)  # rows left out and why
