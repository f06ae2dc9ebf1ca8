"""Element matrices and field integrals of the full-vector mode problem.

Fields go as exp(+jwt - j beta z). With E_t = e_t / beta and E_z = j e_z, material tensors diagonal in x, y, z:

    A(e; f) = int  curl e curl f / mu_z - k0^2 (eps_x e_x f_x + eps_y e_y f_y)
    B(e; f) = int  (e_x + d_x e_z)(f_x + d_x f_z) / mu_y + (e_y + d_y e_z)(f_y + d_y f_z) / mu_x - k0^2 eps_z e_z f_z
    A x + beta^2 B x = 0

e_t in edge elements (first kind), e_z in nodal ones of the same degree, so that gradients of the latter are among the
former and no false modes arise (J. F. Lee, D. K. Sun, Z. J. Cendes, IEEE Trans. Microw. Theory Tech. 39, 1262 (1991);
from memory). B is indefinite.

The derivative of beta^2 with respect to anything is -(x A' x + beta^2 x B' x) / (x B x), no conjugate taken. With
respect to an index or the wave number the primes fall on the materials (which gives the energy theorem for the group
index); with respect to a dimension on the geometry: if the nodes move by v, e_t and grad e_z change by -(grad v)^T e,
curl e_t by -(div v) curl e_t and areas by div v.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .layers import Array
from .vector_mesh import GuideMesh

Complex = NDArray[Any]  # real for closed boxes, complex with an absorber
Sparse = Any


@dataclass(frozen=True)
class Space:
    """Both finite-element spaces on one placed mesh.

    tx, ty, curl, z, zx, zy (T, Q, K): shape functions of e_t (its components and curl) and of e_z (value and gradient)
    at the Q quadrature points of each triangle, over the K unknowns of a triangle, edge ones first; weight (T, Q); x, y
    (T, Q) in µm; unknown (T, K): number of each unknown; fixed: those that the walls hold at zero; count of all.
    """

    mesh: Any
    edge_basis: Any
    nodal_basis: Any
    tx: Array
    ty: Array
    curl: Array
    z: Array
    zx: Array
    zy: Array
    weight: Array
    x: Array
    y: Array
    unknown: NDArray[np.intp]
    count: int


@dataclass(frozen=True)
class Materials:
    """Relative permittivity and permeability along x, y, z, each (T, Q) or broadcasting to it. growth: how fast both
    grow along x, per µm of x and of themselves, where they do so within a layer."""

    eps: tuple[Complex, Complex, Complex]
    mu: tuple[Complex, Complex, Complex]
    growth: tuple[Complex, Complex, Complex] | None = None


@dataclass(frozen=True)
class Field:
    """e_x, e_y, e_z, curl e_t and grad e_z of one mode at the quadrature points, (T, Q)."""

    ex: Complex
    ey: Complex
    ez: Complex
    curl: Complex
    gx: Complex
    gy: Complex


def space_on(mesh: GuideMesh, nodes: Array, degree: int) -> Space:
    """Finite-element spaces of a degree (2 or 3) on a mesh whose nodes (2, nodes) have been placed."""
    from skfem import Basis, ElementTriN2, ElementTriN3, ElementTriP2, ElementTriP3, MeshTri

    edge, nodal = {2: (ElementTriN2, ElementTriP2), 3: (ElementTriN3, ElementTriP3)}[degree]
    tri = MeshTri(nodes, mesh.triangles)
    a = Basis(tri, edge(), intorder=2 * degree)
    b = Basis(tri, nodal(), intorder=2 * degree)
    tx, ty, curl = (_columns([getter(f[0]) for f in a.basis]) for getter in (_first, _second, _curl))
    z, zx, zy = (_columns([getter(f[0]) for f in b.basis]) for getter in (_value, _grad_x, _grad_y))
    return Space(
        mesh=tri, edge_basis=a, nodal_basis=b, tx=tx, ty=ty, curl=curl, z=z, zx=zx, zy=zy,
        weight=np.asarray(a.dx), x=np.asarray(a.global_coordinates()[0]), y=np.asarray(a.global_coordinates()[1]),
        unknown=np.concatenate([a.element_dofs, b.element_dofs + a.N]).T, count=a.N + b.N,
    )  # fmt: skip


def _first(f: Any) -> Array:
    return np.array(f[0])


def _second(f: Any) -> Array:
    return np.array(f[1])


def _curl(f: Any) -> Array:
    return np.asarray(f.curl)


def _value(f: Any) -> Array:
    return np.asarray(f)


def _grad_x(f: Any) -> Array:
    return np.asarray(f.grad[0])


def _grad_y(f: Any) -> Array:
    return np.asarray(f.grad[1])


def _columns(parts: list[Array]) -> Array:
    return np.ascontiguousarray(np.stack(np.broadcast_arrays(*parts), axis=-1))


def held_unknowns(space: Space, symmetry: str | None) -> NDArray[np.intp]:
    """Unknowns that are zero: on the outer walls, electric ones, and on the symmetry plane x = 0 where that is
    electric. symmetry: "electric", "magnetic", or None where the mesh holds the whole guide."""
    facets = space.mesh.boundary_facets()
    reach = np.abs(space.mesh.p[0, space.mesh.facets[:, facets]]).max(axis=0)
    inner = reach < 1e-9
    walls = facets if symmetry == "electric" or symmetry is None else facets[~inner]
    edge = space.edge_basis.get_dofs(walls).all()
    nodal = space.nodal_basis.get_dofs(walls).all() + space.edge_basis.N
    return np.concatenate([edge, nodal])


def matrices(
    space: Space, materials: Materials, k0: float, held: NDArray[np.intp]
) -> tuple[Sparse, Sparse, NDArray[np.intp]]:
    """A and B over the free unknowns (sparse, by columns), and which unknowns those are."""
    from scipy.sparse import coo_array

    (ex, ey, ez), (mx, my, mz) = materials.eps, materials.mu
    w = space.weight
    curl = _product(space.curl, w / mz)
    mass = _product(space.tx, w * ex) + _product(space.ty, w * ey)
    edges, all_ = space.tx.shape[-1], space.unknown.shape[1]
    gx, gy = np.concatenate([space.tx, space.zx], axis=-1), np.concatenate([space.ty, space.zy], axis=-1)
    b = _product(gx, w / my) + _product(gy, w / mx)
    b[:, edges:, edges:] -= k0**2 * _product(space.z, w * ez)
    a = np.zeros_like(b)
    a[:, :edges, :edges] = curl - k0**2 * mass
    free = np.ones(space.count, dtype=bool)
    free[held] = False
    kept = np.flatnonzero(free)
    number = np.full(space.count, -1)
    number[kept] = np.arange(kept.size)
    local = number[space.unknown]
    rows, columns = (np.broadcast_to(x, (local.shape[0], all_, all_)) for x in (local[:, :, None], local[:, None, :]))
    here = (rows >= 0) & (columns >= 0)
    place, shape = (rows[here], columns[here]), (kept.size, kept.size)
    return coo_array((a[here], place), shape).tocsc(), coo_array((b[here], place), shape).tocsc(), kept


def _product(shapes: Array, weight: Complex) -> Complex:
    """sum over quadrature points of shape_i weight shape_j: (T, K, K)."""
    return np.asarray(np.matmul(shapes.transpose(0, 2, 1), weight[..., None] * shapes))


def field_of(space: Space, vector: Complex) -> Field:
    """Fields at the quadrature points from all unknowns."""
    local = vector[space.unknown]
    edges = space.tx.shape[-1]
    t, z = local[:, :edges, None], local[:, edges:, None]

    def at(shapes: Array, coefficients: Complex) -> Complex:
        return np.asarray(np.matmul(shapes, coefficients)[..., 0])

    return Field(at(space.tx, t), at(space.ty, t), at(space.z, z), at(space.curl, t), at(space.zx, z), at(space.zy, z))


def norm(space: Space, m: Materials, field: Field, k0: float) -> complex:
    """x B x."""
    f = field
    across = (f.ex + f.gx) ** 2 / m.mu[1] + (f.ey + f.gy) ** 2 / m.mu[0]
    return complex((space.weight * (across - k0**2 * m.eps[2] * f.ez**2)).sum())


def permittivity_change(space: Space, m: Materials, field: Field, k0: float, beta2: complex) -> Complex:
    """x A' x + beta^2 x B' x for a relative growth of the permittivity, by triangle (T)."""
    f, e = field, m.eps
    return np.asarray(
        -(k0**2) * (space.weight * (e[0] * f.ex**2 + e[1] * f.ey**2 + beta2 * e[2] * f.ez**2)).sum(axis=1)
    )


def motion_change(space: Space, m: Materials, field: Field, k0: float, beta2: complex, velocity: Array) -> complex:
    """x A' x + beta^2 x B' x where the nodes move (2, nodes) and take the materials with them."""
    slope = _slopes(space, velocity)
    vxx, vxy, vyx, vyy = slope[0, 0], slope[0, 1], slope[1, 0], slope[1, 1]  # vxy: d v_x / d y
    f, e, mu = field, m.eps, m.mu
    div = vxx + vyy
    dex, dey = -(vxx * f.ex + vyx * f.ey), -(vxy * f.ex + vyy * f.ey)
    hx, hy = f.ex + f.gx, f.ey + f.gy
    dhx, dhy = -(vxx * hx + vyx * hy), -(vxy * hx + vyy * hy)
    a = -div * f.curl**2 / mu[2]
    a = a - k0**2 * (e[0] * (2 * dex * f.ex + div * f.ex**2) + e[1] * (2 * dey * f.ey + div * f.ey**2))
    b = (2 * dhx * hx + div * hx**2) / mu[1] + (2 * dhy * hy + div * hy**2) / mu[0] - k0**2 * div * e[2] * f.ez**2
    if m.growth is not None:
        gx, gy, gz = (g * _at_points(space, velocity[0]) for g in m.growth)
        a = a - gz * f.curl**2 / mu[2] - k0**2 * (gx * e[0] * f.ex**2 + gy * e[1] * f.ey**2)
        b = b - gy * hx**2 / mu[1] - gx * hy**2 / mu[0] - k0**2 * gz * e[2] * f.ez**2
    return complex((space.weight * (a + beta2 * b)).sum())


def _at_points(space: Space, nodal: Array) -> Array:
    """Values at the quadrature points (T, Q) of what is linear between the nodes (nodes)."""
    first, second, third = (nodal[space.mesh.t[k]][:, None] for k in range(3))
    xi, eta = np.asarray(space.edge_basis.X)
    return np.asarray(first * (1 - xi - eta) + second * xi + third * eta)


def _slopes(space: Space, velocity: Array) -> Array:
    """d velocity_i / d x_j of every triangle, (2, 2, T, 1)."""
    p, t = space.mesh.p, space.mesh.t
    sides = np.stack([p[:, t[1]] - p[:, t[0]], p[:, t[2]] - p[:, t[0]]], axis=-1)  # (2, T, 2)
    moves = np.stack([velocity[:, t[1]] - velocity[:, t[0]], velocity[:, t[2]] - velocity[:, t[0]]], axis=-1)
    inverse = np.linalg.inv(sides.transpose(1, 0, 2))
    return np.asarray(np.matmul(moves.transpose(1, 0, 2), inverse).transpose(1, 2, 0)[..., None])
