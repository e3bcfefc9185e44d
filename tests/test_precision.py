"""Storage resolution: told from the values, and not mistaken where a mesh is merely regular."""

from __future__ import annotations

import numpy as np
import pytest

from unturn.precision import MEANT_DISPLACEMENT, storage_resolution

RNG = np.random.default_rng(0)
SMOOTH = RNG.normal(size=3000) * 1e-2

# Source: IEEE 754: half a unit in the last place is 2^-53 of a double, 2^-24 of a single, 2^-11 of a half.
DOUBLE, SINGLE, HALF = 2.0**-53, 2.0**-24, 2.0**-11


def rounded(values: np.ndarray, digits: int) -> np.ndarray:
    """Values as a text file with this many significant digits gives them back."""
    return np.array([float(f"{v:.{digits - 1}e}") for v in values])


@pytest.mark.parametrize(
    ("values", "relative"),
    [
        (SMOOTH, DOUBLE),
        (SMOOTH.astype(np.float32), SINGLE),
        (SMOOTH.astype(np.float32).astype(float), SINGLE),
        (SMOOTH.astype(np.float16), HALF),
        (SMOOTH.reshape(-1, 3), DOUBLE),
        (np.zeros((50, 3)), DOUBLE),
        (np.ones((50, 3)), DOUBLE),
    ],
)
def test_binary_types(values: np.ndarray, relative: float) -> None:
    assert storage_resolution(values).relative == relative


@pytest.mark.parametrize("digits", [5, 6, 7, 9, 12])
@pytest.mark.parametrize("scale", [1.0, 1e-6, 1e5])
def test_few_digits_kept_as_doubles(digits: int, scale: float) -> None:
    found = storage_resolution(rounded(SMOOTH * scale, digits))
    assert found.kind == f"{digits} digits"
    assert found.relative == pytest.approx(0.5 * 10.0 ** (1 - digits))


@pytest.mark.parametrize("digits", [5, 6])
def test_few_digits_kept_as_singles(digits: int) -> None:
    assert storage_resolution(rounded(SMOOTH, digits).astype(np.float32)).kind == f"{digits} digits"


@pytest.mark.parametrize("places", [3, 6, 9])
@pytest.mark.parametrize("dtype", [np.float64, np.float32])
def test_a_fixed_number_of_decimals(places: int, dtype: type) -> None:
    values = np.round(SMOOTH * 10.0 ** (6 - places), places)  # up to 0.04 at six places: 40 000 steps
    found = storage_resolution(values.astype(dtype))
    assert (found.relative, found.kind) == (0.0, f"{places} decimals")
    assert found.absolute == pytest.approx(0.5 * 10.0**-places)
    off = np.abs(values - SMOOTH * 10.0 ** (6 - places)).max()
    assert 0.9 * found.absolute < off <= found.absolute * (1 + 1e-6)


@pytest.mark.parametrize(
    "step",
    [1 / 8, 0.05, 0.1, 0.25, 1 / 3, 0.001, 0.0125, 2.5, 1 / 64, 0.03125, 5e-4],
    ids=lambda s: f"{s:.5g}",
)
@pytest.mark.parametrize("count", [40, 800])
@pytest.mark.parametrize("dtype", [np.float64, np.float32])
def test_regular_coordinates_are_not_taken_for_rounded_ones(step: float, count: int, dtype: type) -> None:
    values = (np.arange(count) * step).astype(dtype)
    assert storage_resolution(values).relative == (DOUBLE if dtype is np.float64 else SINGLE)


@pytest.mark.parametrize("step", [1e-4, 2e-4, 1e-3, 1e-5])
@pytest.mark.parametrize("start", [0.0, 1.0, -1.5])
def test_a_fine_regular_grid_is_not_taken_for_rounded_values(step: float, start: float) -> None:
    values = np.round(start + np.arange(15_000) * step, 6)
    assert storage_resolution(values).kind == "float64"
    assert storage_resolution(np.repeat(values, 3).reshape(-1, 3)).kind == "float64"


@pytest.mark.parametrize("places", [5, 6])
def test_few_steps_are_rounded_where_values_are_computed(places: int) -> None:
    values = np.round(np.random.default_rng(1).normal(size=60) * 1e-3, places)
    assert storage_resolution(values).kind == "float64"  # coordinates: somebody may have typed them
    assert storage_resolution(values, MEANT_DISPLACEMENT).kind == f"{places} decimals"


def test_what_is_not_finite_is_passed_over() -> None:
    spoiled = SMOOTH.astype(np.float32).astype(float)
    spoiled[::5] = np.nan
    spoiled[1::7] = np.inf
    spoiled[2::11] = 1e300
    assert storage_resolution(spoiled).relative == SINGLE
    assert storage_resolution(np.full((40, 3), np.nan)).relative == DOUBLE


def test_large_arrays_are_sampled() -> None:
    assert storage_resolution(rounded(RNG.normal(size=100_000), 6)).kind == "6 digits"


def test_integers_are_exact() -> None:
    assert storage_resolution(np.arange(300)).relative == DOUBLE


def test_leftovers_next_to_zero_have_no_digits() -> None:
    # Source: NGSolve 6.2.2608, VTKOutput: coordinates of a curve of order 4 with values such as 1e-310 beside zero.
    assert storage_resolution(np.concatenate([SMOOTH, [3e-310, -1e-323]])).kind == "float64"


def test_the_few_values_of_a_small_mesh_are_enough() -> None:
    assert storage_resolution(rounded(SMOOTH[:9], 6).astype(np.float32)).kind == "6 digits"
    assert storage_resolution(SMOOTH[:9].astype(np.float32)).kind == "float32"
    assert storage_resolution(SMOOTH[:9]).kind == "float64"
