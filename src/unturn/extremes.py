"""Extremes of arrays over states, and what must be computed at each state for them."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError, close_matches
from unturn.kinematics._finite import BASES
from unturn.kinematics._symmetric import Floats
from unturn.measures import ESTIMATES, GEOMETRY, MEASURES, SURFACE_AXES, choose_measures
from unturn.series import SERIES_MEASURES, StepChanges

Kind = Literal["step", "case"]
Which = Literal["maximum", "minimum", "largest_magnitude"]
Stored = NDArray[np.float64] | NDArray[np.int32]

_NO_RANGE = "almansi"  # its axes turn with the body: tensors of two steps cannot be subtracted
_MECHANICAL = "mechanical"
_NO_TENSOR = ("displacement_gradient", "small_strain_error")


class Extremes:
    """Largest and smallest values of an array over the states, and the states they are of; NaN does not count."""

    def __init__(self, shape: tuple[int, ...]) -> None:
        self.maximum, self.minimum = np.full(shape, -np.inf), np.full(shape, np.inf)
        self.at_maximum, self.at_minimum = (np.full(shape, -1, dtype=np.int32) for _ in range(2))

    def add(self, values: Floats, state: int) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
        """Take the values of a state; return where they are a new maximum and a new minimum."""
        higher, lower = values > self.maximum, values < self.minimum
        for mask, extreme, at in (
            (higher, self.maximum, self.at_maximum),
            (lower, self.minimum, self.at_minimum),
        ):
            np.copyto(extreme, values, where=mask)
            at[mask] = state
        return higher, lower

    def found(self, signed: bool) -> Iterator[tuple[Which, Stored, Stored]]:
        """Yield each extreme and the states that made it, NaN and -1 for none; of equal ones the earlier state counts."""
        for extreme, at in ((self.maximum, self.at_maximum), (self.minimum, self.at_minimum)):
            extreme[at < 0] = np.nan
        yield "maximum", self.maximum, self.at_maximum
        yield "minimum", self.minimum, self.at_minimum
        if signed:
            high, low = np.abs(self.maximum), np.abs(self.minimum)
            upper = (high > low) | ((high == low) & (self.at_maximum <= self.at_minimum))
            yield (
                "largest_magnitude",
                np.where(upper, high, low),
                np.where(upper, self.at_maximum, self.at_minimum),
            )


@dataclass(frozen=True)
class Plan:
    """What is computed at each state and what is made of it."""

    extremes: tuple[str, ...]
    series: tuple[str, ...]
    families: tuple[str, ...]  # of strain tensors with a range: "", "mechanical" or a finite base
    needs: tuple[str, ...]
    notes: tuple[str, ...]

    @property
    def principal(self) -> tuple[str, ...]:
        """Suffixes of the principal strains whose directions are kept."""
        return tuple(
            n.removeprefix("principal_strain") for n in self.extremes if n.startswith("principal_strain")
        )


def plan_envelope(
    asked: Sequence[str] | None, base: str, changes: StepChanges, tensor_range: bool, mechanical: bool = False
) -> Plan:
    """Return what an envelope of these measures needs; `mechanical`: a free thermal strain is given.

    Raises
    ------
    UsageError
        An unknown measure, or one that has no extremes.
    """
    own = None if asked is None else [n for n in asked if n not in SERIES_MEASURES]
    for name in own or ():
        if name in ESTIMATES:
            raise UsageError(
                f"{name} tells how far one step can be trusted and has no envelope: ask for it with 'unturn strain'."
            )
        if name not in (*MEASURES, *GEOMETRY, *SURFACE_AXES, "all"):
            known = [*MEASURES, *SERIES_MEASURES, *ESTIMATES]
            raise UsageError(
                f"no measure is called {name!r}.{close_matches(name, known)} Measures: those of 'unturn strain', and of a "
                f"series {', '.join(SERIES_MEASURES)}."
            )
    chosen = choose_measures(own, base, mechanical) if own is None or own else ()
    for name in own or ():
        if name in (*GEOMETRY, *SURFACE_AXES) or name.startswith("principal_direction"):
            raise UsageError(
                f"{name} has no largest value. The directions of the extreme principal values are written with "
                "principal_strain; ask for that."
            )
    extremes = tuple(n for n in chosen if n in MEASURES and not n.startswith("principal_direction"))
    families = {_family(n) for n in extremes if MEASURES[n].unit == "strain" and n not in _NO_TENSOR}
    notes: tuple[str, ...] = ()
    if tensor_range and _NO_RANGE in families:
        notes = ("no strain range of the Almansi strain: its axes turn with the body, so that tensors of two steps "
                 "cannot be subtracted",)  # fmt: skip
    ranged = [f for f in ("", _MECHANICAL, *BASES) if f in families - {_NO_RANGE}] if tensor_range else []
    needs = {*extremes, *changes.needs, *(strain_tensor(f) for f in ranged)}
    for suffix in (n.removeprefix("principal_strain") for n in extremes if n.startswith("principal_strain")):
        needs.update(f"principal_direction_{k}{suffix}" for k in (1, 2, 3))
    return Plan(extremes, changes.names, tuple(ranged), tuple(n for n in MEASURES if n in needs), notes)


def _family(name: str) -> str:
    if MEASURES[name].mechanical:
        return _MECHANICAL
    return next((b for b in BASES if name.endswith(f"_{b}")), "")


def strain_tensor(family: str) -> str:
    """Return the name of the strain tensor of a family; ``""`` is the small strain."""
    if family == _MECHANICAL:
        return "mechanical_strain"
    return f"strain_{family}" if family else "strain"
