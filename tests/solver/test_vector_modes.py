"""The vector reference against itself refined, against differences, and on modes that are easily mistaken."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from layerlot.solver.cross_section import CrossSection, GuideFlag, cross_section
from layerlot.solver.vector_field import field_at, vector_field
from layerlot.solver.vector_mesh import GuideMesh, lay_out
from layerlot.solver.vector_modes import (
    FINE,
    PRECISE,
    NoSuchModeError,
    side_index,
    vector_mode,
    vector_mode_with_error,
)
from skfem import MeshTri

WIRE = cross_section([1.444, 3.476, 1.444], [0.22], 1, 0.5, 1.55)
RIB = cross_section([1.444, 3.476, 1.0], [0.22], 1, 0.55, 1.55, 0.13, 84.0)


def halved(mesh: GuideMesh, times: int) -> GuideMesh:
    """Every triangle split into four, `times` over."""
    fine = MeshTri(np.stack([mesh.xi, mesh.eta]), mesh.triangles)
    centres = fine.p[:, fine.t].mean(axis=1)
    fine = fine.refined(times)
    small = fine.p[:, fine.t].mean(axis=1)
    finder = MeshTri(np.stack([mesh.xi, mesh.eta]), mesh.triangles).element_finder()
    assert centres.shape[1] == mesh.layer.size
    layer = mesh.layer[finder(small[0], small[1])]
    return replace(mesh, xi=fine.p[0], eta=fine.p[1], triangles=fine.t, layer=layer)


@cache
def coarse_square() -> tuple[CrossSection, GuideMesh, float]:
    """A weakly guiding square, a coarse mesh for it, and its index on that mesh split twice."""
    square = cross_section([1.444, 1.4548, 1.444], [6.0], 1, 6.0, 1.55)
    # Coarse lines, corners already fine: then the smooth part of the field makes the error.
    mesh = lay_out(square, 1.4497, 1.444, replace(FINE, step=2.2, growth=1.8, grading=1.0, reach=7.0))
    return square, mesh, vector_mode(square, False, near=1.4497, mesh=halved(mesh, 2)).N.real


@pytest.mark.parametrize("degree, order", [(2, 3.4), (3, 4.5)])
def test_order_of_convergence(degree, order):
    """Halving every triangle lowers the error as the degree promises, as long as the corners' share is small.

    Eigenvalues of smooth modes converge with twice the degree, 4 and 6; what is left at a corner of a weakly guiding
    core lowers the observed order a little (2.3e-4 of the contrast at the corner itself).
    """
    square, mesh, exact = coarse_square()
    errors = [
        abs(vector_mode(square, False, near=1.4497, mesh=halved(mesh, times), degree=degree).N.real - exact)
        for times in (0, 1)
    ]
    assert np.log2(errors[0] / errors[1]) > order
    assert errors[1] < 2e-7


@pytest.mark.parametrize("tm", [False, True], ids=["TE", "TM"])
@pytest.mark.parametrize("section", [WIRE, RIB], ids=["wire", "rib"])
def test_derivatives_are_those_of_the_discrete_problem(section, tm):
    """Closed-form slopes equal differences of solves on the moving mesh, for every dimension, index and wavelength."""
    if section is RIB and tm:
        section = replace(section, etch_um=np.asarray(0.2))  # a shallow rib's quasi-TM mode leaks
    mode = vector_mode(section, tm)
    layers = section.n.size

    def slope(name: str, step: float, part: np.ndarray | float = 1.0) -> float:
        ends = [
            vector_mode(
                replace(section, **{name: getattr(section, name) + s * step * part}), tm, near=mode.N.real,
                mesh=mode.mesh,
            ).N.real
            for s in (1, -1)
        ]  # fmt: skip
        return (ends[0] - ends[1]) / (2 * step)

    pairs = [
        (slope("width_um", 1e-4), mode.modes.dwidth_per_um),
        (slope("t_um", 1e-4), mode.modes.dt_per_um.sum()),
        (slope("wavelength_um", 1e-4), mode.modes.dwavelength_per_um),
        *((slope("n", 1e-4, np.eye(layers)[k]), mode.modes.dn[k]) for k in range(layers)),
    ]
    if section is not WIRE:
        pairs += [
            (slope("etch_um", 1e-4), mode.modes.detch_per_um),
            (slope("sidewall_deg", 1e-2), mode.modes.dsidewall_per_deg),
        ]
    for difference, closed in pairs:
        # Central differences leave h^2 / 6 of the third derivative and 1e-11 / h of the solver's tolerance.
        assert float(closed) == pytest.approx(difference, rel=2e-5, abs=1e-6)


def test_slope_of_a_wall():
    """A wall that leans moves the mode as vertical walls at the mean width do, to first order, in even surroundings."""
    leaning = replace(WIRE, sidewall_deg=np.asarray(80.0))
    straight, sloped = vector_mode(WIRE, False), vector_mode(leaning, False)
    assert abs(straight.modes.dsidewall_per_deg) < 1e-6
    assert 1e-5 < abs(sloped.N.real - straight.N.real) < 5e-3


def test_stated_error_covers_a_finer_solve():
    """The error that the reference states for itself exceeds its distance to a much finer solve, and is small."""
    for section, tm in ((WIRE, False), (WIRE, True), (RIB, False)):
        usual = vector_mode_with_error(section, tm)
        fine = vector_mode(section, tm, rule=replace(FINE.finer(2.0), reach=14.0))
        assert abs(usual.N.real - fine.N.real) < usual.modes.error < 1e-4
        assert abs(usual.modes.group_index(1.55, np.zeros(3)) - fine.modes.group_index(1.55, np.zeros(3))) < float(
            usual.modes.group_error
        )


def test_square_guide_is_degenerate():
    """Both polarisations of a square core in even surroundings have one index."""
    square = cross_section([1.0, 1.5, 1.0], [1.0], 1, 1.0, 1.2)
    one, other = (vector_mode(square, tm, rule=PRECISE).N.real for tm in (False, True))
    assert abs(one - other) < 1e-6


@pytest.mark.parametrize("order", [0, 1, 2])
def test_lateral_orders_have_their_nodes(order):
    """The mode of lateral order m has m sign changes across the guide, and the orders descend in index."""
    wide = cross_section([1.444, 1.996, 1.444], [0.4], 1, 3.0, 1.55)
    mode = vector_mode(wide, False, order)
    x = np.linspace(-1.49, 1.49, 399)
    across = field_at(mode, x, np.full_like(x, 0.2))[0]
    assert np.count_nonzero(np.diff(np.sign(across[np.abs(across) > 1e-3]))) == order
    if order:
        assert mode.N.real < vector_mode(wide, False, order - 1).N.real


def test_polarisation_is_told_apart():
    """Quasi-TE and quasi-TM of one wire differ, and each field lies mainly along its own axis."""
    for tm in (False, True):
        x, y = np.meshgrid(np.linspace(-0.2, 0.2, 9), np.linspace(0.05, 0.17, 5))
        _, (ex, ey, _) = vector_field(WIRE, tm, 0, x, y)
        main, minor = (ey, ex) if tm else (ex, ey)
        assert (main**2).sum() > 20 * (minor**2).sum()


def test_mode_is_not_taken_by_rank():
    """In a wide box round a shallow rib, modes of the slab beside it are nearer to the guess; the guide's is found."""
    rib = cross_section([1.444, 3.476, 1.0], [0.22], 1, 0.5, 1.55, 0.03)
    mode = vector_mode(rib, False, rule=replace(FINE, reach=25.0))
    low = side_index(rib)
    for guess in np.linspace(low - 0.01, mode.N.real + 0.01, 5):
        again = vector_mode(rib, False, near=float(guess), mesh=mode.mesh)
        assert abs(again.N.real - mode.N.real) < 1e-9


def test_no_such_mode():
    """A lateral order that the guide does not hold is refused with what was looked for."""
    with pytest.raises(NoSuchModeError, match="quasi-TE mode of lateral order 3"):
        vector_mode(WIRE, False, 3)


def test_wide_guide_is_a_slab():
    """A guide much wider than it is thick has the index of the slab."""
    from layerlot.solver.slab import mode_index

    slab = float(mode_index([1.444, 1.996, 1.444], [0.4], 1.55, 0))
    gaps = [
        slab - vector_mode(cross_section([1.444, 1.996, 1.444], [0.4], 1, width, 1.55), False).N.real
        for width in (6.0, 12.0)
    ]
    assert 0 < gaps[1] < gaps[0] < 6e-3
    assert gaps[0] / gaps[1] == pytest.approx(4, rel=0.2)  # the lateral wave number goes as 1 / width


def test_leak_is_flagged():
    """A quasi-TM mode below the slab mode beside a shallow rib carries its flag."""
    rib = cross_section([3.36, 3.44, 1.0], [1.0], 1, 3.0, 1.55, 0.1)
    assert vector_mode(rib, True, near=3.3906).modes.flags & GuideFlag.LEAKS_SIDEWAYS
    assert not vector_mode(rib, False).modes.flags & GuideFlag.LEAKS_SIDEWAYS


@pytest.mark.parametrize("radius", [5.0, 20.0])
def test_bend_goes_as_the_inverse_square(radius):
    """The shift of a bend falls with the square of the radius, to fourth order in it, and vanishes with it."""
    straight = vector_mode(WIRE, False, rule=PRECISE).N.real
    shift = vector_mode(WIRE, False, rule=PRECISE, radius_um=radius).N.real - straight
    twice = vector_mode(WIRE, False, rule=PRECISE, radius_um=2 * radius).N.real - straight
    assert shift / twice == pytest.approx(4, rel=0.02)
    assert abs(vector_mode(WIRE, False, rule=PRECISE, radius_um=1e6).N.real - straight) < 1e-7
