"""Where the small strain may be trusted: levels, shares, and what counts as no strain."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest

import meshes
from strategies import axis_angle
from unturn.elements import ELEMENTS
from unturn.fields import CellDiagnostics, CellFields, compute_fields
from unturn.model import build_model
from unturn.regions import Region
from unturn.verdict import Solve, Verdict, judge

# Derived from the definition: error over the larger of the 99th percentile of norm(U - I) and the noise floor; holds
# up to 1 %, marginal up to 10 %, does not hold above.


def diagnostics(n: int = 10, **values: Any) -> CellDiagnostics:
    """`n` cells of volume 1, strain 1e-3, no turning, no noise; changed by keyword."""
    blank = {"volume": 1.0, "error": 0.0, "stretch": 1e-3, "angle": 0.0, "noise": 0.0, "det_f": 1.0}
    arrays = {
        k: np.broadcast_to(np.asarray(v, dtype=float), (n,)).copy() for k, v in (blank | values).items()
    }
    return CellDiagnostics(
        **arrays,
        principal=np.zeros((n, 2)),
        stretches=np.ones((n, 2)),
        centroid=np.zeros((n, 3)),
        dimension=np.full(n, 3, dtype=np.int8),
    )


def verdict(d: CellDiagnostics, solve: Solve = "unknown", mode: bool = False) -> Verdict:
    return judge(d, Region("part", np.arange(len(d.volume)), "whole"), solve, mode)


def worst(ratio: float) -> np.ndarray:
    """Errors of ten cells of which the fourth has this ratio."""
    error = np.full(10, 1e-9)
    error[3] = ratio * 1e-3
    return error


@pytest.mark.parametrize(
    ("ratio", "level"),
    [
        (0.0, "holds"),
        (0.01 * (1 - 1e-9), "holds"),
        (0.01, "holds"),
        (0.01 * (1 + 1e-9), "marginal"),
        (0.1 * (1 - 1e-9), "marginal"),
        (0.1, "marginal"),
        (0.1 * (1 + 1e-9), "does not hold"),
        (25.0, "does not hold"),
    ],
)
def test_levels(ratio: float, level: str) -> None:
    found = verdict(diagnostics(error=worst(ratio)))
    assert found.level == level
    assert found.worst == pytest.approx(ratio, rel=1e-12, abs=1e-5)
    assert (found.action == "") == (level == "holds")
    if ratio:
        assert found.worst_cell == 3


def test_shares_are_of_the_volume() -> None:
    error = np.zeros(10)
    error[:3] = [0.5e-3, 0.05e-3, 0.005e-3]  # 50 %, 5 %, 0.5 %
    volume = np.array([1.0, 3, 7] + [2.0] * 7)
    found = verdict(diagnostics(error=error, volume=volume))
    assert found.share_broken == pytest.approx(1 / 25)
    assert found.share_marginal == pytest.approx(4 / 25)  # all above 1 %, the broken ones too


def test_size_is_the_99th_percentile_of_the_stretch_by_volume() -> None:
    stretch = np.full(1000, 1e-3)
    stretch[:5] = 1.0  # half a percent at a singular corner does not count
    assert verdict(diagnostics(1000, stretch=stretch)).size == 1e-3
    volume = np.ones(1000)
    volume[:5] = 10.0
    assert verdict(diagnostics(1000, stretch=stretch, volume=volume)).size == 1.0


def test_below_the_noise_floor_there_is_no_strain() -> None:
    found = verdict(diagnostics(stretch=1e-9, noise=1e-8, error=0.0))
    assert found.level == "no strain"
    assert found.size == found.noise == 1e-8
    assert found.action == ""
    above = verdict(diagnostics(stretch=1.1e-8, noise=1e-8))
    assert above.level == "holds"


def test_turning_above_the_noise_floor_counts_even_without_strain() -> None:
    # a body that turns by 5 degrees and is not strained: e = cos 5 - 1 is not noise
    found = verdict(diagnostics(stretch=1e-12, noise=1e-8, error=5.4e-3, angle=np.radians(5)))
    assert found.level == "does not hold"
    assert found.largest_rotation == pytest.approx(5)


def test_nothing_moves() -> None:
    found = verdict(diagnostics(stretch=0.0))
    assert (found.level, found.size, found.worst) == ("no strain", 0.0, 0.0)


def test_cells_that_were_not_computed_do_not_count() -> None:
    d = diagnostics(error=worst(0.05))
    d.volume[0], d.stretch[1], d.error[1] = np.nan, np.nan, np.nan
    found = verdict(d)
    assert found.level == "marginal"
    assert found.share_marginal == pytest.approx(1 / 8)
    nothing = verdict(diagnostics(volume=np.nan))
    assert nothing.level == "not judged"
    assert math.isnan(nothing.worst)


def test_a_mode_shape_is_not_judged() -> None:
    found = verdict(diagnostics(error=worst(5.0)), mode=True)
    assert (found.level, found.action) == ("not judged", "")
    assert found.size == 1e-3


def test_an_unknown_angle_is_passed_over() -> None:
    angle = np.full(10, np.nan)
    assert verdict(diagnostics(angle=angle)).largest_rotation == 0.0
    angle[4] = 0.1
    assert verdict(diagnostics(angle=angle)).largest_rotation == pytest.approx(np.degrees(0.1))


def test_what_to_do_follows_the_solve() -> None:
    d = diagnostics(error=worst(0.5))
    linear, nonlinear, unknown = (verdict(d, solve).action for solve in ("linear", "nonlinear", "unknown"))
    assert "geometrically nonlinear" in linear
    assert "measure" in linear  # none mends it
    assert "geometrically nonlinear" not in nonlinear
    assert "if the solve was linear" in unknown
    assert "if it was nonlinear" in unknown


def judged(mesh: meshes.Mesh, u: np.ndarray, solve: Solve = "unknown") -> tuple[Verdict, CellFields]:
    fields = compute_fields(build_model(mesh.result(u=u)), diagnose=True)
    assert fields.diagnostics is not None
    return judge(fields.diagnostics, Region("whole", np.arange(len(mesh.cells)), "whole"), solve), fields


@pytest.mark.derived(
    "u = theta x X: e = 0 and E_xx = theta^2/2 = 0.0038 at 5 degrees; U - I = sqrt(1 + theta^2) - 1"
)
def test_a_linear_solve_that_turns_by_five_degrees() -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron"])
    theta = np.array([0, 0, np.radians(5)])
    found, fields = judged(mesh, np.cross(theta, mesh.points), "linear")
    np.testing.assert_allclose(fields.arrays["strain"], 0, atol=1e-16)
    assert theta[2] ** 2 / 2 == pytest.approx(0.0038, abs=1e-5)
    assert found.level == "does not hold"
    assert found.size == pytest.approx(np.sqrt(2) * (np.sqrt(1 + theta[2] ** 2) - 1), rel=1e-6)
    assert found.worst == pytest.approx(1, rel=1e-9)  # all of U - I comes from turning
    assert found.share_broken == pytest.approx(1)


@pytest.mark.derived("a rigid turn by R: U = I, so every bit of the small strain is turning")
def test_a_rigid_turn_does_not_hold_and_a_stretch_does() -> None:
    mesh = meshes.patch(ELEMENTS["tetra10"])
    turned, _ = judged(mesh, mesh.points @ axis_angle((0, 0, 1), np.radians(5)).T)
    assert turned.level == "does not hold"
    assert turned.largest_rotation == pytest.approx(5, rel=1e-9)
    stretched, _ = judged(mesh, mesh.points * [0.2, -0.1, 0.05])
    assert stretched.level == "holds"


@pytest.mark.derived("half a turn: the small rotation is zero, R is not")
def test_half_a_turn_is_seen() -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron"])
    found, fields = judged(mesh, mesh.points @ axis_angle((0, 0, 1), np.pi).T)
    np.testing.assert_allclose(fields.arrays["rotation"], 0, atol=1e-14)
    assert found.largest_rotation == pytest.approx(180)
    assert found.level == "does not hold"


@pytest.mark.derived(
    "small turning on strain: error about theta^2/2 of U - I; 1e-4 rad on 1e-3 is 5e-6 of it"
)
def test_small_turning_holds() -> None:
    mesh = meshes.patch(ELEMENTS["wedge"])
    u = mesh.points @ np.diag([1e-3, -3e-4, -3e-4]) + np.cross([0, 0, 1e-4], mesh.points)
    found, _ = judged(mesh, u)
    assert found.level == "holds"
    assert found.worst < 1e-3


@pytest.mark.derived("everything falls into one point: F = 0, U - I = -I = e; no rotation is defined")
def test_a_displacement_that_flattens_everything_is_judged() -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron"])
    found, _ = judged(mesh, -mesh.points)
    assert found.size == pytest.approx(np.sqrt(3))
    assert found.level == "holds"
    assert found.largest_rotation == 0.0
