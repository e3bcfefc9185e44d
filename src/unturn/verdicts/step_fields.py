"""One step of a result with everything that limits need of it computed once."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from functools import cached_property

import numpy as np

from unturn.errors import UnturnError
from unturn.fields import CellDiagnostics
from unturn.model import Model
from unturn.pipeline import Computed, StrainOptions, compute
from unturn.regions import Region, find_regions
from unturn.result import Result
from unturn.rigid import RigidMotion
from unturn.rigid_parts import computed_cells
from unturn.surface import SURFACE_MEASURES
from unturn.verdict import Verdict, judge
from unturn.verdicts.limit import At, Limits, Quantity
from unturn.written_regions.finder import RegionFinder
from unturn.written_regions.select import Cells, Mask

Group = tuple[At, str | None, str]


def group_of(quantity: Quantity) -> Group:
    """Return which quantities are computed together: location, frame and, on free surfaces, base."""
    at: At = quantity.at or "centroid"
    return at, quantity.frame, quantity.base if at == "surface" else "small"


def measures_by_group(limits: Limits) -> dict[Group, list[str]]:
    """Return what must be computed, in the order of the file."""
    found: dict[Group, list[str]] = {}
    for quantity in (limit.quantity for limit in limits.limits if limit.quantity.measure):
        names = found.setdefault(group_of(quantity), [])
        name = SURFACE_MEASURES[quantity.name].replaces if quantity.at == "surface" else quantity.name
        if name not in names:
            names.append(name)
    return found or {("centroid", None, "small"): ["element_volume"]}


class StepFields:
    """One step of a result, with everything that limits need computed once.

    Parameters
    ----------
    number, time
        Position in the series and its time.
    result
        As read.
    limits
        See `Limits`.
    options
        How it is read.
    zero
        The step from which displacements are measured.
    previous
        Motions of the step before.
    threads
        None: all processors.

    Raises
    ------
    InputError
        The step cannot be used.
    """

    def __init__(
        self,
        number: int,
        time: float | None,
        result: Result,
        limits: Limits,
        options: StrainOptions,
        zero: Result | None = None,
        previous: Sequence[RigidMotion] = (),
        threads: int | None = None,
    ) -> None:
        self.number, self.time, self.result = number, time, result
        self.shown = None if time is None else number
        self._options, self.threads = replace(options, threads=threads), threads
        self._surface_poisson = limits.surface_poisson
        self._solve = options.solve
        self._zero, self._previous = zero, previous
        self._asked = measures_by_group(limits)
        self._computed: dict[Group, Computed | UnturnError] = {}
        self._verdicts: dict[str, Verdict] = {}
        self.base = self._first()
        self.finder = RegionFinder(
            limits.regions, Cells(self.model, self.diagnostics.centroid, self.diagnostics.dimension)
        )

    def _first(self) -> Computed:
        """Return the first group that can be computed: geometry and verdicts are the same in all."""
        error: UnturnError | None = None
        for group in self._asked:
            try:
                return self.computed(group)
            except UnturnError as found:
                error = found
        assert error is not None
        raise error

    def computed(self, group: Group) -> Computed:
        """Return the fields of a group.

        Raises
        ------
        UnturnError
            They cannot be computed.
        """
        if group not in self._computed:
            at, frame, base = group
            poisson = self._surface_poisson if at == "surface" else self._options.poisson
            options = replace(
                self._options, measures=self._asked[group], base=base, at=at, frame=frame, poisson=poisson
            )
            try:
                found: Computed | UnturnError = compute(
                    self.result, options, zero=self._zero, diagnose=True, previous=self._previous
                )
            except UnturnError as error:
                found = error
            self._computed[group] = found
        made = self._computed[group]
        if isinstance(made, UnturnError):
            raise made
        return made

    @property
    def model(self) -> Model:
        """The model."""
        return self.base.fields.model

    @property
    def diagnostics(self) -> CellDiagnostics:
        """What is known of every cell."""
        found = self.base.fields.diagnostics
        assert found is not None
        return found

    @property
    def motions(self) -> tuple[RigidMotion, ...]:
        """The rigid motions that were taken out."""
        return tuple(r.motion for r in self.base.removals)

    @cached_property
    def groups(self) -> list[Region]:
        """The parts of the file across whose borders nothing is recovered."""
        return find_regions(self.model, computed_cells(self.model))

    @cached_property
    def mid_surface(self) -> Mask | None:
        """Which cells show strain of their mid-surface or axis only; None when none does."""
        mask = np.zeros(self.result.n_cells, dtype=bool)
        for block in self.model.blocks:
            if block.kind in ("surface", "line"):
                mask[block.index] = True
        return mask if mask.any() else None

    def verdict(self, region: str) -> Verdict:
        """Return whether the small strain holds in a region."""
        if region not in self._verdicts:
            cells = np.flatnonzero(self.finder.find(region).inside)
            self._verdicts[region] = judge(self.diagnostics, Region(region, cells, "group"), self._solve)
        return self._verdicts[region]
