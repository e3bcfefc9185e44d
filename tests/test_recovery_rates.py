"""How fast recovered gradients approach the exact ones, and folds of surfaces."""

from __future__ import annotations

import numpy as np
import pytest

import meshes
from recovery_meshes import block, model_of, one_group, smooth
from unturn.elements import ELEMENTS
from unturn.gradient import displacement_gradient
from unturn.model import build_model
from unturn.recovery import node_shares, recover_gradient, recover_samples, sample_cells, sheets
from unturn.result import CellBlock, Result

# Source: Zienkiewicz and Zhu 1992, Int. J. Numer. Meth. Eng. 33, 1331-1364: at corners inside uniformly refined
# structured meshes the recovered gradient converges at least one order faster than the element's own (of order p), two
# for quadratic elements; on irregular meshes only a smaller error is claimed.
SIZES = {2: (8, 16, 32), 3: (4, 6, 8)}
NAMES = ["triangle", "quad", "triangle6", "triangle7", "quad8", "quad9", "tetra", "hexahedron", "wedge", "tetra10",
         "hexahedron20", "hexahedron27", "wedge15", "wedge18"]  # fmt: skip


def errors(mesh: meshes.Mesh, n: int, method: str = "patch") -> tuple[float, float, float]:
    """RMS error of the raw gradient at the nodes of every cell, of the recovered one at corners and at other nodes.

    Corners inside, whose patches are as meant; other nodes between two such.
    """
    row = mesh.element
    u, exact = smooth(mesh.points, row.dim)
    found = recover_gradient(model_of(mesh, u), np.zeros(len(mesh.cells), dtype=int), method)  # type: ignore[arg-type]
    off = np.sqrt(((found.H - exact) ** 2).sum(axis=(0, 1)))
    x = mesh.points[:, : row.dim]
    inside = ((x > 0.9 / n) & (x < 1 - 0.9 / n)).all(axis=1)
    corner = np.zeros(len(x), dtype=bool)
    corner[mesh.cells[:, : row.n_corners]] = True
    raw = displacement_gradient(mesh.points, mesh.cells, u, mesh.cell_type, at=row.nodes)
    raw_off = ((raw - np.moveaxis(exact, -1, 0)[mesh.cells]) ** 2).sum(axis=(-1, -2))
    deep = inside[mesh.cells].all(axis=1)
    between = off[inside & ~corner]
    return (
        float(np.sqrt(raw_off[deep].mean())),
        float(np.sqrt((off[inside & corner] ** 2).mean())),
        float(np.sqrt((between**2).mean())) if len(between) else 0.0,
    )


@pytest.mark.source("Zienkiewicz and Zhu 1992, Int. J. Numer. Meth. Eng. 33, 1331-1364")
@pytest.mark.parametrize("name", NAMES)
def test_corners_inside_a_structured_mesh(name: str) -> None:
    row = ELEMENTS[name]
    n = np.array(SIZES[row.dim])
    found = np.array([errors(block(row, int(k)), int(k)) for k in n])
    rates = np.log(found[:-1, :2] / found[1:, :2]) / np.log(n[1:] / n[:-1])[:, None]
    table = "\n".join(
        f"n={k:3d} raw {r:.3e} corners {c:.3e} between {b:.3e}" for k, (r, c, b) in zip(n, found)
    )
    table += f"\norders\n{rates.round(2)}"
    assert abs(rates[-1, 0] - row.order) < 0.4, table
    assert rates[-1, 1] > row.order + 0.85, table
    assert found[-1, 1] < found[-1, 0] / 8, table
    assert found[-1, 2] < found[-1, 0] / 5, table


@pytest.mark.source("Zienkiewicz and Zhu 1992, Int. J. Numer. Meth. Eng. 33, 1331-1364")
@pytest.mark.parametrize("name", NAMES)
def test_irregular_meshes(name: str) -> None:
    row = ELEMENTS[name]
    n = 12 if row.dim == 2 else 5
    mesh = block(row, n, 0.2)
    raw, corners, between = errors(mesh, n)
    _, averaged, _ = errors(mesh, n, "average")
    assert corners < 0.35 * raw
    assert between < 0.5 * raw
    assert corners < 0.75 * averaged


@pytest.mark.derived(
    "on borders the derivative along the edges is that of the nodes: less error than patches inside alone"
)
@pytest.mark.parametrize("move", [0.0, 0.2])
@pytest.mark.parametrize("name", [*NAMES, "pyramid"])
def test_borders_are_better_than_the_patches_inside(name: str, move: float) -> None:
    row = ELEMENTS[name]
    mesh = block(row, 8 if row.dim == 2 else 3, move)
    u, exact = smooth(mesh.points, row.dim)
    model = model_of(mesh, u)
    shares, samples = node_shares(model, one_group(model)), sample_cells(model)
    x = mesh.points[:, : row.dim]
    border = ((x < 1e-9) | (x > 1 - 1e-9)).any(axis=1)
    off = []
    for borders in (False, True):
        H = recover_samples(shares, samples, borders=borders).H
        off.append(np.sqrt(((H - exact)[..., border] ** 2).sum(axis=(0, 1)).mean()))
    assert off[1] < 0.85 * off[0]


@pytest.mark.derived("borders take the patches inside: their error falls with the size of the cells")
@pytest.mark.parametrize("name", ["triangle", "quad", "quad8", "tetra", "hexahedron", "tetra10"])
def test_borders(name: str) -> None:
    row = ELEMENTS[name]
    found = []
    for n in (6, 12):
        mesh = block(row, n, 0.1)
        u, exact = smooth(mesh.points, row.dim)
        x = mesh.points[:, : row.dim]
        border = ((x < 1e-9) | (x > 1 - 1e-9)).any(axis=1)
        off = []
        for method in ("patch", "average"):
            H = recover_gradient(model_of(mesh, u), np.zeros(len(mesh.cells), dtype=int), method).H  # type: ignore[arg-type]
            off.append(np.sqrt(((H - exact)[..., border] ** 2).sum(axis=(0, 1)).mean()))
        found.append(off)
    (coarse, _), (fine, average) = found
    assert fine < 0.4 * average
    assert np.log2(coarse / fine) > row.order + 0.5 if row.order == 1 else np.log2(coarse / fine) > 2


class TestSheets:
    def folded(self, degrees: float, seed: int = 0, name: str = "quad") -> tuple[Result, np.ndarray]:
        """Two strips that meet at x = 0 under an angle, cells numbered either way round; which side each cell is on."""
        flat = block(ELEMENTS[name], 6)
        s, y = 2 * flat.points[:, 0] - 1, flat.points[:, 1]
        bend = np.radians(degrees)
        points = np.stack([np.where(s < 0, s, s * np.cos(bend)), y, np.where(s < 0, 0, s * np.sin(bend))], 1)
        random = np.random.default_rng(seed)
        cells = flat.cells.copy()
        for k in range(len(cells)):
            if name == "triangle":
                cells[k] = np.roll(cells[k], random.integers(3))
            turned = random.random() < 0.5
            if turned and name in ("quad", "triangle"):
                cells[k] = cells[k][::-1]
        strain = np.where(s < 0, 1e-3, -2e-3)
        along = np.stack([np.where(s < 0, 1, np.cos(bend)), 0 * s, np.where(s < 0, 0, np.sin(bend))], 1)
        side = (s[cells].mean(axis=1) > 0).astype(int)
        u = along * (strain * s)[:, None]
        u[:, 1] += 1e-4 * y
        block_ = CellBlock(name, cells, np.arange(len(cells)))
        return Result(points, (block_,), point_data={"u": u}), side

    @pytest.mark.derived("angle between the planes")
    @pytest.mark.parametrize("name", ["quad", "triangle", "quad8", "triangle6"])
    @pytest.mark.parametrize(("degrees", "parts"), [(10, 1), (39, 1), (41, 2), (90, 2), (150, 2), (175, 2)])
    def test_cut_above_the_angle(self, degrees: float, parts: int, name: str) -> None:
        result, side = self.folded(degrees, name=name)
        found = sheets(build_model(result), one_group(build_model(result)))
        assert len(np.unique(found)) == parts
        if parts == 2:
            assert np.unique(np.stack([found, side]), axis=1).shape[1] == 2
        assert len(np.unique(sheets(build_model(result), side))) == 2
        assert (
            len(np.unique(sheets(build_model(result), one_group(build_model(result)), angle=degrees + 2)))
            == 1
        )

    def test_values_on_both_sides_of_a_fold(self) -> None:
        result, side = self.folded(90)
        model = build_model(result)
        found = recover_gradient(model, sheets(model, np.zeros(len(side), dtype=int)))
        fold = np.abs(result.points[:, [0, 2]]).max(axis=1) < 1e-9
        assert (found.jump[fold] > 2e-3).all()
        assert found.jump[~fold].max() < 1e-12
        e = found.values[:, :, found.shares.point == np.flatnonzero(fold)[0]]
        assert sorted([e[0, 0].max(), e[2, 2].min()]) == pytest.approx([-2e-3, 1e-3])

    @pytest.mark.derived("a smooth cylinder of few curved cells has no fold")
    def test_coarse_curved_cells_are_not_cut(self) -> None:
        for name, parts in (
            ("quad9", 1),
            ("quad", 4),
        ):  # 45 degrees from the middle of a cell to that of the next
            mesh = block(ELEMENTS[name], 4)
            angle = np.pi * mesh.points[:, 0]
            mesh = mesh._replace(points=np.stack([np.cos(angle), mesh.points[:, 1], np.sin(angle)], 1))
            model = build_model(mesh.result(u=np.zeros(mesh.points.shape)))
            assert len(np.unique(sheets(model, one_group(model)))) == parts

    def test_three_plates_that_meet(self) -> None:
        """The two that go on straight are one sheet, the third stands alone."""
        points = np.array([(x, y, 0.0) for y in (0, 1) for x in (-1, 0, 1)] + [(0, y, 1.0) for y in (0, 1)])
        cells = CellBlock("quad", np.array([[0, 1, 4, 3], [1, 4, 7, 6], [1, 2, 5, 4]]), np.arange(3))
        model = build_model(Result(points, (cells,), point_data={"u": points * 1e-3}))
        found = sheets(model, np.zeros(3, dtype=int))
        assert found[0] == found[2] != found[1]

    def test_lines_are_cut_at_kinks(self) -> None:
        points = np.array([(0.0, 0, 0), (1, 0, 0), (2, 0.1, 0), (2, 1, 0)])
        cells = CellBlock("line", np.array([[0, 1], [2, 1], [2, 3]]), np.arange(3))
        model = build_model(Result(points, (cells,), point_data={"u": points * 1e-3}))
        found = sheets(model, np.zeros(3, dtype=int))
        assert found[0] == found[1] != found[2]

    def test_solids_and_plane_meshes_keep_their_groups(self) -> None:
        for name in ("hexahedron", "quad"):
            mesh = block(ELEMENTS[name], 2)
            model = model_of(mesh, np.zeros(mesh.points.shape))
            groups = np.arange(len(mesh.cells)) % 2 * 7 - 3
            np.testing.assert_array_equal(sheets(model, groups), (groups > 0).astype(int))
