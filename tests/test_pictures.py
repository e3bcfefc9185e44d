"""Pictures are read back: the colour of a pixel, the place of a mark, the shape of an outline, what is written."""

from __future__ import annotations

import os
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import pyvista

from picture_reading import COLOUR_BLIND, colour, is_colour, lightness, pixels_of, seen_by, value_of
from unturn.errors import InputError, MissingExtraError, UsageError
from unturn.fields import compute_fields
from unturn.io import read
from unturn.io.vtk_result import result_from_vtk, vtk_from_result
from unturn.model import PlaneOptions, build_model
from unturn.pictures import Camera, draw
from unturn.pictures._camera import directions, fit
from unturn.pictures._colours import ABOVE, BELOW, NO_VALUE, colour_table
from unturn.pictures._label import free_place
from unturn.pictures._range import choose_range
from unturn.pictures._values import fitted_factor
from unturn.result import CellBlock, Result

ROOT = Path(__file__).parent.parent
SAMPLES = ROOT / "sample_meshes"
SIZE = (960, 640)


def squares(nx: int = 6, ny: int = 4) -> Result:
    """Unit squares in the xy plane with a nodal array and a displacement."""
    grid = pyvista.ImageData(dimensions=(nx + 1, ny + 1, 1)).cast_to_unstructured_grid()
    grid.cell_data["value"] = np.arange(grid.n_cells, dtype=float) + 1
    grid.point_data["nodal"] = np.array(grid.points)[:, 0] / nx
    return result_from_vtk(grid)


@pytest.fixture(scope="module")
def computed():
    def make(name: str, measures=("equivalent_strain",)):
        result = read(SAMPLES / name)
        model = build_model(result, plane=PlaneOptions("strain") if name.startswith("ring") else None)
        fields = compute_fields(model, list(measures))
        return result.with_arrays(cell_data=fields.arrays), model.displacement.values

    return make


@pytest.mark.memory(
    "IEC 61966-2-1 and CIE 15; matplotlib's even map cividis is measured the same way beside it"
)
def test_the_colour_map_survives_grey_print():
    from matplotlib import colormaps

    table = colour_table()
    steps = -np.diff(lightness(table[::16].astype(float)))
    assert steps.min() > 2.5
    referee = np.diff(lightness(colormaps["cividis"](np.linspace(0, 1, 256))[::16, :3] * 255))
    assert steps.min() / steps.max() > 0.8 * referee.min() / referee.max()
    assert lightness(table[:1])[0] > 90
    assert lightness(table[-1:])[0] < 25


@pytest.mark.memory("Machado et al. 2009, severity 1.0; each matrix keeps greys, which the rows' sums show")
@pytest.mark.parametrize("matrix", COLOUR_BLIND)
def test_the_colours_survive_colour_blindness(matrix):
    table = seen_by(matrix, colour_table() / 255)
    assert (np.diff(lightness(table[::16])) < -2).all()
    for special in (ABOVE, BELOW, NO_VALUE):
        away = np.linalg.norm(table - seen_by(matrix, np.array(special)), axis=1)
        assert away.min() > 25, special


@pytest.mark.parametrize("name", ["ring.vtu"])
def test_every_cell_of_a_plane_mesh_has_the_colour_of_its_value(name, computed, tmp_path):
    result, u = computed(name)
    drawn = draw(result, "equivalent_strain", tmp_path / "p.png", displacement=u, size=SIZE)
    picture = pixels_of(tmp_path / "p.png")
    values = result.cell_data["equivalent_strain"]
    middle = (result.points + drawn.factor * u)[result.blocks[0].connectivity[:, 8]]  # the node in the middle
    mark = np.array(drawn.marks[0].pixel)
    low, high = drawn.colour_range
    read_off, held = [], []
    for cell, place in zip(result.blocks[0].index, drawn.camera.pixels(middle)):
        if np.abs(place - mark).max() > 100:  # ring and label lie there
            read_off.append(value_of(colour(picture, place), low, high))
            held.append(values[cell])
    assert len(held) > 150
    np.testing.assert_allclose(read_off, held, rtol=0, atol=(high - low) / 256)


@pytest.mark.source("PyVista 0.49: ray_trace and find_closest_cell say which cell is seen")
@pytest.mark.parametrize("name", ["bracket.vtu", "bracket_tets.vtu"])
def test_faces_of_curved_solids_have_the_colour_of_their_own_cell(name, computed, tmp_path):
    result, u = computed(name)
    drawn = draw(result, "equivalent_strain", tmp_path / "p.png", displacement=u, size=(1600, 1000))
    picture = pixels_of(tmp_path / "p.png")
    grid = pyvista.wrap(vtk_from_result(result))
    grid.points = result.points + drawn.factor * u
    surface = grid.extract_surface(nonlinear_subdivision=2, algorithm="dataset_surface")
    toward = np.array(drawn.camera.direction)
    rng = np.random.default_rng(5)
    hits, away = [], 0
    low, high = drawn.colour_range
    values = result.cell_data["equivalent_strain"]
    for piece in rng.choice(surface.n_cells, 600, replace=False):
        place = surface.get_cell(piece).center
        _, hit = surface.ray_trace(place + toward, place - 1e-9 * toward, first_point=False)
        pixel = drawn.camera.pixels(np.array(place))
        if len(hit) != 1 or np.abs(pixel - drawn.marks[0].pixel).max() < 30:
            continue
        rgb = colour(picture, pixel)
        if np.abs(colour_table().astype(int) - rgb).max(axis=1).min() > 1:
            away += 1  # an edge of the mesh, or the label, is drawn there
            continue
        hits.append((value_of(rgb, low, high), values[grid.find_closest_cell(place)]))
    seen, held = np.array(hits).T
    assert len(hits) > 60
    assert away < 1.5 * len(hits)
    wrong = np.abs(seen - held) > (high - low) / 256
    assert wrong.mean() < 0.03  # pixels on the border between two cells


def test_the_bar_runs_from_the_lowest_to_the_highest_colour(tmp_path):
    draw(squares(), "value", tmp_path / "p.png", size=SIZE)
    picture = pixels_of(tmp_path / "p.png")
    table = colour_table().astype(int)
    best = []
    for column in range(SIZE[0] * 4 // 5, SIZE[0]):
        line = picture[:, column]
        if len(np.unique(line, axis=0)) < 150:
            continue
        rows = [r for r in range(SIZE[1]) if np.abs(table - line[r]).max(axis=1).min() <= 2]
        best = max(best, [np.abs(table - line[r]).max(axis=1).argmin() for r in rows], key=len)
    assert len(best) > 200
    assert best[0] > 250
    assert best[-1] < 5
    assert (np.diff(best) <= 0).all()


def test_the_extreme_is_ringed_where_its_cell_is_seen(computed, tmp_path):
    result, u = computed("bracket.vtu")
    values = result.cell_data["equivalent_strain"]
    drawn = draw(result, "equivalent_strain", tmp_path / "p.png", displacement=u)
    (mark,) = drawn.marks
    assert mark.position == int(values.argmax())
    assert mark.value == values.max()
    assert mark.visible
    picture = pixels_of(tmp_path / "p.png")
    shown = value_of(colour(picture, np.array(mark.pixel)), *drawn.colour_range)
    assert shown == pytest.approx(values.max(), abs=np.ptp(drawn.colour_range) / 256)
    block = result.blocks[0]
    nodes = block.connectivity[np.flatnonzero(block.index == mark.position)[0]]
    own = drawn.camera.pixels((result.points + drawn.factor * u)[nodes])
    assert (own.min(axis=0) <= mark.pixel).all()
    assert (mark.pixel <= own.max(axis=0)).all()
    angle = np.linspace(0, 2 * np.pi, 40, endpoint=False)
    around = np.array(mark.pixel) + 9 * np.stack([np.cos(angle), np.sin(angle)], axis=1)
    assert np.mean([colour(picture, place).max() < 110 for place in around]) > 0.9


def test_an_extreme_inside_is_said_to_be_hidden(tmp_path):
    grid = pyvista.ImageData(dimensions=(6, 6, 6)).cast_to_unstructured_grid()
    grid.cell_data["value"] = np.zeros(grid.n_cells)
    grid.cell_data["value"][62] = 1.0  # the cube in the middle
    drawn = draw(result_from_vtk(grid), "value", tmp_path / "p.png", size=SIZE)
    (mark,) = drawn.marks
    assert (mark.position, mark.visible) == (62, False)
    np.testing.assert_allclose(mark.point, [2.5, 2.5, 2.5])


def test_the_camera_goes_where_the_extreme_is_seen(tmp_path):
    for corner in (0, 4, 20, 24, 100, 104, 120, 124):
        grid = pyvista.ImageData(dimensions=(6, 6, 6)).cast_to_unstructured_grid()
        grid.cell_data["value"] = np.zeros(grid.n_cells)
        grid.cell_data["value"][corner] = 1.0
        drawn = draw(result_from_vtk(grid), "value", tmp_path / "p.png", size=(480, 480))
        assert drawn.marks[0].visible, corner


def test_signed_values_are_marked_at_both_ends_and_pressed_ones_at_the_lower():
    from unturn.pictures._marks import extremes

    assert extremes(np.array([1.0, 5.0, -2.0, np.nan])) == [("largest", 1), ("smallest", 2)]
    assert extremes(np.array([-1.0, -5.0])) == [("smallest", 1)]
    assert extremes(np.array([0.0, 2.0])) == [("largest", 1)]
    assert extremes(np.array([np.nan])) == []


@pytest.mark.derived("a shift of one length unit is 1/pixel pixels")
def test_the_shape_moves_with_the_factor(tmp_path):
    result = squares()
    u = np.tile([0.25, 0.0, 0.0], (result.n_points, 1))
    camera = Camera((0.0, 0.0, 1.0), (0.0, 1.0, 0.0), (4.0, 2.0, 0.0), 12 / 800, SIZE)
    edges = {}
    for factor in (1.0, 3.0):
        draw(result, "value", tmp_path / "p.png", displacement=u, factor=factor, camera=camera, size=SIZE)
        model = pixels_of(tmp_path / "p.png")[120:520, :700]
        coloured = np.flatnonzero((np.ptp(model, axis=2) > 12).any(axis=0))
        edges[factor] = coloured[0]
        left = camera.pixels(np.array([0.25 * factor, 0, 0]))[0]
        assert abs(coloured[0] - left) <= 2
    assert abs(edges[3.0] - edges[1.0] - 0.5 / camera.pixel) <= 1.5


def test_the_undeformed_shape_stays_behind(tmp_path):
    result = squares()
    u = np.tile([0.0, 3.0, 0.0], (result.n_points, 1))
    drawn = draw(result, "value", tmp_path / "p.png", displacement=u, size=SIZE)
    picture = pixels_of(tmp_path / "p.png")
    rest = colour(picture, drawn.camera.pixels(np.array([0.5, 0.5, 0.0])))
    assert np.ptp(rest) <= 3
    assert 235 <= rest.max() <= 250


@pytest.mark.derived("5 % of the diagonal, rounded upwards to two digits; never below 1")
def test_the_factor_is_fitted(computed):
    result, u = computed("bracket.vtu")
    factor = fitted_factor(np.asarray(result.points), u)
    share = factor * np.linalg.norm(u, axis=1).max() / np.linalg.norm(np.ptp(result.points, axis=0))
    assert 0.05 <= share < 0.0555
    assert fitted_factor(np.eye(3), np.full((3, 3), 0.3)) == 1.0
    assert fitted_factor(np.eye(3), np.zeros((3, 3))) == 1.0


@pytest.mark.derived(
    "a quadratic arc over 90 degrees leaves its circle by 0.6 % of the radius, its chord by 29 %"
)
# Common practice, no source. Coordinates beyond single precision end the graphics library, and the process with it.
@pytest.mark.parametrize(("value", "factor"), [(1e-3, 1e30), (1e-3, -1e308), (1e30, None), (1e30, 1.0)])
def test_a_displacement_beyond_what_can_be_drawn_is_refused(value, factor, tmp_path):
    result = squares()
    moved = np.zeros((result.n_points, 3))
    moved[7, 0] = value
    with pytest.raises(UsageError, match=r"displacement of point 7.*million times the size"):
        draw(result, array="value", path=tmp_path / "p.png", displacement=moved, factor=factor, size=SIZE)
    assert not any(tmp_path.iterdir())


# Common practice, no source.
def test_a_node_of_no_cell_does_not_change_the_factor(tmp_path):
    result = squares()
    moved = np.zeros((result.n_points, 3))
    moved[:, 0] = 1e-3
    plain = draw(result, array="value", path=tmp_path / "p.png", displacement=moved, size=SIZE)
    loose = replace(result, points=np.vstack([result.points, [[1e3, 0, 0]]]), point_data={})
    far = np.vstack([moved, [[1e30, 0, 0]]])
    drawn = draw(loose, array="value", path=tmp_path / "q.png", displacement=far, size=SIZE)
    assert drawn.factor == plain.factor > 1


def test_a_hole_between_quadratic_cells_is_round(tmp_path):
    points, cells = [], []
    for k in range(4):
        corner = len(points)
        for radius, turn in [(1, 0), (2, 0), (2, 1), (1, 1), (1.5, 0), (2, 0.5), (1.5, 1), (1, 0.5)]:
            angle = (k + turn) * np.pi / 2
            points.append([radius * np.cos(angle), radius * np.sin(angle), 0])
        cells.append(range(corner, corner + 8))
    result = Result(
        np.array(points),
        (CellBlock("quad8", np.array(cells), np.arange(4)),),
        cell_data={"value": np.ones(4)},
    )
    drawn = draw(result, "value", tmp_path / "p.png", size=SIZE)
    picture = pixels_of(tmp_path / "p.png")
    for angle in np.arange(0.1, 2 * np.pi, 0.2):
        ray = np.array([np.cos(angle), np.sin(angle), 0])
        radii = np.linspace(0.5, 1.5, 1001)
        hit = next(r for r in radii if colour(picture, drawn.camera.pixels(r * ray)).min() < 200)
        if np.linalg.norm(drawn.camera.pixels(ray) - drawn.marks[0].pixel) > 150:
            assert hit == pytest.approx(1.0, abs=0.006 + 2 * drawn.camera.pixel), angle


def test_values_without_number_and_outside_the_range_have_colours_of_their_own(tmp_path):
    result = squares(50, 30)
    values = np.linspace(1, 2, result.n_cells)
    values[700], values[710], values[720] = np.nan, 50.0, -40.0
    result = result.with_arrays(cell_data={"value": values})
    drawn = draw(result, "value", tmp_path / "p.png", size=SIZE)
    assert (drawn.above, drawn.below, drawn.missing, drawn.out_of_range) == (1, 1, 1, 2) or drawn.below == 0
    picture = pixels_of(tmp_path / "p.png")
    middle = pyvista.wrap(vtk_from_result(result)).cell_centers().points
    assert is_colour(colour(picture, drawn.camera.pixels(middle[700])), NO_VALUE)
    given = draw(result, "value", tmp_path / "q.png", size=SIZE, colour_range=(1.0, 2.0))
    assert (given.above, given.below, given.missing) == (1, 1, 1)
    picture = pixels_of(tmp_path / "q.png")
    assert is_colour(colour(picture, given.camera.pixels(middle[710])), ABOVE)
    assert is_colour(colour(picture, given.camera.pixels(middle[720])), BELOW)


@pytest.mark.derived(
    "rounded outwards to two digits; drawn in when the extreme is far beyond 99.9 % of the values"
)
def test_the_range_is_not_ruled_by_a_single_peak():
    calm = np.linspace(0, 0.99, 2000)
    assert (choose_range(calm).low, choose_range(calm).high) == (0.0, 0.99)
    peak = choose_range(np.append(calm, 30.0))
    assert (peak.low, peak.high, peak.above) == (0.0, 0.99, 1)
    assert choose_range(np.append(calm, 1.1)).above == 0
    pressed = choose_range(-calm)
    assert (pressed.low, pressed.high, pressed.dark_low) == (-0.99, 0.0, True)
    assert np.array_equal(pressed.colours[0], colour_table()[-1])
    empty = choose_range(np.array([np.nan, np.inf]))
    assert (empty.low, empty.high, empty.missing) == (0.0, 0.0, 2)
    constant = choose_range(np.full(5, 3.0))
    assert (constant.low, constant.high, constant.above) == (0.0, 3.0, 0)


@pytest.mark.derived("bilinear squares interpolate a linear nodal field exactly")
def test_nodal_values_run_smoothly_over_the_cells(tmp_path):
    result = squares()
    drawn = draw(result, "nodal", tmp_path / "p.png", association="point", size=SIZE)
    picture = pixels_of(tmp_path / "p.png")
    for x in (0.6, 1.3, 2.6, 3.4):
        rgb = colour(picture, drawn.camera.pixels(np.array([x, 1.4, 0.0])))
        assert value_of(rgb, *drawn.colour_range) == pytest.approx(x / 6, abs=2.5 / 256)


@pytest.mark.parametrize(
    "values", [np.full(24, np.nan), np.zeros(24), np.full(24, 7.0), np.arange(24) % 2 > 0]
)
def test_odd_values_make_a_picture(values, tmp_path):
    result = squares().with_arrays(cell_data={"value": values})
    drawn = draw(result, "value", tmp_path / "p.png", size=SIZE)
    assert drawn.missing == (24 if np.isnan(values.astype(float)).all() else 0)
    assert pixels_of(tmp_path / "p.png").shape == (SIZE[1], SIZE[0], 3)


MESHES = {
    "line": lambda: pyvista.Spline(np.array([[0, 0, 0], [1, 1, 0], [2, 0, 1.0]]), 5),
    "tetrahedron": lambda: pyvista.UnstructuredGrid({10: np.arange(4)[None]}, np.vstack([np.zeros(3), np.eye(3)])),
    "image": lambda: pyvista.ImageData(dimensions=(3, 3, 3)),
    "structured": lambda: pyvista.ImageData(dimensions=(3, 3, 3)).cast_to_structured_grid(),
    "sphere": lambda: pyvista.Sphere(theta_resolution=12, phi_resolution=12),
    "plane upright": lambda: pyvista.Plane(direction=(0, 1, 0)),
    "plane aslant": lambda: pyvista.Plane(direction=(1, 2, 3)),
    "vertex": lambda: pyvista.PolyData(np.zeros((1, 3))),
}  # fmt: skip


@pytest.mark.parametrize("kind", MESHES)
def test_meshes_of_every_dimension_are_drawn(kind, tmp_path):
    mesh = MESHES[kind]()
    mesh.cell_data["value"] = np.arange(mesh.n_cells) + 1.0
    drawn = draw(result_from_vtk(mesh), "value", tmp_path / "p.png", size=SIZE)
    assert drawn.marks[0].position == mesh.n_cells - 1
    assert drawn.marks[0].visible
    model = pixels_of(tmp_path / "p.png")[90:560, :740]
    assert (model < 240).any()


def test_mixed_dimensions_keep_their_values(tmp_path):
    points = np.array([[0, 0, 0], [1, 0, 0], [1, 1, 0], [0, 1, 0], [3, 0, 0], [3, 1, 0]], dtype=float)
    blocks = (
        CellBlock("line", np.array([[1, 4]]), np.array([0])),
        CellBlock("quad", np.array([[0, 1, 2, 3]]), np.array([2])),
        CellBlock("triangle", np.array([[4, 5, 2]]), np.array([1])),
    )
    result = Result(points, blocks, cell_data={"value": np.array([1.0, 2.0, 4.0])})
    drawn = draw(result, "value", tmp_path / "p.png", size=SIZE)
    picture = pixels_of(tmp_path / "p.png")
    for place, value in (([2.9, 0.6, 0], 2.0), ([0.2, 0.2, 0], 4.0)):
        rgb = colour(picture, drawn.camera.pixels(np.array(place, dtype=float)))
        assert value_of(rgb, *drawn.colour_range) == pytest.approx(value, abs=4 / 256)


def test_a_model_far_from_the_origin_looks_the_same(tmp_path):
    near = squares()
    grid = pyvista.wrap(vtk_from_result(near))
    grid.points = np.array(grid.points, dtype=float) + np.array([5e5, 4e6, 0])
    draw(near, "value", tmp_path / "near.png", size=SIZE)
    draw(result_from_vtk(grid), "value", tmp_path / "far.png", size=SIZE)
    assert np.abs(pixels_of(tmp_path / "near.png") - pixels_of(tmp_path / "far.png")).max() <= 2


def test_points_without_place_or_displacement_do_not_spoil_the_rest(tmp_path):
    result = squares()
    u = np.zeros((result.n_points, 3))
    u[3] = np.nan
    points = np.array(result.points, dtype=float)
    points[0] = np.inf
    broken = Result(points, result.blocks, cell_data=dict(result.cell_data))
    drawn = draw(broken, "value", tmp_path / "p.png", displacement=u, size=SIZE)
    assert np.isfinite(drawn.camera.focus).all()
    with pytest.raises(InputError, match="no point has finite coordinates"):
        draw(
            Result(points * np.nan, result.blocks, cell_data=dict(result.cell_data)),
            "value",
            tmp_path / "q.png",
        )


@pytest.mark.derived("parallel projection onto right = up x direction")
def test_the_camera_fits_the_model_into_its_box():
    corners = np.array([[x, y, z] for x in (0, 4) for y in (0, 2) for z in (0, 1)], dtype=float)
    for direction, up in directions(np.array([4.0, 2.0, 1.0])):
        assert direction @ up == pytest.approx(0, abs=1e-12)
        camera = fit(corners, direction, up, (800, 600), (50, 600, 100, 500))
        seen = camera.pixels(corners)
        assert seen[:, 0].min() >= 50 - 1e-6
        assert seen[:, 0].max() <= 600 + 1e-6
        assert seen[:, 1].min() >= 100 - 1e-6
        assert seen[:, 1].max() <= 500 + 1e-6
        full = np.ptp(seen, axis=0) / [550, 400]
        assert full.max() == pytest.approx(1)
    flat = directions(np.array([4.0, 2.0, 0.0]))
    np.testing.assert_array_equal(flat[0][0], [0, 0, 1])


def test_a_label_finds_the_nearest_free_place():
    taken = np.ones((400, 600), dtype=bool)
    taken[20:80, 30:200] = False
    left, top = free_place(taken, (260.0, 60.0), (100.0, 40.0), 30.0)
    assert not taken[int(top) : int(top + 40) + 1, int(left) : int(left + 100) + 1].any()
    taken[:] = False
    left, top = free_place(taken, (300.0, 200.0), (100.0, 40.0), 30.0)
    assert np.hypot(np.clip(300, left, left + 100) - 300, np.clip(200, top, top + 40) - 200) <= 31
    left, top = free_place(taken, (595.0, 5.0), (100.0, 40.0), 30.0)
    assert left >= 0
    assert left + 100 < 600
    assert top >= 0


def test_nothing_is_cut_off_at_the_margin(tmp_path):
    result = squares().with_arrays(cell_data={"value": np.linspace(-1e6, 3e12, 24)})
    long = (
        "An uncommonly long title that would run off the right margin of the picture if nobody took care " * 3
    )
    drawn = draw(
        result,
        "value",
        tmp_path / "p.png",
        title=long,
        legend="a name for the numbers that is longer than the column beside the picture\nand a remark",
        unit="newton per square millimetre and second",
        size=(640, 480),
        numbers=np.arange(24) + 10**9,
    )
    assert drawn.marks
    picture = pixels_of(tmp_path / "p.png")
    for border in (picture[:4], picture[-4:], picture[:, :4], picture[:, -4:]):
        assert (border == 255).all()


def test_only_the_picture_is_left_in_its_folder(tmp_path):
    draw(squares(), "value", tmp_path / "p.png", size=SIZE)
    assert [p.name for p in tmp_path.iterdir()] == ["p.png"]


@pytest.mark.parametrize(
    ("change", "says"),
    [
        ({"path": "p.jpg"}, r"ends in \.png"),
        ({"path": "missing/p.png"}, "cannot be written"),
        ({"array": "valeu"}, "Did you mean 'value'"),
        ({"array": "words"}, "not real numbers"),
        ({"array": "vector"}, "3 components; choose one"),
        ({"array": "vector", "component": "XX"}, "no component 'XX'"),
        ({"array": "vector", "component": 3}, "no component 3"),
        ({"association": "face"}, "'cell' or 'point'"),
        ({"displacement": np.zeros((2, 3))}, "the displacement has shape"),
        ({"displacement": np.zeros((35, 3)), "factor": np.nan}, "the deformation factor"),
        ({"factor": 2.0}, "no displacement"),
        ({"size": (10, 10)}, "each side must be"),
        ({"colour_range": (2.0, 1.0)}, "colour range"),
        ({"camera": Camera((0, 0, 1), (0, 1, 0), (0, 0, 0), 1.0, (700, 500))}, "made for 700 x 500"),
    ],
)
def test_requests_that_cannot_be_met_say_why(change, says, tmp_path):
    result = squares().with_arrays(
        cell_data={"words": np.array(["a"] * 24), "vector": np.zeros((24, 3))},
    )
    wanted = {"array": "value", "path": "p.png", **change}
    with pytest.raises(UsageError, match=says):
        draw(result, wanted.pop("array"), tmp_path / wanted.pop("path"), **wanted)
    assert not list(tmp_path.iterdir())


ALONE = """
import sys
import numpy as np
from unturn.pictures import draw
from unturn.result import CellBlock, Result
points = np.array([[0, 0, 0], [1, 0, 0], [0, 1, 0.0]])
result = Result(points, (CellBlock("triangle", np.array([[0, 1, 2]]), np.array([0])),), cell_data={"v": np.ones(1)})
print(draw(result, "v", sys.argv[1], size=(480, 480)).path)
"""


def alone(target: Path, **environment: str) -> subprocess.CompletedProcess[str]:
    path = os.pathsep.join([str(ROOT / "src"), *(p for p in sys.path if p)])
    return subprocess.run(
        [sys.executable, "-c", ALONE, str(target)],
        env={"PYTHONPATH": path, **environment},
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )


@pytest.mark.skipif(not sys.platform.startswith("linux"), reason="an empty environment is a Linux matter")
@pytest.mark.parametrize("environment", [{}, {"DISPLAY": ":987"}, {"DISPLAY": ""}])
def test_no_display_is_needed(environment, tmp_path):
    done = alone(tmp_path / "p.png", **environment)
    assert done.returncode == 0, done.stderr
    assert done.stderr == ""
    assert pixels_of(tmp_path / "p.png").shape == (480, 480, 3)


@pytest.mark.skipif(not sys.platform.startswith("linux"), reason="names a Linux library")
def test_a_missing_graphics_library_is_named_and_does_not_crash(tmp_path):
    broken = tmp_path / "libraries"
    broken.mkdir()
    (broken / "libEGL.so.1").write_text("no library")
    (broken / "libEGL.so").write_text("no library")
    done = alone(tmp_path / "p.png", LD_LIBRARY_PATH=str(broken))
    assert done.returncode == 1
    assert MissingExtraError.__name__ in done.stderr
    assert "apt install libegl1" in done.stderr
    assert not (tmp_path / "p.png").exists()
