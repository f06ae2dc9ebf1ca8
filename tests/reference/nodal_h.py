"""A second full-vector mode solver, for tests: magnetic field, nodal elements, frequency as the unknown.

The program's own reference solves for the electric field in edge elements and finds the index at a wavelength. This one
takes all three components of the magnetic field, continuous in any guide without magnetic materials, in quadratic nodal
elements, fixes the propagation constant beta and finds k0^2:

    int  |curl H|^2 / eps + |div H|^2  =  k0^2 int |H|^2,       H = (Hx, Hy, j hz) exp(-j beta z)

a symmetric problem with a positive mass matrix; the penalty on the divergence keeps false modes away (B. M. A. Rahman,
J. B. Davies, J. Lightwave Technol. 2, 682 (1984); from memory). Newton steps on beta, d(k0^2)/d(beta) being that of the
form. Nothing is shared with the program but the geometry, which is stated anew. `scalar_index` solves the scalar
wave equation in cubic elements on the same mesh.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.sparse.linalg import eigsh
from skfem import Basis, BilinearForm, ElementTriP2, ElementTriP3, ElementVector, MeshTri
from skfem.helpers import dot, grad


@dataclass(frozen=True)
class Rod:
    """A rectangular core in an even surrounding, lengths in µm."""

    n_core: float
    n_clad: float
    width: float
    height: float
    wavelength: float


def _lines(half: float, room: float, cells: int, growth: float = 1.35) -> np.ndarray:
    """From the middle through the core to the wall: finer towards the interface on both sides."""
    inside = half * (1 - (1 - np.linspace(0, 1, cells + 1)) ** 1.6)
    steps = [inside[-1] - inside[-2]]
    while sum(steps) < room:
        steps.append(steps[-1] * growth)
    outside = np.cumsum(steps) * (room / sum(steps))
    return np.concatenate([inside, half + outside])


def quarter(rod: Rod, N: float, cells: int) -> MeshTri:
    """The quarter x, y > 0: both symmetry planes are used. N: expected index, for the room left round the core."""
    room = 9 * rod.wavelength / (2 * np.pi * np.sqrt(N**2 - rod.n_clad**2))
    x, y = (_lines(size / 2, room, cells) for size in (rod.width, rod.height))
    return MeshTri.init_tensor(x, y)


def _permittivity(mesh: MeshTri, rod: Rod) -> np.ndarray:
    centre = mesh.p[:, mesh.t].mean(axis=1)
    inside = (centre[0] < rod.width / 2) & (centre[1] < rod.height / 2)
    return np.where(inside, rod.n_core**2, rod.n_clad**2)[:, None]


def vector_index(rod: Rod, tm: bool, start: float, cells: int) -> tuple[float, float]:
    """Effective index of the lowest mode, E mainly along x, or along y for tm, and the share of its divergence: k0^2 is
    larger by that share of itself than the curl alone would have it."""
    mesh = quarter(rod, start, cells)
    basis = Basis(mesh, ElementVector(ElementTriP2(), 3), intorder=4)
    eps = _permittivity(mesh, rod)

    def curl(u, beta):  # type: ignore[no-untyped-def]
        d = grad(u)
        return d[2, 1] + beta * u[1], -(beta * u[0] + d[2, 0]), d[1, 0] - d[0, 1]

    def div(u, beta):  # type: ignore[no-untyped-def]
        d = grad(u)
        return d[0, 0] + d[1, 1] + beta * u[2]

    @BilinearForm
    def stiffness(u, v, w):  # type: ignore[no-untyped-def]
        beta = float(w["beta"])
        return sum(a * b for a, b in zip(curl(u, beta), curl(v, beta))) / w["eps"] + div(u, beta) * div(v, beta)

    @BilinearForm
    def penalty(u, v, w):  # type: ignore[no-untyped-def]
        beta = float(w["beta"])
        return div(u, beta) * div(v, beta)

    @BilinearForm
    def mass(u, v, _):  # type: ignore[no-untyped-def]
        return dot(u, v)

    free = _free(basis, tm)
    m = mass.assemble(basis)[free][:, free].tocsc()
    k0 = 2 * np.pi / rod.wavelength
    beta, h = start * k0, 1e-4
    for _ in range(4):
        parts = [stiffness.assemble(basis, eps=eps, beta=beta + s * h)[free][:, free] for s in (-1, 0, 1)]
        excess = penalty.assemble(basis, beta=beta)[free][:, free]
        values, vectors = eigsh(parts[1].tocsc(), k=6, M=m, sigma=0.999 * k0**2, v0=np.ones(free.size))
        # False modes are all divergence, true ones have next to none; the lowest has the lowest frequency.
        shares = [float(x @ (excess @ x) / (x @ (m @ x))) / k0**2 for x in vectors.T]
        best = int(np.argmin(np.where(np.array(shares) < 1e-3, values, np.inf)))
        v = vectors[:, best] / np.sqrt(vectors[:, best] @ (m @ vectors[:, best]))
        slope = float(v @ ((parts[2] - parts[0]) @ v)) / (2 * h)
        step = (k0**2 - values[best]) / slope
        beta += step
        if abs(step) < 1e-11 * beta:
            break
    return beta / k0, shares[best]


def _free(basis: Basis, tm: bool) -> np.ndarray:
    """Unknowns not held by symmetry. On an electric plane the normal H vanishes, on a magnetic one the others do: for E
    along x the plane x = 0 is electric and y = 0 magnetic."""
    points = basis.doflocs
    component = np.arange(basis.N)
    for k in range(3):
        component[np.concatenate([basis.nodal_dofs[k], basis.facet_dofs[k]])] = k
    on_x, on_y = points[0] < 1e-9, points[1] < 1e-9
    electric, magnetic = (on_y, on_x) if tm else (on_x, on_y)
    normal_e, normal_m = (1, 0) if tm else (0, 1)
    held = (electric & (component == normal_e)) | (magnetic & (component != normal_m))
    return np.flatnonzero(~held)


def scalar_index(rod: Rod, start: float, cells: int) -> float:
    """Effective index of the lowest mode of the scalar wave equation."""
    mesh = quarter(rod, start, cells)
    basis = Basis(mesh, ElementTriP3(), intorder=6)
    k0 = 2 * np.pi / rod.wavelength

    @BilinearForm
    def stiffness(u, v, w):  # type: ignore[no-untyped-def]
        return dot(grad(u), grad(v)) - k0**2 * w["eps"] * u * v

    @BilinearForm
    def mass(u, v, _):  # type: ignore[no-untyped-def]
        return u * v

    a = stiffness.assemble(basis, eps=_permittivity(mesh, rod))
    values = eigsh(
        a.tocsc(), k=1, M=mass.assemble(basis).tocsc(), sigma=-((k0 * start) ** 2), return_eigenvectors=False
    )
    return float(np.sqrt(-values[0]) / k0)
