"""Which of several vector modes is the one asked for: by its field, never by its rank.

A trial field, the slab mode of the stack through the guide times a cosine or sine with the nodes asked for, is compared
with the mode's main transverse component under the guide's width. Modes of the other polarisation, of other orders, of
the box round the guide and of the slab beside it overlap little with it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .cross_section import CrossSection
from .fields import mode_field
from .layers import Array
from .slab import mode_index
from .vector_forms import Field, Materials, Space


@dataclass(frozen=True, slots=True)
class Likeness:
    """overlap: squared, with the trial field, 0 to 1, both polarisations counted in the mode; confinement: share of
    the mode's transverse field within the guide's width."""

    overlap: float
    confinement: float

    @property
    def score(self) -> float:
        return self.overlap * self.confinement


@dataclass(frozen=True)
class Trial:
    """Trial field (T, Q) at the quadrature points, zero outside the guide's width, and which points lie within."""

    value: Array
    within: NDArray[np.bool_]
    tm: bool


def trial_field(space: Space, section: CrossSection, tm: bool, order: int, near: float) -> Trial:
    """Trial field of a cross-section with empty batch shape, its substrate already replaced if too high; near: the
    effective index expected."""
    wavelength = float(section.wavelength_um)
    N = mode_index(section.n, section.t_um, wavelength, 0, tm)
    width = float(section.width_um)
    within = np.abs(space.x) < width / 2
    # What the vertical slab leaves for the lateral wave number, between a part and all of what fits into the width.
    left = max(float(N) ** 2 - near**2, 0.0) if np.isfinite(N) else 0.0
    wave_number = np.clip(
        2 * np.pi / wavelength * np.sqrt(left), (order + 0.3) * np.pi / width, (order + 1) * np.pi / width
    )
    lateral = np.cos(wave_number * space.x) if order % 2 == 0 else np.sin(wave_number * space.x)
    if np.isfinite(N):
        vertical = mode_field(N, section.n, section.t_um, wavelength, space.y, tm)
    else:  # no such slab mode: the middle of the core will do
        top = float(section.t_um[: section.core].sum())
        height = float(section.t_um[section.core - 1])
        vertical = np.exp(-(((space.y - top + height / 2) / height) ** 2))
    return Trial(np.where(within, lateral * vertical, 0.0), within, tm)


def likeness(space: Space, materials: Materials, field: Field, trial: Trial) -> Likeness:
    # Across a horizontal interface eps E_y is continuous, as the trial field is.
    eps = np.broadcast_to(np.abs(materials.eps[1]), space.weight.shape)
    x, y = (field.ex, eps * field.ey) if trial.tm else (field.ex, field.ey)
    main, square = (y if trial.tm else x), np.abs(x) ** 2 + np.abs(y) ** 2
    w = space.weight
    inside = float((w * trial.within * square).sum())
    project = abs((w * main * trial.value).sum()) ** 2 / float((w * trial.value**2).sum())
    return Likeness(float(project / inside) if inside else 0.0, inside / float((w * square).sum()))
