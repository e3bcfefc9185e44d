"""Peaks: whether one keeps growing towards a node, as at a singularity, and which is the next away from it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from unturn.kinematics._symmetric import Floats
from unturn.recovery import Recovered

Ints = NDArray[np.int64]
Profile = tuple[tuple[float, ...], tuple[float, ...]]

RINGS = 2
GROWING = 0.2
"""Exponent of growth from the second ring to the first above which a peak keeps growing."""
DEPARTURE = 0.3
"""Share of the strain at the node, left over by the linear strain around it, above which a peak is suspected."""
_MOST = 200


@dataclass(frozen=True)
class Peak:
    """An extreme over some cells, and how the value grows towards it.

    Attributes
    ----------
    cell
        File position of the cell that holds the extreme; -1 for none.
    value
        The value there.
    point
        Position of the node towards which it grows: of the corners of the cell the one with the largest exponent; a
        singular point lies there or one cell on.
    distances, means
        Mean distance from the node and mean value of two rings of cells around it, volume-weighted.
    growth
        Exponent a of `value ~ distance^-a` between the rings; NaN where there is no second ring, or values change sign.
    departure
        How far the recovered strain at a corner of the cell is from what the strain at the corners around it extrapolates
        to linearly, as a share of the strain at that corner (Frobenius norms): the largest over the corners towards which
        the exponent is above 0.2; NaN without such a corner, or where too few others are around.
    singular
        Suspected singular.
    """

    cell: int
    value: float
    point: int
    distances: tuple[float, ...]
    means: tuple[float, ...]
    growth: float
    departure: float
    singular: bool


class Peaks:
    """Finds peaks of values on cells.

    Parameters
    ----------
    recovered
        Tells which cells meet at which node; rings stay within a group.
    centroid, volume
        `(n_cells, 3)` and `(n_cells,)` of each cell, file order.

    Notes
    -----
    The first ring is the cells that meet at the node, the second those that share a corner with them. Towards a
    singular point the strain grows as a power of the distance (Williams 1952, Stress singularities resulting from
    various boundary conditions in angular corners, J. Appl. Mech. 19, 526-528: exponent 0.46 at a re-entrant right
    angle, 0.5 at a crack; 1 under a point load in the plane, 2 in space). A power law looks the same on every mesh, so
    the recovered strain at the node stands out from the strain around it by the same share however fine the mesh is,
    while a smooth field becomes linear over a few cells: bending across two cells is linear already. A peak is
    suspected where towards a corner of its cell the value grows from the second ring to the first with an exponent
    above 0.2 and the strain at that corner departs from the linear extrapolation of the corners around it by more than
    0.3 of itself. The strain is that of Green and Lagrange, which turning does not change. The bounds were set on
    solved problems and tried on others: holes, cavities, thick and curved bars, bending, torsion, steps; re-entrant
    corners, cracks, punches, point loads; 1 to 16 cells across, fourteen elements. A notch that three or four cells
    hardly resolve looks the same: then, too, the value is not to be trusted.
    """

    def __init__(self, recovered: Recovered, centroid: Floats, volume: Floats) -> None:
        shares = recovered.shares
        self.recovered, self.shares, self.centroid, self.volume = recovered, shares, centroid, volume
        n_cells, rows, columns = len(volume), [], []
        for block, cells in zip(shares.model.blocks, shares.cells):
            if block.row is None:
                continue
            usable = recovered.usable[block.index]
            corners = cells[usable, : block.row.n_corners]
            rows.append(np.repeat(block.index[usable], corners.shape[1]))
            columns.append(corners.reshape(-1))
        at = (np.concatenate(rows), np.concatenate(columns))
        ones = np.ones(len(at[0]), dtype=np.int8)
        self.corners = sparse.coo_array((ones, at), shape=(n_cells, len(shares))).tocsr()
        self.cells = self.corners.T.tocsr()
        self._known: dict[int, _Rings] = {}
        self._departures: dict[int, float] = {}

    def find(self, values: Floats, cells: Ints, smallest: bool = False) -> Peak:
        """Return the largest (smallest) of `values[cells]` as a peak.

        Parameters
        ----------
        values
            `(n_cells,)`; NaN is passed over.
        cells
            File positions to look at.
        smallest
            Look for the smallest, and for values that fall towards it.
        """
        signed = -values if smallest else values
        known = cells[
            np.isfinite(signed[cells]) & (self.corners.indptr[cells] < self.corners.indptr[cells + 1])
        ]
        if not len(known):
            nan = float("nan")
            return Peak(-1, nan, -1, (), (), nan, nan, False)
        cell = int(known[signed[known].argmax()])
        share, (distances, means), departure = self._towards(signed, cell)
        growth = _exponent(distances, means)
        sign = -1.0 if smallest else 1.0
        point = int(self.shares.point[share])
        shown = tuple(sign * m for m in means)
        return Peak(
            cell, float(values[cell]), point, distances, shown, growth, departure, departure > DEPARTURE
        )

    def next_peak(
        self,
        values: Floats,
        cells: Ints,
        peak: Peak,
        smallest: bool = False,
        suspected: Callable[[Peak], bool] = lambda peak: peak.singular,
    ) -> Peak:
        """Return the most extreme peak of `cells` that is not suspected singular, away from `peak`.

        The cells of the two rings around a suspected peak are left out, and so on with the next while that is
        suspected too (the nodes along a re-entrant edge), at most 200 times; `cell` is -1 when nothing is left.
        """
        rest = np.zeros(len(values), dtype=bool)
        rest[cells] = True
        for _ in range(_MOST):
            if peak.cell < 0 or not suspected(peak):
                return peak
            share, _, _ = self._towards(-values if smallest else values, peak.cell)
            rest[self._rings(share).cells] = False
            rest[peak.cell] = False
            peak = self.find(values, np.flatnonzero(rest), smallest)
        return peak if not suspected(peak) else self.find(values, np.zeros(0, dtype=np.int64), smallest)

    def _towards(self, signed: Floats, cell: int) -> tuple[int, Profile, float]:
        """Return the corner of a cell towards which values grow most, the rings around it, and the largest departure.

        The departure is that of the corners towards which they keep growing; NaN without such a corner.
        """
        corners = [int(c) for c in np.unique(_entries(self.corners, np.array([cell])))]
        profiles = [self._profile(signed, c) for c in corners]
        growth = np.nan_to_num([_exponent(*p) for p in profiles], nan=-np.inf)
        best = int(np.argmax(growth >= growth.max() - 1e-6))
        departures = [self._departure(c) for c, g in zip(corners, growth) if g > GROWING]
        return corners[best], profiles[best], float(np.fmax.reduce([np.nan, *departures]))

    def _rings(self, share: int) -> _Rings:
        if share not in self._known:
            self._known[share] = self._measured(self._find_rings(share), share)
        return self._known[share]

    def _find_rings(self, share: int) -> list[Ints]:
        inside, met = (np.zeros(n, dtype=bool) for n in self.corners.shape)
        nodes = np.array([share], dtype=np.int64)
        found: list[Ints] = []
        for _ in range(RINGS):
            met[nodes] = True
            reached = _entries(self.cells, nodes)
            ring = np.unique(reached[~inside[reached]]).astype(np.int64)
            if not len(ring):
                break
            found.append(ring)
            inside[ring] = True
            corners = _entries(self.corners, ring)
            nodes = np.unique(corners[~met[corners]]).astype(np.int64)
        return found

    def _measured(self, rings: list[Ints], share: int) -> _Rings:
        cells = np.concatenate(rings)
        starts = np.cumsum([0] + [len(ring) for ring in rings[:-1]])
        far = np.linalg.norm(
            self.centroid[cells] - self.shares.model.points[self.shares.point[share]], axis=1
        )
        volume = self.volume[cells]
        mean = np.add.reduceat(far * volume, starts) / np.add.reduceat(volume, starts)
        return _Rings(cells, starts, volume, tuple(mean.tolist()))

    def _departure(self, share: int) -> float:
        if share not in self._departures:
            self._departures[share] = self._find_departure(share)
        return self._departures[share]

    def _find_departure(self, share: int) -> float:
        """Return the share of the strain at a node that the linear strain of the corners around it leaves over.

        The corners are those of the first ring, or of both where the first has too few.
        """
        rings = self._rings(share)
        nodes = np.zeros(0, dtype=np.int64)
        for ring in np.split(rings.cells, rings.starts[1:]):
            nodes = np.union1d(nodes, _entries(self.corners, ring))
            around = nodes[nodes != share]
            if len(around) > self.shares.dimension[share]:
                break
        else:
            return float("nan")
        x = (
            self.shares.model.points[self.shares.point[around]]
            - self.shares.model.points[self.shares.point[share]]
        )
        table = np.column_stack([np.ones(len(around)), x / np.abs(x).max()])
        here, beside = self._strain(np.array([share]))[0], self._strain(around)
        extrapolated = np.linalg.lstsq(table, beside)[0][0]
        size = float(np.linalg.norm(here))
        return float(np.linalg.norm(here - extrapolated)) / size if size > 0 else float("nan")

    def _strain(self, shares: NDArray[np.integer]) -> Floats:
        """Return the Green-Lagrange strain `(n, 9)` at shares; zero for the unknown third direction of a plane mesh."""
        H = np.nan_to_num(np.moveaxis(self.recovered.values[:, :, shares], -1, 0))
        turned = np.swapaxes(H, 1, 2)
        strain: Floats = (0.5 * (H + turned + turned @ H)).reshape(-1, 9)
        return strain

    def _profile(self, signed: Floats, share: int) -> Profile:
        rings = self._rings(share)
        values = signed[rings.cells]
        known = np.isfinite(values)
        weight = np.where(known, rings.volume, 0.0)
        total = np.add.reduceat(np.where(known, values * weight, 0.0), rings.starts)
        means = total / np.add.reduceat(weight, rings.starts)
        return rings.distances, tuple(means.tolist())


@dataclass(frozen=True, eq=False)
class _Rings:
    """Cells around a node, ring after ring, where each ring starts, their volume, and the mean distance of each ring."""

    cells: Ints
    starts: Ints
    volume: Floats
    distances: tuple[float, ...]


def _entries(table: sparse.csr_array, rows: Ints) -> NDArray[np.integer]:
    """Return the columns of the entries of some rows of a table, one row after the other."""
    first = table.indptr[rows]
    counts = table.indptr[rows + 1] - first
    ends = np.cumsum(counts)
    at = np.arange(int(ends[-1]) if len(ends) else 0) + np.repeat(first - (ends - counts), counts)
    found: NDArray[np.integer] = table.indices[at]
    return found


def _exponent(distances: tuple[float, ...], means: tuple[float, ...]) -> float:
    if len(means) < RINGS or min(means) <= 0 or distances[1] <= distances[0]:
        return float("nan")
    return float(np.log(means[0] / means[1]) / np.log(distances[1] / distances[0]))
