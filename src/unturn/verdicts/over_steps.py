"""Limits on what changes over the steps of a series: ranges of numbers and of strain tensors."""

from __future__ import annotations

import contextlib
from collections.abc import Sequence
from dataclasses import dataclass, replace
from types import TracebackType

import numpy as np
from numpy.typing import NDArray

from unturn.errors import InputError, UnturnError
from unturn.extremes import Extremes
from unturn.kinematics._symmetric import Floats
from unturn.same_mesh import ReferenceMesh
from unturn.tensor_range import TensorRange
from unturn.verdicts.columns import Column, NoValues
from unturn.verdicts.finding import Place
from unturn.verdicts.limit import Limit, Quantity
from unturn.verdicts.measured import Measured, measure_all, turning
from unturn.verdicts.step import Step
from unturn.written_regions.select import NoRegion


@dataclass(frozen=True)
class Ranged:
    """A limit over steps: what was found, the cell that holds it (-1: none) and the two steps that make it."""

    limit: Limit
    measured: Measured
    cell: int = -1
    steps: tuple[int, ...] = ()


class OverSteps:
    """Takes one step after the other for the limits that are of all of them; used as a context manager."""

    def __init__(self, limits: Sequence[Limit], times: tuple[float, ...] | None) -> None:
        self.limits, self._times = limits, times
        self._stack = contextlib.ExitStack()
        self._mesh: ReferenceMesh | None = None
        self._last: Step | None = None
        self._ranges: dict[tuple[Quantity, object], _Numbers | _Tensors] = {}
        self._errors: dict[str, str] = {}
        self._taken: dict[str, int] = {v.id: 0 for v in limits}
        self._turned: dict[str, tuple[int, list[str]]] = {}

    def __enter__(self) -> OverSteps:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._stack.close()

    def add(self, step: Step, limits: Sequence[Limit]) -> None:
        """Take a step for some of the limits."""
        if not limits:
            return
        try:
            if self._mesh is None:
                self._mesh = ReferenceMesh(step.model)
            else:
                self._mesh.compare(step.model)
        except InputError as error:
            self._errors |= dict.fromkeys((v.id for v in limits), f"step {step.number}: {error}")
            return
        self._last = step
        taken: set[tuple[Quantity, object]] = set()
        for limit in limits:
            key = limit.quantity, (limit.statistic, limit.steps)
            try:
                if key not in self._ranges:
                    self._ranges[key] = self._new(limit, step)
                if key not in taken:
                    self._ranges[key].add(step, limit.quantity)
                taken.add(key)
                self._taken[limit.id] += 1
                if limit.id not in self._turned and (said := turning(step, limit)):
                    self._turned[limit.id] = step.number, said
            except (NoRegion, NoValues, UnturnError) as error:
                self._errors[limit.id] = f"step {step.number}: {error}"

    def forget(self) -> None:
        """Let the last step go before the next one is read."""
        self._last = None

    def _new(self, limit: Limit, step: Step) -> _Numbers | _Tensors:
        if limit.statistic == "range":
            return _Numbers(step.result.n_cells)
        return _Tensors(self._stack.enter_context(TensorRange(step.result.n_cells)), step.result.n_cells)

    def finish(self) -> list[Ranged]:
        """Return each limit with what was found; after that the last step is forgotten."""
        step, self._last = self._last, None
        found = []
        finished: dict[tuple[Quantity, object], tuple[Floats, NDArray[np.int64]]] = {}
        for limit in self.limits:
            key = limit.quantity, (limit.statistic, limit.steps)
            error = self._errors.get(limit.id, "")
            if not error and self._taken[limit.id] < 2:
                error = f"a range over steps needs two at least, and {self._taken[limit.id]} could be used"
            if step is None or error:
                why = error or "its last step could not be used"
                found.append(Ranged(limit, Measured(None, None, error=why)))
                continue
            if key not in finished:
                finished[key] = self._ranges[key].finish(step)
            found.append(self._ranged(step, limit, *finished[key]))
        return found

    def _ranged(self, step: Step, limit: Limit, values: Floats, made_by: NDArray[np.int64]) -> Ranged:
        """Return a limit held against ranges, as if they were values of the last step."""
        step.replace_column(limit.quantity, Column(values, "cells", None))
        measured = self._doubted(limit, measure_all(step, [limit])[0])
        cell = measured.place.get("cell")
        if measured.error or cell is None:
            return Ranged(limit, measured)
        first, later = sorted(int(s) for s in made_by[cell])
        time = None if self._times is None else self._times[later]
        where: Place = {**measured.place, "step": later, "time": time}
        told = replace(
            measured, step=later, time=time, place=where, note=f"between steps {first} and {later}"
        )
        return Ranged(limit, told, cell, (first, later))

    def _doubted(self, limit: Limit, measured: Measured) -> Measured:
        """Return a range with the doubt about the first step that the small strain does not hold in."""
        if measured.error or limit.id not in self._turned:
            return measured
        number, said = self._turned[limit.id]
        others = (d for d in measured.doubts if d not in said)
        return replace(measured, doubts=(*(f"in step {number} {d}" for d in said), *others))


class _Numbers:
    """Largest and smallest value of each cell; a cell without value in any step has none."""

    def __init__(self, n: int) -> None:
        self._extremes = Extremes((n,))
        self._missing = np.zeros(n, dtype=bool)
        self._steps = 0

    def add(self, step: Step, quantity: Quantity) -> None:
        values = step.column(quantity).values
        self._extremes.add(values, step.number)
        self._missing |= ~np.isfinite(values)
        self._steps += 1

    def finish(self, step: Step) -> tuple[Floats, NDArray[np.int64]]:
        values = self._extremes.maximum - self._extremes.minimum
        values[self._missing] = np.nan
        return values, np.stack([self._extremes.at_maximum, self._extremes.at_minimum], axis=1)


class _Tensors:
    """The range of strain tensors; a cell without value in any step has none."""

    def __init__(self, tensors: TensorRange, n: int) -> None:
        self._tensors = tensors
        self._missing = np.zeros(n, dtype=bool)

    def add(self, step: Step, quantity: Quantity) -> None:
        strain = step.tensor(quantity)
        self._tensors.add(strain, step.number)
        self._missing |= ~np.isfinite(strain).all(axis=1)

    def finish(self, step: Step) -> tuple[Floats, NDArray[np.int64]]:
        values, first, second = self._tensors.finish(step.base.equivalent_poisson)
        values[self._missing] = np.nan
        return values, np.stack([first, second], axis=1)
