"""Modes of etched guides by the plain effective index method (EIM).

    you want                                            use
    n_eff of a guide with all derivatives, in bulk      eim_modes
    the same, right to nanometres of width              layerlot.solver.correction
    the reference                                       layerlot.solver.vector_modes

Vertical slabs first, through the guide and beside it, mode 0 of the guide's polarisation; then the lateral slab made of
their effective indices, polarisation swapped: for quasi-TE the electric field lies along x, normal to the lateral
interfaces, so that slab is TM (R. M. Knox, P. P. Toulios, Proc. Symp. Submillimeter Waves, 497 (1970), from memory; G. B.
Hocker, W. K. Burns, Appl. Opt. 16, 113 (1977)). The method is in error by up to 0.1 in silicon wires: a start, and the
base of the correction map, no result to fit with.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .cross_section import CrossSection, GuideFlag, GuideModes, IntArray, without_substrate
from .guide_columns import FEW, Columns, SideRule, columns, slabs
from .layers import Array, flatten
from .phase import total_phase
from .scalar_slab import slab_count, slab_phase
from .slab import mode_count

__all__ = ["WALL_COLUMNS", "SideRule", "eim_modes"]

BoolArray = NDArray[np.bool_]

# Columns under each sloped wall.
WALL_COLUMNS = 4


# Share of the way from the side's index squared to the centre's below which a mode counts as near cut-off: there a
# higher mode is lost with 2 % of the width (V is within 2 sqrt(b) of its cut-off), and of a mode 0, which has none, the
# core holds less than a hundredth.
NEAR = 1e-3
# Estimated change of N, times the slab's own scale, at which a substrate under a thin buffer is spoken of.
LEAK = 1e-5


@dataclass(frozen=True, slots=True)
class Lateral:
    """Modes of the lateral slab (B): N; dcolumn (B, C) by the columns' indices; dwidth_per_um and dwall_per_um by the
    width and by the extent of one wall; dwavelength_per_um (B)."""

    N: Array
    dcolumn: Array
    dwidth_per_um: Array
    dwall_per_um: Array
    dwavelength_per_um: Array


def eim_modes(
    section: CrossSection,
    tm: ArrayLike,
    order: ArrayLike = 0,
    radius_um: ArrayLike | None = None,
    side_rule: SideRule = SideRule.CUT_OFF,
) -> GuideModes:
    """Mode of lateral order `order` of each guide, with closed-form derivatives."""
    if radius_um is not None:
        raise NotImplementedError("bends")
    shape = np.broadcast_shapes(section.shape, np.shape(tm), np.shape(order))
    flat = _flat(section, shape)
    is_tm, m = (np.broadcast_to(np.asarray(x), shape).reshape(-1) for x in (tm, order))
    n, dropped = without_substrate(flat.n)
    upright = flat.sidewall_deg == 90
    undercut = flat.sidewall_deg > 90
    walls = 0 if upright.all() else WALL_COLUMNS
    shares = np.array([0.0, *((k + 0.5) / WALL_COLUMNS for k in range(walls)), 1.0])
    cols = columns(flat, n, shares, is_tm, side_rule, undercut if undercut.any() else None)
    held = cols.guided[:, 0]
    if not held.all():
        cols.N[~held] = 1.0  # an even slab, which guides nothing
    lateral = _lateral(cols, flat, m, ~is_tm)
    floor = np.maximum(n[:, 0], n[:, -1])
    lateral.N[lateral.N <= floor] = np.nan
    dwall = lateral.dwall_per_um
    if upright.any():
        dwall = np.where(upright, _upright_slope(flat, n, is_tm, side_rule, cols, lateral), dwall)
    flags = _flags(flat, n, dropped, is_tm, m, cols, lateral)
    return _chain(flat, cols, lateral, dwall, upright, dropped, flags, shape)


def _flat(section: CrossSection, shape: tuple[int, ...]) -> CrossSection:
    if section.shape == shape:
        return section.flat()
    return replace(
        section,
        n=np.broadcast_to(section.n, (*shape, section.n.shape[-1])),
        t_um=np.broadcast_to(section.t_um, (*shape, section.t_um.shape[-1])),
        width_um=np.broadcast_to(section.width_um, shape),
        wavelength_um=np.broadcast_to(section.wavelength_um, shape),
        etch_um=None if section.etch_um is None else np.broadcast_to(section.etch_um, shape),
        sidewall_deg=np.broadcast_to(section.sidewall_deg, shape),
    ).flat()


def across(cols: Columns, flat: CrossSection) -> tuple[Array, Array]:
    """The lateral slab from side to side: indices (B, 2C-1) and thicknesses (B, 2C-3)."""
    walls = cols.N.shape[1] - 2
    n = np.concatenate([cols.N[:, :0:-1], cols.N], axis=1)
    t = np.zeros((n.shape[0], 2 * walls + 1))
    extent = np.abs(flat.wall_um)
    if walls:
        t[:] = (extent / walls)[:, None]
    t[:, walls] = flat.width_um - extent
    return n, t


def _lateral(cols: Columns, flat: CrossSection, order: IntArray, tm: BoolArray) -> Lateral:
    walls = cols.N.shape[1] - 2
    n, t = across(cols, flat)
    d = slabs(n, t, flat.wavelength_um, order, tm)
    dcolumn = np.zeros_like(cols.N)
    dcolumn[:, 0] = d.dn[:, walls + 1]
    dcolumn[:, 1:] = d.dn[:, walls + 2 :] + d.dn[:, walls::-1]
    dwidth = d.dt_per_um[:, walls]
    dwall = (d.dt_per_um.sum(axis=1) - dwidth) / walls - dwidth if walls else np.zeros_like(dwidth)
    return Lateral(d.N, dcolumn, dwidth, dwall, d.dwavelength_per_um)


def _upright_slope(
    flat: CrossSection, n: Array, tm: BoolArray, rule: SideRule, cols: Columns, lateral: Lateral
) -> Array:
    """dN/d(extent of a wall) at vertical walls, where the two slopes of the model differ: their mean. Simpson's rule
    over the shares gone, at whose ends foot and undercut columns are the same."""
    half = np.array([0.5])
    foot = columns(flat, n, half, tm, rule).N[:, 0]
    under = columns(flat, n, half, tm, rule, np.ones_like(tm)).N[:, 0]
    side, centre, q = cols.N[:, -1] ** 2, cols.N[:, 0] ** 2, lateral.N**2

    def pull(index_squared: Array) -> Array:
        # h of `fields` at the wall, for psi = 1 there: what a film of that index would add to N per length
        tm_wise = index_squared * (q - side) / side**2 + 1 - q / index_squared
        return np.where(tm, index_squared - side, tm_wise)

    return np.asarray(2 / 3 * (pull(foot**2) - pull(under**2)) / pull(centre) * lateral.dwidth_per_um)


def _chain(
    flat: CrossSection,
    cols: Columns,
    lateral: Lateral,
    dwall: Array,
    upright: BoolArray,
    dropped: BoolArray,
    flags: IntArray,
    shape: tuple[int, ...],
) -> GuideModes:
    """Derivatives by the guide's quantities from those of both steps."""
    w = lateral.dcolumn
    w = np.where((lateral.N == lateral.N)[:, None], w, np.nan)
    dn = (w[:, :, None] * cols.dn).sum(axis=1)
    dt = (w[:, :, None] * cols.dt_per_um).sum(axis=1)
    angle = np.radians(flat.sidewall_deg)
    lean = np.where(flat.sidewall_deg > 90, -1.0, 1.0)
    ddepth = (w * cols.ddepth_per_um).sum(axis=1) + np.where(upright, 0.0, dwall * lean / np.tan(angle))
    dsidewall = -dwall * lean * flat.depth_um / np.sin(angle) ** 2 * (np.pi / 180)
    dn[:, 1] += np.where(dropped, dn[:, 0], 0.0)
    dn[:, 0] = np.where(dropped, 0.0, dn[:, 0])
    gone = np.where(lateral.N == lateral.N, 0.0, np.nan)
    detch = ddepth
    if flat.etch_um is None:
        dt[:, flat.core - 1] += ddepth
        detch = gone
    nan = np.full(shape, np.nan)
    dwavelength = (w * cols.dwavelength_per_um).sum(axis=1) + lateral.dwavelength_per_um
    return GuideModes(
        lateral.N.reshape(shape), (lateral.dwidth_per_um + gone).reshape(shape), dt.reshape(*shape, -1),
        detch.reshape(shape), (dsidewall + gone).reshape(shape), (dn + gone[:, None]).reshape(*shape, -1),
        dwavelength.reshape(shape), flags.reshape(shape), nan, nan,
    )  # fmt: skip


def _flags(
    flat: CrossSection,
    n: Array,
    dropped: BoolArray,
    tm: BoolArray,
    order: IntArray,
    cols: Columns,
    lateral: Lateral,
) -> IntArray:
    N, held = lateral.N, cols.guided[:, 0]
    found = N == N
    flags = np.where(held, 0, int(GuideFlag.NO_VERTICAL_MODE))
    flags |= np.where(held & ~found, int(GuideFlag.NO_LATERAL_MODE), 0)
    flags |= np.where(cols.guided[:, -1], 0, int(GuideFlag.SIDES_GUIDE_NOTHING))
    side, centre = cols.N[:, -1] ** 2, cols.N[:, 0] ** 2
    flags |= np.where(N**2 - side < NEAR * (centre - side), int(GuideFlag.NEAR_CUT_OFF), 0)
    flags |= np.where(found & (order == 0) & (_lateral_count(cols, flat, ~tm) > 1), int(GuideFlag.SECOND_MODE), 0)
    flags |= np.where(_leaks_sideways(flat, n, ~tm, N), int(GuideFlag.LEAKS_SIDEWAYS), 0)
    if dropped.any():
        decay = np.sqrt(np.maximum(N**2 - n[:, 0] ** 2, 0.0)) * (2 * np.pi / flat.wavelength_um)
        leak = 2 * np.exp(-2 * decay * flat.t_um[:, 0]) > LEAK
        flags |= np.where(dropped & found & leak, int(GuideFlag.LEAKS_DOWN), 0)
    return flags


def _lateral_count(cols: Columns, flat: CrossSection, tm: BoolArray) -> IntArray:
    """Number of modes (B) of the lateral slab."""
    walls = cols.N.shape[1] - 2
    if not walls:
        span = np.sqrt(np.maximum(cols.N[:, 0] ** 2 - cols.N[:, 1] ** 2, 0.0))
        return np.ceil(2 * flat.width_um / flat.wavelength_um * span).astype(np.int64)
    n, t = across(cols, flat)
    if tm.size <= FEW:
        each = zip(n.tolist(), t.tolist(), flat.wavelength_um.tolist(), tm.tolist())
        return np.array([slab_count(*row) for row in each])
    return mode_count(n, t, flat.wavelength_um, tm)


def _leaks_sideways(flat: CrossSection, n: Array, tm: BoolArray, N: Array) -> BoolArray:
    """Where N lies below mode 0 of polarisation tm of the stack beside the guide."""
    t = flat.column(1.0)
    out = np.zeros(N.size, dtype=bool)
    if N.size <= FEW:
        for i, row in enumerate(zip(n.tolist(), t.tolist(), flat.wavelength_um.tolist(), tm.tolist(), N.tolist())):
            out[i] = row[-1] == row[-1] and slab_phase(*row) > 0
        return out
    known = np.flatnonzero(N == N)
    layers = flatten(n[known], None, t[known], flat.wavelength_um[known], tm[known], known.shape)
    q = N[known] ** 2
    inside = np.flatnonzero(q < layers.ceiling())
    if inside.size:
        out[known[inside]] = total_phase(layers.take(inside), q[inside])[0] > np.pi
    return out
