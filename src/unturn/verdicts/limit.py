"""A limits file in memory: what the result must be, named regions, limits."""

from __future__ import annotations

import datetime
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

from unturn.pipeline import StrainOptions
from unturn.verdicts.units import Unit
from unturn.written_regions.kinds import RegionSpec

At = Literal["centroid", "mean", "nodes", "surface"]
Accepted = Literal["plus-minus", "singular", "mid-surface", "turning"]
Which = Literal["all", "last"] | tuple[int, ...]


@dataclass(frozen=True)
class Waiver:
    """Who lets a limit be exceeded, why, and until when (that day included)."""

    owner: str
    reason: str
    expires: datetime.date

    def holds(self, today: datetime.date) -> bool:
        """Whether it has not expired."""
        return today <= self.expires


@dataclass(frozen=True)
class Quantity:
    """The numbers that a limit is of.

    Parameters
    ----------
    name
        Array name: of a measure with its base, or of the file.
    measure
        Whether it is one of ours.
    component
        Name of a component, ``magnitude``, or empty for a scalar.
    at
        Where its values live; None: where the array of the file is.
    frame
        Axes of the components; None: those of the file.
    base
        ``small`` or the finite base.
    """

    name: str
    measure: bool
    component: str = ""
    at: At | None = "centroid"
    frame: str | None = None
    base: str = "small"


@dataclass(frozen=True)
class Limit:
    """One limit in one region.

    Parameters
    ----------
    id
        Stable name; of a limit in several regions, with the region behind it.
    quantity
        What it is of.
    region
        Name of a region, or ``whole``.
    statistic
        Name in `unturn.verdicts.statistic.STATISTICS`.
    percent
        Of a percentile.
    above, below
        Of a share or a count, as computed.
    threshold
        The same as it is written.
    at_least, at_most
        Bounds in `unit`.
    at_least_array, at_most_array
        Arrays of the file that hold them.
    warn_below, warn_above
        Warning levels in `unit`.
    unit
        Of bounds and value.
    stored_in
        Unit in which an array of the file holds its values; None for measures.
    plus_minus
        Stated for an array of the file, in `unit`.
    steps
        Of a series.
    accept
        What is consented to.
    reason, source
        Why it is, and where the bound comes from.
    waiver
        None: it counts.
    title
        In words; empty: made from the rest.
    """

    id: str
    quantity: Quantity
    region: str
    statistic: str
    unit: Unit
    reason: str
    source: str
    percent: float | None = None
    above: float | None = None
    below: float | None = None
    threshold: float | None = None
    at_least: float | None = None
    at_most: float | None = None
    at_least_array: str | None = None
    at_most_array: str | None = None
    warn_below: float | None = None
    warn_above: float | None = None
    stored_in: Unit | None = None
    plus_minus: float | None = None
    steps: Which = "all"
    accept: frozenset[Accepted] = frozenset()
    waiver: Waiver | None = None
    title: str = ""


@dataclass(frozen=True)
class Limits:
    """Everything a limits file says.

    Parameters
    ----------
    path
        Of the file, as given.
    title
        In words.
    required
        Key of `unturn.verdicts.preconditions.PRECONDITIONS` -> value.
    options
        How the result is read; measures, base and location are those of the limits.
    surface_poisson
        Poisson's ratio of solids, for the strain across their free faces.
    zero_step
        Step from which displacements are measured.
    regions
        By name.
    limits
        In the order of the file.
    written
        Number of ``[[limits]]`` tables.
    """

    path: str
    title: str
    required: Mapping[str, Any]
    options: StrainOptions
    surface_poisson: float | None
    zero_step: int | None
    regions: Mapping[str, RegionSpec]
    limits: tuple[Limit, ...]
    written: int
    settings: Mapping[str, Any] = field(default_factory=dict)
