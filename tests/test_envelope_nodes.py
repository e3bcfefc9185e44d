"""Envelopes of values at nodes, held against every step computed by itself."""

from __future__ import annotations

import gc
import tracemalloc
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

import unturn
from meshes import Mesh, patch, straight
from unturn.combinations import Combination
from unturn.elements import ELEMENTS
from unturn.envelopes import envelope
from unturn.errors import InputError, UsageError
from unturn.kinematics import equivalent_strain, tensor_from_components
from unturn.pipeline import StrainOptions, compute
from unturn.result import CellBlock, Result
from unturn.states import Envelope, EnvelopeOptions, State
from unturn.superposition import superposed_states

Floats = NDArray[np.float64]


def bar(n: int = 6) -> Mesh:
    """A bar of 3 x 2 x n hexahedra, longer ones towards its end."""
    sides = (np.linspace(0, 0.3, 4), np.linspace(0, 0.2, 3), np.linspace(0, 1, n + 1) ** 1.3)
    corners = np.stack(np.meshgrid(*sides, indexing="ij"), axis=-1).reshape(-1, 3)
    number = np.arange(len(corners)).reshape(4, 3, n + 1)
    steps = [(0, 0, 0), (1, 0, 0), (1, 1, 0), (0, 1, 0), (0, 0, 1), (1, 0, 1), (1, 1, 1), (0, 1, 1)]
    cells = np.stack([number[i : 3 + i, j : 2 + j, k : n + k] for i, j, k in steps], axis=-1).reshape(-1, 8)
    return straight(corners, cells, ELEMENTS["hexahedron"])


MESH = bar()
BORDER = 0.5**1.3
PART = (MESH.points[MESH.cells].mean(axis=1)[:, 2] > BORDER).astype(np.int32)  # 3 of 6 cells along the bar


def displacements(n: int = 5) -> list[Floats]:
    rng = np.random.default_rng(5)
    smooth = [np.sin(3 * MESH.points @ rng.normal(size=(3, 3))) for _ in range(n)]
    return [1e-3 * s * (1 + 0.1 * k) for k, s in enumerate(smooth)]


def states(us: list[Floats], mesh: Mesh = MESH, part: Any = PART, **cells: list[Any]) -> list[State]:
    def reader(k: int) -> Callable[[], Result]:
        more = {name: values[k] for name, values in cells.items()}
        return lambda: mesh.result(u=us[k]).with_arrays(cell_data={"part": part, **more})

    return [State(f"step {k}", reader(k), 0.5 * k) for k in range(len(us))]


def run(steps: list[State], measures: list[str] | None = None, **options: Any) -> Envelope:
    asked = StrainOptions(measures=measures, at="nodes", **options)
    return envelope(steps, EnvelopeOptions(asked))


def every(steps: list[State], *names: str, **options: Any) -> dict[str, Floats]:
    """The point arrays of every step, `(n_steps, n_points, ...)`, as `unturn.strain` gives them."""
    found = [unturn.strain(s.read(), measures=names, at="nodes", **options).point_data for s in steps]
    return {name: np.array([arrays[name] for arrays in found]) for name in names}


@pytest.mark.derived("unturn.strain at nodes, step by step, all steps held at once")
@pytest.mark.parametrize(
    "options",
    [
        {},
        {"base": "hencky"},
        {"recovery": "average"},
        {"frame": "cylindrical 0,0,1 through -1,0,0", "equivalent_poisson": 0.3},
        {"remove_rigid": "regions"},
    ],
    ids=str,
)
def test_extremes_at_nodes_are_those_of_all_steps_at_once(options: dict[str, Any]) -> None:
    steps = states(displacements())
    found = run(steps, **options).arrays
    suffix = "_hencky" if "base" in options else ""
    names = [f"strain{suffix}", f"equivalent_strain{suffix}", f"principal_strain{suffix}"]
    names.append("finite_rotation" if suffix else "rotation")
    plain = {k: v for k, v in options.items() if k != "base"}
    times = np.array([s.time for s in steps])
    for name, values in every(steps, *names, **plain).items():
        for end, extreme, where in (
            ("maximum", values.max(axis=0), values.argmax(axis=0)),
            ("minimum", values.min(axis=0), values.argmin(axis=0)),
        ):
            assert np.allclose(found[f"{name}_{end}"], extreme, rtol=1e-12, atol=1e-17)
            assert np.array_equal(found[f"{name}_{end}_step"], where)
            assert np.array_equal(found[f"{name}_{end}_time"], times[where])
    assert f"principal_direction_1{suffix}_at_maximum" in found


@pytest.mark.derived("every pair of steps at every node")
def test_the_range_at_nodes_is_that_of_every_pair() -> None:
    steps = states(displacements())
    found = run(steps, ["equivalent_strain"]).arrays
    e = tensor_from_components(every(steps, "strain")["strain"])
    sizes = np.array([[equivalent_strain(a - b) for a in e] for b in e])
    assert np.allclose(found["strain_range_equivalent"], sizes.max(axis=(0, 1)), rtol=1e-12)
    first, second = (found[f"strain_range_equivalent_{w}_step"] for w in ("first", "second"))
    nodes = np.arange(len(first))
    assert np.allclose(sizes[first, second, nodes], found["strain_range_equivalent"], rtol=1e-12)
    assert np.array_equal(found["strain_range_equivalent_second_time"], 0.5 * second)


@pytest.mark.derived(
    "each part recovered by itself: a region's extremes are those of its own side of the border"
)
def test_regions_have_their_own_values_on_their_border() -> None:
    us = displacements()
    for u in us:  # a kink at the border of the parts
        u[:, 2] += 3e-3 * np.abs(MESH.points[:, 2] - BORDER)
    steps = states(us)
    found = run(steps, ["equivalent_strain", "principal_strain"])
    for judged, part in zip(found.judged, (0, 1)):
        own = part == PART
        alone = [
            State(s.name, lambda s=s, own=own: s.read().with_arrays(cell_data={"on": own.astype(np.int8)}))  # type: ignore[misc]
            for s in steps
        ]
        values = every(alone, "equivalent_strain", "principal_strain", alive="on")
        assert judged.region.name == f"part={part}"
        places = found.places.of(judged.region.cells)
        nodes = found.places.position[places]
        assert set(nodes.tolist()) == set(np.unique(MESH.cells[own]).tolist())
        for tracked in found.tracked:
            extreme = np.nanmax if tracked.which == "maximum" else np.nanmin
            if tracked.measure in values:
                expected = extreme(values[tracked.measure][:, nodes], axis=0)
                assert np.allclose(tracked.values[places], expected, rtol=1e-12)
    border = np.isclose(MESH.points[:, 2], BORDER)
    sides = next(t for t in found.tracked if t.array == "equivalent_strain_maximum").values
    assert len(sides) == len(MESH.points) + border.sum()
    weight = found.places.weight
    assert weight.sum() == pytest.approx(0.06)


@pytest.mark.practice("deleted cells do not count in the steps they are dead in, at nodes neither")
@pytest.mark.parametrize("count", [1, 2])
def test_alive_cells_count_at_nodes_while_they_live(count: int) -> None:
    us = displacements(4)
    alive = np.ones((4, len(MESH.cells)), dtype=np.int32)
    alive[1, [5, 11, 17]] = 0  # cells at the end of the bar
    alive[2:, [5, 11, 17, 23, 29, 35]] = 0  # all of its last layer
    alive[0, 0] = 0
    steps = states(us, status=list(alive), part=PART * (count - 1))
    found = run(steps, ["equivalent_strain", "accumulated_equivalent_strain"], alive="status").arrays
    values = every(steps, "equivalent_strain", alive="status")["equivalent_strain"]
    assert np.isnan(values).any()
    assert np.allclose(found["equivalent_strain_maximum"], np.nanmax(values, axis=0), rtol=1e-12)
    assert np.array_equal(found["equivalent_strain_maximum_step"], np.nanargmax(values, axis=0))
    end = np.isclose(MESH.points[:, 2], 1.0)
    assert set(found["equivalent_strain_maximum_step"][end].tolist()) <= {0, 1}
    assert np.isfinite(found["accumulated_equivalent_strain"]).all()


@pytest.mark.derived("sums and differences of the recovered gradients of the steps")
def test_increments_at_nodes() -> None:
    us = displacements(4)
    steps = states(us)
    given: list[tuple[dict[str, Any], float]] = []
    asked = StrainOptions(
        measures=["strain_increment", "accumulated_equivalent_strain", "spin"], at="nodes", solve="linear"
    )
    found = envelope(
        steps, EnvelopeOptions(asked), each=lambda r, arrays, names, time: given.append((dict(arrays), time))
    )
    e = every(steps, "strain", "rotation", solve="linear")
    change = np.diff(e["strain"], axis=0, prepend=0.0)
    assert [time for _, time in given] == [0.0, 0.5, 1.0, 1.5]
    for (arrays, _), expected in zip(given, change):
        assert np.allclose(arrays["strain_increment"], expected, atol=1e-17)
    total = equivalent_strain(tensor_from_components(change)).sum(axis=0)
    assert np.allclose(found.arrays["accumulated_equivalent_strain"], total, rtol=1e-12)
    spin = np.diff(e["rotation"], axis=0) / 0.5
    assert np.allclose(found.arrays["spin_maximum"], spin.max(axis=0), atol=1e-15)


@pytest.mark.derived("zero step, and the free thermal strain: the same as for one step by itself")
def test_zero_step_and_temperature_at_nodes() -> None:
    us = displacements(4)
    steps = states(us)
    zero = steps[1].read()
    asked = StrainOptions(measures=["strain", "strain_hencky"], at="nodes", solve="nonlinear")
    found = envelope(steps, EnvelopeOptions(asked), zero=zero).arrays
    single = [
        unturn.strain(
            s.read(), measures=["strain", "strain_hencky"], at="nodes", solve="nonlinear", zero=zero
        )
        for s in steps
    ]
    for name in ("strain", "strain_hencky"):
        values = np.array([r.point_data[name] for r in single])
        assert np.allclose(found[f"{name}_maximum"], values.max(axis=0), atol=1e-15)
    heated = [
        State(
            s.name,
            lambda s=s, k=k: s.read().with_arrays(point_data={"T": 20 + 30 * k * MESH.points[:, 2]}),
            s.time,
        )  # type: ignore[misc]
        for k, s in enumerate(steps)
    ]
    hot = {
        "thermal_expansion": "part=0:12e-6;part=1:23e-6",
        "temperature": "T",
        "reference_temperature": 20.0,
    }
    found = run(heated, ["equivalent_strain_mechanical", "mechanical_strain"], **hot).arrays
    values = every(heated, "mechanical_strain", **hot)["mechanical_strain"]
    assert np.allclose(found["mechanical_strain_maximum"], values.max(axis=0), atol=1e-16)
    e = tensor_from_components(values)
    sizes = np.array([[equivalent_strain(a - b) for a in e] for b in e]).max(axis=(0, 1))
    assert np.allclose(found["strain_range_equivalent_mechanical"], sizes, rtol=1e-12)


@pytest.mark.practice("coincident nodes, points of no cell, a plane mesh, surfaces")
def test_odd_meshes() -> None:
    n = len(MESH.points)
    points = np.concatenate([MESH.points, MESH.points, [[9.0, 9.0, 9.0]]])
    cells = MESH.cells.copy()
    cells[PART == 1] += n  # the parts have nodes of their own, side by side
    block = CellBlock("hexahedron", cells, np.arange(len(cells)))
    us = [np.concatenate([u, u, [[np.nan] * 3]]) for u in displacements(3)]
    steps = [
        State(f"step {k}", lambda u=u: Result(points, (block,), {"u": u}))  # type: ignore[misc]
        for k, u in enumerate(us)
    ]
    found = run(steps, ["strain"])
    values = every(steps, "strain")["strain"]
    assert np.array_equal(np.isnan(found.arrays["strain_maximum"]), np.isnan(values).all(axis=0))
    known = np.isfinite(values).all(axis=(0, 2))
    assert np.allclose(found.arrays["strain_maximum"][known], values.max(axis=0)[known], rtol=1e-12)
    assert (found.arrays["strain_maximum_step"][-1] == -1).all()
    plate = patch(ELEMENTS["quad"])
    flat = [
        State("a", lambda: plate.result(u=1e-3 * plate.points)),
        State("b", lambda: plate.result(u=plate.points)),
    ]
    with pytest.raises(UsageError, match="the mesh is plane"):
        run(flat)
    assert np.allclose(run(flat, ["strain"]).arrays["strain_maximum"][:, :2], 1.0)
    found = run(flat, plane="stress", poisson=0.3)
    assert np.allclose(found.arrays["strain_maximum"][:, :2], 1.0)
    with pytest.raises(UsageError, match="not at='surface'"):
        envelope(flat, EnvelopeOptions(StrainOptions(at="surface")))
    with pytest.raises(UsageError, match="needs surface cells"):
        run(steps, ["strain"], frame="surface")


@pytest.mark.derived("one step is held at a time, at nodes too")
def test_memory_at_nodes_does_not_grow_with_the_steps(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("unturn.tensor_range._BLOCK", 30_000)  # small beside so small a mesh
    mesh = bar(300)
    rng = np.random.default_rng(0)
    waves = rng.normal(size=(3, 3))
    peaks = []
    for count in (3, 3, 24):
        steps = [
            State(f"step {k}", lambda k=k: mesh.result(u=1e-3 * np.sin(k + mesh.points @ waves)), float(k))  # type: ignore[misc]
            for k in range(count)
        ]
        gc.collect()
        tracemalloc.start()
        asked = StrainOptions(measures=["equivalent_strain", "principal_strain"], at="nodes", threads=1)
        envelope(steps, EnvelopeOptions(asked, folder=tmp_path))
        peaks.append(tracemalloc.get_traced_memory()[1])
        tracemalloc.stop()
    assert peaks[2] < 1.1 * peaks[1], peaks


def test_names_of_components_follow_the_frame() -> None:  # Common practice, no source.
    found = run(states(displacements(2)), ["strain"], frame="cylindrical z")
    assert found.components["strain_maximum"] == ("RR", "TT", "ZZ", "RT", "TZ", "RZ")
    assert found.components["strain_maximum_time"] == ("RR", "TT", "ZZ", "RT", "TZ", "RZ")
    assert compute(states(displacements(1))[0].read(), StrainOptions()).nodes is None


@pytest.mark.derived("increments of components in a frame are those of the frame")
def test_increments_are_in_the_frame() -> None:
    steps = states(displacements(3))
    given: list[tuple[dict[str, Any], dict[str, Any]]] = []
    frame = "cylindrical 0,0,1 through -1,0,0"
    asked = StrainOptions(measures=["strain_increment"], at="nodes", frame=frame)
    found = envelope(
        steps,
        EnvelopeOptions(asked),
        each=lambda r, arrays, names, t: given.append((dict(arrays), dict(names))),
    )
    e = every(steps, "strain", frame=frame)["strain"]
    assert np.allclose(given[2][0]["strain_increment"], e[2] - e[1], atol=1e-17)
    assert given[2][1]["strain_increment"] == ("RR", "TT", "ZZ", "RT", "TZ", "RZ")
    assert found.components["strain_increment_maximum"] == ("RR", "TT", "ZZ", "RT", "TZ", "RZ")


@pytest.mark.practice("steps that are broken in part, or as a whole, leave the others what they are")
def test_broken_steps_at_nodes() -> None:
    us = displacements(4)
    us[0][MESH.cells[3]] = np.nan  # of the first step one cell and its neighbours cannot be computed
    steps = states(us)

    def broken() -> Result:
        raise InputError("run.xdmf: the data of this step is cut short.")

    steps[2] = State("step 2", broken, 1.0)
    asked = EnvelopeOptions(StrainOptions(measures=["equivalent_strain"], at="nodes"), keep_going=True)
    found = envelope(steps, asked)
    assert list(found.failures) == [2]
    values = every([steps[k] for k in (0, 1, 3)], "equivalent_strain")["equivalent_strain"]
    assert np.isnan(values[0]).any()
    assert np.allclose(found.arrays["equivalent_strain_maximum"], np.nanmax(values, axis=0), rtol=1e-12)
    at = np.array([0, 1, 3])[np.nanargmax(values, axis=0)]
    assert np.array_equal(found.arrays["equivalent_strain_maximum_step"], at)
    assert np.array_equal(found.arrays["equivalent_strain_maximum_time"], 0.5 * at)


@pytest.mark.derived("what is recovered of a sum is the sum of what is recovered")
def test_combinations_at_nodes() -> None:
    u, v = displacements(2)
    readers = {name: s.read for name, s in zip("ab", states([u, v]))}
    asked = StrainOptions(measures=["principal_strain"], at="nodes", solve="linear")
    combinations = [Combination("both", {"a": 1.35, "b": -1.5}), Combination("one", {"a": 1.0})]
    summed, options = superposed_states(readers, combinations, asked)
    found = envelope(summed, EnvelopeOptions(options, "case")).arrays
    values = every(states([1.35 * u - 1.5 * v, u]), "principal_strain", solve="linear")["principal_strain"]
    assert np.allclose(found["principal_strain_minimum"], values.min(axis=0), rtol=1e-11, atol=1e-16)
    assert np.array_equal(found["principal_strain_minimum_case"], values.argmin(axis=0))
    assert not any(name.endswith("_time") for name in found)


@pytest.mark.derived("a bent shell: every face has its own value at the fold, the surfaces do not mix")
def test_folds_of_surfaces() -> None:
    plate = patch(ELEMENTS["quad"])
    n = len(plate.points)
    up = plate.points[:, [0, 2, 1]]  # the same plate, standing on the x axis
    points = np.concatenate([plate.points, up])
    on_axis = np.flatnonzero(np.abs(plate.points[:, 1]) < 1e-12)
    cells = np.concatenate([plate.cells, plate.cells + n])
    for k in on_axis:
        cells[cells == k + n] = k
    block = CellBlock("quad", cells, np.arange(len(cells)))
    us = [1e-3 * np.sin(k + 2 * points) for k in range(3)]
    steps = [
        State(f"step {k}", lambda u=u: Result(points, (block,), {"u": u}), float(k)) for k, u in enumerate(us)
    ]  # type: ignore[misc]
    found = run(steps, ["equivalent_strain"])
    values = every(steps, "equivalent_strain")["equivalent_strain"]
    known = np.isfinite(values).all(axis=0)
    assert np.allclose(
        found.arrays["equivalent_strain_maximum"][known], values.max(axis=0)[known], rtol=1e-12
    )
    assert len(found.places.position) == 2 * n
    assert [len(j.region.cells) for j in found.judged] == [len(cells)]
