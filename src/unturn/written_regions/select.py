"""Which cells of a step belong to a region: one function for each thing a region may be made of."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.errors import close_matches
from unturn.kinematics._symmetric import Floats
from unturn.model import SKINS, Model
from unturn.result import Result, used_points

Mask = NDArray[np.bool_]


class NoRegion(Exception):
    """A region cannot be found in a result; the text says why."""


@dataclass(frozen=True, eq=False)
class Cells:
    """What regions are chosen from: the cells of one step.

    Parameters
    ----------
    model
        Of the step.
    centroid
        `(n_cells, 3)`.
    dimension
        `(n_cells,)` of each cell; 0 where it is not computed.
    """

    model: Model
    centroid: Floats
    dimension: NDArray[np.int8]

    @cached_property
    def computed(self) -> Mask:
        """Which cells are computed."""
        return self.dimension > 0

    @cached_property
    def xyz(self) -> Floats:
        """Coordinates of the centroids, `(3, n_cells)`."""
        return np.ascontiguousarray(self.centroid.T)

    @cached_property
    def nowhere(self) -> Mask:
        """Which cells have no place: they have no value either, and must not be passed over."""
        return ~np.asarray(np.isfinite(self.xyz.sum(axis=0)))

    def away(self, point: Sequence[float]) -> Floats:
        """Return the distance of every centroid from a point."""
        squares: Floats = sum((x - p) ** 2 for x, p in zip(self.xyz, point))
        return np.sqrt(squares)

    @cached_property
    def missed(self) -> Mask:
        """Which cells are not computed and should be: all but skins, edges and points."""
        mask = np.zeros(len(self.dimension), dtype=bool)
        for reason, cells in self.model.left_out.items():
            if reason != SKINS and not reason.startswith("vertex"):
                mask[cells] = True
        return mask

    @property
    def result(self) -> Result:
        """The step."""
        return self.model.result


@dataclass(frozen=True, eq=False)
class Found:
    """The cells of a region.

    Attributes
    ----------
    inside
        `(n_cells,)` those that count.
    left_out
        Those that it names and leaves out.
    not_computed
        Those that belong to it and are not computed.
    lower
        Those that belong to it and are of a lower dimension than others.
    """

    inside: Mask
    left_out: Mask
    not_computed: Mask
    lower: Mask


Pick = Callable[[str], Found]


def group(cells: Cells, name: str, pick: Pick) -> Mask:
    groups = cells.result.groups
    if name not in groups:
        raise NoRegion(
            f"the file has no cell group {name!r}.{close_matches(name, groups)} Groups: {', '.join(groups) or 'none'}"
        )
    mask = np.zeros(cells.result.n_cells, dtype=bool)
    mask[groups[name]] = True
    return mask


def tag(cells: Cells, text: str, pick: Pick) -> Mask:
    array, value = text.rsplit("=", 1)
    return np.asarray(_cell_numbers(cells.result, array) == float(value))


def _cell_numbers(result: Result, name: str) -> Floats:
    if name not in result.cell_data:
        known = result.cell_data
        raise NoRegion(
            f"the file has no cell array {name!r}.{close_matches(name, known)} Cell arrays: {', '.join(known) or 'none'}"
        )
    return _numbers(result.cell_data[name], result.n_cells, name)


def _numbers(values: NDArray[Any], n: int, name: str) -> Floats:
    if values.size != n or values.dtype.kind not in "iufb":
        raise NoRegion(f"the array {name!r} is not one number each")
    return values.reshape(-1).astype(np.float64)


def box(cells: Cells, shape: Mapping[str, Any], pick: Pick) -> Mask:
    inside: Mask = np.ones(len(cells.dimension), dtype=bool)
    for x, low, high in zip(cells.xyz, shape["from"], shape["to"]):
        inside &= (x >= low) & (x <= high)
    return inside | cells.nowhere


def cylinder(cells: Cells, shape: Mapping[str, Any], pick: Pick) -> Mask:
    start, end = np.array(shape["from"]), np.array(shape["to"])
    length = float(np.linalg.norm(end - start))
    axis = (end - start) / length
    away = cells.xyz - start[:, None]
    along = axis @ away
    across = np.linalg.norm(away - axis[:, None] * along, axis=0)
    inside: Mask = (along >= 0) & (along <= length) & (across <= shape["radius"])
    return inside | cells.nowhere


def sphere(cells: Cells, shape: Mapping[str, Any], pick: Pick) -> Mask:
    inside: Mask = np.asarray(cells.away(shape["center"]) <= shape["radius"])
    return inside | cells.nowhere


def near(cells: Cells, asked: Mapping[str, Any], pick: Pick) -> Mask:
    distance = cells.away(asked["point"])
    usable = np.flatnonzero(cells.computed & (distance <= asked["within"]))
    chosen = usable[np.argsort(distance[usable], kind="stable")[: asked["cells"]]]
    mask: Mask = np.zeros(len(distance), dtype=bool)
    mask[chosen] = True
    return mask | cells.nowhere


def where(cells: Cells, asked: Mapping[str, Any], pick: Pick) -> Mask:
    name, result = asked["array"], cells.result
    on_cells, on_points = name in result.cell_data, name in result.point_data
    if asked["on"] is None and on_cells and on_points:
        raise NoRegion(f'both cells and nodes have an array {name!r}: say which with on = "cells" or "nodes"')
    if on_cells and asked["on"] != "nodes":
        return _compares(_cell_numbers(result, name), asked, cells.computed)
    if not on_points or asked["on"] == "cells":
        known = [*result.cell_data, *result.point_data]
        raise NoRegion(
            f"the file has no such array {name!r}.{close_matches(name, known)} Arrays: {', '.join(known)}"
        )
    used = used_points([b.cells for b in cells.model.blocks], result.n_points)
    holds = _compares(_numbers(result.point_data[name], result.n_points, name), asked, used)
    mask = np.zeros(result.n_cells, dtype=bool)
    for block in result.blocks:
        mask[block.index] = holds[block.connectivity].all(axis=1)
    return mask


def _compares(values: Floats, asked: Mapping[str, Any], known: Mask) -> Mask:
    """Return where values are as asked; they must be finite where it matters."""
    holds: Mask = np.asarray(np.isfinite(values), dtype=bool)
    n = int((known & ~holds).sum())
    if n:
        raise NoRegion(
            f"{n} values of the array {asked['array']!r} are not finite: what belongs to it is not known"
        )
    if asked["above"] is not None:
        holds = holds & (values > asked["above"])
    if asked["below"] is not None:
        holds = holds & (values < asked["below"])
    if asked["equals"] is not None:
        holds = holds & np.isin(values, asked["equals"])
    return holds


def all_of(cells: Cells, names: tuple[str, ...], pick: Pick) -> Mask:
    mask: Mask = np.logical_and.reduce([pick(n).inside for n in names])
    return mask


def any_of(cells: Cells, names: tuple[str, ...], pick: Pick) -> Mask:
    mask: Mask = np.logical_or.reduce([pick(n).inside for n in names])
    return mask


def none_of(cells: Cells, names: tuple[str, ...], pick: Pick) -> Mask:
    return ~any_of(cells, names, pick)
