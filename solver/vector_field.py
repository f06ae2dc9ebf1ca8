"""Electric field of a vector mode at given points, for plots."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from .cross_section import CrossSection
from .layers import Array
from .vector_modes import VectorMode, vector_mode


def vector_field(
    section: CrossSection, tm: bool, order: int, x_um: ArrayLike, y_um: ArrayLike
) -> tuple[VectorMode, tuple[Array, Array, Array]]:
    """The mode of one cross-section and its E_x, E_y and E_z / j at points x_um, y_um (broadcast together), scaled to
    a largest absolute value of 1 among them.

    x_um: from the middle of the guide; y_um: from the top of the substrate, or, where films equal to the substrate or
    a substrate of high index are left out, still from there. Raises NoSuchModeError where there is no such mode.
    """
    mode = vector_mode(section, tm, order)
    x, y = np.broadcast_arrays(np.asarray(x_um, dtype=float), np.asarray(y_um, dtype=float))
    raised = float(section.t_um[: section.core].sum() - mode.solved.t_um[: mode.solved.core].sum())
    ex, ey, ez = field_at(mode, x.reshape(-1), y.reshape(-1) - raised)
    scale = max(float(np.abs(f).max()) for f in (ex, ey, ez)) or 1.0
    return mode, (ex.reshape(x.shape) / scale, ey.reshape(x.shape) / scale, ez.reshape(x.shape) / scale)


def field_at(mode: VectorMode, x_um: Array, y_um: Array) -> tuple[Array, Array, Array]:
    """E_x, E_y, E_z / j at points (B) in the mesh's own coordinates, zero outside its box; the sign of the largest
    component is positive where it is largest."""
    space = mode.space
    points = np.stack([np.abs(x_um) if not mode.mesh.frame.whole else x_um, y_um])
    low, high = space.mesh.p.min(axis=1, keepdims=True), space.mesh.p.max(axis=1, keepdims=True)
    within = ((points >= low) & (points <= high)).all(axis=0)
    values = np.zeros((3, points.shape[1]))
    if within.any():
        values[:, within] = _sampled(mode, points[:, within])
    if not mode.mesh.frame.whole:
        # Mirror images: on an electric wall E_x is even and the others odd, on a magnetic one the reverse.
        sign = np.where(x_um < 0, -1.0, 1.0)
        parity = (np.ones_like(sign), sign, sign) if mode.electric else (sign, np.ones_like(sign), np.ones_like(sign))
        values = values * np.stack(parity)
    main = values[np.abs(values).max(axis=1).argmax()]
    values = values * (np.sign(main[np.abs(main).argmax()]) or 1.0)
    return values[0], values[1], values[2]


def _sampled(mode: VectorMode, points: Array) -> Array:
    """Within a triangle the fields are polynomials of the elements' degree, known at the quadrature points."""
    space, field = mode.space, mode.field
    cells = space.mesh.element_finder()(points[0], points[1])
    local = space.edge_basis.mapping.invF(points[:, :, None], tind=cells)[..., 0]
    degree = 2 if space.edge_basis.X.shape[1] < 10 else 3
    to_powers = np.linalg.pinv(_powers(np.asarray(space.edge_basis.X), degree))
    here = _powers(local, degree)
    beta = mode.N.real * 2 * np.pi / float(mode.solved.wavelength_um)
    values = np.stack([field.ex[cells] / beta, field.ey[cells] / beta, field.ez[cells]]).real
    return np.asarray(np.einsum("pk,kq,cpq->cp", here, to_powers, values))


def _powers(local: Array, degree: int) -> Array:
    """Products of powers (B, M) up to a total degree at reference coordinates (2, B)."""
    pairs = [(i, j) for i in range(degree + 1) for j in range(degree + 1 - i)]
    return np.stack([local[0] ** i * local[1] ** j for i, j in pairs], axis=-1)
