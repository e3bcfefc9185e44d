"""`strain_error` and `strain_jump` as arrays, and the global error of a region beside them."""

from __future__ import annotations

import json
from itertools import combinations
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import pyvista

import unturn
from documents import run
from recovery_meshes import block
from strategies import axis_angle
from test_nodal import quadratic, two_parts
from unturn import Result, UsageError, kinematics, strain
from unturn.elements import ELEMENTS
from unturn.measures import ESTIMATES, choose_measures
from unturn.recovery import METHODS, Method

Floats = np.ndarray
NAMES = ["strain_error", "strain_jump"]
TURN = axis_angle([0.6, 0.0, 0.8], 0.9) + np.eye(3)


def parts(name: str = "tetra") -> Result:
    """Two regions, of which the second is stiffer, with a strain that is not constant."""
    result, _ = two_parts(1e-3, 5e-3, name)
    u = 1e-3 * np.sin(3 * result.points[:, [1, 2, 0]]) * result.points
    u[:, 0] += np.where(result.points[:, 0] > 0.5, 4e-3 * (result.points[:, 0] - 0.5), 0.0)
    return result.with_arrays(point_data={"u": u})


def tensors(six: Floats) -> Floats:
    return np.asarray(kinematics.tensor_from_components(six))


@pytest.mark.derived(
    "tetrahedra: e* - e is linear in the element, its squared mean is (sum f_a:f_a + (sum f_a):(sum f_a))/20"
)
@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("base", ["small", "hencky"])
def test_the_error_is_that_of_the_values_at_nodes(method: Method, base: str) -> None:
    result = parts()
    ending = "" if base == "small" else f"_{base}"
    found = strain(result, measures=NAMES, recovery=method, base=base, solve="nonlinear")
    nodes = strain(
        result,
        at="nodes",
        borders="split",
        measures=["strain"],
        base=base,
        recovery=method,
        solve="nonlinear",
    )
    own = tensors(
        strain(result, measures=["strain"], base=base, solve="nonlinear").cell_data[f"strain{ending}"]
    )
    cells = nodes.blocks[0].connectivity  # every region has its own nodes there
    off = tensors(nodes.point_data[f"strain{ending}"])[cells] - own[:, None]
    squared = ((off**2).sum(axis=(1, 2, 3)) + (off.sum(axis=1) ** 2).sum(axis=(1, 2))) / 20
    np.testing.assert_allclose(found.cell_data[f"strain_error{ending}"], np.sqrt(squared), rtol=1e-9)
    assert set(found.cell_data) - set(result.cell_data) == {f"{n}{ending}" for n in NAMES}


@pytest.mark.derived("every pair of tetrahedra of a part at every node, one by one")
def test_the_jump_by_brute_force() -> None:
    result = parts()
    cells, part = result.blocks[0].connectivity, result.cell_data["part"]
    e = tensors(strain(result, measures=["strain"]).cell_data["strain"])
    jump = np.zeros((len(result.points), 2))
    for node in range(len(result.points)):
        for k in (1, 2):
            met = np.flatnonzero((cells == node).any(axis=1) & (part == k))
            pairs = [np.linalg.norm(e[a] - e[b]) for a, b in combinations(met, 2)]
            jump[node, k - 1] = max(pairs, default=0.0)
    of_cells = np.take_along_axis(jump[cells], (part - 1)[:, None, None], axis=2)[:, :, 0].max(axis=1)
    centroid = strain(result, measures=["strain_jump"])
    np.testing.assert_allclose(centroid.cell_data["strain_jump"], of_cells, atol=1e-15)
    nodes = strain(result, measures=["strain", *NAMES], at="nodes")
    np.testing.assert_allclose(nodes.point_data["strain_jump"], jump.max(axis=1), atol=1e-15)
    np.testing.assert_array_equal(nodes.cell_data["strain_jump"], centroid.cell_data["strain_jump"])
    assert set(nodes.point_data) == {"u", "T", "strain", "strain_jump"}
    assert set(nodes.cell_data) == {"part", "strain_error", "strain_jump"}


@pytest.mark.derived("a finite strain does not change when the part is turned as a whole; the small one does")
def test_finite_estimates_do_not_see_turning() -> None:
    mesh = block(ELEMENTS["hexahedron"], 3, 0.1)
    asked = [f"{n}{b}" for n in NAMES for b in ("", "_hencky", "_green_lagrange", "_biot")]
    found = []
    for turn in (None, TURN):
        result = mesh.result(u=quadratic(mesh.points, turn=turn)[0])
        found.append(strain(result, measures=asked, solve="nonlinear").cell_data)
    for name in asked:
        same = np.allclose(found[0][name], found[1][name], rtol=1e-8, atol=1e-12)
        assert same is not (name in NAMES), name


@pytest.mark.derived("measured from a step that was turned, finite estimates are those of the motion since")
def test_estimates_from_a_zero_step() -> None:
    mesh = block(ELEMENTS["tetra"], 3, 0.1)
    u = 1e-2 * np.sin(2 * mesh.points[:, [2, 0, 1]])
    start = mesh.points @ TURN.T - mesh.points
    moved = (mesh.points + u) @ TURN.T - mesh.points
    zero = mesh.result(u=start)
    # F F_0^-1 = R F_1 R^T: the strain of the motion alone, in turned axes, with the same norms
    for at in ("centroid", "nodes"):
        found = strain(
            mesh.result(u=moved), zero=zero, measures=["strain_error_biot"], at=at, solve="nonlinear"
        )  # type: ignore[arg-type]
        alone = strain(mesh.result(u=u), measures=["strain_error_biot"], solve="nonlinear")
        np.testing.assert_allclose(
            found.cell_data["strain_error_biot"], alone.cell_data["strain_error_biot"], rtol=1e-8
        )


@pytest.mark.source("VTK 9 as a reader")
def test_the_command_writes_them_and_tells_the_error_of_each_region(tmp_path: Path) -> None:
    source, target, data = tmp_path / "in.vtu", tmp_path / "out.vtu", tmp_path / "out.json"
    unturn.write(parts(), source)
    asked = [str(source), "-o", str(target), "--measures", "strain,strain_error,strain_jump,element_volume"]
    status, said = run(["strain", *asked, "--json", str(data)])
    assert status == 0, said
    found = pyvista.read(target).cell_data
    summary: Any = json.loads(data.read_text())
    e = tensors(found["strain"])
    for region, k in zip(summary["regions"], (1, 2)):
        mine = found["part"] == k
        volume = found["element_volume"][mine]
        off = (volume * found["strain_error"][mine] ** 2).sum()
        size = (volume * (e[mine] ** 2).sum(axis=(1, 2))).sum()
        percent = 100 * np.sqrt(off / (size + off))
        assert region["estimated_error_percent"] == {"strain_error": pytest.approx(percent, rel=1e-9)}
        worst = region["statistics"]["strain_error"]["maximum"]
        assert worst["value"] == found["strain_error"][mine].max()
        assert found["part"][worst["cell"]] == k
    assert "strain error, largest" in said
    assert "strain jump, largest" in said
    assert "estimated error of the strain" in said
    status, said = run(["strain", *asked[:3], "--measures", "strain", "--json", str(data)])
    assert json.loads(data.read_text())["regions"][0]["estimated_error_percent"] == {}
    assert "estimated error" not in said


def test_what_they_need_and_when_they_are_computed() -> None:
    # Source: the documented conventions.
    assert choose_measures(["strain_jump", "strain"], base="biot") == ("strain_biot", "strain_jump_biot")
    assert not set(choose_measures(["all"])) & set(ESTIMATES)
    plane = block(ELEMENTS["quad"], 3)
    result = plane.result(u=quadratic(plane.points, dim=2)[0])
    assert np.isfinite(strain(result, measures=NAMES).cell_data["strain_error"]).all()
    with pytest.raises(UsageError, match="strain_jump_biot depends on the strain across the plane"):
        strain(result, measures=["strain_jump"], base="biot")
    with pytest.raises(UsageError, match="belongs to the cells and nodes"):
        strain(result, measures=NAMES, at="quadrature")
    with pytest.raises(UsageError, match="no measure on surfaces is called 'strain_error'"):
        strain(result, measures=NAMES, at="surface")
    lines = block(ELEMENTS["line"], 4)
    bar = lines.result(u=lines.points**2)
    np.testing.assert_allclose(strain(bar, measures=["strain_jump"]).cell_data["strain_jump"], 0.5, rtol=1e-9)
    # of a bar the finite strains follow from its stretch 1 + e: e = 0.25, 0.75, 1.25, 1.75
    green = strain(bar, measures=["strain_jump"], base="green-lagrange", solve="nonlinear").cell_data
    e = np.array([0.25, 0.75, 1.25, 1.75])
    jumps = np.diff(e + e * e / 2)
    np.testing.assert_allclose(green["strain_jump_green_lagrange"], [jumps[0], jumps[1], jumps[2], jumps[2]])
    turned = lines.result(u=(lines.points + lines.points**2) @ TURN.T - lines.points)
    for name in ("strain_jump_green_lagrange", "strain_error_green_lagrange"):
        found = [strain(r, measures=[name], solve="nonlinear").cell_data[name] for r in (bar, turned)]
        np.testing.assert_allclose(found[0], found[1], rtol=1e-9)
    with pytest.raises(UsageError, match="fiction"):
        strain(result, measures=["strain_error_biot"], plane="strain", solve="linear")


@pytest.mark.derived("cells that are left out have no estimate; the rest is as without them")
def test_cells_that_are_left_out() -> None:
    result = parts()
    alive = np.ones(result.n_cells, dtype=np.int8)
    alive[::7] = 0
    found = strain(result.with_arrays(cell_data={"alive": alive}), measures=NAMES, alive="alive").cell_data
    for name in NAMES:
        np.testing.assert_array_equal(np.isnan(found[name]), alive == 0)
