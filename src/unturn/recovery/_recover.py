"""The displacement gradient at nodes, by three methods; what is derived from it comes afterwards."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unturn.elements import ELEMENTS, Element
from unturn.elements._space import Space, complete, prism_space, pyramid_space, tensor
from unturn.errors import UsageError
from unturn.gradient import over_chunks
from unturn.kinematics._symmetric import Floats
from unturn.model import Model
from unturn.recovery._nodes import Ints, NodeShares, node_shares
from unturn.recovery._patch import Patches, fit_patches
from unturn.recovery._samples import CellSamples, Meetings, meetings, sample_cells

Method = Literal["patch", "extrapolate", "average"]
METHODS: tuple[Method, ...] = ("patch", "extrapolate", "average")
FALLBACKS = (
    "from the patches of neighbouring corners",
    "by a polynomial of lower degree",
    "by the average weighted by volume",
)
_MEANT, _NEIGHBOURS, _LOWER, _AVERAGE = range(4)
_PAIRS = 4096


@dataclass(frozen=True, eq=False)
class Recovered:
    """The displacement gradient at nodes.

    Attributes
    ----------
    method
        ``patch``, ``extrapolate`` or ``average``.
    shares
        The shares of the nodes; each has a value of its own.
    values
        `(3, 3, n_shares)` displacement gradient of each share; NaN where no usable cell meets.
    volume
        `(n_shares,)` volume of the cells that meet there.
    H
        `(3, 3, n_points)` displacement gradient at the points of the file: on a border that of the dominant group; NaN
        at points of no computed cell.
    share
        `(n_points,)` the share whose value was written, -1 for none.
    jump
        `(n_points,)` largest Frobenius norm of the difference between the values of the groups that meet there; 0
        inside a group, NaN where there is no value.
    weight
        `(n_points,)` volume of each element over the number of its nodes, summed: the weight in statistics.
    fallback
        ``{how: number of nodes}`` where the method could not be used as it is.
    """

    method: Method
    shares: NodeShares
    values: Floats
    volume: Floats
    H: Floats
    share: Ints
    jump: Floats
    weight: Floats
    fallback: dict[str, int]

    @property
    def group(self) -> Ints:
        """`(n_points,)` group whose value was written; -1 where there is none."""
        return np.where(self.share >= 0, self.shares.group[self.share], -1)

    @cached_property
    def notes(self) -> tuple[str, ...]:
        """What the summary says about the recovery, one sentence each."""
        found = [_TITLES[self.method]]
        met = int((self.volume > 0).sum())
        odd = [f"{count} {how}" for how, count in self.fallback.items() if count]
        if odd:
            found.append(f"at borders and thin patches, of {met} values: {', '.join(odd)}")
        border = int((self.jump > 0).sum())
        if border:
            found.append(f"{border} nodes lie on borders of groups; the value of the group with most volume is written")
        if self.shares.merged:
            found.append(f"{self.shares.merged} coincident nodes (within {self.shares.tolerance:.2g}) count as one")
        if self.shares.apart:
            found.append(f"{self.shares.apart} coincident nodes move differently and stay apart")
        return tuple(found)


_TITLES = {
    "patch": "values at nodes: polynomial through the accurate points around each corner, least squares",
    "extrapolate": "values at nodes: extrapolated in each element, averaged weighted by volume",
    "average": "values at nodes: average of the elements weighted by volume",
}


def recover_gradient(
    model: Model, groups: NDArray[np.integer], method: Method = "patch", threads: int | None = None
) -> Recovered:
    """Return the displacement gradient at the nodes of a model.

    Parameters
    ----------
    model
        See `build_model`.
    groups
        `(n_cells,)` group of each cell in file order, integers; nothing is averaged or fitted across groups, nor across
        dimensions.
    method
        ``patch``: superconvergent patch recovery. ``extrapolate``: each element's gradient is extrapolated from the
        points where it is most accurate to its nodes, then averaged weighted by volume. ``average``: volume mean of each
        element's gradient, averaged weighted by volume.
    threads
        None: all processors.

    Raises
    ------
    UsageError
        An unknown method, or groups that do not fit the mesh.

    Notes
    -----
    Zienkiewicz and Zhu 1992, Int. J. Numer. Meth. Eng. 33, 1331-1364. Around each corner a complete polynomial of the
    order of the elements (the lowest where orders meet) is fitted by least squares to the gradients at the accurate
    points of the cells that meet there. Surfaces: in the coordinates of the tangent plane; lines: along the tangent.
    Other nodes take the mean of the patches of the corners of their edge, face or cell.

    A patch is not used where its samples are fewer than the terms, leave the polynomial undetermined (condition of the
    scaled normal equations above 1e8), or where the polynomial would be extrapolated so far that the value scatters more
    than one sample does. Then, in this order: the mean of the usable patches of the corners of the cells around, at this
    node; the linear polynomial along the directions that the samples cover; the average weighted by volume.

    Examples
    --------
    >>> import numpy as np
    >>> from unturn import make_result
    >>> from unturn.model import build_model
    """
    if method not in METHODS:
        raise UsageError(f"method {method!r} is not known; use one of {', '.join(METHODS)}.")
    shares = node_shares(model, groups)
    return recover_samples(shares, sample_cells(model, threads), method, threads)


def recover_samples(
    shares: NodeShares, samples: CellSamples, method: Method = "patch", threads: int | None = None
) -> Recovered:
    """Return the values at nodes of gradients that were sampled in the cells; see `recover_gradient`."""
    if method == "patch":
        values, how = _by_patches(shares, samples, threads)
    else:
        met = meetings(shares, samples)
        values, how = np.full((9, len(shares)), np.nan), np.zeros(len(shares), dtype=np.int8)
        values[:, met.share] = _weighted(shares, samples, met, method == "extrapolate", threads)
    plane = shares.model.plane
    if plane is not None and plane.model is None:
        values[4 * plane.normal] = np.nan
    fallback = {text: int((how == code).sum()) for code, text in enumerate(FALLBACKS, 1)}
    return _finished(shares, samples, values, method, fallback)


def _weighted(
    shares: NodeShares, samples: CellSamples, met: Meetings, extrapolate: bool, threads: int | None
) -> Floats:
    """Return `(9, n)` the average over the cells that meet, weighted by volume, of their mean or nodal values."""
    tables, block_of, offset = _nodal_tables(shares) if extrapolate else (np.zeros(0), np.zeros(0), np.zeros(0))
    out = np.empty((9, len(met.share)))

    def work(a: int, b: int) -> None:
        at = met.gather(a, b, samples)
        cell = met.cell[at.pairs]
        volume = np.repeat(samples.volume[cell], at.of_pair)
        if extrapolate:
            of_cell = block_of[cell]
            start = offset[of_cell] + met.local[at.pairs] * samples.count[cell]
            share = tables[np.repeat(start, at.of_pair) + at.within]
        else:
            share = samples.weight[at.at]
        total = at.sums(volume * samples.weight[at.at])
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
    The space of one order less than the element's: for the two-point Gauss products the polynomial through all points.
    """
    space = _lower_space(row)
    inverse = np.linalg.pinv(space.values(row.accurate.points))
    table: Floats = space.values(row.nodes) @ inverse
    return table


def _lower_space(row: Element) -> Space:
    k = row.order - 1
    made: dict[str, Callable[[], Space]] = {
        "triangle": lambda: complete(2, k),
        "tetra": lambda: complete(3, k),
        "wedge": lambda: prism_space((k, k)),
        "pyramid": lambda: pyramid_space(k),
    }
    return made.get(row.shape.name, lambda: tensor(*[k] * row.dim))()


def _by_patches(
    shares: NodeShares, samples: CellSamples, threads: int | None
) -> tuple[Floats, NDArray[np.int8]]:
    """Return the value `(9, n_shares)` of each share and how it came about."""
    corners = meetings(shares, samples, corners_only=True)
    sets = _fit_all(shares, samples, corners, threads)
    values = np.full((9, len(shares)), np.nan)
    how = np.full(len(shares), -1, dtype=np.int8)
    pool = _Pool(shares, samples.origin, sets, threads)
    is_corner = np.zeros(len(shares), dtype=bool)
    is_corner[corners.share] = True
    pool.fill(values, how, _MEANT, pool.good, pool.good)
    between = _between(shares, samples, ~is_corner)
    pool.fill(values, how, _MEANT, *between)
    waiting = how < 0
    pool.fill(values, how, _NEIGHBOURS, *_around(shares, samples, waiting, pool.usable))
    pool.fill(values, how, _LOWER, pool.linear, pool.linear)
    left = (how < 0) & is_corner
    rest = corners.only(left[corners.share], samples.count)
    if len(rest.share):
        values[:, rest.share] = _weighted(shares, samples, rest, False, threads)
        how[rest.share] = _AVERAGE
    _interpolate(values, how, *between)
    return values, how


def _fit_all(
    shares: NodeShares, samples: CellSamples, corners: Meetings, threads: int | None
) -> list[Patches]:
    orders = np.concatenate(
        [np.full(len(c), b.row.order if b.row else 0) for b, c in zip(shares.model.blocks, shares.cells)]
    )
    order = np.minimum.reduceat(orders[corners.cell], corners.first[:-1]) if len(corners.share) else orders[:0]
    dimension = shares.dimension[corners.share]
    found = []
    for dim, p in sorted(set(zip(dimension.tolist(), order.tolist()))):
        met = corners.only((dimension == dim) & (order == p), samples.count)
        found.append(fit_patches(shares, samples, met, dim, p, threads))
    return found


class _Pool:
    """All patches, looked up by share."""

    def __init__(
        self, shares: NodeShares, origin: Floats, sets: list[Patches], threads: int | None
    ) -> None:
        self.shares, self.origin, self.sets, self.threads = shares, origin, sets, threads
        self.set_of = np.full(len(shares), -1, dtype=np.int8)
        self.rank = np.zeros(len(shares), dtype=np.int64)
        self.usable = np.zeros(len(shares), dtype=bool)
        linear = np.zeros(len(shares), dtype=bool)
        for k, patches in enumerate(sets):
            self.set_of[patches.share] = k
            self.rank[patches.share] = np.arange(len(patches.share))
            self.usable[patches.share] = patches.good
            linear[patches.share] = ~patches.good & (patches.covered > 0)
        self.good = np.flatnonzero(self.usable)
        self.linear = np.flatnonzero(linear)

    def fill(self, values: Floats, how: NDArray[np.int8], code: int, target: Ints, source: Ints) -> None:
        """Write the mean of the usable patches `source`, at the nodes of `target`, where there is no value yet."""
        wanted = how[target] < 0
        if code != _LOWER:
            wanted &= self.usable[source]
        target, source = target[wanted], source[wanted]
        if not len(target):
            return
        if (np.diff(target) < 0).any():
            order = np.argsort(target, kind="stable")
            target, source = target[order], source[order]
        starts = np.flatnonzero(np.concatenate([[True], np.diff(target) > 0]))
        ends = np.append(starts[1:], len(target))
        filled = target[starts]
        cuts = np.unique(np.minimum(np.searchsorted(starts, np.arange(0, len(target) + _PAIRS, _PAIRS)), len(starts)))

        def work(a: int, b: int) -> None:
            pairs = slice(int(starts[a]), int(ends[b - 1]))
            found = self._evaluate(target[pairs], source[pairs])
            counts = (ends[a:b] - starts[a:b])[:, None]
            values[:, filled[a:b]] = (np.add.reduceat(found, starts[a:b] - starts[a], axis=0) / counts).T

        over_chunks(work, list(zip(cuts[:-1].tolist(), cuts[1:].tolist())), self.threads)
        how[filled] = code

    def _evaluate(self, target: Ints, source: Ints) -> Floats:
        x = self.shares.model.points[self.shares.point[target]] - self.origin
        which = self.set_of[source]
        if len(self.sets) == 1:
            return self.sets[0].evaluate(self.rank[source], x)
        found = np.empty((len(target), 9))
        for k in np.unique(which):
            mine = which == k
            found[mine] = self.sets[k].evaluate(self.rank[source[mine]], x[mine])
        return found


def parents(row: Element) -> NDArray[np.bool_]:
    """Return `(n_nodes, n_corners)`: the corners of the edge, face or cell inside which each node lies."""
    linear = ELEMENTS[row.shape.name]
    found: NDArray[np.bool_] = np.abs(linear.shape_functions(row.places)) > 1e-9
    return found


def _between(
    shares: NodeShares, samples: CellSamples, chosen: NDArray[np.bool_]
) -> tuple[Ints, Ints]:
    """Return pairs (node, corner) of the nodes that are no corner and the corners between which they lie."""
    targets, sources = [np.zeros(0, dtype=np.int64)], [np.zeros(0, dtype=np.int64)]
    todo = chosen.copy()
    for block, cells, rows in zip(shares.model.blocks, shares.cells, shares.rows):
        if block.row is None or block.row.n_nodes == block.row.n_corners or not len(cells):
            continue
        sound = samples.valid[rows]
        belongs = parents(block.row)
        for local in range(block.row.n_corners, block.row.n_nodes):
            at = np.flatnonzero(todo[cells[:, local]] & sound)
            share, once = np.unique(cells[at, local], return_index=True)
            corners = np.flatnonzero(belongs[local])
            targets.append(np.repeat(share, len(corners)))
            sources.append(cells[at[once]][:, corners].reshape(-1))
            todo[share] = False
    return np.concatenate(targets).astype(np.int64), np.concatenate(sources).astype(np.int64)


def _around(
    shares: NodeShares, samples: CellSamples, chosen: NDArray[np.bool_], usable: NDArray[np.bool_]
) -> tuple[Ints, Ints]:
    """Return pairs (node, corner) of chosen nodes and the usable corners of the cells around them."""
    targets, sources = [np.zeros(0, dtype=np.int64)], [np.zeros(0, dtype=np.int64)]
    for block, cells, rows in zip(shares.model.blocks, shares.cells, shares.rows):
        if block.row is None:
            continue
        corners = cells[:, : block.row.n_corners]
        some = np.flatnonzero(samples.valid[rows] & chosen[cells].any(axis=1) & usable[corners].any(axis=1))
        for local in range(block.row.n_nodes):
            here = some[chosen[cells[some, local]]]
            pairs = usable[corners[here]]
            targets.append(np.repeat(cells[here, local], pairs.sum(axis=1)))
            sources.append(corners[here][pairs])
    return np.concatenate(targets).astype(np.int64), np.concatenate(sources).astype(np.int64)


def _interpolate(values: Floats, how: NDArray[np.int8], target: Ints, source: Ints) -> None:
    """Give nodes without any usable patch around the mean of the corners between which they lie."""
    wanted = how[target] < 0
    target, source = target[wanted], source[wanted]
    if not len(target):
        return
    filled, inverse, counts = np.unique(target, return_inverse=True, return_counts=True)
    for c in range(9):
        values[c, filled] = np.bincount(inverse, values[c, source]) / counts
    how[filled] = _LOWER


def _finished(
    shares: NodeShares, samples: CellSamples, values: Floats, method: Method, fallback: dict[str, int]
) -> Recovered:
    blocks = shares.model.blocks
    n_points = len(shares.model.points)
    volume, weight = np.zeros(len(shares)), np.zeros(n_points)
    for block, cells, rows in zip(blocks, shares.cells, shares.rows):
        sizes = np.where(samples.valid[rows], samples.volume[rows], 0.0)
        volume += np.bincount(cells.reshape(-1), np.repeat(sizes, cells.shape[1]), len(shares))
        part = np.repeat(sizes / cells.shape[1], cells.shape[1])
        weight += np.bincount(block.connectivity.reshape(-1), part, n_points)
    share = _dominant(shares, volume)
    H = np.full((9, n_points), np.nan)
    has = share >= 0
    H[:, has] = values[:, share[has]]
    jump = np.where(has, _jumps(shares, values, volume)[shares.label], np.nan)
    tensors = (values.reshape(3, 3, -1), H.reshape(3, 3, -1))
    return Recovered(method, shares, tensors[0], volume, tensors[1], share, jump, weight, fallback)


def _dominant(shares: NodeShares, volume: Floats) -> Ints:
    """Return for each point the share with most volume among those of the highest dimension; -1 for none."""
    spots = shares.spots
    usable = np.flatnonzero(volume[spots.share] > 0)
    point, share = spots.point[usable], spots.share[usable]
    out = np.full(len(shares.label), -1, dtype=np.int64)
    order = np.lexsort((-np.arange(len(point)), volume[share], shares.dimension[share], point))
    out[point[order]] = share[order]  # the last of each point stays
    return out


def _jumps(shares: NodeShares, values: Floats, volume: Floats) -> Floats:
    """Return for each node the largest difference between its shares of the highest dimension."""
    out = np.zeros(len(shares.label))
    usable = np.flatnonzero(volume > 0)
    highest = np.zeros(len(shares.label), dtype=np.int8)
    np.maximum.at(highest, shares.point[usable], shares.dimension[usable])
    usable = usable[shares.dimension[usable] == highest[shares.point[usable]]]
    several = np.bincount(shares.point[usable], minlength=len(out)) > 1
    usable = usable[several[shares.point[usable]]]
    point = shares.point[usable]
    for step in range(1, int(np.bincount(point, minlength=1).max())):
        pairs = np.flatnonzero(point[step:] == point[:-step])
        difference = values[:, usable[pairs]] - values[:, usable[pairs + step]]
        np.maximum.at(out, point[pairs], np.sqrt(np.nansum(difference**2, axis=0)))
    return out
