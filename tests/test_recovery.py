"""Recovery at nodes where the answer is known: exact fields, borders, coincident nodes, odd elements."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

import meshes
from recovery_meshes import block, model_of, one_group, smooth
from unturn.elements import ELEMENTS, FAMILIES, Element, element
from unturn.errors import UsageError
from unturn.model import Model, PlaneOptions, build_model
from unturn.recovery import METHODS, node_shares, recover_gradient, recover_samples, sample_cells
from unturn.recovery._average import extrapolation
from unturn.result import CellBlock, Result
from unturn.rigid import take_out

ROWS = [
    *ELEMENTS.values(),
    *(element(f"VTK_LAGRANGE_{name}", FAMILIES[f"VTK_LAGRANGE_{name}"].n_nodes(3)) for name in
      ("CURVE", "TRIANGLE", "QUADRILATERAL", "TETRAHEDRON", "WEDGE")),
]  # fmt: skip
NAMES = [f"{row.name}-{row.n_nodes}" for row in ROWS]
LINEAR = np.random.default_rng(0).normal(size=(9, 3))
CONSTANT = np.random.default_rng(1).normal(size=9)


def linear(x: np.ndarray) -> np.ndarray:
    """A gradient field `(9, n)` that is linear in the place."""
    return LINEAR @ x.T + CONSTANT[:, None]


def distorted(row: Element) -> meshes.Mesh:
    if row.shape.name in ("pixel", "voxel"):  # axis-parallel by definition: unequal steps
        mesh = block(row, 3)
        return mesh._replace(points=np.abs(mesh.points) ** 1.5)
    mesh = block(row, 3 if row.dim == 3 else 4, 0.2, border=True)
    return mesh if row.dim == 1 or row.order == 1 else meshes.curved(mesh, 0.01)


def prescribed(mesh: meshes.Mesh, origin: float = 0.0):  # type: ignore[no-untyped-def]
    """Shares and samples of a mesh, with a linear field in place of the sampled gradients."""
    model = model_of(mesh._replace(points=mesh.points + origin), np.zeros(mesh.points.shape))
    samples = sample_cells(model)
    H = linear((samples.x + samples.origin[:, None] - origin).T)
    return node_shares(model, one_group(model)), replace(samples, H=H)


class TestExact:
    """Source: Zienkiewicz and Zhu 1992: the recovery is exact when the sampled gradients are those of a polynomial."""

    @pytest.mark.source("Zienkiewicz and Zhu 1992, Int. J. Numer. Meth. Eng. 33, 1331-1364")
    @pytest.mark.parametrize("row", ROWS, ids=NAMES)
    def test_linear_samples_on_a_distorted_patch(self, row: Element) -> None:
        mesh = distorted(row)
        found = recover_samples(*prescribed(mesh))
        np.testing.assert_allclose(found.H.reshape(9, -1), linear(mesh.points), atol=1e-11)
        assert list(found.fallback.values())[1:] == [0, 0]

    @pytest.mark.derived("complete polynomials are kept by a change of origin and by stretching an axis")
    @pytest.mark.parametrize("name", ["triangle", "quad8", "tetra", "tetra10", "hexahedron", "hexahedron20"])
    def test_thin_cells_far_from_the_origin(self, name: str) -> None:
        mesh = block(ELEMENTS[name], 3, 0.2)
        mesh = mesh._replace(
            points=mesh.points * ([1.0, 1e-4, 1.0] if mesh.element.dim == 3 else [1, 1e-4, 0])
        )
        shares, samples = prescribed(mesh)
        x = (samples.x + samples.origin[:, None]) * np.array([[1.0], [1e4], [1.0]])
        found = recover_samples(shares, replace(samples, H=linear(x.T)))
        np.testing.assert_allclose(found.H.reshape(9, -1), linear(mesh.points * [1, 1e4, 1]), atol=1e-8)
        far = recover_samples(
            *prescribed(block(ELEMENTS[name], 3, 0.2), 5e5 if mesh.element.dim == 3 else 0.0)
        )
        near = linear(block(ELEMENTS[name], 3, 0.2).points)
        np.testing.assert_allclose(far.H.reshape(9, -1), near, atol=1e-8)  # positions hold 6e-11

    @pytest.mark.derived("a displacement that the element holds has the exact gradient at every point")
    @pytest.mark.parametrize(
        "row", [r for r in ROWS if r.order > 1], ids=[n for r, n in zip(ROWS, NAMES) if r.order > 1]
    )
    def test_quadratic_displacement(self, row: Element) -> None:
        mesh = block(row, 3)
        shear = np.eye(3)
        shear[: row.dim, : row.dim] += np.random.default_rng(2).uniform(-0.2, 0.2, (row.dim, row.dim))
        mesh = mesh._replace(points=mesh.points @ shear.T)
        x = mesh.points
        if row.dim == 1:
            along = x[0 if np.abs(x[0]).sum() else -1] / np.linalg.norm(x[-1])
            s = x @ along
            found = recover_gradient(model_of(mesh, s[:, None] ** 2 * along), one_group(model_of(mesh, x)))
            np.testing.assert_allclose(found.H, 2 * s * np.outer(along, along)[..., None], atol=1e-12)
            return
        Q = np.random.default_rng(3).normal(size=(3, 3, 3))
        Q[row.dim :] = Q[:, row.dim :] = Q[:, :, row.dim :] = 0.0
        u = np.einsum("ijk,nj,nk->ni", Q, x, x)
        H = np.einsum("ijk,nk->ijn", Q + Q.swapaxes(1, 2), x)
        model = model_of(mesh, u)
        for method in ("patch", "extrapolate"):
            found = recover_gradient(model, one_group(model), method)
            np.testing.assert_allclose(found.H, H, atol=1e-11)

    @pytest.mark.derived("a surface that is flat in a slanted plane has the polynomial of the plane")
    @pytest.mark.parametrize("name", ["triangle", "triangle6", "quad", "quad9"])
    def test_slanted_surface(self, name: str) -> None:
        mesh = block(ELEMENTS[name], 4, 0.2)
        turn = np.linalg.qr(np.random.default_rng(5).normal(size=(3, 3)))[0]
        mesh = mesh._replace(points=mesh.points @ turn.T)
        model = build_model(mesh.result(u=mesh.points * [1e-3, 0, 0]))
        assert {b.kind for b in model.blocks} == {"surface"}
        samples = sample_cells(model)
        H = linear((samples.x + samples.origin[:, None]).T)
        found = recover_samples(node_shares(model, one_group(model)), replace(samples, H=H))
        np.testing.assert_allclose(found.H.reshape(9, -1), linear(mesh.points), atol=1e-11)

    @pytest.mark.derived(
        "averages keep a constant; least squares through a linear field extrapolate it exactly"
    )
    @pytest.mark.parametrize("row", ROWS, ids=NAMES)
    def test_extrapolation_of_an_element(self, row: Element) -> None:
        table = extrapolation(row)
        np.testing.assert_allclose(table.sum(axis=1), 1.0, atol=1e-12)
        if row.order > 1:
            np.testing.assert_allclose(table @ row.accurate.points, row.nodes, atol=1e-12)

    @pytest.mark.derived("the mean over the cells at a node, weighted by their volume")
    def test_average_by_hand(self) -> None:
        points = np.array([[0.0, 0, 0], [1, 0, 0], [4, 0, 0]])
        cells = CellBlock("line", np.array([[0, 1], [1, 2]]), np.arange(2))
        result = Result(points, (cells,), point_data={"u": np.array([[0.0, 0, 0], [0.1, 0, 0], [0.7, 0, 0]])})
        found = recover_gradient(build_model(result), np.zeros(2, dtype=int), "average")
        np.testing.assert_allclose(found.H[0, 0], [0.1, (0.1 + 3 * 0.2) / 4, 0.2], atol=1e-15)
        np.testing.assert_allclose(found.weight, [0.5, 2.0, 1.5], atol=1e-15)


class TestBorders:
    def bar(self, n: int = 6) -> tuple[meshes.Mesh, np.ndarray, np.ndarray]:
        """A bar of two materials along x: e_xx 1e-3 left of 0.5, 3e-3 right of it."""
        mesh = block(ELEMENTS["hexahedron"], n)
        x = mesh.points[:, 0]
        u = np.zeros(mesh.points.shape)
        u[:, 0] = np.where(x < 0.5, 1e-3 * x, 0.5e-3 + 3e-3 * (x - 0.5))
        return mesh, u, (mesh.points[mesh.cells][:, :, 0].mean(axis=1) > 0.5).astype(int)

    @pytest.mark.derived("strain of a bar of two materials in series")
    @pytest.mark.parametrize("method", METHODS)
    def test_the_jump_survives(self, method: str) -> None:
        mesh, u, side = self.bar()
        model = model_of(mesh, u)
        found = recover_gradient(model, side, method)  # type: ignore[arg-type]
        at = np.abs(mesh.points[:, 0] - 0.5) < 1e-9
        shares = found.shares
        np.testing.assert_allclose(found.values[0, 0], np.where(shares.group == 0, 1e-3, 3e-3), atol=1e-15)
        np.testing.assert_allclose(found.jump, np.where(at, 2e-3, 0.0), atol=1e-15)
        assert len(shares) == len(mesh.points) + at.sum()
        mixed = recover_gradient(model, one_group(model), method)  # type: ignore[arg-type]
        assert mixed.jump.max() == 0
        assert abs(mixed.H[0, 0, at] - 2e-3).max() < 1e-12

    def test_the_group_with_most_volume_is_written(self) -> None:
        mesh, u, side = self.bar()
        points = mesh.points.copy()
        points[points[:, 0] > 0.5, 0] += 0.3  # the cells right of the border are longer
        found = recover_gradient(model_of(mesh._replace(points=points), u), side + 5)
        at = np.abs(points[:, 0] - 0.5) < 1e-9
        assert (found.group[at] == 6).all()
        assert set(found.group[points[:, 0] < 0.4]) == {5}

    def test_duplicated_points_carry_every_value(self) -> None:
        mesh, u, side = self.bar()
        found = recover_gradient(model_of(mesh, u), side)
        spots = found.shares.spots
        assert len(spots.point) == len(mesh.points) + (np.abs(mesh.points[:, 0] - 0.5) < 1e-9).sum()
        (cells,) = spots.cells
        np.testing.assert_array_equal(spots.point[cells], mesh.cells)
        values = found.values[0, 0, spots.share[cells]]
        np.testing.assert_allclose(values, np.where(side == 0, 1e-3, 3e-3)[:, None] + 0 * values, atol=1e-15)

    @pytest.mark.derived("weights share the volume out")
    @pytest.mark.parametrize("name", ["triangle6", "hexahedron20", "pyramid", "wedge12"])
    def test_weights_sum_to_the_volume(self, name: str) -> None:
        model = model_of(block(ELEMENTS[name], 3), np.zeros((len(block(ELEMENTS[name], 3).points), 3)))
        found = recover_gradient(model, one_group(model))
        assert found.weight.sum() == pytest.approx(1.0, rel=1e-12)


class TestFreeFacets:
    """What the displacement says of the edges of a border."""

    @pytest.mark.derived(
        "u = xy (xyz) has on every edge of the unit cell a constant derivative, and it is that of the nodes"
    )
    @pytest.mark.parametrize("name", ["quad", "hexahedron"])
    def test_one_bilinear_cell(self, name: str) -> None:
        mesh = block(ELEMENTS[name], 1)
        x, y, z = mesh.points.T
        z = z if mesh.element.dim == 3 else np.ones(len(x))
        u = np.zeros(mesh.points.shape)
        u[:, 0] = x * y * z
        found = recover_gradient(model_of(mesh, u), np.zeros(1, dtype=int))
        exact = np.stack([y * z, x * z, x * y])[: mesh.element.dim]
        np.testing.assert_allclose(found.H[0, : mesh.element.dim], exact, atol=1e-14)

    @pytest.mark.derived(
        "along a straight edge the displacement of its nodes has a mean derivative, and the values have it"
    )
    @pytest.mark.parametrize("name", ["triangle", "quad", "tetra", "wedge", "hexahedron", "pyramid"])
    def test_the_residual_along_the_border_falls(self, name: str) -> None:
        mesh = block(ELEMENTS[name], 4, 0.2)
        u = smooth(mesh.points, mesh.element.dim)[0]
        model = model_of(mesh, u)
        shares, samples = node_shares(model, one_group(model)), sample_cells(model)
        ends = np.concatenate([mesh.cells[:, [a, b]] for a, b, _ in mesh.element.edges])
        x = mesh.points[:, : mesh.element.dim]
        faces = np.concatenate([x < 1e-9, x > 1 - 1e-9], axis=1)
        a, b = ends[(faces[ends[:, 0]] & faces[ends[:, 1]]).any(axis=1)].T
        along = mesh.points[b] - mesh.points[a]
        left = []
        for borders in (False, True):
            H = recover_samples(shares, samples, borders=borders).H
            residual = u[b] - u[a] - np.einsum("ije,ej->ei", (H[..., a] + H[..., b]) / 2, along)
            left.append(np.sqrt((residual**2).mean()))
        assert left[1] < 0.6 * left[0]

    def test_only_borders_change(self) -> None:
        mesh = block(ELEMENTS["tetra"], 4, 0.2)
        model = model_of(mesh, smooth(mesh.points, 3)[0])
        shares, samples = node_shares(model, one_group(model)), sample_cells(model)
        plain, shifted = (recover_samples(shares, samples, borders=b).H for b in (False, True))
        border = (np.abs(mesh.points - 0.5) > 0.5 - 1e-9).any(axis=1)
        np.testing.assert_array_equal(plain[..., ~border], shifted[..., ~border])
        assert (np.abs(plain - shifted)[..., border].max(axis=(0, 1)) > 1e-6).all()

    @pytest.mark.derived("e_zz = -nu/(1-nu)(e_xx + e_yy) at every node")
    def test_plane_stress_stays_plane_stress(self) -> None:
        mesh = block(ELEMENTS["quad"], 4, 0.2)
        u = smooth(mesh.points, 2)[0]
        H = recover_gradient(
            build_model(mesh.result(u=u), plane=PlaneOptions("stress", 0.3)), np.zeros(16, dtype=int)
        ).H
        np.testing.assert_allclose(H[2, 2], -0.3 / 0.7 * (H[0, 0] + H[1, 1]), atol=1e-13)


class TestCoincident:
    def duplicated(self) -> tuple[meshes.Mesh, meshes.Mesh]:
        mesh = block(ELEMENTS["hexahedron"], 3, 0.1)
        return mesh, mesh._replace(
            points=mesh.points[mesh.cells.reshape(-1)],
            cells=np.arange(mesh.cells.size).reshape(mesh.cells.shape),
        )

    @pytest.mark.derived("nodes written once per element are one node")
    def test_nodes_of_their_own_for_every_element(self) -> None:
        mesh, apart = self.duplicated()
        whole = recover_gradient(model_of(mesh, smooth(mesh.points, 3)[0]), np.zeros(27, dtype=int))
        found = recover_gradient(model_of(apart, smooth(apart.points, 3)[0]), np.zeros(27, dtype=int))
        np.testing.assert_allclose(found.H, whole.H[..., mesh.cells.reshape(-1)], atol=1e-12)
        assert found.shares.merged == 8 * 27 - 64
        assert found.shares.tolerance == pytest.approx(1e-9)
        assert any("coincident" in note for note in found.notes)
        assert found.weight.sum() == pytest.approx(1.0)

    def test_on_a_border_every_point_keeps_the_value_of_its_own_cells(self) -> None:
        mesh, u, side = TestBorders().bar(4)
        apart = mesh._replace(
            points=mesh.points[mesh.cells.reshape(-1)],
            cells=np.arange(mesh.cells.size).reshape(mesh.cells.shape),
        )
        found = recover_gradient(model_of(apart, u[mesh.cells.reshape(-1)]), side)
        np.testing.assert_allclose(found.H[0, 0], np.repeat(np.where(side == 0, 1e-3, 3e-3), 8), atol=1e-15)
        assert found.jump.max() == pytest.approx(2e-3)

    @pytest.mark.derived("the faces of a crack coincide but move differently")
    def test_the_faces_of_a_crack_stay_apart(self) -> None:
        mesh, u, side = TestBorders().bar(4)
        at = np.flatnonzero(np.abs(mesh.points[:, 0] - 0.5) < 1e-9)
        cells = mesh.cells.copy()
        copy = np.arange(len(mesh.points))
        copy[at] = len(mesh.points) + np.arange(len(at))
        cells[side == 1] = copy[cells[side == 1]]
        points = np.concatenate([mesh.points, mesh.points[at]])
        moved = np.concatenate([u, u[at]])
        moved[np.concatenate([points[: len(u), 0] > 0.6, np.ones(len(at), dtype=bool)])] += [0.1, 0, 0]
        found = recover_gradient(
            model_of(mesh._replace(points=points, cells=cells), moved), np.zeros(64, dtype=int)
        )
        assert found.shares.merged == 0
        assert found.shares.apart == len(at)
        assert found.H[0, 0, at] == pytest.approx(1e-3)
        assert found.H[0, 0, len(mesh.points) :] == pytest.approx(3e-3)


class TestOddCells:
    @pytest.mark.derived("a hexahedron with an edge collapsed holds every linear field")
    def test_collapsed_hexahedra(self) -> None:
        wedges = block(ELEMENTS["wedge"], 3, 0.1)
        cells = wedges.cells[:, [0, 1, 2, 2, 3, 4, 5, 5]]
        mesh = meshes.Mesh(wedges.points, cells, ELEMENTS["hexahedron"])
        H = np.arange(9.0).reshape(3, 3) * 1e-3
        model = model_of(mesh, mesh.points @ H.T)
        for method in METHODS:
            found = recover_gradient(model, one_group(model), method)
            np.testing.assert_allclose(found.H, np.broadcast_to(H[..., None], found.H.shape), atol=1e-14)

    def test_skins_and_free_nodes_are_left_out(self) -> None:
        mesh = block(ELEMENTS["hexahedron"], 2)
        points = np.concatenate([mesh.points, [[9.0, 9, 9]]])
        u = smooth(points, 3)[0]
        solid = CellBlock("hexahedron", mesh.cells, np.arange(8))
        bottom = mesh.cells[np.flatnonzero(np.abs(mesh.points[mesh.cells[:, 0], 2]) < 1e-9)][:, [0, 3, 2, 1]]
        skin = CellBlock("quad", bottom, np.arange(8, 12))
        both = Result(points, (solid, skin), point_data={"u": u})
        found = recover_gradient(build_model(both), np.arange(12) // 8)
        alone = recover_gradient(
            build_model(Result(points, (solid,), point_data={"u": u})), np.zeros(8, dtype=int)
        )
        np.testing.assert_array_equal(found.H, alone.H)
        assert np.isnan(found.H[..., -1]).all()
        assert np.isnan(found.jump[-1])
        assert found.share[-1] == found.group[-1] == -1
        assert found.weight[-1] == 0

    def test_dimensions_are_kept_apart(self) -> None:
        mesh = block(ELEMENTS["hexahedron"], 2)
        points = np.concatenate([mesh.points, [[1.5, 1, 1], [2.0, 1, 1]]])
        n = len(mesh.points)
        end = int(np.flatnonzero((mesh.points == 1).all(axis=1))[0])
        lines = CellBlock("line", np.array([[end, n], [n, n + 1]]), np.array([8, 9]))
        u = points * [1e-3, 0, 0]
        u[n:, 0] += [0.01, 0.02]
        result = Result(
            points, (CellBlock("hexahedron", mesh.cells, np.arange(8)), lines), point_data={"u": u}
        )
        found = recover_gradient(build_model(result), np.zeros(10, dtype=int))
        assert found.H[0, 0, :n] == pytest.approx(1e-3)
        assert found.H[0, 0, n:] == pytest.approx(0.021)
        assert found.jump.max() == 0

    def test_cells_that_cannot_be_used_spoil_nothing(self) -> None:
        mesh = block(ELEMENTS["hexahedron"], 3)
        cells = np.concatenate([mesh.cells, mesh.cells[:1][:, [1, 0, 2, 3, 4, 5, 6, 7]]])  # tangled
        u = smooth(mesh.points, 3)[0]
        lost = int(np.flatnonzero((mesh.points == 1).all(axis=1))[0])
        u[lost] = np.nan
        found = recover_gradient(model_of(mesh._replace(cells=cells), u), np.zeros(28, dtype=int))
        assert found.usable.sum() == 26
        sound = mesh.cells[~(mesh.cells == lost).any(axis=1)]
        alone = recover_gradient(model_of(mesh._replace(cells=sound), u), np.zeros(26, dtype=int))
        np.testing.assert_allclose(found.H, alone.H, atol=1e-13)
        assert np.isnan(found.H[..., lost]).all()

    def test_one_layer_is_counted(self) -> None:
        mesh = block(ELEMENTS["hexahedron"], 4)
        layer = mesh.cells[mesh.points[mesh.cells][:, :, 2].max(axis=1) < 0.3]
        model = model_of(mesh._replace(cells=layer), smooth(mesh.points, 3)[0])
        found = recover_gradient(model, one_group(model))
        lower, average = list(found.fallback.values())[1:]
        assert (lower, average) == (42, 8)  # at the corners of the plate there is one cell
        assert any("42" in note and "linear" in note for note in found.notes)

    def test_unknown_third_direction(self) -> None:
        mesh = block(ELEMENTS["quad8"], 3, 0.1)
        u = smooth(mesh.points, 2)[0]
        found = recover_gradient(build_model(mesh.result(u=u)), np.zeros(9, dtype=int))
        stated = recover_gradient(model_of(mesh, u), np.zeros(9, dtype=int))
        assert np.isnan(found.H[2, 2]).all()
        np.testing.assert_array_equal(found.H[:2], stated.H[:2])


class TestModel:
    def test_a_rigid_motion_taken_out_stays_out(self) -> None:
        mesh = block(ELEMENTS["tetra10"], 2)
        H = np.array([[1e-3, 0, 0], [0, -3e-4, 0], [0, 0, -3e-4]])
        angle = 0.3
        Q = np.array([[np.cos(angle), -np.sin(angle), 0], [np.sin(angle), np.cos(angle), 0], [0, 0, 1]])
        x = mesh.points
        model = model_of(mesh, (x + x @ H.T) @ Q.T - x)
        everything = np.arange(len(mesh.cells))
        clean, _ = take_out(model, [("whole", everything, "whole", everything)], "nonlinear", None)
        found = recover_gradient(clean, one_group(clean))
        np.testing.assert_allclose(found.H, np.broadcast_to(H[..., None], found.H.shape), atol=1e-9)

    @pytest.mark.parametrize("name", ["tetra", "hexahedron20"])
    def test_threads_change_nothing(self, name: str) -> None:
        model = model_of(mesh := block(ELEMENTS[name], 6, 0.2), smooth(mesh.points, 3)[0])
        one, two = (recover_gradient(model, one_group(model), threads=k) for k in (1, 2))
        np.testing.assert_array_equal(one.H, two.H)

    def test_orders_may_meet(self) -> None:
        """Linear and quadratic cells side by side in one group: the lower order where they meet."""
        mesh = block(ELEMENTS["hexahedron20"], 4)
        left = mesh.points[mesh.cells][:, :, 0].mean(axis=1) < 0.5
        blocks = (
            CellBlock("hexahedron20", mesh.cells[left], np.flatnonzero(left)),
            CellBlock("hexahedron", mesh.cells[~left][:, :8], np.flatnonzero(~left)),
        )
        H = np.arange(9.0).reshape(3, 3)
        model = build_model(Result(mesh.points, blocks, point_data={"u": mesh.points @ H.T}))
        found = recover_gradient(model, np.zeros(64, dtype=int))
        known = found.share >= 0
        assert known.sum() < len(mesh.points)
        np.testing.assert_allclose(found.H[..., known], np.repeat(H[..., None], known.sum(), -1), atol=1e-12)


class TestErrors:
    model: Model = model_of(block(ELEMENTS["quad"], 2), np.zeros((9, 3)))

    def test_unknown_method(self) -> None:
        with pytest.raises(UsageError, match="'median' is not known; use one of patch, extrapolate, average"):
            recover_gradient(self.model, one_group(self.model), "median")  # type: ignore[arg-type]

    @pytest.mark.parametrize("groups", [np.zeros(3, dtype=int), np.zeros(4), np.zeros((4, 1), dtype=int)])
    def test_groups_that_do_not_fit(self, groups: np.ndarray) -> None:
        with pytest.raises(UsageError, match="one integer for each of the 4 cells"):
            recover_gradient(self.model, groups)
