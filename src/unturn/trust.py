"""How far a strain can be trusted: what recovery changes of it, and how elements differ where they meet.

All norms are Frobenius norms of strain tensors: `norm(e) = sqrt(e:e)`, energy-like but without a material; e is the small
strain, or a finite one where that is asked for. On a plane mesh whose third direction is not stated, only the strain in the
plane counts.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from itertools import pairwise
from threading import Lock
from typing import Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from unturn.elements import Element, rule_of_degree
from unturn.gradient import (
    ElementChunk,
    Plane,
    Samples,
    chunk_ranges,
    mean_gradient,
    over_chunks,
    sample_points,
    with_thickness_stretch,
)
from unturn.kinematics._finite import Finite
from unturn.kinematics._motion import rotation_vector
from unturn.kinematics._symmetric import Floats
from unturn.model import Model, ModelBlock
from unturn.point_gradient import PointGradient
from unturn.recovery import Recovered

Ints = NDArray[np.int64]
_COMPONENTS = ((0, 0), (1, 1), (2, 2), (0, 1), (1, 2), (0, 2))
_ROOTS = np.sqrt([1.0, 1.0, 1.0, 2.0, 2.0, 2.0])
_PER_CHUNK = 8192

MOST_CHANGE = {
    "strain": 1.0,
    "principal_strain": 1.0,
    "equivalent_strain": float(np.sqrt(2 / 3)),
    "max_shear_strain": float(np.sqrt(2)),
    "volumetric_strain": float(np.sqrt(3)),
    "deviatoric_strain": 1.0,
}
"""How much a measure changes at most when the strain changes by a tensor of norm one.

`e1 - e3` and `tr e` are products of e with tensors of norm sqrt 2 and sqrt 3; eigenvalues move by no more than the norm
of the change (Weyl 1912); `sqrt(2/3 e':e')` is sqrt(2/3) times a norm. For measures of the strain that the norm is of.
"""


@dataclass(frozen=True, eq=False)
class StrainError:
    """The difference between recovered and raw strain.

    Attributes
    ----------
    strain_error
        `(n_cells,)` root mean square over the element of `norm(e* - e)`, e the strain of the element itself and e* the
        recovered strain, interpolated from the nodes with the element's shape functions; NaN where not computed.
    plus_minus
        `(n_cells,)` bound for the value at the centroid as one for the whole element: the largest over its nodes of
        `norm(e*(node) - e(centroid)) + d(node)`, with d the largest `norm(e* - e)` there over the elements that meet.
    plus_minus_nodes
        `(n_points,)` bound for the recovered value: the largest d over the nodes of the elements that meet at the node.
    plus_minus_shares
        `(n_shares,)` the same for the value of each share of the nodes, from its own elements.
    volume
        `(n_cells,)` volume of the element.
    error_squared, strain_squared
        `(n_cells,)` integrals of `norm(e* - e)^2` and `norm(e)^2` over the element.
    """

    strain_error: Floats
    plus_minus: Floats
    plus_minus_nodes: Floats
    plus_minus_shares: Floats
    volume: Floats
    error_squared: Floats
    strain_squared: Floats

    def percentage(self, cells: Ints) -> float:
        """Return the global error of some cells (file positions) in percent; NaN without any strain.

        Notes
        -----
        `100 norm(e* - e) / sqrt(norm(e)^2 + norm(e* - e)^2)` with norms over the volume: Zienkiewicz and Zhu 1987, A
        simple error estimator and adaptive procedure for practical engineering analysis, Int. J. Numer. Meth. Eng. 24,
        337-357, with the strain norm in place of the energy norm.
        """
        error = float(np.nansum(self.error_squared[cells]))
        strain = float(np.nansum(self.strain_squared[cells]))
        return 100.0 * float(np.sqrt(error / (strain + error))) if strain + error > 0 else float("nan")


def strain_error(
    recovered: Recovered,
    threads: int | None = None,
    base: str = "",
    at: Literal["centroid", "mean"] = "centroid",
) -> StrainError:
    """Return how far the recovered strain departs from that of the elements.

    Parameters
    ----------
    recovered
        See `unturn.recovery.recover_gradient`.
    threads
        None: all processors.
    base
        Of which strain: empty for the small one, or a finite base such as ``hencky``. Also ``rotation``, the small rotation
        vector, and ``turn``, R over the root of two: the norm of the difference of two is twice the sine of half the angle
        between them. On surfaces and lines in space finite ones follow from the recovered gradient along them.
    at
        What `plus_minus` is the bound of: the value at the centroid, or that of the mean of the gradient.

    Notes
    -----
    Integrated with a rule that is exact for the square of the element's complete polynomials on affine elements. The
    bounds are bounds by experience, not by proof: recovered strain converges faster than that of the elements, so what
    it changes is about their error, and the largest change around a place is more than the error at the place as a
    rule. They know nothing of what the mesh does not show at all (a notch with one element in its root), and are NaN
    where an element has no neighbour to differ from.
    """
    model, shares = recovered.shares.model, recovered.shares
    n = model.result.n_cells
    volume, error, strain, plus_minus = (np.full(n, np.nan) for _ in range(4))
    departure = np.zeros(len(shares))
    nodal = strain_of(recovered.values, model.plane, base)
    reach = [np.zeros(cells.shape) for cells in shares.cells]
    lock = Lock()
    for block, cells, out in zip(model.blocks, shares.cells, reach):
        if block.row is None:
            continue
        job = _Job(model, block, cells, recovered.values, nodal, recovered.usable[block.index], base, at)

        def work(a: int, b: int, job: _Job = job, out: Floats = out) -> None:
            with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
                sums, here, out[a:b] = job.chunk(a, b)
            here[~job.usable[a:b]] = 0.0
            for array, values in zip((volume, error, strain), sums):
                array[job.block.index[a:b]] = np.where(job.usable[a:b], values, np.nan)
            with lock:
                np.maximum.at(departure, job.cells[a:b], np.nan_to_num(here))

        over_chunks(work, chunk_ranges(len(cells), block.row.n_nodes), threads)
    wide = np.full(len(shares), np.nan)
    alone = np.bincount(np.concatenate([c.reshape(-1) for c in shares.cells]), minlength=len(shares)) == 1
    for block, cells, far in zip(model.blocks, shares.cells, reach):
        if len(cells):
            lost = alone[cells].all(axis=1) | ~recovered.usable[block.index]
            worst = np.where(lost, np.nan, departure[cells].max(axis=1))
            np.fmax.at(wide, cells, worst[:, None])
            plus_minus[block.index] = np.where(lost, np.nan, (far + departure[cells]).max(axis=1))
    at_nodes = np.where(recovered.share >= 0, wide[recovered.share], np.nan)
    return StrainError(np.sqrt(error / volume), plus_minus, at_nodes, wide, volume, error, strain)


def strain_components(H: Floats, plane: Plane | None) -> Floats:
    """Return `(6, n)` strain components of `(3, 3, n)` gradients, shear times sqrt 2: their norm is the tensor's."""
    e = np.stack([0.5 * root * (H[i, j] + H[j, i]) for (i, j), root in zip(_COMPONENTS, _ROOTS)])
    if plane is not None and plane.model is None:
        e[plane.normal] = 0.0
    return e


def strain_of(H: Floats, plane: Plane | None, base: str) -> Floats:
    """Return what `strain_components` does, of a finite strain or of the rotation where that is asked for."""
    if not base:
        return strain_components(H, plane)
    if base == "rotation":
        return rotation_vector(H)
    if plane is not None and plane.model is None:
        H = H.copy()
        H[plane.normal, plane.normal] = 0.0
    return _of_finite(with_thickness_stretch(H, plane), base)


def _of_finite(H: Floats, base: str) -> Floats:
    """Return components of a finite strain `(6, n)`, shear times sqrt 2, or of the turn `(9, n)`, from `F - I`."""
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        if base == "turn":
            turn: Floats = Finite(H).turn.reshape(9, -1) * 0.5**0.5
            return turn
        e: Floats = getattr(Finite(H), base)
    return e * _ROOTS[:, None]


def norms(e: Floats) -> Floats:
    """Return the norm over the first axis."""
    size: Floats = np.sqrt(np.einsum("c...,c...->...", e, e))
    return size


def _is_constant(row: Element, plane: Plane | None) -> bool:
    """Return whether the strain is the same everywhere in an element."""
    return row.n_nodes == row.dim + 1 and (plane is None or plane.model != "axisymmetric")


class _Job:
    """Errors of the elements of one block."""

    def __init__(
        self,
        model: Model,
        block: ModelBlock,
        cells: NDArray[np.int32],
        H: Floats,
        nodal: Floats,
        usable: NDArray[np.bool_],
        base: str,
        at: str,
    ) -> None:
        assert block.row is not None
        self.base, self.H, self.nodal = base, H, nodal
        self.model, self.block, self.cells, self.usable = model, block, cells, usable
        row = block.row
        self.rule = rule_of_degree(row.shape, 2 * row.order)
        self.inside = sample_points(row, self.rule.points)
        self.nodes = sample_points(row, row.nodes)
        self.in_space = block.kind in ("surface", "line") and base not in ("", "rotation")
        self.middle = sample_points(row, at)
        self.mean = at == "mean" and len(self.middle.weights) > 1
        self.constant = _is_constant(row, model.plane)

    def strains(self, chunk: ElementChunk, where: Samples) -> Iterator[tuple[Floats, Floats]]:
        """Yield strain components and volume per reference volume at each point."""
        point = None
        for gradients, functions in zip(where.gradients, where.functions):
            if point is None or not self.constant:
                point = chunk.at(gradients, functions)
                e = self.components(point.H, point, chunk)
            yield e, point.weight

    def components(self, H: Floats, point: PointGradient, chunk: ElementChunk) -> Floats:
        """Return what is compared, of a gradient at a point of the elements."""
        if not self.in_space:
            return strain_of(H, self.model.plane, self.base)
        return _of_finite(chunk.finite(replace(point, H=H)), self.base)

    def at_nodes(self, chunk: ElementChunk, cells: NDArray[np.int32]) -> Floats:
        """Return what is compared of the recovered gradient, `(6, n_nodes, m)` for strain."""
        if not self.in_space:
            return self.nodal[:, cells.T]
        places = [chunk.at(g, f) for g, f in zip(self.nodes.gradients, self.nodes.functions)]
        columns = [self.H[:, :, column] for column in cells.T]
        return np.stack([self.components(H, place, chunk) for H, place in zip(columns, places)], 1)

    def chunk(self, a: int, b: int) -> tuple[tuple[Floats, Floats, Floats], Floats, Floats]:
        """Return volume, error and strain integrals; then, `(m, n_nodes)`, departure and reach at the nodes."""
        chunk = self.model.chunk(self.block, self.block.connectivity[a:b], self.block.index[a:b])
        nodal = self.at_nodes(chunk, self.cells[a:b])
        volume, error, strain = np.zeros(b - a), np.zeros(b - a), np.zeros(b - a)
        inside = self.strains(chunk, self.inside)
        for (e, size), functions, weight in zip(inside, self.inside.functions, self.rule.weights):
            share = weight * size
            volume += share
            strain += share * np.einsum("cm,cm->m", e, e)
            off = np.einsum("a,cam->cm", functions, nodal) - e
            error += share * np.einsum("cm,cm->m", off, off)
        departure = np.stack(
            [norms(nodal[:, k] - e) for k, (e, _) in enumerate(self.strains(chunk, self.nodes))], 1
        )
        if self.mean and self.in_space:
            middle = _of_finite(mean_gradient(chunk, self.middle, finite=True)[0], self.base)
        elif self.mean:
            middle = strain_of(mean_gradient(chunk, self.middle)[0], self.model.plane, self.base)
        else:
            middle, _ = next(self.strains(chunk, self.middle))
        return (volume, error, strain), departure, norms(nodal - middle[:, None]).T


class StrainJump(NamedTuple):
    """The largest difference between the strains that elements have where they meet.

    Attributes
    ----------
    cells
        `(n_cells,)` the largest jump at the nodes of each cell; NaN where not computed.
    points
        `(n_points,)` `max norm(e_a - e_b)` over the pairs of elements of one group that meet at the node, e the strain
        of each element itself at the node; the largest over its groups; NaN at nodes of no computed cell.
    shares
        `(n_shares,)` the same of each share of the nodes, that is of one group.
    """

    cells: Floats
    points: Floats
    shares: Floats


def strain_jump(recovered: Recovered, threads: int | None = None, base: str = "") -> StrainJump:
    """Return the largest difference between the strains that elements have where they meet.

    Parameters
    ----------
    recovered
        Tells which elements meet at which node; elements of different groups or dimensions are not compared.
    threads
        None: all processors.
    base
        Of which strain, as in `strain_error`.

    """
    shares, model = recovered.shares, recovered.shares.model
    jump = np.full(len(shares), np.nan)
    meeting = _Meeting(recovered, base)

    def work(a: int, b: int) -> None:
        with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
            e = meeting.strains(a, b)
        share = meeting.share[a:b]
        usable = np.isfinite(e).all(axis=0)
        e, share = e[:, usable], share[usable]
        jump[share] = 0.0
        step = 1
        while len(pairs := np.flatnonzero(share[step:] == share[:-step])):
            np.maximum.at(jump, share[pairs], norms(e[:, pairs + step] - e[:, pairs]))
            step += 1

    over_chunks(work, meeting.ranges(), threads)
    cells = np.full(model.result.n_cells, np.nan)
    points = np.full(len(model.points), np.nan)
    for block, own in zip(model.blocks, shares.cells):
        if len(own):
            usable = recovered.usable[block.index]
            cells[block.index[usable]] = np.fmax.reduce(jump[own[usable]], axis=1)
            np.fmax.at(points, block.connectivity[usable], jump[own[usable]])
    return StrainJump(cells, points, jump)


class _Meeting:
    """Pairs of share and cell, sorted by share, and the strain of the cell there."""

    def __init__(self, recovered: Recovered, base: str) -> None:
        self.shares, self.base = recovered.shares, base
        shares = self.shares
        model = shares.model
        share = np.concatenate([c.reshape(-1) for c in shares.cells])
        used = [np.repeat(recovered.usable[b.index], c.shape[1]) for b, c in zip(model.blocks, shares.cells)]
        order = np.argsort(share, kind="stable")
        self.entry = order[np.concatenate(used)[order]]
        self.share = share[self.entry]
        self.offset = np.concatenate([[0], np.cumsum([c.size for c in shares.cells])])
        self.nodes = [sample_points(b.row, b.row.nodes) if b.row else None for b in model.blocks]
        self.constant = [b.row is not None and _is_constant(b.row, model.plane) for b in model.blocks]

    def ranges(self) -> list[tuple[int, int]]:
        """Ranges of pairs that do not cut a share."""
        starts = np.flatnonzero(np.concatenate([[True], np.diff(self.share) > 0]))
        steps = np.searchsorted(starts, np.arange(0, len(self.share), _PER_CHUNK))
        cuts = np.append(starts[np.minimum(steps, len(starts) - 1)], len(self.share))
        return [(int(a), int(b)) for a, b in pairwise(np.unique(cuts))]

    def strains(self, a: int, b: int) -> Floats:
        """Return `(6, b - a)` strain components of each pair."""
        model = self.shares.model
        out = np.empty((6, b - a))
        entry = self.entry[a:b]
        for k, (block, samples) in enumerate(zip(model.blocks, self.nodes)):
            if samples is None:
                continue
            here = np.flatnonzero((entry >= self.offset[k]) & (entry < self.offset[k + 1]))
            cell, local = np.divmod(entry[here] - self.offset[k], block.connectivity.shape[1])
            if self.constant[k]:
                local[:] = 0
            for node in np.unique(local):
                mine = local == node
                which = cell[mine]
                chunk = model.chunk(block, block.connectivity[which], block.index[which])
                point = chunk.at(samples.gradients[node], samples.functions[node])
                if self.base and block.kind in ("surface", "line"):
                    out[:, here[mine]] = _of_finite(chunk.finite(point), self.base)
                else:
                    out[:, here[mine]] = strain_of(point.H, model.plane, self.base)
        return out
