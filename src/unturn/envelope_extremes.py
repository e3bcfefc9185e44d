"""The extremes of an envelope over the places of each region, and which of them are for the table."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence

import numpy as np

from unturn.envelope_arrays import RANGE
from unturn.measures import MEASURES
from unturn.series import SERIES_MEASURES
from unturn.states import Envelope, Extreme, Judged
from unturn.statistics import statistics

MOST_REGIONS = 5
"""Regions that the table shows."""


def find_extremes(envelope: Envelope) -> tuple[tuple[Extreme, ...], ...]:
    """Return the extremes of each region of an envelope."""
    return tuple(tuple(_of_region(envelope, region)) for region in envelope.judged)


def _of_region(envelope: Envelope, region: Judged) -> Iterator[Extreme]:
    places = envelope.places
    own = places.of(region.region.cells)
    for of in envelope.tracked:
        values = np.asarray(of.values, dtype=np.float64).reshape(places.n, -1)
        upper = of.which == "maximum"
        for c, label in enumerate(envelope.components.get(of.array, ("",))):
            s = statistics(values[:, c], places.weight, own, (99.9,) if upper else ())
            value, place = (s.maximum, s.at_maximum) if upper else (s.minimum, s.at_minimum)
            made_by = [states.reshape(places.n, -1) for states in of.made_by]
            states = tuple(int(at[place, c]) for at in made_by) if place >= 0 else ()
            yield Extreme(of, c, label, value, place, states, s.percentiles.get(99.9, math.nan))


def unit_of(measure: str) -> str:
    """Return ``strain``, ``radian``, ``1`` or ``1/time``."""
    if measure.startswith(RANGE):
        return "strain"
    return SERIES_MEASURES[measure].unit if measure in SERIES_MEASURES else MEASURES[measure].unit


def in_table(envelope: Envelope, e: Extreme) -> bool:
    """Return whether a number is for people: scalars, outer principal values, components where there is nothing else."""
    measure, which = e.of.measure, e.of.which
    if measure.startswith("principal_strain"):
        return (e.component, which) in (("1", "maximum"), ("3", "minimum"))
    if not e.component:
        row = MEASURES.get(measure)
        return which == "maximum" or (row is not None and row.signed)
    only = not any(n.startswith(("equivalent", "principal")) for n in envelope.arrays)
    return only and math.isfinite(e.value)


def foremost(envelope: Envelope) -> Sequence[int]:
    """Return the positions of the regions of the table: of many those with the largest peaks, largest first."""
    regions = range(len(envelope.judged))
    if len(regions) <= MOST_REGIONS:
        return regions
    return sorted(regions, key=lambda k: -_leading(envelope, k))[:MOST_REGIONS]


def _leading(envelope: Envelope, region: int) -> float:
    of_table = (e for e in envelope.extremes[region] if in_table(envelope, e))
    return max(
        (e.value for e in of_table if e.of.which == "maximum" and math.isfinite(e.value)), default=-1.0
    )
