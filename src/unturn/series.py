"""What changes from one step of a series to the next: increments, rates, accumulated strain.

Only the step before is held; a long series costs no more memory than two steps.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from unturn.errors import InputError, UsageError
from unturn.gradient import chunk_ranges, over_chunks
from unturn.kinematics._motion import equivalent
from unturn.kinematics._relative import finite_gradient, increments
from unturn.kinematics._symmetric import Floats
from unturn.measures import TENSOR, VECTOR
from unturn.source import Source
from unturn.verdict import Solve

_SMALL = Source("derived", "difference of two steps")
_RELATIVE = Source(
    "published",
    "Simo and Hughes 1998, Computational Inelasticity, chapter 8: relative deformation F_k F_k-1^-1",
)


@dataclass(frozen=True)
class SeriesMeasure:
    """One measure of what changes between two steps.

    Parameters
    ----------
    name
        Array name, fixed.
    components
        Names of the components; empty for a scalar.
    unit
        ``strain``, ``radian``, ``1/time``.
    finite
        Whether it comes from the relative deformation `F_k F_k-1^-1`; None: as the solve says.
    signed
        Whether its smallest value says something.
    total
        Whether it is a sum over the steps.
    meaning
        One line for people.
    source
        Where the formula comes from.
    """

    name: str
    components: tuple[str, ...]
    unit: str
    finite: bool | None
    signed: bool
    total: bool
    meaning: str
    source: Source


def _row(
    name: str, components: tuple[str, ...], unit: str, finite: bool | None, meaning: str
) -> SeriesMeasure:
    total = name.startswith("accumulated")
    signed = bool(components)
    return SeriesMeasure(
        name, components, unit, finite, signed, total, meaning, _SMALL if finite is False else _RELATIVE
    )


SERIES_MEASURES: dict[str, SeriesMeasure] = {
    row.name: row
    for row in (
        _row("strain_increment", TENSOR, "strain", False, "small strain less that of the step before"),
        _row("equivalent_strain_increment", (), "strain", False, "equivalent of the strain increment"),
        _row("rotation_increment", VECTOR, "radian", False, "small rotation less that of the step before"),
        _row("accumulated_equivalent_strain", (), "strain", False, "sum of the equivalents of the strain increments"),
        _row("strain_increment_hencky", TENSOR, "strain", True, "ln V of the deformation since the step before"),
        _row("equivalent_strain_increment_hencky", (), "strain", True, "equivalent of ln V since the step before"),
        _row("finite_rotation_increment", VECTOR, "radian", True, "rotation vector of R since the step before"),
        _row("accumulated_equivalent_strain_hencky", (), "strain", True,
             "sum of the equivalents of ln V since the step before: of D dt"),
        _row("deformation_rate", TENSOR, "1/time", None, "D = ln V / dt of the deformation since the step before"),
        _row("equivalent_deformation_rate", (), "1/time", None, "equivalent of the deformation rate"),
        _row("spin", VECTOR, "1/time", None, "rotation vector of R since the step before, over dt"),
    )
}  # fmt: skip
"""Every measure of a series; a finite base turns the small ones into those of the relative deformation."""

_COUNTERPARTS = {
    "strain_increment": "strain_increment_hencky",
    "equivalent_strain_increment": "equivalent_strain_increment_hencky",
    "rotation_increment": "finite_rotation_increment",
    "accumulated_equivalent_strain": "accumulated_equivalent_strain_hencky",
}


def choose_series_measures(
    names: Sequence[str], base: str = "small", solve: Solve = "unknown"
) -> tuple[str, ...]:
    """Return the series measures among the names, in table order, as the base asks.

    Raises
    ------
    UsageError
        A finite one of a linear solve.

    Examples
    --------
    >>> choose_series_measures(["spin", "strain", "strain_increment"], base="hencky")
    ('strain_increment_hencky', 'spin')
    """
    wanted = {n if base == "small" else _COUNTERPARTS.get(n, n) for n in names}
    chosen = tuple(n for n in SERIES_MEASURES if n in wanted)
    finite = [n for n in chosen if SERIES_MEASURES[n].finite]
    if finite and solve == "linear":
        raise UsageError(
            f"{finite[0]} of a geometrically linear solve is fiction: the solve itself used the small strain. Ask for "
            "the small increments, or state --solve nonlinear if it was."
        )
    return chosen


class StepChanges:
    """Makes the measures of a series, step after step.

    Parameters
    ----------
    names
        Names in `SERIES_MEASURES`.
    solve
        ``linear``: rates come from the difference of the gradients; else from the relative deformation.
    equivalent_poisson
        Effective Poisson ratio of the equivalents; None for `sqrt(2/3 e':e')`.

    Notes
    -----
    The first step is measured from the undeformed state (or the zero step), so accumulated strain counts from there; it
    has no rate. A cell that is not computed in a step (NaN) has no increment there or in the next; its accumulated
    strain keeps what it had.
    """

    def __init__(
        self, names: Sequence[str], solve: Solve = "unknown", equivalent_poisson: float | None = None
    ) -> None:
        self.names = tuple(names)
        self._rates_finite = solve != "linear"
        self._poisson = equivalent_poisson
        kinds = {self._is_finite(SERIES_MEASURES[n]) for n in names}
        self._finite, self._small = True in kinds, False in kinds
        self._before: dict[bool, Floats] = {}
        self._time: float | None = None
        self._totals: dict[str, Floats] = {}

    def _is_finite(self, row: SeriesMeasure) -> bool:
        return self._rates_finite if row.finite is None else row.finite

    @property
    def needs(self) -> tuple[str, ...]:
        """Measures that must be computed at every step."""
        found = [*(["displacement_gradient"] if self._small else []),
                 *(["strain_biot", "finite_rotation"] if self._finite else [])]  # fmt: skip
        if any("equivalent" in n for n in self.names):
            found.append("equivalent_strain")  # a plane mesh must then state its third direction
        return tuple(found)

    def add(self, arrays: Mapping[str, Floats], time: float | None) -> dict[str, Floats]:
        """Return the measures of the next step, `(n_cells,)` or `(n_cells, components)`.

        Parameters
        ----------
        arrays
            Those of `needs`, `(n_cells, components)` as `unturn.fields.compute_fields` gives them.
        time
            Time of the step; needed for rates.

        Raises
        ------
        UsageError
            Rates of a series without times.
        InputError
            The time does not rise.
        """
        dt = self._time_step(time)
        after: dict[bool, Floats] = {}
        if self._small:
            after[False] = np.ascontiguousarray(arrays["displacement_gradient"].T).reshape(3, 3, -1)
        if self._finite:
            after[True] = finite_gradient(arrays["strain_biot"].T, arrays["finite_rotation"].T)
        n = next(iter(after.values())).shape[-1]
        out = {
            name: np.empty(
                (n, len(SERIES_MEASURES[name].components)) if SERIES_MEASURES[name].components else n
            )
            for name in self.names
        }

        def work(start: int, stop: int) -> None:
            with np.errstate(invalid="ignore", over="ignore"):
                for finite, H in after.items():
                    self._chunk(finite, H, slice(start, stop), dt, out)

        over_chunks(work, chunk_ranges(n, 8))
        self._before, self._time = after, time
        return {name: self._total(name, values) for name, values in out.items()}

    def _chunk(self, finite: bool, H: Floats, cells: slice, dt: float, out: dict[str, Floats]) -> None:
        now = H[:, :, cells]
        before = self._before[finite][:, :, cells] if self._before else np.zeros_like(now)
        strain, rotation = increments(before, now, finite=finite)
        made: dict[str, Callable[[], Floats]] = {
            "strain": lambda: strain,
            "rotation": lambda: rotation,
            "equivalent": lambda: equivalent(strain, self._poisson),
        }
        for name in self.names:
            row = SERIES_MEASURES[name]
            if self._is_finite(row) is finite:
                what = (
                    "equivalent"
                    if not row.components
                    else "rotation"
                    if len(row.components) == 3
                    else "strain"
                )
                values = made[what]() / dt if row.unit == "1/time" else made[what]()
                out[name][cells] = values.T

    def _total(self, name: str, values: Floats) -> Floats:
        if not SERIES_MEASURES[name].total:
            return values
        so_far = self._totals.get(name)
        if so_far is not None:
            values = np.where(np.isnan(values), so_far, np.where(np.isnan(so_far), values, so_far + values))
        self._totals[name] = values
        return values.copy()

    def _time_step(self, time: float | None) -> float:
        if not any(SERIES_MEASURES[n].unit == "1/time" for n in self.names):
            return np.nan
        if time is None:
            raise UsageError(
                "rates need the time of every step, and these files hold none: ask for increments."
            )
        if self._time is None:
            return np.nan
        if not time > self._time:
            raise InputError(
                f"the time does not rise from one step to the next ({self._time:g}, then {time:g}): there is no rate. "
                "Correct the times of the series, or ask for increments."
            )
        return time - self._time
