"""Finite measures on every kind of mesh and at every location: solids, planes, surfaces, lines."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import pytest

import meshes
from strategies import axis_angle
from unturn import UsageError, strain
from unturn.elements import ELEMENTS
from unturn.fields import LOCATIONS, CellFields, compute_fields, smallest_height
from unturn.gradient import ElementChunk, PlaneModel, sample_points
from unturn.kinematics._finite import BASES
from unturn.model import PlaneOptions, build_model
from unturn.result import CellBlock, Result

STRAINS = [f"strain_{base}" for base in BASES]
FINITE = [*STRAINS, "finite_rotation", "finite_rotation_angle", "det_f"]
TILT = axis_angle([0.6, 0.0, 0.8], 0.4) + np.eye(3)  # takes a plane mesh out of the coordinate planes
OBLIQUE = np.array([0.36, 0.48, 0.8])
ANGLES = [0.5, 5.0, 90.0, 179.0, 179.99, 180.0]


def computed(
    mesh: meshes.Mesh,
    u: Any,
    measures: Sequence[str] = FINITE,
    *,
    at: Any = "centroid",
    plane: PlaneModel | None = None,
    poisson: float | None = None,
) -> CellFields:
    options = PlaneOptions(plane, poisson)
    return compute_fields(build_model(mesh.result(u=np.asarray(u)), plane=options), measures, at=at)


def six(tensor: Any) -> np.ndarray:
    t = np.asarray(tensor)
    return np.array([t[0, 0], t[1, 1], t[2, 2], t[0, 1], t[1, 2], t[0, 2]])


def full(six_components: np.ndarray) -> np.ndarray:
    return six_components[..., [0, 3, 5, 3, 1, 4, 5, 4, 2]].reshape(*six_components.shape[:-1], 3, 3)


def lowest(mesh: meshes.Mesh) -> float:
    """Smallest height of an element, as the noise floor has it."""
    model = build_model(mesh.result(u=np.zeros((len(mesh.points), 3))))
    chunk = ElementChunk(model.fields, mesh.cells, mesh.element, None)
    place = sample_points(mesh.element, "centroid")
    return float(smallest_height(chunk, chunk.at(place.gradients[0], place.functions[0])).min())


def flattened(mesh: meshes.Mesh) -> meshes.Mesh:
    """Graded and thin, away from the origin: nothing like the patch it was made from."""
    x = mesh.points / np.ptp(mesh.points, axis=0).max()
    points = np.stack([x[:, 0] ** 2 + 0.1 * x[:, 0], x[:, 1], 0.05 * x[:, 2]], axis=1)
    return mesh._replace(points=points + np.array([3.0, -1.0, 2.0]))


SOLIDS = [name for name, e in ELEMENTS.items() if e.dim == 3 and e.order <= 2]
SURFACES = [name for name, e in ELEMENTS.items() if e.dim == 2 and e.order <= 2 and name != "pixel"]
LINES = [name for name, e in ELEMENTS.items() if e.dim == 1 and e.order <= 3]


@pytest.mark.derived(
    "a rigid turn has no strain; H is known to a few roundings of |u| over the height of an element"
)
@pytest.mark.parametrize("at", LOCATIONS)
@pytest.mark.parametrize("kind", [*SOLIDS, *SURFACES])
def test_rigid_turns(kind: str, at: str) -> None:
    patch = meshes.patch(ELEMENTS[kind])
    variants = [meshes.curved(patch), flattened(patch)] if patch.element.dim == 3 else [meshes.curved(patch)]
    if patch.element.dim == 2:
        variants = [m._replace(points=m.points @ TILT.T) for m in variants]
    for mesh in variants:
        height = lowest(mesh)
        for angle in ANGLES:
            u = mesh.points @ axis_angle(OBLIQUE, np.radians(angle)).T + [0.3, -2.0, 0.1]
            found = computed(mesh, u, at=at).arrays
            bound = 100 * 2.2e-16 * float(np.linalg.norm(u, axis=1).max()) / height
            for name in STRAINS:
                assert np.abs(found[name]).max() <= bound, (name, angle)
            np.testing.assert_allclose(found["finite_rotation_angle"], np.radians(angle), rtol=0, atol=1e-10)
            np.testing.assert_allclose(
                found["finite_rotation"],
                np.tile(np.radians(angle) * OBLIQUE, (len(mesh.cells), 1)),
                atol=1e-10,
            )
            np.testing.assert_allclose(found["det_f"], 1.0, rtol=0, atol=2 * bound)


@pytest.mark.source("Holzapfel 2000, sections 2.5 and 2.6, for a homogeneous deformation")
@pytest.mark.parametrize("at", LOCATIONS)
@pytest.mark.parametrize("kind", SOLIDS)
def test_homogeneous_deformation_of_solids(kind: str, at: str) -> None:
    stretch = np.array([0.8, 0.1, -0.4])
    N = axis_angle(OBLIQUE, 0.7) + np.eye(3)
    turn = axis_angle([0, 0.6, 0.8], 2.0)
    U = (N * stretch) @ N.T
    n = N + turn @ N
    mesh = meshes.curved(meshes.patch(ELEMENTS[kind]))
    found = computed(mesh, mesh.points @ (turn + U + turn @ U).T, at=at).arrays
    logs = np.log1p(stretch)
    for name, values, d in (
        ("strain_green_lagrange", 0.5 * stretch * (2 + stretch), N),
        ("strain_hencky", logs, N),
        ("strain_biot", stretch, N),
        ("strain_almansi", 0.5 * (1 - np.exp(-2 * logs)), n),
    ):
        expected = six((d * values) @ d.T)
        np.testing.assert_allclose(
            found[name], np.tile(expected, (len(mesh.cells), 1)), atol=5e-14, err_msg=name
        )
    np.testing.assert_allclose(
        found["finite_rotation"], np.tile([0, 1.2, 1.6], (len(mesh.cells), 1)), atol=5e-14
    )
    np.testing.assert_allclose(found["det_f"], np.exp(logs.sum()), rtol=1e-13)


@pytest.mark.derived(
    "the table of measures: each derived measure of a base is the same function of its tensor"
)
@pytest.mark.parametrize("base", BASES)
def test_derived_measures_of_a_base(base: str) -> None:
    mesh = meshes.patch(ELEMENTS["tetra"])
    H = axis_angle(OBLIQUE, 1.0) + np.array([[0.3, 0.2, 0], [0, -0.1, 0.1], [0.05, 0, 0.02]])
    result = mesh.result(u=mesh.points @ H.T)
    arrays = strain(result, measures=["all"], base=base.replace("_", "-")).cell_data
    t = arrays[f"strain_{base}"]
    tensor = full(t)
    values, vectors = np.linalg.eigh(tensor)
    np.testing.assert_allclose(arrays[f"principal_strain_{base}"], values[:, ::-1], atol=1e-13)
    for k in range(3):
        d = arrays[f"principal_direction_{k + 1}_{base}"]
        np.testing.assert_allclose(np.abs((d * vectors[:, :, 2 - k]).sum(axis=1)), 1.0, atol=1e-12)
    np.testing.assert_allclose(arrays[f"max_shear_strain_{base}"], values[:, 2] - values[:, 0], atol=1e-13)
    trace = np.trace(tensor, axis1=1, axis2=2)
    np.testing.assert_allclose(arrays[f"volumetric_strain_{base}"], trace, atol=1e-13)
    deviator = tensor - trace[:, None, None] / 3 * np.eye(3)
    np.testing.assert_allclose(
        arrays[f"equivalent_strain_{base}"], np.sqrt(2 / 3 * (deviator**2).sum(axis=(1, 2))), atol=1e-13
    )
    np.testing.assert_allclose(arrays[f"deviatoric_strain_{base}"], [six(d) for d in deviator], atol=1e-13)
    assert {"finite_rotation", "finite_rotation_angle", "displacement_gradient"} <= set(arrays)
    assert not {"strain", "rotation", "equivalent_strain", "principal_strain"} & set(arrays)


PLANE_H = np.array([[0.4, 0.7, 0], [-0.2, -0.1, 0], [0, 0, 0]])


def in_plane() -> tuple[np.ndarray, np.ndarray, float]:
    """Stretches and directions of PLANE_H by hand: 2x2 eigenproblem; and det F in the plane."""
    F = np.eye(3) + PLANE_H
    values, vectors = np.linalg.eigh(F[:2, :2].T @ F[:2, :2])
    return np.sqrt(values), vectors, float(np.linalg.det(F[:2, :2]))


@pytest.mark.derived("plane stress: ln l3 = -nu/(1-nu) (ln l1 + ln l2); plane strain: l3 = 1")
@pytest.mark.parametrize("at", LOCATIONS)
@pytest.mark.parametrize("kind", SURFACES)
@pytest.mark.parametrize(
    ("model", "nu"), [("stress", 0.3), ("stress", 0.5), ("stress", 0.0), ("strain", None)]
)
def test_plane_assumptions(kind: str, at: str, model: PlaneModel, nu: float | None) -> None:
    mesh = meshes.curved(meshes.patch(ELEMENTS[kind]))
    found = computed(mesh, mesh.points @ PLANE_H.T, at=at, plane=model, poisson=nu).arrays
    stretch, directions, area = in_plane()
    across = 0.0 if nu is None else -nu / (1 - nu) * np.log(area)
    hencky = np.zeros((3, 3))
    hencky[:2, :2] = (directions * np.log(stretch)) @ directions.T
    hencky[2, 2] = across
    n = len(mesh.cells)
    np.testing.assert_allclose(found["strain_hencky"], np.tile(six(hencky), (n, 1)), atol=2e-14)
    np.testing.assert_allclose(found["strain_biot"][:, 2], np.expm1(across), atol=2e-14)
    np.testing.assert_allclose(found["strain_green_lagrange"][:, 2], np.expm1(2 * across) / 2, atol=2e-14)
    np.testing.assert_allclose(found["strain_almansi"][:, 2], -np.expm1(-2 * across) / 2, atol=2e-14)
    np.testing.assert_allclose(found["det_f"], area * np.exp(across), rtol=1e-13)
    angle = np.arctan2(PLANE_H[1, 0] - PLANE_H[0, 1], 2 + PLANE_H[0, 0] + PLANE_H[1, 1])
    np.testing.assert_allclose(found["finite_rotation"], np.tile([0, 0, angle], (n, 1)), atol=2e-14)


@pytest.mark.derived(
    "a plane mesh whose third direction is not stated: the rotation is known, finite strain is refused"
)
def test_plane_without_assumption() -> None:
    mesh = meshes.patch(ELEMENTS["quad"])
    u = mesh.points @ PLANE_H.T
    found = computed(mesh, u, ["finite_rotation", "finite_rotation_angle"]).arrays
    angle = np.arctan2(PLANE_H[1, 0] - PLANE_H[0, 1], 2 + PLANE_H[0, 0] + PLANE_H[1, 1])
    np.testing.assert_allclose(found["finite_rotation"][:, 2], angle, atol=1e-14)
    for name in STRAINS:
        with pytest.raises(UsageError, match=f"{name} depends on the strain across the plane"):
            computed(mesh, u, [name])


@pytest.mark.derived(
    "axisymmetric: hoop stretch r/R; u_r = R/2, u_z = -Z/4: stretches 1.5, 1.5, 0.75, also on the axis"
)
@pytest.mark.parametrize("at", LOCATIONS)
def test_axisymmetric_finite(at: str) -> None:
    for offset in (0.0, 0.4):
        mesh = meshes.patch(ELEMENTS["quad"])
        mesh = mesh._replace(points=mesh.points + np.array([offset, 0, 0]))
        found = computed(mesh, mesh.points * [0.5, -0.25, 0], at=at, plane="axisymmetric").arrays
        expected = np.log([1.5, 0.75, 1.5, 1, 1, 1])
        np.testing.assert_allclose(found["strain_hencky"], np.tile(expected, (5, 1)), atol=2e-14)
        np.testing.assert_allclose(found["det_f"], 1.5 * 1.5 * 0.75, rtol=1e-13)


def skin(n: int = 5) -> meshes.Mesh:
    """A doubly curved skin of nine-node quads."""
    axis = np.linspace(-0.5, 0.5, 2 * n + 1)
    x, y = (a.ravel() for a in np.meshgrid(axis, axis, indexing="ij"))
    points = np.stack([x, y, 0.4 * x**2 - 0.7 * x * y + 0.2 * y**3], axis=1)
    first = (np.arange(0, 2 * n, 2)[:, None] * (2 * n + 1) + np.arange(0, 2 * n, 2)).ravel()
    row = 2 * n + 1
    offsets = [0, 2 * row, 2 * row + 2, 2, row, 2 * row + 1, row + 2, 1, row + 1]
    return meshes.Mesh(points, first[:, None] + np.array(offsets), ELEMENTS["quad9"])


@pytest.mark.derived("a curved skin tilted by a quarter turn: no finite strain; small strain is wholly wrong")
@pytest.mark.parametrize("at", LOCATIONS)
def test_a_tilted_curved_skin_is_not_strained(at: str) -> None:
    mesh = skin()
    u = mesh.points @ axis_angle([0.8, 0.6, 0], np.pi / 2).T
    for nu in (None, 0.3):
        found = computed(mesh, u, [*FINITE, "strain"], at=at, poisson=nu).arrays
        for name in STRAINS:
            assert np.abs(found[name]).max() < 2e-14
        np.testing.assert_allclose(found["finite_rotation_angle"], np.pi / 2, rtol=0, atol=1e-13)
        assert np.abs(found["strain"]).max() > 0.2


@pytest.mark.derived(
    "a membrane stretched by 1.5 and 0.9 in its plane, then turned: det F is the area ratio times l3"
)
@pytest.mark.parametrize("at", LOCATIONS)
@pytest.mark.parametrize("kind", SURFACES)
@pytest.mark.parametrize("nu", [None, 0.0, 0.3, 0.5])
def test_surfaces_in_space(kind: str, at: str, nu: float | None) -> None:
    flat = meshes.curved(meshes.patch(ELEMENTS[kind]))
    turn = axis_angle(OBLIQUE, 2.5) + np.eye(3)
    mesh = flat._replace(points=flat.points @ TILT.T)
    u = flat.points * [1.5, 0.9, 1] @ (turn @ TILT).T - mesh.points
    found = computed(mesh, u, at=at, poisson=nu).arrays
    thickness = 0.0 if nu is None else -nu / (1 - nu) * np.log(1.5 * 0.9)
    hencky = TILT @ np.diag([np.log(1.5), np.log(0.9), thickness]) @ TILT.T
    n = len(mesh.cells)
    np.testing.assert_allclose(found["strain_hencky"], np.tile(six(hencky), (n, 1)), atol=2e-14)
    np.testing.assert_allclose(found["det_f"], 1.5 * 0.9 * np.exp(thickness), rtol=1e-13)
    np.testing.assert_allclose(found["finite_rotation"], np.tile(2.5 * OBLIQUE, (n, 1)), atol=5e-14)
    almansi = (
        turn
        @ TILT
        @ np.diag(0.5 * (1 - np.exp(-2 * np.log([1.5, 0.9, np.exp(thickness)]))))
        @ (turn @ TILT).T
    )
    np.testing.assert_allclose(found["strain_almansi"], np.tile(six(almansi), (n, 1)), atol=5e-14)


def test_poisson_of_a_surface_lies_in_its_range() -> None:
    mesh = skin(2)
    with pytest.raises(UsageError, match=r"between -1 and 0\.5"):
        computed(mesh, mesh.points, poisson=0.6)


@pytest.mark.derived(
    "lines: F = l Q, Q the smallest turn from old to new tangent; nothing across is strained"
)
@pytest.mark.parametrize("at", LOCATIONS)
@pytest.mark.parametrize("kind", LINES)
@pytest.mark.parametrize("stretch", [1.0, 1.3, 0.2])
@pytest.mark.parametrize("angle", [0.0, 1e-6, 5.0, 90.0, 119.9, 120.1, 179.9, 179.9999, 180 - 1e-6, 180.0])
def test_lines(kind: str, at: str, stretch: float, angle: float) -> None:
    patch = meshes.patch(ELEMENTS[kind])
    for direction in np.array([[0.9, 0.4, 0.2], [0, 0, 1], [1, 1, 0]]):
        t = direction / np.linalg.norm(direction)
        across = np.cross(t, OBLIQUE)
        axis = across / np.linalg.norm(across)
        s = np.linalg.norm(patch.points, axis=1)
        mesh = patch._replace(points=s[:, None] * t)
        new = t + axis_angle(axis, np.radians(angle)) @ t
        found = computed(mesh, s[:, None] * (stretch * new - t), at=at).arrays
        n = len(mesh.cells)
        for name, value in (
            ("green_lagrange", (stretch**2 - 1) / 2), ("hencky", np.log(stretch)), ("biot", stretch - 1)
        ):  # fmt: skip
            expected = six(value * np.outer(t, t))
            np.testing.assert_allclose(found[f"strain_{name}"], np.tile(expected, (n, 1)), atol=5e-13)
        almansi = six((1 - stretch**-2) / 2 * np.outer(new, new))
        np.testing.assert_allclose(found["strain_almansi"], np.tile(almansi, (n, 1)), atol=5e-13)
        np.testing.assert_allclose(found["finite_rotation_angle"], np.radians(angle), rtol=0, atol=1e-13)
        np.testing.assert_allclose(found["det_f"], stretch, rtol=1e-12)
        if angle < 179.99:
            vector = np.radians(angle) * axis
            np.testing.assert_allclose(found["finite_rotation"], np.tile(vector, (n, 1)), atol=1e-12)


@pytest.mark.derived(
    "turned inside out: NaN in finite measures, counted in the summary's warnings; the rest is right"
)
def test_inside_out_is_counted() -> None:
    from unturn.options import StrainOptions
    from unturn.pipeline import compute
    from unturn.summary import summarise

    mesh = meshes.patch(ELEMENTS["hexahedron"])
    cells = np.concatenate([mesh.cells, mesh.cells + len(mesh.points)])
    points = np.concatenate([mesh.points, mesh.points + np.array([3, 0, 0])])
    u = np.concatenate([mesh.points * 0.1, -2.0 * mesh.points])
    result = Result(points, (CellBlock("hexahedron", cells, np.arange(14)),), {"u": u})
    computed_fields = compute(result, StrainOptions(base="hencky"), diagnose=True)
    summary = summarise(computed_fields)
    assert any(w.startswith("7 cells are turned inside out (det F <= 0)") for w in summary.warnings)
    found = computed_fields.fields.arrays["strain_hencky"]
    np.testing.assert_allclose(found[:7, :3], np.log(1.1), rtol=1e-12)
    assert np.isnan(found[7:]).all()
