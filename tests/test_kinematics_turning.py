"""What turning adds to the small strain, against polar decompositions and closed forms."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
import scipy.linalg
from hypothesis import assume, example, given, settings
from hypothesis import strategies as st

from strategies import axis_angle, gradients, unit_vectors
from unturn.kinematics import _motion, small_strain_error
from unturn.kinematics._symmetric import six_from_full

N = np.array([0.36, 0.48, 0.8])  # a unit normal: F = I - N N^T flattens along it


def measured(H: np.ndarray) -> tuple[float, float, float]:
    found = _motion.turning(np.asarray(H, dtype=float)[:, :, None])
    return float(found.error[0]), float(found.stretch[0]), float(found.angle[0])


def polar_in_many_digits(H: np.ndarray) -> tuple[float, float, float]:
    """Error, stretch and angle by Newton's iteration `R <- (R + R^-T)/2` (Higham 1986) with 60 digits."""
    with mpmath.workdps(60):
        one = mpmath.eye(3)
        gradient = mpmath.matrix(H.tolist())
        F = one + gradient
        R = F.copy()
        for _ in range(100):
            fresh = (R + (R**-1).T) / 2
            change = mpmath.mnorm(fresh - R, "f")
            R = fresh
            if change < mpmath.mpf(10) ** -50:
                break
        stretch = R.T * F - one
        error = (gradient + gradient.T) / 2 - stretch
        axial = [(R[i, j] - R[j, i]) / 2 for i, j in ((2, 1), (0, 2), (1, 0))]
        sine = mpmath.sqrt(sum(a * a for a in axial))
        angle = mpmath.atan2(sine, (R[0, 0] + R[1, 1] + R[2, 2] - 1) / 2)
        return float(mpmath.mnorm(error, "f")), float(mpmath.mnorm(stretch, "f")), float(angle)


def exact_branch(H: np.ndarray) -> bool:
    _, stretch, _ = polar_in_many_digits(H)
    return bool(0.5 * np.linalg.norm(H.T @ H) > _motion._NEGLIGIBLE * stretch)


@pytest.mark.source(
    "Higham 1986, Computing the polar decomposition, SIAM J. Sci. Stat. Comput. 7(4), with mpmath"
)
@settings(max_examples=150)
@given(gradients())
def test_turning_over_twelve_decades(H: np.ndarray) -> None:
    size = float(np.linalg.norm(H))
    assume(np.linalg.det(np.eye(3) + H) > 1e-2)
    error, stretch, angle = measured(H)
    true_error, true_stretch, true_angle = polar_in_many_digits(H)
    rounding = 4e-15 * max(size, size**2)
    series = 2e-3 * size * true_stretch  # the bound that the series promises
    if exact_branch(H):
        series = 0.0
        assert angle == pytest.approx(true_angle, rel=1e-12, abs=1e-14)
    else:
        assert angle == pytest.approx(true_angle, rel=2e-3, abs=1e-14)
    assert error == pytest.approx(true_error, rel=1e-12, abs=series + rounding)
    assert stretch == pytest.approx(true_stretch, rel=1e-12, abs=series + rounding)


@pytest.mark.source("scipy.linalg.polar")
@settings(max_examples=100)
@given(gradients())
def test_turning_against_scipy(H: np.ndarray) -> None:
    F = np.eye(3) + H
    assume(np.linalg.det(F) > 1e-2)
    R, U = scipy.linalg.polar(F)
    size = float(np.linalg.norm(H))
    error, stretch, angle = measured(H)
    slack = 1e-13 + 2e-3 * size * float(np.linalg.norm(U - np.eye(3)))
    assert error == pytest.approx(np.linalg.norm((H + H.T) / 2 - (U - np.eye(3))), abs=slack)
    assert stretch == pytest.approx(np.linalg.norm(U - np.eye(3)), abs=slack)
    assert 1 + 2 * np.cos(angle) == pytest.approx(np.trace(R), abs=1e-12 + 5e-3 * size**2)


@pytest.mark.source(
    "Rodrigues 1840: R = I + sin K + (1 - cos) K K, so e = (cos - 1) across the axis and U = I"
)
@given(unit_vectors(), st.floats(1e-6, np.pi))
@example(np.array([0.0, 0.0, 1.0]), np.pi)
@example(np.array([0.0, 0.6, 0.8]), np.radians(179.999))
@example(np.array([1.0, 0.0, 0.0]), np.radians(5))
def test_pure_rotation(axis: np.ndarray, angle: float) -> None:
    error, stretch, found = measured(axis_angle(axis, angle))
    assert error == pytest.approx(np.sqrt(2) * 2 * np.sin(angle / 2) ** 2, rel=1e-9, abs=4e-15)
    assert stretch <= 4e-15
    assert found == pytest.approx(angle, rel=1e-12, abs=4e-15)


@pytest.mark.source(
    "simple shear: stretches (sqrt(4 + g^2) +- g)/2, angle atan(g/2): Holzapfel 2000; Bower 2009"
)
@pytest.mark.parametrize("shear", [1e-8, 1e-4, 1e-2, 0.1, 1.0, 5.0])
@pytest.mark.parametrize(("i", "j"), [(0, 1), (1, 0), (2, 1), (0, 2)])
def test_simple_shear(shear: float, i: int, j: int) -> None:
    H = np.zeros((3, 3))
    H[i, j] = shear
    error, stretch, angle = measured(H)
    principal = np.array([np.expm1(np.arcsinh(shear / 2)), np.expm1(-np.arcsinh(shear / 2))])
    cosine, sine = np.cos(np.arctan(shear / 2)), np.sin(np.arctan(shear / 2))
    # U = R^T F in closed form, R the clockwise turn by atan(g/2); F = [[1, g], [0, 1]]
    U = np.array([[cosine, sine], [sine, cosine + shear * sine]])
    e = np.array([[0.0, shear / 2], [shear / 2, 0.0]])
    series = 2e-3 * shear * stretch
    assert stretch == pytest.approx(np.linalg.norm(principal), rel=1e-12, abs=series if shear < 1e-2 else 0)
    assert error == pytest.approx(np.linalg.norm(e - (U - np.eye(2))), rel=1e-9, abs=2e-16 * max(1, shear**2))
    assert angle == pytest.approx(np.arctan(shear / 2), rel=2e-3 * shear + 1e-12)


@pytest.mark.derived("U = F where F is symmetric and positive: a stretch without turning adds nothing")
@pytest.mark.parametrize("size", [1e-9, 1e-4, 1e-2, 0.4])
def test_a_stretch_without_turning_has_no_error(size: float) -> None:
    H = np.array([[0.7, 0.3, -0.1], [0.3, -0.4, 0.2], [-0.1, 0.2, 0.5]]) * size
    error, stretch, angle = measured(H)
    assert error <= 5e-16
    assert stretch == pytest.approx(np.linalg.norm(H), rel=1e-12)
    assert angle <= 1e-15


@pytest.mark.derived(
    "U^2 = I + 2e + H^T H: the series' remainder is below 2e-3 |H| of the stretch at the switch"
)
@pytest.mark.parametrize("size", [1e-3, 1e-5, 1e-7])
def test_series_and_polar_decomposition_meet_at_the_switch(size: float) -> None:
    rng = np.random.default_rng(4)
    for _ in range(5):
        e, w = rng.normal(size=(2, 3, 3))
        e, w = (e + e.T) / 2, (w - w.T) / 2
        low, high = 0.0, 1.0
        for _ in range(25):  # the share of rotation at which the branch changes
            middle = (low + high) / 2
            H = size * (e + middle / np.sqrt(size) * w)
            low, high = (low, middle) if exact_branch(H) else (middle, high)
        H = (size * (e + middle / np.sqrt(size) * w))[:, :, None]
        exact = _motion._exact_turning(H, six_from_full(H))
        below = _motion.turning(H * (1 - 1e-4))  # the series, or the exact branch: both sides of the switch
        above = _motion.turning(H * (1 + 1e-4))
        reach = float(np.linalg.norm(H)) * float(exact[1][0])
        for found in (below, above):
            assert float(found.error[0]) == pytest.approx(
                float(exact[0][0]), rel=1e-3, abs=2e-3 * reach + 1e-16
            )
            assert float(found.stretch[0]) == pytest.approx(float(exact[1][0]), rel=1e-3)
            assert float(found.angle[0]) == pytest.approx(float(exact[2][0]), rel=2e-3)


@pytest.mark.derived(
    "5 degrees of turning on 0.1 % strain: e_xx = (1 + 0.001) cos 5 - 1 = -2.8e-3 instead of 1.0e-3"
)
def test_five_degrees_hide_a_strain_of_a_thousandth() -> None:
    turn = axis_angle((0, 0, 1), np.radians(5)) + np.eye(3)
    H = turn @ np.diag([1.001, 1, 1]) - np.eye(3)
    assert H[0, 0] == pytest.approx(-2.809e-3, abs=1e-6)
    error, stretch, angle = measured(H)
    assert stretch == pytest.approx(1e-3, rel=1e-12)
    assert error > 5 * stretch
    assert np.degrees(angle) == pytest.approx(5, rel=1e-12)
    assert small_strain_error(H) == error


@pytest.mark.derived("a displacement that flattens or reverses the material: the stretch is still known")
@pytest.mark.parametrize(
    ("H", "stretch"),
    [
        (-np.eye(3), np.sqrt(3)),
        (np.diag([-1.0, 0, 0]), 1.0),
        (-np.ones((3, 3)) / 3, 1.0),
        (-np.outer(N, N), 1.0),
    ],
)
def test_a_flattened_point_keeps_its_stretch(H: np.ndarray, stretch: float) -> None:
    error, found, _ = measured(H)
    assert found == pytest.approx(stretch, rel=1e-7)
    assert error == pytest.approx(0, abs=1e-7)


@pytest.mark.derived("a gradient that is not finite spoils its own point only")
def test_not_finite_stays_where_it_is() -> None:
    H = np.zeros((3, 3, 4))
    H[0, 0] = [1e-3, np.nan, np.inf, 2e-3]
    found = _motion.turning(H)
    assert np.isfinite(found.error).tolist() == [True, False, False, True]
    np.testing.assert_allclose(found.stretch[[0, 3]], [1e-3, 2e-3], rtol=1e-3)
