"""Coverage study: synthetic tables of a family fitted, every interval held against the truth."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from layerlot.fitting.inverse import fit_table
from layerlot.fitting.records import Estimate
from layerlot.fitting.stack import parse_stack

from tests.fitting.synthetic import readings_of
from tests.reference.truth import SyntheticTable, Truth, draw_tables


@dataclass
class Tally:
    """One quantity over all sites: inside its interval or not, (estimate - truth) / u, and which table and site."""

    inside: list[bool] = field(default_factory=list)
    pull: list[float] = field(default_factory=list)
    where: list[str] = field(default_factory=list)

    @property
    def coverage(self) -> float:
        return float(np.mean(self.inside))

    @property
    def mean_pull(self) -> float:
        return float(np.mean(self.pull))


@dataclass
class Study:
    """Tallies by quantity; sites seen, and those left without a number or flagged, with their codes."""

    sites: int = 0
    tallies: dict[str, Tally] = field(default_factory=dict)
    failed: list[str] = field(default_factory=list)
    flagged: list[str] = field(default_factory=list)

    def lines(self) -> list[str]:
        out = [f"{self.sites} sites, {len(self.failed)} without a number, {len(self.flagged)} flagged"]
        for name, t in sorted(self.tallies.items()):
            out.append(
                f"  {name:28s} n {len(t.inside):5d}  coverage {100 * t.coverage:6.2f} %  mean pull {t.mean_pull:+.3f}"
                f"  sd of pull {np.std(t.pull):.3f}"
            )
        return out


def run(family: str, n_sites: int, sites_per_table: int, seed: int) -> Study:
    """Fit labelled tables of a family and tally the site estimates and the wafer means."""
    study = Study()
    for k, table in enumerate(draw_tables(family, n_sites, sites_per_table, seed)):
        result = fit_table(parse_stack(table.stack_toml, "stack.toml"), readings_of(table.rows))
        for site in result.sites:
            study.sites += 1
            assert site.site is not None
            where = f"seed {seed} table {k} site {site.site}"
            codes = " ".join(f.code for f in site.flags)
            if codes:
                study.flagged.append(f"{where}: {codes}")
            fitted = [e for e in site.estimates if e.layer == "film" and e.origin == "fitted"]
            if not fitted:
                study.failed.append(f"{where}: {codes}")
            for e in fitted:
                truth = value_of(table.truth[site.site], e.quantity, e.axis, e.wavelength_nm)
                _count(study, _name(e), e.low95, e.value, e.high95, e.u, truth, where)
        _count_means(study, table, result.means, f"seed {seed} table {k}")
    return study


def _count_means(study: Study, table: SyntheticTable, means: tuple, where: str) -> None:
    for m in means:
        if m.level == "wafer" and m.layer == "film" and m.sites > 1 and not m.sites_left_out:
            all_truths = [value_of(t, m.quantity, m.axis, m.wavelength_nm) for t in table.truth.values()]
            _count(
                study, "wafer mean of " + _name(m), m.low95, m.value, m.high95, m.u, float(np.mean(all_truths)), where
            )


def _name(e: Estimate) -> str:
    axis = "" if e.axis in {None, "any"} else f" {e.axis}"
    return e.quantity + axis + ("" if e.wavelength_nm is None else f" {e.wavelength_nm:g}")


def value_of(truth: Truth, quantity: str, axis: str | None, wavelength_nm: float | None) -> float:
    """The true value of an estimated quantity, in the estimate's unit."""
    if quantity == "thickness":
        return truth.thickness_nm
    assert quantity == "index" and wavelength_nm is not None
    return (truth.index_normal if axis == "normal" else truth.index)[wavelength_nm]


def _count(study: Study, name: str, low: float, value: float, high: float, u: float, truth: float, where: str) -> None:
    t = study.tallies.setdefault(name, Tally())
    t.inside.append(low <= truth <= high)
    t.pull.append((value - truth) / u)
    t.where.append(where)
