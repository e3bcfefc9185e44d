"""Values at nodes as averages over the elements that meet there, weighted by volume."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from unturn.elements import Element
from unturn.elements._space import Space, complete, prism_space, pyramid_space, tensor
from unturn.gradient import over_chunks
from unturn.kinematics._symmetric import Floats
from unturn.recovery._nodes import Ints, NodeShares
from unturn.recovery._samples import CellSamples, Meetings


def averages(
    shares: NodeShares, samples: CellSamples, met: Meetings, extrapolate: bool, threads: int | None
) -> Floats:
    """Return `(9, n)` values at the shares of `met`: averages over the cells that meet there, weighted by volume.

    Parameters
    ----------
    shares, samples, met
        Of the model.
    extrapolate
        Average what each cell has at the node, extrapolated from its accurate points; otherwise its mean.
    threads
        None: all processors.
    """
    tables, block_of, offset = _nodal_tables(shares) if extrapolate else (np.zeros(0), None, None)
    out = np.empty((9, len(met.share)))

    def work(a: int, b: int) -> None:
        at = met.gather(a, b, samples)
        cell = met.cell[at.pairs]
        volume = np.repeat(samples.volume[cell], at.of_pair)
        share = samples.weight[at.at]
        total = at.sums(volume * share)
        if block_of is not None and offset is not None:
            start = offset[block_of[cell]] + met.local[at.pairs] * samples.count[cell]
            share = tables[np.repeat(start, at.of_pair) + at.within]
        out[:, a:b] = at.sums((volume * share) * samples.H[:, at.at]) / total

    over_chunks(work, met.ranges(), threads)
    return out


def _nodal_tables(shares: NodeShares) -> tuple[Floats, Ints, Ints]:
    """Return the extrapolation of every block as one flat table, the block of each cell, and where blocks begin."""
    tables = [extrapolation(b.row).reshape(-1) if b.row else np.zeros(0) for b in shares.model.blocks]
    offset = np.concatenate([[0], np.cumsum([len(t) for t in tables])])
    block_of = np.repeat(np.arange(len(tables)), [len(c) for c in shares.cells])
    return np.concatenate(tables), block_of, offset


def extrapolation(row: Element) -> Floats:
    """Return `(n_nodes, n_samples)`: values at the nodes from those at the accurate points, by least squares.

    Notes
    -----
    The space of one order less than the element's: for two-point Gauss products the polynomial through all points.
    """
    k = row.order - 1
    made: dict[str, Callable[[], Space]] = {
        "triangle": lambda: complete(2, k),
        "tetra": lambda: complete(3, k),
        "wedge": lambda: prism_space((k, k)),
        "pyramid": lambda: pyramid_space(k),
    }
    space = made.get(row.shape.name, lambda: tensor(*[k] * row.dim))()
    table: Floats = space.values(row.nodes) @ np.linalg.pinv(space.values(row.accurate.points))
    return table
