"""Order study: unlabelled sheets with one fault a site, fitted and judged reading by reading."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from layerlot.fitting.inverse import fit_table
from layerlot.fitting.records import SiteResult, Status
from layerlot.fitting.stack import parse_stack

from tests.fitting.synthetic import readings_of
from tests.reference.order_oracle import DECIDABLE, margin, site_of
from tests.reference.truth import FAMILIES, SyntheticTable, draw_tables, spoil

FAULTS = ("missed", "stray", "whole_degree")
# The family with one mode each of TE and TM has no redundancy: without one of two readings there is nothing to find.
STUDIED = tuple(name for name in FAMILIES if not FAMILIES[name].one_each)
_PER_TABLE = 5
# A line within 4.7 standard uncertainties of a mode is likelier a reading of it than a stray (4.7 squared is the price
# of a stray, odds included); the clean reading that it is compared with has noise of its own, 2 more.
_SAME_PLACE = 7.0


@dataclass(frozen=True)
class Verdict:
    """right: a number, and no used reading has a wrong order; flagged: status says so; margin: the oracle's."""

    where: str
    fault: str
    right: bool
    flagged: bool
    margin: float
    detail: str

    @property
    def decidable(self) -> bool:
        return self.margin >= DECIDABLE


def verdicts(per_family: int, seed: int) -> Iterator[Verdict]:
    """`per_family` verdicts a family, one a site; the kinds of fault take turns from table to table.

    A site counts only if its good readings outnumber its unknowns after the fault: with no redundancy left, a false
    reading makes another film that fits as well, and nobody can tell (the fit notes `no_redundancy`).
    """
    for family in STUDIED:
        left = per_family
        for k, clean in enumerate(draw_tables(family, 2 * per_family, _PER_TABLE, seed, labelled=False)):
            if not left:
                break
            table = spoil(clean, FAULTS[k % len(FAULTS)], seed + k)
            result = fit_table(parse_stack(table.stack_toml, "stack.toml"), readings_of(table.rows))
            redundant = [site for site in result.sites if _redundancy(family, table, site) > 0]
            for site in redundant[:left]:
                left -= 1
                yield _judge(family, clean, table, site, f"{family} seed {seed} table {k} site {site.site}")


def _redundancy(family: str, table: SyntheticTable, site: SiteResult) -> int:
    """Good readings of a site less its unknowns: thickness, and indices of every wavelength that has a good reading."""
    good = [r for r, m in zip(table.rows, table.orders, strict=True) if r["site"] == site.site and m is not None]
    waves = len({r["wavelength_nm"] for r in good})
    return len(good) - waves * (2 if FAMILIES[family].normal_gap else 1) - 1


def _judge(family: str, clean: SyntheticTable, table: SyntheticTable, site: SiteResult, where: str) -> Verdict:
    assert site.site is not None
    mine = [i for i, row in enumerate(table.rows) if row["site"] == site.site]
    rows, orders = [table.rows[i] for i in mine], [table.orders[i] for i in mine]
    fam = FAMILIES[family]
    right = site.status is not Status.FAILED
    words = []
    for fitted, row, order in zip(site.readings, rows, orders, strict=True):
        assert fitted.reading.value == row["angle_deg"]
        if not fitted.used or fitted.order == order:
            continue
        place = _place(clean, row | {"mode": fitted.order}, fitted.order)
        if order is None and place is not None and abs(place - fitted.reading.value) < _SAME_PLACE * fam.angle_u_deg:
            continue
        right = False
        words.append(f"{row['pol']} {row['angle_deg']:.3f} is {order}, taken as {fitted.order}")
    codes = " ".join(f.code for f in site.flags)
    oracle = margin(site_of(fam, table.stack_toml, rows, orders, table.truth[site.site]))
    detail = f"{table.faults[site.site]}; {'; '.join(words)}; flags: {codes or 'none'}"
    return Verdict(where, table.faults[site.site], right, site.status is not Status.OK, oracle, detail)


def _place(clean: SyntheticTable, row: dict[str, object], order: int | None) -> float | None:
    """Where the mode was read before the sheet was spoilt."""
    for other, m in zip(clean.rows, clean.orders, strict=True):
        if m == order and all(other[k] == row[k] for k in ("site", "wavelength_nm", "pol")):
            return float(str(other["angle_deg"]))
    return None


def summary(found: list[Verdict]) -> str:
    """The study's figures, and every case that is wrong without a flag or flagged though decidable."""
    decidable = [v for v in found if v.decidable]
    silent = [v for v in found if not v.right and not v.flagged]
    clean = [v for v in decidable if v.right and not v.flagged]
    lines = [
        f"{len(found)} sites: {len(silent)} wrong without a flag; {len(decidable)} decidable, of which {len(clean)}"
        f" ({100 * len(clean) / max(len(decidable), 1):.1f} %) right without a flag;"
        f" median margin {np.median([v.margin for v in found]):.0f}"
    ]
    lines += [f"  WRONG {v.where}: {v.detail}; margin {v.margin:.1f}" for v in silent]
    lines += [f"  not clean {v.where}: {v.detail}; margin {v.margin:.1f}" for v in decidable if v not in clean]
    return "\n".join(lines)
