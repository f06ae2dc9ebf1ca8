"""Corrected modes: the effective index method plus a map of what it lacks of the vector reference.

    layerlot.solver.map_build.build_map(window)     solves the reference at chosen nodes and fits the difference
    corrected_modes(section, a_map)                 value, all derivatives, stated error

The stated error of a map: one and a half times the largest miss at held-back nodes and what mesh and box leave in the
reference, as standard uncertainties added in squares; in a bend the error of the bend's own correction comes on top.
"""

from __future__ import annotations

from dataclasses import dataclass, fields, replace
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike

from .cross_section import BoolArray, CrossSection, GuideFlag, GuideModes, IntArray, without_substrate
from .layers import Array
from .map_basis import Halves
from .map_terms import FILMS, WAVE, along_quantities, base_modes, offsets
from .map_window import MapWindow
from .slab import mode_index

# Guides evaluated at once: their polynomials stay in the processor's cache.
_BLOCK = 256


@dataclass(frozen=True)
class BendRatio:
    """What the shift of a bend has to be multiplied by. table (1, H1, H2): the ratio over the window, of total degree
    `degree`; error: standard uncertainty of the ratio; radius_um: of the bends that it was found at."""

    degree: int
    table: Array
    error: float
    radius_um: float


@dataclass(frozen=True)
class CorrectionMap:
    """degree: total, of the correction; table (1 + P, H1, H2): the correction and its slopes with respect to the P
    quantities of `map_terms` that are no axes, see `map_basis.Halves`. error, group_error: stated, see above;
    held_error, reference_error: (effective index, group index) of each part; nodes: solved, held back, without mode;
    met: whether the goal was reached; bend: None where the map serves straight guides."""

    window: MapWindow
    degree: int
    table: Array
    error: float
    group_error: float
    held_error: tuple[float, float]
    reference_error: tuple[float, float]
    nodes: tuple[int, int, int]
    met: bool
    bend: BendRatio | None = None

    @cached_property
    def halves(self) -> Halves:
        return Halves(len(self.window.active), self.degree)

    @cached_property
    def bend_halves(self) -> Halves:
        return Halves(len(self.window.active), self.bend.degree if self.bend else 0)


def corrected_modes(section: CrossSection, a_map: CorrectionMap, radius_um: ArrayLike | None = None) -> GuideModes:
    """Modes of a batch of guides (...), of the polarisation and lateral order of the map.

    radius_um: (...) of a bend's centre line, None or infinite for straight guides. Beyond the window the correction is
    carried on as a straight line, flagged.
    """
    window, shape = a_map.window, section.shape
    modes = base_modes(section, window.tm, window.order)
    flat = section.flat()
    radius = np.broadcast_to(np.inf if radius_um is None else np.asarray(radius_um, dtype=float), shape).reshape(-1)
    blocks = [_change(a_map, _rows(flat, k)) for k in range(0, flat.width_um.size, _BLOCK)]
    change, outside, ratio = (np.concatenate(parts) for parts in zip(*blocks))
    values = _values(modes, change.shape[1]) + change
    error, group_error = np.full(radius.size, a_map.error), np.full(radius.size, a_map.group_error)
    flags: IntArray = modes.flags.reshape(-1) | np.where(outside, int(GuideFlag.OUTSIDE_MAP), 0)
    if np.isfinite(radius).any():
        bent = base_modes(section, window.tm, window.order, radius_um)
        shift = _values(bent, change.shape[1]) - _values(modes, change.shape[1])
        # The ratio is that of bends that hold their light: of one that radiates the whole shift is uncertain.
        radiates = bent.flags.reshape(-1) & int(GuideFlag.BEND_RADIATES)
        own = np.where(radiates, 1.0, a_map.bend.error if a_map.bend else 1.0)
        lam = section.wavelength_um.reshape(-1)
        error = np.hypot(error, own * np.abs(shift[:, 0]))
        group_error = np.hypot(group_error, own * np.abs(shift[:, 0] - lam * shift[:, 1 + WAVE]))
        values += ratio[:, :1] * shift
        values[:, 1:] += ratio[:, 1:] * shift[:, :1]
        flags |= bent.flags.reshape(-1)
    if not a_map.met:
        flags |= int(GuideFlag.MAP_GOAL_MISSED)
    return _modes(values, flags, error, group_error, shape, window.t_um.size)


def held_to_sides(section: CrossSection, modes: GuideModes, tm: bool) -> GuideModes:
    """Corrected modes (...) compared with what the sides of their guides carry, which the plain method's flags cannot
    do, its index being higher. At or below the own polarisation's slab mode beside the guide, or the index of a
    half-space, there is no mode (NaN, flagged); below the other polarisation's slab mode it leaks (flagged)."""
    n, _ = without_substrate(section.n)
    column = section.column(1.0)
    own, other = (mode_index(n, column, section.wavelength_um, 0, pol) for pol in (tm, not tm))
    floor = np.fmax(np.maximum(n[..., 0], n[..., -1]), own)
    lost = np.isfinite(modes.N) & ~(floor < modes.N)
    leaks = (other > modes.N) & ~lost
    flags = modes.flags | np.where(lost, int(GuideFlag.NO_LATERAL_MODE), 0)
    flags = flags | np.where(leaks, int(GuideFlag.LEAKS_SIDEWAYS), 0)
    if not lost.any():
        return replace(modes, flags=flags)
    gone = np.where(lost, np.nan, 0.0)
    values = {f.name: getattr(modes, f.name) for f in fields(GuideModes) if f.name != "flags"}
    spread = {name: x + (gone[..., None] if x.ndim > gone.ndim else gone) for name, x in values.items()}
    return GuideModes(**spread, flags=flags)


def _change(a_map: CorrectionMap, section: CrossSection) -> tuple[Array, BoolArray, Array]:
    """Of a flat batch (B): the correction and its slopes by quantity (B, 1 + P), whether it lies beyond the window (B),
    and the ratio of a bend's shift with its slopes (B, 1 + P)."""
    window = a_map.window
    nominal, index_slopes = window.nominal_index(section.wavelength_um)
    points = window.points_of(section, nominal)
    xi = window.to_unit(points)
    inner = np.clip(xi, -1.0, 1.0)
    off = offsets(window, section, points, nominal)
    values, slope = a_map.halves.evaluate(a_map.table, inner, off if off.any() else None)
    value = values[0] + (values[1:].T * off[:, 1:]).sum(axis=1) + (slope * (xi - inner)).sum(axis=1)
    change = np.column_stack([value, along_quantities(window, slope, values[1:].T, index_slopes)])
    ratio = np.zeros_like(change)
    ratio[:, 0] = 1.0
    if a_map.bend is not None:
        (found,), slope = a_map.bend_halves.evaluate(a_map.bend.table, inner, None)
        ratio[:, 0] = found + (slope * (xi - inner)).sum(axis=1)
        ratio[:, 1:] = along_quantities(window, slope, ratio[:, 1:], index_slopes)
    return change, np.asarray((np.abs(xi) > 1 + 1e-9).any(axis=1)), ratio


def _values(m: GuideModes, count: int) -> Array:
    """N and its slopes by quantity, (B, 1 + P) with P + 1 = count."""
    out = np.empty((m.N.size, count))
    single = (m.N, m.dwidth_per_um, m.detch_per_um, m.dsidewall_per_deg, m.dwavelength_per_um)
    for k, x in enumerate(single):
        out[:, k] = x.reshape(-1)
    films = m.dt_per_um.shape[-1]
    out[:, 1 + FILMS : 1 + FILMS + films] = m.dt_per_um.reshape(-1, films)
    out[:, 1 + FILMS + films :] = m.dn.reshape(-1, films + 2)
    return out


def _modes(
    values: Array, flags: IntArray, error: Array, group_error: Array, shape: tuple[int, ...], films: int
) -> GuideModes:
    known = np.isfinite(values[:, 0])
    N, width, etch, wall, wave = (values[:, k].reshape(shape) for k in range(5))
    return GuideModes(
        N=N,
        dwidth_per_um=width,
        dt_per_um=values[:, 1 + FILMS : 1 + FILMS + films].reshape(*shape, films),
        detch_per_um=etch,
        dsidewall_per_deg=wall,
        dn=values[:, 1 + FILMS + films :].reshape(*shape, films + 2),
        dwavelength_per_um=wave,
        flags=flags.reshape(shape),
        error=np.where(known, error, np.nan).reshape(shape),
        group_error=np.where(known, group_error, np.nan).reshape(shape),
    )


def _rows(section: CrossSection, start: int) -> CrossSection:
    """One block of a flat batch."""
    if section.width_um.size <= _BLOCK:
        return section
    rows = slice(start, start + _BLOCK)
    etch = None if section.etch_um is None else section.etch_um[rows]
    return CrossSection(
        section.n[rows], section.t_um[rows], section.core, section.width_um[rows], section.wavelength_um[rows],
        etch, section.sidewall_deg[rows],
    )  # fmt: skip
