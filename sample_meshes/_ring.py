"""The depth gauge's housing, cut across: a thick ring under inner pressure, plane strain, 9-node quads."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pyvista as pv
import skfem
from skfem.helpers import ddot, dot, eye, sym_grad, trace

from ._writing import Floats, Ints, symmetric, write_vtu

INNER, OUTER = 0.018, 0.026
PRESSURE = 1.2e6
YOUNG, POISSON = 2.8e9, 0.38
AROUND, THROUGH = 48, 5


@dataclass(frozen=True)
class Solved:
    """The solved ring and the solver library's own strain."""

    points: Floats
    cells: Ints
    displacement: Floats
    strain: Floats


def mesh() -> skfem.MeshQuad2:
    """Return the whole ring, graded towards the bore, its mid-side nodes on circles."""
    radius = INNER * (OUTER / INNER) ** np.linspace(0.0, 1.0, THROUGH + 1)
    angle = 2.0 * np.pi * np.arange(AROUND) / AROUND
    x, y = (np.outer(f(angle), radius).ravel() for f in (np.cos, np.sin))
    number = np.arange(x.size).reshape(AROUND, THROUGH + 1)
    after = np.roll(number, -1, axis=0)
    corners = [number[:, :-1], number[:, 1:], after[:, 1:], after[:, :-1]]
    straight = skfem.MeshQuad2.from_mesh(
        skfem.MeshQuad(np.stack([x, y]), np.stack([c.ravel() for c in corners]))
    )
    steps = np.arctan2(straight.doflocs[1], straight.doflocs[0]) * AROUND / (2.0 * np.pi)
    between = np.abs(steps - np.round(steps)) > 0.25
    return replace(straight, doflocs=straight.doflocs * np.where(between, 1.0 / np.cos(np.pi / AROUND), 1.0))


def solve() -> Solved:
    """Solve with the pressure on the bore; three displacements hold the ring without a reaction."""
    ring = mesh()
    element = skfem.ElementVector(skfem.ElementQuad2())
    basis = skfem.Basis(ring, element, intorder=6)
    mu, lame = YOUNG / (2 * (1 + POISSON)), YOUNG * POISSON / ((1 + POISSON) * (1 - 2 * POISSON))

    @skfem.BilinearForm
    def stiffness(u, v, _):  # type: ignore[no-untyped-def]
        strain = sym_grad(u)
        return ddot(2 * mu * strain + lame * eye(trace(strain), 2), sym_grad(v))

    @skfem.LinearForm
    def inner_pressure(v, w):  # type: ignore[no-untyped-def]
        return -PRESSURE * dot(w.n, v)

    bore = ring.facets_satisfying(lambda x: np.hypot(*x) < INNER * 1.01, boundaries_only=True)
    load = inner_pressure.assemble(skfem.FacetBasis(ring, element, facets=bore, intorder=6))
    x, y = basis.doflocs
    vertical = np.arange(basis.N) % 2 == 1
    on_x = np.flatnonzero(vertical & (np.abs(y) < 1e-9) & (np.abs(np.abs(x) - OUTER) < 1e-9))
    on_y = np.flatnonzero(~vertical & (np.abs(x) < 1e-9) & (np.abs(y - OUTER) < 1e-9))
    u = skfem.solve(*skfem.condense(stiffness.assemble(basis), load, D=np.concatenate([on_x, on_y])))
    return _collect(ring, basis, u)


def _collect(ring: skfem.MeshQuad2, basis: skfem.Basis, u: Floats) -> Solved:
    points = np.column_stack([ring.doflocs.T, np.zeros(ring.doflocs.shape[1])])
    displacement = np.zeros_like(points)
    scalar = skfem.Basis(ring, skfem.ElementQuad2(), quadrature=(np.array([[0.5], [0.5]]), np.array([1.0])))
    for axis in (0, 1):
        displacement[scalar.element_dofs.ravel(), axis] = u[basis.element_dofs[axis::2].ravel()]
    gradient = np.zeros((ring.nelements, 3, 3))
    for axis in (0, 1):
        gradient[:, axis, :2] = scalar.interpolate(displacement[:, axis]).grad[:, :, 0].T
    return Solved(points, scalar.element_dofs.T.astype(np.int64), displacement, symmetric(gradient))


def write(path: Path, solved: Solved) -> None:
    """Write the ring with the numbers that Lame's formula needs."""
    write_vtu(
        path,
        solved.points,
        solved.cells,
        pv.CellType.BIQUADRATIC_QUAD,
        point_data={"displacement": solved.displacement},
        cell_data={"element_number": 1 + np.arange(len(solved.cells))},
        field_data={
            "inner_pressure": np.array([PRESSURE]),
            "young_modulus": np.array([YOUNG]),
            "poisson_ratio": np.array([POISSON]),
        },
    )
