"""Linear superposition of load cases: combinations of factors and signs, derived and judged after factoring.

Displacements are superposed, hence displacement gradients, which are linear in them; everything else is derived from
the sum.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import partial

import numpy as np
from numpy.typing import NDArray

from unturn.combinations import Combination
from unturn.errors import InputError, UnturnError, UsageError, close_matches
from unturn.fields import compute_fields
from unturn.kinematics._symmetric import Floats
from unturn.model import Model
from unturn.pipeline import StrainOptions, model_of
from unturn.precision import MEANT_DISPLACEMENT, storage_resolution
from unturn.result import Array, Result
from unturn.same_mesh import ReferenceMesh
from unturn.states import State, named

_AT_ONCE = 8  # combinations summed in one pass over the load cases
_DISPLACEMENT = "displacement"
_FINE = 2.0**-53


def superposed_states(
    cases: Mapping[str, Callable[[], Result]], combinations: Sequence[Combination], options: StrainOptions
) -> tuple[tuple[State, ...], StrainOptions]:
    """Return one state for each combination, and the options with which to compute them.

    Parameters
    ----------
    cases
        Load case -> reads it. Each is read once for every eight combinations that are gone through, one at a time.
    combinations
        See `read_combinations`.
    options
        Options of the load cases.

    Raises
    ------
    UsageError
        A load case that does not exist, or a solve that is not stated to be linear.

    Notes
    -----
    `H = sum_k f_k H_k` for a geometrically linear solve alone; strain, principal values and the verdict follow from the
    sum. The floor of the strain from the stored precision is at least `sum_k |f_k|` times those of the cases; temperatures
    add up by their distance from the reference; a cell that is deleted in one of the cases is deleted in the sum.
    """
    _check_linear(options)
    for combination in combinations:
        for case in combination.factors:
            if case not in cases:
                raise UsageError(
                    f"combination {combination.name!r}: no load case is called {case!r}.{close_matches(case, cases)} "
                    f"Load cases: {', '.join(cases)}."
                )
    sums = _Sums(cases, combinations, options)
    states = tuple(
        State(c.name, partial(sums.result, k), factors=c.factors, noise=partial(sums.noise, k))
        for k, c in enumerate(combinations)
    )
    plain = replace(options, displacement=_DISPLACEMENT, displacement_scale=1.0, coordinates="reference")
    return states, plain


def _check_linear(options: StrainOptions) -> None:
    if options.solve == "nonlinear":
        raise UsageError(
            "load cases of a geometrically nonlinear solve cannot be superposed: its displacements are not linear in the "
            "loads. Solve each combination, and give those results without --combinations."
        )
    if options.solve != "linear":
        raise UsageError(
            "load cases can be superposed only where each was solved as geometrically linear, and the files do not say it: "
            "state --solve linear if they were. If they were not, their sum is wrong: solve each combination."
        )


class _Sums:
    """Sums of displacements, several combinations at once."""

    def __init__(
        self,
        cases: Mapping[str, Callable[[], Result]],
        combinations: Sequence[Combination],
        options: StrainOptions,
    ) -> None:
        self.cases, self.combinations, self.options = cases, combinations, options
        self.base: Result | None = None
        self.mesh: ReferenceMesh | None = None
        self.start = -1
        self.sums: list[_Sum] = []
        self.failed: dict[str, UnturnError] = {}
        self.cold: list[str] = []  # cases without the array of temperature

    def result(self, k: int) -> Result:
        """Return the mesh with the displacement of combination k, and its temperature where one is asked for."""
        start = k - k % _AT_ONCE
        if start != self.start:
            self._sum(start)
        for case in self.combinations[k].factors:
            if case in self.failed:
                raise named(f"load case {case}", self.failed[case], case)
        assert self.base is not None
        return self.sums[k - start].on(self.base, self.options, self.cold)

    def noise(self, k: int) -> Floats | None:
        """Return the floor of the strain `(n_cells,)` from the stored precision of the cases; None: as fine as the sum."""
        return self.sums[k - self.start].noise

    def _sum(self, start: int) -> None:
        chosen = self.combinations[start : start + _AT_ONCE]
        self.start, self.sums = start, [_Sum() for _ in chosen]
        for case, read in self.cases.items():
            if case in self.failed or not any(case in c.factors for c in chosen):
                continue
            try:
                loaded = self._load(case, read())
            except UnturnError as error:
                self.failed[case] = error
                continue
            for combination, total in zip(chosen, self.sums):
                if case in combination.factors:
                    total.add(combination.factors[case], loaded)

    def _load(self, case: str, result: Result) -> _Loaded:
        model = model_of(result, self.options)
        if self.mesh is None:
            self.mesh = ReferenceMesh(model)
            self.base = replace(model.result, points=model.points, point_data={}, component_names={})
        else:
            self.mesh.compare(model)
        warming, on_points = _warming(result, self.options)
        if warming is None and self.options.temperature is not None and case not in self.cold:
            self.cold.append(case)
        return _Loaded(model, _noise(model, self.options.threads), warming, on_points)


@dataclass(frozen=True, eq=False)
class _Loaded:
    """One load case: model, floor of its strain, and how far its temperature lies from the reference."""

    model: Model
    noise: Floats | None
    warming: Floats | None
    on_points: bool


def _warming(result: Result, options: StrainOptions) -> tuple[Floats | None, bool]:
    name, reference = options.temperature, options.reference_temperature
    if name is None or reference is None:
        return None, True
    for data, on_points in ((result.point_data, True), (result.cell_data, False)):
        if name in data:
            return np.asarray(data[name], dtype=np.float64) - reference, on_points
    return None, True


def _noise(model: Model, threads: int | None) -> Floats | None:
    """Return the floor of the strain of a load case; None where its displacement is stored as finely as a sum of it."""
    found = [storage_resolution(a, MEANT_DISPLACEMENT) for a in model.displacement.stored]
    if all(r.relative <= _FINE and not r.absolute for r in found):
        return None
    fields = compute_fields(model, ["element_volume"], threads=threads, diagnose=True)
    assert fields.diagnostics is not None
    return np.nan_to_num(fields.diagnostics.noise)


class _Sum:
    """What one combination adds up to."""

    def __init__(self) -> None:
        self.displacement: Floats | None = None
        self.noise: Floats | None = None
        self.warming: dict[bool, Floats] = {}
        self.dead: NDArray[np.bool_] | None = None

    def add(self, factor: float, case: _Loaded) -> None:
        """Add a load case."""
        self.displacement = _plus(self.displacement, factor, case.model.displacement.values)
        if case.noise is not None:
            self.noise = _plus(self.noise, abs(factor), case.noise)
        if case.warming is not None:
            self.warming[case.on_points] = _plus(self.warming.get(case.on_points), factor, case.warming)
        deleted = case.model.left_out.get("deleted")
        if deleted is not None:
            if self.dead is None:
                self.dead = np.zeros(case.model.result.n_cells, dtype=bool)
            self.dead[deleted] = True

    def on(self, base: Result, options: StrainOptions, cold: Sequence[str]) -> Result:
        """Return the mesh with the sums as arrays."""
        assert self.displacement is not None
        points: dict[str, Array] = {_DISPLACEMENT: self.displacement}
        cells: dict[str, Array] = {}
        name, reference = options.temperature, options.reference_temperature
        notes = base.notes
        if name is not None and reference is not None and self.warming:
            if len(self.warming) > 1:
                raise InputError(
                    f"{name!r} is at nodes in one load case and on cells in another: it cannot be added up. Write it in "
                    "one way."
                )
            for on_points, warming in self.warming.items():
                (points if on_points else cells)[name] = reference + warming
            if cold:
                notes = (*notes, f"without an array {name!r}, so not heated: load case {', '.join(cold)}")
        if options.alive is not None and self.dead is not None:
            cells[options.alive] = (~self.dead).astype(np.int8)
        return replace(base.with_arrays(point_data=points, cell_data=cells), notes=notes)


def _plus(total: Floats | None, factor: float, values: Floats) -> Floats:
    return factor * values if total is None else total + factor * values
