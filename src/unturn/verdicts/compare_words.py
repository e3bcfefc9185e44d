"""What a comparison found, as findings: states, and sentences for people."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import asdict
from decimal import ROUND_FLOOR
from typing import Any

from unturn.kinematics._finite import BASES
from unturn.regions import Region
from unturn.result import Result
from unturn.verdicts.differences import ArrayDifference, Extreme, Pair, RegionDifference
from unturn.verdicts.finding import Finding, Place, State
from unturn.verdicts.mesh_match import MeshMatch
from unturn.verdicts.mesh_view import MeshView
from unturn.verdicts.sampling import BESIDE, Sampled
from unturn.verdicts.wording import number


def mesh_finding(
    group: str, found: MeshMatch, mesh: MeshView, reference: MeshView, must_be_the_same: bool
) -> Finding:
    """Return whether the mesh is that of the reference; another one is a warning, unless it must be the same."""
    state: State = "met"
    message = ""
    if found.kind == "renumbered":
        message = "renumbered: cells and points are matched by their places"
    elif found.kind == "different":
        state = "exceeded" if must_be_the_same else "warning"
        message = f"another mesh: {found.reason}. Values are taken at the places of the reference"
    if found.apart > 0:
        message += f"{'; ' if message else ''}points up to {number(found.apart)} apart count as one"
    details = {
        "kind": found.kind,
        "points": mesh.result.n_points,
        "cells": mesh.result.n_cells,
        "reference_points": reference.result.n_points,
        "reference_cells": reference.result.n_cells,
    }
    return Finding("mesh", group, "mesh of the result and of the reference", state, message, details=details)


def coverage_finding(
    group: str, which: str, view: MeshView, cells: Sampled, limit: float, points: Sampled | None = None
) -> Finding:
    """Return how much of one of two different meshes the other one does not have; undecided above a share."""
    counted = view.counted & (view.dimension > 0)
    worst, share = -1, 0.0
    for d in set(view.dimension[counted].tolist()):
        mine = counted & (view.dimension == d)
        gone = mine & cells.outside
        total = float(view.volume[mine].sum())
        if gone.any():
            share = max(share, float(view.volume[gone].sum()) / total if total > 0 else 1.0)
            worst = int(gone.argmax()) if worst < 0 else worst
    outside, beside = int((counted & cells.outside).sum()), int((counted & cells.beside).sum())
    sentences = []
    if outside:
        sentences.append(f"{outside} of {int(counted.sum())} cells of the {which} have their middle outside")
    details: dict[str, Any] = {"cells_outside": outside, "cells_beside": beside}
    if points is not None:
        used = view.counted_points
        gone, near = int((used & points.outside).sum()), int((used & points.beside).sum())
        details |= {"points_outside": gone, "points_beside": near}
        if gone:
            sentences.append(f"{gone} of {int(used.sum())} points lie outside and are not compared")
        if near:
            sentences.append(
                f"{near} lie up to {100 * BESIDE:g} % of a cell outside and are taken from the cell beside"
            )
    state: State = "met" if 100.0 * share <= 100.0 * limit else "undecided"
    return Finding(
        f"{which} outside", group, f"share of the {which}'s volume outside of the other mesh", state, "; ".join(sentences),
        100.0 * share, 100.0 * limit, unit="percent", place=view.place("cell", worst) if worst >= 0 else Place(),
        details=details,
    )  # fmt: skip


def missing_findings(
    group: str, result: Result, reference: Result, wanted: Callable[[str], bool]
) -> list[Finding]:
    """Return arrays and cell groups that only one of the results has: lost ones are exceeded, new ones a warning."""
    found = []
    sides = (
        ("point", result.point_data, reference.point_data),
        ("cell", result.cell_data, reference.cell_data),
        ("field", result.field_data, reference.field_data),
        ("group", result.groups, reference.groups),
    )
    for where, ours, theirs in sides:
        kind = "cell group" if where == "group" else f"{where} array"
        for name in theirs:
            if name not in ours and wanted(name):
                message = f"the reference has the {kind} {name!r}, the result does not"
                other = _other_base(name, [n for n in ours if n not in theirs])
                message += f"; it has {other!r}: another base?" if other else ""
                found.append(Finding(f"missing {where} {name}", group, f"{kind} {name}", "exceeded", message))
        for name in ours:
            if name not in theirs and wanted(name):
                message = f"the result has the {kind} {name!r}, the reference does not: it is not compared"
                found.append(Finding(f"new {where} {name}", group, f"{kind} {name}", "warning", message))
    return found


def _other_base(name: str, others: list[str]) -> str:
    """Return an array that is the same measure of another base, or an empty text."""
    stem = _stem(name)
    return next((o for o in others if _stem(o) == stem), "")


def _stem(name: str) -> str:
    for base in BASES:
        if name.endswith(f"_{base}"):
            return name[: -len(base) - 1]
    return name


def groups_finding(group: str, changed: list[str]) -> Finding:
    """Return whether the cell groups hold the cells that they hold in the reference."""
    message = f"other cells in {', '.join(map(repr, changed))}" if changed else ""
    return Finding(
        "groups", group, "cell groups hold the same cells", "exceeded" if changed else "met", message
    )


def counted_finding(group: str, number_of: int, first: Place) -> Finding:
    """Return that some cells count in one of the results only."""
    message = (
        f"{number_of} cells count in one of the results, and are ghosts, duplicates or hidden in the other"
    )
    return Finding("cells that count", group, "the same cells count", "exceeded", message, place=first)


def regions_findings(group: str, ours: list[Region], theirs: list[Region]) -> list[Finding]:
    """Return regions of different meshes that only one of them has, as a warning."""
    names = {r.name for r in ours}, {r.name for r in theirs}
    lost, new = sorted(names[1] - names[0]), sorted(names[0] - names[1])
    sentences = [f"the result has no {', '.join(map(repr, lost))}"] if lost else []
    sentences += [f"the reference has no {', '.join(map(repr, new))}"] if new else []
    if not sentences:
        return []
    return [Finding("regions", group, "both meshes have the same regions", "warning", "; ".join(sentences))]


def difference_finding(
    group: str,
    difference: ArrayDifference,
    region: str,
    found: RegionDifference,
    base: MeshView,
    outside: float,
) -> Finding:
    """Return the finding on one array in one region."""
    pair, tolerance = difference.pair, difference.tolerance
    state, message = _state(difference, found, outside)
    where = f" in {region}" if region else ""
    worst = found.worst
    factor, unit = _unit(pair)
    value: float | None = factor * worst.value
    bound: float | None = _rounded_down(factor * found.allowed, factor * worst.value)
    if pair.exact:
        value, bound, unit = float(found.beyond), 0.0, f"{pair.where}s" if pair.where != "field" else "values"
    elif tolerance.share > 0:
        value, bound, unit = 100.0 * found.share, 100.0 * tolerance.share, "percent"
    if found.places == found.outside:
        value = bound = None
    place = worst.place if worst.place >= 0 else found.first_one_sided
    if found.one_sided and value is not None and bound is not None and value <= bound:
        value, bound, place = None, None, found.first_one_sided  # the number says nothing then
    component = difference.component(worst.component)
    title = f"largest difference against its tolerance{', in ' + component if component else ''}"
    if pair.exact:
        title = f"{unit} that differ"
    elif tolerance.share > 0:
        title = "share of the volume beyond tolerance"
    return Finding(
        f"{pair.label}{where}", group, title, state, message, value, bound, unit=unit,
        place=_place(pair.where, place, base), details=_details(difference, found, base),
    )  # fmt: skip


def _unit(pair: Pair) -> tuple[float, str]:
    """Return the factor to the unit in which an array is told, and that unit."""
    return (1e6, "microstrain") if pair.unit == "strain" else (1.0, pair.unit)


def _rounded_down(allowed: float, value: float) -> float:
    """Return what is allowed with five digits, never more than it is, nor on another side of the value."""
    rounded = float(number(allowed, ROUND_FLOOR))
    return rounded if (value <= rounded) is (value <= allowed) else allowed


def _place(where: str, position: int, base: MeshView) -> Place:
    return base.place(where, position) if position >= 0 and where != "field" else Place()


def _state(difference: ArrayDifference, found: RegionDifference, outside: float) -> tuple[State, str]:
    pair, tolerance = difference.pair, difference.tolerance
    things = {"point": "points", "cell": "cells", "field": "values"}[pair.where]
    compared = found.places - found.outside
    sentences = []
    if found.one_sided:
        sentences.append(f"NaN on one side only at {found.one_sided} of {compared} {things}")
    beyond = found.beyond - found.one_sided
    if beyond:
        share = "" if pair.where == "field" else f" ({number(100 * found.share)} % of the volume)"
        sentences.append(
            f"{beyond} of {compared} {things}{share} {'differ' if pair.exact else 'are beyond tolerance'}"
        )
    if not pair.exact and found.beyond:
        sentences.append(_sizes(difference, found))
    strict = pair.exact or not tolerance.share
    if found.one_sided or found.share > tolerance.share or (found.beyond and strict):
        if pair.exact:
            sentences.append(_first(difference, found))
        return "exceeded", "; ".join(sentences)
    if found.outside:
        sentences.append(f"{found.outside} of {found.places} {things} are outside of the result's mesh")
    if not compared or found.outside_share > outside:
        return "undecided", "; ".join(sentences)
    if compared == found.unknown:
        return "warning", "; ".join([*sentences, "NaN on both sides everywhere"])
    if found.unknown:
        sentences.append(f"NaN on both sides at {found.unknown} {things}")
    return "met", "; ".join(sentences)


def _sizes(difference: ArrayDifference, found: RegionDifference) -> str:
    parts = [f"largest {number(_unit(difference.pair)[0] * found.largest.value)}"]
    if found.size > 0:
        parts.append(f"{number(100 * found.largest.value / found.size, digits=3)} % of the largest value")
    if found.relative.place >= 0:
        parts.append(f"up to {number(100 * found.relative.value, digits=3)} % of the value at the place")
    parts.append(f"L2 {number(100 * found.l2_relative, digits=3)} %")
    return ", ".join(parts)


def _first(difference: ArrayDifference, found: RegionDifference) -> str:
    at = found.worst.place
    ours, theirs = (list(side[at]) for side in (difference.pair.ours, difference.pair.theirs))
    return f"first: {_plain(ours)} instead of {_plain(theirs)}"


def _plain(values: list[Any]) -> str:
    shown = [str(v) for v in values]
    return shown[0] if len(shown) == 1 else f"({', '.join(shown)})"


def _details(difference: ArrayDifference, found: RegionDifference, base: MeshView) -> dict[str, Any]:
    pair = difference.pair

    def extreme(e: Extreme) -> dict[str, Any]:
        place = _place(pair.where, e.place, base)
        at = place.get("at")
        return {
            "value": e.value,
            "component": difference.component(e.component),
            "cell": place.get("cell"),
            "point": place.get("point"),
            "at": None if at is None else list(at),
        }

    return {
        "array": pair.name,
        "tolerance": asdict(difference.tolerance),
        "places": found.places,
        "outside": found.outside,
        "outside_share": found.outside_share,
        "nan_on_both_sides": found.unknown,
        "nan_on_one_side": found.one_sided,
        "beyond": found.beyond,
        "share_beyond": found.share,
        "largest": extreme(found.largest),
        "relative": extreme(found.relative),
        "norm": found.norm,
        "l2": found.l2,
        "l2_relative": found.l2_relative,
        "largest_of_reference": found.size,
    }
