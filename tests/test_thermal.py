"""Free thermal strain taken out: free expansion leaves nothing, restraint leaves its opposite."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

import meshes
from strategies import axis_angle
from unturn import CellBlock, Result, UsageError, strain
from unturn.elements import ELEMENTS
from unturn.fields import LOCATIONS
from unturn.pipeline import StrainOptions, compute

ALPHA, T0 = 12e-6, 20.0
HEAT: dict[str, Any] = {"thermal_expansion": ALPHA, "temperature": "T", "reference_temperature": T0}
DERIVED = ["mechanical_strain", "equivalent_strain_mechanical", "principal_strain_mechanical", "max_shear_strain_mechanical",
           "volumetric_strain_mechanical", "deviatoric_strain_mechanical"]  # fmt: skip
SOLIDS = [name for name, e in ELEMENTS.items() if e.dim == 3 and e.order <= 2]
TILT = axis_angle([0.6, 0.0, 0.8], 0.4) + np.eye(3)


def largest(result: Result, **options: Any) -> float:
    """Return the largest mechanical number of any kind, over the free strain of the case."""
    arrays = strain(result, displacement="u", measures=DERIVED, **options).cell_data
    return max(float(np.abs(arrays[name]).max()) for name in DERIVED) / (ALPHA * 100)


@pytest.mark.source(
    "Timoshenko and Goodier, Theory of Elasticity, chapter 13: free expansion is free of stress"
)
@pytest.mark.parametrize("at", LOCATIONS)
@pytest.mark.parametrize("nodal", [True, False])
@pytest.mark.parametrize("kind", SOLIDS)
def test_uniform_heating_of_a_free_body(kind: str, nodal: bool, at: Any) -> None:
    mesh = meshes.curved(meshes.patch(ELEMENTS[kind]))
    result = mesh.result(u=ALPHA * 100 * mesh.points)
    n = len(mesh.points) if nodal else len(mesh.cells)
    data = {"T": np.full(n, T0 + 100)}
    result = result.with_arrays(point_data=data) if nodal else result.with_arrays(cell_data=data)
    assert largest(result, at=at, **HEAT) < 1e-12
    total = strain(result, displacement="u", measures=["strain"], at=at, **HEAT).cell_data["strain"]
    np.testing.assert_allclose(total[:, :3], ALPHA * 100, rtol=1e-12)


def warmed(mesh: meshes.Mesh) -> Result:
    """A linear temperature b.x: u = a (x (b.x) - |x|^2 b/2) is free of stress; quadratic in x."""
    x = mesh.points
    b = np.array([30.0, 50.0, 20.0]) * (np.ptp(x, axis=0) > 0)
    u = ALPHA * (x * (x @ b)[:, None] - 0.5 * (x**2).sum(axis=1)[:, None] * b)
    return mesh.result(u=u, T=T0 + x @ b)


@pytest.mark.source(
    "Timoshenko and Goodier, chapter 13: a linear temperature strains a free body without stress"
)
@pytest.mark.parametrize("at", LOCATIONS)
def test_linear_temperature_in_a_free_body(at: Any) -> None:
    # Q2 bricks hold the field on any straight brick, distorted ones too; so the mean must be that of the temperature
    assert largest(warmed(meshes.patch(ELEMENTS["hexahedron27"])), at=at, **HEAT) < 1e-12
    assert largest(warmed(meshes.patch(ELEMENTS["tetra10"])), at=at, **HEAT) < 1e-12
    plate = warmed(meshes.patch(ELEMENTS["quad9"]))
    assert largest(plate, at=at, plane="stress", poisson=0.3, **HEAT) < 1e-12


@pytest.mark.derived("plane stress is free across: zero; plane strain is held across: -alpha dT, whatever nu")
@pytest.mark.parametrize("at", LOCATIONS)
def test_plane_meshes(at: Any) -> None:
    mesh = meshes.patch(ELEMENTS["quad8"])
    result = mesh.result(u=ALPHA * 100 * mesh.points, T=np.full(len(mesh.points), T0 + 100))
    for nu in (0.0, 0.3, 0.5):
        assert largest(result, at=at, plane="stress", poisson=nu, **HEAT) < 1e-12
    total = strain(result, displacement="u", plane="stress", poisson=0.3, at=at, **HEAT).cell_data["strain"]
    np.testing.assert_allclose(total, np.tile(ALPHA * 100 * np.array([1, 1, 1, 0, 0, 0]), (5, 1)), atol=1e-18)
    held = strain(result, displacement="u", plane="strain", at=at, **HEAT).cell_data
    expected = -ALPHA * 100 * np.array([0, 0, 1, 0, 0, 0])
    np.testing.assert_allclose(held["mechanical_strain"], np.tile(expected, (5, 1)), atol=1e-17)
    np.testing.assert_allclose(held["principal_strain_mechanical"][:, 2], -ALPHA * 100)
    ring = mesh._replace(points=mesh.points + np.array([0.3, 0, 0]))
    axial = ring.result(u=ALPHA * 100 * ring.points, T=np.full(len(ring.points), T0 + 100))
    assert largest(axial, at=at, plane="axisymmetric", **HEAT) < 1e-12


@pytest.mark.source(
    "plane stress, isotropic: e_zz = -nu/(1-nu) (e_xx + e_yy) + (1+nu)/(1-nu) a dT; Timoshenko and Goodier, chapter 13"
)
def test_plane_stress_with_load_and_heat() -> None:
    nu, growth = 0.3, ALPHA * 100
    mesh = meshes.patch(ELEMENTS["quad"])
    E = np.diag([1e-3, -0.3e-3, 0]) + growth * np.diag([1, 1, 0])
    result = mesh.result(u=mesh.points @ E.T, T=np.full(len(mesh.points), T0 + 100))
    found = strain(result, displacement="u", plane="stress", poisson=nu, **HEAT).cell_data
    # a bar pulled along x: mechanical (1, -nu, -nu) 1e-3
    np.testing.assert_allclose(
        found["mechanical_strain"][:, :3], np.tile([1e-3, -0.3e-3, -0.3e-3], (5, 1)), atol=1e-17
    )
    total = -nu / (1 - nu) * (0.7e-3 + 2 * growth) + (1 + nu) / (1 - nu) * growth
    np.testing.assert_allclose(found["strain"][:, 2], total, atol=1e-17)
    assert found["equivalent_strain_mechanical"] * 1e6 == pytest.approx(867, abs=0.5)


@pytest.mark.derived("surfaces and lines show strain along themselves: free expansion leaves nothing there")
@pytest.mark.parametrize("at", LOCATIONS)
@pytest.mark.parametrize("kind", ["triangle6", "quad9", "line3"])
def test_surfaces_and_lines(kind: str, at: Any) -> None:
    mesh = meshes.patch(ELEMENTS[kind])
    if mesh.element.dim == 2:
        bent = mesh.points + np.stack(
            [0 * mesh.points[:, 0], 0 * mesh.points[:, 0], mesh.points[:, 0] ** 2], axis=1
        )
        mesh = mesh._replace(points=bent @ TILT.T)
    result = mesh.result(u=ALPHA * 100 * mesh.points, T=np.full(len(mesh.points), T0 + 100))
    assert largest(result, at=at, **HEAT) < 1e-12


@pytest.mark.derived(
    "three coefficients along the axes of the frame: u = sum a_k dT (x.a_k) a_k leaves nothing"
)
def test_three_coefficients_in_a_frame() -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron"])
    alphas = np.array([1.0, 2.0, -0.5]) * ALPHA
    axes = np.array([[1.0, 1, 0], [0, 0, np.sqrt(2)], [1, -1, 0]]) / np.sqrt(2)
    growth = axes.T @ np.diag(alphas * 100) @ axes
    n = len(mesh.points)
    text = ",".join(repr(float(a)) for a in alphas)
    heat = {**HEAT, "thermal_expansion": text}
    turned = mesh.result(u=mesh.points @ growth.T, T=np.full(n, T0 + 100))
    assert largest(turned, frame="cartesian 1,1,0 0,0,1", **heat) < 1e-12
    plain = mesh.result(u=mesh.points * alphas * 100, T=np.full(n, T0 + 100))
    assert largest(plain, **heat) < 1e-12
    # without the frame it is not free: what is left is the difference
    left = strain(turned, displacement="u", measures=["mechanical_strain"], **heat).cell_data[
        "mechanical_strain"
    ]
    expected = growth - np.diag(alphas * 100)
    np.testing.assert_allclose(left[0, :4], [*np.diag(expected), expected[0, 1]], atol=1e-17)
    first = np.tile([1.0, 1, 0], (7, 1))
    by_array = turned.with_arrays(cell_data={"fibre": first, "side": np.tile([0, 0, 1.0], (7, 1))})
    assert largest(by_array, frame="arrays fibre side", **heat) < 1e-12


@pytest.mark.derived(
    "a wound ring: along r, t, z in a cylindrical frame; u = (a_r r, 0, a_z z) with a_t = a_r"
)
def test_three_coefficients_in_a_cylindrical_frame() -> None:
    mesh = meshes.patch(ELEMENTS["tetra"])
    mesh = mesh._replace(points=mesh.points + np.array([1.0, 0.5, 0]))
    u = mesh.points * np.array([ALPHA, ALPHA, 3 * ALPHA]) * 100
    result = mesh.result(u=u, T=np.full(len(u), T0 + 100))
    heat = {**HEAT, "thermal_expansion": f"{ALPHA},{ALPHA},{3 * ALPHA}"}
    assert largest(result, frame="cylindrical z", **heat) < 1e-12


def two_parts() -> Result:
    mesh = meshes.patch(ELEMENTS["hexahedron"])
    n = len(mesh.points)
    points = np.concatenate([mesh.points, mesh.points + np.array([5.0, 0, 0])])
    cells = np.concatenate([mesh.cells, mesh.cells + n])
    u = points * np.repeat([ALPHA, 2 * ALPHA], n)[:, None] * 100
    part = np.repeat([1, 2], 7)
    groups = {"foot": np.arange(7), "the arm": np.arange(7, 14)}
    return Result(points, (CellBlock("hexahedron", cells, np.arange(14)),), {"u": u, "T": np.full(2 * n, T0 + 100.0)},
                  {"part": part}, groups=groups)  # fmt: skip


@pytest.mark.derived("each part with its own coefficient")
@pytest.mark.parametrize("text", ["part=1:12e-6;part=2:24e-6", "foot:12e-6; the arm:24e-6,24e-6,24e-6"])
def test_by_region(text: str) -> None:
    assert largest(two_parts(), **{**HEAT, "thermal_expansion": text}) < 1e-12


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"temperature": None}, "needs all three"),
        ({"reference_temperature": None}, "needs all three"),
        ({"thermal_expansion": None}, "needs all three"),
        ({"temperature": "TT"}, "no array is called 'TT'. Did you mean 'T'"),
        ({"temperature": "u"}, "is not one number a node or cell"),
        ({"thermal_expansion": "1e-6,2e-6"}, "neither one number nor three"),
        ({"thermal_expansion": "steel"}, "neither one number nor three"),
        ({"thermal_expansion": "nan"}, "neither one number nor three"),
        ({"thermal_expansion": "part=1:12e-6"}, "7 cells belong to none of these regions"),
        ({"thermal_expansion": "part=1:12e-6;arm:24e-6"}, "no region is called 'arm'"),
        ({"thermal_expansion": "part=x:12e-6"}, "no region is called 'part=x'"),
    ],
)
def test_wrong_combinations(change: dict[str, Any], said: str) -> None:
    with pytest.raises(UsageError) as error:
        strain(two_parts(), displacement="u", **{**HEAT, **change})
    assert said in str(error.value)


def test_mechanical_measures_need_heat_and_plane_stress_an_isotropic_one() -> None:
    with pytest.raises(UsageError, match="mechanical_strain needs the free thermal strain"):
        strain(two_parts(), displacement="u", measures=["mechanical_strain"])
    mesh = meshes.patch(ELEMENTS["quad"])
    result = mesh.result(u=mesh.points, T=np.zeros(len(mesh.points)))
    with pytest.raises(UsageError, match="plane stress with an expansion that differs by direction"):
        strain(
            result,
            displacement="u",
            plane="stress",
            poisson=0.3,
            **{**HEAT, "thermal_expansion": "1e-6,2e-6,0"},
        )
    with pytest.raises(UsageError, match=r"mechanical_strain.* depends on the strain across the plane"):
        strain(result, displacement="u", measures=["mechanical_strain"], **HEAT)


@pytest.mark.derived("measured from a step: T0 must be the temperature of that step")
def test_with_a_zero_step() -> None:
    mesh = meshes.patch(ELEMENTS["tetra"])
    n = len(mesh.points)
    bolted = 1e-3 * mesh.points * [1, -1, 0]
    cold = mesh.result(u=bolted, T=np.full(n, T0))
    hot = mesh.result(u=bolted + ALPHA * 100 * mesh.points, T=np.full(n, T0 + 100))
    found = strain(hot, displacement="u", zero=cold, **HEAT).cell_data["mechanical_strain"]
    np.testing.assert_allclose(found, 0, atol=1e-17)
    with pytest.raises(UsageError, match="with --zero-step it must be the temperature of that step"):
        strain(hot, displacement="u", zero=cold, **{**HEAT, "reference_temperature": 30.0})


def test_defaults_and_rigid_motion_with_heat() -> None:
    result = two_parts()
    found = strain(result, displacement="u", **HEAT).cell_data
    assert {
        "strain",
        "mechanical_strain",
        "equivalent_strain_mechanical",
        "principal_strain_mechanical",
    } <= set(found)
    moved = result.point_data["u"] + np.cross([0, 0, 0.1], result.points)
    turned = result.with_arrays(point_data={"u": moved})
    back = strain(
        turned, displacement="u", solve="linear", remove_rigid="bodies", measures=DERIVED, **HEAT
    ).cell_data
    for name in DERIVED:
        np.testing.assert_allclose(
            back[name], strain(result, displacement="u", measures=[name], **HEAT).cell_data[name], atol=1e-15
        )


@pytest.mark.practice("a coefficient of 12 is meant in millionths: no material expands a thousandth a degree")
@pytest.mark.parametrize(
    ("text", "told"), [("12", True), ("0,0.0011,0", True), ("1e-3", False), ("-2e-3", True)]
)
def test_a_coefficient_that_no_material_has_is_told(text: str, told: bool) -> None:
    result = warmed(meshes.patch(ELEMENTS["tetra"]))
    options = StrainOptions(thermal_expansion=text, temperature="T", reference_temperature=20.0)
    notes = " ".join(compute(result, options).fields.notes)
    assert ("is more than any material has" in notes) is told
    assert ("write twelve millionths as --thermal-expansion 12e-6" in notes) is told
