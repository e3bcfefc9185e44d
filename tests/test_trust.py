"""Error estimates, jumps between elements, and the plus/minus of peaks on solved problems."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest

import meshes
from recovery_meshes import block, model_of, one_group, smooth
from solved_problems import BORE, NU, PEAK, bent, cavity, cylinder, ellipse, plate, ring, sphere
from unturn.elements import ELEMENTS, rule_of_degree
from unturn.fields import compute_fields
from unturn.gradient import displacement_gradient
from unturn.model import Model, PlaneOptions, build_model
from unturn.recovery import recover_gradient
from unturn.result import CellBlock, Result
from unturn.surface import free_faces, surface_result
from unturn.trust import MOST_CHANGE, strain_error, strain_jump


def strains(H: np.ndarray) -> np.ndarray:
    return 0.5 * (H + H.swapaxes(-1, -2))


class TestByHand:
    def two(self) -> Model:
        """Two lines of length 1 and 3 along x with strain 0.1 and 0.2."""
        points = np.array([[0.0, 0, 0], [1, 0, 0], [4, 0, 0]])
        cells = CellBlock("line", np.array([[0, 1], [1, 2]]), np.arange(2))
        u = np.array([[0.0, 0, 0], [0.1, 0, 0], [0.7, 0, 0]])
        return build_model(Result(points, (cells,), point_data={"u": u}))

    @pytest.mark.derived("e* - e rises linearly to 0.075 in the short line and to -0.025 in the long one")
    def test_two_lines(self) -> None:
        found = strain_error(recover_gradient(self.two(), np.zeros(2, dtype=int), "average"))
        np.testing.assert_allclose(found.strain_error, [0.075 / np.sqrt(3), 0.025 / np.sqrt(3)], rtol=1e-12)
        np.testing.assert_allclose(found.volume, [1, 3])
        squared = 0.075**2 / 3 + 3 * 0.025**2 / 3
        strain = 0.1**2 + 3 * 0.2**2
        assert found.percentage(np.arange(2)) == pytest.approx(100 * np.sqrt(squared / (strain + squared)))
        np.testing.assert_allclose(found.plus_minus, [0.15, 0.1], rtol=1e-12)  # 0.075 + 0.075, 0.025 + 0.075
        np.testing.assert_allclose(found.plus_minus_nodes, 0.075, rtol=1e-12)

    def test_jump_of_two_lines(self) -> None:
        cells, points, _ = strain_jump(recover_gradient(self.two(), np.zeros(2, dtype=int)))
        np.testing.assert_allclose(cells, 0.1, rtol=1e-12)
        np.testing.assert_allclose(points, [0, 0.1, 0], atol=1e-15)
        cells, points, _ = strain_jump(recover_gradient(self.two(), np.arange(2)))
        np.testing.assert_allclose([*cells, *points], 0, atol=1e-15)

    def test_an_element_without_neighbours_has_no_estimate(self) -> None:
        found = strain_error(recover_gradient(self.two(), np.arange(2)))
        assert np.isnan(found.plus_minus).all()
        assert np.isnan(found.plus_minus_nodes).all()
        assert found.percentage(np.arange(2)) < 1e-12

    @pytest.mark.derived("no strain, no share of it")
    def test_no_strain(self) -> None:
        mesh = block(ELEMENTS["quad"], 2)
        found = strain_error(recover_gradient(model_of(mesh, np.zeros((9, 3))), np.zeros(4, dtype=int)))
        assert np.isnan(found.percentage(np.arange(4)))
        np.testing.assert_array_equal(found.strain_error, 0)

    @pytest.mark.parametrize("name", ["triangle6", "tetra", "hexahedron", "pyramid", "wedge15"])
    def test_a_linear_displacement_has_no_error(self, name: str) -> None:
        mesh = block(ELEMENTS[name], 3, 0.1)
        H = np.zeros((3, 3))
        H[: mesh.element.dim, : mesh.element.dim] = (
            1e-3 * np.arange(9).reshape(3, 3)[: mesh.element.dim, : mesh.element.dim]
        )
        found = recover_gradient(model_of(mesh, mesh.points @ H.T), np.zeros(len(mesh.cells), dtype=int))
        estimate = strain_error(found)
        assert estimate.strain_error.max() < 1e-15
        assert estimate.plus_minus.max() < 1e-14
        assert strain_jump(found)[0].max() < 1e-14


class TestJump:
    @pytest.mark.derived("every pair of elements at every node, one by one")
    @pytest.mark.parametrize("name", ["triangle", "quad8", "tetra", "wedge", "hexahedron20"])
    def test_brute_force(self, name: str) -> None:
        mesh = block(ELEMENTS[name], 3, 0.2)
        u = smooth(mesh.points, mesh.element.dim)[0]
        side = (mesh.points[mesh.cells].mean(axis=1)[:, 0] > 0.5).astype(int)
        cells, points, _ = strain_jump(recover_gradient(model_of(mesh, u), side))
        e = strains(displacement_gradient(mesh.points, mesh.cells, u, name, at=mesh.element.nodes))
        jumps = np.zeros((2, len(points)))
        for node in range(len(points)):
            for group in (0, 1):
                met = [e[c, k] for c, k in zip(*np.nonzero(mesh.cells == node)) if side[c] == group]
                jumps[group, node] = max(
                    (np.linalg.norm(a - b) for a, b in combinations(met, 2)), default=0.0
                )
        np.testing.assert_allclose(points, jumps.max(axis=0), atol=1e-12)
        np.testing.assert_allclose(cells, jumps[side[:, None], mesh.cells].max(axis=1), atol=1e-12)

    def test_cells_that_cannot_be_used(self) -> None:
        mesh = block(ELEMENTS["hexahedron"], 3)
        u = smooth(mesh.points, 3)[0]
        twisted = np.concatenate([mesh.cells, mesh.cells[:1][:, [1, 0, 2, 3, 4, 5, 6, 7]]])
        found = recover_gradient(model_of(mesh._replace(cells=twisted), u), np.zeros(28, dtype=int))
        alone = recover_gradient(model_of(mesh, u), np.zeros(27, dtype=int))
        for with_, without in zip(strain_jump(found), strain_jump(alone)):
            np.testing.assert_allclose(with_[: len(without)], without, atol=1e-13)
        assert np.isnan(strain_jump(found)[0][27])
        for name in ("strain_error", "plus_minus", "volume", "error_squared"):
            with_, without = getattr(strain_error(found), name), getattr(strain_error(alone), name)
            np.testing.assert_allclose(with_[:27], without, atol=1e-13)
            assert np.isnan(with_[27])


class TestEffectivity:
    """Source: Zienkiewicz and Zhu 1987 and 1992: the estimated error over the true one tends to one."""

    @pytest.mark.source("Zienkiewicz and Zhu 1992, Int. J. Numer. Meth. Eng. 33, 1365-1382")
    @pytest.mark.parametrize(
        ("name", "sizes"),
        [
            *(
                (name, (6, 12, 24))
                for name in ("triangle", "quad", "triangle6", "triangle7", "quad8", "quad9")
            ),
            *((name, (4, 8, 12)) for name in ("tetra", "hexahedron", "wedge")),
            *((name, (4, 6, 8)) for name in ("tetra10", "hexahedron20", "hexahedron27", "wedge15")),
        ],
    )
    def test_on_structured_meshes(self, name: str, sizes: tuple[int, ...]) -> None:
        row = ELEMENTS[name]
        rule = rule_of_degree(row.shape, 2 * row.order + 2)
        ratios = []
        for n in sizes:
            mesh = block(row, n)
            u = smooth(mesh.points, row.dim)[0]
            places = np.einsum("qa,cax->cqx", row.shape_functions(rule.points), mesh.points[mesh.cells])
            exact = np.moveaxis(smooth(places.reshape(-1, 3), row.dim)[1], -1, 0).reshape(
                *places.shape[:2], 3, 3
            )
            raw = displacement_gradient(mesh.points, mesh.cells, u, name, at=rule.points)
            volume = 1.0 / len(mesh.cells) / row.shape.volume  # every cell of a structured mesh is as large
            true = np.sqrt(
                (rule.weights * ((strains(raw) - strains(exact)) ** 2).sum((-1, -2))).sum() * volume
            )
            estimate = strain_error(recover_gradient(model_of(mesh, u), np.zeros(len(mesh.cells), dtype=int)))
            assert estimate.volume.sum() == pytest.approx(1.0)
            ratios.append(np.sqrt(estimate.error_squared.sum()) / true)
        off = np.abs(np.array(ratios) - 1)
        assert off[-1] < 0.06, dict(zip(sizes, ratios))
        assert off[-1] < 0.6 * off[0] or off[-1] < 0.02, dict(zip(sizes, ratios))


def peaks(
    mesh: meshes.Mesh, u: np.ndarray, plane: PlaneOptions, truth: float
) -> tuple[np.ndarray, np.ndarray]:
    """Largest principal strain over the truth at cells, nodes and free faces, and the plus/minus of the first two."""
    solid = mesh.element.dim == 3
    model = build_model(mesh.result(u=u), plane=None if solid else plane)
    at_cells = compute_fields(model, ["principal_strain"]).arrays["principal_strain"][:, 0]
    found = recover_gradient(model, one_group(model))
    at_nodes = np.linalg.eigvalsh(strains(np.moveaxis(found.H, -1, 0)))[:, -1]
    estimate = strain_error(found)
    cell, node = int(at_cells.argmax()), int(at_nodes.argmax())
    face = np.nan
    if solid:
        face = (
            surface_result(model, free_faces(model)).result.cell_data["surface_principal_strain"][:, 0].max()
        )
    bounds = np.array([estimate.plus_minus[cell], estimate.plus_minus_nodes[node]])
    return np.array([at_cells[cell], at_nodes[node], face]) / truth, bounds / truth


LINEAR_SIMPLICES = ("triangle", "tetra", "wedge")
PLANE = ("triangle", "quad", "triangle6", "quad8", "quad9")
SOLIDS = [
    *((name, n) for name in ("tetra", "hexahedron", "wedge") for n in (3, 4, 6)),
    *((name, n) for name in ("tetra10", "hexahedron20") for n in (3, 4)),
]
CASES = {
    "plate": [(name, n) for name in PLANE[:4] for n in (4, 6, 8, 12)],
    "cylinder": SOLIDS,
    "ring": [(name, n) for name in PLANE for n in (4, 8, 12)],
    "sphere": SOLIDS,
    "ellipse": [(name, n) for name in PLANE for n in (4, 8, 12)],
    "cavity": SOLIDS,
    "bent": [(name, n) for name in (*PLANE, "tetra", "hexahedron", "wedge") for n in (2, 4)],
}
CHORDS = ("cylinder", "ring", "sphere", "cavity")
"""Problems whose hoop strain is the same all along a circle."""


@pytest.mark.source(
    "Kirsch 1898; Inglis 1913; Goodier 1933; Lame: Timoshenko and Goodier, Theory of Elasticity, articles 28, 35, 43, 136"
)
@pytest.mark.parametrize("problem", CASES)
def test_plus_minus_covers_the_peak(problem: str) -> None:
    """What happens at borders was chosen on the plate and the cylinder; all others were tried afterwards.

    The peak at nodes or on free faces must be nearer to the truth than that of cells. Only where the hoop strain is the
    same along a circle the linear triangle, tetrahedron and wedge have it in their edge, as exact as the displacement of
    its two nodes: no value at nodes can be nearer but by chance, so it must not be much farther.
    """
    lines, inside, off = [], [], []
    for name, n in CASES[problem]:
        if problem in ("plate", "cylinder"):
            mesh, u = plate(name, n) if problem == "plate" else cylinder(name, n)
            truth = PEAK if problem == "plate" else BORE
        else:
            made = {"ring": ring, "sphere": sphere, "ellipse": ellipse, "cavity": cavity, "bent": bent}
            mesh, u, truth = made[problem](name, n)
        stress = problem in ("plate", "ellipse", "bent")
        value, bound = peaks(mesh, u, PlaneOptions("stress", NU) if stress else PlaneOptions("strain"), truth)
        inside.append(np.abs(value[:2] - 1) <= bound + 1e-9)
        tolerance = 0.025 if problem in CHORDS and name in LINEAR_SIMPLICES else 0.0
        off.append(np.nanmin(np.abs(value[1:] - 1)) - abs(value[0] - 1) - tolerance)
        lines.append(
            f"{name} {n}: cell {value[0]:.3f} +- {bound[0]:.3f}, node {value[1]:.3f} +- {bound[1]:.3f}, "
            f"face {value[2]:.3f}"
        )
    table = "\n".join(lines)
    assert (np.mean(inside, axis=0) >= 0.9).all(), table
    assert max(off) < 0, table


@pytest.mark.derived("Weyl 1912 and Cauchy-Schwarz, tried on random tensors")
def test_how_much_measures_change() -> None:
    random = np.random.default_rng(0)
    e, d = (strains(random.normal(size=(4000, 3, 3))) for _ in range(2))
    d[:4] = [np.eye(3), np.diag([1, -1, 0]), np.diag([2, -1, -1]), np.diag([1, 0, 0])]
    e[:4] = 10 * np.diag([3.0, -2.0, 0.5])
    d /= np.linalg.norm(d, axis=(1, 2), keepdims=True)

    def measures(a: np.ndarray) -> dict[str, np.ndarray]:
        values = np.linalg.eigvalsh(a)
        trace = values.sum(axis=1)
        norm = np.sqrt(((values - trace[:, None] / 3) ** 2).sum(axis=1))
        return {
            "principal_strain": values,
            "equivalent_strain": np.sqrt(2 / 3) * norm,
            "max_shear_strain": values[:, 2] - values[:, 0],
            "volumetric_strain": trace,
        }

    for name, before in measures(e).items():
        change = np.abs(measures(e + 1e-3 * d)[name] - before).max() / 1e-3
        assert change <= MOST_CHANGE[name] * (1 + 1e-9)
        assert change > 0.8 * MOST_CHANGE[name]
