"""Measured from another step: u - u_N for small, F F_N^-1 for finite measures."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest

import meshes
from documents import run
from strategies import axis_angle
from unturn import CellBlock, Result, UsageError, displacement_gradient, io, strain
from unturn.elements import ELEMENTS
from unturn.fields import LOCATIONS

LEVER = Path(__file__).parents[1] / "sample_meshes" / "lever.xdmf"
BRACKET = LEVER.with_name("bracket.vtu")
I = np.eye(3)  # noqa: E741


def symmetric(t: np.ndarray) -> np.ndarray:
    t = 0.5 * (t + t.swapaxes(-1, -2))
    return np.stack(
        [t[..., 0, 0], t[..., 1, 1], t[..., 2, 2], t[..., 0, 1], t[..., 1, 2], t[..., 0, 2]], axis=-1
    )


def two_steps(kind: str) -> tuple[meshes.Mesh, np.ndarray, np.ndarray]:
    """A mesh and two displacements that are neither small nor homogeneous."""
    mesh = meshes.curved(meshes.patch(ELEMENTS[kind]))
    x = mesh.points / np.ptp(mesh.points, axis=0).max()
    first = 0.2 * np.stack([x[:, 1] ** 2, np.sin(x[:, 0]), x[:, 0] * x[:, 1]], axis=1)
    more = np.stack([x[:, 0] * x[:, 1], 0 * x[:, 0], x[:, 2]], axis=1)
    second = (x + first) @ axis_angle([0.36, 0.48, 0.8], 1.2).T + first + 0.15 * more
    scale = np.ptp(mesh.points, axis=0).max()
    return mesh, first * scale, second * scale


@pytest.mark.derived(
    "F of the step relative to step N is F F_N^-1: direct matrix products at the same points"
)
@pytest.mark.parametrize("kind", ["tetra", "tetra10", "hexahedron", "hexahedron20", "wedge15", "pyramid"])
def test_finite_measures_of_solids(kind: str) -> None:
    mesh, first, second = two_steps(kind)
    F0, F1 = (I + displacement_gradient(mesh.points, mesh.cells, u, kind) for u in (first, second))
    F = F1 @ np.linalg.inv(F0)
    names = ["strain", "strain_green_lagrange", "strain_almansi", "det_f"]
    found = strain(mesh.result(u=second), zero=mesh.result(u=first), measures=names).cell_data
    np.testing.assert_allclose(found["strain"], symmetric(F1 - F0), atol=1e-13)
    np.testing.assert_allclose(
        found["strain_green_lagrange"], symmetric(F.swapaxes(1, 2) @ F - I) / 2, atol=1e-12
    )
    inverse = np.linalg.inv(F)
    np.testing.assert_allclose(
        found["strain_almansi"], symmetric(I - inverse.swapaxes(1, 2) @ inverse) / 2, atol=1e-12
    )
    np.testing.assert_allclose(found["det_f"], np.linalg.det(F), rtol=1e-12)


@pytest.mark.derived(
    "a body that only turns from step N on is not strained since then, however strained it was"
)
@pytest.mark.parametrize("at", LOCATIONS)
@pytest.mark.parametrize("kind", ["hexahedron20", "tetra10", "quad8", "line3"])
def test_turning_from_the_zero_step(kind: str, at: Any) -> None:
    mesh, first, _ = two_steps(kind)
    turn = axis_angle([0.36, 0.48, 0.8], 1.0)
    second = first + (mesh.points + first) @ turn.T
    found = strain(
        mesh.result(u=second), zero=mesh.result(u=first), at=at, base="hencky", measures=["strain", "rotation_angle"]
    ).cell_data  # fmt: skip
    np.testing.assert_allclose(found["strain_hencky"], 0, atol=1e-13)
    if mesh.element.dim > 1:
        np.testing.assert_allclose(found["finite_rotation_angle"], 1.0, atol=1e-12)


@pytest.mark.derived("plane stress: the thickness too is relative; ln l3 = -nu/(1-nu) ln(J / J_N)")
def test_plane_stress() -> None:
    mesh = meshes.patch(ELEMENTS["quad8"])
    A, B = np.diag([0.5, 0.1, 0]), np.array([[0.2, 0.6, 0], [-0.1, 0.3, 0], [0, 0, 0]])
    found = strain(
        mesh.result(u=mesh.points @ B.T), zero=mesh.result(u=mesh.points @ A.T), base="hencky", measures=["strain", "det_f"],
        plane="stress", poisson=0.3,
    ).cell_data  # fmt: skip
    ratio = np.linalg.det((I + B)[:2, :2]) / (1.5 * 1.1)
    across = -0.3 / 0.7 * np.log(ratio)
    np.testing.assert_allclose(found["strain_hencky"][:, 2], across, atol=1e-13)
    np.testing.assert_allclose(found["det_f"], ratio * np.exp(across), rtol=1e-13)


@pytest.mark.derived("axisymmetric: the hoop stretch is r / r_N")
def test_axisymmetric() -> None:
    mesh = meshes.patch(ELEMENTS["quad8"])
    mesh = mesh._replace(points=mesh.points + np.array([0.5, 0, 0]))
    found = strain(
        mesh.result(u=mesh.points * [0.5, -0.1, 0]), zero=mesh.result(u=mesh.points * [0.2, 0.3, 0]),
        measures=["strain", "strain_hencky"], plane="axisymmetric",
    ).cell_data  # fmt: skip
    expected = [np.log(1.5 / 1.2), np.log(0.9 / 1.3), np.log(1.5 / 1.2), 0, 0, 0]
    np.testing.assert_allclose(found["strain_hencky"], np.tile(expected, (5, 1)), atol=1e-13)
    np.testing.assert_allclose(found["strain"][:, :3], np.tile([0.3, -0.4, 0.3], (5, 1)), atol=1e-13)


@pytest.mark.derived("both directions between any two steps: F and F^-1 have opposite logarithms of stretch")
def test_there_and_back() -> None:
    mesh, first, second = two_steps("tetra")
    names = ["principal_strain_hencky", "strain"]
    there = strain(mesh.result(u=second), zero=mesh.result(u=first), measures=names).cell_data
    back = strain(mesh.result(u=first), zero=mesh.result(u=second), measures=names).cell_data
    np.testing.assert_allclose(there[names[0]], -back[names[0]][:, ::-1], atol=1e-12)
    np.testing.assert_allclose(there["strain"], -back["strain"], atol=1e-15)
    none = strain(mesh.result(u=second), zero=mesh.result(u=second), measures=names).cell_data
    for name in names:
        np.testing.assert_array_equal(none[name], 0)


@pytest.mark.derived(
    "rigid motion since step N: x = R (x_N + ...); taken out, what is left is the strain since then"
)
def test_with_rigid_motion_out() -> None:
    mesh, first, _ = two_steps("hexahedron")
    middle = mesh.points + first
    stretched = middle @ (I + np.diag([1e-3, -3e-4, 5e-4])).T
    second = stretched + stretched @ axis_angle([0, 0, 1], 0.8).T - mesh.points
    found = strain(
        mesh.result(u=second), zero=mesh.result(u=first), solve="nonlinear", remove_rigid="whole", base="biot",
        measures=["strain", "rotation"],
    )  # fmt: skip
    expected = np.tile([1e-3, -3e-4, 5e-4, 0, 0, 0], (7, 1))
    np.testing.assert_allclose(found.cell_data["strain_biot"], expected, atol=1e-13)
    np.testing.assert_allclose(found.cell_data["finite_rotation"], 0, atol=1e-3)
    np.testing.assert_allclose(found.field_data["rigid_rotation"], [[0, 0, 0.8]], atol=1e-3)


@pytest.mark.derived("deformed coordinates: X = x - u for this step and for the zero step alike")
def test_with_deformed_coordinates() -> None:
    mesh, first, second = two_steps("hexahedron")
    names = ["strain", "strain_hencky"]
    plain = strain(mesh.result(u=second), zero=mesh.result(u=first), measures=names).cell_data
    moved = [
        Result(mesh.points + u, (CellBlock("hexahedron", mesh.cells, np.arange(7)),), {"u": u})
        for u in (first, second)
    ]
    found = strain(moved[1], zero=moved[0], measures=names, coordinates="deformed").cell_data
    for name in names:
        np.testing.assert_allclose(found[name], plain[name], atol=1e-13)


def test_a_zero_step_of_another_mesh_is_refused() -> None:
    small, large = meshes.patch(ELEMENTS["tetra"]), meshes.patch(ELEMENTS["tetra10"])
    with pytest.raises(UsageError, match="cannot be subtracted"):
        strain(large.result(u=large.points), zero=small.result(u=small.points))


def test_the_command_on_the_lever(tmp_path: Path) -> None:
    target = tmp_path / "out.xdmf"
    names = "strain,strain_green_lagrange"
    status, said = run(
        ["strain", str(LEVER), "-o", str(target), "--step", "5", "--zero-step", "2", "--measures", names,
         "--solve", "nonlinear"]
    )  # fmt: skip
    assert status == 0, said
    zero, last = io.read(LEVER, 2), io.read(LEVER, 5)
    (block,) = last.blocks
    F0, F1 = (
        I + displacement_gradient(r.points, block.connectivity, r.point_data["u"], block.cell_type)
        for r in (zero, last)
    )
    F = F1 @ np.linalg.inv(F0)
    found = io.read(target).cell_data
    np.testing.assert_allclose(found["strain"], symmetric(F1 - F0), atol=1e-12)
    np.testing.assert_allclose(
        found["strain_green_lagrange"], symmetric(F.swapaxes(1, 2) @ F - I) / 2, atol=1e-12
    )


def test_every_step_of_a_series_from_one(tmp_path: Path) -> None:
    target = tmp_path / "out.xdmf"
    status, said = run(
        [
            "strain",
            str(LEVER),
            "-o",
            str(target),
            "--step",
            "all",
            "--zero-step",
            "3",
            "--base",
            "green-lagrange",
        ]
    )
    assert status == 0, said
    peaks = [np.abs(io.read(target, k).cell_data["strain_green_lagrange"]).max() for k in range(7)]
    assert peaks[3] == 0
    assert min(peaks[:3] + peaks[4:]) > 1e-3


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        ([str(BRACKET), "--zero-step", "0"], "is not a series: --zero-step has nothing to measure from"),
        ([str(LEVER), "--zero-step", "9"], "has 7 steps, 0 to 6"),
        ([str(LEVER), "--zero-step", "-1"], "has 7 steps, 0 to 6"),
    ],
)
def test_zero_steps_that_are_refused(tmp_path: Path, arguments: list[str], said: str) -> None:
    status, text = run(["strain", *arguments, "-o", str(tmp_path / f"out{Path(arguments[0]).suffix}")])
    assert status == 2, text
    assert said in text
    assert not list(tmp_path.iterdir())
