"""Which array of a result is the displacement: the names, shapes and pairs that real files hold."""

from __future__ import annotations

import numpy as np
import pytest

import meshes
from unturn.displacement import displacement_candidates, find_displacement
from unturn.elements import ELEMENTS
from unturn.errors import DisplacementError, UsageError
from unturn.result import Result

MESH = meshes.affine_cell(ELEMENTS["tetra"])
N = len(MESH.points)
VECTOR = np.arange(3.0 * N).reshape(N, 3) * 1e-3


def result(**arrays: np.ndarray) -> Result:
    return MESH.result(**arrays)


@pytest.mark.practice("names under which solvers and writers store nodal displacement")
@pytest.mark.parametrize(
    "name",
    ["u", "U", "disp", "DISP", "displ", "displacement", "Displacement", "DISPLACEMENTS", "u_h",
     "Displacement Vector", "nodal displacement", "U vector", "disp_1", "Deformation", "step1.displacement"],
)  # fmt: skip
def test_names_that_say_displacement(name: str) -> None:
    found = find_displacement(result(**{name: VECTOR, "temperature": VECTOR[:, 0], "velocity": VECTOR}))
    assert found.name == name
    assert found.why == "only candidate"
    np.testing.assert_array_equal(found.values, VECTOR)


@pytest.mark.practice("a vector with any other name is the displacement when it is the only one")
def test_a_lone_vector_without_a_telling_name() -> None:
    assert find_displacement(result(f_12=VECTOR)).name == "f_12"


@pytest.mark.practice("vectors that solvers write beside the displacement")
@pytest.mark.parametrize(
    "name", ["velocity", "Acceleration", "reaction force", "Normals", "rotation", "coordinates", "RF", "CF",
             "heat flux",
             "displacement velocity"]
)  # fmt: skip
def test_other_vectors_are_no_candidates(name: str) -> None:
    assert find_displacement(result(**{"u": VECTOR, name: VECTOR})).name == "u"
    with pytest.raises(DisplacementError, match="no displacement found"):
        find_displacement(result(**{name: VECTOR}))


def test_two_candidates_stop_and_are_listed() -> None:
    two = result(u=VECTOR, displacement=2 * VECTOR)
    with pytest.raises(
        DisplacementError, match=r"2 point arrays.*'u', 'displacement'.*--displacement"
    ) as caught:
        find_displacement(two)
    assert caught.value.exit_status == 3
    assert find_displacement(two, "displacement").values[1, 0] == 2 * VECTOR[1, 0]
    assert find_displacement(two, "displacement").why == "chosen"
    with pytest.raises(DisplacementError, match="2 point arrays"):
        find_displacement(result(f_1=VECTOR, f_2=VECTOR))


def test_two_components_get_a_third_of_zero() -> None:
    found = find_displacement(result(u=VECTOR[:, :2]))
    np.testing.assert_array_equal(found.values, VECTOR * [1, 1, 0])


def test_of_six_components_the_first_three_are_taken() -> None:
    six = np.concatenate([VECTOR, 100 + VECTOR], axis=1)
    np.testing.assert_array_equal(find_displacement(result(u=six)).values, VECTOR)


@pytest.mark.parametrize("names", [("ux", "uy", "uz"), ("U1", "U2", "U3"), ("disp_x", "disp_y", "disp_z")])
def test_three_scalars_are_one_vector(names: tuple[str, str, str]) -> None:
    scalars = {n: VECTOR[:, k] for k, n in enumerate(names)}
    found = find_displacement(result(**scalars))
    np.testing.assert_array_equal(found.values, VECTOR)
    assert found.name == ",".join(names)
    assert len(found.stored) == 3


def test_three_scalars_of_any_name_are_taken_when_asked_for() -> None:
    scalars = {"a b": VECTOR[:, 0], "c": VECTOR[:, 1:2], "d": VECTOR[:, 2]}
    np.testing.assert_array_equal(find_displacement(result(**scalars), "a b, c,d").values, VECTOR)
    with pytest.raises(DisplacementError):
        find_displacement(result(**scalars))


def test_a_vector_comes_before_three_scalars() -> None:
    scalars = {n: VECTOR[:, k] for k, n in enumerate(("ux", "uy", "uz"))}
    assert find_displacement(result(u=VECTOR, **scalars)).name == "u"


@pytest.mark.practice("real and imaginary parts, or amplitude and phase, of a harmonic result")
@pytest.mark.parametrize(
    ("first", "second"),
    [("displacement_real", "displacement_imag"), ("U.re", "U.im"), ("Displacement Amplitude", "Displacement Phase"),
     ("displacement (real)", "displacement (imag)")],
)  # fmt: skip
def test_a_complex_pair_is_refused_with_a_reason(first: str, second: str) -> None:
    with pytest.raises(DisplacementError, match="complex"):
        find_displacement(result(**{first: VECTOR, second: VECTOR}))
    assert find_displacement(result(**{first: VECTOR, second: VECTOR}), first).name == first  # one instant


def test_a_complex_array_is_refused() -> None:
    with pytest.raises(DisplacementError, match="complex"):
        find_displacement(result(u=VECTOR * 1j))
    with pytest.raises(DisplacementError, match="complex"):
        find_displacement(result(u=VECTOR * 1j), "u")


def test_a_displacement_on_cells_is_refused() -> None:
    on_cells = MESH.result().with_arrays(cell_data={"displacement": np.zeros((1, 3))})
    with pytest.raises(DisplacementError, match="stored on cells"):
        find_displacement(on_cells)
    with pytest.raises(UsageError, match="cell array"):
        find_displacement(on_cells, "displacement")


def test_none_at_all() -> None:
    with pytest.raises(DisplacementError, match="point arrays are: 'temperature'"):
        find_displacement(result(temperature=VECTOR[:, 0]))
    with pytest.raises(DisplacementError, match="point arrays are: none"):
        find_displacement(result())


def test_an_unknown_name_gets_a_close_match() -> None:
    with pytest.raises(UsageError, match="Did you mean 'displacement'") as caught:
        find_displacement(result(displacement=VECTOR), "displacment")
    assert caught.value.exit_status == 2


@pytest.mark.parametrize("bad", [VECTOR[:, 0], np.zeros((N, 9)), np.zeros((N, 4)), np.array(["a"] * N)])
def test_what_is_no_vector_is_refused(bad: np.ndarray) -> None:
    with pytest.raises(UsageError):
        find_displacement(result(u=bad), "u")


def test_scale() -> None:
    np.testing.assert_array_equal(find_displacement(result(u=VECTOR), scale=1e-3).values, VECTOR * 1e-3)
    assert find_displacement(result(u=VECTOR), scale=1e-3).stored[0] is not None


def test_stored_type_is_kept_and_values_are_doubles() -> None:
    found = find_displacement(result(u=VECTOR.astype(np.float32)))
    assert found.stored[0].dtype == np.float32
    assert found.values.dtype == np.float64


def test_candidates_do_not_count_twice() -> None:
    named, others = displacement_candidates(result(u=VECTOR, f=VECTOR, s=VECTOR[:, 0]))
    assert named == ["u"]
    assert others == ["f"]
