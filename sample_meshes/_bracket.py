"""The bracket that carries the sounding pole: mesh and linear solve, in bricks and in tetrahedra."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import felupe as fem
import numpy as np
import pyvista as pv
import scipy.sparse as sp
from scipy.sparse.linalg import splu

from ._blocks import Bools, Floats, Ints, as_hexahedron20, as_tetra10, block, join
from ._writing import symmetric, write_vtu

THICKNESS = 0.008
WIDTH = 0.040
FILLET = 0.008
NECK = THICKNESS + FILLET  # where the bend ends, measured from the outer corner
STRIP = 0.016  # straight part of the arm below its eye
HOLE_FOOT = 0.0045
HOLE_ARM = 0.006
ARM, FOOT = 1, 2
ELASTIC = {ARM: (9.0e9, 0.35), FOOT: (70.0e9, 0.33)}  # young's modulus, Poisson's ratio
FORCE = np.array([220.0, 0.0, -70.0])  # newtons, on the whole bracket
FIRST_ELEMENT = {ARM: 5001, FOOT: 2001}
FIRST_NODE = 301


@dataclass(frozen=True)
class Solved:
    """One solved bracket: what goes into the file and the solver library's own strain."""

    points: Floats
    cells: Ints
    part: Ints
    displacement: Floats
    reaction: Floats
    strain: Floats


def _lug(hole: float, s: Floats, t: Floats) -> tuple[Floats, Floats]:
    """Plan of an eye: (across, along) for s once around from the neck's corner, t from hole to outside."""
    half = WIDTH / 2
    angle = np.pi * (2.0 * s - 0.75)
    turn = 8.0 * s  # in eighths: 0 to 2 neck, 2 to 3 side, 3 to 7 round end, 7 to 8 other side
    x = np.interp(turn, [0, 2, 3, 7, 8], [-half, half, half, -half, -half])
    y = np.interp(turn, [0, 2, 3, 7, 8], [-half, -half, 0.0, 0.0, -half])
    end = (turn >= 3) & (turn <= 7)
    x, y = np.where(end, half * np.cos(angle), x), np.where(end, half * np.sin(angle), y)
    return (1 - t) * hole * np.cos(angle) + t * x, (1 - t) * hole * np.sin(angle) + t * y + half


def _foot_plate(s: Floats, t: Floats, w: Floats) -> tuple[Floats, Floats, Floats]:
    y, along = _lug(HOLE_FOOT, s, t)
    return NECK + along, y, THICKNESS * w


def _arm_eye(s: Floats, t: Floats, w: Floats) -> tuple[Floats, Floats, Floats]:
    y, along = _lug(HOLE_ARM, s, t)
    return THICKNESS * w, y, NECK + STRIP + along


def _arm_strip(s: Floats, t: Floats, w: Floats) -> tuple[Floats, Floats, Floats]:
    return THICKNESS * w, WIDTH * (s - 0.5), NECK + STRIP * t


def _bend(s: Floats, t: Floats, w: Floats) -> tuple[Floats, Floats, Floats]:
    """From the foot (t = 0) around the corner to the arm (t = 1), w from the outer corner to the fillet."""
    outer = np.maximum(0.0, 1.0 - 2.0 * t) * NECK, np.maximum(0.0, 2.0 * t - 1.0) * NECK
    angle = -np.pi / 2 * (1.0 + t)
    inner = NECK + FILLET * np.cos(angle), NECK + FILLET * np.sin(angle)
    return (1 - w) * outer[0] + w * inner[0], WIDTH * (s - 0.5), (1 - w) * outer[1] + w * inner[1]


def mesh(n: int) -> tuple[Floats, Ints, Ints]:
    """Return points, bricks and the part of each brick; n (even) bricks across the width, two through it."""
    lug = (4 * n, n // 2, 2)
    blocks = [
        block(_arm_eye, lug),
        block(_arm_strip, (n, n // 2, 2)),
        block(_bend, (n, n, 2)),
        block(_foot_plate, lug),
    ]
    points, bricks, owner = join(blocks)
    return points, bricks, np.array([ARM, ARM, FOOT, FOOT])[owner]


def on_arm_bore(points: Floats) -> Bools:
    """Return which points lie on the bore of the arm's eye."""
    radius = np.hypot(points[:, 1], points[:, 2] - (NECK + STRIP + WIDTH / 2))
    return (np.abs(radius - HOLE_ARM) < 1e-6) & (points[:, 0] < THICKNESS + 1e-6)


def on_foot_bore(points: Floats) -> Bools:
    """Return which points lie on the bore of the foot's bolt hole."""
    radius = np.hypot(points[:, 0] - (NECK + WIDTH / 2), points[:, 1])
    return (np.abs(radius - HOLE_FOOT) < 1e-6) & (points[:, 2] < THICKNESS + 1e-6)


def _rigid_modes(points: Floats) -> Floats:
    """Return ``(3 n, 6)``: unit translations and unit small rotations about the points' middle."""
    x, y, z = (points - points.mean(axis=0)).T
    o, one = np.zeros_like(x), np.ones_like(x)
    modes = [(one, o, o), (o, one, o), (o, o, one), (o, -z, y), (z, o, -x), (-y, x, o)]
    return np.stack([np.stack(mode, axis=1).ravel() for mode in modes], axis=1)


def _region(points: Floats, cells: Ints, *, centroid: bool = False) -> fem.Region:
    if cells.shape[1] == 20:
        rule = fem.GaussLegendre(order=0 if centroid else 2, dim=3)
        return fem.RegionQuadraticHexahedron(fem.Mesh(points, cells, "hexahedron20"), quadrature=rule)
    rule = fem.TetrahedronQuadrature(order=1 if centroid else 2)
    return fem.RegionQuadraticTetra(fem.Mesh(points, cells, "tetra10"), quadrature=rule)


def centroid_gradient(points: Floats, cells: Ints, displacement: Floats) -> Floats:
    """Return ``(n, 3, 3)`` du_i/dX_j at the reference centroids, interpolated by the solver's library."""
    field = fem.Field(_region(points, cells, centroid=True), dim=3, values=displacement)
    return np.ascontiguousarray(np.moveaxis(field.grad()[..., 0, :], -1, 0))


def _stiffness(points: Floats, cells: Ints, part: Ints) -> sp.csc_matrix:
    total = sp.csc_matrix((points.size, points.size))
    for name, (young, poisson) in ELASTIC.items():
        region = _region(points, cells[part == name])
        body = fem.SolidBody(
            fem.LinearElastic(E=young, nu=poisson), fem.FieldContainer([fem.Field(region, dim=3)])
        )
        total = total + body.assemble.matrix().tocsc()
    return total


def solve(points: Floats, cells: Ints, part: Ints) -> Solved:
    """Fix the foot's bore; a rigid pin in the arm's bore carries FORCE and no moment about its middle."""
    stiffness = _stiffness(points, cells, part)
    numbers = np.arange(points.size).reshape(-1, 3)
    pin, bolt = numbers[on_arm_bore(points)].ravel(), numbers[on_foot_bore(points)].ravel()
    free = np.setdiff1d(numbers.ravel(), np.concatenate([pin, bolt]))
    modes = np.zeros((points.size, 6))
    modes[pin] = _rigid_modes(points[on_arm_bore(points)])
    modes[free] = -splu(stiffness[np.ix_(free, free)]).solve(stiffness[free] @ modes)
    share = np.linalg.solve(modes[pin].T @ (stiffness[pin] @ modes), [*FORCE, 0.0, 0.0, 0.0])
    displacement = (modes @ share).reshape(-1, 3)
    reaction = (stiffness @ displacement.ravel()).reshape(-1, 3)
    strain = symmetric(centroid_gradient(points, cells, displacement))
    return Solved(points, cells, part, displacement, reaction, strain)


def bricks(n: int = 8) -> Solved:
    """Solve the bracket in 20-node bricks."""
    points, cells, part = mesh(n)
    return solve(*as_hexahedron20(points, cells), part)


def tetrahedra(n: int = 6) -> Solved:
    """Solve the same bracket in 10-node tetrahedra, six a brick of a coarser mesh."""
    points, cells, part = mesh(n)
    return solve(*as_tetra10(points, cells), np.repeat(part, 6))


def write(path: Path, solved: Solved) -> None:
    """Write the result as a solver would: its own element and node numbers, the reactions beside u."""
    number = np.zeros(len(solved.cells), dtype=np.int64)
    for part, first in FIRST_ELEMENT.items():
        inside = solved.part == part
        number[inside] = first + np.arange(inside.sum())
    write_vtu(
        path,
        solved.points,
        solved.cells,
        pv.CellType.QUADRATIC_HEXAHEDRON if solved.cells.shape[1] == 20 else pv.CellType.QUADRATIC_TETRA,
        point_data={
            "u": solved.displacement,
            "reaction_force": solved.reaction,
            "node_number": FIRST_NODE + np.arange(len(solved.points)),
        },
        cell_data={"part": solved.part.astype(np.int32), "element_number": number},
        field_data={"applied_force": FORCE},
    )
