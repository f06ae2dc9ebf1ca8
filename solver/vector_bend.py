"""Materials that stand for a bend, or for open walls.

Bend: in cylinder coordinates r = R + x, arc s = R phi, Maxwell's equations keep their form if both permittivity and
permeability are multiplied by diag(h, h, 1/h), h = 1 + x/R (A. J. Ward, J. B. Pendry, J. Mod. Opt. 43, 773 (1996);
from memory). Exact, and the effective index is referred to the drawn radius R.

Open walls: coordinates stretched into the complex plane, dx -> s_x dx with s = 1 - j times a rising profile, which lets
waves out without reflection (F. L. Teixeira, W. C. Chew, IEEE Microw. Guided Wave Lett. 8, 223 (1998); from memory):
both material tensors are multiplied by diag(s_y/s_x, s_x/s_y, s_x s_y).
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from .layers import Array
from .vector_forms import Complex, Materials, Space
from .vector_mesh import Frame

# Strength of the stretch at the wall, in units of the layer's thickness over its ramp; and the ramp's power.
_STRENGTH, _POWER = 6.0, 2


def bent(m: Materials, space: Space, radius_um: float) -> Materials:
    """Materials of a guide bent to a radius, its centre of curvature on the side of negative x."""
    h = 1 + space.x / radius_um
    rate = 1 / (radius_um * h)
    return replace(_times(m, (h, h, 1 / h)), growth=(rate, rate, -rate))


def mapped_index(m: Materials, space: Space, radius_um: float) -> Materials:
    """The customary approximation to `bent`: permittivity times exp(2 u / R), permeability left alone, in the
    coordinate u = R ln(1 + x / R); here x stands for u."""
    grown = np.exp(2 * space.x / radius_um)
    x, y, z = (e * grown for e in m.eps)
    return Materials((x, y, z), m.mu)


def stretched(m: Materials, space: Space, frame: Frame, width_um: float) -> Materials:
    """Materials with absorbing layers inside the walls of the box."""
    side, bottom, top = frame.absorbers
    wall = width_um / 2 + frame.margins[0]
    low, high = float(space.mesh.p[1].min()), float(space.mesh.p[1].max())
    sx = 1 - 1j * _ramp(np.abs(space.x) - (wall - side), side)
    sy = 1 - 1j * (_ramp(space.y - (high - top), top) + _ramp(low + bottom - space.y, bottom))
    return _times(m, (sy / sx, sx / sy, sx * sy))


def _ramp(depth: Array, thickness: float) -> Array:
    return _STRENGTH * np.clip(depth / thickness, 0.0, 1.0) ** _POWER if thickness else np.zeros_like(depth)


def _times(m: Materials, factors: tuple[Complex, Complex, Complex]) -> Materials:
    eps, mu = (tuple(v * f for v, f in zip(values, factors)) for values in (m.eps, m.mu))
    return Materials((eps[0], eps[1], eps[2]), (mu[0], mu[1], mu[2]))
