"""What a result file holds and what looks wrong in it; nothing is changed."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from pathlib import PurePath
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from unturn._version import __version__
from unturn.displacement import displacement_candidates
from unturn.elements import not_computable
from unturn.errors import InputError, UnturnError
from unturn.fields import CellFields, compute_fields
from unturn.jacobian import negative_at_nodes
from unturn.midside import misplaced_mid_nodes
from unturn.model import Model, PlaneOptions, build_model
from unturn.numbering import element_numbers, node_numbers
from unturn.precision import MEANT_DISPLACEMENT, storage_resolution
from unturn.regions import find_regions, merge_coincident
from unturn.result import Array, Result, used_points
from unturn.statistics import statistics

SCHEMA = "unturn.survey/1"


def survey_result(
    result: Result,
    *,
    displacement: str | None = None,
    displacement_scale: float = 1.0,
    coordinates: Literal["reference", "deformed"] = "reference",
    threads: int | None = None,
) -> dict[str, Any]:
    """Return what a result holds, as plain data of schema ``unturn.survey/1``.

    Parameters
    ----------
    result
        The result.
    displacement, displacement_scale, coordinates
        As in `unturn.strain`.
    threads
        None: all processors.
    """
    found: dict[str, Any] = {
        "schema": SCHEMA,
        "tool": {"name": "unturn", "version": __version__},
        "file": result.path,
        "format": result.format_name,
        "points": result.n_points,
        "cells": [_cell_type(b.cell_type, b.connectivity, len(b)) for b in result.blocks],
        "steps": None
        if result.steps is None
        else {"read": result.steps.current, "values": list(result.steps.values)},
        "arrays": [
            *(_array(n, "point", a, result) for n, a in result.point_data.items()),
            *(_array(n, "cell", a, result) for n, a in result.cell_data.items()),
            *(_array(n, "field", a, result) for n, a in result.field_data.items()),
        ],
        "groups": {name: len(cells) for name, cells in result.groups.items()},
        "numbering": {
            "element": getattr(element_numbers(result), "name", None),
            "node": getattr(node_numbers(result), "name", None),
        },
        "size": _size(result),
        "notes": list(result.notes),
        "problems": [],
    }
    found["displacement"] = _displacement(result)
    model = _model(result, found, displacement, displacement_scale, coordinates)
    if model is not None:
        _mesh(model, found, threads)
    found["problems"] += _unreferenced(result)
    return found


def _cell_type(name: str, connectivity: NDArray[np.int64], count: int) -> dict[str, Any]:
    from unturn.elements import element

    n_nodes = connectivity.shape[1]
    reason = not_computable(name, n_nodes)
    row = None
    if reason is None:
        try:
            row = element(name, n_nodes)
        except InputError as error:
            reason = str(error)
    return {
        "type": name,
        "nodes": n_nodes,
        "count": count,
        "dimension": None if row is None else row.dim,
        "not_computed_because": reason,
    }


def _array(
    name: str, association: Literal["point", "cell", "field"], a: Array, result: Result
) -> dict[str, Any]:
    entry: dict[str, Any] = {
        "name": name,
        "association": association,
        "type": str(a.dtype),
        "components": 1 if a.ndim == 1 else int(np.prod(a.shape[1:])),
        "component_names": list(result.component_names.get((association, name), ())),
    }
    if a.dtype.kind in "fiu" and a.size:
        flat = a.reshape(-1)
        finite = flat[np.isfinite(flat)] if a.dtype.kind == "f" else flat
        entry["minimum"] = float(finite.min()) if len(finite) else None
        entry["maximum"] = float(finite.max()) if len(finite) else None
        entry["not_finite"] = int(len(flat) - len(finite))
    return entry


def _size(result: Result) -> dict[str, Any]:
    points = np.asarray(result.points, dtype=np.float64)[used_points(result.blocks, result.n_points)]
    points = points[np.isfinite(points).all(axis=1)]
    if not len(points):
        return {"low": None, "high": None, "extent": None}
    low, high = points.min(axis=0), points.max(axis=0)
    return {"low": low.tolist(), "high": high.tolist(), "extent": (high - low).tolist()}


def _displacement(result: Result) -> dict[str, Any]:
    named, others = displacement_candidates(result)
    return {"candidates": named or others, "used": None, "why": None}


def _model(
    result: Result,
    found: dict[str, Any],
    displacement: str | None,
    scale: float,
    coordinates: Literal["reference", "deformed"],
) -> Model | None:
    try:
        model = build_model(
            result,
            displacement=displacement,
            displacement_scale=scale,
            coordinates=coordinates,
            plane=PlaneOptions(),
        )
    except UnturnError as error:
        if displacement is not None:
            raise
        text = str(error)
        found["problems"].append(text.removeprefix(f"{result.path}: "))
        return None
    found["displacement"].update(used=model.displacement.name, why=model.displacement.why)
    return model


def _mesh(model: Model, found: dict[str, Any], threads: int | None) -> None:
    fields = compute_fields(
        model, ["element_volume", "jacobian_min_over_max"], threads=threads, diagnose=True
    )
    d = fields.diagnostics
    assert d is not None
    judged = d.dimension == model.dimension
    cells = np.flatnonzero(judged)
    volume = statistics(fields.arrays["element_volume"], d.volume, cells, ())
    ratio = statistics(fields.arrays["jacobian_min_over_max"], d.volume, cells, ())
    numbers = element_numbers(model.result)

    def place(cell: int) -> dict[str, Any]:
        element = None if numbers is None or cell < 0 else int(numbers.numbers[cell])
        return {"cell": cell if cell >= 0 else None, "element": element}

    found["mesh"] = {
        "kind": next(b.kind for b in model.blocks if b.row is not None and b.row.dim == model.dimension),
        "plane_normal": None if model.plane is None else "xyz"[model.plane.normal],
        "dimension": model.dimension,
        "total_measure": float(np.nansum(d.volume[cells])),
        "smallest_element": {"measure": volume.minimum, **place(volume.at_minimum)},
        "largest_element": {"measure": volume.maximum, **place(volume.at_maximum)},
        "worst_jacobian": {"min_over_max": ratio.minimum, **place(ratio.at_minimum)},
        "mirrored": fields.mirrored,
    }
    found["left_out"] = {reason: len(c) for reason, c in fields.left_out.items()}
    found["regions"] = [
        {"name": r.name, "origin": r.origin, "cells": len(r.cells)} for r in find_regions(model, judged)
    ]
    noise = statistics(d.noise, d.volume, cells, (50.0, 99.0))
    size = statistics(d.stretch, d.volume, cells, (50.0, 99.0))
    found["precision"] = {
        "points": storage_resolution(model.result.points).kind,
        "displacement": " ".join(
            sorted({storage_resolution(a, MEANT_DISPLACEMENT).kind for a in model.displacement.stored})
        ),
        "noise_floor": noise.percentiles[99.0],
        "strain_size": size.percentiles[99.0],
        "largest_rotation_degrees": math.degrees(float(np.nanmax(d.angle, initial=0.0))),
    }
    found["problems"] += _problems(model, fields, found)


def _problems(model: Model, fields: CellFields, found: Mapping[str, Any]) -> list[str]:
    said: list[str] = []
    hints = {
        "tangled": "their Jacobian changes sign: moved or wrongly ordered nodes; their values are NaN",
        "no volume": "repeated or coinciding nodes; their values are NaN",
        "coordinates not finite": "NaN or Inf at a node; their values are NaN: write the mesh again",
        "displacement not finite": "NaN or Inf at a node; their values are NaN: look for an unconverged step or a part "
        "that was not solved",
    }
    for reason, hint in hints.items():
        cells = fields.left_out.get(reason)
        if cells is not None:
            said.append(f"{len(cells)} cells {reason} (first: cell {int(cells[0])}): {hint}")
    for block in model.blocks:
        if block.row is None or not len(block.active):
            continue
        check = misplaced_mid_nodes(model.points, block.connectivity, block.row)
        if check.count:
            first = int(block.index[check.first])
            said.append(
                f"{check.count} {block.cells.cell_type} cells have a mid-side node farther than a quarter of the edge "
                f"from its middle (first: cell {first}): strongly curved, or a wrong node order"
            )
        bad = negative_at_nodes(model, block)
        if len(bad):
            said.append(
                f"{len(bad)} {block.cells.cell_type} cells have a negative Jacobian at a node though not inside "
                f"(first: cell {int(bad[0])}): their strain is computed, but they are strongly distorted"
            )
    assert fields.diagnostics is not None
    inside_out = np.flatnonzero(fields.diagnostics.det_f <= 0)
    if len(inside_out):
        said.append(
            f"{len(inside_out)} cells are turned inside out by the displacement (det F <= 0; first: cell "
            f"{int(inside_out[0])}): a wrong unit or sign, coordinates that are already deformed (--coordinates "
            "deformed), or a failed solve"
        )
    return said + _magnitudes(model, found)


def _magnitudes(model: Model, found: Mapping[str, Any]) -> list[str]:
    said = []
    precision = found["precision"]
    size, noise = precision["strain_size"], precision["noise_floor"]
    if size <= noise:
        said.append("there is no strain above the stored precision: a rigid motion, or a step without load")
    elif size > 0.5:
        said.append(
            f"99 % of the volume has strain below {size:.3g}, which is rubber or a wrong unit: compare the units of mesh "
            "and displacement, and use --displacement-scale"
        )
    elif size < 1e-8:
        said.append(
            f"strain is only {size:.2g}: compare the units of mesh and displacement, --displacement-scale"
        )
    if noise < size < 20 * noise:
        said.append(
            f"strain ({size:.2g}) is not well above the noise floor of the stored numbers ({noise:.2g}): "
            "write the result with more digits"
        )
    extent = max(found["size"]["extent"] or [0.0])
    moved = float(np.nanmax(np.abs(model.displacement.values), initial=0.0))
    if extent and moved > extent:
        said.append(
            f"the largest displacement ({moved:.3g}) exceeds the size of the model ({extent:.3g}): a large rigid motion, "
            "or a wrong unit"
        )
    label, tolerance = merge_coincident(model.points[used_points(model.result.blocks, model.result.n_points)])
    double = int((label != np.arange(len(label))).sum())
    if double:
        said.append(
            f"{double} points lie on another point (within {tolerance:.2g}): nodes repeated per element or parts that "
            "touch; gradients are right"
        )
    return said


def _unreferenced(result: Result) -> list[str]:
    used = used_points(result.blocks, result.n_points)
    free = np.flatnonzero(~used)
    return [f"{len(free)} points belong to no cell (first: point {int(free[0])})"] if len(free) else []


def survey_text(found: Mapping[str, Any]) -> str:
    """Return the survey for people."""
    lines = [f"{PurePath(found['file']).name or '(in memory)'}   {found['format'] or 'in memory'}"]
    if found["steps"]:
        values = found["steps"]["values"]
        shown = ", ".join(f"{v:g}" for v in values[:8]) + (" ..." if len(values) > 8 else "")
        lines.append(
            f"steps      {len(values)} (0 to {len(values) - 1}) at {shown}; read: {found['steps']['read']}"
        )
    lines.append(f"points     {found['points']}")
    for cell in found["cells"]:
        dim = f"{cell['dimension']}D" if cell["dimension"] else "--"
        why = f"   not computed: {cell['not_computed_because']}" if cell["not_computed_because"] else ""
        lines.append(f"cells      {cell['count']:>9}  {dim}  {cell['type']} ({cell['nodes']} nodes){why}")
    extent = found["size"]["extent"]
    if extent:
        lines.append("size       " + " x ".join(f"{x:.6g}" for x in extent) + "  (length unit of the file)")
    lines += _mesh_lines(found)
    lines += _array_lines(found)
    d = found["displacement"]
    if d["used"]:
        lines.append(f"displacement  '{d['used']}' ({d['why']})")
    else:
        lines.append(f"displacement  none chosen; candidates: {', '.join(d['candidates']) or 'none'}")
    for kind in ("element", "node"):
        if found["numbering"][kind]:
            lines.append(f"solver's {kind} numbers  '{found['numbering'][kind]}'")
    lines += [f"note       {note}" for note in found["notes"]]
    problems = found["problems"]
    lines.append("looks wrong   " + ("nothing" if not problems else f"{len(problems)}:"))
    lines += [f"  - {p}" for p in problems]
    return "\n".join(lines)


def _mesh_lines(found: Mapping[str, Any]) -> list[str]:
    mesh = found.get("mesh")
    if mesh is None:
        return []
    unit = {1: "length", 2: "area", 3: "volume"}[mesh["dimension"]]
    small, worst = mesh["smallest_element"], mesh["worst_jacobian"]
    kind = mesh["kind"] + (f", normal {mesh['plane_normal']}" if mesh["plane_normal"] else "")
    lines = [
        f"mesh       {kind}; {unit} {mesh['total_measure']:.6g}; smallest element {small['measure']:.3g} "
        f"({_cell(small)}); Jacobian min/max {worst['min_over_max']:.3g} ({_cell(worst)})"
    ]
    if found["left_out"]:
        lines.append("left out   " + ", ".join(f"{n} {reason}" for reason, n in found["left_out"].items()))
    regions = found["regions"]
    shown = ", ".join(f"{r['name']} ({r['cells']} cells)" for r in regions[:8]) + (
        " ..." if len(regions) > 8 else ""
    )
    lines.append(f"regions    {len(regions)} by {regions[0]['origin'] if regions else '-'}: {shown}")
    p = found["precision"]
    lines.append(
        f"precision  points {p['points']}, displacement {p['displacement']}: strain +-{p['noise_floor'] * 1e6:.2g} "
        f"microstrain; 99 % of the volume is below {p['strain_size'] * 1e6:.4g} microstrain, largest rotation "
        f"{p['largest_rotation_degrees']:.3g} degrees"
    )
    return lines


def _cell(entry: Mapping[str, Any]) -> str:
    if entry["cell"] is None:
        return "none"
    return f"cell {entry['cell']}" + (f", element {entry['element']}" if entry["element"] is not None else "")


def _array_lines(found: Mapping[str, Any]) -> list[str]:
    rows = [["arrays", "name", "type", "n", "smallest", "largest", ""]]
    for a in found["arrays"]:
        low, high = a.get("minimum"), a.get("maximum")
        rows.append(
            [
                a["association"],
                a["name"],
                a["type"],
                str(a["components"]),
                "-" if low is None else f"{low:.6g}",
                "-" if high is None else f"{high:.6g}",
                f"{a['not_finite']} not finite" if a.get("not_finite") else "",
            ]
        )
    widths = [max(len(r[k]) for r in rows) for k in range(len(rows[0]))]
    pad: list[Callable[[str, int], str]] = [
        str.ljust,
        str.ljust,
        str.ljust,
        str.rjust,
        str.rjust,
        str.rjust,
        str.ljust,
    ]
    return ["  ".join(p(c, w) for p, c, w in zip(pad, row, widths)).rstrip() for row in rows]
