"""The lever that lifts the sounding pole: its shaft makes a quarter turn while drag bends it; nonlinear."""

from __future__ import annotations

import contextlib
import tempfile
from dataclasses import dataclass
from pathlib import Path
from xml.etree import ElementTree

import felupe as fem
import h5py
import meshio
import numpy as np

from ._blocks import Bools, Floats, Ints, as_hexahedron20, block, join
from ._writing import symmetric

BORE, HUB_RADIUS = 0.008, 0.016
LENGTH, TIP_WIDTH, THICKNESS = 0.130, 0.012, 0.012
ARM, HUB = 1, 2
ELASTIC = {ARM: (15.0e6, 0.42), HUB: (300.0e6, 0.40)}  # initial Young's modulus, Poisson's ratio
DRAG = np.array([16.0, 0.0, -2.0])  # newtons on the whole arm at the last step, direction kept
TURN = np.radians(90.0)
STEPS, SUBSTEPS = 6, 3


@dataclass(frozen=True)
class Solved:
    """The solved steps (the first undeformed) and the library's own strain in the last one."""

    points: Floats
    cells: Ints
    part: Ints
    times: Floats
    displacements: list[Floats]
    strain: Floats
    green_lagrange: Floats


def _hub(s: Floats, t: Floats, w: Floats) -> tuple[Floats, Floats, Floats]:
    angle, radius = 2.0 * np.pi * (s - 0.125), (1 - t) * BORE + t * HUB_RADIUS
    return radius * np.cos(angle), radius * np.sin(angle), THICKNESS * (w - 0.5)


def _arm(s: Floats, t: Floats, w: Floats) -> tuple[Floats, Floats, Floats]:
    """From the quarter of the hub's rim that looks along x (t = 0) to the tip (t = 1)."""
    angle = np.pi / 2 * (s - 0.5)
    x = (1 - t) * HUB_RADIUS * np.cos(angle) + t * LENGTH
    y = (1 - t) * HUB_RADIUS * np.sin(angle) + t * TIP_WIDTH * (s - 0.5)
    return x, y, THICKNESS * (w - 0.5)


def mesh() -> tuple[Floats, Ints, Ints]:
    """Return points, 20-node bricks and the part of each brick."""
    points, bricks, owner = join([block(_arm, (4, 16, 2)), block(_hub, (16, 2, 2))])
    return *as_hexahedron20(points, bricks), np.array([ARM, HUB])[owner]


def on_bore(points: Floats) -> Bools:
    """Return which points lie on the shaft."""
    return np.abs(np.hypot(points[:, 0], points[:, 1]) - BORE) < 1e-6


def _turn(points: Floats, angle: float) -> Floats:
    c, s = np.cos(angle), np.sin(angle)
    return points @ np.array([[c, s, 0.0], [-s, c, 0.0], [0.0, 0.0, 1.0]])


def _body(points: Floats, cells: Ints, part: Ints) -> tuple[fem.FieldContainer, fem.SolidBody, Floats]:
    """Return the field, the two-material body and the share of the arm's volume that belongs to each node."""
    region = fem.RegionQuadraticHexahedron(fem.Mesh(points, cells, "hexahedron20"))
    field = fem.FieldContainer([fem.Field(region, dim=3)])
    young, poisson = (np.where(part == ARM, a, h) for a, h in zip(ELASTIC[ARM], ELASTIC[HUB]))
    law = fem.NeoHookeCompressible(
        mu=young / (2 * (1 + poisson)), lmbda=young * poisson / ((1 + poisson) * (1 - 2 * poisson))
    )
    volume = np.einsum("aqc,qc->ca", np.broadcast_to(region.h, (20, *region.dV.shape)), region.dV)
    share = np.zeros(len(points))
    np.add.at(share, cells[part == ARM], volume[part == ARM])
    return field, fem.SolidBody(law, field), share / share.sum()


def solve() -> Solved:
    """Turn the bore in steps and load the arm in proportion; Newton's method starts from the turned shape."""
    points, cells, part = mesh()
    field, body, share = _body(points, cells, part)
    bore = on_bore(points)
    dof0, dof1 = fem.dof.partition(field, {"bore": fem.Boundary(field[0], mask=bore)})
    drag = fem.PointLoad(field, np.arange(len(points)))
    found = [np.zeros_like(points)]
    total = STEPS * SUBSTEPS
    for k in range(1, total + 1):
        field[0].values[:] = _turn(points + field[0].values, TURN / total) - points
        held = (_turn(points, TURN * k / total) - points).ravel()[dof0]
        drag.update(np.outer(share, DRAG * k / total))
        fem.newtonraphson(items=[body, drag], dof0=dof0, dof1=dof1, ext0=held, tol=1e-8, verbose=0)
        if k % SUBSTEPS == 0:
            found.append(field[0].values.copy())
    gradient = _centroid_gradient(points, cells, found[-1])
    product = np.einsum("nki,nkj->nij", gradient, gradient)
    times = np.linspace(0.0, 1.0, STEPS + 1)
    return Solved(points, cells, part, times, found, symmetric(gradient), symmetric(gradient + 0.5 * product))


def _centroid_gradient(points: Floats, cells: Ints, displacement: Floats) -> Floats:
    rule = fem.GaussLegendre(order=0, dim=3)
    region = fem.RegionQuadraticHexahedron(fem.Mesh(points, cells, "hexahedron20"), quadrature=rule)
    gradient = fem.Field(region, dim=3, values=displacement).grad()
    return np.ascontiguousarray(np.moveaxis(gradient[..., 0, :], -1, 0))


def write(path: Path, solved: Solved) -> None:
    """Write the series: ``path`` (XDMF) and its arrays beside it with the suffix h5."""
    with tempfile.TemporaryDirectory() as folder, contextlib.chdir(folder):
        with meshio.xdmf.TimeSeriesWriter(path.name) as writer:
            writer.write_points_cells(solved.points, {"hexahedron20": solved.cells})
            for time, displacement in zip(solved.times, solved.displacements):
                writer.write_data(
                    float(time),
                    point_data={"u": displacement},
                    cell_data={"part": [solved.part.astype(np.int32)]},
                )
        with h5py.File(f"{path.stem}.h5") as plain, h5py.File(path.with_suffix(".h5"), "w") as packed:
            for name, values in plain.items():
                packed.create_dataset(name, data=values[()], compression="gzip", shuffle=True)
        tree = ElementTree.parse(path.name)
    ElementTree.register_namespace("xi", "http://www.w3.org/2003/XInclude")
    ElementTree.indent(tree)
    tree.write(path, encoding="unicode")
