"""Plus and minus of the extremes of envelopes, held against recoveries of whole states, and peaks that are suspected."""

from __future__ import annotations

import json
import math
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

import unturn
from documents import run as command
from recovery_meshes import block
from solved_problems import NU, corner_plate
from unturn.around import Asked, bound_of, trust_of
from unturn.combinations import Combination
from unturn.elements import ELEMENTS
from unturn.envelopes import envelope
from unturn.errors import InputError
from unturn.measures import MEASURES, base_of
from unturn.nodal import recover_in_regions
from unturn.pipeline import StrainOptions, compute
from unturn.regions import find_regions
from unturn.result import Result
from unturn.rigid_parts import computed_cells
from unturn.states import Envelope, EnvelopeOptions, Extreme, State
from unturn.summary import SummaryOptions, summarise
from unturn.superposition import superposed_states
from unturn.trust import strain_error

Floats = NDArray[np.float64]
MESH = block(ELEMENTS["hexahedron"], 5, 0.15)
PART = (MESH.points[MESH.cells].mean(axis=1)[:, 0] > 0.6).astype(np.int32)
RANGE = "strain_range_equivalent"


def displacement(k: int) -> Floats:
    """A field of its own for every step."""
    turn = np.random.default_rng(k).normal(size=(3, 3))
    found: Floats = 1e-3 * (1 + 0.1 * k) * np.sin(2 * MESH.points @ turn)
    return found


def step(k: int) -> Result:
    return MESH.result(u=displacement(k)).with_arrays(cell_data={"part": PART})


def states(n: int = 5, read: Callable[[int], Result] = step) -> list[State]:
    return [State(f"step {k}", lambda k=k: read(k), 0.5 * k) for k in range(n)]  # type: ignore[misc]


def run(steps: list[State], measures: list[str] | None = None, **options: Any) -> Envelope:
    asked = StrainOptions(measures=measures, **options)
    return envelope(steps, EnvelopeOptions(asked, full=True))


def every(found: Envelope) -> list[tuple[int, Extreme]]:
    return [(r, e) for r, extremes in enumerate(found.extremes) for e in extremes]


def measure_of(e: Extreme) -> str:
    return e.of.measure.replace(RANGE, "equivalent_strain")


def of_whole_mesh(state: Result, measure: str, cell: int, options: dict[str, Any]) -> float:
    """The bound of a measure at a cell, from a recovery of the whole mesh."""
    computed = compute(state, StrainOptions(measures=[measure], **options), diagnose=True)
    model = computed.fields.model
    recovered = recover_in_regions(model, find_regions(model, computed_cells(model)))
    error = strain_error(recovered, base=base_of(measure), at=options.get("at", "centroid"))
    bound = bound_of(measure, equivalent_poisson=options.get("equivalent_poisson"))
    assert bound is not None
    assert len(bound.bases) == 1
    return bound.change * float(error.plus_minus[cell])


@pytest.mark.derived("a recovery of the whole mesh in the state that made the extreme; of both, for a range")
@pytest.mark.parametrize(
    "options",
    [
        {},
        {"base": "hencky", "solve": "nonlinear"},
        {"at": "mean", "equivalent_poisson": 0.3},
        {"frame": "cylindrical 0,0,1 through -1,0,0", "remove_rigid": "regions"},
    ],
    ids=str,
)
def test_extremes_at_cells_have_the_bound_of_their_state(options: dict[str, Any]) -> None:
    ending = "_hencky" if "base" in options else ""
    names = [f"{n}{ending}" for n in ("principal_strain", "equivalent_strain")]
    found = run(states(), names, **{k: v for k, v in options.items() if k != "base"})
    options = {k: v for k, v in options.items() if k != "base"}
    used = set()
    for _, e in every(found):
        cell, measure = int(found.places.position[e.place]), measure_of(e)
        expected = sum(of_whole_mesh(step(k), measure, cell, options) for k in e.states)
        assert e.trust.plus_minus == pytest.approx(expected, rel=1e-9), e.name
        assert e.trust.plus_minus > 0
        used |= set(e.states)
    assert len(used) > 2
    assert {len(e.states) for _, e in every(found)} == {1, 2}


@pytest.mark.derived("the summary of a state by itself")
@pytest.mark.parametrize("at", ["centroid", "nodes"])
@pytest.mark.parametrize("base", ["small", "hencky"])
def test_extremes_of_one_state_are_those_of_its_summary(at: Any, base: str) -> None:
    options = StrainOptions(
        measures=["principal_strain", "equivalent_strain"], at=at, base=base, solve="nonlinear"
    )
    still = State("still", lambda: step(0).with_arrays(point_data={"u": 0 * MESH.points}))
    found = envelope([still, states()[3]], EnvelopeOptions(options, full=True))
    summary = summarise(compute(step(3), options, diagnose=True), SummaryOptions(full=True))
    known: dict[tuple[str, str, float], float] = {}
    for r in summary.regions:
        for (name, which), trust in r.trust.items():
            known[r.region.name, name, getattr(r.statistics[name], which)] = trust.plus_minus
    if summary.elsewhere is not None:
        known = {(e.region, e.array, e.value): e.plus_minus for e in summary.elsewhere.extremes}
    met = 0
    for r, e in every(found):
        key = found.judged[r].region.name, e.name, e.value
        if e.states == (1,):
            if key in known:
                assert e.trust.plus_minus == pytest.approx(known[key], rel=1e-9), key
                met += 1
        elif len(e.states) == 2:
            alone = next(x for x in found.extremes[r] if x.name == measure_of(e) and x.of.which == "maximum")
            assert e.value == pytest.approx(alone.value, rel=1e-9)
            assert e.trust.plus_minus == pytest.approx(alone.trust.plus_minus, rel=1e-9)
    assert met >= 6


@pytest.mark.derived("the exact strain of the displacement that the nodes were given")
def test_the_exact_extremes_lie_within_the_bounds_at_nodes() -> None:
    mesh = block(ELEMENTS["hexahedron20"], 6, 0.1)
    waves = [np.random.default_rng(k).normal(size=(3, 3)) for k in range(4)]

    def read(k: int) -> Result:
        return mesh.result(u=1e-3 * np.sin(mesh.points @ waves[k]))

    def exact(k: int, x: Floats) -> Floats:
        H = 1e-3 * np.cos(x @ waves[k])[:, None] * waves[k].T
        found: Floats = 0.5 * (H + H.T)
        return found

    found = run(states(4, read), ["principal_strain", "equivalent_strain"], at="nodes")
    for _, e in every(found):
        tensors = [exact(k, found.places.at[e.place]) for k in e.states]
        d = tensors[0] if len(tensors) == 1 else tensors[0] - tensors[1]
        if e.component:
            truth = np.linalg.eigvalsh(d)[::-1][int(e.component) - 1]
        else:
            off = d - np.trace(d) / 3 * np.eye(3)
            truth = math.sqrt(2 / 3 * (off * off).sum())
        assert abs(e.value - truth) <= e.trust.plus_minus, e.name
        assert e.trust.plus_minus < 0.5 * abs(e.value) + 1e-4


@pytest.mark.derived("each part recovered by itself: a side of a border has the bound of its own cells")
def test_regions_have_their_own_bounds_at_nodes() -> None:
    def read(k: int) -> Result:
        kink = np.zeros_like(MESH.points)
        kink[:, 0] = 4e-3 * np.maximum(MESH.points[:, 0] - 0.6, 0)
        return step(k).with_arrays(point_data={"u": displacement(k) + kink})

    def alone(k: int, part: int) -> Result:
        return read(k).with_arrays(cell_data={"on": (part == PART).astype(np.int8)})

    names = ["principal_strain", "rotation", "det_f"]
    found = run(states(3, read), names, at="nodes")
    for r, part in enumerate((0, 1)):
        one = run(states(3, lambda k, p=part: alone(k, p)), names, at="nodes", alive="on")  # type: ignore[misc]
        assert [j.region.name for j in one.judged] == [j.region.name for j in found.judged]
        for ours, theirs in zip(found.extremes[r], one.extremes[r], strict=True):
            assert ours.value == pytest.approx(theirs.value, rel=1e-9)
            assert ours.trust.plus_minus == pytest.approx(theirs.trust.plus_minus, rel=1e-9)
            assert ours.trust.plus_minus > 0


@pytest.mark.derived("the combined displacement by itself")
def test_combinations_have_the_bound_of_the_sum() -> None:
    cases = {name: (lambda k=k: step(k)) for k, name in enumerate(("dead", "wind"))}
    factors = [{"dead": 1.35, "wind": w} for w in (0.0, 1.5, -1.5)]
    combinations = [Combination(f"c{k}", f) for k, f in enumerate(factors)]
    options = StrainOptions(measures=["principal_strain"], solve="linear")
    combined, options = superposed_states(cases, combinations, options)
    found = envelope(combined, EnvelopeOptions(options, "case", full=True))
    for _, e in every(found):
        cell = int(found.places.position[e.place])
        sums = [factors[k]["dead"] * displacement(0) + factors[k]["wind"] * displacement(1) for k in e.states]
        whole = [step(0).with_arrays(point_data={"u": u}) for u in sums]
        expected = sum(of_whole_mesh(w, measure_of(e), cell, {"solve": "linear"}) for w in whole)
        assert e.trust.plus_minus == pytest.approx(expected, rel=1e-9)


@pytest.mark.derived("displacements from another step: the bound of the difference")
def test_from_a_zero_step() -> None:
    steps = states(4)
    options = StrainOptions(measures=["principal_strain"])
    found = envelope(steps, EnvelopeOptions(options, full=True), zero=step(1))
    for _, e in every(found):
        if len(e.states) == 1:
            (k,) = e.states
            moved = step(k).with_arrays(point_data={"u": displacement(k) - displacement(1)})
            expected = of_whole_mesh(moved, e.of.measure, int(found.places.position[e.place]), {})
            assert e.trust.plus_minus == pytest.approx(expected, rel=1e-6, abs=1e-18)


@pytest.mark.practice("only the states that made an extreme of the table are read again, each once")
@pytest.mark.parametrize("full", [False, True])
def test_states_are_read_twice_at_most(full: bool) -> None:
    reads: list[int] = []

    def read(k: int) -> Result:
        reads.append(k)
        return step(k)

    found = envelope(states(9, read), EnvelopeOptions(StrainOptions(), full=full))
    again = reads[9:]
    assert reads[:9] == list(range(9))
    assert len(set(again)) == len(again)
    known = [e for _, e in every(found) if math.isfinite(e.trust.plus_minus)]
    assert {k for e in known for k in e.states} == set(again)
    shown = {"principal_strain_1", "principal_strain_3", "equivalent_strain", RANGE}
    assert {e.name for e in known} >= shown
    assert ({e.name for e in known} == shown) is not full


@pytest.mark.derived("accumulated strain, increments and one state alone")
def test_what_has_no_bound_and_what_is_certain() -> None:
    measures = ["equivalent_strain", "accumulated_equivalent_strain", "strain_increment"]
    found = run(states(), measures)
    for _, e in every(found):
        known = e.of.measure in MEASURES or e.name == RANGE
        assert math.isfinite(e.trust.plus_minus) is known, e.name

    def fail(k: int) -> Result:
        if k:
            raise InputError("gone.vtu: no such file.")
        return step(0)

    options = EnvelopeOptions(StrainOptions(measures=["equivalent_strain"]), keep_going=True, full=True)
    alone = envelope(states(3, fail), options)
    ranges = [e for _, e in every(alone) if e.name == RANGE]
    assert [(e.value, e.trust.plus_minus) for e in ranges] == [(0.0, 0.0)] * 2
    assert all(e.trust.plus_minus > 0 for _, e in every(alone) if e.name != RANGE)


@pytest.mark.practice("a state that is gone when it is read again is named")
def test_a_state_that_cannot_be_read_again() -> None:
    reads: list[int] = []

    def read(k: int) -> Result:
        reads.append(k)
        if len(reads) > 3:
            raise InputError("run.vtu: no such file.")
        return step(k)

    with pytest.raises(InputError, match=r"^step \d: run\.vtu: no such file"):
        run(states(3, read), ["equivalent_strain"])


def corner(size: float) -> Result:
    mesh, u = corner_plate("quad8", 6)
    number = np.arange(501, 501 + len(u), dtype=np.int32)
    return mesh.result(u=size * u).with_arrays(point_data={"node number": number})


@pytest.mark.derived(
    "the state that made the extreme by itself; a range from the unloaded state is its equivalent"
)
@pytest.mark.parametrize("at", ["centroid", "nodes"])
def test_a_corner_is_suspected_in_the_state_that_made_the_peak(at: Any) -> None:
    sizes = (0.0, 1e-3, 4e-3, 2e-3)
    steps = states(4, lambda k: corner(sizes[k]))
    options = {"plane": "stress", "poisson": NU}
    found = run(steps, ["principal_strain", "equivalent_strain"], at=at, **options)
    computed = compute(corner(4e-3), StrainOptions(**options), diagnose=True)  # type: ignore[arg-type]
    values = computed.fields.arrays["principal_strain"][:, 0]
    cells = np.arange(len(values))
    asked = Asked("principal_strain", values, cells, int(values.argmax()), size=float(values.max()))
    (expected,) = trust_of(computed, [asked])
    assert expected.singular
    top = next(e for _, e in every(found) if (e.name, e.of.which) == ("principal_strain_1", "maximum"))
    assert top.states == (2,)
    assert (top.trust.singular, top.trust.point) == (True, expected.point)
    assert (top.trust.next_cell, top.trust.next_value) == (expected.next_cell, expected.next_value)
    assert np.linalg.norm(corner(1.0).points[top.trust.point] - [0.5, 0.5, 0.0]) < 0.125  # or one cell on
    change = next(e for _, e in every(found) if e.name == RANGE)
    assert change.states == (0, 2)
    assert change.trust.singular
    assert change.trust.next_cell == -1


@pytest.mark.practice("the text and the JSON tell plus and minus and name what is suspected")
@pytest.mark.parametrize("at", ["centroid", "nodes"])
def test_text_and_json(at: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    for name, size in (("a.vtu", 1e-3), ("b.vtu", 4e-3)):
        unturn.write(corner(size), name)
    options = f"--plane stress --poisson {NU} --measures principal_strain,rotation_angle --at {at}"
    status, text = command(["envelope", "a.vtu", "b.vtu", *options.split(), "--json", "e.json"])
    assert status == 0, text
    data = json.loads(Path("e.json").read_text())
    extremes = data["regions"][0]["extremes"]
    top, turn = extremes["principal_strain_1"]["maximum"], extremes["rotation_angle"]["maximum"]
    first = next(line for line in text.splitlines() if line.startswith("largest principal"))
    value, bound = first.split()[2:4]
    assert float(value) == pytest.approx(1e6 * top["value"], rel=0.01)
    assert 1e6 * top["plus_minus"] <= float(bound.removeprefix("+-")) <= 1.11e6 * top["plus_minus"]
    angle = next(line for line in text.splitlines() if line.startswith("rotation angle, largest, radian"))
    value, bound = angle.split()[4:6] if len(angle.split()) > 5 else angle.split()[-2:]
    assert float(value) == pytest.approx(turn["value"], rel=1e-3)
    assert turn["plus_minus"] <= float(bound.removeprefix("+-")) <= 1.11 * turn["plus_minus"]
    assert top["suspected_singular"] is True
    said = [
        s
        for s in data["suspected_singular"]
        if (s["array"], s["extreme"]) == ("principal_strain_1", "maximum")
    ]
    (peak,) = said
    assert peak["node"] == peak["point"] + 501
    assert (peak["value"], peak["plus_minus"], peak["states"]) == (top["value"], top["plus_minus"], [1])
    assert peak["next"]["value"] < top["value"]
    line = next(x for x in text.splitlines() if x.startswith("suspected singular, whole: largest principal"))
    assert f"node {peak['node']} (point {peak['point']}); next away from it in that case" in line
    assert f"in cell {peak['next']['cell']}" in line
    assert ("at centroids" in line) is (at == "nodes")
    assert "+- is estimated from the elements around" in text
