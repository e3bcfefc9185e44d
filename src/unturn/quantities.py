"""Named quantities of a result: a peak, a percentile or a value at a point."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unturn.errors import InputError, UsageError
from unturn.fields import CellFields
from unturn.gradient import sample_points
from unturn.kinematics._symmetric import Floats
from unturn.locate import locate
from unturn.measures import Split
from unturn.quantity_text import Quantity
from unturn.regions import Region, named_regions
from unturn.statistics import statistics


@dataclass(frozen=True, eq=False)
class Found:
    """A quantity of one result.

    Attributes
    ----------
    value
        The value.
    cell
        The cell that holds it; -1: none in particular.
    at
        Where; None for a percentile.
    cells
        Of how many cells.
    floor
        How far the stored precision can move it.
    """

    value: float
    cell: int
    at: Floats | None
    cells: int
    floor: float = 0.0


BLUR = 5.0
"""Noise floors by which the stored precision can move a strain: up to 2.2 was seen in components at centroids, over all
kinds of elements with 32 and 64 bits; a peak among many cells, a norm, or a corner of an element has more."""


def find_quantity(quantity: Quantity, fields: CellFields, equivalent_poisson: float | None = None) -> Found:
    """Return a quantity of computed fields.

    Parameters
    ----------
    quantity
        See `parse_quantity`.
    fields
        Computed with ``diagnose=True``, the quantity's measure among the arrays.
    equivalent_poisson
        Effective Poisson ratio of the equivalent strain, for a value at a point.

    Raises
    ------
    UsageError
        No such region, or no cell where it is asked for.
    InputError
        Nothing there is finite.

    Notes
    -----
    A value at a point is derived from the displacement gradient that the shape functions of the element give there; on
    the border of several elements, from the volume-weighted mean of their gradients.
    """
    if quantity.form == "value":
        return _value(quantity, fields, equivalent_poisson)
    d = fields.diagnostics
    assert d is not None
    cells = _cells(quantity, fields)
    values = fields.arrays[quantity.measure.name]
    column = values if quantity.component < 0 else values[:, quantity.component]
    s = statistics(column, d.volume, cells, (quantity.percentage,) if quantity.form == "percentile" else ())
    if not s.count:
        raise InputError(
            f"{_where(fields)}{quantity.text!r}: none of its {len(cells)} cells has a finite value."
        )
    if quantity.form == "percentile":
        floor = statistics(d.noise, d.volume, cells, (99.0,)).percentiles[99.0]
        return Found(s.percentiles[quantity.percentage], -1, None, s.count, _floor(quantity, floor))
    value, cell = (s.maximum, s.at_maximum) if quantity.form == "peak" else (s.minimum, s.at_minimum)
    return Found(value, cell, d.centroid[cell], s.count, _floor(quantity, d.noise[cell]))


def _floor(quantity: Quantity, noise: float) -> float:
    """Return how far the stored precision can move a quantity; zero for what is neither strain nor rotation."""
    of_strain = quantity.measure.unit in ("strain", "radian") or quantity.measure.name == "det_f"
    return BLUR * float(np.nan_to_num(noise)) if of_strain else 0.0


def _where(fields: CellFields) -> str:
    return f"{fields.model.result.path}: " if fields.model.result.path else ""


def _cells(quantity: Quantity, fields: CellFields) -> NDArray[np.int64]:
    d = fields.diagnostics
    assert d is not None
    judged = d.dimension == fields.model.dimension
    whole = Region("whole", np.flatnonzero(judged), "whole")
    region = whole
    if quantity.region:
        try:
            region = named_regions(fields.model, [quantity.region], d.dimension > 0)[0]
        except UsageError as error:
            raise UsageError(f"{_where(fields)}{quantity.text!r}: {error}") from error
    cells: NDArray[np.int64] = region.cells[d.dimension[region.cells] == d.dimension[region.cells].max()]
    if quantity.point is None:
        return cells
    distance = np.linalg.norm(d.centroid[cells] - quantity.point, axis=1)
    near: NDArray[np.int64] = cells[distance <= quantity.radius]
    if not len(near):
        raise UsageError(
            f"{_where(fields)}{quantity.text!r}: no cell has its centroid there; the nearest is {np.nanmin(distance):.4g} "
            "away. Give a larger radius."
        )
    return near


def _value(quantity: Quantity, fields: CellFields, equivalent_poisson: float | None) -> Found:
    assert quantity.point is not None
    if quantity.measure.mechanical:
        raise UsageError(
            f"{quantity.text!r}: the value at a point is that of the total strain; take a peak or percentile of "
            f"{quantity.measure.name}, within a radius of the point."
        )
    model = fields.model
    places = locate(model, quantity.point)
    if not places:
        raise UsageError(f"{_where(fields)}{quantity.text!r}: no computed element holds that point.")
    total, finite, weight = np.zeros((3, 3, 1)), np.zeros((3, 3, 1)), 0.0
    for place in places:
        row = place.block.row
        assert row is not None
        samples = sample_points(row, place.reference[None])
        chunk = model.chunk(place.block, place.connectivity[None], np.array([place.cell]))
        with np.errstate(invalid="ignore", divide="ignore"):
            point = chunk.at(samples.gradients[0], samples.functions[0])
            share = float(point.weight[0])
            total += share * point.H
            finite += share * chunk.finite(point)
        weight += share
    with np.errstate(invalid="ignore", divide="ignore"):
        split = Split(total / weight, equivalent_poisson, quantity.measure.directions, finite / weight)
        values = quantity.measure.compute(split)
    value = float(values[0] if quantity.component < 0 else values[quantity.component, 0])
    if not math.isfinite(value):
        raise InputError(
            f"{_where(fields)}{quantity.text!r} is not finite there: the element or its displacement is broken."
        )
    d = fields.diagnostics
    assert d is not None
    cells = [place.cell for place in places]
    noise = float(np.nanmax(d.noise[cells]))
    return Found(
        value, cells[0] if len(cells) == 1 else -1, quantity.point, len(cells), _floor(quantity, noise)
    )
