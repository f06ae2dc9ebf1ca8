"""Names of quantities, sites and flags as a reader sees them; the same words in terminal, workbook and page."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from ..flags import FLAGS, NOTES
from ..records import BudgetLine, Estimate, FitResult, Flag, GroupMean, SiteResult, Status

_QUANTITY = {
    "index_shift": "index shift",
    "prism_index": "prism index",
    "prism_index_TE": "prism index, TE",
    "prism_index_TM": "prism index, TM",
    "prism_index_shift": "prism index shift",
    "prism_index_shift_TE": "prism index shift, TE",
    "prism_index_shift_TM": "prism index shift, TM",
    "base_angle": "prism base angle",
    "base_angle_deg": "prism base angle",
    "angle_offset": "table zero",
    "angle_offset_deg": "table zero",
    "etch_depth": "etch depth",
    "width_bias": "width bias",
    "effective_index": "effective index",
    "group_index": "group index",
}
_AXIS = {"in_plane": "in the plane", "normal": "along the normal"}
_UNIT = {"1": "", "deg": "°"}
ALL_SITES = "all sites"
STATUS = {Status.OK: "ok", Status.FLAGGED: "FLAGGED", Status.FAILED: "FAILED"}


@dataclass(frozen=True)
class Column:
    """One quantity over many sites: what an `Estimate`, a `GroupMean` and a `BudgetLine` have in common."""

    layer: str | None
    quantity: str
    axis: str | None
    wavelength_nm: float | None
    unit: str

    @property
    def short(self) -> str:
        """`index of nitride`."""
        text = _QUANTITY.get(self.quantity, self.quantity.replace("_", " "))
        return text if self.layer is None else f"{text} of {self.layer}"

    @property
    def direction(self) -> str:
        """`along the normal`, empty for an isotropic layer."""
        return _AXIS.get(self.axis or "", "")

    @property
    def wavelength(self) -> str:
        """`632.8 nm`, empty where the quantity has none."""
        return "" if self.wavelength_nm is None else f"{self.wavelength_nm:g} nm"

    @property
    def name(self) -> str:
        """`index of nitride along the normal, 632.8 nm`."""
        text = f"{self.short} {self.direction}".strip()
        return f"{text}, {self.wavelength}" if self.wavelength else text

    @property
    def heading(self) -> str:
        """Name with the unit that the figures below it are in."""
        return self.name if self.unit == "1" else f"{self.name} ({unit_mark(self.unit)})"


def column_of(item: Estimate | GroupMean | BudgetLine) -> Column:
    """The column that a number belongs to."""
    return Column(item.layer, item.quantity, item.axis, item.wavelength_nm, item.unit)


def unit_mark(unit: str) -> str:
    """A unit for print: nothing for 1, the sign for degrees."""
    return _UNIT.get(unit, unit)


def with_unit(text: str, unit: str) -> str:
    """Figures and unit: `402.31 nm`, `12.6°`; `(402.31 ± 0.77) nm`, bracketed as in JCGM 100:2008, 7.2.2."""
    mark = unit_mark(unit)
    if not mark:
        return text
    figures = f"({text})" if "±" in text else text
    return f"{figures}{mark}" if mark == "°" else f"{figures} {mark}"


def place_levels(sites: Sequence[SiteResult]) -> list[str]:
    """Which of lot, wafer and site the table uses, for the heads of columns."""
    return [level for level in ("lot", "wafer", "site") if any(getattr(s, level) is not None for s in sites)]


def site_name(site: SiteResult) -> str:
    """`lot A, wafer W1, site 3`; the whole table where the sheet names nothing."""
    parts = [
        f"{level} {getattr(site, level)}" for level in ("lot", "wafer", "site") if getattr(site, level) is not None
    ]
    return ", ".join(parts) or "the whole table"


def wafer_name(lot: str | None, wafer: str | None) -> str:
    """`lot A, wafer W1`."""
    parts = [f"{level} {value}" for level, value in (("lot", lot), ("wafer", wafer)) if value is not None]
    return ", ".join(parts) or "wafer without a name"


def mean_name(mean: GroupMean) -> str:
    """`lot A` or `lot A, wafer W1`."""
    return wafer_name(mean.lot, mean.wafer if mean.level == "wafer" else None)


def count_words(count: int, noun: str) -> str:
    """`1 site`, `1,225 sites`."""
    return f"{count:,} {noun}" if count == 1 else f"{count:,} {noun}s"


def verdict(result: FitResult) -> str:
    """One sentence: how many sites, how many good, flagged and failed, and whether the run was cut short."""
    count = Counter(s.status for s in result.sites)
    parts = [count_words(len(result.sites), "site") + ":"]
    named = [(Status.OK, "good"), (Status.FLAGGED, "FLAGGED"), (Status.FAILED, "FAILED")]
    parts.append(", ".join(f"{count[s]:,} {word}" for s, word in named if count[s]) or "none fitted")
    text = " ".join(parts) + "."
    return text + " THE RUN WAS STOPPED EARLY." if result.interrupted else text


def split_flag(flag: Flag) -> tuple[str, str]:
    """The registered sentence of a flag and what is particular to this case."""
    common = FLAGS.get(flag.code) or NOTES.get(flag.code) or ""
    if common and flag.text.startswith(common):
        return common, flag.text[len(common) :].strip()
    return flag.text, ""


@dataclass(frozen=True)
class FlagGroup:
    """One flag and every site that carries it, with the details of each."""

    code: str
    text: str
    sites: tuple[tuple[str, str], ...]  # site name, detail


def grouped(pairs: Iterable[tuple[str, Flag]]) -> list[FlagGroup]:
    """Flags of many sites by code and sentence, in order of first appearance."""
    groups: dict[tuple[str, str], list[tuple[str, str]]] = {}
    for name, flag in pairs:
        text, detail = split_flag(flag)
        groups.setdefault((flag.code, text), []).append((name, detail))
    return [FlagGroup(code, text, tuple(rows)) for (code, text), rows in groups.items()]


def flag_groups(result: FitResult) -> list[FlagGroup]:
    """All flags: those of the shared quantities first, then those of the sites."""
    pairs = [(ALL_SITES, f) for f in result.shared_flags]
    return grouped(pairs + [(site_name(s), f) for s in result.sites for f in s.flags])


def note_groups(result: FitResult) -> list[FlagGroup]:
    """Notes: what stands beside a good number."""
    return grouped((site_name(s), f) for s in result.sites for f in s.notes)
