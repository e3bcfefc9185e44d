"""Colour ranges: what their ends are, shared ones, two-sided ones, and the colours that come of them."""

from __future__ import annotations

import numpy as np
import pytest

from picture_reading import (
    COLOUR_BLIND,
    boxes,
    colour,
    drawn,
    is_colour,
    lightness,
    one_cell,
    pixels_of,
    seen_by,
    value_of,
    wanted,
)
from unturn.elements import ELEMENTS
from unturn.picture_wishes import RangeWish
from unturn.pictures._colours import ABOVE, BELOW, NO_VALUE, Range, colour_table, srgb_from_lab
from unturn.pictures._range import automatic, ends_of, joined
from unturn.pictures.computing import Step
from unturn.pictures.drawing import draw_all, shared_ends
from unturn.statistics import weighted_percentiles

HOW = {"measure": "value", "camera": "front", "factor": 0, "extremes": False, "edges": False}


@pytest.mark.memory(
    "IEC 61966-2-1 and CIE 15; the grey in the middle is made by the same formulas the other way round"
)
def test_the_two_sided_map_survives_grey_print_and_has_a_grey_zero():
    table = colour_table(two_sided=True).astype(float)
    steps = -np.diff(lightness(table[::16]))
    assert steps.min() > 2.5
    assert steps.max() < 2 * steps.min()
    colourless = np.ptp(table, axis=1)
    assert abs(int(colourless.argmin()) - 127.5) < 20
    assert colourless[[0, -1]].min() > 60
    grey = srgb_from_lab(np.array([[58.0, 0, 0]])) * 255
    assert np.abs(table[colourless.argmin()] - grey).max() < 8


@pytest.mark.memory("Machado et al. 2009, severity 1.0; each matrix keeps greys, which the rows' sums show")
@pytest.mark.parametrize("matrix", COLOUR_BLIND)
def test_the_two_sided_map_survives_colour_blindness(matrix):
    table = seen_by(matrix, colour_table(two_sided=True) / 255)
    assert (np.diff(lightness(table[::16])) < -2).all()
    for special in (ABOVE, BELOW):
        assert np.linalg.norm(table - seen_by(matrix, np.array(special)), axis=1).min() > 20, special
    assert np.linalg.norm(table - seen_by(matrix, np.array(NO_VALUE)), axis=1).min() > 8


@pytest.mark.derived("the definitions of the modes")
def test_the_ends_are_those_that_are_asked_for():
    values = np.linspace(-1e-4, 5e-4, 2001)
    assert (automatic(values).low, automatic(values).high) == (-1e-4, 5e-4)
    full = ends_of(RangeWish("full"), np.append(values, 0.31234), None, 1e6)
    assert (full.low, full.high) == (-1e-4, 0.31234)
    fixed = ends_of(RangeWish("fixed", -20, 800), values, None, 1e6)
    assert (fixed.low, fixed.high) == (pytest.approx(-2e-5), pytest.approx(8e-4))
    assert fixed.symmetric().low == -fixed.high
    positive = ends_of(RangeWish("percentile", percentage=95), np.abs(values), None, 1e6)
    assert positive.low == 0
    assert "95 % of the values" in positive.words
    assert joined([full, fixed]).high == 0.31234
    assert "2 pictures" in joined([full, fixed]).words


@pytest.mark.derived("weighted percentile: the smallest value whose cumulative volume reaches the share")
def test_percentiles_weigh_by_volume():
    values, volume = np.array([1.0, 2.0, 3.0, 4.0]), np.array([10.0, 10.0, 10.0, 0.1])
    found = ends_of(RangeWish("percentile", percentage=99), values, volume, 1.0)
    assert found.high == weighted_percentiles(values, volume, [99])[0] == 3.0
    assert ends_of(RangeWish("percentile", percentage=99), values, None, 1.0).high == 4.0
    request = wanted(range="percentile 50.1", measure="strain_XX")
    step = Step(boxes(), [request])
    assert step.subject(request).weights.sum() == pytest.approx(1.0)  # the volume of the cube


def test_values_outside_a_given_range_are_marked(tmp_path):
    found = drawn(boxes(), tmp_path / "p.png", **{**HOW, "range": "10,52"})
    assert (found.drawing.above, found.drawing.below) == (12, 9)
    picture = pixels_of(tmp_path / "p.png")
    low, high, between = (
        colour(picture, found.drawing.camera.pixels(np.array([0.1, 0, z]))) for z in (0.1, 0.9, 0.4)
    )
    assert is_colour(low, BELOW)
    assert value_of(high, 10, 52) == pytest.approx(49, abs=42 / 256)
    assert value_of(between, 10, 52) == pytest.approx(17, abs=42 / 256)
    right = colour(picture, found.drawing.camera.pixels(np.array([0.9, 0, 0.9])))
    assert value_of(right, 10, 52) == pytest.approx(52, abs=42 / 256)
    found = drawn(boxes(), tmp_path / "p.png", **{**HOW, "range": "10,51.5"})
    right = colour(pixels_of(tmp_path / "p.png"), found.drawing.camera.pixels(np.array([0.9, 0, 0.9])))
    assert is_colour(right, ABOVE)


def test_a_symmetric_range_has_the_two_sided_map(tmp_path):
    signed = boxes().with_arrays(cell_data={"value": np.arange(64) - 20.0})
    found = drawn(signed, tmp_path / "p.png", **HOW, symmetric=True)
    low, high = found.drawing.colour_range
    assert low == -high
    picture = pixels_of(tmp_path / "p.png")
    for z, value in ((0.1, -20), (0.4, -4), (0.9, 28)):
        rgb = colour(picture, found.drawing.camera.pixels(np.array([0.1, 0, z])))
        assert value_of(rgb, low, high, colour_table(True)) == pytest.approx(value, abs=(high - low) / 256)
    forced = drawn(signed, tmp_path / "q.png", **HOW, symmetric=True, colours="one-sided")
    rgb = colour(pixels_of(tmp_path / "q.png"), forced.drawing.camera.pixels(np.array([0.1, 0, 0.1])))
    value_of(rgb, low, high)
    assert not Range(-1.0, 0.0, 0, 0, 0, 1, two_sided=True).dark_low


@pytest.mark.derived(
    "quadratic functions overshoot between nodes; no value that is held lies outside the range"
)
def test_what_faces_overshoot_between_nodes_is_not_marked(tmp_path):
    corners = np.abs(ELEMENTS["quad8"].nodes).sum(axis=1) > 1.5
    result = one_cell("quad8", f=np.where(corners, 0.0, 1.0))  # 2 in the middle
    found = drawn(result, tmp_path / "p.png", measure="f", extremes=False, factor=0)
    assert (found.drawing.above, found.drawing.below) == (0, 0)
    middle = colour(pixels_of(tmp_path / "p.png"), found.drawing.camera.pixels(np.zeros(3)))
    assert value_of(middle, *found.drawing.colour_range) > 0.99 * found.drawing.colour_range[1]


def test_a_shared_range_holds_the_values_of_all_its_pictures(tmp_path):
    requests = [
        wanted(measure="strain_XX", range="shared"),
        wanted(measure="principal_strain_3", range="shared"),
        wanted(measure="displacement", range="shared"),
        wanted(measure="strain_XX"),
    ]
    step = Step(boxes(), requests)
    ends = shared_ends([step], requests)
    assert ends[0] == ends[1]
    assert (ends[0].low, ends[0].high) == (-2e-4, 1e-3)
    assert ends[2].high < 0.0013  # another unit: not shared with strain
    assert ends[3].low == 0.0
    drawings = draw_all(step, requests, [tmp_path / f"{k}.png" for k in range(4)])
    assert drawings[0].drawing.colour_range == drawings[1].drawing.colour_range == (-2e-4, 1e-3)
