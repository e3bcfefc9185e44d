"""Arrows of principal strain and of rotation: where they are, which way their heads point."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import pyvista

from picture_reading import boxes, drawn, wanted
from unturn.elements import ELEMENTS
from unturn.errors import UsageError
from unturn.io import read
from unturn.io.vtk_result import vtk_from_result
from unturn.pictures._arrows import Place, _principal, _rotation, draw_arrows, longest
from unturn.pictures._division import tetrahedra_of
from unturn.pictures._picture import Picture
from unturn.pictures._seen import code_colours, decoded, places, seen_cells
from unturn.pictures.computing import Step
from unturn.pictures.drawing import ranged
from unturn.pipeline import StrainOptions

SAMPLES = Path(__file__).parent.parent / "sample_meshes"
AT = np.array([100.0, 50.0])


def picture_of(result, **asked) -> Picture:
    request = wanted(**asked)
    step = Step(result, [request])
    subject = step.subject(request)
    return Picture(subject, request, ranged(subject, request, step.ends(request)))


@pytest.mark.practice("heads that point apart mean stretch, heads that point at each other shortening")
def test_heads_tell_the_sign_without_colour():
    along = np.array([1.0, 0.0, 0.0])
    for value, outwards in ((1.0, True), (-1.0, False)):
        lines, heads = _principal(AT, along, 30.0, value, 1.0)
        assert len(lines) == len(heads) == 2
        for head in heads:
            tip, base = head[0], head[1:].mean(axis=0)
            farther = np.linalg.norm(tip - AT) > np.linalg.norm(base - AT)
            assert farther == outwards
            assert np.abs(head[:, 0] - AT[0]).max() == pytest.approx(30.0)


@pytest.mark.derived("parallel projection shortens an arrow by the sine of its angle to the line of sight")
def test_arrows_that_point_to_the_eye_are_short():
    slanted = np.array([0.5, 0.0, np.sqrt(0.75)])
    lines, _ = _principal(AT, slanted, 30.0, -1.0, 1.0)
    assert np.linalg.norm(lines[0][1] - AT) == pytest.approx(15.0)
    assert _principal(AT, np.array([0.1, 0.0, 1.0]), 30.0, 1.0, 1.0) == ([], [])


@pytest.mark.derived("right-hand rule: an axis towards the eye turns anticlockwise in the picture")
@pytest.mark.parametrize("toward", [1.0, -1.0])
def test_a_rotation_seen_from_its_end_is_an_arc_with_its_sense(toward):
    (arc,), (head,) = _rotation(AT, np.array([0.0, 0.0, toward]), 30.0, 0.1, 1.0)
    around = np.unwrap(np.arctan2(*(arc - AT).T[::-1]))
    assert np.sign(around[-1] - around[0]) == toward
    ahead = head[0] - head[1:].mean(axis=0)
    radius = arc[-1] - AT
    assert np.sign(radius[0] * ahead[1] - radius[1] * ahead[0]) == toward


@pytest.mark.practice("two heads on one line: an axis of rotation by the right hand")
def test_a_rotation_seen_from_the_side_is_an_axis_with_two_heads():
    (line,), heads = _rotation(AT, np.array([0.0, 1.0, 0.0]), 30.0, 0.1, 1.0)
    assert len(heads) == 2
    assert all(h[0, 1] > h[1:, 1].max() for h in heads)
    assert line[0, 1] < AT[1] < heads[0][0, 1]


@pytest.mark.source("PyVista 0.49: ray_trace and find_closest_cell say which cell is seen")
def test_the_cell_behind_every_pixel_is_known():
    picture = picture_of(read(SAMPLES / "bracket_tets.vtu"), factor=0)
    seen = seen_cells(picture)
    grid = pyvista.wrap(vtk_from_result(picture.stage.result))
    surface = grid.extract_surface(nonlinear_subdivision=3, algorithm="dataset_surface")
    camera = picture.camera
    rng = np.random.default_rng(2)
    rows, columns = np.nonzero(seen >= 0)
    same = 0
    for k in rng.choice(len(rows), 60, replace=False):
        place = np.array(camera.focus) + camera.pixel * (
            (columns[k] + 0.5 - camera.size[0] / 2) * camera.right
            - (rows[k] + 0.5 - camera.size[1] / 2) * np.array(camera.up)
        )
        toward = np.array(camera.direction)
        hit, _ = surface.ray_trace(place + toward, place - toward, first_point=True)
        if not len(hit):  # by a hair past the outline
            continue
        same += grid.find_closest_cell(hit - 1e-6 * toward) == seen[rows[k], columns[k]]
    assert same >= 57  # a pixel on the border of two cells may show either


@pytest.mark.derived("a code of three bytes comes back as the number it was made of")
def test_codes_of_cells_come_back():
    cells = np.array([0, 1, 254, 255, 256, 65535, 16_000_000])
    assert (decoded(code_colours(cells)[None], 16_777_000)[0] == cells).all()
    assert (decoded(np.zeros((2, 2, 3), dtype=np.uint8), 5) == -1).all()


def test_each_cell_has_one_place_on_itself_and_large_values_come_first():
    seen = np.full((200, 300), -1)
    seen[20:180, 20:150], seen[20:180, 150:280] = 7, 9
    seen[90:110, 140:160] = 3  # between the two
    size = np.arange(10.0)
    found = places(seen, (0, 300, 0, 200), 60.0, size)
    assert [p.position for p in found] == [9, 7, 3]
    for place in found:
        column, row = (int(x) for x in place.at)
        assert seen[199 - row, column] == place.position
    assert [p.position for p in places(seen, (0, 300, 0, 200), 100.0, size)] == [9, 7]
    size[3] = 99
    assert [p.position for p in places(seen, (0, 300, 0, 200), 100.0, size)] == [3]
    assert [p.position for p in places(seen, (0, 140, 0, 200), 100.0, size)] == [7]
    ring = np.full((100, 100), -1)
    ring[10:90, 10:90] = 1
    ring[20:80, 20:70] = 2
    one, two = places(ring, (0, 100, 0, 100), 0.5, np.array([0, 5.0, 1.0]))
    assert ring[99 - int(one.at[1]), int(one.at[0])] == one.position == 1
    assert two.position == 2
    assert places(np.full((9, 9), -1), (0, 9, 0, 9), 5.0, size) == []


@pytest.mark.derived("a pull along x at Poisson's ratio 0.2: e1 = 1000 along x, e2 = e3 = -200 microstrain")
def test_the_arrows_of_a_pull_lie_along_it(tmp_path):
    picture = picture_of(boxes(), arrows="principal", camera="front", factor=0, extremes=False)
    arrows = picture.arrows
    assert longest(arrows, np.ones(64, dtype=bool)) == pytest.approx(1e-3)
    np.testing.assert_allclose(arrows.values[0], [1e-3, -2e-4, -2e-4], atol=1e-12)
    np.testing.assert_allclose(np.abs(arrows.vectors[:, 0]), np.tile([1, 0, 0], (64, 1)), atol=1e-6)
    drawn_lines: list[np.ndarray] = []

    class Paper:
        unit = 1.0

        def line(self, points: np.ndarray, colour: object, width: float) -> None:
            drawn_lines.append(points)

        def areas(self, corners: np.ndarray, colours: np.ndarray) -> None:
            pass

    draw_arrows(Paper(), picture.camera, arrows, [Place(AT, 0)], 1e-3)  # type: ignore[arg-type]
    reach = np.abs(np.array(drawn_lines) - AT).max(axis=(0, 1))
    assert reach[0] > 20  # the stretch along x, the shortening along z a fifth of it, too short to be drawn
    assert reach[1] == 0
    drawn(boxes(), tmp_path / "p.png", arrows="principal", camera="front", factor=0)


@pytest.mark.derived("u = theta x X turns by theta: 2 milliradian about y, 0.11459 degrees")
@pytest.mark.parametrize("at", ["centroid", "nodes"])
def test_the_arrows_of_a_rotation_are_its_axis(at, tmp_path):
    result = boxes()
    turned = result.with_arrays(
        point_data={"u": np.cross([0, 2e-3, 0], np.asarray(result.points, dtype=float))}
    )
    picture = picture_of(turned, measure="rotation_Y", arrows="rotation", at=at, camera="top")
    np.testing.assert_allclose(
        picture.arrows.vectors[:, 0], np.tile([0, 1, 0], (len(picture.arrows.values), 1)), atol=1e-9
    )
    assert picture.longest * picture.arrows.scale == pytest.approx(np.degrees(2e-3))
    assert "0.115 degrees" in " ".join(picture.notes)
    drawn(turned, tmp_path / "p.png", measure="rotation_Y", arrows="rotation", at=at, camera="top")


@pytest.mark.derived(
    "F = R U with a stretch of 1.2 along x and a turn of 60 degrees about y: the direction turns with R"
)
@pytest.mark.parametrize(("factor", "turns"), [(1, True), (0, False), (2, False)])
def test_directions_of_a_finite_strain_turn_with_the_part(factor, turns):
    result = boxes()
    angle = np.pi / 3
    R = np.array([[np.cos(angle), 0, np.sin(angle)], [0, 1, 0], [-np.sin(angle), 0, np.cos(angle)]])
    X = np.asarray(result.points, dtype=float)
    result = result.with_arrays(point_data={"u": X @ (R @ np.diag([1.2, 1.0, 1.0])).T - X})
    request = wanted(measure="principal_strain_1", arrows="principal", factor=factor)
    subject = Step(result, [request], StrainOptions(base="hencky", solve="nonlinear")).subject(request)
    first = subject.arrows.vectors[:, 0]
    expected = R[:, 0] if turns else np.array([1.0, 0, 0])
    np.testing.assert_allclose(np.abs(first @ expected), 1.0, atol=1e-9)
    assert ("turned with the part" in subject.arrows.words) == turns
    np.testing.assert_allclose(subject.arrows.values[:, 0], np.log(1.2), atol=1e-12)
    almansi = wanted(measure="principal_strain_almansi_1", arrows="principal", factor=factor)
    own = Step(result, [almansi], StrainOptions(solve="nonlinear")).subject(almansi).arrows
    np.testing.assert_allclose(np.abs(own.vectors[:, 0] @ R[:, 0]), 1.0, atol=1e-9)


@pytest.mark.derived("the tetrahedra fill the reference shape")
@pytest.mark.parametrize("name", ["tetra", "hexahedron", "wedge", "pyramid"])
@pytest.mark.parametrize("level", [0, 1, 2])
def test_a_solid_is_filled_by_its_tetrahedra(name, level):
    shape = ELEMENTS[name].shape
    corners, tets = tetrahedra_of(shape, level)
    a, b, c, d = (corners[tets[:, k]] for k in range(4))
    volumes = np.abs(np.einsum("ij,ij->i", np.cross(b - a, c - a), d - a)) / 6
    assert volumes.min() > 0
    assert volumes.sum() == pytest.approx(shape.volume)


def test_arrows_live_where_they_are_computed_whatever_is_drawn(tmp_path):
    how = {"measure": "displacement", "camera": "front", "factor": 0, "arrows": "principal"}
    for at, place, n in (("centroid", "cell", 64), ("nodes", "point", 125)):
        picture = picture_of(boxes(), at=at, **how)
        assert (picture.arrows.association, len(picture.arrows.values)) == (place, n)
        assert picture.longest == pytest.approx(1e-3)
        drawn(boxes(), tmp_path / "p.png", at=at, **how)
    with pytest.raises(UsageError, match="does not live on free faces"):
        picture_of(boxes(), at="surface", **how)
    with pytest.raises(UsageError, match="in the axes of the file"):
        drawn(boxes(), tmp_path / "p.png", StrainOptions(frame="cylindrical z"), arrows="rotation")
