"""Peaks that grow without end, and peaks that do not."""

from __future__ import annotations

import numpy as np
import pytest

from recovery_meshes import block, model_of
from solved_problems import (
    NU,
    bent,
    cavity,
    corner_field,
    corner_plate,
    cylinder,
    ellipse,
    plate,
    pressed,
    ring,
    sphere,
)
from unturn.elements import ELEMENTS
from unturn.fields import compute_fields
from unturn.model import Model, PlaneOptions, build_model
from unturn.neighbourhood import RESOLVED
from unturn.peaks import Peak, Peaks
from unturn.recovery import recover_gradient
from unturn.trust import strain_error

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
@pytest.mark.parametrize("name", ["triangle", "quad", "triangle6", "quad8", "quad9"])
@pytest.mark.parametrize("n", [6, 12])
def test_a_reentrant_corner(name: str, n: int) -> None:
    mesh, peaks, values, cells = solved(corner_plate(name, n))
    peak = peaks.find(values, cells)
    assert peak.singular
    assert np.linalg.norm(mesh.points[peak.point] - [0.5, 0.5, 0]) < 1.5 * 0.5 / n
    assert peak.growth == pytest.approx(0.5, abs=0.2)
    after = peaks.next_peak(values, cells, peak)
    assert 0 < after.value < peak.value
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


def suspected(made: tuple) -> bool:  # type: ignore[type-arg]
    """Whether the summary would name it: suspected, and not resolved by the mesh."""
    _, peaks, values, cells = solved(made[:2], "principal_strain")
    peak = peaks.find(values, cells)
    error = strain_error(peaks.recovered)
    strain = np.sqrt(error.strain_squared[peak.cell] / error.volume[peak.cell])
    return bool(peak.singular and error.plus_minus_nodes[peak.point] > RESOLVED * strain)


# The bounds were set on others: re-entrant corners under load, point loads, holes, cylinders, spheres.
PLANE, SOLID = ("triangle", "quad", "triangle6", "quad8", "quad9"), ("tetra", "hexahedron", "wedge")
TRIED = [
    *(("singular", corner_field, name, n) for name in PLANE for n in (3, 6)),
    *(("smooth", bent, name, n) for name in (*PLANE, *SOLID, "tetra10", "hexahedron20") for n in (2, 4)),
    *(("smooth", ellipse, name, 8) for name in PLANE),
    *(("smooth", ring, name, 8) for name in PLANE),
    *(("smooth", problem, name, n) for problem in (cavity, sphere) for name in SOLID for n in (3, 5)),
    *(("smooth", problem, name, 4) for problem in (cavity, sphere) for name in ("tetra10", "hexahedron20")),
]  # fmt: skip


@pytest.mark.source(
    "Williams 1952; Inglis 1913; Goodier 1933; Timoshenko and Goodier, articles 28, 102 and 136"
)
def test_singular_and_smooth_problems_that_set_no_bound() -> None:
    """Bending with two elements in the thickness is linear already; a corner's field is singular on every mesh."""
    found: dict[str, list[bool]] = {"singular": [], "smooth": []}
    wrong = []
    for kind, problem, name, n in TRIED:
        found[kind].append(suspected(problem(name, n)))
        if found[kind][-1] != (kind == "singular"):
            wrong.append(f"{problem.__name__} {name} {n}")
    count = {kind: f"{sum(f)} of {len(f)} suspected" for kind, f in found.items()}
    assert all(found["singular"]), (count, wrong)
    assert np.mean(found["smooth"]) < 0.05, (count, wrong)


class TestByHand:
    def row(self, values: np.ndarray) -> tuple[Peaks, np.ndarray]:
        """Lines in a row, and the strain of each."""
        mesh = block(ELEMENTS["line"], 6)
        u = np.zeros(mesh.points.shape)
        u[np.argsort(mesh.points[:, 0]), 0] = np.concatenate([[0], np.cumsum(values)]) / 6
        return peaks_of(model_of(mesh, u))[0], np.arange(6)

    VALUES = 1.0 / (np.arange(6) + 0.5) ** 2

    def test_smallest_is_the_largest_of_the_opposite(self) -> None:
        values = self.VALUES
        peaks, cells = self.row(values)
        up, down = peaks.find(values, cells), peaks.find(-values, cells, smallest=True)
        assert (up.cell, up.point, up.singular) == (down.cell, down.point, down.singular) == (0, 1, True)
        assert up.value == -down.value
        assert up.means == tuple(-m for m in down.means)
        means = [(values[0] + values[1]) / 2, values[2]]  # rings around the second node
        np.testing.assert_allclose(up.distances, np.array([0.5, 1.5]) / 6)
        np.testing.assert_allclose(up.means, means)
        assert up.growth == pytest.approx(np.log(means[0] / means[1]) / np.log(3))

    def test_departure_from_the_linear_strain_around(self) -> None:
        """The second node lies in the middle between two others: the mean of their strains is what is extrapolated."""
        values = 1e-6 * self.VALUES  # no finite part
        peaks, cells = self.row(values)
        e = peaks.recovered.H[0, 0]
        x = peaks.shares.model.points[:, 0]
        order = np.argsort(x)
        here, around = e[order[1]], (e[order[0]] + e[order[2]]) / 2
        assert peaks.find(values, cells).departure == pytest.approx(abs(here - around) / here, rel=1e-5)

    def test_growth_alone_is_not_enough(self) -> None:
        """A strain that falls linearly to a small value grows fast from ring to ring, and is smooth."""
        values = np.array([1.1, 0.9, 0.7, 0.5, 0.3, 0.1])
        peaks, _ = self.row(1e-4 * values)
        peak = peaks.find(values, np.arange(2))
        assert peak.growth > 0.2
        assert peak.departure < 1e-3
        assert not peak.singular

    def test_nothing_to_find(self) -> None:
        peaks, cells = self.row(np.zeros(6))
        none = peaks.find(np.full(6, np.nan), cells)
        assert (none.cell, none.point, none.singular) == (-1, -1, False)
        assert isinstance(peaks.next_peak(np.full(6, np.nan), cells, none), Peak)
        still = peaks.find(self.VALUES, cells)  # without any strain there is nothing to depart from
        assert np.isnan(still.departure)
        assert not still.singular

    def test_nothing_is_left(self) -> None:
        values = self.VALUES
        peaks, _ = self.row(values)
        few = np.arange(2)
        peak = peaks.find(values, few)
        assert peaks.next_peak(values, few, peak).cell == -1

    def test_missing_values_are_passed_over(self) -> None:
        values = np.array([np.nan, 3.0, 2.9, 2.8, 2.7, 2.6])
        peaks, cells = self.row(np.nan_to_num(values, nan=3.1))
        peak = peaks.find(values, cells)
        assert (peak.cell, peak.singular) == (1, False)
