"""What values recovered at nodes and on free surfaces make of the imposed fields: informative."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.kinematics._symmetric import Floats
from unturn.model import Model
from unturn.nodal import nodal_fields
from unturn.numbering import element_numbers, node_numbers
from unturn.regions import Region
from unturn.result import Result
from unturn.surface import Faces, surface_result
from unturn.verdicts.finding import Place
from unturn.verdicts.imposed import ImposedField

FIELDS = ("uniform_strain", "quadratic")
"""The imposed fields that are looked at away from the middle of cells."""


@dataclass(frozen=True)
class Elsewhere:
    """One number found away from the middle of cells."""

    name: str
    title: str
    value: float
    unit: str
    message: str
    place: Place
    details: Mapping[str, Any] = field(default_factory=dict)


def at_nodes(
    model: Model,
    imposed: ImposedField,
    regions: Sequence[Region],
    origin: Floats,
    change: Floats,
    result: Result,
    threads: int | None,
) -> list[Elsewhere]:
    """Return the errors of the strain recovered at nodes, one a region.

    Parameters
    ----------
    model
        With the imposed displacement; solids or plane only.
    imposed
        The field.
    regions
        Nothing is averaged across their borders.
    origin
        Middle of the mesh.
    change
        `(n_cells,)` change of the imposed strain over each cell, for a field that changes.
    result
        The result as read, for the solver's numbers.
    threads
        Number of threads.
    """
    fields = nodal_fields(model, ["strain"], regions, threads=threads)
    exact = imposed.expected(model.points - origin, None)["strain"]
    error = np.abs(fields.arrays["strain"] - exact).max(axis=1)
    by_node = _largest_at_nodes(model, change)
    numbers = node_numbers(result)
    found = []
    for region in regions:
        nodes = _nodes_of(model, region)
        nodes = nodes[np.isfinite(error[nodes])]
        if not len(nodes):
            continue
        values, unit, message = _scaled(error[nodes], by_node[nodes], imposed)
        node = int(nodes[np.argmax(values)])
        x = model.points[node]
        place = Place(point=node, at=(float(x[0]), float(x[1]), float(x[2])))
        if numbers is not None:
            place["node"] = int(numbers.numbers[node])
        name = f"nodes.{imposed.name}.{region.name}"
        title = (
            f"{imposed.name.replace('_', ' ')}, recovered at nodes of {region.name}: largest error of strain"
        )
        found.append(Elsewhere(name, title, float(values.max()), unit, message, place, {"nodes": len(nodes)}))
    return found


def on_surface(
    faces: Faces, imposed: ImposedField, origin: Floats, change: Floats, result: Result, threads: int | None
) -> list[Elsewhere]:
    """Return the largest error of the strain on free faces of solids, from the faces' own nodes."""
    found = surface_result(faces.model, faces, ["strain"], threads=threads).result
    middles = _face_middles(faces)
    parent = found.cell_data["parent_cell"].astype(np.int64)
    normal = found.cell_data["surface_normal"]
    along = np.eye(3) - normal[:, :, None] * normal[:, None]
    exact = imposed.expected(middles - origin, along)["strain"]
    error = np.abs(found.cell_data["surface_strain"] - exact).max(axis=1)
    usable = np.flatnonzero(np.isfinite(error))
    if not len(usable):
        return []
    values, unit, message = _scaled(error[usable], change[parent[usable]], imposed)
    face = int(usable[np.argmax(values)])
    x = middles[face]
    place = Place(cell=int(parent[face]), at=(float(x[0]), float(x[1]), float(x[2])))
    numbers = element_numbers(result)
    if numbers is not None:
        place["element"] = int(numbers.numbers[parent[face]])
    title = f"{imposed.name.replace('_', ' ')}, on free faces: largest error of the strain in the face"
    details = {"faces": len(usable), "face": int(found.cell_data["parent_face"][face])}
    return [Elsewhere(f"surface.{imposed.name}", title, float(values.max()), unit, message, place, details)]


def _scaled(error: Floats, change: Floats, imposed: ImposedField) -> tuple[Floats, str, str]:
    """Return errors in microstrain, or as percent of the change of strain over a cell."""
    if imposed.curvature is None:
        return 1e6 * error, "microstrain", "informative"
    with np.errstate(divide="ignore", invalid="ignore"):
        share = np.nan_to_num(100.0 * error / change, nan=0.0, posinf=0.0)
    return share, "percent", "informative: percent of the change over a cell"


def _nodes_of(model: Model, region: Region) -> NDArray[np.int64]:
    inside = np.zeros(model.result.n_cells, dtype=bool)
    inside[region.cells] = True
    used = np.zeros(model.result.n_points, dtype=bool)
    for block in model.blocks:
        used[block.connectivity[inside[block.index]]] = block.row is not None
    return np.flatnonzero(used)


def _largest_at_nodes(model: Model, change: Floats) -> Floats:
    largest = np.zeros(model.result.n_points)
    for block in model.blocks:
        if block.row is not None:
            values = np.nan_to_num(change[block.index])
            np.maximum.at(largest, block.connectivity, values[:, None])
    return largest


def _face_middles(faces: Faces) -> Floats:
    """Return the centroids `(n_faces, 3)` by the faces' own shape functions."""
    parts = []
    for block in faces.blocks:
        functions = block.row.shape_functions(block.row.centroid[None])[0]
        parts.append(np.einsum("a,nai->ni", functions, faces.model.points[block.connectivity]))
    return np.concatenate(parts)
