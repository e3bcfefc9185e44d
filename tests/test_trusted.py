"""The plus and minus of every extreme of a summary, suspected peaks, and how both are printed."""

from __future__ import annotations

import json
import math
import re
from collections import Counter
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from documents import run
from recovery_meshes import block, smooth
from solved_problems import BORE, NU, PEAK, corner_plate, cylinder, plate, ring, sphere
from test_around import noisy, with_parts
from test_elsewhere import angle_mesh, corner_field, summary
from test_nodal import ALPHA, HEAT
from unturn import Result, kinematics, write
from unturn.around import bound_of, groups_of
from unturn.elements import ELEMENTS
from unturn.measures import MEASURES
from unturn.pipeline import StrainOptions, compute
from unturn.recovery import recover_gradient
from unturn.summary import Summary, SummaryOptions, summarise, summary_data
from unturn.summary_text import _above, summary_text
from unturn.trust import strain_error
from unturn.trusted import table_rows

Floats = np.ndarray
WHICH = ("maximum", "minimum")


def full(result: Result, regions: tuple[str, ...] = (), mode: bool = False, **options: Any) -> Summary:
    asked = StrainOptions(**{"displacement": "u", **options})
    computed = compute(result, asked, diagnose=True)
    at = "mean" if asked.at == "mean" else "centroid"
    how = SummaryOptions(regions, asked.solve, mode, asked.equivalent_poisson, at, full=True)
    return summarise(computed, how)


@pytest.mark.derived("the whole mesh recovered, times the most that each measure changes")
@pytest.mark.parametrize("effective", [None, 0.25])
@pytest.mark.parametrize("at", ["centroid", "mean"])
def test_every_extreme_by_brute_force(at: Any, effective: float | None) -> None:
    result = with_parts("hexahedron", 5, 0.1)
    names = [n for n, m in MEASURES.items() if not m.mechanical]
    found = full(result, measures=names, at=at, solve="nonlinear", equivalent_poisson=effective)
    model = found.fields.model
    recovered = recover_gradient(model, groups_of(model))
    errors = {
        b: strain_error(recovered, base=b, at=at).plus_minus
        for b in ("", "rotation", "turn", "green_lagrange", "hencky", "biot", "almansi")
    }
    unknown = set()
    for region in found.regions:
        for name, s in region.statistics.items():
            measure = {"stretch_1": "stretch", "stretch_3": "stretch"}.get(name, name)
            while measure not in MEASURES and measure not in ("stretch", "angle_of_turn"):
                measure = measure.rpartition("_")[0]
            bound = bound_of(measure, equivalent_poisson=effective)
            for which in WHICH:
                known = region.plus_minus(name, which)
                if bound is None:
                    unknown.add(measure)
                    assert math.isnan(known)
                    continue
                cell = getattr(s, f"at_{which}")
                total = sum(errors[b][cell] for b in bound.bases)
                expected = bound.of(float(total), getattr(s, which))
                assert known == pytest.approx(expected, rel=1e-9), (name, which)
                assert known > 0
    assert unknown == {"finite_rotation"}
    assert "equivalent_strain_biot" in found.regions[0].statistics


@pytest.mark.derived("1.5/(1+nu) times sqrt(2/3 e':e') is the other form of the equivalent strain")
def test_the_other_equivalent_strain() -> None:
    result = with_parts("tetra", 4)
    usual, other = full(result).regions[0], full(result, equivalent_poisson=0.2).regions[0]
    ratio = other.plus_minus("equivalent_strain", "maximum") / usual.plus_minus(
        "equivalent_strain", "maximum"
    )
    assert ratio == pytest.approx(1.5 / 1.2)


def test_mechanical_strain_has_the_bound_of_the_total() -> None:
    # Source: the conventions of the project: the free thermal strain counts as known.
    result = with_parts("hexahedron", 4)
    result = result.with_arrays(point_data={"T": np.full(result.n_points, 120.0)})
    r = full(result, thermal_expansion=ALPHA, **HEAT).regions[0]
    for which in WHICH:
        mechanical = r.plus_minus("principal_strain_mechanical_1", which)
        assert mechanical == pytest.approx(r.plus_minus("principal_strain_1", which), rel=1e-12)
        assert r.plus_minus("equivalent_strain_mechanical", which) > 0
        assert r.plus_minus("mechanical_strain_XX", which) > 0


EXACT = {
    "": kinematics.strain,
    "_hencky": kinematics.hencky_strain,
    "_biot": kinematics.biot_strain,
    "_green_lagrange": kinematics.green_lagrange_strain,
    "_almansi": kinematics.almansi_strain,
}


def exact_numbers(H: Floats) -> dict[str, Floats]:
    """Every number of the summary from exact gradients `(n, 3, 3)`."""
    k = kinematics
    turn = np.linalg.norm(k.finite_rotation(H), axis=1)
    found = {
        "strain_XX": k.strain(H)[:, 0, 0],
        "strain_XY": k.strain(H)[:, 0, 1],
        "volumetric_strain": np.trace(H, axis1=1, axis2=2),
        "rotation_Z": k.rotation_vector(H)[:, 2],
        "rotation_angle": k.rotation_angle(H),
        "small_strain_error": k.small_strain_error(H),
        "finite_rotation_angle": turn,
        "angle_of_turn": turn,
        "det_f": k.det_f(H),
        "stretch_1": 1 + k.principal_strain(k.biot_strain(H))[:, 0],
        "stretch_3": 1 + k.principal_strain(k.biot_strain(H))[:, 2],
    }
    for ending, tensor in EXACT.items():
        e = tensor(H)
        values = k.principal_strain(e)
        found[f"principal_strain{ending}_1"], found[f"principal_strain{ending}_3"] = (
            values[:, 0],
            values[:, 2],
        )
        found[f"equivalent_strain{ending}"] = k.equivalent_strain(e)
        found[f"max_shear_strain{ending}"] = values[:, 0] - values[:, 2]
    return found


ASKED = [
    "strain", "rotation", "rotation_angle", "volumetric_strain", "small_strain_error", "finite_rotation_angle", "det_f",
    *(f"{m}{b}" for b in EXACT for m in ("principal_strain", "equivalent_strain", "max_shear_strain")),
]  # fmt: skip


@pytest.mark.derived("the largest and smallest exact value over the whole body, its surface included")
def test_the_bounds_cover_the_extremes_of_a_smooth_field() -> None:
    """Of every number at least nine in ten, over five elements, centroids and means."""
    inside: dict[str, list[bool]] = {}
    for name in ("triangle", "quad8", "tetra", "hexahedron", "hexahedron20"):
        row = ELEMENTS[name]
        grid = np.linspace(0, 1, 31 if row.dim == 2 else 11)
        x = np.stack(np.meshgrid(grid, grid, grid if row.dim == 3 else [0.0]), -1).reshape(-1, 3)
        truth = exact_numbers(0.1 * np.moveaxis(smooth(x, row.dim)[1], -1, 0))
        for n, at in ((3, "centroid"), (4, "mean")):
            mesh = block(row, n, 0.15)
            result = mesh.result(u=0.1 * smooth(mesh.points, row.dim)[0])
            r = full(result, measures=ASKED, at=at, plane="strain" if row.dim == 2 else None).regions[0]
            for number, values in truth.items():
                for which, most in (("maximum", values.max()), ("minimum", values.min())):
                    error = abs(getattr(r.statistics[number], which) - most)
                    inside.setdefault(number, []).append(error <= r.plus_minus(number, which) + 1e-15)  # type: ignore[arg-type]
    shares = {number: float(np.mean(found)) for number, found in inside.items()}
    assert min(shares.values()) >= 0.9, shares
    assert np.mean(list(shares.values())) > 0.97, shares


@pytest.mark.source(
    "Kirsch 1898; Lame: Timoshenko and Goodier, Theory of Elasticity, articles 28, 35, 43, 136"
)
def test_the_bounds_cover_solved_peaks() -> None:
    """In the summary as it is printed: at centroids, at means, and on the free faces of solids."""
    cases: list[tuple[Any, dict[str, Any], float]] = []
    for name in ("triangle", "quad", "triangle6", "quad8"):
        for n in (4, 8):
            cases.append((plate(name, n), {"plane": "stress", "poisson": NU}, PEAK))
            mesh, u, truth = ring(name, n)
            cases.append(((mesh, u), {"plane": "strain"}, truth))
    for name, n in (("tetra", 4), ("hexahedron", 3), ("wedge", 4), ("hexahedron20", 3), ("tetra10", 3)):
        cases.append((cylinder(name, n), {}, BORE))
        mesh, u, truth = sphere(name, n)
        cases.append(((mesh, u), {}, truth))
    hits: Counter[str] = Counter()
    count: Counter[str] = Counter()
    for (mesh, u), options, truth in cases:
        for at in ("centroid", "mean", "surface"):
            if at == "surface" and mesh.element.dim == 2:
                continue
            found = summary(mesh.result(u=u), at=at, **options)
            r = found.regions[0]
            value, bound = (
                r.statistics["principal_strain_1"].maximum,
                r.plus_minus("principal_strain_1", "maximum"),
            )
            if found.elsewhere is not None:
                value, bound = found.elsewhere.extremes[0].value, found.elsewhere.extremes[0].plus_minus
            count[at] += 1
            hits[at] += abs(value - truth) <= bound
            assert bound < 3 * truth, (mesh.element.name, at)  # and not for being endless
    assert all(hits[at] >= 0.9 * n for at, n in count.items()), (hits, count)


def seven_parts() -> Result:
    """Seven parts side by side, part k strained k times as much; each bends a little, part 4 most."""
    mesh = block(ELEMENTS["hexahedron"], 7)
    part = np.floor(7 * mesh.points[mesh.cells].mean(axis=1)[:, 0]).astype(np.int32)
    order = np.array([3, 0, 6, 1, 5, 2, 4])
    layer = np.floor(7 * mesh.points[:, 0] + 1e-9).clip(0, 6).astype(int)
    x = mesh.points
    u = 1e-3 * np.stack([(1 + order[layer]) * (0.1 * x[:, 1] ** 2), 0 * layer, 0 * layer], axis=1)
    return mesh.result(u=u).with_arrays(cell_data={"part": order[part].astype(np.int32)})


def columns(text: str, start: str) -> list[str]:
    """The names of the columns of the table that starts so."""
    line = next(line for line in text.splitlines() if line.startswith(start))
    return line.removeprefix(start).split()


class TestManyRegions:
    def test_the_table_of_nodes_shows_those_with_the_largest_peaks(self) -> None:
        # Source: the conventions of the project, as in the table of cells.
        result = seven_parts()
        found = summary(result, at="nodes")
        text = summary_text(found)
        first = columns(text, "microstrain  ")
        assert len(first) == 5
        assert columns(text, "microstrain at nodes") == first
        peaks = {r.region.name: r.statistics["equivalent_strain"].maximum for r in found.regions}
        assert first == sorted(peaks, key=lambda name: -peaks[name])[:5]
        assert "2 more regions, whose peaks at cells are smaller: all are in --json" in text
        assert found.elsewhere is not None
        assert {e.region for e in found.elsewhere.extremes} == set(peaks)

    def test_few_statistics_have_bounds_where_they_are_shown(self) -> None:
        """The others cost time and are nowhere to be seen; with all statistics every region has them."""
        # Source: the conventions of the project.
        result = seven_parts()
        short, long = summary(result, at="centroid"), full(result)
        shown = columns(summary_text(short), "microstrain  ")
        for a, b in zip(short.regions, long.regions):
            known = a.plus_minus("principal_strain_1", "maximum")
            if a.region.name in shown:
                assert known == b.plus_minus("principal_strain_1", "maximum") > 0
            else:
                assert math.isnan(known)
            assert all((name, which) in b.trust for name in b.statistics for which in WHICH)

    def test_suspected_peaks_of_regions_that_are_not_shown_are_counted(self) -> None:
        # Source: the conventions of the project.
        mesh, _ = angle_mesh("hexahedron", 6)
        u = corner_field(mesh.points)
        middle = mesh.points[mesh.cells].mean(axis=1)
        part = np.zeros(len(middle), dtype=np.int32)
        far = np.abs(middle[:, :2]).max(axis=1) > 0.75
        part[far] = 1 + np.argsort(np.argsort(middle[far, 0] * 10 + middle[far, 1])) * 6 // far.sum()
        found = full(mesh.result(u=u).with_arrays(cell_data={"part": part}))
        assert {g.region for g in found.growths} == {"part=0"}
        said = summary_text(found)
        assert "suspected singular, part=0: largest principal" in said
        names = columns(said, "microstrain  ")
        absent = next(r.region.name for r in found.regions if r.region.name not in names)
        one = replace(found.growths[0], region=absent, array="principal_strain_1", which="maximum")
        lines = summary_text(replace(found, growths=(*found.growths, one, one))).splitlines()
        assert "suspected singular too: peaks of 1 more region, see --json" in lines
        assert not any(f"suspected singular, {absent}" in line for line in lines)


class TestText:
    def test_values_with_their_bounds(self) -> None:
        # Source: the conventions of the project: two digits, rounded up.
        found = summary(with_parts("tetra", 5), at="centroid")
        text = summary_text(found)
        shown = found.regions
        line = next(x for x in text.splitlines() if x.startswith("largest principal"))
        pairs = re.findall(r"(-?[\d.]+) \+-([\d.]+)", line)
        assert len(pairs) == 2
        for (value, bound), r in zip(pairs, shown):
            assert float(value) == pytest.approx(r.statistics["principal_strain_1"].maximum * 1e6, rel=5e-3)
            exact = r.plus_minus("principal_strain_1", "maximum") * 1e6
            assert exact * (1 - 1e-9) <= float(bound) <= 1.1 * exact
        assert "+- is estimated from the elements around" in text
        turn = next(x for x in text.splitlines() if x.startswith("largest rotation, degree"))
        assert len(re.findall(r"\+-[\d.]+", turn)) == 2
        widths = {len(x) for x in text.split("microstrain ")[1].splitlines()[1:12]}
        assert max(widths) <= 90

    @pytest.mark.derived("a bound is rounded up, never down")
    def test_rounding_goes_up(self) -> None:
        for value in 10.0 ** np.random.default_rng(0).uniform(-5.5, 6, 500):
            shown = float(_above(value))
            assert value * (1 - 1e-9) <= shown <= 1.1 * value
        assert [_above(v) for v in (math.nan, 0.0, 1e-9, 2.0, 99.9, 101.0)] == [
            " -",
            "0",
            "0",
            "2",
            "100",
            "110",
        ]

    def test_no_neighbour(self, tmp_path: Path) -> None:
        """One cell a region: a dash in the text, null in the JSON."""
        # Source: the conventions of the project, and RFC 8259, section 6: NaN is not a JSON number.
        mesh = block(ELEMENTS["hexahedron"], 2)
        part = np.arange(8, dtype=np.int32)
        write(mesh.result(u=noisy(mesh.points, 3), part_of=part[mesh.cells.argmax() % 8] + 0 * mesh.points[:, 0])
              .with_arrays(cell_data={"part": part}), tmp_path / "in.vtu")  # fmt: skip
        status, said = run(["strain", str(tmp_path / "in.vtu"), "--displacement", "u", "-o", str(tmp_path / "o.vtu"),
                            "--json", str(tmp_path / "o.json")])  # fmt: skip
        assert status == 0, said
        line = next(x for x in said.splitlines() if x.startswith("largest principal"))
        assert len(re.findall(r"\d \+- -", line)) == 5
        data = json.loads((tmp_path / "o.json").read_text(encoding="utf-8"))
        for r in data["regions"]:
            assert r["statistics"]["principal_strain_1"]["maximum"]["plus_minus"] is None
            assert r["statistics"]["principal_strain_1"]["maximum"]["suspected_singular"] is False

    def test_mode_shapes_and_plane_meshes_without_a_third_direction(self) -> None:
        # Source: the conventions of the project: components where principal values are not known.
        found = full(with_parts("quad", 6), mode=True, measures=["strain"])
        text = summary_text(found)
        assert re.search(r"largest XX +-?[\d.]+ \+-[\d.]+", text)
        assert re.search(r"smallest XY +-?[\d.]+ \+-[\d.]+", text)
        rows = table_rows(found.regions[0].statistics, found.fields.components["strain"])
        assert ("largest XX", "strain_XX", "maximum") in rows
        assert all(found.regions[0].plus_minus(n, w) > 0 for label, n, w in rows if "Z" not in label)

    def test_components_in_a_frame(self) -> None:
        # Source: the frame turns components, not the norm that bounds them.
        found = full(with_parts("hexahedron", 4), frame="cylindrical z")
        r = found.regions[0]
        assert r.plus_minus("strain_RR", "maximum") > 0
        assert r.plus_minus("rotation_T", "minimum") > 0

    def test_named_regions(self) -> None:
        """A region within a group is judged by all cells of the group around."""
        # Source: the conventions of the project: nothing is recovered across regions of the file, and only these.
        result = with_parts("hexahedron", 6)
        box = (result.points[result.blocks[0].connectivity][:, :, 1].mean(axis=1) < 0.4).astype(np.int32)
        result = result.with_arrays(cell_data={"load_step": box})
        named = full(result, ("load_step=1",)).regions[0]
        whole = full(result)
        model = whole.fields.model
        error = strain_error(recover_gradient(model, groups_of(model))).plus_minus
        s = named.statistics["principal_strain_1"]
        assert named.plus_minus("principal_strain_1", "maximum") == pytest.approx(
            error[s.at_maximum], rel=1e-9
        )


class TestSuspected:
    def test_in_the_default_table_and_its_json(self) -> None:
        # Source: Williams 1952: the corner is where it is by construction.
        mesh, corner = angle_mesh("quad")
        number, element = 7 + np.arange(len(mesh.points)), 500 + np.arange(len(mesh.cells))
        result = mesh.result(u=corner_field(mesh.points), node_number=number)
        found = full(result.with_arrays(cell_data={"element_number": element}), plane="strain")
        data = summary_data(found)
        listed = {(g["array"], g["extreme"]): g for g in data["suspected_singular"]}
        first = listed["principal_strain_1", "maximum"]
        statistic = data["regions"][0]["statistics"]["principal_strain_1"]["maximum"]
        assert statistic["suspected_singular"] is True
        assert (first["cell"], first["element"]) == (statistic["cell"], 500 + statistic["cell"])
        assert first["plus_minus"] == statistic["plus_minus"]
        assert (first["location"], first["region"], first["statistic"]) == (
            "cells",
            "whole",
            "largest principal",
        )
        assert (first["point"], first["node"]) == (corner, 7 + corner)
        after = first["next"]
        values = found.fields.arrays["principal_strain"][:, 0]
        assert after["value"] == values[after["cell"]]
        assert after["element"] == 500 + after["cell"]
        assert after["plus_minus"] > 0
        assert not any(
            s[which]["suspected_singular"] != ((name, which) in listed)
            for name, s in data["regions"][0]["statistics"].items()
            for which in WHICH
        )
        text = summary_text(found)
        assert f"next away from it {after['value'] * 1e6:.0f} +-" in text
        assert f"in element {after['element']} (cell {after['cell']})" in text
        in_text = [x for x in text.splitlines() if x.startswith("suspected singular")]
        assert 0 < len(in_text) < len(listed)  # components have no row in the table

    def test_on_free_surfaces(self) -> None:
        # Source: Williams 1952: the singular line runs through the sides of the plate.
        mesh, _ = angle_mesh("hexahedron")
        found = summary(mesh.result(u=corner_field(mesh.points)), at="surface")
        on_faces = [g for g in found.growths if g.location == "free surfaces"]
        assert on_faces
        for g in on_faces:
            assert np.linalg.norm(mesh.points[g.trust.point, :2]) < 1.5 / 6  # there or one cell on
            assert found.elsewhere is not None
            same = next(e for e in found.elsewhere.extremes if e.array == g.array)
            assert (g.cell, g.value, g.trust.plus_minus) == (same.place["cell"], same.value, same.plus_minus)
            assert g.trust.next_cell in range(len(mesh.cells))
            assert abs(g.trust.next_value) < abs(g.value)
        text = summary_text(found)
        assert "in plane keeps growing towards point" in text
        assert len([x for x in text.splitlines() if x.startswith("suspected")]) == len(found.growths)

    @pytest.mark.source(
        "Williams 1952: exponent 0.456 at a re-entrant right angle, solved with the element itself"
    )
    @pytest.mark.parametrize("at", ["centroid", "mean"])
    def test_a_solved_corner(self, at: str) -> None:
        mesh, u = corner_plate("quad8", 10)
        found = summary(mesh.result(u=u), plane="stress", poisson=NU, at=at)
        growth = {g.array: g for g in found.growths}["principal_strain_1"]
        assert np.linalg.norm(mesh.points[growth.trust.point] - [0.5, 0.5, 0]) < 1.5 * 0.5 / 10
        assert 0 < growth.trust.next_value < 0.9 * growth.value

    def test_nothing_else_is_left(self) -> None:
        # Source: by construction: two rings around the corner are the whole region.
        mesh, _ = angle_mesh("quad")
        near = np.linalg.norm(mesh.points[mesh.cells].mean(axis=1), axis=1) < 0.2
        result = mesh.result(u=corner_field(mesh.points)).with_arrays(
            cell_data={"load_step": near.astype(np.int32)}
        )
        found = full(result, ("load_step=1",), plane="strain")
        assert found.growths
        assert all(g.trust.next_cell == -1 for g in found.growths)
        assert "; none is found away from it" in summary_text(found)
        assert all(g["next"] is None for g in summary_data(found)["suspected_singular"])
