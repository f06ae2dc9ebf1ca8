"""Full-vector modes of etched guides by finite elements: the reference that the effective index method is held to.

    you want                                         use
    one mode with all its derivatives                vector_mode  (to 2e-6; with rule=PRECISE to a few 1e-7)
    the same, with what mesh and box leave of error  vector_mode_with_error
    a guide that leaks into substrate or slab        vector_mode(..., rule=LEAKY)
    a bend                                           vector_mode(..., radius_um=R)
    the fields at given points                       layerlot.solver.vector_field

Edge elements of the first kind with nodal ones of the same degree, 3 by default, 2 on request: at equal accuracy the
third degree needs a tenth of the unknowns. Shift-invert about the effective index method's estimate; B is indefinite,
so the operator handed over is (A - sigma B)^-1 B. A first coarse solve tells the mesh how far the field reaches.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

import numpy as np

from .cross_section import CrossSection, GuideFlag, GuideModes, without_substrate
from .layers import Array
from .slab import mode_index
from .vector_bend import bent, mapped_index, stretched
from .vector_forms import (
    Complex,
    Field,
    Materials,
    Space,
    Sparse,
    field_of,
    held_unknowns,
    matrices,
    motion_change,
    norm,
    permittivity_change,
    space_on,
)
from .vector_mesh import GuideMesh, MeshRule, lay_out
from .vector_pick import Likeness, likeness, trial_field

FINE = MeshRule()
PRECISE = FINE.finer(1.6)
COARSE = MeshRule(step=1.2, growth=2.0, reach=6.0, corner=0.03)
LEAKY = MeshRule(absorber=8.0)

# Beyond this overlap a mode counts as the one asked for. Neighbours in order or polarisation stay below 0.2.
_ALIKE = 0.5
# A mode with this overlap and confinement needs no rival to be looked at: overlaps of one family of fields add up to 1,
# and modes of the box or of the slab beside the guide are spread out.
_SURE = (0.6, 0.5)
_COUNTS = (1, 6, 24)
_TOLERANCE = 1e-11
# The box of a bend ends at this share of the way to where light beside the guide would outrun the mode.
_ROOM = 0.7


class NoSuchModeError(ValueError):
    """No mode of the polarisation and order asked for near the expected index. best: the likeness found."""

    def __init__(self, tm: bool, order: int, near: float, best: float) -> None:
        self.best = best
        super().__init__(
            f"no quasi-{'TM' if tm else 'TE'} mode of lateral order {order} near an effective index of {near:.4f} "
            f"(best overlap {best:.2f}): it is cut off, or leaks"
        )


@dataclass(frozen=True)
class VectorMode:
    """One vector mode. N: effective index, complex where the guide leaks; modes: the real part with its derivatives,
    empty batch shape; likeness to the mode asked for; unknowns: free ones; electric: whether the symmetry plane is an
    electric wall; vector (all unknowns), field, space, mesh and the section as `solved`: the field itself."""

    N: complex
    modes: GuideModes
    likeness: Likeness
    unknowns: int
    mesh: GuideMesh
    space: Space
    field: Field
    vector: Complex
    electric: bool
    solved: CrossSection


def vector_mode(
    section: CrossSection,
    tm: bool,
    order: int = 0,
    *,
    near: float | None = None,
    rule: MeshRule = FINE,
    degree: int = 3,
    mesh: GuideMesh | None = None,
    radius_um: float | None = None,
    mapped: bool = False,
) -> VectorMode:
    """The mode of a lateral order (0 first) of one cross-section (empty batch shape).

    near: expected effective index; without it, or without a mesh, a coarse solve is made first. A substrate that no
    film exceeds counts as buffer, unless `rule` has an absorber. radius_um: bend, see `vector_bend`. mapped: the
    customary mapped index instead of a bend's exact materials; derivatives by dimensions are not right then.
    Raises NoSuchModeError where no field is like the one asked for.
    """
    work = section if rule.absorber else replace(section, n=without_substrate(section.n)[0])
    slim, kept = merged(work)
    expected = expected_index(slim, tm, order) if near is None else near
    if mesh is None:
        beside = side_index(slim)
        if near is None and not rule.absorber:
            rough = lay_out(
                slim, max(expected, beside + 1e-3), beside, replace(COARSE, step=max(COARSE.step, rule.step))
            )
            expected = _solve(slim, tm, order, rough, expected, 2, None, rule).N.real
        limit = np.inf if radius_um is None else bend_room_um(radius_um, expected, beside)
        mesh = lay_out(slim, expected, beside, rule, whole=radius_um is not None, side_limit_um=limit)
    mode = _solve(slim, tm, order, mesh, expected, degree, radius_um, rule, mapped)
    # Below a slab mode beside the guide the box only seems to hold the mode.
    leaks = GuideFlag.LEAKS_SIDEWAYS if mode.N.real < side_index(slim) else GuideFlag.NONE
    spread = _spread_out(mode.modes, kept, section)
    return replace(mode, modes=replace(spread, flags=np.asarray(int(leaks))))


def vector_mode_with_error(
    section: CrossSection,
    tm: bool,
    order: int = 0,
    *,
    slopes_per_um: Array | None = None,
    rule: MeshRule = FINE,
    degree: int = 3,
) -> VectorMode:
    """`vector_mode` with `modes.error` and `modes.group_error` filled: the change from a mesh twice as coarse, which
    bounds the error of the finer one, and the change from a box half as wide again, added. slopes_per_um (L): the
    materials' dn/d(wavelength)."""
    mode = vector_mode(section, tm, order, rule=rule, degree=degree)
    near = mode.N.real
    half = vector_mode(section, tm, order, near=near, rule=rule.finer(0.5), degree=degree)
    wide = vector_mode(section, tm, order, near=near, rule=replace(rule, reach=rule.reach * 1.5), degree=degree)
    slopes = np.zeros(section.n.shape[-1]) if slopes_per_um is None else slopes_per_um
    groups = [float(m.modes.group_index(section.wavelength_um, slopes)) for m in (mode, half, wide)]
    error = abs(half.N.real - near) + abs(wide.N.real - near)
    group = abs(groups[1] - groups[0]) + abs(groups[2] - groups[0])
    return replace(mode, modes=replace(mode.modes, error=np.asarray(error), group_error=np.asarray(group)))


def bend_room_um(radius_um: float, N: float, N_side: float) -> float:
    """How far beside a bend the box may reach, in µm: further out light would outrun the mode."""
    return _ROOM * radius_um * max(N / N_side - 1, 0.0)


def expected_index(section: CrossSection, tm: bool, order: int) -> float:
    """Rough effective index of one cross-section: the effective index method, or a value between what the guide's
    middle and its sides can carry where that method finds no mode."""
    beside = side_index(section)
    wave = float(section.wavelength_um)
    through = float(mode_index(section.n, section.t_um, wave, 0, tm))
    if not through > beside:
        return beside + 0.3 * max(float(section.n.max()) - beside, 1e-3)
    found = float(mode_index([beside, through, beside], [float(section.width_um)], wave, order, not tm))
    # The method comes out high, the more so the weaker the mode is bound.
    return beside + 0.85 * (found - beside) if np.isfinite(found) else beside + 0.1 * (through - beside)


def side_index(section: CrossSection) -> float:
    """Largest effective index that light beside the guide can have: of its slab modes, or of a half-space."""
    t, wave = section.column(1.0), float(section.wavelength_um)
    slabs = mode_index(section.n, t, wave, 0, np.array([False, True]))
    return float(np.nanmax([*slabs, section.n[0], section.n[-1]]))


def merged(section: CrossSection) -> tuple[CrossSection, slice]:
    """The same guide without outer films that equal the half-space beyond them, and which layers are left."""
    n, first, last, core = section.n, 0, section.n.size, section.core
    while first + 1 < core and n[first] == n[first + 1]:
        first += 1
    while last - 2 > core and n[last - 1] == n[last - 2]:
        last -= 1
    kept = slice(first, last)
    return replace(section, n=n[kept], t_um=section.t_um[first : last - 2], core=core - first), kept


def _spread_out(modes: GuideModes, kept: slice, section: CrossSection) -> GuideModes:
    """Derivatives by layer and film of the full stack; those of merged films are zero."""
    dn, dt = np.zeros(section.n.size), np.zeros(section.t_um.size)
    dn[kept] = modes.dn
    dt[kept.start : kept.stop - 2] = modes.dt_per_um
    return replace(modes, dn=dn, dt_per_um=dt)


def _solve(
    section: CrossSection,
    tm: bool,
    order: int,
    mesh: GuideMesh,
    near: float,
    degree: int,
    radius_um: float | None,
    rule: MeshRule,
    mapped: bool = False,
) -> VectorMode:
    k0 = 2 * np.pi / float(section.wavelength_um)
    space = space_on(mesh, mesh.place(section), degree)
    eps = (section.n**2)[mesh.layer][:, None]
    materials = Materials((eps, eps, eps), (np.ones(1), np.ones(1), np.ones(1)))
    if radius_um is not None:
        materials = (mapped_index if mapped else bent)(materials, space, radius_um)
    if rule.absorber:
        materials = stretched(materials, space, mesh.frame, float(section.width_um))
    electric = (order % 2 == 0) != tm
    held = held_unknowns(space, None if mesh.frame.whole else ("electric" if electric else "magnetic"))
    a, b, kept = matrices(space, materials, k0, held)
    trial = trial_field(space, section, tm, order, near)
    best: tuple[Likeness, complex, Field, Complex] | None = None
    for beta2, vector in _eigenpairs(a, b, -((k0 * near) ** 2)):
        whole = np.zeros(space.count, dtype=vector.dtype)
        whole[kept] = vector
        field = field_of(space, whole)
        like = likeness(space, materials, field, trial)
        if best is None or like.score > best[0].score:
            best = like, beta2, field, whole
        if like.overlap > _SURE[0] and like.confinement > _SURE[1]:
            break
    if best is None or best[0].overlap <= _ALIKE:
        raise NoSuchModeError(tm, order, near, 0.0 if best is None else best[0].overlap)
    like, beta2, field, whole = best
    N = complex(np.sqrt(beta2) / k0)
    modes = _derivatives(section, mesh, space, materials, field, k0, beta2)
    return VectorMode(N, modes, like, kept.size, mesh, space, field, whole, electric, section)


def _eigenpairs(a: Sparse, b: Sparse, shift: float) -> Iterator[tuple[complex, Complex]]:
    """Pairs (beta^2, vector) about beta^2 = -shift, real where the matrices are: first the nearest one, then some, then
    many, as long as the caller asks on."""
    from scipy.sparse.linalg import LinearOperator, eigs, splu

    # The pattern is symmetric and the shift far from every eigenvalue on the scale of rounding: diagonal pivots do.
    lu = splu(
        (a - shift * b).tocsc(), permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0, options={"SymmetricMode": True}
    )
    operator = LinearOperator(a.shape, matvec=lambda v: lu.solve(b @ v), dtype=a.dtype)
    real = not np.iscomplexobj(a.data)
    start = np.ones(a.shape[0], dtype=a.dtype)
    for count in _COUNTS:
        values, vectors = eigs(operator, k=count, which="LM", v0=start, tol=_TOLERANCE)
        for value, vector in zip(values, vectors.T):
            # Closed boxes have pairs of complex beta too, far below any light line.
            if real and abs(value.imag) > 1e-9 * abs(value):
                continue
            beta2 = -(shift + 1 / value)
            if beta2.real > 0:
                yield complex(beta2.real if real else beta2), vector.real if real else vector


def _derivatives(
    section: CrossSection, mesh: GuideMesh, space: Space, m: Materials, field: Field, k0: float, beta2: complex
) -> GuideModes:
    size = norm(space, m, field, k0)
    N = np.sqrt(beta2) / k0

    def of(change: complex) -> float:
        return float((-change / size / (2 * N * k0**2)).real)

    def by_motion(step: float, make: Callable[[float], CrossSection]) -> float:
        moved = mesh.motion(make(-step), make(step)) / (2 * step)
        return of(motion_change(space, m, field, k0, beta2, moved))

    share = permittivity_change(space, m, field, k0, beta2)
    layers = np.bincount(mesh.layer, weights=share.real, minlength=section.n.size)
    dn = np.array([of(2 * x / n) for x, n in zip(layers, section.n)])
    wave = float(section.wavelength_um)
    # k0^2 and the permittivity enter as a product; N = beta / k0 gives the second term.
    dwave = -of(2 * complex(share.sum())) / wave + float(N.real) / wave
    dt = [by_motion(1e-4 * float(t), _thicker(section, j)) for j, t in enumerate(section.t_um)]
    detch = 0.0
    if mesh.partial and section.etch_um is not None:
        etch = section.etch_um
        detch = by_motion(1e-4 * float(etch), lambda h: replace(section, etch_um=etch + h))
    dwidth = by_motion(1e-4 * float(section.width_um), lambda h: replace(section, width_um=section.width_um + h))
    dwall = by_motion(1e-3, lambda h: replace(section, sidewall_deg=section.sidewall_deg + h))
    nan = np.asarray(np.nan)
    return GuideModes(
        N=np.asarray(float(N.real)), dwidth_per_um=np.asarray(dwidth), dt_per_um=np.array(dt),
        detch_per_um=np.asarray(detch), dsidewall_per_deg=np.asarray(dwall), dn=dn,
        dwavelength_per_um=np.asarray(dwave), flags=np.asarray(int(GuideFlag.NONE)), error=nan, group_error=nan,
    )  # fmt: skip


def _thicker(section: CrossSection, film: int) -> Callable[[float], CrossSection]:
    def by(step: float) -> CrossSection:
        t = section.t_um.copy()
        t[film] += step
        return replace(section, t_um=t)

    return by
