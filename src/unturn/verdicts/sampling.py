"""A result on another mesh, taken at the points and cells of a reference: by the shape functions of its own elements."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from unturn.kinematics._symmetric import Floats
from unturn.locate import INSIDE, BlockLocations, locate_all
from unturn.model import Model
from unturn.verdicts.mesh_view import MeshView

Ints = NDArray[np.int64]

_SEARCH = 1e-10  # share of a cell's size to which the search finds a place in it
BESIDE = 0.05
"""Share of a cell's size by which a point may lie outside of it and still be taken from it, where no cell holds it."""


@dataclass(frozen=True, eq=False)
class Sampled:
    """Where places of a reference lie in another mesh.

    Parameters
    ----------
    model
        Of the mesh, at its reference coordinates.
    places
        By block; every holder of a place, several on the border of cells.
    count
        `(n,)` holders of each place; 0: outside of the mesh.
    beside
        `(n,)`: outside of every cell, and taken from one beside.
    blur
        `(n_cells,)` share of a cell's size by which stored coordinates leave a place in it open.
    """

    model: Model
    places: tuple[BlockLocations, ...]
    count: Ints
    beside: NDArray[np.bool_]
    blur: Floats

    @property
    def outside(self) -> NDArray[np.bool_]:
        """`(n,)`: no cell holds it, and none is near."""
        nowhere: NDArray[np.bool_] = self.count == 0
        return nowhere

    def of_points(self, values: Floats) -> tuple[Floats, Floats]:
        """Return point values `(n, c)` at the places, and how far they are left open; NaN outside."""
        total, spread = np.zeros((2, len(self.count), values.shape[1]))
        for found in self.places:
            assert found.block.row is not None
            N = found.block.row.shape_functions(found.reference)
            nodal = values[found.connectivity]
            with np.errstate(invalid="ignore"):
                np.add.at(total, found.point, np.einsum("pa,pac->pc", N, nodal))
                blur = (_SEARCH + self.blur[found.cell])[:, None]
                np.maximum.at(spread, found.point, np.nan_to_num(blur * np.ptp(nodal, axis=1)))
        with np.errstate(invalid="ignore", divide="ignore"):
            return total / self.count[:, None], spread

    def of_cells(self, values: Floats) -> Floats:
        """Return cell values `(n, c)` at the places, the mean over the holders; NaN outside."""
        total = np.zeros((len(self.count), values.shape[1]))
        for found in self.places:
            with np.errstate(invalid="ignore"):
                np.add.at(total, found.point, values[found.cell])
        with np.errstate(invalid="ignore", divide="ignore"):
            return total / self.count[:, None]


def sample(
    mesh: MeshView,
    places: Floats,
    dimension: Sequence[int] | NDArray[np.int8],
    regions: list[tuple[Ints, Ints]],
) -> Sampled:
    """Return where places of a reference lie in another mesh.

    Parameters
    ----------
    mesh
        The mesh.
    places
        `(n, 3)`.
    dimension
        `(n,)` dimension of the cells that may hold each of them; places of 0 are nowhere.
    regions
        For parts that both have: the places of one, and the cells of the mesh that are of it. On a border, holders of the
        same part are taken before others.
    """
    dimension = np.asarray(dimension)
    found: list[BlockLocations] = []
    beside = np.zeros(len(places), dtype=bool)
    for d in np.unique(dimension[dimension > 0]).tolist():
        where = np.flatnonzero(dimension == d)
        held = _moved(locate_all(mesh.model, places[where], d), where)
        missing = np.setdiff1d(where, np.concatenate([[0], *(f.point for f in held)])[1:])
        near = _moved(locate_all(mesh.model, places[missing], d, BESIDE), missing) if len(missing) else []
        near = _nearest(near, len(places))
        for f in near:
            beside[f.point] = True
        found += [*held, *near]
    found = _of_the_same_part(found, len(places), mesh.result.n_cells, regions)
    count = np.zeros(len(places), dtype=np.int64)
    for f in found:
        count += np.bincount(f.point, minlength=len(places))
    return Sampled(mesh.model, tuple(found), count, beside & (count > 0), mesh.blur)


def _moved(found: list[BlockLocations], where: Ints) -> list[BlockLocations]:
    return [replace(f, point=where[f.point]) for f in found]


def _only(found: BlockLocations, keep: NDArray[np.bool_]) -> BlockLocations:
    return BlockLocations(
        found.block, found.point[keep], found.row[keep], found.reference[keep], found.beyond[keep]
    )


def _nearest(found: list[BlockLocations], n: int) -> list[BlockLocations]:
    """Return of the cells beside each place those that it is least outside of."""
    least = np.full(n, np.inf)
    for f in found:
        np.minimum.at(least, f.point, f.beyond)
    return [_only(f, f.beyond <= least[f.point] + INSIDE) for f in found]


def _of_the_same_part(
    found: list[BlockLocations], n: int, n_cells: int, regions: list[tuple[Ints, Ints]]
) -> list[BlockLocations]:
    if len(regions) < 2:
        return found
    part_of_cell = np.full(n_cells, -1)
    for number, (_, cells) in enumerate(regions):
        part_of_cell[cells] = number
    fits = [np.zeros(len(f.point), dtype=bool) for f in found]
    for number, (places, _) in enumerate(regions):
        of_part = np.zeros(n, dtype=bool)
        of_part[places] = True
        for k, f in enumerate(found):
            fits[k] |= of_part[f.point] & (part_of_cell[f.cell] == number)
    some = np.zeros(n, dtype=bool)
    for f, fit in zip(found, fits):
        some[f.point[fit]] = True
    return [_only(f, fit | ~some[f.point]) for f, fit in zip(found, fits)]
