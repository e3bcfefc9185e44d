"""The thick cylinder: how fast the strain of exact nodal displacements approaches the exact strain."""

from __future__ import annotations

from typing import Literal

import numpy as np
import pytest

import meshes
from unturn.elements import ELEMENTS
from unturn.fields import compute_fields
from unturn.model import PlaneOptions, build_model

# Source: Lame; Timoshenko and Goodier, Theory of Elasticity, article 28: thick cylinder under internal pressure, plane
# strain: u_r = (1+nu)/E p a^2/(b^2-a^2) [(1-2nu) r + b^2/r], e_rr = du_r/dr, e_tt = u_r/r.
A, B, NU, E, P = 1.0, 2.0, 0.3, 1000.0, 1.0
FACTOR = (1 + NU) / E * P * A**2 / (B**2 - A**2)

# Source: interpolation error, Zienkiewicz and Taylor; Barlow 1976, Int. J. Numer. Meth. Eng. 10, 243-251. The gradient
# at the centroid of linear quadrilaterals and hexahedra is of second order, of linear simplices of first order; at the
# centroid of quadratic elements, which is none of their own best points, of second order.
CENTROID_2D = {"quad": 2, "triangle": 1, "triangle6": 2, "triangle7": 2, "quad8": 2, "quad9": 2}
CENTROID_3D = {
    "hexahedron": 2,
    "tetra": 1,
    "tetra10": 2,
    "hexahedron20": 2,
    "hexahedron27": 2,
    "wedge15": 2,
    "wedge18": 2,
}


def radial(r: np.ndarray) -> np.ndarray:
    return FACTOR * ((1 - 2 * NU) * r + B**2 / r)


def slope(r: np.ndarray) -> np.ndarray:
    return FACTOR * ((1 - 2 * NU) - B**2 / r**2)


def unit_grid(name: str, n: int) -> meshes.Mesh:
    """`n` cells a direction in the unit square or cube, quadrilaterals and hexahedra cut where needed."""
    row = ELEMENTS[name]
    dim = row.dim
    t = np.linspace(0, 1, n + 1)
    corners = np.stack(np.meshgrid(*[t] * dim, indexing="ij"), -1).reshape(-1, dim)
    k = np.arange((n + 1) ** dim).reshape([n + 1] * dim)
    if dim == 2:
        quads = np.stack([k[:-1, :-1], k[1:, :-1], k[1:, 1:], k[:-1, 1:]], -1).reshape(-1, 4)
        cells = (
            quads if row.shape.name == "quad" else np.concatenate([quads[:, [0, 1, 2]], quads[:, [0, 2, 3]]])
        )
        return meshes.straight(corners, cells, row)
    low = [k[:-1, :-1, :-1], k[1:, :-1, :-1], k[1:, 1:, :-1], k[:-1, 1:, :-1]]
    high = [k[:-1, :-1, 1:], k[1:, :-1, 1:], k[1:, 1:, 1:], k[:-1, 1:, 1:]]
    bricks = np.stack([c.reshape(-1) for c in (*low, *high)], 1)
    cuts = {
        "hexahedron": [list(range(8))],
        "wedge": [[0, 1, 2, 4, 5, 6], [0, 2, 3, 4, 6, 7]],
        "tetra": [[0, 1, 2, 6], [0, 2, 3, 6], [0, 3, 7, 6], [0, 7, 4, 6], [0, 4, 5, 6], [0, 5, 1, 6]],
    }
    cells = np.concatenate([bricks[:, cut] for cut in cuts[row.shape.name]])
    return meshes.straight(corners, cells, row)


def quarter(name: str, n: int) -> meshes.Mesh:
    """The quarter of the cylinder, every node in its place on the circles; 3D: half as high as wide."""
    mesh = unit_grid(name, n)
    s, t, z = mesh.points.T
    r, angle = A + (B - A) * s, np.pi / 2 * t
    return mesh._replace(points=np.stack([r * np.cos(angle), r * np.sin(angle), 0.5 * z], 1))


def error_of_quarter(name: str, n: int, at: Literal["centroid", "mean"] = "centroid") -> float:
    """RMS over the cells of the largest component's error, relative to the strain at the bore."""
    mesh = quarter(name, n)
    r = np.hypot(mesh.points[:, 0], mesh.points[:, 1])
    u = np.zeros(mesh.points.shape)
    u[:, :2] = mesh.points[:, :2] * (radial(r) / r)[:, None]
    options = PlaneOptions("strain") if mesh.element.dim == 2 else None
    found = compute_fields(build_model(mesh.result(u=u), plane=options), ["strain"], at=at, diagnose=True)
    assert found.diagnostics is not None
    x, y, _ = found.diagnostics.centroid.T
    r = np.hypot(x, y)
    c, s = x / r, y / r
    err, ett = slope(r), radial(r) / r
    exact = np.stack(
        [err * c * c + ett * s * s, err * s * s + ett * c * c, 0 * r, (err - ett) * c * s, 0 * r, 0 * r], 1
    )
    off = np.abs(found.arrays["strain"] - exact).max(axis=1)
    weight = found.diagnostics.volume
    return float(np.sqrt((weight * off**2).sum() / weight.sum()) / (radial(np.array(A)) / A))


def error_of_section(name: str, n: int) -> float:
    """The same for the section of the cylinder, axisymmetric about y: hoop and radial strain."""
    mesh = unit_grid(name, n)
    points = mesh.points + np.array([A, 0, 0])
    u = np.zeros(points.shape)
    u[:, 0] = radial(points[:, 0])
    model = build_model(mesh._replace(points=points).result(u=u), plane=PlaneOptions("axisymmetric"))
    found = compute_fields(model, ["strain"], diagnose=True)
    assert found.diagnostics is not None
    r, zero = found.diagnostics.centroid[:, 0], np.zeros(len(mesh.cells))
    exact = np.stack([slope(r), zero, radial(r) / r, zero, zero, zero], 1)
    off = np.abs(found.arrays["strain"] - exact).max(axis=1)
    return float(np.sqrt(np.mean(off**2)) / (radial(np.array(A)) / A))


def check(errors: dict[int, float], order: int, finest: float) -> None:
    """The observed order between each two meshes, and the error on the finest, with the table when it fails."""
    n = np.array(list(errors))
    e = np.array(list(errors.values()))
    rates = np.log(e[:-1] / e[1:]) / np.log(n[1:] / n[:-1])
    table = "\n".join(f"n={k:3d}  error {v:.3e}" for k, v in errors.items()) + f"\norders {rates.round(2)}"
    assert rates[-1] > order - 0.15, table
    assert rates[-1] < order + 0.5, table
    assert e[-1] < finest, table


@pytest.mark.parametrize(("name", "order"), CENTROID_2D.items())
def test_plane_strain(name: str, order: int) -> None:
    check({n: error_of_quarter(name, n) for n in (4, 8, 16)}, order, 0.02 if order == 1 else 0.001)


@pytest.mark.parametrize(("name", "order"), CENTROID_2D.items())
def test_axisymmetric(name: str, order: int) -> None:
    check({n: error_of_section(name, n) for n in (4, 8, 16)}, order, 0.02 if order == 1 else 0.001)


@pytest.mark.parametrize(("name", "order"), CENTROID_3D.items())
def test_solid(name: str, order: int) -> None:
    check({n: error_of_quarter(name, n) for n in (2, 4, 8)}, order, 0.05 if order == 1 else 0.004)


@pytest.mark.derived(
    "the mean of the gradient over a cell is that of its border: it differs from the centroid's by h^2"
)
@pytest.mark.parametrize("name", ["quad", "quad8", "quad9", "triangle6"])
def test_mean(name: str) -> None:
    check({n: error_of_quarter(name, n, "mean") for n in (4, 8, 16)}, 2, 0.001)


@pytest.mark.derived("the solid with no displacement along its axis is the plane strain problem")
@pytest.mark.parametrize(
    ("flat", "solid"), [("quad", "hexahedron"), ("quad9", "hexahedron27"), ("triangle6", "wedge18")]
)
def test_solid_and_plane_strain_agree(flat: str, solid: str) -> None:
    assert error_of_quarter(solid, 8) == pytest.approx(error_of_quarter(flat, 8), rel=1e-9)
