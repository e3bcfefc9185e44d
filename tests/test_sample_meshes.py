"""The demo results beside the package: complete, small, solved as said, made by the script beside them."""

from __future__ import annotations

import functools
import importlib
from pathlib import Path
from typing import Any

import meshio
import numpy as np
import pytest
import pyvista as pv
import skfem
from numpy.typing import NDArray

FOLDER = Path(__file__).parents[1] / "sample_meshes"
VTU = ("bracket", "bracket_tets", "ring", "skin")
RESULTS = (*VTU, "lever")
CELLS = {
    "bracket": (25, 20, skfem.ElementHexS2()),
    "bracket_tets": (24, 10, skfem.ElementTetP2()),
    "ring": (28, 9, skfem.ElementQuad2()),
    "skin": (22, 6, skfem.ElementTriP2()),
    "lever": (25, 20, skfem.ElementHexS2()),
}
# Source: the VTK file formats (quadratic cells): corners of the unit cell, and the corner pairs of the
# mid-side nodes in their order; by number of nodes.
HEXA = [(0, 0, 0), (1, 0, 0), (1, 1, 0), (0, 1, 0), (0, 0, 1), (1, 0, 1), (1, 1, 1), (0, 1, 1)]
CORNERS = {20: HEXA, 10: [(0, 0, 0), (1, 0, 0), (0, 1, 0), (0, 0, 1)], 9: [c[:2] for c in HEXA[:4]]}
CORNERS[6] = CORNERS[9][:2] + CORNERS[9][3:]
EDGES = {
    20: [(0, 1), (1, 2), (2, 3), (3, 0), (4, 5), (5, 6), (6, 7), (7, 4), (0, 4), (1, 5), (2, 6), (3, 7)],
    10: [(0, 1), (1, 2), (2, 0), (0, 3), (1, 3), (2, 3)],
    9: [(0, 1), (1, 2), (2, 3), (3, 0)],
    6: [(0, 1), (1, 2), (2, 0)],
}
Array = NDArray[Any]


@functools.cache
def load(name: str, folder: Path = FOLDER) -> tuple[Array, Array, Array, Array | None]:
    """Points, connectivity, displacement (last step) and part numbers of one sample."""
    if name == "lever":
        with meshio.xdmf.TimeSeriesReader(folder / "lever.xdmf") as series:
            points, blocks = series.read_points_cells()
            _, point_data, cell_data = series.read_data(series.num_steps - 1)
        return points, blocks[0].data, point_data["u"], cell_data["part"][0]
    grid = pv.read(folder / f"{name}.vtu")
    vtk_type, n_nodes, _ = CELLS[name]
    assert set(grid.celltypes) == {vtk_type}
    displacement = grid.point_data["displacement" if name == "ring" else "u"]
    cells = np.array(grid.cell_connectivity).reshape(-1, n_nodes)
    return np.array(grid.points), cells, np.array(displacement), grid.cell_data.get("part")


def reference_nodes(n_nodes: int) -> Array:
    """Nodes of the unit cell in VTK order: corners, middles of the edges, middle of the cell."""
    corners = np.array(CORNERS[n_nodes], dtype=float)
    middles = [(corners[a] + corners[b]) / 2 for a, b in EDGES[n_nodes]]
    nodes = np.vstack([corners, middles])
    return np.vstack([nodes, corners.mean(axis=0)]) if n_nodes == 9 else nodes


def derivatives(name: str, where: Array | None = None) -> Array:
    """Shape-function derivatives ``(n_nodes, dim)`` of scikit-fem at a place (the centroid)."""
    _, n_nodes, element = CELLS[name]
    nodes = reference_nodes(n_nodes)
    centroid = nodes[: len(CORNERS[n_nodes])].mean(axis=0)
    place = (centroid if where is None else where)[:, None]
    found = []
    for node in nodes:
        distance = np.linalg.norm(element.doflocs - node, axis=1)
        assert distance.min() < 1e-12
        found.append(np.asarray(element.lbasis(place, int(distance.argmin()))[1])[:, 0])
    return np.array(found)


def gradients(name: str, displacement: Array) -> Array:
    """Displacement gradient ``(n_cells, 3, 3)`` at the centroids from scikit-fem's shape functions."""
    points, cells, *_ = load(name)
    shape = derivatives(name)
    jacobian = np.einsum("cai,ad->cid", points[cells], shape)
    return np.einsum("cai,ad,cdj->cij", displacement[cells], shape, np.linalg.pinv(jacobian))


def symmetric(tensor: Array) -> Array:
    """Components XX, YY, ZZ, XY, YZ, XZ of the symmetric part."""
    both = (tensor + np.swapaxes(tensor, -1, -2)) / 2
    return both[..., [0, 1, 2, 0, 1, 0], [0, 1, 2, 1, 2, 2]]


@pytest.fixture(scope="module")
def reference() -> dict[str, Array]:
    with np.load(FOLDER / "reference.npz") as kept:
        return dict(kept)


@pytest.mark.practice("a demo is fetched with the package: it stays small")
def test_files_are_complete_and_small() -> None:
    files = [FOLDER / f"{n}.vtu" for n in VTU]
    files += [FOLDER / n for n in ("lever.xdmf", "lever.h5", "reference.npz")]
    assert sum(f.stat().st_size for f in files) < 2_000_000
    assert (FOLDER / "reference.npz").stat().st_size < 300_000


@pytest.mark.practice("every sample is described where it lies")
def test_readme_describes_every_file() -> None:
    text = (FOLDER / "README.md").read_text(encoding="utf-8")
    undescribed = [
        f.name for f in FOLDER.iterdir() if f.is_file() and f.name != "README.md" and f.name not in text
    ]
    assert undescribed == []
    assert "invented" in text


@pytest.mark.parametrize("name", RESULTS)
@pytest.mark.source("the VTK file formats: node order of the quadratic cells")
def test_middle_nodes_lie_at_the_middle_of_their_edges(name: str) -> None:
    points, cells, *_ = load(name)
    x = points[cells]
    for i, (a, b) in enumerate(EDGES[cells.shape[1]]):
        length = np.linalg.norm(x[:, a] - x[:, b], axis=1)
        off = np.linalg.norm(x[:, len(CORNERS[cells.shape[1]]) + i] - (x[:, a] + x[:, b]) / 2, axis=1)
        assert (off < 0.1 * length).all()  # curved edges bulge; a swapped node is off by half an edge or more
    assert np.array_equal(np.unique(cells), np.arange(len(points)))


@pytest.mark.parametrize("name", RESULTS)
@pytest.mark.source("scikit-fem: shape functions")
def test_jacobians_are_positive(name: str) -> None:
    points, cells, *_ = load(name)
    for place in reference_nodes(cells.shape[1]):
        jacobian = np.einsum("cai,ad->cid", points[cells], derivatives(name, place))
        if name == "skin":
            assert (np.cross(jacobian[..., 0], jacobian[..., 1])[:, 2] > 0).all()
        else:
            size = jacobian.shape[-1]
            assert (np.linalg.det(jacobian[:, :size, :size]) > 0).all()


@pytest.mark.parametrize("name", RESULTS)
@pytest.mark.source("scikit-fem: shape functions (brackets and lever were solved with felupe)")
def test_kept_strain_is_that_of_the_file(name: str, reference: dict[str, Array]) -> None:
    gradient = gradients(name, load(name)[2])
    if name == "skin":
        points, cells, *_ = load(name)
        jacobian = np.einsum("cai,ad->cid", points[cells], derivatives(name))
        plane = jacobian @ np.linalg.pinv(jacobian)
        gradient = plane @ gradient @ plane
    kept = reference[f"{name}.strain"]
    assert np.abs(symmetric(gradient) - kept).max() < 1e-11 * np.abs(kept).max()
    if name == "lever":
        lagrange = symmetric(gradient + np.einsum("cki,ckj->cij", gradient, gradient) / 2)
        assert np.abs(lagrange - reference["lever.green_lagrange"]).max() < 1e-11


@pytest.mark.parametrize("name", ["bracket", "bracket_tets"])
@pytest.mark.derived("equilibrium: the reactions of the two bores balance, nothing is left in between")
def test_bracket_is_in_equilibrium(name: str) -> None:
    grid = pv.read(FOLDER / f"{name}.vtu")
    applied, reaction = grid.field_data["applied_force"], np.array(grid.point_data["reaction_force"])
    points, cells, *_ = load(name)
    arm_end = points[:, 2] > 0.040
    assert np.allclose(reaction[arm_end].sum(axis=0), applied, atol=1e-6)
    assert np.allclose(reaction.sum(axis=0), 0.0, atol=1e-6)
    assert np.allclose(np.cross(points, reaction).sum(axis=0), 0.0, atol=1e-7)
    assert set(grid.cell_data["part"]) == {1, 2}
    assert grid.cell_data["element_number"].min() == 2001
    assert grid.point_data["node_number"].min() == 301
    assert len(np.unique(grid.cell_data["element_number"])) == len(cells)


@pytest.mark.derived("the same part in two element types: a quadratic mesh of this size is within 2 %")
def test_both_brackets_move_alike() -> None:
    deepest = [np.abs(load(n)[2][:, 0]).max() for n in ("bracket", "bracket_tets")]
    assert deepest[0] == pytest.approx(deepest[1], rel=0.02)


@pytest.mark.memory("Lame, thick cylinder, plane strain: u_r = (1+nu)/E p a2/(b2-a2) ((1-2nu) r + b2/r)")
def test_ring_follows_lame() -> None:
    # Independent computation: the finite-element solution itself, error of the order h^3.
    grid = pv.read(FOLDER / "ring.vtu")
    p, young, nu = (
        float(grid.field_data[n][0]) for n in ("inner_pressure", "young_modulus", "poisson_ratio")
    )
    points, _, displacement, _ = load("ring")
    r = np.hypot(points[:, 0], points[:, 1])
    a, b = r.min(), r.max()
    radial = (1 + nu) / young * p * a**2 / (b**2 - a**2) * ((1 - 2 * nu) * r + b**2 / r)
    wanted = radial[:, None] * points / r[:, None]
    assert np.abs(displacement - wanted).max() < 5e-6 * radial.max()


@pytest.mark.derived("balance along the normal of a sphere: N1 + N2 = p R, so e1 + e2 = (1 - nu) p R / (E t)")
def test_skin_carries_its_pressure(reference: dict[str, Array]) -> None:
    points, cells, *_ = load("skin")
    trace = reference["skin.strain"][:, :3].sum(axis=1)
    middle = np.hypot(*points[cells][:, :3, :2].mean(axis=1).T) < 0.04
    wanted = (1 - 0.40) * 1500.0 * 0.250 / (150.0e6 * 0.0004)
    assert middle.sum() > 50
    # the pretension carries what is left, of the order N0 / (E t) = 0.5 %
    assert np.abs(trace[middle] / wanted - 1.0).max() < 0.01


@pytest.mark.derived("the shaft turns a quarter; a turn without strain has a Green-Lagrange strain of zero")
def test_lever_swings_and_bends(reference: dict[str, Array]) -> None:
    with meshio.xdmf.TimeSeriesReader(FOLDER / "lever.xdmf") as series:
        points, _ = series.read_points_cells()
        steps = [series.read_data(k) for k in range(series.num_steps)]
    part = steps[0][2]["part"][0]
    assert np.allclose([s[0] for s in steps], np.arange(7) / 6)
    assert not steps[0][1]["u"].any()
    bore = np.hypot(points[:, 0], points[:, 1]) < 0.00801
    turned = points[bore] @ np.array([[0.0, 1.0, 0.0], [-1.0, 0.0, 0.0], [0.0, 0.0, 1.0]])
    assert np.abs(points[bore] + steps[-1][1]["u"][bore] - turned).max() < 1e-12
    largest = [np.abs(reference["lever.green_lagrange"][part == p]).max() for p in (1, 2)]
    assert 0.03 < largest[0] < 0.06
    assert largest[1] < 0.005
    assert np.abs(reference["lever.strain"]).max() > 0.9


@pytest.mark.source("felupe and scikit-fem: the solves of sample_meshes/make.py, done again")
def test_script_makes_the_same_files(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, reference: dict[str, Array]
) -> None:
    monkeypatch.syspath_prepend(str(FOLDER.parent))
    importlib.import_module("sample_meshes.make").main(tmp_path)
    for name in RESULTS:
        points, cells, displacement, _ = load(name)
        again = load(name, tmp_path)
        assert np.array_equal(again[1], cells)
        assert np.abs(again[0] - points).max() < 1e-12
        assert np.abs(again[2] - displacement).max() < 1e-8 * np.abs(displacement).max()
    with np.load(tmp_path / "reference.npz") as made:
        assert set(made) == set(reference)
        for name, values in made.items():
            assert np.abs(values - reference[name]).max() < 1e-8 * np.abs(reference[name]).max()
