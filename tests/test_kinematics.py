"""Split, equivalent strain and the forms of a tensor."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from strategies import axis_angle, symmetric
from unturn import kinematics as kin
from unturn.errors import UsageError


@pytest.mark.source(
    "Timoshenko and Goodier, Theory of Elasticity, article 6: six strains and three rotations"
)
def test_strain_and_rotation_are_the_halves_of_the_gradient() -> None:
    H = np.arange(9.0).reshape(3, 3) * 1e-3
    np.testing.assert_array_equal(kin.strain(H) + kin.rotation_tensor(H), H)
    assert kin.strain(H)[0, 1] == pytest.approx((H[0, 1] + H[1, 0]) / 2, rel=1e-15)  # tensor shear
    np.testing.assert_array_equal(kin.strain(H), kin.strain(H).T)


@pytest.mark.derived("u = theta x X is the rotation theta itself; its gradient is the cross product's matrix")
@pytest.mark.parametrize("axis", range(3))
def test_rotation_vector_is_that_of_theta_cross_x(axis: int) -> None:
    theta = np.zeros(3)
    theta[axis] = 0.01
    H = np.cross(theta, np.eye(3)).T  # column j is theta x e_j
    np.testing.assert_allclose(kin.rotation_vector(H), theta, atol=1e-18)
    np.testing.assert_array_equal(kin.strain(H), np.zeros((3, 3)))
    assert kin.rotation_angle(H) == pytest.approx(0.01, rel=1e-15)


@pytest.mark.derived("turning the x axis towards y is anticlockwise seen from +z")
def test_anticlockwise_in_the_plane_is_positive() -> None:
    H = axis_angle((0, 0, 1), 1e-3)
    assert H[1, 0] > 0  # the end of the x axis rises
    assert kin.rotation_vector(H)[2] == pytest.approx(np.sin(1e-3), rel=1e-12)


@pytest.mark.source("uniaxial isochoric tension (e, -e/2, -e/2) gives e: Hill 1950, Plasticity, chapter 2")
def test_equivalent_strain_of_isochoric_tension_is_the_tension() -> None:
    assert kin.equivalent_strain(np.diag([2e-3, -1e-3, -1e-3])) == pytest.approx(2e-3, rel=1e-14)


@pytest.mark.source("pure shear gamma gives gamma / sqrt 3: Hill 1950, Plasticity, chapter 2")
@pytest.mark.parametrize(("i", "j"), [(0, 1), (1, 2), (0, 2)])
def test_equivalent_strain_of_pure_shear(i: int, j: int) -> None:
    e = np.zeros((3, 3))
    e[i, j] = e[j, i] = 1e-3 / 2
    assert kin.equivalent_strain(e) == pytest.approx(1e-3 / np.sqrt(3), rel=1e-14)


@pytest.mark.derived("2/3 (1 + nu) times the pull; 1/(1+nu) of the differences gives the pull itself")
@pytest.mark.parametrize("nu", [0.0, 0.2, 0.3, 0.5])
def test_both_forms_of_a_pull(nu: float) -> None:
    e = np.diag([1000.0, -nu * 1000, -nu * 1000])
    assert kin.equivalent_strain(e) == pytest.approx(2000 / 3 * (1 + nu), rel=1e-14)
    assert kin.equivalent_strain(e, poisson=nu) == pytest.approx(1000, rel=1e-14)
    if nu == 0.3:
        assert round(float(kin.equivalent_strain(e))) == 867


@pytest.mark.derived(
    "the principal differences and the deviator give the same norm: sum (e_i - e_j)^2 / 2 = 3/2 e':e'"
)
@given(symmetric(), st.floats(-0.5, 0.5))
def test_equivalent_strain_against_principal_differences(e: np.ndarray, nu: float) -> None:
    a, b, c = np.linalg.eigvalsh(e)
    differences = np.sqrt(((a - b) ** 2 + (b - c) ** 2 + (c - a) ** 2) / 2)
    assert kin.equivalent_strain(e, poisson=nu) == pytest.approx(differences / (1 + nu), rel=1e-11, abs=1e-14)
    assert kin.equivalent_strain(e) == pytest.approx(differences * 2 / 3, rel=1e-11, abs=1e-14)


@pytest.mark.derived("the deviator has no trace, the trace is the volumetric strain")
@given(symmetric())
def test_deviator_and_trace(e: np.ndarray) -> None:
    assert np.trace(kin.deviatoric_strain(e)) == pytest.approx(0, abs=1e-15)
    assert kin.volumetric_strain(e) == pytest.approx(np.trace(e), abs=1e-15)
    np.testing.assert_allclose(
        kin.deviatoric_strain(e) + kin.volumetric_strain(e) / 3 * np.eye(3), e, atol=1e-15
    )


@pytest.mark.practice("component order XX, YY, ZZ, XY, YZ, XZ of VTK's symmetric tensors")
def test_components_and_back() -> None:
    e = np.array([[1.0, 4.0, 6.0], [4.0, 2.0, 5.0], [6.0, 5.0, 3.0]])
    np.testing.assert_array_equal(kin.tensor_to_components(e), [1, 2, 3, 4, 5, 6])
    np.testing.assert_array_equal(kin.tensor_from_components([1, 2, 3, 4, 5, 6]), e)


@pytest.mark.derived("a function of a tensor field is the function of each tensor")
def test_batch_axes_come_first() -> None:
    H = np.random.default_rng(1).normal(size=(2, 5, 3, 3)) * 1e-3
    for function in (
        kin.strain,
        kin.rotation_vector,
        kin.equivalent_strain,
        kin.principal_strain,
        kin.small_strain_error,
    ):
        whole = function(H)
        assert whole.shape[:2] == (2, 5)
        np.testing.assert_allclose(whole[1, 3], function(H[1, 3]), rtol=1e-14, atol=1e-18)


@pytest.mark.parametrize("shape", [(3,), (2, 2), (4, 3, 2)])
def test_other_shapes_are_refused(shape: tuple[int, ...]) -> None:
    with pytest.raises(UsageError, match=r"\(\.\.\., 3, 3\)"):
        kin.strain(np.zeros(shape))
    with pytest.raises(UsageError, match=r"\(\.\.\., 6\)"):
        kin.tensor_from_components(np.zeros(shape))


@pytest.mark.source(
    "Green-Lagrange E = (F^T F - I)/2: Holzapfel 2000, Nonlinear Solid Mechanics, section 2.5"
)
def test_green_lagrange_keeps_the_digits_of_a_small_gradient() -> None:
    H = np.random.default_rng(2).normal(size=(3, 3))
    F = np.eye(3) + H
    np.testing.assert_allclose(kin.green_lagrange_strain(H), (F.T @ F - np.eye(3)) / 2, atol=1e-14)
    tiny = 1e-14 * H
    np.testing.assert_allclose(kin.green_lagrange_strain(tiny), (tiny + tiny.T) / 2, rtol=1e-12)
