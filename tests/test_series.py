"""Increments, rates and accumulated strain from one step to the next."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.linalg import expm, logm, polar

from meshes import Mesh, curved, patch
from strategies import axis_angle, gradients, unit_vectors
from unturn.elements import ELEMENTS
from unturn.errors import InputError, UsageError
from unturn.fields import compute_fields
from unturn.kinematics._relative import finite_gradient, increments, relative_gradient
from unturn.model import PlaneOptions, build_model
from unturn.series import StepChanges, choose_series_measures

Floats = NDArray[np.float64]
AXIS = np.array([1.0, 2.0, -2.0]) / 3.0
KINDS = {"solid": "hexahedron20", "plane": "quad8", "surface": "triangle6", "line": "line3"}


def batch(*tensors: Floats) -> Floats:
    return np.moveaxis(np.array(tensors), 0, -1)


@pytest.mark.source("scipy 1.x: linalg.polar and linalg.logm")
@given(gradients(), gradients())
def test_increments_are_logarithm_and_rotation_of_the_relative_deformation(H0: Floats, H1: Floats) -> None:
    F0, F1 = np.eye(3) + H0, np.eye(3) + H1
    if min(np.linalg.svd(F0)[1].min(), np.linalg.svd(F1)[1].min()) < 0.3:
        return
    strain, rotation = increments(batch(H0), batch(H1), finite=True)
    R, V = polar(F1 @ np.linalg.inv(F0), side="left")
    xx, yy, zz, xy, yz, xz = strain[:, 0]
    assert np.allclose([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]], logm(V).real, rtol=0, atol=1e-13)
    angle = np.linalg.norm(rotation)
    if angle < 3.1:  # beyond, the axis of the logarithm is not determined
        x, y, z = rotation[:, 0]
        assert np.allclose(expm(np.array([[0, -z, y], [z, 0, -x], [-y, x, 0]])), R, rtol=0, atol=1e-13)


@pytest.mark.derived("the relative deformation of two steps of a steady spin is that spin's own rotation")
@given(unit_vectors(), st.floats(1e-6, 3.0), st.integers(0, 50))
def test_a_steady_spin_is_exact_and_has_no_deformation_rate(axis: Floats, turn: float, k: int) -> None:
    before, after = axis_angle(axis, k * turn), axis_angle(axis, (k + 1) * turn)
    strain, rotation = increments(batch(before), batch(after), finite=True)
    assert np.abs(strain).max() < 1e-14
    assert np.allclose(rotation[:, 0], turn * axis, rtol=0, atol=2e-14 * (k + 1) * max(1.0, turn))


@pytest.mark.derived(
    "F = R(wt) exp(tA), A fixed and symmetric: F_k F_k-1^-1 = R_k exp(dt A) R_k^T times the spin"
)
def test_a_spinning_part_that_stretches_keeps_its_stretching_rate() -> None:
    A = np.diag([0.02, -0.01, 0.005])
    steps = []
    for t in (1.0, 1.5):
        R = np.eye(3) + axis_angle(AXIS, 2.0 * t)
        steps.append(R @ expm(t * A) - np.eye(3))
    strain, rotation = increments(batch(steps[0]), batch(steps[1]), finite=True)
    values = np.linalg.eigvalsh(np.array([[strain[0, 0], strain[3, 0], strain[5, 0]],
                                          [strain[3, 0], strain[1, 0], strain[4, 0]],
                                          [strain[5, 0], strain[4, 0], strain[2, 0]]]))  # fmt: skip
    assert np.allclose(values / 0.5, [-0.01, 0.005, 0.02], atol=1e-14)
    assert np.allclose(rotation[:, 0], 1.0 * AXIS, atol=1e-14)


@pytest.mark.derived("small measures are differences")
def test_small_increments_are_differences() -> None:
    rng = np.random.default_rng(3)
    before, after = rng.normal(size=(2, 3, 3, 7)) * 1e-3
    strain, rotation = increments(before, after, finite=False)
    D = after - before
    assert np.allclose(strain[3], 0.5 * (D[0, 1] + D[1, 0]))
    assert np.allclose(rotation[2], 0.5 * (D[1, 0] - D[0, 1]))


@pytest.mark.derived("h = (H1 - H0) F0^-1")
def test_a_small_change_of_a_large_deformation_keeps_its_digits() -> None:
    H0 = 10.0 * np.random.default_rng(5).normal(size=(3, 3))
    F0 = np.eye(3) + H0
    small = 1e-9 * np.array([[0.0, 1, 0], [2, 0, 0], [0, 0, 3]])
    found = relative_gradient(batch(H0), batch(H0 + small @ F0))[..., 0]
    assert np.abs(found - small).max() < 1e-13 * np.linalg.cond(F0)


@pytest.mark.derived("singular or unknown deformation has no relative deformation")
def test_a_flattened_step_gives_nan_and_leaves_the_others() -> None:
    before = np.stack([-np.eye(3), np.full((3, 3), np.nan), np.zeros((3, 3))], axis=-1)
    strain, rotation = increments(before, np.full((3, 3, 3), 1e-3), finite=True)
    assert np.isnan(strain[:, :2]).all()
    assert np.isnan(rotation[:, :2]).all()
    assert np.isfinite(strain[:, 2]).all()


def mesh_and_axis(kind: str, bent: bool) -> tuple[Mesh, Floats]:
    """A patch and an axis about which its turning shows: across a line, normal to a plane mesh."""
    mesh = patch(ELEMENTS[KINDS[kind]])
    if kind == "line":  # a turn about itself is not in the displacement of its nodes
        axis = np.cross(mesh.points[1] - mesh.points[0], [0, 0, 1.0])
        return mesh, axis / np.linalg.norm(axis)
    mesh = curved(mesh) if bent else mesh
    if kind == "surface":  # not in a coordinate plane
        mesh = mesh._replace(points=mesh.points @ (np.eye(3) + axis_angle(AXIS, 0.4)).T)
    return mesh, np.array([0, 0, 1.0]) if kind == "plane" else AXIS


@pytest.mark.parametrize("kind", list(KINDS))
@pytest.mark.derived("F = R U of what the measures give")
def test_finite_gradient_from_measures_of_every_kind(kind: str) -> None:
    mesh, axis = mesh_and_axis(kind, True)
    R = axis_angle(axis, 1.2)
    u = mesh.points @ R.T
    model = build_model(mesh.result(u=u), plane=PlaneOptions("strain") if kind == "plane" else None)
    arrays = compute_fields(model, ["strain_biot", "finite_rotation"]).arrays
    H = finite_gradient(arrays["strain_biot"].T, arrays["finite_rotation"].T)
    assert np.allclose(H, R[:, :, None], rtol=0, atol=1e-12)


def run(
    changes: StepChanges, kind: str, motion: Callable[[float], Floats], times: list[float]
) -> list[dict[str, Floats]]:
    """The series measures of a patch whose displacement gradient at a time is `motion`."""
    mesh, _ = mesh_and_axis(kind, False)
    plane = PlaneOptions("strain") if kind == "plane" else None
    made = []
    for t in times:
        model = build_model(mesh.result(u=mesh.points @ motion(t).T), plane=plane)
        made.append(changes.add(compute_fields(model, changes.needs).arrays, t))
    return made


@pytest.mark.parametrize("kind", list(KINDS))
@pytest.mark.derived("steady rotation: no deformation rate, the spin is the angular velocity")
def test_steady_rotation_of_solids_planes_surfaces_and_lines(kind: str) -> None:
    _, axis = mesh_and_axis(kind, False)
    changes = StepChanges(["deformation_rate", "equivalent_deformation_rate", "spin"])
    made = run(changes, kind, lambda t: axis_angle(axis, 0.7 * t), [0.0, 1.0, 2.5, 3.0])
    assert np.isnan(made[0]["spin"]).all()
    for step in made[1:]:
        assert np.abs(step["deformation_rate"]).max() < 1e-12
        assert np.abs(step["equivalent_deformation_rate"]).max() < 1e-12
        assert np.allclose(step["spin"], 0.7 * axis, rtol=0, atol=1e-11)


@pytest.mark.derived("small increments of a linear solve are differences over dt")
def test_rates_of_a_linear_solve_come_from_differences() -> None:
    rate = np.array([[2e-3, 1e-3, 0], [-3e-3, 0, 0], [0, 0, -1e-3]])
    changes = StepChanges(["deformation_rate", "spin"], solve="linear")
    assert changes.needs == ("displacement_gradient",)
    made = run(changes, "solid", lambda t: rate * t, [0.0, 0.5, 2.0])
    for step in made[1:]:
        assert np.allclose(step["deformation_rate"], [2e-3, 0, -1e-3, -1e-3, 0, 0], atol=1e-14)
        assert np.allclose(step["spin"], [0, 0, -2e-3], atol=1e-14)


@pytest.mark.derived("a bar pulled to and fro accumulates the whole way")
def test_accumulated_strain_counts_the_whole_way() -> None:
    pull = np.diag([1.0, -0.5, -0.5])
    way = [0.0, 2e-3, -2e-3, 2e-3]
    names = ["equivalent_strain_increment", "accumulated_equivalent_strain"]
    made = run(StepChanges(names), "solid", lambda t: pull * way[int(t)], [0.0, 1.0, 2.0, 3.0])
    assert np.allclose([m["accumulated_equivalent_strain"][0] for m in made], [0, 2e-3, 6e-3, 10e-3])
    assert np.allclose([m["equivalent_strain_increment"][0] for m in made], [0, 2e-3, 4e-3, 4e-3])
    stretch = [np.diag(np.exp(np.array([1, -0.5, -0.5]) * w * 100)) - np.eye(3) for w in way]
    hencky = ["accumulated_equivalent_strain_hencky"]
    made = run(StepChanges(hencky, "nonlinear"), "solid", lambda t: stretch[int(t)], [0.0, 1.0, 2.0, 3.0])
    assert np.allclose([m[hencky[0]][0] for m in made], [0, 0.2, 0.6, 1.0], rtol=1e-12)


@pytest.mark.derived("simple shear gamma: equivalent rate gamma/sqrt 3, spin -gamma/2, of small steps")
def test_the_rate_of_simple_shear_tends_to_the_textbook_value() -> None:
    changes = StepChanges(["equivalent_deformation_rate", "spin"])
    times = list(np.linspace(0.0, 1.0, 101))
    made = run(changes, "solid", lambda t: np.array([[0, t, 0], [0, 0, 0], [0, 0, 0.0]]), times)
    assert np.allclose(made[-1]["equivalent_deformation_rate"], 1 / np.sqrt(3), rtol=1e-4)
    assert np.allclose(made[-1]["spin"], [0, 0, -0.5], rtol=1e-4, atol=1e-12)


@pytest.mark.practice("a deleted cell keeps what it had")
def test_a_cell_that_is_not_computed_keeps_its_accumulated_strain() -> None:
    changes = StepChanges(["accumulated_equivalent_strain"])
    H = np.zeros((2, 9))
    totals = []
    for pull in (1e-3, np.nan, 5e-3, 6e-3):
        H[0, [0, 4, 8]], H[1, [0, 4, 8]] = (
            np.array([1.0, -0.5, -0.5]) * pull,
            np.array([1.0, -0.5, -0.5]) * 1e-3,
        )
        totals.append(changes.add({"displacement_gradient": H.copy()}, None)["accumulated_equivalent_strain"])
    assert np.allclose([t[0] for t in totals], [1e-3, 1e-3, 1e-3, 2e-3])
    assert np.allclose([t[1] for t in totals], [1e-3] * 4)


def test_rates_need_rising_times() -> None:
    # Common practice, no source.
    H = {"strain_biot": np.zeros((1, 6)), "finite_rotation": np.zeros((1, 3))}
    with pytest.raises(UsageError, match="time of every step"):
        StepChanges(["spin"]).add(H, None)
    changes = StepChanges(["spin"])
    changes.add(H, 1.0)
    with pytest.raises(InputError, match="does not rise"):
        changes.add(H, 1.0)


def test_names_follow_base_and_solve() -> None:
    # Common practice, no source.
    assert choose_series_measures(["spin", "strain"]) == ("spin",)
    assert choose_series_measures(["rotation_increment"], base="biot") == ("finite_rotation_increment",)
    with pytest.raises(UsageError, match="is fiction"):
        choose_series_measures(["strain_increment"], base="hencky", solve="linear")
    assert choose_series_measures(["spin"], solve="linear") == ("spin",)
