"""Modes of etched guides by the plain effective index method (EIM).

    you want                                            use
    n_eff of a guide with all derivatives, in bulk      eim_modes
    the same, right to nanometres of width              layerlot.solver.correction
    the reference                                       layerlot.solver.vector_modes

Vertical slabs first, through the guide and beside it, mode 0 of the guide's polarisation; then the lateral slab made of
their effective indices, polarisation swapped: for quasi-TE the electric field lies along x, normal to the lateral
interfaces, so that slab is TM (R. M. Knox, P. P. Toulios, Proc. Symp. Submillimeter Waves, 497 (1970); G. B. Hocker,
W. K. Burns, Appl. Opt. 16, 113 (1977); both from memory). The method is in error by up to 0.1 in silicon wires: a
start, and the base of the correction map, no result to fit with.
"""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .bend import bent
from .cross_section import CrossSection, GuideFlag, GuideModes, without_substrate
from .guide_columns import (
    Column,
    Guide,
    Lateral,
    SideRule,
    Value,
    across,
    anywhere,
    column,
    column_index,
    exists,
    functions,
    larger,
    modes_above,
    negated,
    straight,
    where,
)

__all__ = ["WALL_COLUMNS", "SideRule", "eim_modes"]

BoolArray = NDArray[np.bool_]

# Columns under each sloped wall.
WALL_COLUMNS = 4
# Share of the way from the side's index squared to the centre's below which a mode counts as near cut-off: there a
# higher mode is lost with 2 % of the width (V is within 2 sqrt(b) of its cut-off), and of a mode 0, which has none, the
# core holds less than a hundredth.
NEAR = 1e-3
# What comes back from a substrate below the buffer, as a share of the field squared, at which it is spoken of.
LEAK = 1e-5
# Up to this many guides plain floats beat numpy's overhead.
FEW = 32


class Mode(NamedTuple):
    """One mode with the fields of `GuideModes`, dn and dt_per_um lists over layers; ddepth_per_um by the etch depth at
    fixed thickness."""

    N: Value
    dwidth_per_um: Value
    dt_per_um: Value
    ddepth_per_um: Value
    dsidewall_per_deg: Value
    dn: Value
    dwavelength_per_um: Value
    flags: Value


def eim_modes(
    section: CrossSection,
    tm: ArrayLike,
    order: ArrayLike = 0,
    radius_um: ArrayLike | None = None,
    side_rule: SideRule = SideRule.CUT_OFF,
) -> GuideModes:
    """Mode of lateral order `order` of each guide, with all derivatives in closed form.

    section: batch of guides (...). tm: False for quasi-TE, True for quasi-TM; order: number of lateral nodes;
    radius_um: of a bend's centre line, None or infinite for a straight guide (see `bend`). All three (...), broadcast
    with the batch. side_rule: what stands for the side's index where the side guides nothing, which sets the flag
    SIDES_GUIDE_NOTHING; under FILL and WEIGHTED the index jumps where the side comes to guide (see `SideRule`).

    Returns `GuideModes` of the broadcast shape. N and its derivatives are NaN where there is no mode, with the flag
    that says why; a mode at or below the index of a half-space counts as none. `error` and `group_error` are NaN: the
    method cannot tell its own error. Where a substrate of high index was replaced by the buffer above it, so is its
    derivative. Flag SECOND_MODE asks for lateral modes of vertical order 0 alone.

    A sloped wall is cut into `WALL_COLUMNS` columns. N has a kink at sidewall_deg = 90, where it falls to both sides
    by up to 1e-3 per degree in silicon: the slope given there is an estimate of the mean of both.

    Raises ValueError for a radius that is not positive.
    """
    radius = np.inf if radius_um is None else np.asarray(radius_um, dtype=float)
    if not np.all(radius > 0):
        raise ValueError("radius_um must be positive and not NaN")
    shape = np.broadcast_shapes(section.shape, np.shape(tm), np.shape(order), np.shape(radius))
    size = math.prod(shape)
    n, dropped = without_substrate(section.n)
    layers = n.shape[-1]

    def flat(x: ArrayLike, *tail: int) -> Any:
        y = np.asarray(x)
        full = (*shape, *tail)
        return (y if y.shape == full else np.broadcast_to(y, full)).reshape(size, *tail)

    parts = [
        flat(n, layers), flat(section.t_um, layers - 2), flat(section.width_um), flat(section.wavelength_um),
        flat(section.depth_um), flat(section.sidewall_deg), flat(np.asarray(tm, dtype=bool)), flat(order),
        flat(radius), flat(dropped),
    ]  # fmt: skip
    if 0 < size <= FEW:
        each = zip(*(x.tolist() for x in parts))
        mode = Mode(*map(np.array, zip(*(_one(section.core, side_rule, *row) for row in each))))
    else:
        n_, t = (list(np.ascontiguousarray(x.T)) for x in parts[:2])
        many = _one(section.core, side_rule, n_, t, *parts[2:])
        mode = many._replace(dn=np.stack(many.dn, axis=-1), dt_per_um=np.stack(many.dt_per_um, axis=-1))
    return _shaped(mode, section, shape, parts[-1])


def _shaped(mode: Mode, section: CrossSection, shape: tuple[int, ...], dropped: BoolArray) -> GuideModes:
    N, dwidth, dt, ddepth, dsidewall, dn, dwavelength, flags = mode
    dn[:, 1] += np.where(dropped, dn[:, 0], 0.0)
    dn[dropped, 0] *= 0.0
    if section.etch_um is None:
        dt[:, section.core - 1] += ddepth
        ddepth = ddepth * 0.0
    nan = np.full(shape, np.nan)
    return GuideModes(
        N.reshape(shape), dwidth.reshape(shape), dt.reshape(*shape, dt.shape[-1]), ddepth.reshape(shape),
        dsidewall.reshape(shape), dn.reshape(*shape, dn.shape[-1]), dwavelength.reshape(shape),
        flags.reshape(shape), nan, nan,
    )  # fmt: skip


def _one(
    core: int,
    rule: SideRule,
    n: list[Value],
    t_um: list[Value],
    width_um: Value,
    wavelength_um: Value,
    depth_um: Value,
    sidewall_deg: Value,
    tm: Value,
    order: Value,
    radius_um: Value,
    dropped: Value,
) -> Mode:
    """One guide, of floats, or many at once, of arrays (B)."""
    g = Guide(n, t_um, core, width_um, wavelength_um, depth_um, sidewall_deg, tm, order)
    slopes = anywhere(sidewall_deg != 90)
    undercut = sidewall_deg > 90
    shares = [(k + 0.5) / WALL_COLUMNS for k in range(WALL_COLUMNS)] if slopes else []
    centre, side = column(g, 0.0, rule), column(g, 1.0, rule)
    cols = [centre, *(column(g, share, rule, undercut) for share in shares), side]
    held = centre.guided
    # Where the core holds no mode all columns alike: an even slab, which guides nothing.
    index = [x.N for x in cols] if not anywhere(negated(held)) else [where(held, x.N, 1.0) for x in cols]
    tangent = functions(sidewall_deg).tan(sidewall_deg * (math.pi / 180))
    upright = sidewall_deg == 90
    wall = where(upright, 0.0, abs(depth_um / tangent))
    lateral = straight(index, width_um, wall, wavelength_um, order, negated(tm))
    flags = 0
    if anywhere(radius_um < math.inf):
        lateral, flags = bent(lateral, index, width_um, wall, wavelength_um, order, negated(tm), radius_um)
    N = where(held & (larger(n[0], n[-1]) < lateral.N), lateral.N, math.nan)
    dwall = lateral.dwall_per_um
    if anywhere(upright):
        dwall = where(upright, _upright_slope(g, rule, centre.N, side.N, lateral), dwall)
    flags = flags | _flags(g, index, wall, centre, side, N, dropped)
    return _chain(g, cols, lateral, N, dwall, flags)


def _upright_slope(g: Guide, rule: SideRule, centre: Value, side: Value, lateral: Lateral) -> Value:
    """dN/d(extent of a wall) at vertical walls, where the model's two slopes differ: their mean. Simpson's rule over
    the shares gone, at whose ends the columns under a wide foot and under an undercut are the same; in a bend, too, by
    the fields of a straight guide."""
    foot, under = column_index(g, 0.5, rule), column_index(g, 0.5, rule, g.sidewall_deg > 0)
    q = lateral.N * lateral.N
    edge = side * side

    def pull(index: Value) -> Value:
        # h of `fields` at the wall for psi = 1 there: what a film of that index adds to N per length
        e = index * index
        return where(g.tm, e - edge, e * (q - edge) / (edge * edge) + 1 - q / e)

    whole = pull(centre)
    slope = 2 / 3 * (pull(foot) - pull(under)) * lateral.dwidth_per_um
    return slope / where(exists(slope) & (whole != 0), whole, 1.0)


def _flags(
    g: Guide, index: list[Value], wall_um: Value, centre: Column, side: Column, N: Value, dropped: Value
) -> Value:
    found = exists(N)
    core, beside = index[0] * index[0], index[-1] * index[-1]
    flags = where(centre.guided, 0, int(GuideFlag.NO_VERTICAL_MODE))
    flags = flags | where(centre.guided & negated(found), int(GuideFlag.NO_LATERAL_MODE), 0)
    flags = flags | where(side.guided, 0, int(GuideFlag.SIDES_GUIDE_NOTHING))
    flags = flags | where(N * N - beside < NEAR * (core - beside), int(GuideFlag.NEAR_CUT_OFF), 0)
    flags = flags | where(
        found & (g.order == 0) & (_lateral_modes(g, index, wall_um) > 1), int(GuideFlag.SECOND_MODE), 0
    )
    t = list(g.t_um)
    t[g.core - 1] = larger(t[g.core - 1] - g.depth_um, 0.0)
    if g.core < len(t):
        t[g.core] = t[g.core] + g.depth_um
    other = modes_above(g.n, t, g.wavelength_um, negated(g.tm), where(found, N, math.inf))
    flags = flags | where(found & (other > 0), int(GuideFlag.LEAKS_SIDEWAYS), 0)
    f = functions(N)
    decay = f.sqrt(where(found & dropped, N * N - g.n[0] * g.n[0], 0.0)) * (2 * math.pi / g.wavelength_um)
    leaks = found & dropped & (2 * f.exp(-2 * decay * g.t_um[0]) > LEAK)
    return flags | where(leaks, int(GuideFlag.LEAKS_DOWN), 0)


def _lateral_modes(g: Guide, index: list[Value], wall_um: Value) -> Value:
    """As many modes of the lateral slab as this number counts, rounded up."""
    if len(index) > 2:
        return modes_above(*across(index, g.width_um, wall_um), g.wavelength_um, negated(g.tm), 0.0)
    fall = larger(index[0] * index[0] - index[1] * index[1], 0.0)
    return 2 * g.width_um / g.wavelength_um * functions(fall).sqrt(fall)


def _chain(g: Guide, cols: list[Column], lateral: Lateral, N: Value, dwall: Value, flags: Value) -> Mode:
    """Derivatives by the guide's quantities from those of both steps."""
    gone = where(exists(N), 0.0, math.nan)
    weights = [x + gone for x in lateral.dcolumn]

    def through(parts: list[Value]) -> Value:
        return sum(x * y for x, y in zip(weights, parts))

    f = functions(g.sidewall_deg)
    angle = g.sidewall_deg * (math.pi / 180)
    sine = f.sin(angle)
    lean = where(g.sidewall_deg > 90, -1.0, 1.0)
    cotangent = where(g.sidewall_deg == 90, 0.0, lean / f.tan(angle))
    return Mode(
        N,
        lateral.dwidth_per_um + gone,
        [through([c.dt_per_um[j] for c in cols]) for j in range(len(g.t_um))],
        through([c.ddepth_per_um for c in cols]) + dwall * cotangent,
        -dwall * lean * g.depth_um / (sine * sine) * (math.pi / 180) + gone,
        [through([c.dn[j] for c in cols]) for j in range(len(g.n))],
        through([c.dwavelength_per_um for c in cols]) + lateral.dwavelength_per_um,
        flags,
    )
