"""Finite strain and rotation of a gradient, against closed forms, libraries and fifty digits."""

from __future__ import annotations

from typing import Any

import mpmath
import numpy as np
import pytest
import scipy.linalg
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from strategies import axis_angle, gradients, rotations, symmetric
from unturn.kinematics._finite import BASES, Finite
from unturn.kinematics._symmetric import full_from_six

Floats = NDArray[np.float64]
I = np.eye(3)  # noqa: E741
OBLIQUE = np.array([0.36, 0.48, 0.8])


def finite(H: Any) -> Finite:
    return Finite(np.asarray(H, dtype=float)[:, :, None])


def tensors(H: Any) -> dict[str, Floats]:
    """Return each finite strain as a full tensor, and `R - I`."""
    found = finite(H)
    return {base: full_from_six(getattr(found, base))[..., 0] for base in BASES} | {
        "turn": found.turn[..., 0]
    }


def size(H: Floats) -> float:
    """Return max(1, |H|^2): what absolute rounding is measured by."""
    return max(1.0, float(np.linalg.norm(H)) ** 2)


def of_stretches(stretch: Any, directions: Floats, turn: Floats) -> dict[str, Floats]:
    """Return the strains of a given R, U by their definitions (Holzapfel 2000, sections 2.5 and 2.6)."""
    s = np.asarray(stretch, dtype=float)  # stretches minus one
    new = directions + turn @ directions

    def along(values: Floats, n: Floats) -> Floats:
        tensor: Floats = (n * values) @ n.T
        return tensor

    logs = np.log1p(s)
    return {
        "green_lagrange": along(0.5 * s * (2 + s), directions),
        "hencky": along(logs, directions),
        "biot": along(s, directions),
        "almansi": along(-0.5 * np.expm1(-2 * logs), new),
        "turn": turn,
    }


def assert_strains(H: Floats, expected: dict[str, Floats], times: float = 2.0) -> None:
    """Assert to `times` 1e-15 max(1, |H|^2); Almansi as far as its own conditioning goes."""
    found = tensors(H)
    smallest = min(1.0, float(np.linalg.svd(I + H, compute_uv=False)[-1]))
    for name, value in expected.items():
        # a stretch l known to eps |F|: Almansi (1 - l^-2)/2 is known to l^-3 of that, the logarithm to l^-1
        loss = {"almansi": smallest**-3, "hencky": 1 / smallest, "turn": 1 / smallest}.get(name, 1.0)
        np.testing.assert_allclose(
            found[name], value, rtol=0, atol=times * 1e-15 * size(H) * loss, err_msg=name
        )


DECADES = 10.0 ** np.arange(-12.0, 0.5, 1.0)


@pytest.mark.source(
    "simple shear: Holzapfel 2000; Bower 2009: stretches (sqrt(4 + g^2) +- g)/2, angle atan(g/2)"
)
@pytest.mark.parametrize("shear", [*DECADES, 3.0, -1e-3, -2.0])
@pytest.mark.parametrize("plane", [(0, 1), (1, 2), (2, 0)])
def test_simple_shear(shear: float, plane: tuple[int, int]) -> None:
    i, j = plane
    H = np.zeros((3, 3))
    H[i, j] = shear
    found = finite(H)
    E = np.zeros((3, 3))
    E[i, j] = E[j, i] = shear / 2
    E[j, j] = shear**2 / 2
    rounding = 1e-15 * size(H)
    np.testing.assert_allclose(tensors(H)["green_lagrange"], E, rtol=1e-15, atol=0)
    log = np.arcsinh(abs(shear) / 2)
    np.testing.assert_allclose(found.hencky_values[:, 0], [log, 0, -log], rtol=1e-9, atol=rounding)
    np.testing.assert_allclose(
        found.biot_values[:, 0], [np.expm1(log), 0, np.expm1(-log)], rtol=1e-9, atol=rounding
    )
    np.testing.assert_allclose(
        found.green_lagrange_values[:, 0], [np.expm1(2 * log) / 2, 0, np.expm1(-2 * log) / 2], rtol=1e-9,
        atol=rounding,
    )  # fmt: skip
    # l1 l3 = 1, so (1 - l1^-2)/2 = -(l3^2 - 1)/2: the values of Almansi mirror those of Green-Lagrange
    np.testing.assert_allclose(
        found.almansi_values[:, 0], -found.green_lagrange_values[::-1, 0], rtol=1e-9, atol=4 * rounding
    )
    A = np.zeros((3, 3))  # (I - F^-T F^-1)/2 with F^-1 = I - g e_i e_j
    A[i, j] = A[j, i] = shear / 2
    A[j, j] = -(shear**2) / 2
    np.testing.assert_allclose(tensors(H)["almansi"], A, rtol=1e-9, atol=3 * rounding)
    # about the axis across: the turn takes e_j towards e_i, against i -> j
    vector = np.zeros(3)
    vector[3 - i - j] = -np.arctan(shear / 2)
    np.testing.assert_allclose(found.rotation[:, 0], vector, rtol=1e-12, atol=rounding)
    assert found.rotation_angle[0] == pytest.approx(abs(np.arctan(shear / 2)), rel=1e-12, abs=rounding)
    assert found.det_f[0] == 1.0


TURNS = [0.0, 1e-9, 1e-4, np.radians(5), np.pi / 2, 2.0, np.radians(179.99), np.pi]
STRETCHES = {
    "none": (0, 0, 0),
    "uniaxial": (1, 0, 0),
    "uniaxial, Poisson 0.3": (1, -0.3, -0.3),
    "biaxial": (1, 1, 0),
    "volumetric": (1, 1, 1),
    "general": (1, 0.3, -0.7),
    "compressed": (-0.9, -0.2, -0.2),
}


@pytest.mark.source(
    "Holzapfel 2000, Nonlinear Solid Mechanics, sections 2.5 and 2.6: definitions by stretches"
)
@pytest.mark.parametrize("shape", STRETCHES.values(), ids=STRETCHES)
@pytest.mark.parametrize("amount", [1e-12, 1e-9, 1e-6, 1e-3, 0.1, 1.0])
def test_stretch_then_turn(shape: tuple[float, ...], amount: float) -> None:
    Q = axis_angle(OBLIQUE, 0.7) + I
    for angle in TURNS:
        for directions in (I, Q):
            stretch = amount * np.array(shape)
            turn = axis_angle([0.6, 0.0, 0.8], angle)
            U = (directions * stretch) @ directions.T
            H = turn + U + turn @ U
            assert_strains(H, of_stretches(stretch, directions, turn))
            assert finite(H).rotation_angle[0] == pytest.approx(
                angle, abs=2e-15 * size(H) / (1 + min(stretch))
            )


@pytest.mark.source("Holzapfel 2000, sections 2.5 and 2.6; stretches of rubber and of crushed foam")
@pytest.mark.parametrize(
    "stretch",
    [(5, 1, 1), (5, 5, 5), (5, 5, 0.04), (5, 0.45, 0.45), (1e-3, 1, 1), (1e-3, 1e-3, 1e-3), (1e-3, 5, 1e-3), (2, 0.31, 0.32)],
)  # fmt: skip
def test_extreme_stretches(stretch: tuple[float, ...]) -> None:
    Q = axis_angle(OBLIQUE, 0.7) + I
    for angle in TURNS:
        for directions in (I, Q):
            turn = axis_angle([0.6, 0.0, 0.8], angle)
            less = np.array(stretch) - 1.0
            U = (directions * less) @ directions.T
            H = turn + U + turn @ U
            expected = of_stretches(less, directions, turn)
            spread = sorted(stretch)
            if spread[1] < 0.01:  # R follows from F only to eps |F| / (l2 + l3)
                del expected["turn"], expected["almansi"]
            assert_strains(H, expected, 4.0)
            assert finite(H).det_f[0] == pytest.approx(np.prod(stretch), abs=1e-15 * size(H))
            np.testing.assert_allclose(
                np.exp(finite(H).hencky_values[:, 0]), spread[::-1], rtol=0, atol=2e-15 * size(H)
            )


@pytest.mark.source("scipy.linalg.svd of each F: stretches over eighteen decades, at random")
@settings(max_examples=150)
@given(
    st.lists(st.floats(-9.0, 1.0), min_size=3, max_size=3),
    rotations(),
    rotations(),
    st.sampled_from([0.0, 1e-9, 1e-15]),
)
def test_crushed_matter_against_scipy(
    exponents: list[float], turn: Floats, more: Floats, equal: float
) -> None:
    stretch = 10.0 ** np.array(exponents)
    stretch[1] = stretch[0] * (1 + equal) if equal else stretch[1]  # also two that are nearly equal
    Q = I + more
    F = (I + turn) @ (Q * stretch) @ Q.T
    H = F - I
    F = I + H  # what is left of it after storage
    assume(np.linalg.det(F) > 4e-15 * (1 + np.linalg.norm(H) ** 2))
    left, values, right = scipy.linalg.svd(F)
    found = finite(H)
    rounding = 4e-15 * max(1.0, values[0])
    np.testing.assert_allclose(np.exp(found.hencky_values[:, 0]), values, rtol=1e-12, atol=rounding)
    R = I + found.turn[..., 0]
    np.testing.assert_allclose(R @ R.T, I, atol=1e-14 + (0 if values[2] ** 2 < 0.1 else rounding))
    # R is known to eps |F| / (l2 + l3)
    np.testing.assert_allclose(R, left @ right, atol=4 * rounding / (values[1] + values[2]) + 1e-14)
    U = full_from_six(found.stretch_tensor)[..., 0] + I
    np.testing.assert_allclose(U, (right.T * values) @ right, atol=4 * rounding)


@pytest.mark.source("Rodrigues 1840: a rotation by phi about n")
@pytest.mark.parametrize(
    "angle", [0.0, 1e-9, 1e-6, 0.5, np.pi / 2, 3.0, np.radians(179.99), np.pi - 1e-6, np.pi]
)
@pytest.mark.parametrize(
    "axis",
    [(1, 0, 0), (0, 1, 0), (0, 0, 1), OBLIQUE, (0, 0.6, 0.8), (0, -0.6, 0.8), (-0.6, 0, 0.8), (0, 0, -1)],
)
def test_pure_rotation(axis: Any, angle: float) -> None:
    n = np.asarray(axis, dtype=float)
    H = axis_angle(n, angle)
    found = finite(H)
    for base in BASES:
        np.testing.assert_allclose(getattr(found, base), 0, atol=2e-15)
    if angle == np.pi:  # both axes turn the same: the one whose first non-zero component is positive
        n = n * np.sign(n[np.flatnonzero(n)[0]])
    np.testing.assert_allclose(found.rotation[:, 0], angle * n, rtol=0, atol=4e-15)
    assert found.rotation_angle[0] == pytest.approx(angle, abs=1e-15)
    np.testing.assert_allclose(found.turn[..., 0], H, atol=2e-15)


@pytest.mark.derived(
    "at half a turn both axes are right; rounding in the mesh must not pick one cell by cell"
)
def test_noise_does_not_choose_the_axis_of_half_a_turn() -> None:
    rng = np.random.default_rng(5)
    for axis in (OBLIQUE, np.array([0, -0.6, 0.8]), np.array([0.0, 0, 1])):
        H = axis_angle(axis, np.pi)[:, :, None] + 1e-14 * rng.uniform(-1, 1, (3, 3, 500))
        vectors = Finite(H).rotation
        sign = np.sign(axis[np.flatnonzero(axis)[0]])
        np.testing.assert_allclose(vectors - np.pi * sign * axis[:, None], 0, atol=1e-12)


def in_many_digits(H: Floats) -> dict[str, Floats]:
    """Return the strains from the eigenvalues of C with fifty digits."""
    with mpmath.workdps(50):
        one = mpmath.eye(3)
        F = one + mpmath.matrix(H.tolist())
        values, vectors = mpmath.eigsy(F.T * F)

        def of(f: Any) -> Any:
            return vectors * mpmath.diag([f(x) for x in values]) * vectors.T

        inverse = F**-1
        E = (F.T * F - one) / 2
        exact = {
            "green_lagrange": E,
            "hencky": of(lambda x: mpmath.log(x) / 2),
            "biot": of(mpmath.sqrt) - one,
            "almansi": inverse.T * E * inverse,
            "turn": F * of(lambda x: 1 / mpmath.sqrt(x)) - one,
        }
        return {k: np.array(v.tolist(), dtype=float) for k, v in exact.items()}


@pytest.mark.source("mpmath, eigenvalues of F^T F with fifty digits")
@settings(max_examples=60)
@given(gradients())
def test_random_gradients_in_many_digits(H: Floats) -> None:
    assume(np.linalg.det(I + H) > 0.05)
    assert_strains(H, in_many_digits(H))


@pytest.mark.source("scipy.linalg.polar and logm")
@settings(max_examples=60)
@given(st.lists(st.floats(-2, 2, allow_subnormal=False), min_size=9, max_size=9))
def test_random_deformations_against_scipy(nine: list[float]) -> None:
    F = np.array(nine).reshape(3, 3)
    assume(np.linalg.det(F) > 0.1)
    R, U = scipy.linalg.polar(F)
    found = tensors(F - I)
    np.testing.assert_allclose(found["turn"] + I, R, atol=1e-12)
    np.testing.assert_allclose(found["biot"] + I, U, atol=1e-12)
    np.testing.assert_allclose(found["hencky"], scipy.linalg.logm(U), atol=1e-10)
    inverse = np.linalg.inv(F)
    np.testing.assert_allclose(found["almansi"], (I - inverse.T @ inverse) / 2, atol=1e-9)
    rotation = finite(F - I).rotation[:, 0]
    np.testing.assert_allclose(
        axis_angle(rotation / (np.linalg.norm(rotation) or 1), np.linalg.norm(rotation)) + I, R, atol=1e-12
    )


@pytest.mark.source("objectivity under a superposed rotation Q: Holzapfel 2000, section 5.2")
@settings(max_examples=60)
@given(symmetric(), rotations(), rotations())
def test_superposed_rotation(stretch: Floats, turn: Floats, more: Floats) -> None:
    S = 0.3 * stretch
    H = turn + S + turn @ S
    turned = more + H + more @ H
    before, after = tensors(H), tensors(turned)
    rounding = 1e-14 * size(turned)
    for base in ("green_lagrange", "hencky", "biot"):
        np.testing.assert_allclose(after[base], before[base], atol=rounding)
    Q = I + more
    A = before["almansi"]
    np.testing.assert_allclose(after["almansi"], Q @ A @ Q.T, atol=30 * rounding)
    np.testing.assert_allclose(after["turn"] + I, Q @ (before["turn"] + I), atol=rounding)
    for base in BASES:
        values = f"{base}_values"
        np.testing.assert_allclose(
            getattr(finite(turned), values), getattr(finite(H), values), atol=30 * rounding
        )


@pytest.mark.derived("directions: U N_k = l_k N_k; n_k = R N_k; the first non-zero component positive")
@settings(max_examples=40)
@given(gradients())
def test_directions(H: Floats) -> None:
    assume(np.linalg.det(I + H) > 0.05)
    found = finite(H)
    N, n = found.material_directions[..., 0], found.spatial_directions[..., 0]
    for base, d in (("green_lagrange", N), ("hencky", N), ("biot", N), ("almansi", n)):
        np.testing.assert_allclose(d @ d.T, I, atol=2e-14)
        values = getattr(found, base + "_values")[:, 0]
        assert (np.diff(values) <= 0).all()
        np.testing.assert_allclose(tensors(H)[base], (d.T * values) @ d, atol=1e-13)
        for row in d:
            assert row[np.flatnonzero(np.abs(row) > 1e-12)[0]] > 0


@pytest.mark.derived("det F <= 0 is no deformation of matter: NaN there, and nowhere else")
def test_turned_inside_out() -> None:
    stretches = [(-1, 1, 1), (0, 1, 1), (1, 1, 1), (-2, -1, -1), (0, 0, 0), (1.1, 0.9, 1), (1e-9, 1, 1)]
    H = np.stack([np.diag(s) - I for s in stretches], axis=-1)
    found = Finite(H)
    sound = [False, False, True, False, False, True, True]
    for name in (
        *BASES,
        *(b + "_values" for b in BASES),
        "rotation",
        "material_directions",
        "spatial_directions",
        "turn",
    ):
        values = getattr(found, name)
        assert np.isfinite(values).all(axis=tuple(range(values.ndim - 1))).tolist() == sound, name
        assert np.isnan(values[..., 0]).all()
    assert np.isfinite(found.rotation_angle).tolist() == sound
    np.testing.assert_allclose(found.det_f, [np.prod(s) for s in stretches], atol=1e-15)


@pytest.mark.derived("a gradient that is not finite spoils its own point only")
@pytest.mark.filterwarnings("error")
def test_not_finite_stays_where_it_is() -> None:
    H = np.zeros((3, 3, 4))
    H[0, 0] = [1e-3, np.nan, np.inf, -0.9]
    found = Finite(H)
    for base in BASES:
        assert np.isfinite(getattr(found, base)).all(axis=0).tolist() == [True, False, False, True]
    assert np.isfinite(found.rotation).all(axis=0).tolist() == [True, False, False, True]
