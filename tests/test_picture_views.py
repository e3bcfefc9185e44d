"""Cameras, cuts, close-ups and regions: where things are in the picture, read back from its pixels."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import pyvista
from PIL import Image

from picture_reading import boxes, colour, drawn, is_colour, one_cell, pixels_of, value_of, wanted
from unturn.elements import ELEMENTS
from unturn.errors import UsageError
from unturn.io import read
from unturn.io.vtk_result import vtk_from_result
from unturn.picture_wishes import DIRECTIONS
from unturn.pictures._cut import DISTANCE, section_of
from unturn.pictures._scene import FAINT_FACE
from unturn.pictures.computing import Step
from unturn.pictures.drawing import draw_all

SAMPLES = Path(__file__).parent.parent / "sample_meshes"


@pytest.mark.derived("from the front x runs right and z up; the other directions follow by turning")
@pytest.mark.parametrize(
    ("name", "right", "up"),
    [
        ("front", [1, 0, 0], [0, 0, 1]),
        ("back", [-1, 0, 0], [0, 0, 1]),
        ("right", [0, 1, 0], [0, 0, 1]),
        ("left", [0, -1, 0], [0, 0, 1]),
        ("top", [1, 0, 0], [0, 1, 0]),
        ("bottom", [-1, 0, 0], [0, 1, 0]),
    ],
)
def test_a_named_direction_shows_the_axes_as_told(name, right, up, tmp_path):
    camera = drawn(boxes(), tmp_path / "p.png", measure="value", camera=name, factor=0).drawing.camera
    seen = camera.pixels(np.array([[0, 0, 0], right, up]) * 0.5 + 0.5)
    np.testing.assert_allclose((seen[1] - seen[0]) * camera.pixel, [0.5, 0], atol=1e-9)
    np.testing.assert_allclose((seen[2] - seen[0]) * camera.pixel, [0, -0.5], atol=1e-9)
    assert set(DIRECTIONS) == {"front", "back", "left", "right", "top", "bottom"}


@pytest.mark.derived("cells of a regular grid are numbered along x, then y, then z")
def test_the_side_that_is_seen_is_the_one_asked_for(tmp_path):
    found = drawn(boxes(), tmp_path / "p.png", measure="value", camera="right", factor=0, extremes=False)
    picture = pixels_of(tmp_path / "p.png")
    for y, z in ((0.1, 0.1), (0.6, 0.1), (0.9, 0.6), (0.4, 0.9)):
        cell = 3 + 4 * int(4 * y) + 16 * int(4 * z)
        rgb = colour(picture, found.drawing.camera.pixels(np.array([1.0, y, z])))
        assert value_of(rgb, *found.drawing.colour_range) == pytest.approx(cell + 1, abs=64 / 256)


def test_the_camera_that_is_told_draws_the_same_picture(tmp_path):
    first = drawn(boxes(), tmp_path / "a.png", measure="value")
    drawn(boxes(), tmp_path / "b.png", measure="value", camera=first.drawing.camera_words)
    assert (
        np.abs(pixels_of(tmp_path / "a.png") - pixels_of(tmp_path / "b.png")).max() <= 64
    )  # lines may shift a hair
    assert (
        np.abs(pixels_of(tmp_path / "a.png") - pixels_of(tmp_path / "b.png")).max(axis=2) > 8
    ).mean() < 1e-3


@pytest.mark.derived("the picture spans the width, its middle is the point")
def test_a_camera_can_be_given_in_full(tmp_path):
    found = drawn(
        boxes(), tmp_path / "p.png", measure="value", factor=0, camera="0,-1,0 at 0.2,0,0.4 width 0.5"
    )
    box = pixels_of(tmp_path / "p.png")
    rows = np.flatnonzero((np.ptp(box[:, 5:550], axis=2) > 12).any(axis=1))
    middle = found.drawing.camera.pixels(np.array([0.2, 0, 0.4]))
    assert abs(middle[1] - (rows[0] + rows[-1]) / 2) < 40
    assert found.drawing.camera.pixel == pytest.approx(0.5 / 545, rel=0.1)


@pytest.mark.derived("the face of the cut holds the nodal field by the element's own functions")
@pytest.mark.parametrize(
    "name", ["hexahedron20", "hexahedron27", "tetra10", "wedge15", "pyramid13", "hexahedron"]
)
def test_the_face_of_a_cut_shows_the_field_inside(name, tmp_path):
    row = ELEMENTS[name]

    def field(x: np.ndarray) -> np.ndarray:
        return x[:, 0] + 2 * x[:, 2] if row.order == 1 else x[:, 0] ** 2 + x[:, 0] * x[:, 2] + 1

    result = one_cell(name, f=field(np.array(row.nodes)))
    middle = np.array(row.centroid)
    found = drawn(
        result, tmp_path / "p.png", measure="f", factor=0, camera="front", cut=f"y={middle[1]:.17g}",
        extremes=False, range="-1,5", edges=False,
    )  # fmt: skip
    picture = pixels_of(tmp_path / "p.png")
    for away in ([0, 0, 0], [0.1, 0, 0.05], [-0.08, 0, -0.1], [0.05, 0, -0.1]):
        place = middle + away
        rgb = colour(picture, found.drawing.camera.pixels(place))
        assert value_of(rgb, -1, 5) == pytest.approx(field(place[None])[0], abs=6 / 256 + 0.02)


@pytest.mark.source("PyVista 0.49: slice gives the section of linear cells")
@pytest.mark.parametrize("normal", [[1, 1, 1], [0, 1, 0.3], [1, 0, 0]])
def test_a_section_is_that_of_a_general_library(normal):
    result = boxes(3)
    for mesh in (result, read(SAMPLES / "bracket_tets.vtu")):
        points = np.asarray(mesh.points, dtype=float)
        point = points.mean(axis=0) + 1e-4
        n = np.array(normal) / np.linalg.norm(normal)
        keep = np.ones(mesh.n_cells, dtype=bool)
        section = section_of(mesh, keep, points, {DISTANCE: (points - point) @ n})
        a, b, c = (section.points[section.triangles[:, k]] for k in range(3))
        area = np.linalg.norm(np.cross(b - a, c - a), axis=1).sum() / 2
        grid = pyvista.wrap(vtk_from_result(mesh))
        assert area == pytest.approx(grid.slice(normal=normal, origin=point).area, rel=2e-3)
        assert np.abs((section.points - point) @ n).max() < 1e-6


@pytest.mark.derived("the diagonal section of the unit cube is a regular hexagon of area 3/4 sqrt(3)")
def test_the_section_of_a_cube_is_a_hexagon():
    result = boxes(1)
    points = np.asarray(result.points, dtype=float)
    section = section_of(
        result, np.ones(1, dtype=bool), points, {DISTANCE: (points - 0.5) @ np.ones(3) / np.sqrt(3)}
    )
    a, b, c = (section.points[section.triangles[:, k]] for k in range(3))
    assert np.linalg.norm(np.cross(b - a, c - a), axis=1).sum() / 2 == pytest.approx(
        0.75 * np.sqrt(3), rel=1e-6
    )
    rim = np.linalg.norm(np.diff(section.points[section.rim], axis=1), axis=-1).sum()
    assert rim == pytest.approx(6 / np.sqrt(2), rel=1e-6)


def test_a_cut_along_faces_shows_the_half_that_is_kept(tmp_path):
    found = drawn(
        boxes(), tmp_path / "p.png", measure="value", factor=0, camera="front", cut="y=0.5", extremes=False
    )
    picture = pixels_of(tmp_path / "p.png")
    for x, z in ((0.1, 0.1), (0.6, 0.4), (0.9, 0.9)):
        cell = int(4 * x) + 4 * 2 + 16 * int(4 * z)  # the third row along y, which begins at 0.5
        rgb = colour(picture, found.drawing.camera.pixels(np.array([x, 0.5, z])))
        assert value_of(rgb, *found.drawing.colour_range) == pytest.approx(cell + 1, abs=64 / 256)


def test_what_was_cut_away_is_told(tmp_path):
    result = boxes().with_arrays(cell_data={"value": np.eye(64)[0]})  # the largest is at the front
    found = drawn(result, tmp_path / "p.png", measure="value", camera="front", cut="y")
    assert [m.visible for m in found.drawing.marks] == [False]
    with pytest.raises(UsageError, match="seen edge-on"):
        drawn(result, tmp_path / "p.png", measure="value", camera="front", cut="x")
    with pytest.raises(UsageError, match="takes everything away"):
        drawn(result, tmp_path / "p.png", measure="value", camera="front", cut="y=7")


@pytest.mark.derived("the middle of the view is the extreme; pixels are the width over the room")
def test_a_close_up_has_the_extreme_in_its_middle(tmp_path):
    result = read(SAMPLES / "bracket.vtu")
    found = drawn(result, tmp_path / "p.png", close_up="largest width 0.01", factor=1)
    (mark,) = found.drawing.marks
    assert mark.visible
    camera = found.drawing.camera
    whole = drawn(result, tmp_path / "q.png", factor=1).drawing.camera
    assert camera.pixel < whole.pixel / 5
    by_number = drawn(result, tmp_path / "r.png", close_up="element 5282 width 0.01", factor=1).drawing
    np.testing.assert_allclose(by_number.camera.focus, camera.focus)
    point = ",".join(f"{x:.12g}" for x in mark.point)
    by_place = drawn(result, tmp_path / "s.png", close_up=f"{point} width 0.01", factor=1).drawing
    np.testing.assert_allclose(by_place.camera.focus, camera.focus, atol=1e-9)


def test_a_close_up_of_a_region_marks_its_extremes(tmp_path):
    result = read(SAMPLES / "bracket.vtu")
    values = Step(result, [wanted()]).subject(wanted()).values.numbers
    part = np.flatnonzero(result.cell_data["part"] == 2)
    found = drawn(result, tmp_path / "p.png", close_up="region part=2")
    assert found.drawing.marks[0].position == part[values[part].argmax()]
    other = drawn(result, tmp_path / "q.png", close_up="region part=2 width 0.1").drawing
    assert other.camera.pixel > found.drawing.camera.pixel


def test_regions_are_left_out_or_pale(tmp_path):
    result = boxes()
    how = {"measure": "value", "camera": "front", "factor": 0, "extremes": False, "edges": False}
    places = np.array([[0.2, 0, 0.4], [0.8, 0, 0.4]])
    found = drawn(result, tmp_path / "p.png", faint="part=2", **how)
    one, two = (colour(pixels_of(tmp_path / "p.png"), p) for p in found.drawing.camera.pixels(places))
    value_of(one, *found.drawing.colour_range)
    assert is_colour(two, FAINT_FACE)
    for key, name in (("leave_out", "part=2"), ("only", "part=1")):
        found = drawn(
            result, tmp_path / "p.png", **{key: [name]}, **how
        )  # fmt: skip
        picture = pixels_of(tmp_path / "p.png")
        coloured = np.flatnonzero((np.ptp(picture[100:450, :570], axis=2) > 12).any(axis=0))
        width = (coloured[-1] - coloured[0] + 1) * found.drawing.camera.pixel
        assert width == pytest.approx(0.5, abs=4 * found.drawing.camera.pixel)
    # the range and the extremes are those of what has colours
    assert found.drawing.colour_range[1] <= 64
    with pytest.raises(UsageError, match="leave nothing to draw"):
        drawn(result, tmp_path / "p.png", leave_out=["part=1", "part=2"], **how)
    with pytest.raises(UsageError, match="no region is called"):
        drawn(result, tmp_path / "p.png", only="part", **how)


def test_what_is_left_out_is_told_with_its_own_peak(tmp_path):
    from unturn.pictures._picture import Picture
    from unturn.pictures.drawing import ranged

    request = wanted(measure="value", leave_out="part=2", factor=0)
    step = Step(boxes(), [request])
    subject = step.subject(request)
    words = " ".join(Picture(subject, request, ranged(subject, request, step.ends(request))).notes)
    assert "left out: part=2 (largest 64 there)" in words


@pytest.mark.source("ISO/IEC 15948 (PNG): the pHYs chunk holds pixels per metre; read by Pillow")
def test_size_and_resolution_are_kept_for_print(tmp_path):
    drawn(boxes(), tmp_path / "p.png", measure="value", size="900x700", dpi=300)
    with Image.open(tmp_path / "p.png") as image:
        assert image.size == (900, 700)
        assert image.info["dpi"] == pytest.approx((300, 300), abs=0.02)


def test_edges_are_drawn_when_asked_for(tmp_path):
    how = {"measure": "value", "camera": "front", "factor": 0, "extremes": False}
    found = drawn(boxes(), tmp_path / "a.png", edges=True, **how)
    drawn(boxes(), tmp_path / "b.png", edges=False, **how)
    row, column = (round(x) for x in found.drawing.camera.pixels(np.array([0.5, 0, 0.62]))[::-1])
    near = (slice(row - 1, row + 2), slice(column - 2, column + 3))
    with_edges, without = (pixels_of(tmp_path / f"{k}.png")[near].sum(axis=2).min() for k in "ab")
    assert with_edges < without - 30


def test_several_pictures_share_what_is_computed(tmp_path, monkeypatch):
    from unturn.pictures import computing

    calls = []
    real = computing.compute
    monkeypatch.setattr(computing, "compute", lambda *a, **k: calls.append(1) or real(*a, **k))
    requests = [wanted(measure=m) for m in ("equivalent_strain", "strain_XX", "displacement", "value")]
    draw_all(Step(boxes(), requests), requests, [tmp_path / f"{k}.png" for k in range(4)])
    assert len(calls) == 1
