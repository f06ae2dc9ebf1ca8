"""Columns of the effective index method: the vertical slabs through and beside a guide, and their slab modes.

Written once for two uses: every `Value` is a float (a guide by itself, without numpy's overhead per call) or an array
(B) (guides in bulk). Lists run over layers.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from enum import Enum
from typing import Any, NamedTuple

import numpy as np

from .fields import mode_derivatives
from .layers import flatten
from .phase import total_phase
from .scalar_field import SlabMode
from .scalar_slab import slab_index, slab_mode, slab_phase
from .slab import mode_index

Value = Any  # float or array (B); bool or array of bool where it is a condition


class SideRule(Enum):
    """What stands for the effective index of a column that guides nothing.

    CUT_OFF: the larger index of the two half-spaces, at which the column's mode is cut off: smooth as it comes to
    guide. FILL: the index of the layer above the core, which stands beside it. WEIGHTED: root of the column's mean
    permittivity, weighted with the squared field (E_y or H_y of the slab mode) of the full core's column.
    """

    CUT_OFF = "cut-off"
    FILL = "fill"
    WEIGHTED = "weighted"


class Guide(NamedTuple):
    """One guide, or many: as `CrossSection`, the substrate being the buffer where that rules, with the polarisation
    and the lateral order asked for."""

    n: list[Value]
    t_um: list[Value]
    core: int
    width_um: Value
    wavelength_um: Value
    depth_um: Value
    sidewall_deg: Value
    tm: Value
    order: Value


class Column(NamedTuple):
    """Effective index of a column and its derivatives: dn by the layers' indices, dt_per_um by their thicknesses at
    fixed etch depth. guided: whether there is a slab mode; else the rule for sides was applied."""

    N: Value
    dn: list[Value]
    dt_per_um: list[Value]
    ddepth_per_um: Value
    dwavelength_per_um: Value
    guided: Value


def where(condition: Value, yes: Value, no: Value) -> Value:
    """`numpy.where` that leaves floats floats."""
    return (yes if condition else no) if isinstance(condition, bool) else np.where(condition, yes, no)


def negated(condition: Value) -> Value:
    return (not condition) if isinstance(condition, bool) else ~condition


def exists(x: Value) -> Value:
    """False where x is NaN."""
    return not math.isnan(x) if isinstance(x, float) else ~np.isnan(x)


def anywhere(condition: Value) -> bool:
    return condition if isinstance(condition, bool) else bool(condition.any())


def larger(x: Value, y: Value) -> Value:
    return max(x, y) if isinstance(x, float) and isinstance(y, float) else np.maximum(x, y)


def functions(x: Value) -> Any:
    """The module whose exp, log, sqrt, sin and tan suit x."""
    return math if isinstance(x, float) else np


def slab(
    n: Sequence[Value],
    t_um: Sequence[Value],
    wavelength_um: Value,
    order: Value,
    tm: Value,
    n_normal: Sequence[Value] | None = None,
    near: Value = math.nan,
) -> SlabMode:
    """One mode of a slab with its derivatives, as `scalar_slab.slab_mode`, of floats or arrays (B)."""
    if isinstance(wavelength_um, float):
        uniaxial = None if n_normal is None else list(n_normal)
        return slab_mode(list(n), list(t_um), wavelength_um, order, tm, uniaxial, near)
    stack = _stacked(n, wavelength_um), _stacked(t_um, wavelength_um), wavelength_um
    normal = None if n_normal is None else _stacked(n_normal, wavelength_um)
    N: Any = mode_index(*stack, order, tm, normal)
    d: Any = mode_derivatives(N, *stack, tm, normal)
    return SlabMode(N, list(d.dn.T), list(d.dt_per_um.T), d.dwavelength_per_um, list(d.dn_normal.T))


def modes_above(n: Sequence[Value], t_um: Sequence[Value], wavelength_um: Value, tm: Value, N: Value) -> Value:
    """As many slab modes lie above an effective index N as this number counts, rounded up; see `slab_phase`."""
    if isinstance(wavelength_um, float):
        return slab_phase(list(n), list(t_um), wavelength_um, tm, N)
    out = np.full(wavelength_um.shape, -1.0)
    films = _stacked(t_um, wavelength_um)
    layers = flatten(_stacked(n, wavelength_um), None, films, wavelength_um, tm, out.shape)
    q = np.maximum(np.broadcast_to(N, out.shape) ** 2, layers.cut_off())
    can = np.flatnonzero(q < layers.ceiling())
    if can.size:
        out[can] = total_phase(layers.take(can), q[can], at_cut_off=True)[0] / np.pi - 1
    return out


def _stacked(values: Sequence[Value], like: Value) -> Any:
    return np.stack([np.broadcast_to(x, like.shape) for x in values], axis=-1)


def column(g: Guide, share: float, rule: SideRule, undercut: Value = False) -> Column:
    """The column in which a share of the etch depth d is gone: nothing of it in the middle of the guide, all beside.

    With t the core's thickness and T that of the film above, the core becomes t - share d and the film T + share d.
    Under an `undercut` wall the fill lies below what is left: core t - d, fill share d, core (1 - share) d, then T.
    """
    split = anywhere(undercut)
    n, t, by_depth = _split_column(g, share, undercut) if split else _plain_column(g, share)
    mode = slab(n, t, g.wavelength_um, g.order * 0, g.tm)
    ddepth = sum(x * y for x, y in zip(by_depth, mode.dt_per_um) if not isinstance(x, float) or x != 0)
    dn, dt = mode.dn, mode.dt_per_um
    if split:
        k = g.core
        dn = [*dn[:k], dn[k] + dn[k + 2], dn[k + 1] + dn[k + 3], *dn[k + 4 :]]
        dt = dt[:k] + dt[k + 2 :]
    found = Column(mode.N, dn, dt, ddepth, mode.dwavelength_per_um, exists(mode.N))
    if share == 0 or not anywhere(negated(found.guided)):
        return found
    ruled = _ruled(g, share, rule, undercut)
    if isinstance(found.guided, bool):
        return ruled
    N, dn, dt, ddepth, dwavelength = (_either(found.guided, x, y) for x, y in zip(found[:-1], ruled[:-1]))
    return Column(N, dn, dt, ddepth, dwavelength, found.guided)


def column_index(g: Guide, share: float, rule: SideRule, undercut: Value = False) -> Value:
    """The index of a column alone, see `column`."""
    n, t, _ = _split_column(g, share, undercut) if anywhere(undercut) else _plain_column(g, share)
    if isinstance(g.wavelength_um, float):
        N: Value = slab_index(list(n), t, g.wavelength_um, 0, g.tm)
    else:
        n, t = _slim(n, t)
        N = mode_index(_stacked(n, g.wavelength_um), _stacked(t, g.wavelength_um), g.wavelength_um, 0, g.tm)
    guided = exists(N)
    return where(guided, N, _ruled(g, share, rule, undercut).N) if anywhere(negated(guided)) else N


def _slim(n: list[Value], t_um: list[Value]) -> tuple[list[Value], list[Value]]:
    """The same stacks, of arrays, without films that nowhere have a thickness or everywhere the index of the half-space
    next to them; one film is left in any case. Three layers are ten times as fast as four."""
    films = [(x, y) for x, y in zip(n[1:-1], t_um) if np.any(y > 0)]
    while len(films) > 1 and np.all(films[0][0] == n[0]):
        films = films[1:]
    while len(films) > 1 and np.all(films[-1][0] == n[-1]):
        films = films[:-1]
    films = films or [(n[1], t_um[0])]
    return [n[0], *(x for x, _ in films), n[-1]], [y for _, y in films]


def _either(condition: Value, yes: Value, no: Value) -> Any:
    return [where(condition, x, y) for x, y in zip(yes, no)] if isinstance(yes, list) else where(condition, yes, no)


def _plain_column(g: Guide, share: float) -> tuple[list[Value], list[Value], list[Value]]:
    """Indices, thicknesses and the thicknesses' derivatives by the etch depth."""
    t = list(g.t_um)
    by_depth = [0.0] * len(t)
    if share > 0:
        gone = share * g.depth_um
        t[g.core - 1] = larger(t[g.core - 1] - gone, 0.0)
        by_depth[g.core - 1] = -share
        if g.core < len(t):
            t[g.core] = t[g.core] + gone
            by_depth[g.core] = share
    return g.n, t, by_depth


def _split_column(g: Guide, share: float, undercut: Value) -> tuple[list[Value], list[Value], list[Value]]:
    """The same with the core split in three: core, fill, core."""
    k = g.core
    n = [*g.n[: k + 1], g.n[k + 1], g.n[k], *g.n[k + 1 :]]
    by_depth = [0.0] * (k - 1) + [
        where(undercut, -1.0, -share),
        where(undercut, share, 0.0),
        where(undercut, 1 - share, 0.0),
    ]
    if k < len(g.t_um):
        by_depth += [where(undercut, 0.0, share), *[0.0] * (len(g.t_um) - k - 1)]
    base = [*g.t_um[:k], 0.0, 0.0, *g.t_um[k:]]
    t = [larger(x + y * g.depth_um, 0.0) for x, y in zip(base, by_depth)]
    return n, t, by_depth


def _ruled(g: Guide, share: float, rule: SideRule, undercut: Value) -> Column:
    """What the rule says of a column that guides nothing."""
    if rule is SideRule.WEIGHTED:
        return _weighted(g, share, undercut)
    zero = g.wavelength_um * 0.0
    dn, dt = [zero] * len(g.n), [zero] * len(g.t_um)
    if rule is SideRule.FILL:
        dn[g.core + 1] = zero + 1.0
        return Column(g.n[g.core + 1], dn, dt, zero, zero, False)
    below = g.n[0] >= g.n[-1]
    dn[0] = where(below, zero + 1.0, zero)
    dn[-1] = where(below, zero, zero + 1.0)
    return Column(where(below, g.n[0], g.n[-1]), dn, dt, zero, zero, False)


def _weighted(g: Guide, share: float, undercut: Value) -> Column:
    """The rule WEIGHTED; its derivatives by differences of fourth order, forwards because layers may have no thickness:
    good to 1e-8."""
    k, gone = g.core, share * g.depth_um
    by_depth = where(undercut, -1.0, -share), share, where(undercut, 1 - share, 0.0)
    lower = larger(g.t_um[k - 1] + by_depth[0] * g.depth_um, 0.0)
    t = [*g.t_um[: k - 1], lower, gone, by_depth[2] * g.depth_um, *g.t_um[k:]]

    def mean(n: list[Value], t: list[Value]) -> Value:
        through = [*n[: k + 1], n[k], n[k], *n[k + 1 :]]
        beside = [*n[: k + 1], n[k + 1], n[k], *n[k + 1 :]]
        mode = slab(through, t, g.wavelength_um, g.order * 0, g.tm, through)
        # the derivatives are confinement integrals: psi^2 of each layer but for a common factor
        psi2 = [where(g.tm, y * m**3, x / m) for x, y, m in zip(mode.dn, mode.dn_normal, through)]
        return functions(mode.N).sqrt(sum(x * m * m for x, m in zip(psi2, beside)) / sum(psi2))

    N = mean(g.n, t)

    def slope(n: list[Value], t: list[Value], values: list[Value], j: int, step: Value) -> Value:
        """Of the mean by values[j], values being n or t."""
        old, out = values[j], -25 * N
        for times, weight in ((1, 48), (2, -36), (3, 16), (4, -3)):
            values[j] = old + times * step
            out = out + weight * mean(n, t)
        values[j] = old
        return out / (12 * step)

    n = list(g.n)
    dn = [slope(n, t, n, j, 1e-4) for j in range(len(n))]
    dt = [slope(n, t, t, j, 1e-4 * g.wavelength_um) for j in range(len(t))]
    ddepth = sum(x * y for x, y in zip(by_depth, dt[k - 1 : k + 2]))
    dwavelength = -sum(x * y for x, y in zip(dt, t)) / g.wavelength_um  # only t / wavelength counts
    return Column(N, dn, dt[:k] + dt[k + 2 :], ddepth, dwavelength, False)


class Lateral(NamedTuple):
    """Mode of the lateral slab: N; dcolumn by the columns' indices, centre first; dwidth_per_um and dwall_per_um by the
    width and by the extent of one wall; dwavelength_per_um."""

    N: Value
    dcolumn: list[Value]
    dwidth_per_um: Value
    dwall_per_um: Value
    dwavelength_per_um: Value


def across(index: list[Value], width_um: Value, wall_um: Value) -> tuple[list[Value], list[Value]]:
    """Indices and thicknesses of the lateral slab from side to side; index: of the columns, centre first, side last."""
    walls = len(index) - 2
    each = [wall_um / walls] * walls if walls else []
    return [*index[:0:-1], *index], [*each, width_um - wall_um, *each]


def straight(
    index: list[Value], width_um: Value, wall_um: Value, wavelength_um: Value, order: Value, tm: Value
) -> Lateral:
    """Mode of the lateral slab of a straight guide. tm: polarisation of this slab, the other one than the columns'."""
    n, t = across(index, width_um, wall_um)
    mode = slab(n, t, wavelength_um, order, tm)
    walls = len(index) - 2
    dn, dt = mode.dn, mode.dt_per_um
    dcolumn = [dn[walls + 1], *(dn[walls + 1 + k] + dn[walls + 1 - k] for k in range(1, walls + 2))]
    dwidth = dt[walls]
    dwall = (sum(dt) - dwidth) / walls - dwidth if walls else dwidth * 0.0
    return Lateral(mode.N, dcolumn, dwidth, dwall, mode.dwavelength_per_um)
