"""What the model predicts for prism-coupler readings: coupling angle or effective index of a mode of the film stack.

Batched over sites (S) that share a layout, with R readings a site (padded; `valid` says which are real). Order -1
leaves a reading out. Predictions and the Jacobian come from one mode solve.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from layerlot.solver.film_modes import film_modes
from layerlot.solver.prism import coupling_angle_deg, coupling_slopes

from ..records import Array, BoolArray, IntArray
from .parameters import Layout


@dataclass(frozen=True)
class FilmReadings:
    """Readings of S sites under one layout, each array (S, R).

    measured and u: in degrees as typed, or as effective index (is_angle False); context: index into the layout's
    contexts; valid: False for padding.
    """

    context: IntArray
    is_angle: BoolArray
    measured: Array
    u: Array
    valid: BoolArray


class Prediction(NamedTuple):
    """value (S, R); jacobian (S, R, P); exists (S, R): False where the mode or its coupling angle does not exist,
    value and jacobian then being those of the nearest light line. loss_index (S, R): imaginary part of N."""

    value: Array
    jacobian: Array
    exists: BoolArray
    loss_index: Array


def predict(layout: Layout, readings: FilmReadings, theta: Array, order: IntArray) -> Prediction:
    """Predicted readings for unknowns theta (S, P) and mode orders (S, R); S of the readings may be 1."""
    sites, count = theta.shape[0], len(layout.parameters)
    ctx = np.broadcast_to(readings.context, (sites, readings.context.shape[1]))
    wanted = np.broadcast_to(readings.valid, ctx.shape) & (order >= 0)
    out = np.zeros(ctx.shape)
    jacobian = np.zeros((*ctx.shape, count))
    exists = np.zeros(ctx.shape, dtype=bool)
    loss = np.zeros(ctx.shape)
    if not wanted.any():
        return Prediction(out, jacobian, exists, loss)
    s_of, _ = np.nonzero(wanted)
    c = ctx[wanted]
    mine = theta[s_of]
    n_map = layout.n_map[c]
    n = layout.n_fixed[c] + (n_map @ mine[:, :, None])[..., 0]
    t = (layout.t_fixed + theta @ layout.t_map.T)[s_of]
    tm = layout.tm[c]
    normal = None
    if layout.uniaxial:
        normal = layout.normal_fixed[c] + (layout.normal_map[c] @ mine[:, :, None])[..., 0]
    modes = film_modes(n, np.maximum(t, 0.0), layout.working_um[c], order[wanted], tm, normal)
    there = np.isfinite(modes.N)
    slope = (modes.dn[:, None, :] @ n_map)[:, 0] + modes.dt_per_um @ layout.t_map
    if normal is not None:
        slope += (modes.dn_normal[:, None, :] @ layout.normal_map[c])[:, 0]
    floor = np.where(tm, (n if normal is None else normal)[:, 0], n[:, 0])
    N = np.where(there, modes.N, np.maximum(floor, n[:, -1]))
    slope = np.where(there[:, None], slope, 0.0)
    value, jac, reachable = _read(
        layout, np.broadcast_to(readings.is_angle, ctx.shape)[wanted], c, theta[s_of], N, slope
    )
    out[wanted], jacobian[wanted], exists[wanted] = value, jac, there & reachable
    loss[wanted] = np.where(there, modes.loss_index, 0.0)
    return Prediction(out, jacobian, exists, loss)


def _read(
    layout: Layout, is_angle: BoolArray, c: IntArray, theta: Array, N: Array, slope: Array
) -> tuple[Array, Array, BoolArray]:
    """Effective index to reading: unchanged, or as a coupling angle with the prism's own unknowns."""
    if not is_angle.any():
        return N, slope, np.ones(N.shape, dtype=bool)
    n_p = layout.prism_fixed[c] + (layout.prism_map[c] * theta).sum(axis=1)
    base = layout.base_fixed + theta @ layout.base_map
    zero = layout.zero_fixed + theta @ layout.zero_map
    capped = np.minimum(N, n_p * (1 - 1e-9))
    angle = coupling_angle_deg(capped, n_p, base)
    d = coupling_slopes(capped, n_p, base)
    reachable = (n_p > N) & np.isfinite(angle) & np.isfinite(d.dN)
    sign = layout.angle_sign
    jac = sign * (d.dN[:, None] * slope + d.dn_p[:, None] * layout.prism_map[c] + d.dbase[:, None] * layout.base_map)
    jac = jac + layout.zero_map
    value = sign * angle + zero
    # Beyond total reflection at the face the angle stays at its end, so that residuals remain finite.
    value = np.where(np.isfinite(value), value, sign * -90.0)
    jac = np.where(np.isfinite(jac), jac, 0.0)
    return (
        np.where(is_angle, value, N),
        np.where(is_angle[:, None], jac, slope),
        np.where(is_angle, reachable, True),
    )


def nominal_index(layout: Layout, readings: FilmReadings) -> tuple[Array, Array]:
    """Effective index that each reading states with all priors at their means, and |dN/d(reading)|; both (S, R)."""
    from layerlot.solver.prism import effective_index

    mean, _ = layout.prior()
    mean = np.where(layout.fitted, layout.starts(), mean)
    c = readings.context
    n_p = layout.prism_fixed[c] + layout.prism_map[c] @ mean
    base = layout.base_fixed + layout.base_map @ mean
    zero = layout.zero_fixed + layout.zero_map @ mean
    theta = np.where(readings.is_angle, layout.angle_sign * (readings.measured - zero), 0.0)
    N_angle = effective_index(theta, n_p, base)
    h = 1e-4
    per_deg = np.abs(effective_index(theta + h, n_p, base) - effective_index(theta - h, n_p, base)) / (2 * h)
    return (
        np.where(readings.is_angle, N_angle, readings.measured),
        np.where(readings.is_angle, per_deg, 1.0),
    )
