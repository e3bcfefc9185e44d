"""Extremes over states, the range of a tensor and superposition, held against brute force."""

from __future__ import annotations

import gc
import itertools
import tracemalloc
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from meshes import patch
from strategies import axis_angle
from unturn.combinations import Combination, read_combinations
from unturn.elements import ELEMENTS
from unturn.envelopes import envelope
from unturn.errors import InputError, UsageError
from unturn.kinematics import equivalent_strain, principal_strain, strain, tensor_from_components
from unturn.model import build_model
from unturn.options import StrainOptions
from unturn.pipeline import compute
from unturn.result import CellBlock, Result
from unturn.states import Envelope, EnvelopeOptions, State, named
from unturn.superposition import superposed_states
from unturn.tensor_range import TensorRange, largest_distances

Floats = NDArray[np.float64]
MESH = patch(ELEMENTS["tetra"])
AXIS = np.array([1.0, 2.0, -2.0]) / 3.0


def states_of(displacements: list[Floats], **cell_data: list[Any]) -> list[State]:
    def reader(k: int) -> Callable[[], Result]:
        arrays = {name: values[k] for name, values in cell_data.items()}
        return lambda: MESH.result(u=displacements[k]).with_arrays(cell_data=arrays)

    return [State(f"step {k}", reader(k), float(k)) for k in range(len(displacements))]


def random_steps(n: int, size: float = 1e-3) -> list[Floats]:
    rng = np.random.default_rng(11)
    return [size * rng.normal(size=MESH.points.shape) for _ in range(n)]


def measured(displacements: list[Floats], *names: str, **options: Any) -> dict[str, Floats]:
    """Every step's arrays, `(n_steps, n_cells, ...)`."""
    every = [
        compute(MESH.result(u=u), StrainOptions(measures=names, **options)).fields.arrays
        for u in displacements
    ]
    return {name: np.array([arrays[name] for arrays in every]) for name in names}


def run(displacements: list[Floats], measures: list[str] | None = None, **options: Any) -> Envelope:
    rest = {k: options.pop(k) for k in ("kind", "tensor_range", "keep_going", "regions") if k in options}
    return envelope(
        states_of(displacements), EnvelopeOptions(StrainOptions(measures=measures, **options), **rest)
    )


@pytest.mark.source("numpy: nanmax, argmax over all steps held at once")
@pytest.mark.parametrize("base", ["small", "hencky"])
def test_extremes_and_their_steps_are_those_of_all_steps_at_once(base: str) -> None:
    steps = random_steps(9)
    found = run(steps, base=base).arrays
    suffix = "" if base == "small" else f"_{base}"
    names = [f"strain{suffix}", f"equivalent_strain{suffix}", f"principal_strain{suffix}"]
    every = measured(steps, *names, "rotation" if base == "small" else "finite_rotation")
    for name, values in every.items():
        assert np.array_equal(found[f"{name}_maximum"], values.max(axis=0))
        assert np.array_equal(found[f"{name}_minimum"], values.min(axis=0))
        assert np.array_equal(found[f"{name}_maximum_step"], values.argmax(axis=0))
        assert np.array_equal(found[f"{name}_minimum_step"], values.argmin(axis=0))
        if not name.startswith("equivalent"):
            assert np.array_equal(found[f"{name}_largest_magnitude"], np.abs(values).max(axis=0))
            assert np.array_equal(found[f"{name}_largest_magnitude_step"], np.abs(values).argmax(axis=0))
    assert f"equivalent_strain{suffix}_largest_magnitude" not in found


@pytest.mark.source("numpy.linalg.eigh")
def test_principal_values_keep_their_direction() -> None:
    steps = random_steps(6)
    found = run(steps, ["principal_strain"], tensor_range=False).arrays
    tensors = tensor_from_components(measured(steps, "strain")["strain"])
    values, vectors = np.linalg.eigh(tensors)
    for k, which in itertools.product(range(3), ("maximum", "minimum")):
        at = found[f"principal_strain_{which}_step"][:, k].astype(int)
        cells = np.arange(len(at))
        direction = vectors[at, cells, :, 2 - k]
        alike = np.abs((direction * found[f"principal_direction_{k + 1}_at_{which}"]).sum(axis=1))
        assert np.allclose(alike, 1.0, atol=1e-9)
        assert np.allclose(values[at, cells, 2 - k], found[f"principal_strain_{which}"][:, k], atol=1e-16)


def brute_range(tensors: Floats) -> tuple[Floats, NDArray[np.int64]]:
    """The largest equivalent of a difference, over every pair of steps."""
    pairs = list(itertools.combinations(range(len(tensors)), 2))
    sizes = np.array([equivalent_strain(tensors[a] - tensors[b]) for a, b in pairs])
    return sizes.max(axis=0), np.array(pairs)[sizes.argmax(axis=0)]


@pytest.mark.derived("every pair of steps, one by one")
@pytest.mark.parametrize("base", ["small", "green-lagrange", "hencky", "biot"])
def test_the_tensor_range_is_that_of_every_pair(base: str) -> None:
    steps = random_steps(12)
    suffix = "" if base == "small" else "_" + base.replace("-", "_")
    found = run(steps, ["equivalent_strain"], base=base).arrays
    size, pairs = brute_range(tensor_from_components(measured(steps, f"strain{suffix}")[f"strain{suffix}"]))
    name = f"strain_range_equivalent{suffix}"
    assert np.allclose(found[name], size, rtol=1e-13)
    assert np.array_equal(found[f"{name}_first_step"], pairs[:, 0])
    assert np.array_equal(found[f"{name}_second_step"], pairs[:, 1])


@pytest.mark.derived(
    "a full reversal: the tensors differ by twice the amplitude, the invariant does not change"
)
def test_a_full_reversal_has_twice_the_amplitude_as_range() -> None:
    one = random_steps(1)[0]
    found = run([0 * one, one, 0 * one, -one], ["equivalent_strain"]).arrays
    amplitude = found["equivalent_strain_maximum"]
    assert np.allclose(found["strain_range_equivalent"], 2 * amplitude, rtol=1e-14)
    assert set(found["strain_range_equivalent_first_step"].tolist()) == {1}
    assert set(found["strain_range_equivalent_second_step"].tolist()) == {3}
    other = run([one, -one], ["equivalent_strain"], equivalent_poisson=0.3).arrays
    assert np.allclose(other["strain_range_equivalent"], 2 * other["equivalent_strain_maximum"], rtol=1e-14)


@pytest.mark.derived("every pair of points, one by one")
@pytest.mark.parametrize("shape", ["cloud", "line", "circle", "sphere", "one point", "twice the same"])
def test_largest_distances_of_hard_sets(shape: str) -> None:
    rng = np.random.default_rng(2)
    n, m = 17, 60
    points = rng.normal(size=(n, 5, m))
    angle = rng.uniform(0, 2 * np.pi, (n, 1, m))
    if shape == "line":
        points = angle * points[:1]
    elif shape == "circle":
        points = np.cos(angle) * points[:1] + np.sin(angle) * points[1:2]
    elif shape == "sphere":
        points /= np.linalg.norm(points, axis=1, keepdims=True)
    elif shape == "one point":
        points = points[:1]
    elif shape == "twice the same":
        points = np.concatenate([points, points])
    points[:, :, rng.random((len(points), m)).argmax(axis=0) % 7 == 0] = np.nan  # some cells in no step
    points[rng.random((len(points), m)).argmax(axis=0), :, np.arange(m)] = np.nan  # one step of each
    size, first, second = largest_distances(points)
    every = np.linalg.norm(points[:, None] - points[None], axis=2)
    known = np.isfinite(points).all(axis=1).any(axis=0)
    assert np.array_equal(np.isnan(size), ~known)
    assert (first[~known] == -1).all()
    cells = np.flatnonzero(known)
    assert np.allclose(size[cells], np.nanmax(every[:, :, cells], axis=(0, 1)), rtol=1e-14)
    assert np.allclose(every[first[cells], second[cells], cells], size[cells], rtol=1e-14)
    assert (first <= second).all()


@pytest.mark.derived("blocks of cells do not change the range")
def test_the_range_is_the_same_in_blocks(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    rng = np.random.default_rng(8)
    strains = rng.normal(size=(4, 137, 6))
    found = []
    for block in (300_000, 5 * 4 * 10):
        monkeypatch.setattr("unturn.tensor_range._BLOCK", block)
        with TensorRange(137, tmp_path) as tensor_range:
            for k, e in enumerate(strains):
                tensor_range.add(e, 3 * k)
            found.append(tensor_range.finish())
    for a, b in zip(*found):
        assert np.array_equal(a, b)
    assert not list(tmp_path.iterdir())
    assert set(np.unique(found[0][1]).tolist()) <= {0, 3, 6, 9}


@pytest.mark.practice("deleted cells do not count in the steps they are dead in")
def test_alive_cells_count_while_they_live() -> None:
    steps = [s * (k + 1) for k, s in enumerate(random_steps(1) * 4)]
    n = len(MESH.cells)
    alive = [np.ones(n, dtype=np.int32) for _ in steps]
    for k in (2, 3):
        alive[k][0] = 0
    for flags in alive:
        flags[1] = 0
    options = EnvelopeOptions(StrainOptions(measures=["equivalent_strain"], alive="status"))
    found = envelope(states_of(steps, status=alive), options)
    at = found.arrays["equivalent_strain_maximum_step"]
    assert at[0] == 1
    assert at[1] == -1
    assert set(at[2:].tolist()) == {3}
    assert np.isnan(found.arrays["equivalent_strain_maximum"][1])
    assert np.isnan(found.arrays["strain_range_equivalent"][1])
    assert found.arrays["strain_range_equivalent_second_step"][0] == 1
    assert {reason: cells.tolist() for reason, cells in found.left_out.items()} == {"deleted": [1]}
    assert np.isnan(found.volume).sum() == 1


@pytest.mark.practice("a failed step names itself and the rest can go on")
def test_a_failing_step_stops_or_is_left_out() -> None:
    steps = random_steps(4)
    states = states_of(steps)

    def broken() -> Result:
        raise InputError("run.xdmf: the data of this step is cut short.")

    states[1] = State("step 1", broken, 1.0)
    strain_options = StrainOptions(measures=["equivalent_strain"])
    with pytest.raises(InputError, match=r"^step 1: run.xdmf: the data"):
        envelope(states, EnvelopeOptions(strain_options))
    found = envelope(states, EnvelopeOptions(strain_options, keep_going=True))
    assert list(found.failures) == [1]
    good = measured([steps[0], steps[2], steps[3]], "equivalent_strain")["equivalent_strain"]
    assert np.array_equal(found.arrays["equivalent_strain_maximum"], good.max(axis=0))
    at = np.array([0, 2, 3])[good.argmax(axis=0)]
    assert np.array_equal(found.arrays["equivalent_strain_maximum_step"], at)
    with pytest.raises(InputError, match=r"^step 1"):
        envelope([states[1], states[1]], EnvelopeOptions(strain_options, keep_going=True))


@pytest.mark.practice("another mesh cannot be compared cell by cell")
def test_another_mesh_is_refused() -> None:
    u = random_steps(1)[0]
    one = State("a", lambda: MESH.result(u=u))
    moved = MESH._replace(points=MESH.points + np.array([0.0, 0.0, 1e-3]) * (MESH.points > 0.5))
    swapped = MESH._replace(cells=MESH.cells[::-1].copy())
    for other, words in ((moved, "lies 0.001 away"), (swapped, "another one")):
        with pytest.raises(InputError, match=words):
            envelope([one, State("b", lambda other=other: other.result(u=u))])  # type: ignore[misc]
    deformed = [State("a", lambda: MESH._replace(points=MESH.points + u).result(u=u)),
                State("b", lambda: MESH._replace(points=MESH.points - 2 * u).result(u=-2 * u))]  # fmt: skip
    found = envelope(
        deformed, EnvelopeOptions(StrainOptions(coordinates="deformed", measures=["equivalent_strain"]))
    )
    assert set(found.arrays["equivalent_strain_maximum_step"].tolist()) == {1}


@pytest.mark.practice("a flat mesh is plane or a surface, not once this and once that")
def test_a_flat_mesh_keeps_its_kind() -> None:
    plate = patch(ELEMENTS["quad"])
    bent = 0.01 * plate.points[:, :1] ** 2 * np.array([0.0, 0.0, 1.0])
    states = [State(f"step {k}", lambda k=k: plate.result(u=k * bent)) for k in range(2)]  # type: ignore[misc]
    with pytest.raises(InputError, match=r"step 1: .*as a surface once and as plane once"):
        envelope(states, EnvelopeOptions(StrainOptions(measures=["strain"])))


@pytest.mark.practice("nothing computed is no envelope")
def test_nothing_computed_is_refused() -> None:
    with pytest.raises(
        InputError, match=r"no cell could be computed in any step: \d+ displacement not finite"
    ):
        run([np.full_like(MESH.points, np.nan)] * 2, ["strain"])


@pytest.mark.practice("a cell that is broken in the first step counts in the others")
def test_cells_that_the_first_step_cannot_compute_belong_to_their_region() -> None:
    steps = random_steps(3)
    steps[0][MESH.cells[0]] = np.nan
    found = run(steps, ["equivalent_strain"])
    assert found.left_out == {}
    assert [len(j.region.cells) for j in found.judged] == [len(MESH.cells)]
    assert np.isfinite(found.volume).all()
    assert found.arrays["equivalent_strain_maximum_step"][0] > 0
    assert found.arrays["strain_range_equivalent_first_step"][0] == 1


@pytest.mark.derived("the worst verdict of a region is that of the step that turns most")
def test_the_worst_verdict_over_the_steps_is_kept() -> None:
    steps = [
        MESH.points @ (axis_angle(AXIS, a) + 1e-3 * np.diag([1, -0.3, -0.3])).T for a in (0.0, 0.1, 1e-5)
    ]
    found = run(steps, ["equivalent_strain"])
    assert [(j.verdict.level, j.state) for j in found.judged] == [("does not hold", 1)]
    assert found.judged[0].verdict.largest_rotation == pytest.approx(np.degrees(0.1), rel=1e-3)


@pytest.mark.practice("what has no extremes or no order of steps is refused")
def test_measures_that_do_not_fit_are_refused() -> None:
    steps = random_steps(2)
    with pytest.raises(UsageError, match="has no largest value"):
        run(steps, ["principal_direction_1"])
    with pytest.raises(UsageError, match="load cases do not follow"):
        run(steps, ["spin"], kind="case")
    with pytest.raises(UsageError, match="is fiction"):
        run(steps, ["strain_increment"], base="hencky", solve="linear")
    with pytest.raises(UsageError, match="strain_error tells how far one step can be trusted"):
        run(steps, ["strain_error"])
    with pytest.raises(UsageError, match="no measure is called 'sstrain'"):
        run(steps, ["sstrain"])
    assert "strain_range_equivalent_almansi" not in run(steps, ["equivalent_strain"], base="almansi").arrays
    with pytest.raises(InputError, match="no step"):
        envelope([])


@pytest.mark.derived("one step is held at a time")
def test_memory_does_not_grow_with_the_steps(tmp_path: Path) -> None:
    n = 12_000
    rng = np.random.default_rng(0)
    points = rng.normal(size=(4 * n, 3))
    block = CellBlock("tetra", np.arange(4 * n).reshape(n, 4), np.arange(n))
    peaks = []
    for count in (3, 3, 40):
        states = [
            State(
                f"step {k}", lambda k=k: Result(points, (block,), {"u": 1e-3 * np.sin(k + points)}), float(k)
            )  # type: ignore[misc]
            for k in range(count)
        ]
        measures = ["equivalent_strain", "accumulated_equivalent_strain"]
        gc.collect()
        tracemalloc.start()
        envelope(states, EnvelopeOptions(StrainOptions(measures=measures, threads=1), folder=tmp_path))
        peaks.append(tracemalloc.get_traced_memory()[1])
        tracemalloc.stop()
    assert peaks[2] < 1.1 * peaks[1], peaks


@pytest.mark.practice("an error names its state and its file, each once")
@pytest.mark.parametrize(
    ("name", "said", "words"),
    [
        ("step 3", "run.xdmf: cut short: 3 bytes.", "step 3: run.xdmf: cut short: 3 bytes."),
        ("a.vtu", "old/a.vtu: cut short.", "old/a.vtu: cut short."),
        ("a.vtu", "b.vtu: cut short.", "a.vtu: b.vtu: cut short."),
        ("run.xdmf step 3", "old/run.xdmf: cut short.", "old/run.xdmf step 3: cut short."),
        ("step 3", "step.vtu is empty.", "step 3: step.vtu is empty."),
        ("a b.vtu", "old folder/a b.vtu is empty.", "old folder/a b.vtu is empty."),
        ("a.vtu", "the mesh is plane: run.vtu", "a.vtu: the mesh is plane: run.vtu"),
        ("run.pvd step 2", "run.pvd names the file x.vtu.", "run.pvd step 2: run.pvd names the file x.vtu."),
        ("run.vtu step 2", "node 4.5 is lost.", "run.vtu step 2: node 4.5 is lost."),
    ],
)
def test_errors_name_state_and_file_once(name: str, said: str, words: str) -> None:
    assert str(named(name, InputError(said))) == words


# --- superposition ----------------------------------------------------------------------------------------------------


def written(folder: Path, text: str) -> Path:
    path = folder / "combinations.toml"
    path.write_text(text, encoding="utf-8")
    return path


@pytest.mark.derived("sums of displacement gradients, then strain, principal values and the rest")
def test_superposition_is_that_of_the_gradients(tmp_path: Path) -> None:
    cases = dict(zip(("dead", "wind", "snow"), random_steps(3)))
    text = """
    [combinations.service]
    dead = 1
    wind = 0.6
    [combinations.storm]
    dead = 1.35
    wind = "+-1.5"
    snow = "+-0.75"
    """
    combinations = read_combinations(written(tmp_path, text))
    assert [c.name for c in combinations] == [
        "service", "storm (+wind, +snow)", "storm (+wind, -snow)", "storm (-wind, +snow)", "storm (-wind, -snow)",
    ]  # fmt: skip
    readers = {name: (lambda u=u: MESH.result(u=u)) for name, u in cases.items()}
    states, options = superposed_states(
        readers, combinations, StrainOptions(measures=["all"], solve="linear")
    )
    found = envelope(states, EnvelopeOptions(options, "case")).arrays
    H = {
        name: compute(MESH.result(u=u), StrainOptions(measures=["displacement_gradient"]))
        .fields.arrays["displacement_gradient"]
        .reshape(-1, 3, 3)
        for name, u in cases.items()
    }
    factors = [(1, 0.6, 0), (1.35, 1.5, 0.75), (1.35, 1.5, -0.75), (1.35, -1.5, 0.75), (1.35, -1.5, -0.75)]
    sums = np.array([a * H["dead"] + b * H["wind"] + c * H["snow"] for a, b, c in factors])
    principal = principal_strain(strain(sums))
    assert np.allclose(found["principal_strain_maximum"], principal.max(axis=0), rtol=1e-12)
    assert np.array_equal(found["principal_strain_maximum_case"], principal.argmax(axis=0))
    equivalent = equivalent_strain(strain(sums))
    assert np.allclose(found["equivalent_strain_maximum"], equivalent.max(axis=0), rtol=1e-12)
    assert np.allclose(found["strain_range_equivalent"], brute_range(strain(sums))[0], rtol=1e-12)
    # the equivalent of a sum is not the sum of equivalents: superposing after deriving would be wrong
    wrong = sum(abs(f) * equivalent_strain(strain(H[c])) for f, c in zip(factors[1], cases))
    assert (found["equivalent_strain_maximum"] < 0.999 * wrong).all()


@pytest.mark.derived("each load case is read once for eight combinations; one displacement at a time")
def test_many_combinations_read_each_case_a_few_times() -> None:
    steps = random_steps(2)
    reads = [0, 0]

    def reader(k: int) -> Callable[[], Result]:
        def read() -> Result:
            reads[k] += 1
            return MESH.result(u=steps[k])

        return read

    combinations = [Combination(f"c{k}", {"a": 1.0, "b": float(k)}) for k in range(17)]
    options = StrainOptions(measures=["equivalent_strain"], solve="linear")
    states, options = superposed_states({"a": reader(0), "b": reader(1)}, combinations, options)
    found = envelope(states, EnvelopeOptions(options, "case"))
    assert reads == [4, 4]  # once more for the first of the two of the range, to tell how far to trust it
    every = measured([steps[0] + k * steps[1] for k in range(17)], "equivalent_strain")["equivalent_strain"]
    assert np.allclose(found.arrays["equivalent_strain_maximum"], every.max(axis=0), rtol=1e-12)
    assert np.array_equal(found.arrays["equivalent_strain_minimum_case"], every.argmin(axis=0))


@pytest.mark.derived("the scale and the coordinates of the cases are used before they are summed")
def test_cases_with_scaled_displacements_and_deformed_coordinates() -> None:
    u, v = random_steps(2)
    readers = {
        "a": lambda: MESH._replace(points=MESH.points + u).result(u=1000 * u, temperature=u[:, 0]),
        "b": lambda: MESH._replace(points=MESH.points + v).result(u=1000 * v),
    }
    asked = StrainOptions(
        coordinates="deformed", displacement="u", displacement_scale=1e-3, measures=["strain"], solve="linear"
    )
    states, options = superposed_states(readers, [Combination("both", {"a": 2.0, "b": -1.0})], asked)
    result = states[0].read()
    assert np.allclose(build_model(result).points, MESH.points, atol=1e-15)
    assert list(result.point_data) == ["displacement"]
    assert np.allclose(result.point_data["displacement"], 2 * u - v, atol=1e-18)
    assert (options.displacement_scale, options.coordinates) == (1.0, "reference")


@pytest.mark.practice("a failed load case fails the combinations that use it, and no other")
def test_a_failed_case_fails_its_combinations_only() -> None:
    def broken() -> Result:
        raise InputError("wind.vtu: cut short.")

    readers = {"dead": lambda: MESH.result(u=random_steps(1)[0]), "wind": broken}
    combinations = [Combination("storm", {"dead": 1, "wind": 1}), Combination("calm", {"dead": 1.35})]
    states, options = superposed_states(
        readers, combinations, StrainOptions(measures=["strain"], solve="linear")
    )
    found = envelope(states, EnvelopeOptions(options, "case", keep_going=True))
    assert {k: str(e) for k, e in found.failures.items()} == {0: "wind.vtu: cut short."}
    assert set(found.arrays["strain_maximum_case"].ravel().tolist()) == {1}


@pytest.mark.practice("wrong tables are refused with what to do")
@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "it has none"),
        ("a = 1", "it has 'a'"),
        ("[combinations]", "it has none"),
        ("[combinations.x]", "holds no load case"),
        ("[combinations]\nx = 1", "holds no load case"),
        ("[combinations.x]\ndead = true", "is True"),
        ("[combinations.x]\ndead = '1.5'", "is '1.5'"),
        ("[combinations.x]\ndead = '+-a'", "Write a number"),
        ("[combinations.x]\ndead = nan", "is nan"),
        ("[combinations.x]\n" + "\n".join(f"c{k} = '+-1'" for k in range(11)), "2048 combinations"),
    ],
)
def test_wrong_tables_are_refused(tmp_path: Path, text: str, words: str) -> None:
    with pytest.raises(UsageError, match=words.replace("+", r"\+")):
        read_combinations(written(tmp_path, text))


@pytest.mark.practice("what cannot be superposed is refused")
def test_wrong_superposition_is_refused(tmp_path: Path) -> None:
    with pytest.raises(UsageError, match="cannot be read"):
        read_combinations(tmp_path / "none.toml")
    for text in ("= 1", "a = " + "1" * 5000, "a = " + "[" * 5000):
        with pytest.raises(UsageError, match="not a TOML file"):
            read_combinations(written(tmp_path, text))
    readers = {"dead": lambda: MESH.result(u=MESH.points)}
    with pytest.raises(UsageError, match="Did you mean 'dead'"):
        superposed_states(readers, [Combination("x", {"deed": 1.0})], StrainOptions(solve="linear"))
    with pytest.raises(UsageError, match="state --solve linear if they were"):
        superposed_states(readers, [Combination("x", {"dead": 1.0})], StrainOptions())
    with pytest.raises(UsageError, match="nonlinear solve cannot be superposed"):
        superposed_states(readers, [Combination("x", {"dead": 1.0})], StrainOptions(solve="nonlinear"))


def temperature(points: Floats, k: int) -> Floats:
    return 20.0 + 50.0 * k * points[:, 0]


@pytest.mark.derived("the free strain of a sum is the sum of the free strains")
@pytest.mark.parametrize("on_points", [True, False])
def test_temperatures_of_cases_add_up_by_their_distance_from_the_reference(on_points: bool) -> None:
    steps = random_steps(3)
    centre = MESH.points[MESH.cells].mean(axis=1)

    def case(k: int) -> Result:
        result = MESH.result(u=steps[k])
        if k == 2:  # a case that is not heated
            return result
        if on_points:
            return result.with_arrays(point_data={"T": temperature(MESH.points, k + 1)})
        return result.with_arrays(cell_data={"T": temperature(centre, k + 1)})

    readers = {name: (lambda k=k: case(k)) for k, name in enumerate("abc")}  # type: ignore[misc]
    asked = StrainOptions(
        measures=["mechanical_strain"], solve="linear", thermal_expansion="12e-6", temperature="T",
        reference_temperature=20.0,
    )  # fmt: skip
    factors = {"a": 2.0, "b": -1.5, "c": 1.0}
    states, options = superposed_states(readers, [Combination("x", factors)], asked)
    found = envelope(states, EnvelopeOptions(options, "case"))
    every = [compute(case(k), asked).fields.arrays["mechanical_strain"] for k in range(2)]
    every.append(measured([steps[2]], "strain")["strain"][0])
    expected = 2.0 * every[0] - 1.5 * every[1] + every[2]
    assert np.allclose(found.arrays["mechanical_strain_maximum"], expected, atol=1e-16)
    assert "without an array 'T', so not heated: load case c" in found.notes


@pytest.mark.derived("what is stored in single precision blurs a sum by the sum of what blurs its parts")
def test_the_floor_of_a_sum_is_that_of_its_cases() -> None:
    u = 1e-3 * np.sin(7 * MESH.points) + 1e-9 * MESH.points
    single = u.astype(np.float32)
    floors = [
        compute(MESH.result(u=v), StrainOptions(measures=["strain"]), diagnose=True).fields.diagnostics.noise  # type: ignore[union-attr]
        for v in (single, u)
    ]
    assert (floors[0] > 1e5 * floors[1]).all()
    readers = {"a": lambda: MESH.result(u=single), "b": lambda: MESH.result(u=-0.999 * single)}
    asked = StrainOptions(measures=["strain"], solve="linear")
    states, _ = superposed_states(readers, [Combination("x", {"a": 2.0, "b": 2.0})], asked)
    states[0].read()
    assert states[0].noise is not None
    floor = states[0].noise()
    assert floor is not None
    assert (floor >= 1.99 * floors[0]).all()
    assert (floor <= 4.01 * floors[0]).all()
    found = envelope(states, EnvelopeOptions(asked, "case"))
    # almost nothing is left of the two, and what is left is no more than their rounding can be
    assert [j.verdict.noise for j in found.judged] == pytest.approx([np.percentile(floor, 99)], rel=0.3)


@pytest.mark.practice("a cell that one of the cases has deleted is deleted in their sum")
def test_deleted_cells_of_cases() -> None:
    u = random_steps(1)[0]
    alive = np.ones((2, len(MESH.cells)), dtype=np.int32)
    alive[1, 3] = 0
    readers = {
        name: (lambda k=k: MESH.result(u=u).with_arrays(cell_data={"on": alive[k]}))  # type: ignore[misc]
        for k, name in enumerate("ab")
    }
    asked = StrainOptions(measures=["strain"], solve="linear", alive="on")
    combinations = [Combination("a", {"a": 1.0}), Combination("both", {"a": 1.0, "b": 1.0})]
    states, options = superposed_states(readers, combinations, asked)
    found = envelope(states, EnvelopeOptions(options, "case"))
    assert found.arrays["strain_maximum_case"][3].tolist() == [0] * 6
    assert (found.arrays["strain_maximum_case"][:3] >= 0).all()
    assert (found.arrays["strain_maximum_case"].max(axis=1)[:3] == 1).all()
