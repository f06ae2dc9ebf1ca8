"""Candidate films for a sheet of mode readings: which thickness and index make the readings modes at all.

    the stack has                                            way
    one film with unknown index (the usual wafer)            pairs: any two readings with assumed orders fix index and
                                                             thickness; every pair and order is tried, so no start value
                                                             is needed and no film inside the window is missed
    anything else (two unknown films, no unknown index)      a low-discrepancy scan of the fit windows

For each candidate film the phase condition says how far each reading is from a mode; readings near a whole order get
it, the others are strays. What comes out are distinct order assignments with start values, best first.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from layerlot.solver.film_phase import film_phase
from layerlot.solver.slab import mode_count

from ..observables.film import FilmReadings, nominal_index
from ..observables.parameters import Layout
from ..records import Array, BoolArray, IntArray

# A reading within this distance of a whole order may be that mode: noise and prism errors stay well below it.
NEAR_ORDER = 0.25
# A labelled one gets more room: it cannot slip to a neighbour, and start values are only near.
NEAR_LABEL = 0.7
# What a reading far from every mode adds to a score, in squared units of NEAR_ORDER.
STRAY_SCORE = 1.5
MISS_SCORE = 0.3
_GRID = 192
_SCAN = 4096
_KEEP = 40
_MOST_ORDERS = 60


@dataclass(frozen=True)
class Candidates:
    """Assignments (A, R), -1 for a stray, and start values (A, P), best first; `count_limit`: orders looked at."""

    orders: IntArray
    theta: Array

    def __len__(self) -> int:
        return int(self.orders.shape[0])


@dataclass(frozen=True)
class Scene:
    """One site's readings seen as effective indices. label: order or -1. group: readings that share one film index."""

    layout: Layout
    N: Array
    u: Array
    context: IntArray
    tm: BoolArray
    wave: Array
    label: IntArray


def scene(layout: Layout, readings: FilmReadings, label: IntArray) -> Scene:
    N, per = nominal_index(layout, readings)
    c = readings.context[0]
    tm = layout.tm[c]
    return Scene(layout, N[0], (per * readings.u)[0], c, tm, layout.working_um[c], label)


def unknown_film(layout: Layout) -> int | None:
    """Layer number of the one film with unknown index, None if there is none or several unknown films."""
    asked = {p.layer for p in layout.parameters if p.fitted}
    by_index = [
        k
        for k in range(1, layout.n_fixed.shape[1] - 1)
        if any(p.fitted and p.quantity != "thickness" and _moves(layout, k, i) for i, p in enumerate(layout.parameters))
    ]
    return by_index[0] if len(by_index) == 1 and len(asked) == 1 else None


def _moves(layout: Layout, layer: int, parameter: int) -> bool:
    return bool(layout.n_map[:, layer, parameter].any() or layout.normal_map[:, layer, parameter].any())


def find(layout: Layout, readings: FilmReadings, label: IntArray) -> Candidates:
    """Order assignments of one site (readings with S = 1); label (R): stated order, -1 where blank."""
    sc = scene(layout, readings, label)
    film = unknown_film(layout)
    theta = _scan(sc) if film is None else _from_pairs(sc, film)
    if not theta.shape[0]:
        return Candidates(np.empty((0, sc.N.size), dtype=int), np.empty((0, len(layout.parameters))))
    orders, score = assign(sc, theta)
    rank = np.argsort(score, kind="stable")
    _, first = np.unique(orders[rank], axis=0, return_index=True)
    keep = rank[np.sort(first)][:_KEEP]
    return Candidates(orders[keep], theta[keep])


def continuous_order(sc: Scene, theta: Array) -> Array:
    """Order of each reading as a real number, for films theta (T, P): shape (T, R); NaN where no film layer
    oscillates."""
    lay = sc.layout
    n = lay.n_fixed[sc.context] + np.einsum("rlp,tp->trl", lay.n_map[sc.context], theta)
    normal = None
    if lay.uniaxial:
        normal = lay.normal_fixed[sc.context] + np.einsum("rlp,tp->trl", lay.normal_map[sc.context], theta)
    t = np.maximum(lay.t_fixed + theta @ lay.t_map.T, 0.0)[:, None, :]
    film = int(np.argmax(n[..., 1:-1].max(axis=(0, 1)))) + 1
    phase = film_phase(n, t, sc.wave, film, sc.N, sc.tm, normal)
    return np.asarray((phase.alpha + phase.k_per_um * t[..., film - 1]) / np.pi - 1)


def assign(sc: Scene, theta: Array) -> tuple[IntArray, Array]:
    """Nearest orders (T, R), -1 for strays, and a robust score (T) with a price for strays and for skipped orders."""
    mu = continuous_order(sc, theta)
    nearest = np.where(sc.label >= 0, sc.label, np.maximum(np.round(mu), 0))
    off = np.abs(mu - nearest)
    ok = off < np.where(sc.label >= 0, NEAR_LABEL, NEAR_ORDER)
    order = np.where(ok, nearest, -1).astype(int)
    gap = np.where(ok, (off / NEAR_ORDER) ** 2, STRAY_SCORE)
    for tm in (False, True):
        for wave in np.unique(sc.wave):
            channel = np.flatnonzero((sc.tm == tm) & (sc.wave == wave))
            _one_reading_an_order(sc, channel, order, off, gap)
            if channel.size:
                here = np.where(order[:, channel] < 0, -1, order[:, channel])
                highest, found = here.max(axis=1), (here >= 0).sum(axis=1)
                gap[:, channel[0]] += MISS_SCORE * np.maximum(highest + 1 - found, 0)
    return order, gap.sum(axis=1)


def _one_reading_an_order(sc: Scene, channel: IntArray, order: IntArray, off: Array, gap: Array) -> None:
    """Two distinct readings cannot be one mode: the farther becomes a stray. Repeats within their noise may share
    it."""
    for a in range(channel.size):
        for b in range(a + 1, channel.size):
            i, j = channel[a], channel[b]
            if abs(sc.N[i] - sc.N[j]) < 5 * np.hypot(sc.u[i], sc.u[j]):
                continue
            same = (order[:, i] == order[:, j]) & (order[:, i] >= 0)
            for k, other in ((i, j), (j, i)):
                lose = same & (off[:, k] > off[:, other])
                order[lose, k] = -1
                gap[lose, k] = STRAY_SCORE


def _scan(sc: Scene) -> Array:
    """Low-discrepancy points over the windows of everything fitted; the rest at its start."""
    from scipy.stats import qmc

    lay = sc.layout
    low, high = lay.bounds()
    fitted = np.flatnonzero(lay.fitted)
    theta = np.tile(lay.starts(), (_SCAN, 1))
    if fitted.size:
        unit = qmc.Sobol(fitted.size, scramble=False).random(_SCAN)
        theta[:, fitted] = low[fitted] + (high - low)[fitted] * unit
    else:
        theta = theta[:1]
    return theta


@dataclass(frozen=True)
class _Group:
    """Readings that see one film index, and their phase on a grid of that index: alpha and k, (R, K)."""

    members: IntArray
    index: Array
    alpha: Array
    k: Array
    window: tuple[float, float]


def _from_pairs(sc: Scene, film: int) -> Array:
    """Films (T, P) that make some pair of readings modes of assumed orders, the other indices matched to that
    thickness."""
    lay = sc.layout
    t_low, t_high = _thickness_window(lay, film)
    groups = [_group(sc, film, g) for g in _grouping(sc, film)]
    found: list[Array] = []
    for g in groups:
        if g.members.size >= 2 or t_high == t_low:
            found.append(_group_thickness(sc, g, t_low, t_high))
    t = np.concatenate(found) if found else np.empty(0)
    if not t.size:
        t = np.linspace(t_low, t_high, 64)
    t = _spread_out(t)
    theta = np.tile(lay.starts(), (t.size, 1))
    for i in np.flatnonzero(lay.t_map[film - 1]):
        theta[:, i] = t
    for g in sorted(groups, key=lambda g: bool(sc.tm[g.members].all())):
        _set_index(lay, film, sc, g, theta, _best_index(sc, g, t, _tilt(sc, g, film, theta)))
    low, high = lay.bounds()
    return np.clip(theta, low, high)


def _thickness_window(lay: Layout, film: int) -> tuple[float, float]:
    low, high = lay.bounds()
    i = np.flatnonzero(lay.t_map[film - 1])
    if not i.size:
        return float(lay.t_fixed[film - 1]), float(lay.t_fixed[film - 1])
    return float(low[i[0]]), float(high[i[0]])


def _grouping(sc: Scene, film: int) -> list[IntArray]:
    split_pol = sc.layout.uniaxial
    keys = [(w, bool(p) and split_pol) for w, p in zip(sc.wave, sc.tm)]
    return [np.array([i for i, k in enumerate(keys) if k == key]) for key in sorted(set(keys))]


def _group(sc: Scene, film: int, members: IntArray) -> _Group:
    lay = sc.layout
    low, high = lay.bounds()
    c = sc.context[members]
    maps = lay.normal_map if lay.uniaxial and sc.tm[members].all() else lay.n_map
    fixed = lay.normal_fixed if maps is lay.normal_map else lay.n_fixed
    row, base = maps[c[0], film], fixed[c[0], film]
    ends = [base + np.where(row > 0, row * a, row * b)[row != 0].sum() for a, b in ((low, high), (high, low))]
    n_low, n_high = max(ends[0], float(sc.N[members].min())), ends[1]
    # Finer towards the top of the modes, where thickness changes fastest with index.
    grid = n_low + (n_high - n_low) * np.linspace(0, 1, _GRID) ** 2 if n_high > n_low else np.array([n_high])
    start = lay.starts()
    n = np.repeat((lay.n_fixed[c] + lay.n_map[c] @ start)[:, None, :], grid.size, axis=1)
    normal = np.repeat((lay.normal_fixed[c] + lay.normal_map[c] @ start)[:, None, :], grid.size, axis=1)
    n[:, :, film] = normal[:, :, film] = grid
    t = np.maximum(lay.t_fixed + lay.t_map @ start, 0.0)
    phase = film_phase(
        n, t, sc.wave[members][:, None], film, sc.N[members][:, None], sc.tm[members][:, None],
        normal if lay.uniaxial else None,
    )  # fmt: skip
    return _Group(members, grid, phase.alpha, phase.k_per_um, (n_low, n_high))


def _orders_of(sc: Scene, g: _Group, i: int, t_high: float) -> Array:
    if sc.label[g.members[i]] >= 0:
        return np.array([sc.label[g.members[i]]], dtype=float)
    top = np.nanmax((g.alpha[i] + g.k[i] * t_high) / np.pi - 1) if np.isfinite(g.alpha[i]).any() else -1
    return np.arange(0, min(np.floor(top + NEAR_ORDER), _MOST_ORDERS) + 1)


def _curves(g: _Group, i: int, orders: Array) -> Array:
    """Thickness (M, K) that makes reading i mode m, along the index grid."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(((orders[:, None] + 1) * np.pi - g.alpha[i]) / g.k[i])


def _group_thickness(sc: Scene, g: _Group, t_low: float, t_high: float) -> Array:
    """Thicknesses at which two readings of the group, with assumed orders, agree on the index; best-scoring kept."""
    points: list[Array] = []
    slack = 1e-6 + 0.02 * (t_high - t_low)
    for i, j in _pairs(sc, g):
        a, b = _orders_of(sc, g, i, t_high), _orders_of(sc, g, j, t_high)
        if not (a.size and b.size):
            continue
        ti, tj = _curves(g, i, a), _curves(g, j, b)
        d = ti[:, None, :] - tj[None, :, :]
        cross = (d[..., :-1] * d[..., 1:] <= 0) & np.isfinite(d[..., :-1]) & np.isfinite(d[..., 1:])
        ia, ib, k = np.nonzero(cross)
        d0, d1 = d[ia, ib, k], d[ia, ib, k + 1]
        f = np.where(d0 == d1, 0.5, d0 / np.where(d0 == d1, 1.0, d0 - d1))
        t = ti[ia, k] + f * (ti[ia, k + 1] - ti[ia, k])
        n = g.index[k] + f * (g.index[k + 1] - g.index[k])
        ok = (t > t_low - slack) & (t < t_high + slack)
        points.append(np.stack([t[ok], n[ok]], axis=1))
    if t_low == t_high or g.index.size == 1:
        return np.array([t_low]) if t_low == t_high else _single_index(sc, g, t_low, t_high)
    if not points:
        return np.empty(0)
    p = np.concatenate(points)
    score = np.array([_score_at(sc, g, t, n) for t, n in p]) if p.shape[0] < 4 else _scores(sc, g, p)
    return np.asarray(p[np.argsort(score, kind="stable")[:_KEEP], 0])


def _single_index(sc: Scene, g: _Group, t_low: float, t_high: float) -> Array:
    t = np.concatenate([_curves(g, i, _orders_of(sc, g, i, t_high)).ravel() for i in range(g.members.size)])
    return np.asarray(t[(t > t_low) & (t < t_high)])


def _pairs(sc: Scene, g: _Group) -> list[tuple[int, int]]:
    """Pairs that pin the film well: far apart in one polarisation first, then across polarisations; ten at most."""
    size = g.members.size
    all_pairs = [(i, j) for i in range(size) for j in range(i + 1, size)]

    def pull(pair: tuple[int, int]) -> tuple[bool, float]:
        a, b = g.members[list(pair)]
        return (bool(sc.tm[a] != sc.tm[b]), -abs(float(sc.N[a] - sc.N[b])))

    same = sorted((p for p in all_pairs if sc.tm[g.members[p[0]]] == sc.tm[g.members[p[1]]]), key=pull)
    cross = sorted((p for p in all_pairs if p not in same), key=pull)
    spread = same[:: max(1, len(same) // 8)][:8]
    return spread + cross[: max(2, 4 - len(spread))]


def _scores(sc: Scene, g: _Group, points: Array) -> Array:
    """Robust score of points (T, 2) = (t, n) against all readings of the group, by interpolation on its grid."""
    total = np.zeros(points.shape[0])
    for i in range(g.members.size):
        alpha, k = (np.interp(points[:, 1], g.index, x[i], left=np.nan) for x in (g.alpha, g.k))
        mu = (alpha + k * points[:, 0]) / np.pi - 1
        label = sc.label[g.members[i]]
        off = np.abs(mu - (label if label >= 0 else np.maximum(np.round(mu), 0)))
        total += np.where(off < NEAR_ORDER, (off / NEAR_ORDER) ** 2, STRAY_SCORE)
        if label < 0:
            # A thicker film has denser modes and meets any reading more easily: a price for the orders below.
            total += 0.02 * np.nan_to_num(mu, nan=0.0)
    return total


def _score_at(sc: Scene, g: _Group, t: float, n: float) -> float:
    return float(_scores(sc, g, np.array([[t, n]]))[0])


def _spread_out(t: Array) -> Array:
    """Distinct thicknesses: those closer than a tenth of a per cent are one start value."""
    ordered = np.sort(t)
    keep = np.concatenate([[True], np.diff(ordered) > 1e-3 * ordered[1:]]) if ordered.size else np.empty(0, dtype=bool)
    return np.asarray(ordered[keep])


def _tilt(sc: Scene, g: _Group, film: int, theta: Array) -> Array:
    """Factor (T, 1, K) on the wave number of TM modes of a uniaxial film, whose grid took both indices equal."""
    lay = sc.layout
    if not (lay.uniaxial and sc.tm[g.members].all()):
        return np.ones((theta.shape[0], 1, 1))
    c = sc.context[g.members[0]]
    in_plane = lay.n_fixed[c, film] + theta @ lay.n_map[c, film]
    return np.asarray(in_plane[:, None, None] / g.index)


def _best_index(sc: Scene, g: _Group, t: Array, tilt: Array) -> Array:
    """Film index (T) of a group that suits its readings best at given thicknesses."""
    with np.errstate(invalid="ignore"):
        mu = (g.alpha[None] + g.k[None] * tilt * t[:, None, None]) / np.pi - 1
        label = sc.label[g.members][None, :, None]
        off = np.abs(mu - np.where(label >= 0, label, np.maximum(np.round(mu), 0)))
    cost = np.where(off < NEAR_ORDER, (off / NEAR_ORDER) ** 2, STRAY_SCORE) + np.where(
        label >= 0, 0.0, 0.02 * np.nan_to_num(mu, nan=0.0)
    )
    return np.asarray(g.index[cost.sum(axis=1).argmin(axis=1)])


def _set_index(lay: Layout, film: int, sc: Scene, g: _Group, theta: Array, n: Array) -> None:
    """Put an index into the unknowns that carry it (least squares where a curve has several coefficients)."""
    tm_only = bool(sc.tm[g.members].all()) and lay.uniaxial
    maps, fixed = (lay.normal_map, lay.normal_fixed) if tm_only else (lay.n_map, lay.n_fixed)
    c = sc.context[g.members[0]]
    row = np.where(lay.fitted, maps[c, film], 0.0)
    if not row.any():
        return
    now = fixed[c, film] + theta @ maps[c, film]
    theta += np.outer(n - now, row) / (row @ row)


def unseen_modes(sc: Scene, theta: Array, orders: IntArray) -> Array:
    """For each assignment (A): how many orders below a channel's highest used one have no reading, and whether modes
    beyond it exist that could have been read. Returns (A, 2)."""
    lay = sc.layout
    out = np.zeros((theta.shape[0], 2))
    for a in range(theta.shape[0]):
        for tm in (False, True):
            for wave in np.unique(sc.wave):
                channel = np.flatnonzero((sc.tm == tm) & (sc.wave == wave))
                used = orders[a, channel]
                used = used[used >= 0]
                if not channel.size:
                    continue
                c = sc.context[channel[0]]
                n = lay.n_fixed[c] + lay.n_map[c] @ theta[a]
                normal = lay.normal_fixed[c] + lay.normal_map[c] @ theta[a] if lay.uniaxial else None
                t = np.maximum(lay.t_fixed + lay.t_map @ theta[a], 0.0)
                top = int(used.max()) if used.size else -1
                out[a, 0] += top + 1 - len(set(used.tolist()))
                if max(n[0], n[-1]) < n[1:-1].max():
                    out[a, 1] += int(mode_count(n, t, lay.working_um[c], tm, normal)) > top + 1
    return out
