"""A result made ready: what is plane, what is left out, what is refused, whatever the file holds."""

from __future__ import annotations

from dataclasses import replace
from typing import Any, Literal

import numpy as np
import pytest

import meshes
from unturn.elements import ELEMENTS, FAMILIES, element
from unturn.errors import InputError, UnturnError, UsageError
from unturn.fields import compute_fields
from unturn.midside import misplaced_mid_nodes
from unturn.model import PlaneOptions, build_model
from unturn.result import CellBlock, Result

# Derived: what the design of the model states; no number of this file comes from outside unless a check says so.


def still(mesh: meshes.Mesh, **changes: Any) -> Result:
    return replace(mesh.result(u=np.zeros(mesh.points.shape)), **changes)


def mixed(points: np.ndarray, *blocks: tuple[str, list[list[int]]], **changes: Any) -> Result:
    """A result of several blocks whose cells follow each other in the file."""
    made, start = [], 0
    for name, cells in blocks:
        made.append(CellBlock(name, np.array(cells), np.arange(start, start + len(cells))))
        start += len(cells)
    data = {"u": np.zeros(points.shape)} | changes.pop("point_data", {})
    return Result(points, tuple(made), point_data=data, **changes)


CUBE = meshes.CUBE[:8]
BRICK = list(range(8))
FACES = [[0, 3, 2, 1], [4, 5, 6, 7]]


class TestPlane:
    quad = meshes.patch(ELEMENTS["quad"])

    @pytest.mark.parametrize(("normal", "other"), [(0, (1, 2)), (1, (0, 2)), (2, (0, 1))])
    def test_any_coordinate_plane_is_found(self, normal: int, other: tuple[int, int]) -> None:
        points = np.full(self.quad.points.shape, 1234.5)
        points[:, other] = self.quad.points[:, :2]
        model = build_model(still(self.quad._replace(points=points)))
        assert model.plane is not None
        assert model.plane.normal == normal
        assert {b.kind for b in model.blocks} == {"plane"}

    def test_a_slanted_sheet_is_a_surface(self) -> None:
        points = self.quad.points.copy()
        points[:, 2] = 0.01 * points[:, 0]
        model = build_model(still(self.quad._replace(points=points)))
        assert model.plane is None
        assert {b.kind for b in model.blocks} == {"surface"}
        with pytest.raises(UsageError, match="one coordinate plane"):
            build_model(still(self.quad._replace(points=points)), plane=PlaneOptions("strain"))

    def test_a_sheet_that_moves_across_is_a_surface_unless_told(self) -> None:
        u = np.zeros(self.quad.points.shape)
        u[3] = [1e-3, 0, 2e-3]
        assert build_model(self.quad.result(u=u)).plane is None
        told = build_model(self.quad.result(u=u), plane=PlaneOptions("strain"))
        assert told.plane is not None
        assert any("0.002" in note for note in told.notes)
        assert not told.fields.rows[5].any()

    @pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
    @pytest.mark.parametrize("component", [0, 2])
    def test_one_bad_value_does_not_decide(self, bad: float, component: int) -> None:
        u = np.zeros(self.quad.points.shape)
        u[:, 2] = 1e-3
        u[0, component] = bad
        assert build_model(self.quad.result(u=u)).plane is None
        flat = np.zeros(self.quad.points.shape)
        flat[:, 0] = 1e-3
        flat[0, component] = bad
        assert build_model(self.quad.result(u=flat)).plane is not None

    def test_nodes_of_no_cell_do_not_decide(self) -> None:
        points = np.concatenate([self.quad.points, [[0, 0, 7.0], [np.nan] * 3, [np.inf, 1e300, 0]]])
        assert build_model(still(self.quad._replace(points=points))).plane is not None

    def test_solids_are_never_plane(self) -> None:
        with pytest.raises(UsageError, match="two-dimensional"):
            build_model(still(meshes.patch(ELEMENTS["tetra"])), plane=PlaneOptions("strain"))

    def test_plane_stress_needs_poisson(self) -> None:
        with pytest.raises(UsageError, match="--poisson"):
            build_model(still(self.quad), plane=PlaneOptions("stress"))

    @pytest.mark.parametrize("nu", [-1.0, 0.51, 1.0, float("nan")])
    def test_impossible_poisson(self, nu: float) -> None:
        with pytest.raises(UsageError, match=r"between -1 and 0\.5"):
            build_model(still(self.quad), plane=PlaneOptions("stress", nu))

    @pytest.mark.parametrize("axis", ["x", "y"])
    def test_a_mesh_across_the_axis_is_refused(self, axis: Literal["x", "y"]) -> None:
        points = self.quad.points - [0.1, 0.05, 0]
        with pytest.raises(UsageError, match="across the axis"):
            build_model(
                still(self.quad._replace(points=points)), plane=PlaneOptions("axisymmetric", axis=axis)
            )

    def test_an_axis_across_the_plane_is_refused(self) -> None:
        points = self.quad.points[:, [0, 2, 1]]
        with pytest.raises(UsageError, match="in the plane"):
            build_model(
                still(self.quad._replace(points=points)), plane=PlaneOptions("axisymmetric", axis="y")
            )

    def test_measures_across_an_unstated_plane_are_refused(self) -> None:
        model = build_model(still(self.quad))
        with pytest.raises(UsageError, match="equivalent_strain, principal_strain depend") as caught:
            compute_fields(model)
        assert caught.value.exit_status == 2
        assert set(compute_fields(model, ["strain", "rotation"]).arrays) == {"strain", "rotation"}


class TestSkins:
    def test_faces_and_edges_of_a_solid_are_left_out(self) -> None:
        result = mixed(CUBE, ("hexahedron", [BRICK]), ("quad", FACES), ("line", [[0, 1], [0, 6]]))
        model = build_model(result)
        assert {k: v.tolist() for k, v in model.left_out.items()} == {
            "skins and edges of other cells": [1, 2, 3, 4]
        }
        fields = compute_fields(model, ["strain"])
        assert np.isnan(fields.arrays["strain"]).all(axis=1).tolist() == [False, True, True, True, True]

    def test_skin_on_request(self) -> None:
        model = build_model(mixed(CUBE, ("hexahedron", [BRICK]), ("quad", FACES)), skin=True)
        assert not model.left_out
        assert [b.kind for b in model.blocks] == ["solid", "surface"]

    def test_a_shell_between_solids_is_no_skin(self) -> None:
        points = np.concatenate([CUBE, CUBE + np.array([0, 0, 3.0])])
        joined = [[4, 5, 9, 8]]  # two nodes of one solid, two of the other
        result = mixed(points, ("hexahedron", [BRICK, [8 + n for n in BRICK]]), ("quad", joined))
        assert not build_model(result).left_out

    def test_a_bar_across_two_solids_is_no_edge(self) -> None:
        points = np.concatenate([CUBE, CUBE + np.array([0, 0, 3.0])])
        result = mixed(points, ("hexahedron", [BRICK, [8 + n for n in BRICK]]), ("line", [[6, 8], [4, 5]]))
        assert build_model(result).left_out["skins and edges of other cells"].tolist() == [3]

    def test_edges_of_shells_are_edges(self) -> None:
        result = mixed(CUBE, ("quad", [[0, 1, 2, 3]]), ("line", [[0, 1], [0, 4]]))
        assert build_model(result).left_out["skins and edges of other cells"].tolist() == [1]

    def test_quadratic_faces_of_a_quadratic_solid(self) -> None:
        solid = meshes.patch(ELEMENTS["hexahedron20"])
        face = solid.cells[0][list(ELEMENTS["hexahedron20"].face_nodes[0].nodes)]
        result = mixed(solid.points, ("hexahedron20", solid.cells.tolist()), ("quad8", [face.tolist()]))
        assert build_model(result).left_out["skins and edges of other cells"].tolist() == [len(solid.cells)]


class TestLeftOut:
    def test_cells_that_cannot_be_computed_are_named(self) -> None:
        result = mixed(CUBE, ("vertex", [[0], [1]]), ("hexahedron", [BRICK]), ("polygon5", [[0, 1, 2, 6, 3]]))
        model = build_model(result)
        reasons = {k: v.tolist() for k, v in model.left_out.items()}
        assert sorted(map(tuple, reasons.values())) == [(0, 1), (3,)]
        assert any("vertex" in k for k in reasons)
        assert [b.kind for b in model.blocks] == [None, "solid", None]

    def test_nothing_to_compute(self) -> None:
        with pytest.raises(InputError, match="no element of this mesh can be computed") as caught:
            build_model(mixed(CUBE, ("vertex", [[0]])))
        assert caught.value.exit_status == 3

    def test_deleted_cells(self) -> None:
        points = np.concatenate([CUBE, CUBE + 2])
        cells = [BRICK, [8 + n for n in BRICK]]
        for alive in (np.array([1, 0]), np.array([[1.0], [0.0]]), np.array([True, False])):
            result = mixed(points, ("hexahedron", cells), cell_data={"status": alive})
            assert build_model(result, alive="status").left_out["deleted"].tolist() == [1]
        result = mixed(
            points, ("hexahedron", cells), cell_data={"status": np.zeros(2), "two": np.zeros((2, 2))}
        )
        with pytest.raises(InputError, match="every cell is left out"):
            build_model(result, alive="status")
        with pytest.raises(UsageError, match="no cell array is called 'alive'"):
            build_model(result, alive="alive")
        with pytest.raises(UsageError, match="more than one component"):
            build_model(result, alive="two")

    def test_what_the_reader_left_out_is_counted_once(self) -> None:
        points = np.concatenate([CUBE, CUBE + 2])
        result = mixed(
            points, ("hexahedron", [BRICK, [8 + n for n in BRICK]]), ("quad", [[0, 3, 2, 1]]),
            left_out={"ghost": np.array([1]), "hidden": np.array([1, 2])}, cell_data={"status": np.array([1, 0, 1])},
        )  # fmt: skip
        model = build_model(result, alive="status")
        assert {k: v.tolist() for k, v in model.left_out.items()} == {"ghost": [1], "hidden": [2]}


@pytest.mark.derived("deformed coordinates x = X + u: the gradient is that of X = x - u")
def test_deformed_coordinates() -> None:
    mesh = meshes.curved(meshes.patch(ELEMENTS["hexahedron20"]))
    H = np.random.default_rng(0).uniform(-0.2, 0.2, (3, 3))
    u = mesh.points @ H.T
    moved = mesh._replace(points=mesh.points + u).result(u=u)
    found = compute_fields(build_model(moved, coordinates="deformed"), ["displacement_gradient"])
    expected = np.broadcast_to(H.reshape(9), (len(mesh.cells), 9))
    np.testing.assert_allclose(found.arrays["displacement_gradient"], expected, atol=1e-12)
    wrong = compute_fields(build_model(moved), ["displacement_gradient"]).arrays["displacement_gradient"]
    assert np.abs(wrong - expected).max() > 1e-3


ORDERS = {
    # 20-node brick with the vertical edges before the top ones
    "hexahedron20": [*range(12), 16, 17, 18, 19, 12, 13, 14, 15],
    # 10-node tetrahedron with the last two swapped
    "tetra10": [*range(8), 9, 8],
    # 15-node wedge with the vertical edges before the top ones
    "wedge15": [*range(9), 12, 13, 14, 9, 10, 11],
    "pyramid13": [*range(5), 9, 10, 11, 12, 5, 6, 7, 8],
    "triangle6": [0, 1, 2, 5, 3, 4],
    "quad8": [0, 1, 2, 3, 7, 4, 5, 6],
    # corners and mid-side nodes alternate
    "quad9": [0, 4, 1, 5, 2, 6, 3, 7, 8],
    "line3": [0, 2, 1],
    # the faces' nodes in another order; all edges are right
    "hexahedron27": [*range(20), 24, 25, 20, 21, 22, 23, 26],
    "wedge18": [*range(15), 16, 17, 15],
}


class TestNodeOrder:
    """Source: node orders of other formats, as the VTK and meshio documentation state them; here as permutations."""

    @pytest.mark.parametrize("name", ORDERS)
    @pytest.mark.parametrize("bend", [False, True], ids=["straight", "curved"])
    def test_another_node_order_is_refused(self, name: str, bend: bool) -> None:
        mesh = meshes.patch(ELEMENTS[name])
        mesh = meshes.curved(mesh) if bend else mesh
        build_model(still(mesh))  # the right order passes
        with pytest.raises(InputError, match="mid-side nodes far from") as caught:
            build_model(still(mesh._replace(cells=mesh.cells[:, ORDERS[name]])))
        assert caught.value.exit_status == 3

    @pytest.mark.parametrize("name", [n for n, row in ELEMENTS.items() if row.n_nodes > row.n_corners])
    def test_right_orders_pass_wherever_the_origin_is(self, name: str) -> None:
        mesh = meshes.curved(meshes.patch(ELEMENTS[name]))
        for offset in (0.0, 5e5):
            model = build_model(still(mesh._replace(points=mesh.points + offset)))
            assert not model.notes

    @pytest.mark.parametrize("name", [*FAMILIES])
    @pytest.mark.parametrize("order", [2, 3, 4])
    @pytest.mark.parametrize("spacing", ["equal", "gll"])
    def test_lagrange_cells_pass(self, name: str, order: int, spacing: Literal["equal", "gll"]) -> None:
        row = element(name, FAMILIES[name].n_nodes(order), spacing)
        mesh = meshes.patch(row)
        assert not build_model(still(mesh)).notes

    @pytest.mark.source(
        "quarter-point nodes of crack-tip elements: Barsoum 1976, Int. J. Numer. Meth. Eng. 10, 25-37"
    )
    def test_quarter_point_nodes_pass(self) -> None:
        row = ELEMENTS["quad8"]
        points = np.pad(row.nodes, ((0, 0), (0, 1))).copy()
        points[4, 0], points[6, 0] = -0.5, -0.5  # a quarter of the edge from the corners 0 and 3
        assert not build_model(still(meshes.Mesh(points, np.arange(8)[None], row))).notes

    def test_a_few_odd_cells_are_named_and_computed(self) -> None:
        mesh = meshes.patch(ELEMENTS["quad8"])
        cells = mesh.cells.copy()
        cells[3] = cells[3][ORDERS["quad8"]]
        model = build_model(still(mesh._replace(cells=cells)))
        assert any("1 of 5 quad8 cells" in note and "cell 3" in note for note in model.notes)

    @pytest.mark.parametrize("dtype", [np.float32, np.float64])
    def test_collapsed_quadratic_bricks_pass(self, dtype: type) -> None:
        row = ELEMENTS["hexahedron20"]
        points = (row.nodes * [1, 1, 1] + 0.3).astype(dtype)
        points[[3, 7]] = points[[2, 6]]  # a wedge: the edges 2-3 and 6-7 have no length
        points[19], points[10], points[14] = points[18], points[2] + dtype(1e-8), points[6]
        points[11] = (points[0] + points[3]) / 2
        points[15] = (points[4] + points[7]) / 2
        found = misplaced_mid_nodes(points.astype(float), np.arange(20)[None], row)
        assert found.count == 0


class TestRefusals:
    @pytest.mark.parametrize(
        ("name", "n"), [("tetra10", 9), ("hexahedron", 7), ("VTK_LAGRANGE_TETRAHEDRON", 11)]
    )
    def test_a_wrong_number_of_nodes_names_the_cell(self, name: str, n: int) -> None:
        points = np.random.default_rng(0).uniform(size=(20, 3))
        result = mixed(points, ("vertex", [[0]]), (name, [list(range(n))]))
        with pytest.raises(InputError, match=rf"cell 1: a {name} cell has .*{n} were found"):
            build_model(result)

    @pytest.mark.parametrize("bad", [-1, 8])
    def test_connectivity_out_of_range_names_the_cell(self, bad: int) -> None:
        with pytest.raises(InputError, match=f"cell 0 .*refers to node {bad}"):
            mixed(CUBE, ("hexahedron", [[0, 1, 2, 3, 4, 5, 6, bad]]))

    def test_no_cells(self) -> None:
        with pytest.raises(InputError, match="no cells"):
            Result(CUBE, (), point_data={"u": CUBE})

    def test_short_arrays(self) -> None:
        with pytest.raises(InputError, match="has 7 rows; the mesh has 8 points"):
            mixed(CUBE, ("hexahedron", [BRICK]), point_data={"u": CUBE[:7]})

    def test_every_refusal_has_its_exit_status(self) -> None:
        assert {e.exit_status for e in (UnturnError, UsageError, InputError)} == {70, 2, 3}
