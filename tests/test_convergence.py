"""Order, extrapolated value and grid convergence index; quantities by text; points within elements."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from meshes import Mesh, curved, patch, straight
from unturn.elements import ELEMENTS, Element
from unturn.errors import InputError, UsageError
from unturn.fields import CellFields
from unturn.locate import locate
from unturn.model import build_model
from unturn.pipeline import StrainOptions, compute
from unturn.quantities import Found, find_quantity
from unturn.quantity_text import parse_quantity
from unturn.refinement import LOWEST, Study, check_refinement, observed_order, study

# --- the published procedure ------------------------------------------------------------------------------------------


@pytest.mark.memory(
    "Celik et al. 2008, J. Fluids Eng. 130(7), 078001, table 1, first column; re-computed below"
)
def test_the_published_example() -> None:
    found = study((5.863, 5.972, 6.063), (1.5 * 4 / 3, 1.5, 1.0))
    assert found.order == pytest.approx(1.53, abs=0.005)
    assert found.extrapolated == pytest.approx(6.1685, abs=5e-5)
    assert 100 * found.index == pytest.approx(2.2, abs=0.05)
    # independent: Celik's own fixed-point iteration
    e21, e32, p = 5.972 - 6.063, 5.863 - 5.972, 1.0
    for _ in range(200):
        p = abs(math.log(abs(e32 / e21)) + math.log((1.5**p - 1) / ((4 / 3) ** p - 1))) / math.log(1.5)
    assert found.order == pytest.approx(p, rel=1e-10)
    assert found.extrapolated == pytest.approx((1.5**p * 6.063 - 5.972) / (1.5**p - 1), rel=1e-12)
    assert found.index == pytest.approx(1.25 * abs((6.063 - 5.972) / 6.063) / (1.5**p - 1), rel=1e-12)
    assert found.error == pytest.approx(found.index * 6.063, rel=1e-12)


@pytest.mark.derived("v = v0 + C h^p has the order p, the limit v0")
@given(
    st.floats(0.3, 6.0),
    st.floats(-5.0, 5.0),
    st.floats(0.1, 3.0),
    st.booleans(),
    st.floats(1.2, 3.0),
    st.floats(1.2, 3.0),
)
def test_a_power_law_gives_its_order_and_limit(
    p: float, limit: float, C: float, down: bool, r21: float, r32: float
) -> None:
    sizes = (r21 * r32, r21, 1.0)
    values = tuple(limit + (-C if down else C) * (0.2 * h) ** p for h in sizes)
    found = study((values[0], values[1], values[2]), sizes)
    if abs(values[1] - values[2]) < 1e-7:
        return  # rounding of the values spoils the order
    assert found.behaviour == "converges"
    assert found.order == pytest.approx(p, rel=1e-5)
    assert found.extrapolated == pytest.approx(limit, abs=1e-6)
    assert found.error == pytest.approx(1.25 * abs(values[2] - limit), rel=1e-4)


@pytest.mark.derived("growth like a power of the size, or like its logarithm, has no limit")
@pytest.mark.parametrize("values", [(1.0, 2.0, 4.0), (1.0, 2.0, 3.0), (-1.0, -2.0, -3.5)])
def test_a_sequence_that_diverges_is_refused(values: tuple[float, float, float]) -> None:
    found = study(values, (4.0, 2.0, 1.0))
    assert found.behaviour == "diverges"
    assert "does not shrink" in found.reason
    assert math.isnan(found.order)
    assert math.isnan(found.extrapolated)
    # with unequal ratios the change itself may shrink and the sequence still diverge: here like ln h
    logarithm = study((0.0, math.log(4.0), math.log(5.0)), (5.0, 1.25, 1.0))
    assert logarithm.behaviour == "diverges"


@pytest.mark.practice("no order of what oscillates or stands still")
def test_other_sequences_are_refused_with_the_reason() -> None:
    sizes = (4.0, 2.0, 1.0)
    assert study((1.0, 2.0, 1.5), sizes).behaviour == "oscillates"
    assert "it oscillates" in study((1.0, 2.0, 1.5), sizes).reason
    same = study((1.0, 1.0, 1.0), sizes)
    assert (same.behaviour, same.extrapolated, same.error, same.index) == ("unchanged", 1.0, 0.0, 0.0)
    assert math.isnan(same.order)
    assert "faster than any order" in study((0.0, 1.0, 1.0 + 1e-9), sizes).reason
    assert study((1.0, 2.0, 2.0), sizes).behaviour == "stalls"
    assert study((1.0, 1.0, 2.0), sizes).behaviour == "stalls"
    with pytest.raises(UsageError, match="not all finite"):
        study((1.0, math.nan, 2.0), sizes)
    for wrong in ((1.0, 2.0, 4.0), (4.0, 4.0, 1.0), (4.0, 2.0, 2.0)):
        with pytest.raises(UsageError, match="is not finer than"):
            check_refinement(wrong)
    assert math.isinf(study((-3.0, -1.0, 0.0), sizes).index)
    assert study((-3.0, -1.0, 0.0), sizes).error == pytest.approx(1.25)
    assert observed_order(1e-3, 2.0, 2.0) == LOWEST


@pytest.mark.derived("a change no larger than what the stored numbers can be off says nothing")
@pytest.mark.parametrize(
    ("values", "floors", "behaviour", "words"),
    [
        ((1e-19, -3e-19, 9e-19), (1e-18, 1e-18, 1e-18), "below precision", "zero as far as the numbers tell"),
        ((0.0, 0.0, 0.0), (1e-18, 1e-18, 1e-18), "below precision", "below the stored precision"),
        ((1e-19, -3e-19, 9e-18), (1e-18, 1e-18, 1e-18), "stalls", "with more digits"),
        ((1.0, 1.01, 0.995), (0.02, 0.02, 0.02), "unchanged", "on all three meshes to the stored precision"),
        ((1.0, 2.0, 2.01), (0.02, 0.02, 0.02), "stalls", "medium and fine mesh to the stored precision"),
        ((1.0, 1.01, 2.0), (0.02, 0.02, 0.02), "stalls", "coarse and medium mesh to the stored precision"),
        ((1.0, 1.5, 1.75), (0.02, 0.02, 0.02), "converges", ""),
        ((1.0, 2.0, 4.0), (0.02, 0.02, 0.02), "diverges", "does not shrink"),
    ],
)
def test_changes_below_the_stored_precision(values: Any, floors: Any, behaviour: str, words: str) -> None:
    found = study(values, (4.0, 2.0, 1.0), floors)
    assert found.behaviour == behaviour
    assert words in found.reason
    if behaviour in ("below precision", "unchanged"):
        assert found.error == max(floors)
        assert found.index == (pytest.approx(max(floors) / abs(values[2])) if values[2] else math.inf)
    elif behaviour == "converges":
        assert found == study(values, (4.0, 2.0, 1.0))


@pytest.mark.derived(
    "a strain component that is zero by cancellation, in every kind of element, with 32 and 64 bits"
)
@pytest.mark.parametrize("name", [row.name for row in ELEMENTS.values() if row.dim > 1])
def test_the_floor_of_a_quantity_covers_what_rounding_makes_of_zero(name: str) -> None:
    row = ELEMENTS[name]
    mesh = patch(row)
    options = {"plane": "strain"} if row.dim == 2 else {}
    for seed in range(4):
        rng = np.random.default_rng(seed)
        H = np.zeros((3, 3))
        H[: row.dim, : row.dim] = 1e-3 * rng.normal(size=(row.dim, row.dim))
        H[1, 1] = 0.0
        away = np.where(np.arange(3) < row.dim, 3.0 * rng.normal(size=3), 0.0)
        moved = mesh._replace(points=mesh.points + away)
        for kind in (np.float32, np.float64):
            f = fields(moved, (moved.points @ H.T).astype(kind), ["strain"], **options)
            found = find_quantity(parse_quantity("peak strain_YY"), f)
            assert abs(found.value) <= found.floor < 1e-3 * (1.0 if kind is np.float64 else 10.0)


# --- quantities -------------------------------------------------------------------------------------------------------


def fields(mesh: Mesh, u: Any, names: list[str], **options: Any) -> CellFields:
    return compute(mesh.result(u=u), StrainOptions(measures=names, **options), diagnose=True).fields


@pytest.mark.practice("each form of text")
def test_quantities_are_understood() -> None:
    q = parse_quantity("peak equivalent_strain within 2.5 of 1, 2,3")
    assert (q.form, q.measure.name, q.component, q.radius) == ("peak", "equivalent_strain", -1, 2.5)
    assert q.point is not None
    assert q.point.tolist() == [1, 2, 3]
    q = parse_quantity("percentile 99.9 principal_strain_hencky_1 in upper arm")
    assert (q.form, q.percentage, q.region, q.component) == ("percentile", 99.9, "upper arm", 0)
    q = parse_quantity("value strain_XY at 1,2")
    assert q.point is not None
    assert (q.form, q.component, q.point.tolist()) == ("value", 3, [1, 2, 0])
    assert parse_quantity("lowest principal_strain_3").form == "lowest"


@pytest.mark.practice("wrong texts are refused with what to write")
@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("highest strain_XX", "is not understood"),
        ("peak", "is not understood"),
        ("percentile equivalent_strain", "is not understood"),
        ("percentile 101 equivalent_strain", "'101' is no number above 0 and up to 100"),
        ("percentile x equivalent_strain", "'x' is no number"),
        ("peak equivalent_strain within -1 of 0,0,0", "'-1' is no number above 0."),
        ("peak equivalent_strain within 1 of 0;0", "is no point"),
        ("value equivalent_strain", "goes with 'at X,Y,Z'"),
        ("peak equivalent_strain at 0,0,0", "goes with 'at X,Y,Z'"),
        ("value equivalent_strain at 0,0,nan", "is no point"),
        ("peak strain", "name one of strain_XX"),
        ("peak equivalent_strian", "Did you mean 'equivalent_strain'"),
    ],
)
def test_wrong_quantities_are_refused(text: str, words: str) -> None:
    with pytest.raises(UsageError, match=words.replace(".", r"\.")):
        parse_quantity(text)


@pytest.mark.derived("the field is known: peaks by hand")
def test_peaks_and_percentiles_of_a_known_field() -> None:
    mesh = grid(ELEMENTS["hexahedron"], 4)
    u = np.zeros_like(mesh.points)
    u[:, 0] = 0.5e-3 * mesh.points[:, 0] ** 2
    f = fields(mesh, u, ["strain"])

    def get(text: str) -> Found:
        return find_quantity(parse_quantity(text), f)

    assert get("peak strain_XX").value == pytest.approx(0.875e-3)
    assert get("lowest strain_XX").value == pytest.approx(0.125e-3)
    assert get("percentile 50 strain_XX").value == pytest.approx(0.375e-3)
    near = get("peak strain_XX within 0.3 of 0.5,0.5,0.5")
    assert (near.value, near.cells) == (pytest.approx(0.625e-3), 8)
    assert f.diagnostics is not None
    assert np.allclose(near.at, f.diagnostics.centroid[near.cell])
    with pytest.raises(UsageError, match="Give a larger radius"):
        get("peak strain_XX within 0.01 of 0.5,0.5,0.5")
    with pytest.raises(UsageError, match="no region is called 'arm'"):
        get("peak strain_XX in arm")
    with pytest.raises(UsageError, match="no computed element holds"):
        get("value strain_XX at 1.5,0,0")
    broken = fields(mesh, np.where(mesh.points[:, :1] > 0.6, np.nan, u), ["strain"])
    with pytest.raises(InputError, match="has a finite value"):
        find_quantity(parse_quantity("peak strain_XX within 0.2 of 0.9,0.5,0.5"), broken)


ALL = [row.name for row in ELEMENTS.values()]


@pytest.mark.derived("xi -> X -> xi on curved cells of every element")
@pytest.mark.parametrize("name", ALL)
def test_points_are_found_in_every_element(name: str) -> None:
    row = ELEMENTS[name]
    mesh = patch(row) if name in ("pixel", "voxel") else curved(patch(row))
    model = build_model(mesh.result(u=mesh.points))
    rng = np.random.default_rng(4)
    for cell in rng.choice(len(mesh.cells), min(3, len(mesh.cells)), replace=False):
        weights = rng.dirichlet(np.ones(len(row.shape.vertices)))
        xi = 0.8 * weights @ row.shape.vertices + 0.2 * row.centroid
        X = (row.shape_functions(xi[None]) @ mesh.points[mesh.cells[cell]])[0]
        found = locate(model, X)
        assert [place.cell for place in found] == [cell]
        assert np.allclose(found[0].reference, xi, atol=1e-9)
    assert not locate(model, np.array([50.0, 0, 0]))


@pytest.mark.derived("a shared node belongs to all its cells")
def test_a_node_is_found_in_all_cells_that_share_it() -> None:
    mesh = patch(ELEMENTS["hexahedron"])
    model = build_model(mesh.result(u=mesh.points))
    for node in (0, 8):
        cells = np.flatnonzero((mesh.cells == node).any(axis=1)).tolist()
        assert sorted(place.cell for place in locate(model, mesh.points[node])) == cells


@pytest.mark.derived("an element that holds the displacement gives its gradient exactly at any point")
@pytest.mark.parametrize(("name", "plane"), [("tetra10", None), ("quad9", "strain"), ("triangle6", "stress")])
def test_the_value_at_a_point_is_that_of_the_elements_own_functions(name: str, plane: Any) -> None:
    mesh = patch(ELEMENTS[name])
    x = mesh.points
    u = np.zeros_like(x)
    u[:, 0], u[:, 1] = 1e-2 * x[:, 0] * x[:, 1], 2e-2 * x[:, 0] ** 2
    options = {} if plane is None else {"plane": plane, "poisson": 0.3}
    f = fields(mesh, u, ["strain"], **options)
    for X in (np.array([0.1, 0.05, 0.0]), mesh.points[4]):
        at = ",".join(str(v) for v in X)
        found = [
            find_quantity(parse_quantity(f"value strain_{c} at {at}"), f).value
            for c in ("XX", "YY", "ZZ", "XY")
        ]
        xx, xy = 1e-2 * X[1], 0.5 * (1e-2 * X[0] + 4e-2 * X[0])
        zz = -0.3 / 0.7 * xx if plane == "stress" else 0.0
        assert np.allclose(found, [xx, 0, zz, xy], atol=1e-14)


# --- a real refinement ------------------------------------------------------------------------------------------------


def grid(element: Element, n: int) -> Mesh:
    """The unit square or cube in n cells a side."""
    dim = element.dim
    axes = [np.linspace(0.0, 1.0, n + 1)] * dim
    corners = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, dim)
    vertices = (ELEMENTS[element.shape.name].shape.vertices + 1.0) / 2.0
    steps = np.rint(vertices).astype(int)
    base = np.stack(np.meshgrid(*[np.arange(n)] * dim, indexing="ij"), axis=-1).reshape(-1, 1, dim)
    cells = np.ravel_multi_index(tuple(np.moveaxis(base + steps, -1, 0)), (n + 1,) * dim)
    return straight(corners, cells, element)


def sequence(name: str, text: str, counts: tuple[int, int, int]) -> Study:
    values = []
    for n in counts:
        mesh = grid(ELEMENTS[name], n)
        x = mesh.points
        u = np.zeros_like(x)
        u[:, 0] = np.exp(x[:, 0]) * (1.0 + 0.2 * x[:, 1])
        q = parse_quantity(text)
        found = find_quantity(
            q, fields(mesh, u, [q.measure.name], **({} if x[:, 2].any() else {"plane": "strain"}))
        )
        values.append(found.value)
    return study((values[0], values[1], values[2]), (1 / counts[0], 1 / counts[1], 1 / counts[2]))


@pytest.mark.derived("u = exp(x)(1 + y/5) at the nodes: Taylor expansion of the divided differences")
@pytest.mark.parametrize(
    ("name", "text", "order", "limit"),
    [
        # one-sided difference at a corner: h/2 u''; extrapolated to the derivative itself
        ("quad", "value strain_XX at 0,0", 1, 1.0),
        ("hexahedron", "value strain_XX at 0,0,0", 1, 1.0),
        # the mean over the cells round a node: central difference, h^2/6 u'''
        ("quad", "value strain_XX at 0.5,0.5", 2, math.exp(0.5) * 1.1),
        # the largest centroid lies half a cell from the end
        ("quad", "peak strain_XX", 1, math.e * 1.2),
        ("quad", "peak strain_XX within 0.4 of 1,1,0", 1, math.e * 1.2),
        # at the corner of a quadratic element: one order more
        ("quad9", "value strain_XX at 0,0", 2, 1.0),
    ],
)
def test_refinement_shows_the_known_order(name: str, text: str, order: int, limit: float) -> None:
    counts = (4, 8, 16) if ELEMENTS[name].dim == 3 else (8, 16, 32)
    found = sequence(name, text, counts)
    assert found.behaviour == "converges"
    assert found.order == pytest.approx(order, abs=0.12)
    assert found.extrapolated == pytest.approx(limit, rel=4e-3)
    assert abs(found.extrapolated - limit) < 0.1 * abs(found.values[2] - limit)
    assert abs(found.values[2] - limit) < found.error


@pytest.mark.derived("u = sqrt(x): the strain at the end grows without limit")
def test_a_singular_peak_is_refused() -> None:
    values = []
    for n in (8, 16, 32):
        mesh = grid(ELEMENTS["quad"], n)
        u = np.zeros_like(mesh.points)
        u[:, 0] = 1e-3 * np.sqrt(np.abs(mesh.points[:, 0]))
        f = fields(mesh, u, ["strain"])
        values.append(find_quantity(parse_quantity("peak strain_XX"), f).value)
    assert study((values[0], values[1], values[2]), (4.0, 2.0, 1.0)).behaviour == "diverges"


@pytest.mark.derived("a line in space")
def test_values_on_surfaces_and_lines() -> None:
    for name in ("line3", "triangle6"):
        mesh = patch(ELEMENTS[name])
        tilted = mesh._replace(points=mesh.points @ np.array([[1, 0, 0.3], [0, 1, 0.2], [-0.3, -0.2, 1.0]]))
        f = fields(tilted, 1e-3 * tilted.points, ["principal_strain"])
        X = tilted.points[tilted.cells[1]].mean(axis=0)
        text = f"value principal_strain_1 at {X[0]},{X[1]},{X[2]}"
        assert find_quantity(parse_quantity(text), f).value == pytest.approx(1e-3, rel=1e-9)
