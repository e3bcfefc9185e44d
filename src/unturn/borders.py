"""Points on the borders of regions: which value each shows, and the mesh in which every region has its own."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from unturn.kinematics._symmetric import Floats
from unturn.model import Model
from unturn.recovery import Recovered
from unturn.regions import Region
from unturn.result import Result
from unturn.trust import norms, strain_of

Ints = NDArray[np.int64]
ORIGINAL_POINT = "original_point"
"""Array of a mesh with duplicated points: the position of each point in the file."""


@dataclass(frozen=True, eq=False)
class Layout:
    """Which points values at nodes are written to.

    Attributes
    ----------
    point
        `(n,)` position in the file: all of them in their order, then those of duplicates.
    spot
        `(n,)` which of `NodeShares.spots` each shows; -1 for none.
    cells
        For each block of the model, `(n_active, n_nodes)` connectivity of the active cells in these points; None when
        nothing is duplicated.
    """

    point: Ints
    spot: Ints
    cells: tuple[Ints, ...] | None = None

    def shares(self, recovered: Recovered) -> Ints:
        """Return `(n,)` the share whose value each point shows, -1 for none."""
        share: Ints = np.where(self.spot >= 0, recovered.shares.spots.share[self.spot], -1)
        return share


def lay_out(recovered: Recovered, split: bool = False) -> Layout:
    """Return the points of the file, each with the value of its dominant region; with `split` also their duplicates.

    The points of the file keep their positions and show the region with most volume there, so cells that are not
    computed keep their nodes.
    """
    spots, n_points = recovered.shares.spots, len(recovered.share)
    written = spots.share == recovered.share[spots.point]
    fresh = np.concatenate([[True], np.diff(spots.point) > 0])  # the first of each point
    written |= fresh & (recovered.share[spots.point] < 0)
    spot = np.full(n_points, -1, dtype=np.int64)
    spot[spots.point[written]] = np.flatnonzero(written)
    if not split:
        return Layout(np.arange(n_points), spot)
    more = np.flatnonzero(~written)
    position = np.empty(len(written), dtype=np.int64)
    position[written] = spots.point[written]
    position[more] = n_points + np.arange(len(more))
    point = np.concatenate([np.arange(n_points), spots.point[more]])
    return Layout(point, np.concatenate([spot, more]), tuple(position[c] for c in spots.cells))


def split_mesh(result: Result, layout: Layout, model: Model) -> Result:
    """Return the result with its points duplicated as a layout says; cells, their order and their arrays stay.

    Every point array is carried over to the duplicates.
    """
    assert layout.cells is not None
    blocks = []
    for block, cells in zip(model.blocks, layout.cells):
        connectivity = block.cells.connectivity.copy()
        connectivity[block.active] = cells
        blocks.append(replace(block.cells, connectivity=connectivity))
    return replace(
        result,
        points=result.points[layout.point],
        blocks=tuple(blocks),
        point_data={name: values[layout.point] for name, values in result.point_data.items()},
    )


@dataclass(frozen=True)
class BorderJump:
    """The largest difference between the strains that two regions have at one node.

    Attributes
    ----------
    value
        Frobenius norm of the difference of the recovered strains.
    regions
        The names of the two.
    point
        Position of the node.
    """

    value: float
    regions: tuple[str, str]
    point: int


def border_jump(recovered: Recovered, regions: Sequence[Region], base: str = "") -> BorderJump | None:
    """Return the largest jump of the recovered strain between two regions, or None when none meet.

    Parameters
    ----------
    recovered
        See `unturn.recovery.recover_gradient`.
    regions
        The regions; cells of none count as one more, without a name. Only parts of one dimension are compared.
    base
        Of which strain, as in `unturn.trust.strain_error`.
    """
    shares = recovered.shares
    own = _region_of_shares(recovered, regions)
    e = strain_of(recovered.values, shares.model.plane, base)
    usable = np.flatnonzero(np.isfinite(e).all(axis=0))
    order = usable[np.lexsort((shares.dimension[usable], shares.point[usable]))]
    where = np.stack([shares.point[order], shares.dimension[order]])
    best, found = -1.0, None
    step = 1
    while len(pairs := np.flatnonzero((where[:, step:] == where[:, :-step]).all(axis=0))):
        a, b = order[pairs], order[pairs + step]
        apart = own[a] != own[b]
        size: Floats = np.where(apart, norms(e[:, a] - e[:, b]), -1.0)
        k = int(size.argmax())
        if size[k] > best:
            best = float(size[k])
            names = [regions[own[s]].name if own[s] >= 0 else "the rest" for s in (a[k], b[k])]
            found = BorderJump(best, (names[0], names[1]), int(shares.point[a[k]]))
        step += 1
    return found


def _region_of_shares(recovered: Recovered, regions: Sequence[Region]) -> Ints:
    """Return for each share the position of the region that its cells are in, -1 for none."""
    shares = recovered.shares
    of_cell = np.full(shares.model.result.n_cells, -1, dtype=np.int64)
    for number, region in enumerate(regions):
        of_cell[region.cells] = number
    own = np.full(len(shares), -1, dtype=np.int64)
    for block, cells in zip(shares.model.blocks, shares.cells):
        own[cells] = of_cell[block.index][:, None]
    return own
