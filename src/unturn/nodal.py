"""Measures at nodes: the gradient is recovered there, everything else is derived from it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from unturn.borders import Layout, lay_out
from unturn.errors import UsageError
from unturn.fields import check_request, component_names, fill_measures, with_thermal_thickness
from unturn.frames import Frame
from unturn.gradient import over_chunks, with_thickness_stretch
from unturn.kinematics._symmetric import PAIRS, Floats
from unturn.measures import MEASURES, Split
from unturn.model import Model
from unturn.recovery import Method, NodeShares, Recovered, recover_gradient, sheets
from unturn.regions import Region
from unturn.thermal import Thermal

_CHUNK = 8192
FOLD = 40.0
"""Degrees between neighbouring surface cells above which nothing is averaged across their edge."""


@dataclass(frozen=True, eq=False)
class NodeFields:
    """Measures at the nodes of a model.

    Attributes
    ----------
    arrays
        Measure name -> `(n,)` or `(n, components)`, n of `layout`; NaN at nodes of no computed cell.
    components
        Names of the components.
    recovered
        The recovered gradient that small measures follow from.
    of_finite
        That of finite measures; another one when they are measured from a zero step.
    free
        `(6, n_shares)` free thermal strain of the shares of the nodes, or None.
    layout
        Which points the rows of the arrays are of.
    changes
        Measures of what changed since the step before, by name, as `arrays`.
    """

    arrays: dict[str, Floats]
    components: dict[str, tuple[str, ...]]
    recovered: Recovered
    of_finite: Recovered
    layout: Layout
    free: Floats | None = None
    changes: dict[str, Floats] = field(default_factory=dict)

    def behind(self, name: str) -> Recovered:
        """Return the recovered gradient that a measure follows from."""
        return self.of_finite if MEASURES[name].finite else self.recovered

    def at_shares(self, name: str, which: NDArray[np.int64], equivalent_poisson: float | None) -> Floats:
        """Return a measure, in the axes of the file, at some shares of the nodes: `(m,)` or `(m, components)`."""
        recovered = self.behind(name)
        free = None if self.free is None else self.free[:, which]
        with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
            split = _split(recovered.values[:, :, which], recovered.shares.model, equivalent_poisson, free)
            return MEASURES[name].compute(split).T


def _split(
    H: Floats, model: Model, equivalent_poisson: float | None, free: Floats | None, directions: bool = False
) -> Split:
    finite = with_thickness_stretch(H, model.plane)
    if free is not None:
        H = with_thermal_thickness(H, free, model.plane)
    return Split(H, equivalent_poisson, directions, finite, free)


def recover_in_regions(
    model: Model, regions: Sequence[Region], method: Method = "patch", threads: int | None = None
) -> Recovered:
    """Return the gradient at nodes, never averaged across borders of regions, dimensions or folds of surfaces."""
    groups = np.zeros(model.result.n_cells, dtype=np.int64)
    for number, region in enumerate(regions, 1):
        groups[region.cells] = number
    return recover_gradient(model, sheets(model, groups, FOLD), method, threads)


def nodal_fields(
    model: Model,
    names: Sequence[str],
    regions: Sequence[Region],
    *,
    method: Method = "patch",
    equivalent_poisson: float | None = None,
    frame: Frame | None = None,
    thermal: Thermal | None = None,
    threads: int | None = None,
    split: bool = False,
    layout: Layout | None = None,
) -> NodeFields:
    """Return measures at nodes.

    Parameters
    ----------
    model
        See `build_model`.
    names
        Array names, as `choose_measures` returns them.
    regions
        Nothing is averaged across their borders, nor across dimensions, nor across folds of surfaces above 40 degrees. On a
        border the value of the region with most volume at the node is given.
    method
        ``patch``, ``extrapolate`` or ``average``, see `recover_gradient`.
    equivalent_poisson, frame, thermal, threads
        As in `compute_fields`.
    split
        Give every region its own value on a border: further rows stand for duplicates of its points.
    layout
        That of other measures on the same cells and regions, to be kept.

    Raises
    ------
    UsageError
        A measure of the cells alone; a finite or mechanical measure of surfaces or lines in space; a frame that is given on
        cells; a temperature on cells.
    """
    check_request(model, names, frame, thermal)
    _check(model, names, frame, thermal)
    recovered = recover_in_regions(model, regions, method, threads)
    layout = layout or lay_out(recovered, split)
    measures = [MEASURES[name] for name in names]
    n, share = len(layout.point), layout.shares(recovered)
    arrays = {m.name: np.empty((n, len(m.components)) if m.components else n) for m in measures}
    free = None if thermal is None else _free_strain(recovered.shares, thermal)

    def work(start: int, stop: int) -> None:
        rows = slice(start, stop)
        part = None if free is None else free[:, share[rows]]
        H = recovered.values[:, :, share[rows]]
        H[:, :, share[rows] < 0] = np.nan
        directions = any(m.directions for m in measures)
        with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
            found = _split(H, model, equivalent_poisson, part, directions)
            axes = None if frame is None else frame.axes(model.points[layout.point[rows]].T, rows, None)
            fill_measures(arrays, rows, measures, found, axes)

    over_chunks(work, [(s, min(s + _CHUNK, n)) for s in range(0, n, _CHUNK)], threads)
    return NodeFields(arrays, component_names(measures, frame), recovered, recovered, layout, free)


def _check(model: Model, names: Sequence[str], frame: Frame | None, thermal: Thermal | None) -> None:
    alone = [n for n in names if n not in MEASURES]
    if alone:
        raise UsageError(
            f"{alone[0]} belongs to cells; it has no value at nodes. Leave it out of --measures."
        )
    if frame is not None and (frame.cells is not None or frame.surface):
        raise UsageError(
            f"--frame {frame.text!r} is given on cells; at nodes use a cartesian or cylindrical frame."
        )
    finite = [n for n in names if MEASURES[n].finite]
    spatial = [
        b for b in model.blocks if b.row is not None and len(b.active) and b.kind in ("surface", "line")
    ]
    mechanical = [n for n in names if MEASURES[n].mechanical]
    if (finite or mechanical) and spatial:
        raise UsageError(
            f"{(finite or mechanical)[0]} of surfaces and lines in space is not recovered at nodes; ask for it at centroids "
            "(--at centroid)."
        )
    if thermal is not None and thermal.nodal is None:
        raise UsageError("--at nodes needs the temperature at nodes: give a point array with --temperature.")
    if thermal is not None and not thermal.isotropic:
        raise UsageError("--at nodes takes one expansion coefficient a region, not three.")


def _free_strain(shares: NodeShares, thermal: Thermal) -> Floats:
    """Return the free strain at the shares of the nodes; coefficients are those of its cells there, averaged."""
    assert thermal.nodal is not None
    n = len(shares)
    total, count = np.zeros(n), np.zeros(n)
    for block, cells in zip(shares.model.blocks, shares.cells):
        alpha = np.repeat(thermal.expansion[block.index, 0], cells.shape[1])
        total += np.bincount(cells.reshape(-1), alpha, n)
        count += np.bincount(cells.reshape(-1), minlength=n)
    with np.errstate(invalid="ignore"):
        growth = total / count * (thermal.nodal[shares.point] - thermal.reference)
    free = np.zeros((len(PAIRS), n))
    free[:3] = growth
    return free
