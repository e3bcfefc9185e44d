"""How far to trust values at cells: from the cells around alone, the same as from the whole mesh."""

from __future__ import annotations

from dataclasses import replace
from typing import Any, Literal

import numpy as np
import pytest

import meshes
from recovery_meshes import block, smooth
from solved_problems import NU, corner_plate, pressed
from test_elsewhere import angle_mesh, corner_field
from test_nodal import TURN, quadratic
from unturn import CellBlock, Result, cutout, kinematics
from unturn.around import Asked, Trust, bound_of, groups_of, trust_of, trust_on
from unturn.cutout import Cutter
from unturn.elements import ELEMENTS
from unturn.model import Model
from unturn.neighbourhood import middles
from unturn.options import StrainOptions
from unturn.peaks import Peaks
from unturn.pipeline import Computed, compute
from unturn.recovery import recover_gradient
from unturn.statistics import statistics
from unturn.surface import faces_model, free_faces
from unturn.trust import strain_error

Floats = np.ndarray
CELLS = [name for name in ELEMENTS if name != "vertex"]
SIZES = {1: 40, 2: 12, 3: 8}


@pytest.fixture(autouse=True)
def always_cut(monkeypatch: pytest.MonkeyPatch) -> None:
    """Small meshes are cut too: otherwise the whole is taken and nothing is proved."""
    monkeypatch.setattr(cutout, "_WHOLE", 2.0)


def computed_of(result: Result, zero: Result | None = None, **options: Any) -> Computed:
    return compute(result, StrainOptions(**{"displacement": "u", **options}), zero=zero, diagnose=True)


def noisy(points: Floats, dim: int, size: float = 1e-2) -> Floats:
    """A smooth displacement with some noise, so that no two cells are alike."""
    noise = np.random.default_rng(2).normal(scale=1e-3, size=points.shape)
    noise[:, dim:] = 0.0
    return size * (smooth(points, dim)[0] + noise)


def with_parts(name: str, n: int, size: float = 1e-2, stretch: tuple[float, ...] = (1, 1, 1)) -> Result:
    """A block of cells moved at random, cut into two regions, with a smooth displacement and noise."""
    mesh = block(ELEMENTS[name], n, 0.15)
    part = (mesh.points[mesh.cells].mean(axis=1)[:, 0] > 0.55).astype(np.int32)
    mesh = mesh._replace(points=mesh.points * stretch)
    return mesh.result(u=noisy(mesh.points, mesh.element.dim, size)).with_arrays(cell_data={"part": part})


def some(n: int, count: int = 5) -> list[int]:
    """Some cells, the first and the last among them."""
    return [0, n - 1, *np.random.default_rng(0).permutation(n)[:count].tolist()]


def plus_minus(computed: Computed, cells: list[int], measure: str = "principal_strain") -> Floats:
    """Plus and minus of some cells, each asked for on its own."""
    n = computed.fields.model.result.n_cells
    values = np.ones(n)
    found = [trust_of(computed, [Asked(measure, values, np.arange(n), cell)])[0] for cell in cells]
    return np.array([f.plus_minus for f in found])


def whole(
    model: Model, at: Literal["centroid", "mean"] = "centroid", base: str = "", groups: Any = None
) -> Floats:
    """Plus and minus of every cell from a recovery of the whole mesh."""
    recovered = recover_gradient(model, groups_of(model) if groups is None else groups)
    return strain_error(recovered, base=base, at=at).plus_minus


def same(model: Model, computed: Computed, count: int = 5, **how: Any) -> None:
    cells = some(model.result.n_cells, count)
    np.testing.assert_allclose(plus_minus(computed, cells), whole(model, **how)[cells], rtol=1e-9)


@pytest.mark.derived("a recovery of the whole mesh, cell by cell")
class TestTheSameAsOfTheWholeMesh:
    @pytest.mark.parametrize("name", CELLS)
    def test_every_element(self, name: str) -> None:
        row = ELEMENTS[name]
        n = SIZES[row.dim] if row.order < 3 else SIZES[row.dim] // 2
        computed = computed_of(with_parts(name, n), plane="strain" if row.dim == 2 else None)
        same(computed.fields.model, computed)

    @pytest.mark.parametrize("name", ["triangle", "triangle6", "quad", "tetra", "hexahedron", "wedge"])
    @pytest.mark.parametrize("layers", [1, 2])
    def test_thin_parts(self, name: str, layers: int) -> None:
        """Patches lie to one side everywhere: values come from further away, or by lower orders."""
        row = ELEMENTS[name]
        fine = block(row, 12 if row.dim == 2 else 8)
        n = 12 if row.dim == 2 else 8
        inside = (fine.points[fine.cells].mean(axis=1)[:, 1] < layers / n) & (
            fine.points[fine.cells].mean(axis=1)[:, row.dim - 1] < layers / n
        )
        used, cells = np.unique(fine.cells[inside], return_inverse=True)
        mesh = fine._replace(points=fine.points[used], cells=cells.reshape(-1, fine.cells.shape[1]))
        computed = computed_of(
            mesh.result(u=noisy(mesh.points, row.dim)), plane="strain" if row.dim == 2 else None
        )
        assert sum(
            recover_gradient(computed.fields.model, groups_of(computed.fields.model)).fallback.values()
        )
        same(computed.fields.model, computed)

    @pytest.mark.parametrize("name", ["quad8", "tetra", "hexahedron20", "pyramid"])
    def test_means_over_the_volume(self, name: str) -> None:
        options: dict[str, Any] = {"plane": "strain"} if ELEMENTS[name].dim == 2 else {}
        computed = computed_of(with_parts(name, 6), at="mean", **options)
        same(computed.fields.model, computed, at="mean")

    def test_of_means_the_bound_is_that_of_the_mean(self) -> None:
        """By hand for one cell: `norm(e* - mean e) + d`, the largest over its nodes."""
        result = with_parts("hexahedron20", 4)
        mesh = meshes.Mesh(result.points, result.blocks[0].connectivity, ELEMENTS["hexahedron20"])
        computed = computed_of(result, at="mean")
        model = computed.fields.model
        recovered = recover_gradient(model, groups_of(model))
        from unturn import displacement_gradient

        u = result.point_data["u"]
        own = kinematics.strain(
            displacement_gradient(mesh.points, mesh.cells, u, "hexahedron20", at=mesh.element.nodes)
        )
        mean = kinematics.strain(displacement_gradient(mesh.points, mesh.cells, u, "hexahedron20", at="mean"))
        nodal = kinematics.strain(np.moveaxis(recovered.values, -1, 0))[recovered.shares.cells[0]]
        departure = np.zeros(len(recovered.shares))
        np.maximum.at(departure, recovered.shares.cells[0], np.linalg.norm(nodal - own, axis=(2, 3)))
        reach = np.linalg.norm(nodal - mean[:, None], axis=(2, 3))
        expected = (reach + departure[recovered.shares.cells[0]]).max(axis=1)
        cells = some(len(mesh.cells))
        np.testing.assert_allclose(plus_minus(computed, cells), expected[cells], rtol=1e-9)

    @pytest.mark.parametrize("base", ["green_lagrange", "hencky", "biot", "almansi"])
    @pytest.mark.parametrize("name", ["triangle6", "hexahedron"])
    def test_finite_strain(self, name: str, base: str) -> None:
        options: dict[str, Any] = {"plane": "stress", "poisson": 0.3} if ELEMENTS[name].dim == 2 else {}
        computed = computed_of(with_parts(name, 6, 0.1), base=base.replace("_", "-"), **options)
        cells = some(computed.fields.model.result.n_cells, 5)
        found = plus_minus(computed, cells, f"principal_strain_{base}")
        expected = whole(computed.fields.model, base=base)
        np.testing.assert_allclose(found, expected[cells], rtol=1e-9)
        small = plus_minus(computed, cells)
        assert (np.abs(found / small - 1) > 1e-6).all()

    def test_a_writer_that_repeats_nodes(self) -> None:
        """Every cell has nodes of its own: they count as one."""
        result = with_parts("hexahedron", 6)
        cells = result.blocks[0].connectivity
        apart = Result(
            result.points[cells.reshape(-1)],
            (CellBlock("hexahedron", np.arange(cells.size).reshape(cells.shape), np.arange(len(cells))),),
            {"u": result.point_data["u"][cells.reshape(-1)]},
            {"part": result.cell_data["part"]},
        )
        joined = computed_of(result)
        expected = whole(joined.fields.model)
        cells_ = some(len(cells))
        np.testing.assert_allclose(plus_minus(computed_of(apart), cells_), expected[cells_], rtol=1e-9)

    def test_the_faces_of_a_crack(self) -> None:
        """Points at one place that move differently are two."""
        mesh = block(ELEMENTS["hexahedron"], 6)
        cut = np.abs(mesh.points[:, 2] - 0.5) < 1e-9
        cut &= mesh.points[:, 0] < 0.7
        twin = np.arange(len(mesh.points))
        twin[cut] = len(mesh.points) + np.arange(cut.sum())
        upper = mesh.points[mesh.cells].mean(axis=1)[:, 2] > 0.5
        cells = np.where(upper[:, None], twin[mesh.cells], mesh.cells)
        points = np.concatenate([mesh.points, mesh.points[cut]])
        u = noisy(points, 3)
        u[len(mesh.points) :] += 3e-3
        u[np.flatnonzero(cut)[0]] = u[len(mesh.points)]  # one pair that moves as one, as at the tip
        result = mesh._replace(points=points, cells=cells).result(u=u)
        computed = computed_of(result)
        assert recover_gradient(computed.fields.model, groups_of(computed.fields.model)).shares.apart
        same(computed.fields.model, computed, 40)

    def test_mixed_cells_and_what_is_left_out(self) -> None:
        """Wedges on hexahedra, some cells deleted, one tangled, one whose displacement is not finite."""
        bricks, wedges = block(ELEMENTS["hexahedron"], 5), block(ELEMENTS["wedge"], 5)
        up = wedges.points + np.array([0, 0, 1])
        points = np.concatenate([bricks.points, up])
        cells = bricks.cells.copy()
        cells[30] = cells[30][[1, 0, 2, 3, 4, 5, 6, 7]]
        n, m = len(cells), len(wedges.cells)
        blocks = (
            CellBlock("wedge", wedges.cells + len(bricks.points), np.arange(m)),
            CellBlock("hexahedron", cells, m + np.arange(n)),
        )
        u = noisy(points, 3)
        u[len(bricks.points) :][np.abs(up[:, 2] - 1) < 1e-9] = u[: len(bricks.points)][
            np.abs(bricks.points[:, 2] - 1) < 1e-9
        ]
        u[70] = np.nan
        alive = np.ones(n + m)
        alive[[5, m + 60]] = 0
        computed = computed_of(Result(points, blocks, {"u": u}, {"alive": alive}), alive="alive")
        assert set(computed.fields.left_out) == {"deleted", "displacement not finite", "tangled"}
        same(computed.fields.model, computed, 60)

    @pytest.mark.parametrize("base", ["", "green_lagrange", "hencky", "biot"])
    def test_folded_surfaces(self, base: str) -> None:
        """Nothing is compared across a fold of 90 degrees, and everything along a gentle one."""
        mesh = block(ELEMENTS["quad8"], 8, 0.1)
        x, y, _ = mesh.points.T
        points = np.stack([np.minimum(x, 0.5), y, np.maximum(x - 0.5, 0) + 0.1 * y**2], axis=1)
        result = mesh._replace(points=points).result(u=noisy(points, 3, 0.1))
        options: dict[str, Any] = {"base": base.replace("_", "-"), "solve": "nonlinear"} if base else {}
        computed = computed_of(result, **options)
        model = computed.fields.model
        assert len(np.unique(groups_of(model))) == 2
        cells = some(result.n_cells)
        measure = f"principal_strain_{base}" if base else "principal_strain"
        np.testing.assert_allclose(
            plus_minus(computed, cells, measure), whole(model, base=base)[cells], rtol=1e-9
        )

    def test_an_unstated_third_direction(self) -> None:
        computed = computed_of(with_parts("quad", 10), measures=["strain"])
        assert computed.fields.model.plane is not None
        same(computed.fields.model, computed)

    def test_rigid_motion_that_is_taken_out(self) -> None:
        result = with_parts("hexahedron", 6)
        turned = (result.points + result.point_data["u"]) @ TURN.T - result.points
        options: dict[str, Any] = {"solve": "nonlinear", "remove_rigid": "part=1"}
        computed = computed_of(result.with_arrays(point_data={"u": turned}), **options)
        same(computed.fields.model, computed)

    def test_from_a_zero_step(self) -> None:
        """Small measures on `u - u_N`, finite ones on the motion since then."""
        mesh = block(ELEMENTS["hexahedron"], 6, 0.1)
        first, _ = quadratic(mesh.points, 0.05, turn=TURN)
        zero, now = mesh.result(u=first), mesh.result(u=first + noisy(mesh.points, 3, 0.1))
        computed = computed_of(now, zero, measures=["strain", "strain_hencky"], solve="nonlinear")
        assert computed.finite_model is not None
        cells = some(len(mesh.cells), 5)
        small, finite = (plus_minus(computed, cells, m) for m in ("strain", "strain_hencky"))
        np.testing.assert_allclose(small, whole(computed.fields.model)[cells], rtol=1e-9)
        expected = whole(computed.finite_model, base="hencky")
        np.testing.assert_allclose(finite, expected[cells], rtol=1e-9)
        assert np.abs(expected / whole(computed.fields.model, base="hencky") - 1)[cells].min() > 1e-3
        angle = plus_minus(computed, cells, "angle_of_turn")
        turn = whole(computed.finite_model, base="turn")[cells]
        np.testing.assert_allclose(angle, 2 * np.arcsin(turn / 2), rtol=1e-9)

    def test_free_faces(self) -> None:
        computed = computed_of(with_parts("hexahedron20", 5))
        model = computed.fields.model
        faces = faces_model(free_faces(model))
        groups = np.zeros(faces.result.n_cells, dtype=np.int64)
        area, expected = np.ones(len(groups)), whole(faces, groups=groups)
        for face in some(len(groups)):
            asked = Asked("surface_principal_strain", area, np.arange(len(groups)), face)
            (found,) = trust_on(faces, area, groups, [asked])
            assert found.plus_minus == pytest.approx(expected[face], rel=1e-9)

    def test_many_at_once_are_as_each_alone(self) -> None:
        computed = computed_of(with_parts("tetra", 8))
        values = computed.fields.arrays["principal_strain"][:, 0]
        cells = some(len(values), 30)
        asked = [Asked("principal_strain", values, np.arange(len(values)), c) for c in cells]
        found = np.array([t.plus_minus for t in trust_of(computed, asked)])
        np.testing.assert_allclose(found, plus_minus(computed, cells), rtol=1e-12)


def extremes_of(computed: Computed) -> list[Asked]:
    d = computed.fields.diagnostics
    assert d is not None
    principal = computed.fields.arrays["principal_strain"]
    cells = np.arange(len(principal))
    size = float(np.nanmax(np.abs(principal)))
    columns = (principal[:, 0], False), (principal[:, 2], True)
    found = []
    for values, smallest in columns:
        s = statistics(values, d.volume, cells, ())
        at = s.at_minimum if smallest else s.at_maximum
        found.append(Asked("principal_strain", values, cells, at, smallest, size))
    return found


def by_the_whole(computed: Computed, asked: Asked) -> Trust:
    """Peak, suspicion and next peak by `Peaks` over the whole mesh."""
    model, d = computed.fields.model, computed.fields.diagnostics
    assert d is not None
    recovered = recover_gradient(model, groups_of(model))
    error = strain_error(recovered)
    peaks = Peaks(recovered, middles(model), d.volume)
    strain = np.sqrt(error.strain_squared / error.volume)

    def suspected(peak: Any) -> bool:
        share = np.flatnonzero(recovered.shares.point == peak.point)
        return bool(
            peak.singular
            and abs(peak.value) >= 1e-3 * asked.size
            and not (error.plus_minus_shares[share] < 0.4 * strain[peak.cell]).all()
        )

    known = error.plus_minus[asked.cell]
    peak = peaks.find(asked.values, np.array([asked.cell]), asked.smallest)
    if not suspected(peak):
        return Trust(known)
    after = peaks.next_peak(asked.values, asked.cells, peak, asked.smallest, suspected)
    bound = error.plus_minus[after.cell] if after.cell >= 0 else np.nan
    return Trust(known, True, peak.point, peak.growth, after.cell, after.value, bound)


def check_peaks(computed: Computed) -> list[Trust]:
    asked = extremes_of(computed)
    found = trust_of(computed, asked)
    for one, trust in zip(asked, found):
        expected = by_the_whole(computed, one)
        assert (trust.singular, trust.point, trust.next_cell) == (
            expected.singular, expected.point, expected.next_cell
        )  # fmt: skip
        for name in ("plus_minus", "growth", "next_value", "next_plus_minus"):
            np.testing.assert_allclose(getattr(trust, name), getattr(expected, name), rtol=1e-9)
    return found


@pytest.mark.derived("`Peaks` over the whole mesh, with the whole recovered")
class TestPeaks:
    @pytest.mark.parametrize("name", ["quad", "triangle6", "hexahedron", "wedge"])
    def test_a_reentrant_corner(self, name: str) -> None:
        mesh, _ = angle_mesh(name, 9)
        options: dict[str, Any] = {"plane": "strain"} if mesh.element.dim == 2 else {}
        assert check_peaks(computed_of(mesh.result(u=corner_field(mesh.points)), **options))[0].singular

    @pytest.mark.parametrize("name", ["quad8", "triangle"])
    def test_a_solved_corner_and_a_point_load(self, name: str) -> None:
        for mesh, u in (corner_plate(name, 8), pressed(name, 8)):
            found = check_peaks(computed_of(mesh.result(u=u), plane="stress", poisson=NU))
            assert any(t.singular for t in found)

    def test_a_smooth_field(self) -> None:
        found = check_peaks(computed_of(with_parts("hexahedron20", 5)))
        assert [(t.singular, t.point, t.next_cell) for t in found] == [(False, -1, -1)] * 2

    def test_the_next_peak_is_further_down_than_the_first_cells_looked_at(
        self, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        """A long re-entrant edge: everything near it comes before the next peak."""
        monkeypatch.setattr("unturn.around._TAKEN", (4, 16, 10_000))
        mesh = block(ELEMENTS["hexahedron"], 10)
        x = mesh.points - [0.5, 0.5, 0]
        u = np.zeros(x.shape)
        u[:, 0] = 1e-3 * np.sqrt(np.hypot(x[:, 0], x[:, 1]))
        u[:, 0] += 5e-4 * np.maximum(mesh.points[:, 0] - 0.7, 0) ** 2
        assert check_peaks(computed_of(mesh.result(u=u)))[0].next_cell >= 0
        monkeypatch.setattr("unturn.around._TAKEN", (4, 16))
        first = trust_of(computed_of(mesh.result(u=u)), extremes_of(computed_of(mesh.result(u=u))))[0]
        assert (first.singular, first.next_cell) == (True, -1)  # not looked for any further

    def test_a_region_is_where_the_next_peak_is_looked_for(self) -> None:
        mesh, _ = angle_mesh("quad", 9)
        computed = computed_of(mesh.result(u=corner_field(mesh.points)), plane="strain")
        (first, _) = extremes_of(computed)
        middle = mesh.points[mesh.cells].mean(axis=1)
        cells = np.flatnonzero(np.linalg.norm(middle, axis=1) < 0.05 + np.linalg.norm(middle[first.cell]))
        assert first.cell in cells
        (near,) = trust_of(computed, [replace(first, cells=cells)])
        assert (near.singular, near.next_cell) == (True, -1)
        far = np.flatnonzero(middle[:, 1] > 0.5)
        (away,) = trust_of(computed, [replace(first, cells=np.append(far, first.cell))])
        assert away.next_cell in far

    def test_small_extremes_are_no_peaks(self) -> None:
        mesh, _ = angle_mesh("quad", 6)
        computed = computed_of(mesh.result(u=corner_field(mesh.points)), plane="strain")
        first = extremes_of(computed)[0]
        assert trust_of(computed, [first])[0].singular
        value = first.values[first.cell]
        assert not trust_of(computed, [replace(first, size=1001 * value)])[0].singular
        assert trust_of(computed, [replace(first, size=999 * value)])[0].singular


class TestWhatIsAskedFor:
    def test_no_cell_and_no_bound(self) -> None:
        # Source: the conventions of the project: what is not known is NaN.
        computed = computed_of(with_parts("hexahedron", 3))
        n = computed.fields.model.result.n_cells
        values, cells = np.ones(n), np.arange(n)
        asked = [
            Asked("principal_strain", values, cells, -1),
            Asked("element_volume", values, cells, 0),
            Asked("finite_rotation", values, cells, 0),
            Asked("strain", values, cells, 0),
        ]
        found = trust_of(computed, asked)
        assert [np.isnan(t.plus_minus) for t in found] == [True, True, True, False]
        assert trust_of(computed, []) == []

    def test_a_cell_that_is_not_computed_and_one_without_neighbours(self) -> None:
        # Source: the conventions of the project: an element without neighbours has nothing to differ from.
        mesh = block(ELEMENTS["hexahedron"], 2)
        u = noisy(mesh.points, 3)
        part = np.arange(8, dtype=np.int32) % 8
        computed = computed_of(mesh.result(u=u).with_arrays(cell_data={"part": part}))
        assert np.isnan(plus_minus(computed, [0, 3])).all()
        u[mesh.cells[0, 0]] = np.nan
        computed = computed_of(mesh.result(u=u))
        broken = (mesh.cells == mesh.cells[0, 0]).any(axis=1)
        found = plus_minus(computed, list(range(8)))
        np.testing.assert_array_equal(np.isnan(found), broken)

    @pytest.mark.derived(
        "Weyl 1912 and Cauchy-Schwarz, tried on random gradients; both signs of every change"
    )
    def test_bounds_hold_for_random_changes(self) -> None:
        random = np.random.default_rng(1)
        H = 0.2 * random.normal(size=(3000, 3, 3))
        D = H + 10.0 ** random.uniform(-3, -0.5, (3000, 1, 1)) * random.normal(size=H.shape)
        sound = (kinematics.det_f(H) > 0.05) & (kinematics.det_f(D) > 0.05)
        H, D = H[sound], D[sound]
        k = kinematics

        def size(e: Floats) -> Floats:
            return np.linalg.norm(e, axis=(1, 2))

        turns = [np.eye(3) + rotation_tensor(k.finite_rotation(x)) for x in (H, D)]
        apart = {
            "": size(k.strain(D) - k.strain(H)),
            "rotation": np.linalg.norm(k.rotation_vector(D) - k.rotation_vector(H), axis=1),
            "hencky": size(k.hencky_strain(D) - k.hencky_strain(H)),
            "biot": size(k.biot_strain(D) - k.biot_strain(H)),
            "turn": size(turns[1] - turns[0]) / np.sqrt(2),
        }
        measures = {
            "strain": lambda x: k.strain(x)[:, 0, 1],
            "rotation": lambda x: k.rotation_vector(x)[:, 2],
            "rotation_angle": k.rotation_angle,
            "deviatoric_strain": lambda x: k.deviatoric_strain(k.strain(x))[:, 1, 1],
            "principal_strain": lambda x: k.principal_strain(k.strain(x))[:, 0],
            "equivalent_strain": lambda x: k.equivalent_strain(k.strain(x)),
            "principal_strain_hencky": lambda x: k.principal_strain(k.hencky_strain(x))[:, 2],
            "volumetric_strain_biot": lambda x: np.trace(k.biot_strain(x), axis1=1, axis2=2),
            "stretch": lambda x: 1 + k.principal_strain(k.biot_strain(x))[:, 0],
            "small_strain_error": k.small_strain_error,
            "finite_rotation_angle": lambda x: np.linalg.norm(k.finite_rotation(x), axis=1),
            "angle_of_turn": lambda x: np.linalg.norm(k.finite_rotation(x), axis=1),
            "det_f": k.det_f,
        }
        for name, measure in measures.items():
            bound = bound_of(name)
            assert bound is not None
            before, after = measure(H), measure(D)
            total = sum(apart[b] for b in bound.bases)
            allowed = np.array([bound.of(float(t), float(v)) for t, v in zip(total, before)])
            share = np.abs(after - before) / allowed
            assert share.max() <= 1 + 1e-9, name
            assert share.max() > 0.5, name  # and not for being far too wide

    @pytest.mark.derived("e_n = -k (e_1 + e_2) on a surface without load, tried on random strains")
    def test_equivalent_strain_of_free_surfaces(self) -> None:
        random = np.random.default_rng(2)
        for nu in (0.0, 0.3, 0.5):
            e, d = random.normal(size=(2, 4000, 3, 3))
            d[0] = np.diag([1.0, 1, 0])
            e[0] = d[0]
            e, d = (x + x.swapaxes(1, 2) for x in (e, d))
            for x in (e, d):
                x[:, 2] = x[:, :, 2] = 0.0
            size = np.linalg.norm(d, axis=(1, 2))
            for x in (e, d):
                x[:, 2, 2] = -nu / (1 - nu) * (x[:, 0, 0] + x[:, 1, 1])
            change = np.abs(kinematics.equivalent_strain(e + d) - kinematics.equivalent_strain(e))
            bound = bound_of("surface_equivalent_strain", poisson=nu)
            assert bound is not None
            assert (change <= bound.change * size * (1 + 1e-12)).all()
            assert (change / size).max() > 0.7 * bound.change


def rotation_tensor(vectors: Floats) -> Floats:
    """`R - I` of rotation vectors, by Rodrigues' formula."""
    from scipy.spatial.transform import Rotation

    return Rotation.from_rotvec(vectors).as_matrix() - np.eye(3)


class TestCutter:
    @pytest.mark.derived("rings counted one by one on a regular grid")
    def test_rings(self) -> None:
        mesh = block(ELEMENTS["hexahedron"], 9)
        model = computed_of(mesh.result(u=0 * mesh.points)).fields.model
        middle = mesh.points[mesh.cells].mean(axis=1)
        start = int(np.abs(middle - 0.5).sum(axis=1).argmin())
        far = np.round(9 * np.abs(middle - middle[start]).max(axis=1))
        for rings in range(5):
            np.testing.assert_array_equal(
                Cutter(model).around(np.array([start]), rings), np.flatnonzero(far <= rings)
            )

    @pytest.mark.derived("the cells of a cut have the gradient that they have in the whole")
    def test_a_cut_is_a_model(self) -> None:
        computed = computed_of(with_parts("tetra10", 4), measures=["displacement_gradient"])
        model = computed.fields.model
        cutter = Cutter(model)
        cells = cutter.around(np.array([3, 200]), 1)
        part = cutter.cut(cells)
        np.testing.assert_array_equal(part.cells, cells)
        np.testing.assert_array_equal(part.model.points, model.points[part.points])
        from unturn.fields import compute_fields

        found = compute_fields(part.model, ["displacement_gradient"]).arrays["displacement_gradient"]
        np.testing.assert_allclose(
            found, computed.fields.arrays["displacement_gradient"][cells], rtol=1e-12, atol=1e-18
        )

    def test_a_large_part_is_the_whole(self, monkeypatch: pytest.MonkeyPatch) -> None:
        # Source: by construction.
        mesh = block(ELEMENTS["hexahedron"], 5)
        model = computed_of(mesh.result(u=0 * mesh.points)).fields.model
        monkeypatch.setattr(cutout, "_WHOLE", 0.3)
        assert len(Cutter(model).around(np.array([0]), 2)) == 27
        assert len(Cutter(model).around(np.array([62]), 2)) == 125
