"""One step of a result, read, computed and summarised as a plan says: that of the report, or that of its reference."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError
from unturn.io import ResultFile
from unturn.options import StrainOptions
from unturn.picture_keys import PictureRequest
from unturn.pictures.computing import Step
from unturn.pictures.plan import Plan
from unturn.pipeline import Computed, compute, settled
from unturn.result import Result
from unturn.summary import Summary, SummaryOptions, summarise
from unturn.written_regions.finder import RegionFinder
from unturn.written_regions.select import Cells, NoRegion


@dataclass(frozen=True, eq=False)
class Side:
    """A step of a result with its fields and its summary, as a plan reads it; `options` are those of the fields."""

    plan: Plan
    result: Result
    options: StrainOptions
    zero: Result | None
    computed: Computed
    summary: Summary

    def step(self, requests: Sequence[PictureRequest]) -> Step:
        """Return what pictures are drawn of."""
        options = replace(
            self.plan.options, at="centroid", threads=self.options.threads, surface=self.options.surface
        )
        return Step(self.result, requests, options, self.zero, self.plan.surface_poisson, self.plan.regions)


def side_of(opened: ResultFile, result: Result, plan: Plan, threads: int | None) -> Side:
    """Return one step of a result, `result`, as a plan reads it.

    Raises
    ------
    UsageError
        Options that do not fit the mesh, or a zero step that does not exist.
    InputError
        It cannot be used.
    """
    options = series_options(opened, plan, threads)
    zero = zero_of(opened, plan)
    computed = compute(result, options, zero=zero, diagnose=True)
    computed.require_some()
    summary = summarise(computed, summary_options(plan, computed, full=True), threads)
    return Side(plan, result, options, zero, computed, summary)


def series_options(opened: ResultFile, plan: Plan, threads: int | None) -> StrainOptions:
    """Return how every step is computed."""
    options = replace(plan.options, threads=threads, at=plan.report.at, measures=plan.report.measures or None)
    if options.at == "surface" and plan.surface_poisson is not None:
        options = replace(options, poisson=plan.surface_poisson)
    if opened.steps is None or len(opened.steps) < 2:
        return options
    return settled(options, opened.read(len(opened.steps) - 1))


def zero_of(opened: ResultFile, plan: Plan) -> Result | None:
    """Return the step from which displacements are measured."""
    if plan.zero_step is None:
        return None
    n = 0 if opened.steps is None else len(opened.steps)
    if plan.zero_step >= n:
        steps = f"{n or 'no'} step{'s' * (n != 1)}"
        raise UsageError(
            f"{plan.path}: zero_step {plan.zero_step} does not exist: {opened.path} has {steps}."
        )
    return opened.read(plan.zero_step)


def summary_options(plan: Plan, computed: Computed, full: bool) -> SummaryOptions:
    """Return how the summaries of a report are made.

    Raises
    ------
    UsageError
        A region of the plan that this result does not have.
    """
    wish, options = plan.report, plan.options
    at = "mean" if wish.at == "mean" else "centroid"
    defined = _defined(plan, computed)
    return SummaryOptions(
        wish.regions, options.solve, wish.mode, options.equivalent_poisson, at, full, defined
    )


def _defined(plan: Plan, computed: Computed) -> dict[str, NDArray[np.int64]]:
    """Return the cells of the regions of the report that the plan defines, by name."""
    d = computed.fields.diagnostics
    assert d is not None
    finder = RegionFinder(plan.regions, Cells(computed.fields.model, d.centroid, d.dimension))
    try:
        names = [name for name in plan.report.regions if name in plan.regions]
        return {name: np.flatnonzero(finder.find(name).inside) for name in names}
    except NoRegion as error:
        raise UsageError(f"{plan.path}: {error}.") from None
