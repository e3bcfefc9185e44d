"""The arrays that an envelope writes: extremes, the states that made them, and their times."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from unturn.envelope_places import CellPlaces, Components
from unturn.extremes import Extremes, Kind, Stored
from unturn.kinematics._symmetric import Floats
from unturn.measures import MEASURES
from unturn.series import SERIES_MEASURES
from unturn.states import Tracked
from unturn.tensor_range import Ints

RANGE = "strain_range_equivalent"
"""Name of the range of the strain tensor; that of another tensor has its base behind it."""


class EnvelopeArrays:
    """The arrays of an envelope, and which of them are extremes.

    Parameters
    ----------
    places
        Where the values live.
    kind
        Whether the states are steps or load cases.
    times
        Of the states; arrays of times are made for steps all of which have one.

    Attributes
    ----------
    arrays, components, tracked
        As of `unturn.states.Envelope`.
    """

    def __init__(self, places: CellPlaces, kind: Kind, times: Sequence[float | None]) -> None:
        self._places, self._kind = places, kind
        self._times = None
        if kind == "step" and None not in times:
            self._times = np.array([*times, np.nan], dtype=np.float64)  # the last for "no state"
        self.arrays: dict[str, Stored] = {}
        self.components: Components = {}
        self.tracked: list[Tracked] = []

    def add(self, name: str, values: Stored, components: tuple[str, ...] | None = None) -> None:
        """Add an array of values at the places."""
        self.arrays[name] = self._places.written(values)
        if components is not None:
            self.components[name] = components

    def _add_state(self, name: str, state: Stored, components: tuple[str, ...] | None = None) -> None:
        self.add(f"{name}_{self._kind}", state, components)
        if self._times is not None:
            written = self.arrays[f"{name}_{self._kind}"]
            self.arrays[f"{name}_time"] = self._times[written]
            if components is not None:
                self.components[f"{name}_time"] = components

    def add_extremes(self, name: str, extremes: Extremes, components: tuple[str, ...] | None) -> None:
        """Add largest and smallest values and largest magnitudes of a measure, and the states that made them."""
        signed = SERIES_MEASURES[name].signed if name in SERIES_MEASURES else MEASURES[name].signed
        for which, values, state in extremes.found(signed):
            self.add(f"{name}_{which}", values, components)
            self._add_state(f"{name}_{which}", state, components)
            if which != "largest_magnitude":
                self.tracked.append(Tracked(f"{name}_{which}", name, which, values, (state,)))

    def add_total(self, name: str, values: Floats) -> None:
        """Add a sum over the steps."""
        self.add(name, values)
        self.tracked.append(Tracked(name, name, "maximum", values, ()))

    def add_range(self, family: str, size: Floats, first: Ints, second: Ints) -> None:
        """Add the range of a strain tensor and the two states that make it."""
        name = f"{RANGE}_{family}" if family else RANGE
        pair = first.astype(np.int32), second.astype(np.int32)
        self.add(name, size)
        for which, state in zip(("first", "second"), pair):
            self._add_state(f"{name}_{which}", state)
        self.tracked.append(Tracked(name, name, "maximum", size, pair))
