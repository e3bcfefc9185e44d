"""Principal values and directions against LAPACK, also where roots nearly meet."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from strategies import principal_cases, symmetric
from unturn.kinematics import max_shear_strain, principal_strain

# Source: LAPACK's symmetric eigenvalue solver through numpy.linalg.eigvalsh. All checks of this file.

SCALES = [1e-30, 1e-12, 1e-6, 1e-3, 1.0, 1e6]


def norms(tensors: np.ndarray) -> np.ndarray:
    return np.linalg.norm(tensors, axis=(-2, -1))


@pytest.mark.parametrize("scale", SCALES)
def test_values_are_those_of_lapack(scale: float) -> None:
    tensors = principal_cases() * scale
    off = np.abs(principal_strain(tensors) - np.linalg.eigvalsh(tensors)[:, ::-1]).max(axis=1)
    assert (off <= 1e-12 * norms(tensors)).all(), off.max()


@pytest.mark.parametrize("scale", SCALES)
def test_directions_give_the_tensor_back(scale: float) -> None:
    tensors = principal_cases() * scale
    values, directions = principal_strain(tensors, directions=True)
    np.testing.assert_array_equal(values, np.sort(values, axis=1)[:, ::-1])
    back = np.einsum("nk,nki,nkj->nij", values, directions, directions)
    assert (norms(back - tensors) <= 1e-12 * norms(tensors)).all()
    gram = directions @ np.swapaxes(directions, 1, 2)
    np.testing.assert_allclose(gram, np.broadcast_to(np.eye(3), gram.shape), atol=1e-13)


@given(symmetric(), st.integers(-20, 3))
def test_any_tensor(e: np.ndarray, decade: int) -> None:
    tensor = e * 10.0**decade
    values, directions = principal_strain(tensor, directions=True)
    slack = 1e-12 * norms(tensor) + 1e-74  # smaller than that counts as zero: its cube is no number
    assert np.abs(values - np.linalg.eigvalsh(tensor)[::-1]).max() <= slack
    assert norms(directions.T @ np.diag(values) @ directions - tensor) <= slack
    assert max_shear_strain(tensor) == pytest.approx(np.ptp(np.linalg.eigvalsh(tensor)), abs=slack)


def test_values_alone_and_with_directions_agree() -> None:
    tensors = principal_cases()
    np.testing.assert_allclose(
        principal_strain(tensors), principal_strain(tensors, directions=True)[0], atol=1e-15
    )


def test_first_component_that_is_not_zero_is_positive() -> None:
    _, directions = principal_strain(principal_cases(), directions=True)
    for d in directions.reshape(-1, 3):
        lead = d[np.flatnonzero(np.abs(d) > 1e-12)[0]]
        assert lead > 0


def test_directions_of_known_tensors() -> None:
    _, shear = principal_strain([[0, 1e-3, 0], [1e-3, 0, 0], [0, 0, 0]], directions=True)
    root = np.sqrt(0.5)
    np.testing.assert_allclose(shear, [[root, root, 0], [0, 0, 1], [root, -root, 0]], atol=1e-15)
    _, diagonal = principal_strain(np.diag([1.0, 3.0, 2.0]), directions=True)
    np.testing.assert_allclose(diagonal, np.eye(3)[[1, 2, 0]], atol=1e-15)


def test_not_finite_stays_where_it_is() -> None:
    tensors = np.array([np.diag([1.0, 2.0, 3.0]), np.full((3, 3), np.nan), np.diag([3.0, 2.0, 1.0])])
    values, directions = principal_strain(tensors, directions=True)
    assert np.isnan(values[1]).all()
    assert np.isnan(directions[1]).all()
    np.testing.assert_allclose(values[[0, 2]], [[3, 2, 1]] * 2)


@pytest.mark.derived(
    "two equal roots and an off-diagonal component below 1e-308: directions stay of unit length"
)
def test_a_component_without_digits_does_not_spoil_directions() -> None:
    for tiny in (2e-317, 1e-300, 5e-324):
        tensor = np.array([[-0.5, tiny, 0], [tiny, -0.43, -0.17], [0, -0.17, -0.07]])
        tensor[1:, 1:] = -0.5 * np.eye(2) + 0.5 * np.outer([0.366, 0.9306], [0.366, 0.9306]) / (
            0.366**2 + 0.9306**2
        )
        _, directions = principal_strain(tensor, directions=True)
        np.testing.assert_allclose(directions @ directions.T, np.eye(3), atol=1e-15)
