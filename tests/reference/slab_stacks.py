"""Random stacks for the slab tests: generic, twin and triple cores, thin layers, near cut-off.

Every maker returns a `Batch` of `size` stacks with the same number of layers, from the substrate up.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tests.reference.mp_slab import Stack, independent_count

Array = np.ndarray


@dataclass(frozen=True)
class Batch:
    """n, n_normal (B, L); t_um (B, L-2); wavelength_um, tm (B)."""

    n: Array
    t_um: Array
    wavelength_um: Array
    tm: Array
    n_normal: Array

    def arguments(self) -> tuple[Array, Array, Array, Array, Array]:
        """In the order of `mode_count`."""
        return self.n, self.t_um, self.wavelength_um, self.tm, self.n_normal

    def stack(self, i: int) -> Stack:
        uniaxial = bool((self.n[i] != self.n_normal[i]).any())
        normal = list(self.n_normal[i]) if uniaxial else None
        return Stack(list(self.n[i]), list(self.t_um[i]), float(self.wavelength_um[i]), bool(self.tm[i]), normal)

    def describe(self, i: int) -> str:
        return (
            f"n={self.n[i].tolist()} t_um={self.t_um[i].tolist()} wavelength_um={self.wavelength_um[i]!r} "
            f"tm={bool(self.tm[i])} n_normal={self.n_normal[i].tolist()}"
        )


def _indices(rng: np.random.Generator, size: int, layers: int) -> tuple[Array, Array]:
    """Indices between 1 and 4, and the contrast of each stack, 1e-3 to 2.5, which its films reach."""
    contrast = 10 ** rng.uniform(-3, np.log10(2.5), size)
    base = rng.uniform(1.0, 4.0 - contrast)
    share = rng.uniform(0, 1, (size, layers))
    share[:, [0, -1]] *= rng.uniform(0, 1, (size, 2))
    share[np.arange(size), rng.integers(1, layers - 1, size)] = 1.0
    share[np.arange(size), np.where(rng.random(size) < 0.5, 0, -1)] = 0.0
    return base[:, None] + contrast[:, None] * share, contrast


def _uniaxial(rng: np.random.Generator, n: Array, contrast: Array) -> Array:
    """Index along the normal: one stack in three has films that differ from `n` by up to a tenth of the contrast."""
    change = 0.1 * contrast[:, None] * rng.uniform(-1, 1, n.shape)
    change[rng.random(n.shape[0]) < 2 / 3] = 0.0
    return n + change


def _thickness(n: Array, wavelength: Array, strength: Array) -> Array:
    """Films of the given strength, k0 t sqrt(n_max^2 - n_min^2)."""
    span = np.sqrt(n.max(axis=1) ** 2 - n.min(axis=1) ** 2)
    return strength / (2 * np.pi / wavelength * span)[:, None]


def generic(rng: np.random.Generator, size: int, layers: int, strongest: float = 12.0) -> Batch:
    """Stacks of any profile, films of strength 0.05 to `strongest`."""
    n, contrast = _indices(rng, size, layers)
    wavelength = rng.uniform(0.4, 1.7, size)
    strength = np.exp(rng.uniform(np.log(0.05), np.log(strongest), (size, layers - 2)))
    return Batch(
        n, _thickness(n, wavelength, strength), wavelength, rng.random(size) < 0.5, _uniaxial(rng, n, contrast)
    )


def thin(rng: np.random.Generator, size: int, layers: int) -> Batch:
    """Generic stacks in which about half of the films are thousands of times thinner than a wavelength."""
    b = generic(rng, size, layers)
    shrink = np.where(rng.random(b.t_um.shape) < 0.5, 10 ** rng.uniform(-5, -2, b.t_um.shape), 1.0)
    return Batch(b.n, b.t_um * shrink, b.wavelength_um, b.tm, b.n_normal)


def coupled(rng: np.random.Generator, size: int, cores: int) -> Batch:
    """Equal cores in one cladding, so far apart that the lowest modes of each order split by 1e-9 down to nothing.

    The barrier has the cladding's index, or lies below it; half of the stacks have it exactly equal.
    """
    layers = 2 * cores + 1
    contrast = 10 ** rng.uniform(-3, np.log10(2.5), size)
    clad = rng.uniform(1.05, 4.0 - contrast)
    core = clad + contrast
    barrier = np.where(rng.random(size) < 0.5, clad, clad - rng.uniform(0, 0.05, size))
    n = np.repeat(clad[:, None], layers, axis=1)
    n[:, 1::2] = core[:, None]
    n[:, 2:-1:2] = barrier[:, None]
    wavelength = rng.uniform(0.4, 1.7, size)
    strength = np.empty((size, layers - 2))
    strength[:, ::2] = rng.uniform(1.0, 12.0, size)[:, None]
    strength[:, 1::2] = rng.uniform(15.0, 45.0, size)[:, None]
    return Batch(n, _thickness(n, wavelength, strength), wavelength, rng.random(size) < 0.5, _uniaxial_cores(rng, n))


def _uniaxial_cores(rng: np.random.Generator, n: Array) -> Array:
    normal = n.copy()
    some = rng.random(n.shape[0]) < 1 / 3
    change = (n[:, 1] - n[:, 0]) * rng.uniform(-0.1, 0.1, n.shape[0])
    normal[some, 1::2] += change[some, None]
    return normal


def near_cut_off(rng: np.random.Generator, size: int, layers: int) -> Batch:
    """Stacks scaled to within 1e-10 to 1e-4 of a thickness at which a mode appears, on either side.

    At 1e-12 the rounding of the indices' squares already decides, at the smallest contrast.

    The thickness is found by bisection on the independent count.
    """
    b = generic(rng, size, layers, strongest=6.0)

    def scaled(scale: Array) -> Batch:
        return Batch(b.n, b.t_um * scale[:, None], b.wavelength_um, b.tm, b.n_normal)

    low, high = np.full(size, 1e-3), np.full(size, 4.0)
    start, _ = independent_count(*scaled(low).arguments())
    end, _ = independent_count(*scaled(high).arguments())
    target = np.where(end > start, start + 1 + rng.integers(0, 100, size) % np.maximum(end - start, 1), start)
    for _ in range(60):
        mid = (low + high) / 2
        count, _ = independent_count(*scaled(mid).arguments(), settle=False)
        low, high = np.where(count < target, mid, low), np.where(count < target, high, mid)
    offset = 10 ** rng.uniform(-10, -4, size) * np.where(rng.random(size) < 0.5, 1, -1)
    return scaled(high * (1 + offset))
