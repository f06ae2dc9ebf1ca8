"""Columns of the effective index method: the vertical slabs through and beside a guide, and their slab modes.

Columns run from the middle of the guide outwards: the full core, then those under a sloped wall, then the side. Their
indices follow from one list of layers with the core split in three, so that walls of either slope fit it:

    ... core, fill, core, fill, ...    thicknesses for a share r of the etch depth d gone, core t and fill T:
        foot wider (sidewall < 90)     t - r d, 0, 0, T + r d
        undercut (sidewall > 90)       t - d, r d, (1 - r) d, T
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import Enum
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from .cross_section import CrossSection
from .fields import mode_derivatives
from .layers import Array
from .scalar_slab import slab_mode
from .slab import mode_index

BoolArray = NDArray[np.bool_]

# Up to this many slabs plain floats beat numpy's overhead.
FEW = 32


class SideRule(Enum):
    """What stands for the effective index of a column that guides nothing.

    CUT_OFF: the larger index of the two half-spaces, where the column's mode would be cut off: continuous, and smooth,
    as the column comes to guide. FILL: the index of the material that stands beside the core, that is of the layer
    above it. WEIGHTED: root of the mean permittivity of the column, weighted with the squared field of the full core's
    slab mode.
    """

    CUT_OFF = "cut-off"
    FILL = "fill"
    WEIGHTED = "weighted"


class Slabs(NamedTuple):
    """Modes of slabs (B) and their derivatives: N; dn (B, L); dt_per_um (B, L-2); dwavelength_per_um (B); dn_normal
    (B, L), zero for isotropic layers. NaN where there is no mode."""

    N: Array
    dn: Array
    dt_per_um: Array
    dwavelength_per_um: Array
    dn_normal: Array


@dataclass(frozen=True, slots=True)
class Columns:
    """Effective indices N (B, C) of the columns, centre first and side last, and their derivatives: dn (B, C, L);
    dt_per_um (B, C, L-2) at fixed etch depth; ddepth_per_um (B, C); dwavelength_per_um (B, C). guided (B, C): whether
    there is a slab mode; elsewhere N is by the rule for sides, NaN in the centre."""

    N: Array
    dn: Array
    dt_per_um: Array
    ddepth_per_um: Array
    dwavelength_per_um: Array
    guided: BoolArray


def slabs(
    n: Array, t_um: Array, wavelength_um: Array, order: Array, tm: BoolArray, n_normal: Array | None = None
) -> Slabs:
    """Modes of a batch of slabs: n (B, L), t_um (B, L-2), the rest (B). One by one where they are few."""
    if wavelength_um.size > FEW:
        N = mode_index(n, t_um, wavelength_um, order, tm, n_normal)
        d = mode_derivatives(N, n, t_um, wavelength_um, tm, n_normal)
        return Slabs(N, d.dn, d.dt_per_um, d.dwavelength_per_um, d.dn_normal)
    normal = [None] * wavelength_um.size if n_normal is None else n_normal.tolist()
    modes = [
        slab_mode(*row)
        for row in zip(n.tolist(), t_um.tolist(), wavelength_um.tolist(), order.tolist(), tm.tolist(), normal)
    ]
    return Slabs(*(np.array(x) for x in zip(*modes)))


def columns(
    section: CrossSection,
    n: Array,
    shares: Array,
    tm: BoolArray,
    rule: SideRule,
    undercut: BoolArray | None = None,
) -> Columns:
    """Columns of a flat batch (B): n (B, L) without a substrate of high index; `shares` (C) of the etch depth gone; tm
    (B): polarisation of the slabs; undercut (B): which guides have their walls that way, None for none."""
    core, size, count = section.core, section.wavelength_um.size, shares.size
    if undercut is None:
        t, by_depth = _plain_thicknesses(section, shares)
        split_n = n
    else:
        t, by_depth = _split_thicknesses(section, shares, undercut)
        split_n = n[:, [*range(core + 1), core + 1, core, *range(core + 1, n.shape[1])]]
    total = size * count
    wave, is_tm = (np.repeat(x, count) for x in (section.wavelength_um, tm))
    found = slabs(np.repeat(split_n, count, axis=0), t.reshape(total, -1), wave, np.zeros(total, dtype=int), is_tm)
    N = found.N.reshape(size, count)
    dn = found.dn.reshape(size, count, -1)
    dt = found.dt_per_um.reshape(size, count, -1)
    ddepth = (dt * by_depth).sum(axis=-1)
    if undercut is not None:
        dn = _merged(dn, core, core + 1)
        dt = np.concatenate([dt[..., :core], dt[..., core + 2 :]], axis=-1)
    out = Columns(N, dn, dt, ddepth, found.dwavelength_per_um.reshape(size, count), N == N)
    for k in range(count):
        if shares[k] > 0 and not out.guided[:, k].all():
            _fill_in(out, k, n, core, rule)
    return out


def _plain_thicknesses(section: CrossSection, shares: Array) -> tuple[Array, Array]:
    """Thicknesses (B, C, L-2) and their derivatives by the etch depth (C, L-2)."""
    t = section.t_um
    core, films = section.core, t.shape[1]
    by_depth = np.zeros((shares.size, films))
    by_depth[:, core - 1] = -shares
    if core < films:
        by_depth[:, core] = shares
    out = t[:, None, :] + by_depth * section.depth_um[:, None, None]
    np.maximum(out, 0.0, out=out)
    return out, by_depth


def _split_thicknesses(section: CrossSection, shares: Array, undercut: BoolArray) -> tuple[Array, Array]:
    """The same with the core split in three: (B, C, L) and (B, C, L)."""
    t = section.t_um
    core, films = section.core, t.shape[1]
    r, under = shares[None, :], undercut[:, None]
    by_depth = np.zeros((t.shape[0], shares.size, films + 2))
    # the centre holds the whole core, and so does an undercut column with nothing gone
    by_depth[..., core - 1] = np.where(under, -1.0, -r)
    by_depth[..., core] = np.where(under, r, 0.0)
    by_depth[..., core + 1] = np.where(under, 1 - r, 0.0)
    if core < films:
        by_depth[..., core + 2] = np.where(under, 0.0, r)
    base = np.zeros_like(by_depth)
    base[..., :core] = t[:, None, :core]
    base[..., core + 2 :] = t[:, None, core:]
    return np.maximum(base + by_depth * section.depth_um[:, None, None], 0.0), by_depth


def _merged(dn: Array, core: int, fill: int) -> Array:
    """Derivatives by the indices of the stack (..., L) from those of the stack with its core split (..., L+2)."""
    out = np.concatenate([dn[..., : core + 1], dn[..., core + 3 :]], axis=-1)
    out[..., fill] += dn[..., core + 1]
    out[..., core] += dn[..., core + 2]
    return out


def _fill_in(c: Columns, k: int, n: Array, core: int, rule: SideRule) -> None:
    """The rule for sides, in place, where column k holds no mode."""
    if rule is SideRule.WEIGHTED:
        raise NotImplementedError
    rows = np.flatnonzero(~c.guided[:, k])
    if rule is SideRule.FILL:
        layer = np.full(rows.size, core + 1)
    else:
        layer = np.where(n[rows, 0] >= n[rows, -1], 0, n.shape[1] - 1)
    c.N[rows, k] = n[rows, layer]
    for x in (c.dn, c.dt_per_um, c.ddepth_per_um, c.dwavelength_per_um):
        x[rows, k] = 0.0
    c.dn[rows, k, layer] = 1.0
