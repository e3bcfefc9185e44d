"""Linear superposition of load cases: combinations of factors and signs, derived and judged after factoring.

Displacements are superposed, hence displacement gradients, which are linear in them; everything else is derived from
the sum.
"""

from __future__ import annotations

import itertools
import math
import tomllib
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from unturn.envelopes import State
from unturn.errors import InputError, UnturnError, UsageError, close_matches
from unturn.kinematics._symmetric import Floats
from unturn.model import Model
from unturn.pipeline import StrainOptions, model_of
from unturn.result import Result
from unturn.same_mesh import ReferenceMesh

_AT_ONCE = 8  # combinations summed in one pass over the load cases
_MOST_REVERSIBLE = 10
_DISPLACEMENT = "displacement"


@dataclass(frozen=True)
class Combination:
    """A name and the factor of each load case."""

    name: str
    factors: Mapping[str, float]


def read_combinations(path: Path) -> tuple[Combination, ...]:
    """Return the combinations of a TOML file.

    ``[combinations.NAME]`` holds one line a load case: ``case = 1.35``, or ``case = "+-1.5"`` for a load that acts either
    way. A combination with k of those becomes 2^k, each with its signs in its name.

    Raises
    ------
    InputError
        The file cannot be read or is no TOML.
    UsageError
        What it holds is no table of combinations.
    """
    try:
        data = tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise InputError(
            f"{path}: the combinations cannot be read: {error.strerror}. Check the name."
        ) from error
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise InputError(f"{path}: not a TOML file ({error}). Correct it there.") from error
    tables = data.get("combinations")
    others = sorted(set(data) - {"combinations"})
    if others or not isinstance(tables, dict) or not tables:
        found = f"it has {others[0]!r}" if others else "it has none"
        raise UsageError(f"{path}: expected tables [combinations.NAME] and nothing else; {found}.")
    return tuple(c for name, table in tables.items() for c in _expanded(path, name, table))


def _expanded(path: Path, name: str, table: Any) -> list[Combination]:
    if not isinstance(table, dict) or not table:
        raise UsageError(f"{path}: combination {name!r} holds no load case; write lines such as wind = 1.5.")
    factors = {case: _factor(path, name, case, value) for case, value in table.items()}
    both = [case for case, (_, reversible) in factors.items() if reversible]
    if len(both) > _MOST_REVERSIBLE:
        raise UsageError(
            f"{path}: combination {name!r} has {len(both)} reversible loads, which is {2 ** len(both)} combinations; "
            f"at most {_MOST_REVERSIBLE} are expanded."
        )
    found = []
    for signs in itertools.product((1.0, -1.0), repeat=len(both)):
        sign = dict(zip(both, signs))
        words = ", ".join(f"{'+' if sign[c] > 0 else '-'}{c}" for c in both)
        found.append(
            Combination(
                f"{name} ({words})" if both else name,
                {case: value * sign.get(case, 1.0) for case, (value, _) in factors.items()},
            )
        )
    return found


def _factor(path: Path, name: str, case: str, value: Any) -> tuple[float, bool]:
    """Return a factor and whether it acts either way."""
    reversible = isinstance(value, str) and value.startswith("+-")
    number = math.nan
    if reversible:
        try:
            number = float(value[2:])
        except ValueError:
            number = math.nan
    elif isinstance(value, int | float) and not isinstance(value, bool):
        number = float(value)
    if not math.isfinite(number):
        raise UsageError(
            f"{path}: combination {name!r}: the factor of {case!r} is {value!r}. Write a number, 1.35, or both signs, "
            '"+-1.35".'
        )
    return number, reversible


def superposed_states(
    cases: Mapping[str, Callable[[], Result]], combinations: Sequence[Combination], options: StrainOptions
) -> tuple[tuple[State, ...], StrainOptions]:
    """Return one state for each combination, and the options with which to compute them.

    Parameters
    ----------
    cases
        Load case -> reads it. Each is read once for every eight combinations, one at a time.
    combinations
        See `read_combinations`.
    options
        Options of the load cases.

    Raises
    ------
    UsageError
        A load case that does not exist, or a solve that was not linear.

    Notes
    -----
    `H = sum_k f_k H_k` for a geometrically linear solve alone; strain, principal values and the verdict follow from the
    sum.
    """
    if options.solve == "nonlinear":
        raise UsageError(
            "load cases of a geometrically nonlinear solve cannot be superposed: its displacements are not linear in the "
            "loads. Solve each combination, and give those results without --combinations."
        )
    for combination in combinations:
        for case in combination.factors:
            if case not in cases:
                raise UsageError(
                    f"combination {combination.name!r}: no load case is called {case!r}.{close_matches(case, cases)} "
                    f"Load cases: {', '.join(cases)}."
                )
    sums = _Sums(cases, combinations, options)
    states = tuple(
        State(c.name, lambda k=k: sums.result(k), factors=c.factors)  # type: ignore[misc]
        for k, c in enumerate(combinations)
    )
    plain = replace(options, displacement=_DISPLACEMENT, displacement_scale=1.0, coordinates="reference")
    return states, plain


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
        self.sums: list[Floats] = []
        self.failed: dict[str, UnturnError] = {}

    def result(self, k: int) -> Result:
        """Return the mesh with the displacement of combination k."""
        start = k - k % _AT_ONCE
        if start != self.start:
            self._sum(start)
        for case in self.combinations[k].factors:
            if case in self.failed:
                error = self.failed[case]
                raise type(error)(f"load case {case}: {error}")
        assert self.base is not None
        return self.base.with_arrays(point_data={_DISPLACEMENT: self.sums[k - start]})

    def _sum(self, start: int) -> None:
        chosen = self.combinations[start : start + _AT_ONCE]
        self.start, self.sums = start, []
        for case, read in self.cases.items():
            if case in self.failed or not any(case in c.factors for c in chosen):
                continue
            try:
                model = model_of(read(), self.options)
                self._check(model)
            except UnturnError as error:
                self.failed[case] = error
                continue
            if not self.sums:
                self.sums = [np.zeros_like(model.points) for _ in chosen]
            for k, c in enumerate(chosen):
                if case in c.factors:
                    self.sums[k] += c.factors[case] * model.displacement.values

    def _check(self, model: Model) -> None:
        if self.mesh is None:
            self.mesh = ReferenceMesh(model)
            self.base = replace(model.result, points=model.points, point_data={}, component_names={})
        else:
            self.mesh.compare(model)
