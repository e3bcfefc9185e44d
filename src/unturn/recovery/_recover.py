"""The displacement gradient at nodes, by three methods; what is derived from it comes afterwards."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError
from unturn.kinematics._symmetric import Floats
from unturn.model import Model
from unturn.recovery._average import averages
from unturn.recovery._nodes import Ints, NodeShares, node_shares
from unturn.recovery._samples import CellSamples, meetings, sample_cells
from unturn.recovery._spread import FALLBACKS, by_patches

Method = Literal["patch", "extrapolate", "average"]
METHODS: tuple[Method, ...] = ("patch", "extrapolate", "average")


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
    usable
        `(n_cells,)` which cells were used: computed, with volume, not tangled, displacement finite.
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
    usable: NDArray[np.bool_]

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
            found.append(
                f"{border} nodes lie on borders of groups; the value of the group with most volume is written"
            )
        if self.shares.merged:
            found.append(
                f"{self.shares.merged} coincident nodes (within {self.shares.tolerance:.2g}) count as one"
            )
        if self.shares.apart:
            found.append(f"{self.shares.apart} coincident nodes move differently and stay apart")
        return tuple(found)


_TITLES = {
    "patch": "values at nodes: polynomial through the accurate points around each corner, least squares; on borders "
    "shifted to the derivative along their edges",
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

    The patch of a corner is not used where its samples leave the polynomial undetermined (fewer than the terms, all in
    one plane, condition of the scaled normal equations above 1e8) or lie to one side of it: more than one standard
    deviation of the samples away from their mean, as at borders. The node then takes, in this order: the mean of the
    patches of usable corners of the cells around, evaluated at the node; the same of the cells around those; for order 1
    the linear polynomial along the directions that the samples cover; else what the elements extrapolate to the node,
    averaged weighted by volume.

    On borders of solids and plane meshes (facets that one cell of the group alone has) these values are then shifted. Along
    an edge of such a facet the displacement of its own nodes has a derivative, at the accurate points of a line of the
    element's order as accurate as inside the body; what it has more than the recovered gradient, interpolated along the
    edge, is extrapolated to the ends. A corner takes the smallest change (in the mean square where its edges disagree)
    that makes up for it; directions that no edge covers, the normal of a border that bends by less than 40 degrees, keep
    their values. Nodes between corners take the mean of the shifts of their corners. A linear displacement, and a
    quadratic one in elements that hold it, shifts nothing.

    Examples
    --------
    >>> import numpy as np
    >>> from unturn.model import PlaneOptions, build_model
    >>> from unturn.result import CellBlock, Result
    >>> x, y = np.meshgrid(np.arange(4.0), np.arange(4.0))
    >>> points = np.stack([x.ravel(), y.ravel(), 0 * x.ravel()], axis=1)
    >>> first = np.array([0, 1, 2, 4, 5, 6, 8, 9, 10])
    >>> cells = CellBlock("quad", first[:, None] + [0, 1, 5, 4], np.arange(9))
    >>> u = points[:, [0]] ** 2 * [[1e-3, 0, 0]]
    >>> model = build_model(Result(points, (cells,), point_data={"u": u}), plane=PlaneOptions("strain"))
    >>> recover_gradient(model, np.zeros(9, dtype=int)).H[0, 0, :4].round(6)
    array([0.   , 0.002, 0.004, 0.006])
    """
    if method not in METHODS:
        raise UsageError(f"method {method!r} is not known; use one of {', '.join(METHODS)}.")
    shares = node_shares(model, groups)
    return recover_samples(shares, sample_cells(model, threads), method, threads, borders=True)


def recover_samples(
    shares: NodeShares,
    samples: CellSamples,
    method: Method = "patch",
    threads: int | None = None,
    borders: bool = False,
) -> Recovered:
    """Return the values at nodes of gradients that were sampled in the cells; see `recover_gradient`.

    With `borders` the samples are those of the model's displacement, which then has its say at borders.
    """
    if method == "patch":
        values, how = by_patches(shares, samples, borders, threads)
    else:
        met = meetings(shares, samples)
        values, how = np.full((9, len(shares)), np.nan), np.zeros(len(shares), dtype=np.int8)
        values[:, met.share] = averages(shares, samples, met, method == "extrapolate", threads)
    plane = shares.model.plane
    if plane is not None and plane.model is None:
        values[4 * plane.normal] = np.nan
    fallback = {text: int((how == code).sum()) for code, text in enumerate(FALLBACKS, 1)}
    return _finished(shares, samples, values, method, fallback)


def _finished(
    shares: NodeShares, samples: CellSamples, values: Floats, method: Method, fallback: dict[str, int]
) -> Recovered:
    blocks = shares.model.blocks
    n_points = len(shares.model.points)
    volume, weight = np.zeros(len(shares)), np.zeros(n_points)
    usable = np.zeros(shares.model.result.n_cells, dtype=bool)
    for block, cells, rows in zip(blocks, shares.cells, shares.rows):
        usable[block.index] = samples.valid[rows]
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
    return Recovered(method, shares, tensors[0], volume, tensors[1], share, jump, weight, fallback, usable)


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
