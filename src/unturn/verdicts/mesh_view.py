"""The mesh of a result as a comparison needs it: weights, places, regions, numbers; no displacement."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from unturn.fields import compute_fields
from unturn.kinematics._symmetric import Floats
from unturn.model import Model, PlaneOptions, build_model
from unturn.numbering import Numbering, element_numbers, node_numbers
from unturn.precision import storage_resolution
from unturn.regions import Region, find_regions, named_regions
from unturn.result import Result, used_points
from unturn.verdicts.finding import Place

Ints = NDArray[np.int64]
_STILL = "no displacement"


@dataclass(frozen=True, eq=False)
class MeshView:
    """A mesh, and what its cells and points weigh.

    Parameters
    ----------
    result
        As read.
    model
        Of the mesh alone, at its reference coordinates; skins count as cells of their own.
    volume, centroid
        `(n_cells,)`, `(n_cells, 3)`: reference volume, area or length, zero where a cell has none; middle of the cell.
    dimension
        `(n_cells,)`; 0 for cells that no element table knows.
    counted
        `(n_cells,)`: neither ghost nor duplicate nor hidden.
    """

    result: Result
    model: Model
    volume: Floats
    centroid: Floats
    dimension: NDArray[np.int8]
    counted: NDArray[np.bool_]

    @property
    def points(self) -> Floats:
        """`(n_points, 3)` reference coordinates."""
        return self.model.points

    @cached_property
    def counted_points(self) -> NDArray[np.bool_]:
        """`(n_points,)`: belonging to a cell that counts."""
        mask = np.zeros(self.result.n_points, dtype=bool)
        for block in self.result.blocks:
            mask[block.connectivity[self.counted[block.index]]] = True
        return mask

    @cached_property
    def loose_points(self) -> Ints:
        """Points of no cell at all."""
        return np.flatnonzero(~used_points(self.result.blocks, self.result.n_points))

    @cached_property
    def point_dimension(self) -> NDArray[np.int8]:
        """`(n_points,)` highest dimension of the cells of each point; 0 without any that has an element."""
        found = np.zeros(self.result.n_points, dtype=np.int8)
        for block in self.result.blocks:
            highest = np.repeat(self.dimension[block.index], block.connectivity.shape[1])
            np.maximum.at(found, block.connectivity.reshape(-1), highest)
        return found

    @property
    def size(self) -> float:
        """The largest extent of the points that count."""
        used = self.points[self.counted_points]
        used = used[np.isfinite(used).all(axis=1)]
        return float(np.ptp(used, axis=0).max()) if len(used) else 0.0

    def of(self, result: Result, points: Floats) -> MeshView | None:
        """Return this mesh with the arrays of another state; None where that has another mesh."""
        if not (np.array_equal(self.points, points, equal_nan=True) and same_blocks(self.result, result)):
            return None
        model = replace(self.model, result=replace(self.model.result, cell_data=result.cell_data))
        return replace(self, result=result, model=model, counted=_counted(result))

    def regions(self, names: Sequence[str] = ()) -> list[Region]:
        """Return the regions asked for, or those of the mesh.

        Raises
        ------
        UsageError
            No such region.
        """
        return (
            named_regions(self.model, names, self.counted)
            if names
            else find_regions(self.model, self.counted)
        )

    def points_of(self, cells: Ints) -> Ints:
        """Return the points of some cells."""
        inside = np.zeros(self.result.n_cells, dtype=bool)
        inside[cells] = True
        mask = np.zeros(self.result.n_points, dtype=bool)
        for block in self.result.blocks:
            mask[block.connectivity[inside[block.index]]] = True
        return np.flatnonzero(mask)

    def point_weights(self, cells: Ints) -> Floats:
        """Return `(4, n_points)` by dimension: each node's share of the volume of some cells, equal within a cell."""
        weight = np.zeros((4, self.result.n_points))
        inside = np.zeros(self.result.n_cells, dtype=bool)
        inside[cells] = True
        for block in self.result.blocks:
            mine = inside[block.index]
            nodes, index = block.connectivity[mine], block.index[mine]
            share = np.repeat(self.weight[index] / max(nodes.shape[1], 1), nodes.shape[1])
            if len(index):
                weight[self.dimension[index[0]]] += np.bincount(
                    nodes.reshape(-1), share, self.result.n_points
                )
        return weight

    @cached_property
    def weight(self) -> Floats:
        """`(n_cells,)` volume; cells of no element count by their number."""
        return np.where(self.dimension > 0, self.volume, 1.0)

    @cached_property
    def _numbers(self) -> tuple[Numbering | None, Numbering | None]:
        return element_numbers(self.result), node_numbers(self.result)

    @cached_property
    def blur(self) -> Floats:
        """`(n_cells,)` share of a cell's size by which the stored coordinates leave it open."""
        stored = storage_resolution(self.result.points)
        far = float(np.nanmax(np.abs(self.points), initial=0.0))
        size = self.volume ** (1.0 / np.maximum(self.dimension, 1))
        with np.errstate(divide="ignore", invalid="ignore"):
            blur = 32.0 * (stored.relative * far + stored.absolute) / size
        return np.where(np.isfinite(blur), blur, 1.0)

    def place(self, association: str, position: int) -> Place:
        """Return where a cell or a point is."""
        elements, nodes = self._numbers
        at = self.centroid[position] if association == "cell" else self.points[position]
        found = Place(at=(float(at[0]), float(at[1]), float(at[2])))
        if association == "cell":
            found["cell"] = position
            if elements is not None:
                found["element"] = int(elements.numbers[position])
            return found
        found["point"] = position
        if nodes is not None:
            found["node"] = int(nodes.numbers[position])
        return found


def view(
    result: Result,
    points: Floats | None = None,
    plane: PlaneOptions | None = None,
    threads: int | None = None,
) -> MeshView:
    """Return the mesh of a result.

    Parameters
    ----------
    result
        The result; it needs no displacement.
    points
        `(n, 3)` reference coordinates, where those of the file are not.
    plane
        What a plane mesh assumes, for the weights of an axisymmetric one.
    threads
        None: all processors.

    Raises
    ------
    InputError
        No element that is known, or a node order that cannot be right.
    """
    name = _STILL
    while name in result.point_data:
        name += "_"
    at = result.points if points is None else points
    still = replace(
        result,
        points=at,
        point_data={name: np.zeros((result.n_points, 3))},
        cell_data={},
        carrier=None,
    )
    model = build_model(still, displacement=name, plane=plane, skin=True)
    fields = compute_fields(model, ["element_volume"], threads=threads, diagnose=True)
    assert fields.diagnostics is not None
    volume, centroid = np.nan_to_num(fields.diagnostics.volume), fields.diagnostics.centroid
    dimension = np.zeros(result.n_cells, dtype=np.int8)
    for block in model.blocks:
        dimension[block.cells.index] = 0 if block.row is None else block.row.dim
        unknown = ~np.isfinite(centroid[block.cells.index]).all(axis=1)
        which = block.cells.index[unknown]
        if len(which) and block.cells.connectivity.shape[1]:
            centroid[which] = model.points[block.cells.connectivity[unknown]].mean(axis=1)
    tagged = replace(model, result=replace(still, cell_data=result.cell_data))
    return MeshView(result, tagged, volume, centroid, dimension, _counted(result))


def same_blocks(a: Result, b: Result) -> bool:
    """Return whether two results have the same cells in the same order, with the same nodes."""
    return len(a.blocks) == len(b.blocks) and all(
        x.cell_type == y.cell_type
        and np.array_equal(x.connectivity, y.connectivity)
        and np.array_equal(x.index, y.index)
        for x, y in zip(a.blocks, b.blocks)
    )


def _counted(result: Result) -> NDArray[np.bool_]:
    counted = np.ones(result.n_cells, dtype=bool)
    for cells in result.left_out.values():
        counted[cells] = False
    return counted
