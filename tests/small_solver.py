"""A linear elastic solve on a mesh of one element, to have displacements with the errors of a real solve."""

from __future__ import annotations

import numpy as np
from scipy import sparse
from scipy.sparse.linalg import splu

import meshes
from unturn.elements import rule_of_degree

Floats = np.ndarray


def elasticity(young: float, poisson: float, dim: int, plane: str = "strain") -> Floats:
    """The elastic tensor ``C[i, j, k, l]`` of an isotropic material."""
    lame = young * poisson / ((1 + poisson) * (1 - 2 * poisson))
    shear = young / (2 * (1 + poisson))
    if dim == 2 and plane == "stress":
        lame = 2 * lame * shear / (lame + 2 * shear)
    d = np.eye(dim)
    return lame * np.einsum("ij,kl->ijkl", d, d) + shear * (
        np.einsum("ik,jl->ijkl", d, d) + np.einsum("il,jk->ijkl", d, d)
    )


def solve(
    mesh: meshes.Mesh, C: Floats, fixed: dict[int, tuple[Floats, Floats]], load: Floats | None = None
) -> Floats:
    """Return nodal displacements ``(n_points, 3)``.

    `fixed` maps a direction to positions of nodes and their displacement; `load` holds forces at nodes.
    """
    row, dim, n = mesh.element, mesh.element.dim, len(mesh.points)
    rule = rule_of_degree(row.shape, 2 * row.order)
    X = mesh.points[mesh.cells][..., :dim]
    K = np.zeros((len(mesh.cells), row.n_nodes, dim, row.n_nodes, dim))
    for gradients, weight in zip(row.shape_gradients(rule.points), rule.weights):
        J = np.einsum("ka,cai->cik", gradients, X)
        B = np.einsum("ka,ckj->caj", gradients, np.linalg.inv(J))
        flow = np.einsum("ijkl,cbl->cijbk", C, B)
        K += np.einsum("c,caj,cijbk->caibk", weight * np.abs(np.linalg.det(J)), B, flow, optimize=True)
    dofs = (mesh.cells[..., None] * dim + np.arange(dim)).reshape(len(mesh.cells), -1)
    m = dofs.shape[1]
    at = (np.repeat(dofs, m, axis=1).reshape(-1), np.tile(dofs, (1, m)).reshape(-1))
    matrix = sparse.coo_array((K.reshape(-1), at), shape=(n * dim, n * dim)).tocsc()
    u = np.zeros(n * dim)
    held = np.zeros(n * dim, dtype=bool)
    for direction, (nodes, values) in fixed.items():
        held[nodes * dim + direction] = True
        u[nodes * dim + direction] = values
    force = np.zeros(n * dim) if load is None else load[:, :dim].reshape(-1)
    free = np.flatnonzero(~held)
    right = force - matrix @ u
    u[free] = splu(matrix[free][:, free].tocsc()).solve(right[free])
    out = np.zeros((n, 3))
    out[:, :dim] = u.reshape(n, dim)
    return out
