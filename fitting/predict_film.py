"""Film modes of a stack as it is stated: effective index, loss, coupling angle, sensitivities."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from layerlot.solver.film_modes import film_modes, is_leaky
from layerlot.solver.leaky import loss_dB_per_cm
from layerlot.solver.prism import coupling_angle_deg
from layerlot.solver.slab import mode_count

from .observables.parameters import Context, Layout, build_layout
from .records import Array, IntArray
from .stack import Stack

# Leaky modes are numbered, not counted: orders are asked for up to here.
_LEAKY_ORDERS = 64


@dataclass(frozen=True)
class FilmMode:
    """One mode; n_eff relative to the stack's index reference. angle_deg: None without a prism or where the prism
    cannot reach the mode. d_index, d_thickness_per_nm: change of n_eff, by film from the substrate up."""

    wavelength_nm: float
    pol: str
    order: int
    n_eff: float
    loss_dB_per_cm: float
    angle_deg: float | None
    d_index: tuple[float, ...]
    d_thickness_per_nm: tuple[float, ...]


def predict_film(stack: Stack, wavelengths_nm: Sequence[float], pols: Sequence[str]) -> list[FilmMode]:
    """All film modes at wavelengths (nm, as typed), by wavelength, polarisation and order, for a stack and wavelengths
    without `start_faults` and `wavelength_faults`."""
    contexts = [Context(nm / 1000, pol == "TM", None) for nm in wavelengths_nm for pol in pols]
    if not contexts:
        return []
    layout = build_layout(stack, contexts)
    nominal = np.where(layout.fitted, layout.starts(), layout.prior()[0])
    return [mode for c in range(len(contexts)) for mode in _modes_at(layout, nominal, c)]


def _modes_at(layout: Layout, theta: Array, c: int) -> list[FilmMode]:
    """Modes of one wavelength and polarisation."""
    n = layout.n_fixed[c] + layout.n_map[c] @ theta
    normal = layout.normal_fixed[c] + layout.normal_map[c] @ theta if layout.uniaxial else None
    t, lam, tm = layout.t_fixed + layout.t_map @ theta, layout.working_um[c], layout.tm[c]
    count = _LEAKY_ORDERS if is_leaky(n) else int(mode_count(n, t, lam, tm, normal))
    order: IntArray = np.arange(count)
    if not count:
        return []
    rows = np.broadcast_to(n, (count, n.size))
    along = None if normal is None else np.broadcast_to(normal, rows.shape)
    found = film_modes(rows, np.broadcast_to(t, (count, t.size)), np.full(count, lam), order, np.full(count, tm), along)
    loss = loss_dB_per_cm(found.N + 1j * found.loss_index, lam)
    angle = np.full(count, np.nan)
    if layout.has_prism:
        n_p = layout.prism_fixed[c] + layout.prism_map[c] @ theta
        base, zero = layout.base_fixed + layout.base_map @ theta, layout.zero_fixed + layout.zero_map @ theta
        angle = layout.angle_sign * coupling_angle_deg(found.N, n_p, base) + zero
    return [
        FilmMode(
            wavelength_nm=round(layout.contexts[c].wavelength_um * 1000, 6),
            pol="TM" if tm else "TE",
            order=int(m),
            n_eff=float(found.N[m]),
            loss_dB_per_cm=float(loss[m]) if found.loss_index[m] else 0.0,
            angle_deg=float(angle[m]) if np.isfinite(angle[m]) else None,
            d_index=tuple(float(x) for x in (found.dn + found.dn_normal)[m, 1:-1]),
            d_thickness_per_nm=tuple(float(x) / 1000 for x in found.dt_per_um[m]),
        )
        for m in order
        if np.isfinite(found.N[m])
    ]


def film_record(m: FilmMode, stack: Stack) -> dict[str, Any]:
    """A mode as `predict --json` gives it."""
    out: dict[str, Any] = {
        "wavelength_nm": m.wavelength_nm, "pol": m.pol, "order": m.order, "n_eff": m.n_eff,
        "loss_dB_per_cm": m.loss_dB_per_cm,
    }  # fmt: skip
    if stack.prism is not None:
        out["angle_deg"] = m.angle_deg
    films = zip(stack.layers[1:-1], m.d_index, m.d_thickness_per_nm, strict=True)
    out["sensitivity"] = {film.name: {"index": dn, "thickness_per_nm": dt} for film, dn, dt in films}
    return out
