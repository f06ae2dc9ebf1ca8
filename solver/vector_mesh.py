"""Triangle meshes for the vector reference: lines on every interface, finer towards the corners of the core.

A mesh is laid out once, on the geometry of one cross-section, in coordinates (xi, eta) in which the walls are vertical.
`GuideMesh.place` maps its nodes to any cross-section of the same topology: xi stretches to the wall at that height, eta
to the interfaces. So nodes move smoothly with every dimension, and what the mesh leaves of error does too: differences
between neighbouring guides, and the correction map, see little of it. The motion of the nodes with a dimension is all
that shape derivatives need.

Near a dielectric corner the field goes as a power of the distance, less than one: triangles shrink with a power of the
distance, so that no ring of them dominates the error (graded meshes, see I. Babuska, R. B. Kellogg, J. Pitkaranta,
Numer. Math. 33, 447 (1979); from memory).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from .cross_section import CrossSection
from .layers import Array

IntArray = NDArray[np.intp]
_FEWEST_CELLS = 2  # across the core, and across its half width
_MOST_ROUNDS = 40


@dataclass(frozen=True, slots=True)
class MeshRule:
    """How fine and how wide. step: side of a triangle over the length in which the field changes by e in that layer;
    growth: ratio of neighbouring sides away from the core; reach: decay lengths from the core to the walls of the box;
    corner: side of a triangle at a corner over the largest one; grading: power of the distance that sides follow;
    absorber: thickness of the absorbing layer inside the walls, in the same lengths, 0 for a closed box."""

    step: float = 0.8
    growth: float = 1.5
    reach: float = 9.0
    corner: float = 1e-3
    grading: float = 0.8
    absorber: float = 0.0

    def finer(self, factor: float) -> MeshRule:
        """The same with sides smaller by `factor` (> 1) throughout."""
        growth = self.growth ** (1 / factor)
        return replace(self, step=self.step / factor, growth=growth, corner=self.corner / factor**2)


@dataclass(frozen=True)
class Frame:
    """The undeformed box, in µm. half_width: of the guide; marks: heights of box bottom, interfaces (the etch floor
    among them) and box top; margins: side, bottom, top, from the outermost wall or interface to the box; absorbers:
    how much of each margin absorbs; whole: both halves of the guide, else the half beside its symmetry plane."""

    half_width: float
    marks: Array
    margins: tuple[float, float, float]
    absorbers: tuple[float, float, float]
    whole: bool


@dataclass(frozen=True)
class GuideMesh:
    """Nodes in (xi, eta), triangles (3, T) and the layer of the stack (T) that each of them lies in."""

    frame: Frame
    core: int
    partial: bool
    xi: Array
    eta: Array
    triangles: IntArray
    layer: IntArray

    def place(self, section: CrossSection) -> Array:
        """Node positions (2, nodes) in µm for a cross-section with empty batch shape."""
        frame = self.frame
        side, bottom, top = frame.margins
        levels = interface_levels(section)
        y = np.interp(self.eta, frame.marks, np.concatenate([[levels[0] - bottom], levels, [levels[-1] + top]]))
        depth, crest = float(section.depth_um), levels[self.core + self.partial]
        # Share of the etch depth above this height: the width is that at the middle of the wall.
        share = np.clip((crest - y) / depth, 0.0, 1.0) if depth > 0 else np.full_like(y, 0.5)
        wall = float(section.width_um) / 2 + float(section.wall_um) * (share - 0.5)
        inside = np.clip(np.abs(self.xi) / frame.half_width, 0.0, 1.0)
        outside = np.clip((np.abs(self.xi) - frame.half_width) / side, 0.0, 1.0)
        x = inside * wall + outside * (float(section.width_um) / 2 + side - wall)
        return np.stack([np.sign(self.xi) * x, y])

    def motion(self, before: CrossSection, after: CrossSection) -> Array:
        """How far the nodes move (2, nodes) from one cross-section to another."""
        return self.place(after) - self.place(before)

    def fits(self, section: CrossSection) -> bool:
        """Whether a cross-section has the topology that the mesh was laid out for."""
        return (
            section.core == self.core
            and is_partial(section) == self.partial
            and (section.t_um.shape[-1] + 3 + self.partial == self.frame.marks.size)
        )


def is_partial(section: CrossSection) -> bool:
    """Whether some of the core is left beside the guide (empty batch shape)."""
    return section.etch_um is not None and float(section.depth_um) < float(section.t_um[section.core - 1])


def interface_levels(section: CrossSection) -> Array:
    """Heights of all interfaces over the top of the substrate in µm, the etch floor among them where there is one."""
    heights = np.concatenate([[0.0], np.cumsum(section.t_um)])
    if not is_partial(section):
        return heights
    core = section.core
    return np.insert(heights, core, heights[core] - float(section.depth_um))


def lay_out(
    section: CrossSection,
    N: float,
    N_side: float,
    rule: MeshRule,
    *,
    whole: bool = False,
    side_limit_um: float = np.inf,
) -> GuideMesh:
    """A mesh for a cross-section with empty batch shape. N: expected effective index; N_side: the largest index that
    light beside the guide can have, of a slab or of a material; whole: both halves of the guide; side_limit_um: the
    box ends no further than this beside the guide."""
    levels = interface_levels(section)
    layer_of = _layer_of_segment(section)
    lengths = np.array([decay_length_um(float(x), N, float(section.wavelength_um)) for x in section.n])
    lateral = decay_length_um(N_side, N, float(section.wavelength_um))
    ends = (lateral, float(lengths[0]), float(lengths[-1]))
    frame = _frame(section, levels, ends, N_side > N, N, rule, whole)
    if side_limit_um < frame.margins[0]:
        frame = replace(frame, margins=(side_limit_um, *frame.margins[1:]))
    size = rule.step * float(lengths[section.core])
    y_lines = _vertical_lines(section, levels, layer_of, lengths, N, frame, rule)
    x_lines = _lateral_lines(frame, size, min(lateral, float(min(lengths[0], lengths[-1]))), rule)
    corners = np.array([[frame.half_width] * 2, [levels[section.core + is_partial(section)], _floor(section, levels)]])
    if whole:
        corners = np.concatenate([corners, corners * [[-1.0], [1.0]]], axis=1)
    xi, eta, triangles = _refined(x_lines, y_lines, corners, size, rule)
    layer = _layers(xi[triangles].mean(axis=0), eta[triangles].mean(axis=0), frame, layer_of, section.core)
    return GuideMesh(frame, section.core, is_partial(section), xi, eta, triangles, layer)


def decay_length_um(n: float, N: float, wavelength_um: float) -> float:
    """Length in which the field changes by e in a layer of index n; no longer than twenty wavelengths."""
    return float(wavelength_um / (2 * np.pi * max(abs(n**2 - N**2) ** 0.5, 0.008)))


def _floor(section: CrossSection, levels: Array) -> float:
    return float(levels[section.core if is_partial(section) else section.core - 1])


def _layer_of_segment(section: CrossSection) -> list[int]:
    """Layer between each two marks through the middle of the guide, box bottom to box top."""
    films = list(range(1, section.t_um.size + 1))
    if is_partial(section):
        films.insert(section.core, section.core)
    return [0, *films, section.t_um.size + 1]


def _frame(
    section: CrossSection,
    levels: Array,
    lengths: tuple[float, float, float],
    side_open: bool,
    N: float,
    rule: MeshRule,
    whole: bool,
) -> Frame:
    # Where the field does not decay, the absorber may begin once what is bound has died away in the other layers.
    wave = float(section.wavelength_um)
    bound = max((decay_length_um(float(x), N, wave) for x in section.n if x < N), default=max(lengths))
    open_ = (side_open, float(section.n[0]) > N, float(section.n[-1]) > N)
    absorbers = tuple(rule.absorber * x if rule.absorber else 0.0 for x in lengths)
    clear = [rule.reach * x for x in lengths]
    if rule.absorber:
        clear = [
            (max(x, rule.reach * bound) if k == 0 else x) if out else c
            for k, (x, out, c) in enumerate(zip(lengths, open_, clear))
        ]
    side, bottom, top = (a + c for a, c in zip(absorbers, clear))
    marks = np.concatenate([[levels[0] - bottom], levels, [levels[-1] + top]])
    taken = (absorbers[0], absorbers[1], absorbers[2])
    return Frame(float(section.width_um) / 2, marks, (side, bottom, top), taken, whole)


def _vertical_lines(
    section: CrossSection,
    levels: Array,
    layer_of: Sequence[int],
    lengths: Array,
    N: float,
    frame: Frame,
    rule: MeshRule,
) -> Array:
    marks, pieces = frame.marks, []
    # Beside the core the field is more crooked than its decay far out would have it.
    beside_core = rule.step * float(lengths[section.core])
    for k, layer in enumerate(layer_of):
        low, high = float(marks[k]), float(marks[k + 1])
        size = rule.step * float(lengths[layer])
        if layer == section.core:
            cells = max(_FEWEST_CELLS, int(np.ceil((high - low) / size)))
            piece = np.linspace(low, high, cells + 1)
        elif float(section.n[layer]) > N:
            piece = np.linspace(low, high, max(1, int(np.ceil((high - low) / size))) + 1)
        else:
            piece = low + _spread(high - low, min(size, beside_core), rule.growth)
            if layer < section.core:
                piece = high + low - piece[::-1]
        pieces.append(piece[:-1])
    return np.concatenate([*pieces, marks[-1:]])


def _lateral_lines(frame: Frame, size: float, outer: float, rule: MeshRule) -> Array:
    cells = max(_FEWEST_CELLS, int(np.ceil(frame.half_width / size)))
    inner = np.linspace(0, frame.half_width, cells + 1)
    beside = frame.half_width + _spread(frame.margins[0], min(size, rule.step * outer), rule.growth)
    half = np.concatenate([inner, beside[1:]])
    return np.concatenate([-half[::-1], half[1:]]) if frame.whole else half


def _spread(span: float, first: float, growth: float) -> Array:
    """Points from 0 to `span`, spacings growing from about `first`."""
    count = max(1, int(np.ceil(np.log1p(span / first * (growth - 1)) / np.log(growth))))
    steps = growth ** np.arange(count)
    return np.asarray(np.concatenate([[0.0], np.cumsum(steps)]) * (span / steps.sum()))


def _refined(
    x_lines: Array, y_lines: Array, corners: Array, size: float, rule: MeshRule
) -> tuple[Array, Array, IntArray]:
    """Triangulated tensor mesh, split again and again near the corners."""
    from skfem import MeshTri

    mesh = MeshTri.init_tensor(x_lines, y_lines)
    near = 1.25 * size
    for _ in range(_MOST_ROUNDS):
        points = mesh.p[:, mesh.t]
        centre = points.mean(axis=1)
        distance = np.hypot(*(centre[:, :, None] - corners[:, None, :])).min(axis=1)
        side = np.hypot(*(points - np.roll(points, 1, axis=1))).min(axis=0)
        wanted = size * np.maximum(rule.corner, (distance / near) ** rule.grading)
        split = np.flatnonzero((side > wanted) & (distance < 1.5 * near))
        if not split.size:
            break
        mesh = mesh.refined(split)
    return mesh.p[0], mesh.p[1], mesh.t


def _layers(xi: Array, eta: Array, frame: Frame, layer_of: Sequence[int], core: int) -> IntArray:
    segment = np.clip(np.searchsorted(frame.marks, eta) - 1, 0, len(layer_of) - 1)
    through = np.array(layer_of)
    beside = through.copy()
    etched = max(k for k, layer in enumerate(layer_of) if layer == core)
    beside[etched] = core + 1
    return np.where(np.abs(xi) < frame.half_width, through[segment], beside[segment])
