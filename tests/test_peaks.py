"""Peaks that grow without end, and peaks that do not."""

from __future__ import annotations

import numpy as np
import pytest

from recovery_meshes import block, model_of
from solved_problems import NU, corner_plate, cylinder, plate, pressed
from unturn.elements import ELEMENTS
from unturn.fields import compute_fields
from unturn.model import Model, PlaneOptions, build_model
from unturn.peaks import Peak, Peaks
from unturn.recovery import recover_gradient

# Source: Williams 1952, Stress singularities resulting from various boundary conditions in angular corners of plates in
# extension, J. Appl. Mech. 19, 526-528: strain grows as r^-0.456 at a re-entrant right angle; r^-1 under a point load in
# the plane (Flamant 1892), r^-2 in space (Boussinesq 1885): Timoshenko and Goodier, articles 36 and 138.


def peaks_of(model: Model, measure: str = "equivalent_strain") -> tuple[Peaks, np.ndarray, np.ndarray]:
    fields = compute_fields(model, ["equivalent_strain", "principal_strain"], diagnose=True)
    d = fields.diagnostics
    assert d is not None
    cells = np.arange(model.result.n_cells)
    found = Peaks(recover_gradient(model, np.zeros(len(cells), dtype=int)), d.centroid, d.volume)
    values = fields.arrays[measure]
    return found, values if values.ndim == 1 else values[:, 0], cells


def solved(made: tuple, measure: str = "equivalent_strain"):  # type: ignore[no-untyped-def,type-arg]
    mesh, u = made
    plane = PlaneOptions("stress", NU) if mesh.element.dim == 2 else None
    return mesh, *peaks_of(build_model(mesh.result(u=u), plane=plane), measure)


@pytest.mark.source("Williams 1952: exponent 0.456 at a re-entrant right angle")
@pytest.mark.parametrize("name", ["triangle", "quad", "triangle6", "quad8"])
@pytest.mark.parametrize("n", [6, 12])
def test_a_reentrant_corner(name: str, n: int) -> None:
    mesh, peaks, values, cells = solved(corner_plate(name, n))
    peak = peaks.find(values, cells)
    assert peak.singular
    assert np.linalg.norm(mesh.points[peak.point] - [0.5, 0.5, 0]) < 1.5 * 0.5 / n
    growth = np.log(peak.means[0] / peak.means[2]) / np.log(peak.distances[2] / peak.distances[0])
    assert growth == pytest.approx(0.5, abs=0.2)
    after = peaks.next_peak(values, cells, peak)
    assert 0 < after.value < 0.9 * peak.value
    assert not after.singular
    corners = mesh.cells[:, : mesh.element.n_corners]
    first = (corners == peak.point).any(axis=1)
    second = np.isin(corners, corners[first]).any(axis=1)
    assert not second[after.cell]


@pytest.mark.source("Flamant 1892, Boussinesq 1885; Timoshenko and Goodier, articles 36 and 138")
@pytest.mark.parametrize(
    ("name", "n", "exponent"),
    [
        ("triangle", 8, 1),
        ("quad", 8, 1),
        ("triangle6", 8, 1),
        ("quad8", 8, 1),
        ("tetra", 6, 2),
        ("hexahedron", 6, 2),
    ],
)
def test_under_a_point_load(name: str, n: int, exponent: int) -> None:
    mesh, peaks, values, cells = solved(pressed(name, n))
    peak = peaks.find(values, cells)
    assert peak.singular
    assert (
        np.abs(mesh.points[peak.point] - ([0.5, 1, 0] if mesh.element.dim == 2 else [0.5, 0.5, 1])).max()
        < 1.1 / n
    )
    assert peak.growth == pytest.approx(exponent, abs=0.3)
    assert peak.growth_outside == pytest.approx(exponent, abs=0.3)


@pytest.mark.source("Kirsch 1898, Lame: smooth peaks at a hole and a bore")
@pytest.mark.parametrize("measure", ["equivalent_strain", "principal_strain"])
@pytest.mark.parametrize(
    ("problem", "name", "n"),
    [*((plate, name, n) for name in ("triangle", "quad", "triangle6", "quad8") for n in (8, 12)),
     *((cylinder, name, 6) for name in ("tetra", "hexahedron")), (cylinder, "hexahedron20", 4), (cylinder, "tetra10", 4)],
)  # fmt: skip
def test_smooth_peaks(problem, name: str, n: int, measure: str) -> None:  # type: ignore[no-untyped-def]
    _, peaks, values, cells = solved(problem(name, n), measure)
    peak = peaks.find(values, cells)
    assert not peak.singular
    assert peaks.next_peak(values, cells, peak) is peak
    assert peak.value == values.max()


@pytest.mark.derived("u = sqrt(r): the strain grows as r^-1/2 towards a line, from any node of it")
def test_along_an_edge() -> None:
    mesh = block(ELEMENTS["hexahedron"], 8)
    x = mesh.points - [0.5, 0.5, 0]
    u = np.zeros(x.shape)
    u[:, 0] = 1e-3 * np.sqrt(np.hypot(x[:, 0], x[:, 1]))
    peaks, values, cells = peaks_of(model_of(mesh, u))
    peak = peaks.find(values, cells)
    assert peak.singular
    assert np.hypot(*x[peak.point, :2]) < 1e-9
    after = peaks.next_peak(values, cells, peak)
    middle = mesh.points[mesh.cells[after.cell]].mean(axis=0) - [0.5, 0.5, 0]
    assert np.hypot(*middle[:2]) > 1.4 / 8  # not one of the cells along the line


class TestByHand:
    def row(self) -> tuple[Peaks, np.ndarray]:
        mesh = block(ELEMENTS["line"], 6)
        u = np.zeros(mesh.points.shape)
        return peaks_of(model_of(mesh, u))[0], np.arange(6)

    def test_smallest_is_the_largest_of_the_opposite(self) -> None:
        peaks, cells = self.row()
        values = 1.0 / (np.arange(6) + 0.5) ** 2
        up, down = peaks.find(values, cells), peaks.find(-values, cells, smallest=True)
        assert (up.cell, up.point, up.singular) == (down.cell, down.point, down.singular) == (0, 1, True)
        assert up.value == -down.value
        assert up.means == tuple(-m for m in down.means)
        means = [(values[0] + values[1]) / 2, values[2], values[3]]  # rings around the second node
        np.testing.assert_allclose(up.distances, np.array([0.5, 1.5, 2.5]) / 6)
        np.testing.assert_allclose(up.means, means)
        assert up.growth == pytest.approx(np.log(means[0] / means[1]) / np.log(3))
        assert up.growth_outside == pytest.approx(np.log(means[1] / means[2]) / np.log(5 / 3))

    def test_nothing_to_find(self) -> None:
        peaks, cells = self.row()
        none = peaks.find(np.full(6, np.nan), cells)
        assert (none.cell, none.point, none.singular) == (-1, -1, False)
        assert isinstance(peaks.next_peak(np.full(6, np.nan), cells, none), Peak)

    def test_nothing_is_left(self) -> None:
        peaks, _ = self.row()
        values = 1.0 / (np.arange(6) + 0.5) ** 2
        few = np.arange(2)
        peak = peaks.find(values, few)
        assert peaks.next_peak(values, few, peak).cell == -1

    def test_missing_values_are_passed_over(self) -> None:
        peaks, cells = self.row()
        values = np.array([np.nan, 3.0, 2.9, 2.8, 2.7, 2.6])
        peak = peaks.find(values, cells)
        assert (peak.cell, peak.singular) == (1, False)
