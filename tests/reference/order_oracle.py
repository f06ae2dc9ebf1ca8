"""Could anyone tell the mode orders of a synthetic site? The price of the best wrong assignment above the right one's.

The phase condition of a film, written with Fresnel coefficients at its two faces (complex above an oxide on silicon),
says how far a reading is from order m without solving for a mode. Each assignment of orders is fitted by damped
Gauss-Newton steps in film index, thickness and the shared constants with their priors; all assignments of a site run at
once. Nothing is shared with the solver or the fit. Price: chi-squared of readings and priors, plus for a reading called
a stray twice the log of its density under noise over that of a line anywhere in the scan range.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import combinations, pairwise, product

import numpy as np

from tests.reference.field_model import index_from_angle
from tests.reference.truth import Family, Truth

# Orders are decidable where the best wrong assignment is this much dearer: certainty of one in 500 (12.4), the limit
# for an unflagged answer, plus the odds of one in fifty (7.8) that a sheet has the fault at all.
DECIDABLE = 20.0
_SMALL_CHANNEL = 3
_SMALL_SITE = 12
_STEPS = 10


@dataclass(frozen=True)
class Site:
    """Rows of one site as arrays (R): angle, wavelength number, TM or not; true order, -1 for a stray."""

    family: Family
    oxide_nm: float | None
    angle_deg: np.ndarray
    wave: np.ndarray
    tm: np.ndarray
    order: np.ndarray
    truth: Truth


def site_of(
    family: Family, stack_toml: str, rows: Sequence[dict[str, object]], orders: Sequence[int | None], truth: Truth
) -> Site:
    oxide = None
    if family.oxide_nm:
        line = next(x for x in stack_toml.splitlines() if x.startswith("thickness_nm = { value"))
        oxide = float(line.split("value = ")[1].split(",")[0])
    return Site(
        family,
        oxide,
        np.array([float(str(r["angle_deg"])) for r in rows]),
        np.array([family.wavelengths_nm.index(float(str(r["wavelength_nm"]))) for r in rows]),
        np.array([r["pol"] == "TM" for r in rows]),
        np.array([-1 if m is None else m for m in orders]),
        truth,
    )


def margin(site: Site) -> float:
    """Price of the best wrong assignment less that of the right one."""
    every = np.array(list(_assignments(site)))
    wrong = np.array([_is_wrong(a, site.order) for a in every])
    price = _prices(site, np.vstack([site.order, every[wrong]]))
    return float(np.min(price[1:], initial=np.inf) - price[0])


def _is_wrong(a: np.ndarray, order: np.ndarray) -> bool:
    used = a >= 0
    return bool(np.any(a[used] != order[used]))


def _assignments(site: Site) -> Iterator[np.ndarray]:
    """Assignments within reach: at most one reading called a stray, other orders in two channels at most."""
    channel = site.wave * 2 + site.tm
    strays = [frozenset(np.flatnonzero(site.order < 0).tolist()), frozenset()]
    strays += [frozenset([r]) for r in range(site.order.size)]
    for left_out in dict.fromkeys(strays):
        choices = []
        for c in np.unique(channel):
            rows = [r for r in np.argsort(-site.angle_deg) if channel[r] == c and r not in left_out]
            choices.append(_channel_orders(rows, site.order))
        if site.order.size <= _SMALL_SITE:
            limit = 2 if left_out == strays[0] or len(choices) <= 2 else 1
        else:
            limit = 2 if left_out == strays[0] else 0
        base = [options[0] for options in choices]
        for altered in combinations(range(len(choices)), min(limit, len(choices))):
            for picks in product(*(choices[c] for c in altered)):
                out = np.full(site.order.size, -1)
                chosen = dict(enumerate(base)) | dict(zip(altered, picks, strict=True))
                for orders in chosen.values():
                    for r, m in orders.items():
                        out[r] = m
                yield out


def _channel_orders(rows: list[int], order: np.ndarray) -> list[dict[int, int]]:
    """Ways to number the readings of one channel (highest index first); the true one, or nearest to it, comes first."""
    base: list[int] = []
    for r in rows:
        least = base[-1] + 1 if base else 0
        base.append(max(int(order[r]), least))
    found = [tuple(base)]
    shifts = (-2, -1, 1, 2) if len(rows) <= _SMALL_SITE // 2 else (-1, 1)
    if len(rows) <= _SMALL_CHANNEL:
        found += list(combinations(range(len(rows) + 3), len(rows)))
    for j, k in product(range(len(rows)), shifts):
        moved = base[:j] + [m + k for m in base[j:]]
        if moved[0] >= 0 and all(b > a for a, b in pairwise(moved)):
            found.append(tuple(moved))
    return [dict(zip(rows, orders, strict=True)) for orders in dict.fromkeys(found)]


def _prices(site: Site, orders: np.ndarray) -> np.ndarray:
    """Price (A) of each assignment (A, R), infinite where its best film lies outside the fit windows."""
    fam, free = site.family, _free(site.family)
    theta = np.tile(_start(site), (len(orders), 1))
    u_prior = np.array([fam.prism_u, fam.base_angle_deg[1], fam.angle_offset_deg[1], fam.substrate_u, *_oxide_u(fam)])
    used = orders >= 0
    best = np.full(len(orders), np.inf)
    best_theta = theta.copy()
    step = np.concatenate([np.full(free, 1e-6), u_prior * 1e-2 + 1e-9])
    longest = np.concatenate([np.full(free - 1, 0.05), [0.3], 3 * u_prior + 1e-9])
    has = u_prior > 0
    for _ in range(_STEPS):
        phase = _phase(site, theta)
        slope = (_phase(site, theta, 1e-4) - phase) / 1e-4
        weight = 1 / (np.where(np.abs(slope) < 1e-3, 1e-3, slope) * fam.angle_u_deg)
        res = np.where(used, (phase - orders * np.pi) * weight, 0.0)
        prior = np.where(has, theta[:, free:] / np.where(has, u_prior, 1.0), 0.0)
        cost = (res**2).sum(axis=1) + (prior**2).sum(axis=1)
        better = cost < best
        best, best_theta = np.where(better, cost, best), np.where(better[:, None], theta, best_theta)
        jac = np.stack([(_phase(site, theta + d) - phase) / d.sum() for d in np.diag(step)], axis=2)
        jac = np.where(used[:, :, None], jac * weight[:, :, None], 0.0)
        gradient = np.einsum("arp,ar->ap", jac, res)
        hessian = np.einsum("arp,arq->apq", jac, jac)
        diagonal = np.concatenate([np.full(free, 1e-4), np.where(has, 1 / np.where(has, u_prior, 1.0) ** 2, 1e30)])
        gradient[:, free:] += np.where(has, theta[:, free:] / np.where(has, u_prior, 1.0) ** 2, 0.0)
        move = -np.linalg.solve(hessian + np.diag(diagonal), gradient[..., None])[..., 0]
        theta = theta + move / np.maximum(1.0, np.abs(move / longest).max(axis=1))[:, None]
    span = np.ptp(site.angle_deg) + 2
    stray = 2 * np.log(span / (np.sqrt(2 * np.pi) * fam.angle_u_deg))
    inside = _inside(fam, best_theta)
    inside[0] = True
    return np.where(inside, best + stray * (~used).sum(axis=1), np.inf)


def _free(fam: Family) -> int:
    return len(fam.wavelengths_nm) + (2 if fam.normal_gap else 1)


def _oxide_u(fam: Family) -> tuple[float, float]:
    if fam.oxide_index and fam.oxide_nm:
        return fam.oxide_index[1], fam.oxide_nm[1] / 1000
    return 0.0, 0.0


def _start(site: Site) -> np.ndarray:
    fam, t = site.family, site.truth
    first = fam.wavelengths_nm[0]
    gap = [t.index[first] - t.index_normal[first]] if fam.normal_gap else []
    return np.array([*(t.index[w] for w in fam.wavelengths_nm), *gap, t.thickness_nm / 1000, *np.zeros(6)])


def _inside(fam: Family, theta: np.ndarray) -> np.ndarray:
    waves, free = len(fam.wavelengths_nm), _free(fam)
    n, t = theta[:, :waves], theta[:, free - 1] * 1000
    normal = theta[:, :1] - theta[:, 1:2] if fam.normal_gap else n
    low, high = fam.index_window
    good = ((n > low) & (n < high)).all(axis=1) & ((normal > low) & (normal < high)).all(axis=1)
    return np.asarray(good & (t > fam.thickness_window[0]) & (t < fam.thickness_window[1]))


def _phase(site: Site, theta: np.ndarray, angle_step: float = 0.0) -> np.ndarray:
    """kappa k0 t less half the phases of the two reflections (A, R): m pi for a mode."""
    fam, free = site.family, _free(site.family)
    waves = len(fam.wavelengths_nm)
    prism, base, zero, below, ox_n, ox_t = (theta[:, free + i, None] for i in range(6))
    n_f = theta[:, site.wave]
    n_n = n_f - theta[:, waves, None] if fam.normal_gap else n_f
    t = theta[:, free - 1, None]
    n_p = np.array(fam.prism)[site.wave] + prism
    N = index_from_angle(site.angle_deg + angle_step + zero, n_p, fam.base_angle_deg[0] + base)
    n_s = np.array(fam.substrate)[site.wave] + below
    k0 = 2 * np.pi / (np.array(fam.wavelengths_nm)[site.wave] / 1000)
    tm = site.tm[None, :]
    kappa = np.sqrt(np.maximum(np.where(tm, n_f**2 * (1 - N**2 / n_n**2), n_f**2 - N**2), 1e-6))
    y_f = np.where(tm, kappa / n_f**2, kappa)

    def wave(n: np.ndarray | float) -> tuple[np.ndarray, np.ndarray]:
        kz = np.conj(np.sqrt(np.asarray(n**2 - N**2, dtype=complex)))
        return kz, np.where(tm, kz / n**2, kz)

    _, y_c = wave(np.ones_like(N))
    _, y_s = wave(n_s)
    up = (y_f - y_c) / (y_f + y_c)
    down = (y_f - y_s) / (y_f + y_s)
    if fam.oxide_index and site.oxide_nm is not None:
        kz, y_o = wave(fam.oxide_index[0] + ox_n)
        turn = np.exp(-2j * k0 * kz * (site.oxide_nm / 1000 + ox_t))
        first, second = (y_f - y_o) / (y_f + y_o), (y_o - y_s) / (y_o + y_s)
        down = (first + second * turn) / (1 + first * second * turn)
    return np.asarray(kappa * k0 * t - (np.angle(up) + np.angle(down)) / 2)
