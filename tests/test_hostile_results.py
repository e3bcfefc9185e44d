"""Small results that a tired program or a tired person wrote: the numbers are right, and the summary says nothing false."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import unturn
from documents import run
from test_cli_wrong_input import POINTS, TETS, two_tets
from unturn import CellBlock, DisplacementError, InputError, Result, UsageError
from unturn.envelopes import envelope
from unturn.model import build_model
from unturn.options import StrainOptions
from unturn.pipeline import compute
from unturn.regions import bodies, find_regions
from unturn.states import State
from unturn.summary import SummaryOptions, summarise

GRADIENT = np.array([[1e-3, 4e-4, -2e-4], [2e-4, -3e-4, 5e-4], [-6e-4, 1e-4, 7e-4]])
QUADS = CellBlock("quad", np.array([[0, 1, 4, 3], [1, 2, 5, 4]]), np.arange(2))


def sheet(*axes: int) -> Result:
    """Two quadrilaterals in a coordinate plane."""
    flat = np.array([[0, 0], [1, 0.1], [2, 0], [0, 1], [0.9, 1.1], [2, 1.0]])
    points = np.full((6, 3), 7.0)
    points[:, axes] = flat
    u = np.zeros((6, 3))
    u[:, axes] = flat @ GRADIENT[:2, :2].T
    return Result(points, (QUADS,), {"u": u})


def said(result: Result, folder: Path, *options: str) -> str:
    unturn.write(result, folder / "file.vtu")
    status, text = run(["strain", str(folder / "file.vtu"), *options])
    assert status == 0, text
    return text


@pytest.mark.practice("a displacement of two components belongs to a mesh in the x-y plane")
def test_two_components_are_not_taken_for_three() -> None:
    with pytest.raises(
        DisplacementError, match="'u' has 2 components, and the mesh does not lie in the x-y plane"
    ):
        unturn.strain(two_tets(u=1e-3 * POINTS[:, :2]))
    with pytest.raises(DisplacementError, match="2 components"):
        unturn.strain(two_tets(ux=POINTS[:, 0], uy=POINTS[:, 1]), displacement="ux,uy")
    plate = sheet(0, 1)
    cut = Result(plate.points, plate.blocks, {"u": np.ascontiguousarray(plate.point_data["u"][:, :2])})
    found = unturn.strain(cut, measures=["strain"]).cell_data["strain"]
    np.testing.assert_allclose(found[:, [0, 1, 3]], [[1e-3, -3e-4, 3e-4]] * 2, atol=1e-15)


@pytest.mark.practice("the reason that is named is the one that can be mended")
def test_coordinates_that_are_no_numbers_are_called_so() -> None:
    points = POINTS.copy()
    points[0] = np.nan  # of the first cell alone
    result = Result(points, (TETS,), {"u": 1e-3 * POINTS})
    left_out = compute(result, StrainOptions()).fields.left_out
    assert {reason: cells.tolist() for reason, cells in left_out.items()} == {"coordinates not finite": [0]}


@pytest.mark.practice("what is not known and what is always zero has no row")
def test_a_plane_mesh_whose_third_direction_is_not_stated(tmp_path: Path) -> None:
    text = said(sheet(0, 2), tmp_path, "--measures", "strain")
    assert "third direction not stated: the strain across the plane is NaN" in text
    rows = [line.split()[1] for line in text.splitlines() if line.startswith(("largest ", "smallest "))]
    assert rows == ["XX", "XX", "ZZ", "ZZ", "XZ", "XZ", "rotation,"]


@pytest.mark.practice("a motion without strain is no case for more digits or another unit")
def test_a_rigid_motion_raises_no_alarm(tmp_path: Path) -> None:
    text = said(two_tets(u=np.tile([100.0, 1 / 3, 7.7], (5, 1))), tmp_path)
    assert "no strain  none above the stored precision" in text
    assert "WARNING" not in text
    status, survey = run(["survey", str(tmp_path / "file.vtu")])
    assert status == 0
    assert "there is no strain above the stored precision" in survey
    assert "more digits" not in survey


@pytest.mark.practice("numbers are written as people read them")
def test_no_power_of_ten_where_it_is_not_needed(tmp_path: Path) -> None:
    points = np.float32(4e6) + POINTS.astype(np.float32)
    points += np.linspace(0, 0.3, 15, dtype=np.float32).reshape(5, 3)
    text = said(Result(points, (TETS,), {"u": (points - 4e6) @ GRADIENT.T}), tmp_path)
    assert "WARNING: whole: the stored precision blurs the strain" in text
    assert "e+0" not in text


def many(n: int) -> Result:
    """Separate cells, each moved and turned in its own way, with a number each."""
    points = np.tile(POINTS[:4], (n, 1))
    points[:, 0] += 3.0 * np.repeat(np.arange(n), 4)
    turned = np.random.default_rng(1).uniform(-0.1, 0.1, (n, 3))
    u = np.concatenate([10 * t + np.cross(t, POINTS[:4]) for t in turned])
    cells = CellBlock("tetra", np.arange(4 * n).reshape(n, 4), np.arange(n))
    return Result(points, (cells,), {"u": u}, {"part": np.arange(n, dtype=np.int32)})


@pytest.mark.derived("theta x X and a translation are a rigid motion of linear theory: nothing is left")
@pytest.mark.parametrize("how", ["bodies", "regions"])
def test_every_part_is_freed_of_its_motion_however_many(how: str) -> None:
    result = many(230)
    model = build_model(result)
    cells = np.ones(230, dtype=bool)
    assert len(bodies(model, cells)) == 230
    assert [(r.name, r.n_bodies) for r in find_regions(model, cells)] == [
        ("whole", 230)
    ]  # too many to judge apart
    found = compute(result, StrainOptions(remove_rigid=how, solve="linear"))
    assert len(found.removals) == 230
    for name in ("strain", "rotation"):
        np.testing.assert_allclose(found.fields.arrays[name], 0.0, atol=1e-12)


@pytest.mark.practice("parts that are not judged apart are named")
def test_too_many_numbers_of_parts_are_said(tmp_path: Path) -> None:
    text = said(many(230), tmp_path)
    assert "WARNING: 'part' numbers 230 parts, more than the 200 that are judged apart" in text
    assert "part=7  " in said(many(230), tmp_path, "--region", "part=7")


@pytest.mark.practice("bodies that are not judged apart are counted")
def test_too_many_bodies_are_said(tmp_path: Path) -> None:
    crowd = many(60)
    nameless = Result(crowd.points, crowd.blocks, crowd.point_data)
    words = "the mesh is 60 bodies, more than the 50 that are judged apart: they are judged as one"
    assert f"WARNING: {words}" in said(nameless, tmp_path)
    state = State("a", lambda: nameless)
    assert words in " ".join(envelope([state, state]).notes)
    assert "judged as one" not in " ".join(envelope([State("b", lambda: many(50))] * 2).notes)


@pytest.mark.practice("two arrays are compared where both hold strain, and only there")
def test_the_solvers_strain_is_not_blamed_for_what_nobody_knows(tmp_path: Path) -> None:
    six = np.tile([1e-3, -3e-4, 0.0, 3e-4, 0, 0], (2, 1))
    line = "solver's strain array 'E' (cells):"
    plate = sheet(0, 1)
    same = Result(plate.points, plate.blocks, plate.point_data, {"E": six + 2e-3 * np.eye(6)[2]})
    assert f"{line} equal to ours within" in said(same, tmp_path, "--measures", "strain")
    wrong = Result(plate.points, plate.blocks, plate.point_data, {"E": 2 * six})
    assert f"{line} DIFFERS from ours by " in said(wrong, tmp_path, "--measures", "strain")
    rest = Result(plate.points, plate.blocks, {"u": np.zeros((6, 3))}, {"E": 0 * six})
    assert f"{line} not compared, there is no strain in both" in said(rest, tmp_path, "--measures", "strain")
    empty = Result(plate.points, plate.blocks, plate.point_data, {"E": np.nan * six})
    assert f"{line} not compared" in said(empty, tmp_path, "--measures", "strain")


@pytest.mark.derived("a whole number stands for half a unit to each side")
def test_displacements_in_whole_numbers_are_known_to_half_of_one(tmp_path: Path) -> None:
    result = two_tets(u=np.rint(1e3 * POINTS @ GRADIENT.T * 1e3).astype(np.int32))
    text = said(result, tmp_path, "--displacement", "u", "--displacement-scale", "1e-6")
    assert "stored precision +-" in text
    noise = float(text.split("stored precision +-")[1].split()[0])
    assert 0.3 < noise < 10  # microstrain, on elements of height 0.6 to 1


@pytest.mark.practice("a series says which of its steps is meant")
def test_a_step_that_cannot_be_used_is_named(tmp_path: Path) -> None:
    steps = [two_tets(u=1e-3 * POINTS), two_tets(u=np.full((5, 3), np.nan)), two_tets(u=1e-3 * POINTS)]
    with unturn.io.series_writer(tmp_path / "s.xdmf") as writer:
        for time, step in enumerate(steps):
            writer.add(step, float(time))
    status, text = run(["strain", str(tmp_path / "s.xdmf"), "--step", "all"])
    assert status == 0
    assert "step 1  t = 1   whole: no cell was computed" in text
    status, text = run(
        ["strain", str(tmp_path / "s.xdmf"), "--step", "all", "--remove-rigid", "whole", "--prefix", "r_"]
    )
    assert status == 3
    assert "at step 1 (t = 1): " in text


@pytest.mark.practice("a misspelt choice is never taken for the default")
@pytest.mark.parametrize(
    ("name", "value"),
    [
        ("coordinates", "Deformed"),
        ("solve", "non-linear"),
        ("plane", "plane strain"),
        ("axis", "z"),
        ("measures", "strain"),
    ],
)
def test_choices_of_the_library_are_checked(name: str, value: str) -> None:
    with pytest.raises(UsageError, match=value):
        unturn.strain(two_tets(u=1e-3 * POINTS), **{name: value})  # type: ignore[arg-type]


@pytest.mark.practice("a result that contradicts itself is refused when it is made")
def test_cells_without_a_place() -> None:
    nodes = TETS.connectivity
    for index in ([0, 2], [1, 1], [-1, 0]):
        with pytest.raises(InputError, match="each once"):
            Result(POINTS, (CellBlock("tetra", nodes, np.array(index)),))
    with pytest.raises(InputError, match="whole numbers"):
        Result(POINTS, (CellBlock("tetra", nodes.astype(float), np.arange(2)),))
    with pytest.raises(InputError, match="group 'arm' holds cells that do not exist"):
        Result(POINTS, (TETS,), groups={"arm": np.array([2])})
    with pytest.raises(UsageError, match="use 'last' or a number"):
        unturn.read(Path(__file__).parents[1] / "sample_meshes" / "lever.xdmf", "all")  # type: ignore[arg-type]


@pytest.mark.practice("a number that stands for no cell is damage")
def test_a_cell_type_that_does_not_exist(tmp_path: Path) -> None:
    import pyvista

    grid = pyvista.UnstructuredGrid({10: TETS.connectivity}, POINTS)
    grid.point_data["u"] = 1e-3 * POINTS
    grid.save(tmp_path / "grid.vtu", binary=False)
    text = (tmp_path / "grid.vtu").read_text()
    start = text.index("10 10", text.index('Name="types"'))
    (tmp_path / "grid.vtu").write_text(text[:start] + "10 250" + text[start + 5 :])
    for command in ("survey", "strain"):
        status, said_then = run([command, str(tmp_path / "grid.vtu")])
        assert (status, "cell 1 has the cell type 250" in said_then) == (3, True), said_then


def turned(degrees: float, stretch: float) -> np.ndarray:
    """Displacement of the two cells stretched along x and then turned about z."""
    a = np.radians(degrees)
    R = np.array([[np.cos(a), -np.sin(a), 0], [np.sin(a), np.cos(a), 0], [0, 0, 1]])
    return np.asarray(POINTS * [1 + stretch, 1, 1] @ R.T - POINTS)


@pytest.mark.derived(
    "between two turned states u - u_N is no motion: its symmetric gradient is not what was stretched"
)
@pytest.mark.parametrize("solve", ["unknown", "nonlinear"])
@pytest.mark.parametrize("remove", ["none", "whole"])
def test_a_turned_zero_step_is_not_called_trustworthy(solve: str, remove: str) -> None:
    zero, now = two_tets(u=turned(90, 1e-3)), two_tets(u=turned(100, 2e-3))
    computed = compute(now, StrainOptions(solve=solve, remove_rigid=remove), zero=zero, diagnose=True)  # type: ignore[arg-type]
    (region,) = summarise(computed, SummaryOptions(solve=solve)).regions  # type: ignore[arg-type]
    assert region.verdict.level == "does not hold"
    assert region.verdict.size == pytest.approx(2.002e-3 / 1.001 - 1e-3, rel=1e-2)  # what was stretched since
    assert region.trials == ()
    written = computed.fields.arrays["principal_strain"]
    assert region.statistics["principal_strain_1"].maximum == pytest.approx(written[:, 0].max(), abs=1e-15)
    size = np.linalg.norm(written, axis=1).max()  # of a strain that nothing has
    assert size > 0.1
    assert region.verdict.worst > 0.9 * (size - 1e-3) / region.verdict.size


@pytest.mark.derived("where nothing turns much, u - u_N is the motion since then")
def test_a_zero_step_that_is_not_turned_is_judged_as_before() -> None:
    zero, now = two_tets(u=turned(0.01, 1e-3)), two_tets(u=turned(0.02, 2e-3))
    for solve in ("linear", "unknown", "nonlinear"):
        computed = compute(now, StrainOptions(solve=solve), zero=zero, diagnose=True)
        (region,) = summarise(computed, SummaryOptions(solve=solve)).regions
        assert region.verdict.level == "holds"
        assert region.verdict.worst < 2e-3


@pytest.mark.derived("a cell with a node nowhere has no Jacobian; the rest of the mesh is as right as before")
@pytest.mark.parametrize("at", ["centroid", "nodes", "surface", "quadrature"])
def test_a_node_nowhere_is_passed_over_in_silence(at: str) -> None:
    points = POINTS.copy()
    points[0] = np.inf
    found = unturn.strain(Result(points, (TETS,), {"u": 1e-3 * POINTS}), at=at)  # type: ignore[arg-type]
    assert found.n_cells > 0


@pytest.mark.practice("no overflow on the way to an answer")
def test_a_mesh_too_large_for_its_volume_is_an_error_not_a_fault() -> None:
    with pytest.raises(InputError, match="no volume"):
        unturn.strain(Result(POINTS * 1e150, (TETS,), {"u": 1e147 * POINTS}))
