"""Wafer and lot means: the random parts average down, the shared parts do not."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from ..records import Array, Estimate, GroupMean, SiteResult
from .estimates import SiteNumbers
from .intervals import REACH

Key = tuple[str | None, str, str | None, float | None]


@dataclass(frozen=True)
class _Member:
    estimate: Estimate
    to_shared: Array
    to_known: dict[str, float]


@dataclass(frozen=True)
class _Mean:
    value: float
    random2: float
    to_shared: Array
    to_known: dict[str, float]
    spread: float | None
    process: float | None
    count: int


def group_means(
    sites: Sequence[SiteResult], numbers: Sequence[SiteNumbers | None], covariance: Array, trusted: Sequence[bool]
) -> tuple[GroupMean, ...]:
    """Means over the sites of every wafer and over the wafers of every lot. covariance: of the table's shared unknowns.

    trusted: False leaves a site out (failed, orders in doubt). A wafer mean's u is that of the mean of these sites as
    made; how far the wafer varies between sites is in `spread`.
    """
    out: list[GroupMean] = []
    wafers: dict[tuple[str | None, str | None], list[int]] = {}
    for i, site in enumerate(sites):
        if site.lot is not None or site.wafer is not None:
            wafers.setdefault((site.lot, site.wafer), []).append(i)
    lots: dict[str | None, dict[Key, list[_Mean]]] = {}
    scale: dict[Key, Estimate] = {}
    for (lot, wafer), members in wafers.items():
        table: dict[Key, list[_Member]] = {}
        for i in members:
            mine = numbers[i]
            if mine is None or not trusted[i]:
                continue
            for k, e in enumerate(mine.estimates):
                if e.origin == "known":
                    continue
                key = (e.layer, e.quantity, e.axis, e.wavelength_nm)
                scale.setdefault(key, e)
                known = {name: float(v[k]) for name, v in mine.to_known.items()}
                table.setdefault(key, []).append(_Member(e, mine.to_shared[k], known))
        for key, rows in table.items():
            mean = _mean(rows)
            out.append(_record("wafer", lot, wafer, scale[key], mean, covariance, len(rows), len(members) - len(rows)))
            lots.setdefault(lot, {}).setdefault(key, []).append(mean)
    for lot, keys in lots.items():
        if lot is None:
            continue
        total = sum(len(m) for (its_lot, _), m in wafers.items() if its_lot == lot)
        for key, parts in keys.items():
            used = sum(p.count for p in parts)
            out.append(_record("lot", lot, None, scale[key], _mean_of(parts), covariance, used, total - used))
    return tuple(out)


def _unit_scale(e: Estimate) -> float:
    return 1000.0 if e.unit == "nm" else 1.0


def _mean(rows: Sequence[_Member]) -> _Mean:
    values = np.array([r.estimate.value for r in rows])
    random2 = np.array([r.estimate.u_random**2 for r in rows])
    names = {name for r in rows for name in r.to_known}
    s = _unit_scale(rows[0].estimate)
    return _Mean(
        value=float(values.mean()),
        random2=float(random2.sum()) / len(rows) ** 2,
        to_shared=np.asarray(np.mean([r.to_shared for r in rows], axis=0) * s),
        to_known={n: float(np.mean([r.to_known.get(n, 0.0) for r in rows])) * s for n in names},
        spread=float(values.std(ddof=1)) if len(rows) > 1 else None,
        process=_process(values, random2),
        count=len(rows),
    )


def _mean_of(parts: Sequence[_Mean]) -> _Mean:
    values = np.array([p.value for p in parts])
    random2 = np.array([p.random2 for p in parts])
    names = {name for p in parts for name in p.to_known}
    return _Mean(
        value=float(values.mean()),
        random2=float(random2.sum()) / len(parts) ** 2,
        to_shared=np.asarray(np.mean([p.to_shared for p in parts], axis=0)),
        to_known={n: float(np.mean([p.to_known.get(n, 0.0) for p in parts])) for n in names},
        spread=float(values.std(ddof=1)) if len(parts) > 1 else None,
        process=_process(values, random2),
        count=sum(p.count for p in parts),
    )


def _process(values: Array, random2: Array) -> float | None:
    """Spread with the known random measurement variance taken out."""
    if values.size < 2:
        return None
    left = float(values.var(ddof=1) - random2.mean())
    return float(np.sqrt(left)) if left > 0 else None


def _record(
    level: str,
    lot: str | None,
    wafer: str | None,
    e: Estimate,
    mean: _Mean,
    covariance: Array,
    count: int,
    left_out: int,
) -> GroupMean:
    shared2 = float(mean.to_shared @ covariance @ mean.to_shared) if mean.to_shared.size else 0.0
    shared2 += sum(v**2 for v in mean.to_known.values())
    u = float(np.sqrt(mean.random2 + shared2))
    return GroupMean(
        level=level, lot=lot, wafer=wafer, layer=e.layer, quantity=e.quantity, axis=e.axis,
        wavelength_nm=e.wavelength_nm, unit=e.unit, value=mean.value, u=u, u_random=float(np.sqrt(mean.random2)),
        u_shared=float(np.sqrt(shared2)), low95=mean.value - REACH * u, high95=mean.value + REACH * u,
        spread=mean.spread, spread_process=mean.process, sites=count, sites_left_out=left_out,
    )  # fmt: skip
