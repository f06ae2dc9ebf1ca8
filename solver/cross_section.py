"""Cross-sections of etched guides: the geometry that the effective index method and the vector reference share.

A stack of films; one of them, number `core`, is etched away beside the guide, to `etch_um` below its top or right
through. What lies above it fills the etched space and its own top is flat. So beside the guide the core is thinner by
the etch depth and the film above thicker by it; where nothing but the cover lies above, the cover fills the space.

    strip      etched right through
    rib        etched in part
    buried     substrate or buffer, fill and cover of like index
    loaded     `core` is the strip on top, the film that guides lies below it

Walls slope by `sidewall_deg` (90 is vertical, below that the foot is wider); the width is that at half the etch depth.
The time dependence is exp(+jwt), losses have negative imaginary parts.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntFlag

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .layers import Array, check_stack

IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]


class GuideFlag(IntFlag):
    """What must be known of a guide mode; sentences and remedies stand in the registry of flags."""

    NONE = 0
    NO_VERTICAL_MODE = 1  # the stack through the guide holds no such slab mode: no number
    NO_LATERAL_MODE = 2  # the guide holds no mode of that lateral order: no number
    SIDES_GUIDE_NOTHING = 4  # the stack beside the guide holds no slab mode: the rule for sides was applied
    SECOND_MODE = 8  # a further mode of the same polarisation is guided
    LEAKS_SIDEWAYS = 16  # the mode lies below a slab mode of the other polarisation beside the guide
    LEAKS_DOWN = 32  # a substrate of high index is so near that it moves the mode
    BEND_RADIATES = 64  # the bend loses light outwards
    BEND_OUT_OF_RANGE = 128  # the bend is too tight for the map
    NEAR_CUT_OFF = 256  # the mode is so weakly bound that a small change loses it
    OUTSIDE_MAP = 512  # beyond the window of the correction map, which is carried on straight there
    MAP_GOAL_MISSED = 1024  # the correction map stopped short of its goal; its stated error says by how much
    NO_MAP = 2048  # the window holds too few guides with the mode for a map: no number


@dataclass(frozen=True, slots=True)
class CrossSection:
    """A batch of guides; all arrays broadcast to one batch shape (...).

    n (..., L): absolute indices from the substrate up, half-spaces included; t_um (..., L-2): thicknesses of the films
    as deposited; core: which layer is etched, 1 to L-2, the substrate being 0; width_um: at half the etch depth;
    wavelength_um: vacuum; etch_um: None where the core is etched right through; sidewall_deg: slope of the walls.
    Raises ValueError for shapes that do not fit and for values that no guide can have.
    """

    n: Array
    t_um: Array
    core: int
    width_um: Array
    wavelength_um: Array
    etch_um: Array | None
    sidewall_deg: Array

    @property
    def shape(self) -> tuple[int, ...]:
        return self.n.shape[:-1]

    @property
    def depth_um(self) -> Array:
        """Etch depth (...), the core's thickness where it is etched right through."""
        return np.asarray(self.t_um[..., self.core - 1]) if self.etch_um is None else self.etch_um

    @property
    def wall_um(self) -> Array:
        """Lateral extent (...) of one sloped wall."""
        tangent = np.tan(np.radians(self.sidewall_deg))
        return np.where(self.sidewall_deg == 90, 0.0, self.depth_um / tangent)

    def column(self, removed: float) -> Array:
        """Thicknesses (..., L-2) where a share `removed` (0 to 1) of the etch depth is gone."""
        t = np.array(self.t_um)
        gone = removed * self.depth_um
        t[..., self.core - 1] = np.maximum(t[..., self.core - 1] - gone, 0.0)
        if self.core < t.shape[-1]:
            t[..., self.core] += gone
        return t

    def flat(self) -> CrossSection:
        """The same batch with one leading axis (B)."""
        layers = self.n.shape[-1]
        etch = None if self.etch_um is None else self.etch_um.reshape(-1)
        return CrossSection(
            self.n.reshape(-1, layers), self.t_um.reshape(-1, layers - 2), self.core, self.width_um.reshape(-1),
            self.wavelength_um.reshape(-1), etch, self.sidewall_deg.reshape(-1),
        )  # fmt: skip


def cross_section(
    n: ArrayLike,
    t_um: ArrayLike,
    core: int,
    width_um: ArrayLike,
    wavelength_um: ArrayLike,
    etch_um: ArrayLike | None = None,
    sidewall_deg: ArrayLike = 90.0,
) -> CrossSection:
    """A checked `CrossSection`, every field broadcast to the batch shape. Arguments as there."""
    n_, t, lam = check_stack(n, t_um, wavelength_um)
    if not 1 <= core <= t.shape[-1]:
        raise ValueError(f"core is layer {core}; the films are layers 1 to {t.shape[-1]}")
    width, wall = np.asarray(width_um, dtype=float), np.asarray(sidewall_deg, dtype=float)
    etch = None if etch_um is None else np.asarray(etch_um, dtype=float)
    parts = (width, lam, wall) if etch is None else (width, lam, wall, etch)
    shape = np.broadcast_shapes(n_.shape[:-1], t.shape[:-1], *(x.shape for x in parts))
    section = CrossSection(
        np.broadcast_to(n_, (*shape, n_.shape[-1])),
        np.broadcast_to(t, (*shape, t.shape[-1])),
        core,
        np.broadcast_to(width, shape),
        np.broadcast_to(lam, shape),
        None if etch is None else np.broadcast_to(etch, shape),
        np.broadcast_to(wall, shape),
    )
    _check(section)
    return section


def _check(s: CrossSection) -> None:
    if not (s.width_um > 0).all():
        raise ValueError("width_um must be positive and not NaN")
    if not ((s.sidewall_deg > 45) & (s.sidewall_deg < 135)).all():
        raise ValueError("sidewall_deg must lie between 45 and 135")
    if s.etch_um is not None and not ((s.etch_um >= 0) & (s.etch_um <= s.t_um[..., s.core - 1] * (1 + 1e-12))).all():
        raise ValueError("etch_um must lie between 0 and the thickness of the core")
    if not (np.abs(s.wall_um) < s.width_um).all():
        raise ValueError("the walls meet: width_um is less than etch depth over tan(sidewall)")


def without_substrate(n: ArrayLike) -> tuple[Array, BoolArray]:
    """Indices (..., L) in which a substrate that no film exceeds is replaced by the layer above it, the buffer, and
    where (...) that was done. Strictly nothing is guided above such a substrate; what the buffer lets through is a
    matter of its thickness, see `GuideFlag.LEAKS_DOWN`."""
    n_ = np.array(n, dtype=float)
    high = n_[..., 0] >= n_[..., 1:-1].max(axis=-1)
    n_[..., 0] = np.where(high, n_[..., 1], n_[..., 0])
    return n_, high


def substrate_pull(section: CrossSection, N: ArrayLike) -> Array:
    """How far (...) a substrate that `without_substrate` replaces can pull an effective index (...), at most.

    The field that comes back from it is down by exp(-2 gamma t) of the buffer; twice that bounds the shift of the
    published silicon wire on a 1 µm buffer (2e-7), and of slabs of nitride and silicon on 0.5 to 2 µm.
    """
    n, high = without_substrate(section.n)
    decay = np.sqrt(np.maximum(np.asarray(N, dtype=float) ** 2 - n[..., 0] ** 2, 0.0))
    deep = 4 * np.pi / section.wavelength_um * decay * section.t_um[..., 0]
    return np.where(high, 2 * np.exp(-deep), 0.0)


@dataclass(frozen=True, slots=True)
class GuideModes:
    """One mode of each guide of a batch (...), NaN where there is none.

    N: effective index. Its derivatives at fixed everything else: dwidth_per_um; dt_per_um (..., L-2), where the etch
    depth follows the core's thickness if the core is etched right through; detch_per_um, zero then;
    dsidewall_per_deg; dn (..., L); dwavelength_per_um at fixed indices. flags: bits of `GuideFlag`. error: standard
    uncertainty of N that the model itself brings, group_error that of the group index; NaN where the model cannot say.
    """

    N: Array
    dwidth_per_um: Array
    dt_per_um: Array
    detch_per_um: Array
    dsidewall_per_deg: Array
    dn: Array
    dwavelength_per_um: Array
    flags: IntArray
    error: Array
    group_error: Array

    def slope_per_um(self, dn_dwavelength: ArrayLike) -> Array:
        """dN/d(wavelength) (...) along the materials' dispersion, given their slopes (..., L) per µm."""
        along = self.dn * np.asarray(dn_dwavelength, dtype=float)
        return np.asarray(self.dwavelength_per_um + along.sum(axis=-1))

    def group_index(self, wavelength_um: ArrayLike, dn_dwavelength: ArrayLike) -> Array:
        """n_g = N - wavelength dN/d(wavelength) (...)."""
        return np.asarray(self.N - np.asarray(wavelength_um, dtype=float) * self.slope_per_um(dn_dwavelength))
