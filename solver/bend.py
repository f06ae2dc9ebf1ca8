"""The lateral slab of a bent guide, by conformal map.

With r = R h, h = 1 + x / R, R the radius of the guide's centre line, and a field that goes round as
exp(-j N k0 R phi), the two-dimensional equations in r are those of a straight slab of other materials, exactly
(M. Heiblum, J. H. Harris, IEEE J. Quantum Electron. 11, 75 (1975), from memory, for the lateral TE slab; the TM one by
the same substitution):

    lateral TE (quasi-TM)     index N h                                  thickness dx / h
    lateral TM (quasi-TE)     index N / h in the plane, N h normal       thickness dx h

N here is a column's index. For TM the weights 1 / N^2 are thus those of the columns themselves, not of a mapped profile
N h, which differs in terms of the order of the shift, 1 / R^2. The mode's index is referred to R. The method's own
error remains: by the full-vector reference the shift of a silicon wire of 450 x 220 nm, quasi-TE, is 0.6 of what comes
out.

Columns are cut into sub-slabs with h at their middle; two numbers of cuts and Richardson's rule leave an error of
fourth order, below 1e-7. The outer side ends before its turning point, x = R (N / N_side - 1), where the field begins
to run.
"""

from __future__ import annotations

import math
from functools import lru_cache
from itertools import pairwise
from typing import NamedTuple

from .cross_section import GuideFlag
from .guide_columns import Lateral, Value, anywhere, exists, functions, larger, negated, slab, where

# Cuts of the centre, of each wall column and of each side; the coarse ones are half of that.
CUTS = (24, 2, 24)
# Decay lengths of the side that are kept: exp(-2 * 12) of its intensity is lost.
DEPTH = 12.0
# Share of the way to the middle of the bend that the inner side goes at the most.
MIDDLE = 0.9
# Where the outer side ends before its turning point, in Airy lengths: there sqrt(z) = Bi'(z) / Bi(z), so that an even
# half-space from there on stands exactly for the standing wave Bi, the real part of the wave that goes out.
AIRY = 0.400309070059
# Least barrier in front of the turning point, in the same lengths.
BARRIER = 1.0
# Estimated loss, in dB per quarter turn, from which a bend counts as radiating: the wave let out moves N by about a
# fifth of its imaginary part, at this loss by 1e-5 in the tightest silicon bends.
LOUD_DB = 0.01
# A radius of fewer widths is out of range: the columns' slabs are no longer plane along the guide.
FEWEST_WIDTHS = 2.0


class _Edge(NamedTuple):
    """Place of a cut: x = half * (half width of the centre) + wall * (extent of a wall) + the sides' depths times inner
    and outer."""

    half: float
    wall: float
    inner: float
    outer: float


class _Reach(NamedTuple):
    """Half width of the centre, extent of a wall, depths of the inner and the outer side, in µm."""

    half: Value
    wall: Value
    inner: Value
    outer: Value


class _Cut(NamedTuple):
    """Mode at fixed depths of the sides, derivatives by those depths, and the share of it in the outer side."""

    lateral: Lateral
    dinner: Value
    douter: Value
    outside: Value


def bent(
    line: Lateral,
    index: list[Value],
    width_um: Value,
    wall_um: Value,
    wavelength_um: Value,
    order: Value,
    tm: Value,
    radius_um: Value,
) -> tuple[Lateral, Value]:
    """Mode of the lateral slab of a bend, and flags; where the radius is infinite, the straight one, `line`.

    Arguments as for `guide_columns.straight`; radius_um of the centre line. BEND_RADIATES stands where the estimated
    loss exceeds `LOUD_DB` per quarter turn: the power that tunnels to the turning point, by WKB (E. A. J. Marcatili,
    Bell Syst. Tech. J. 48, 2103 (1969), from memory), over that carried by the mode. N, the real part, is then less
    exact. BEND_OUT_OF_RANGE, with NaN for all numbers, stands where the straight mode's turning point lies within the
    guide or hardly outside it, where the radius is less than `FEWEST_WIDTHS` widths, or where no mode is left.
    """
    turns = radius_um < math.inf
    foot, side = (width_um + wall_um) / 2, index[-1]
    there = exists(line.N)
    N0 = where(there, line.N, 1.01 * side)
    barrier = radius_um * (N0 / side - 1) - foot
    inside = barrier > (AIRY + BARRIER) * _airy_um(N0, side, wavelength_um, radius_um)
    sane = turns & there & inside & (radius_um >= FEWEST_WIDTHS * 2 * foot)
    if not anywhere(sane):
        return _without(line, turns), where(turns & there, int(GuideFlag.BEND_OUT_OF_RANGE), 0)
    # Elements that need no bend are carried along as all but straight.
    R = where(sane, radius_um, 1e9 * foot)
    reach, slopes = _reach(N0, line, side, width_um, wall_um, wavelength_um, R)
    half = CUTS[0] // 2, CUTS[1] // 2, CUTS[2] // 2
    coarse = _cut(index, reach, wavelength_um, order, tm, R, half, N0)
    fine = _cut(index, reach, wavelength_um, order, tm, R, CUTS, coarse.lateral.N)
    k0 = 2 * math.pi / wavelength_um
    mode = _either(sane, _whole(_richardson(fine, coarse), slopes), _without(line, turns))
    found = exists(mode.N)
    loss = _loss_db(where(found, mode.N, N0), side, fine.outside, foot, R, k0)
    lost = where(turns & there & negated(found), int(GuideFlag.BEND_OUT_OF_RANGE), 0)
    return mode, lost | where(sane & found & (loss > LOUD_DB), int(GuideFlag.BEND_RADIATES), 0)


def _smaller(x: Value, y: Value) -> Value:
    return -larger(-x, -y)


def _without(line: Lateral, turns: Value) -> Lateral:
    """The straight mode, NaN where the guide is bent."""
    gone = where(turns, math.nan, 0.0)
    return Lateral(line.N + gone, [x + gone for x in line.dcolumn], *(x + gone for x in line[2:]))


def _either(condition: Value, yes: Lateral, no: Lateral) -> Lateral:
    columns = [where(condition, x, y) for x, y in zip(yes.dcolumn, no.dcolumn)]
    return Lateral(where(condition, yes.N, no.N), columns, *(where(condition, x, y) for x, y in zip(yes[2:], no[2:])))


def _reach(
    N: Value, line: Lateral, side: Value, width_um: Value, wall_um: Value, wavelength_um: Value, radius_um: Value
) -> tuple[_Reach, tuple[Lateral, Lateral]]:
    """How far the sub-slabs go, and the derivatives of the inner and the outer depth (N unused there).

    N: of the straight mode, whose derivatives are those of `line`.
    """
    foot = (width_um + wall_um) / 2
    fall = N * N - side * side
    depth = DEPTH * wavelength_um / (2 * math.pi * functions(N).sqrt(fall))
    last = AIRY * _airy_um(N, side, wavelength_um, radius_um)
    turn = radius_um * (N / side - 1) - foot - last
    middle = MIDDLE * (radius_um - foot)
    reach = _Reach((width_um - wall_um) / 2, wall_um, _smaller(depth, middle), _smaller(depth, turn))

    def slopes(by_N: Value, by_side: Value, by_foot: Value, by_wavelength: Value) -> Lateral:
        columns = [by_N * x for x in line.dcolumn]
        columns[-1] = columns[-1] + by_side
        along = by_N * line.dwavelength_per_um + by_wavelength
        width, wall = (by_N * x + by_foot / 2 for x in (line.dwidth_per_um, line.dwall_per_um))
        return Lateral(N, columns, width, wall, along)

    zero = N * 0.0
    free = slopes(-depth * N / fall, depth * side / fall, zero, depth / wavelength_um)
    to_turn = slopes(
        radius_um / side - last / (3 * N),
        last / side - radius_um * N / (side * side),
        zero - 1.0,
        -2 / 3 * last / wavelength_um,
    )
    to_middle = slopes(zero, zero, zero - MIDDLE, zero)
    return reach, (_either(depth < middle, free, to_middle), _either(depth < turn, free, to_turn))


def _airy_um(N: Value, side: Value, wavelength_um: Value, radius_um: Value) -> Value:
    """Length on which the field turns from falling to running at the turning point."""
    return N / side * (radius_um * (wavelength_um / (2 * math.pi * N)) ** 2 / 2) ** (1 / 3)


def _whole(cut: _Cut, slopes: tuple[Lateral, Lateral]) -> Lateral:
    """The mode with its derivatives through the depths of the sides as well."""
    m, (inner, outer) = cut.lateral, slopes

    def add(x: Value, a: Value, b: Value) -> Value:
        return x + cut.dinner * a + cut.douter * b

    columns = [add(*x) for x in zip(m.dcolumn, inner.dcolumn, outer.dcolumn)]
    return Lateral(m.N, columns, *(add(*x) for x in zip(m[2:], inner[2:], outer[2:])))


def _richardson(fine: _Cut, coarse: _Cut) -> _Cut:
    def better(x: Value, y: Value) -> Value:
        return x + (x - y) / 3

    f, c = fine.lateral, coarse.lateral
    columns = [better(x, y) for x, y in zip(f.dcolumn, c.dcolumn)]
    lateral = Lateral(better(f.N, c.N), columns, *(better(x, y) for x, y in zip(f[2:], c[2:])))
    return _Cut(lateral, *(better(x, y) for x, y in zip(fine[1:], coarse[1:])))


@lru_cache(maxsize=16)
def _plan(walls: int, cuts: tuple[int, int, int]) -> tuple[list[_Edge], list[int]]:
    """Cuts from the inner to the outer end, and the column in each gap between them. The sides are cut finer near the
    guide."""
    centre, wall, side = cuts
    out = [((1.0, k / (walls * wall), 0.0), 1 + k // wall) for k in range(walls * wall)]
    out += [((1.0, 1.0, (k / side) ** 2), walls + 1) for k in range(side)]
    out_edges = [x for x, _ in out] + [(1.0, 1.0, 1.0)]
    if not walls:
        out_edges = [(1.0, 1.0, x[2]) for x in out_edges]
    columns = [c for _, c in out]
    inner = [_Edge(-a, -b, -c, 0.0) for a, b, c in reversed(out_edges)]
    middle = [_Edge(2 * k / centre - 1, 0.0, 0.0, 0.0) for k in range(1, centre)]
    outer = [_Edge(a, b, 0.0, c) for a, b, c in out_edges]
    return inner + middle + outer, columns[::-1] + [0] * centre + columns


def _cut(
    index: list[Value],
    reach: _Reach,
    wavelength_um: Value,
    order: Value,
    tm: Value,
    radius_um: Value,
    cuts: tuple[int, int, int],
    near: Value,
) -> _Cut:
    """Mode of the slab of sub-slabs; near: an index to start from."""
    edges, columns = _plan(len(index) - 2, cuts)
    x = [sum(a * b for a, b in zip(edge, reach)) for edge in edges]
    h = [1 + (a + b) / (2 * radius_um) for a, b in pairwise(x)]
    h = [1 + x[0] / radius_um, *h, 1 + x[-1] / radius_um]
    of = [len(index) - 1, *columns, len(index) - 1]
    N = [index[c] for c in of]
    thick = [b - a for a, b in pairwise(x)]
    # where(tm, ...): power of h in the index in the plane and in the thickness
    plane = [where(tm, a / b, a * b) for a, b in zip(N, h)]
    normal = [a * b for a, b in zip(N, h)]
    stretch = [where(tm, a, 1 / a) for a in h[1:-1]]
    mode = slab(plane, [a * b for a, b in zip(thick, stretch)], wavelength_um, order, tm, normal, near)
    dindex = [where(tm, a / b + c * b, a * b) for a, b, c in zip(mode.dn, h, mode.dn_normal)]
    dh = [where(tm, (c - a / (b * b)) * n, a * n) for a, b, c, n in zip(mode.dn, h, mode.dn_normal, N)]
    for j, (a, t, b) in enumerate(zip(mode.dt_per_um, thick, h[1:-1]), start=1):
        dh[j] = dh[j] + where(tm, a * t, -a * t / (b * b))
    dthick = [a * b for a, b in zip(mode.dt_per_um, stretch)]
    dcolumn = [index[0] * 0.0] * len(index)
    for c, d in zip(of, dindex):
        dcolumn[c] = dcolumn[c] + d
    by_reach = _by_reach(edges, dh, dthick, radius_um)
    outside = sum(dindex[-cuts[2] - 1 :]) * index[-1] / mode.N
    half, wall = by_reach.half, by_reach.wall
    lateral = Lateral(mode.N, dcolumn, half / 2, wall - half / 2, mode.dwavelength_per_um)
    return _Cut(lateral, by_reach.inner, by_reach.outer, outside)


def _by_reach(edges: list[_Edge], dh: list[Value], dthick: list[Value], radius_um: Value) -> _Reach:
    """Derivatives by the quantities of the reach, from those by h and by thickness."""
    by_x = [
        (2 * dh[0] + dh[1]) / (2 * radius_um),
        *((a + b) / (2 * radius_um) for a, b in pairwise(dh[1:-1])),
        (dh[-2] + 2 * dh[-1]) / (2 * radius_um),
    ]
    for j, d in enumerate(dthick):
        by_x[j], by_x[j + 1] = by_x[j] - d, by_x[j + 1] + d
    return _Reach(*(sum(a * x for a, x in zip(by_x, places) if x) for places in zip(*edges)))


def _loss_db(N: Value, side: Value, outside: Value, foot: Value, radius_um: Value, k0: Value) -> Value:
    """Loss in dB per quarter turn by tunnelling, within a factor of about two.

    At the wall the field falls with kappa; a side that holds a share s of the mode has psi^2 = 2 kappa s there. Of
    that, kappa exp(-2 S) psi^2 flows out beyond the turning point, S being the integral of the decay up to it.
    """
    f = functions(N)
    z = side * (1 + foot / radius_um) / N
    z = where(z < 1, z, 1.0)
    root = f.sqrt(1 - z * z)
    # artanh(root) = ln((1 + root) / z)
    barrier = k0 * radius_um * N * (f.log((1 + root) / z) - root)
    kappa = k0 * N * root
    rate = 2 * kappa * kappa * outside * f.exp(-2 * barrier) / (k0 * N)
    return 10 / math.log(10) * rate * math.pi / 2 * radius_um
