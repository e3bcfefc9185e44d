"""States, that is steps or load cases; what is asked of them; and what an envelope of them holds."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path, PurePath
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unturn.around import Trust
from unturn.envelope_places import CellPlaces
from unturn.errors import UnturnError
from unturn.extremes import Kind, Stored
from unturn.kinematics._symmetric import Floats
from unturn.model import Model
from unturn.numbering import Numbering
from unturn.pipeline import StrainOptions
from unturn.regions import Region
from unturn.result import Result
from unturn.verdict import Verdict

_FILE = re.compile(r"(?:[^:]*/)?([^:/]*?\.\w+)(?=: | is | has | cannot | holds )")
"""A file name, with or without folders, at the start of an error."""
UNKNOWN = Trust(math.nan)
"""Of a value of which nothing is known."""


@dataclass(frozen=True, eq=False)
class State:
    """One step or load case.

    Parameters
    ----------
    name
        For people: ``step 3``, ``wind.vtu``.
    read
        Reads it.
    time
        Its time; None when the file holds none.
    factors
        For a combination: load case -> factor.
    noise
        Called after `read`: floor of its strain from the stored precision, `(n_cells,)`, where that is coarser than the
        arrays that are read tell. None: they tell.
    """

    name: str
    read: Callable[[], Result]
    time: float | None = None
    factors: Mapping[str, float] | None = None
    noise: Callable[[], Floats | None] | None = None


@dataclass(frozen=True)
class EnvelopeOptions:
    """What an envelope is of.

    Parameters
    ----------
    strain
        Options of every state; `measures` may name those of `unturn.series.SERIES_MEASURES` too.
    kind
        Whether the states are steps of one series or load cases.
    tensor_range
        Whether to find the largest difference of strain tensors.
    keep_going
        Whether the other states go on when one fails.
    regions
        Names of regions; none: all of them.
    folder
        Where the temporary file of the tensor range lies; None: the system's own place.
    full
        Tell of every extreme how far to trust it, or only of those of the table.
    """

    strain: StrainOptions = field(default_factory=StrainOptions)
    kind: Kind = "step"
    tensor_range: bool = True
    keep_going: bool = False
    regions: tuple[str, ...] = ()
    folder: Path | None = None
    full: bool = False


@dataclass(frozen=True, eq=False)
class Judged:
    """The worst verdict on a region over the states, and the state it is of (-1: none)."""

    region: Region
    verdict: Verdict
    state: int


@dataclass(frozen=True, eq=False)
class Tracked:
    """An extreme of a measure: the array it is in, its values at the places, and the states that made each."""

    array: str
    measure: str
    which: Literal["maximum", "minimum"]
    values: Stored
    made_by: tuple[Stored, ...]


@dataclass(frozen=True, eq=False)
class Extreme:
    """The extreme of one number over the places of a region and the states.

    Attributes
    ----------
    of
        The extreme of the measure.
    column, component
        Which component: its position and name; zero and empty for a scalar.
    value
        The value.
    place
        Which of the places holds it; -1 for none.
    states
        The states that made it there: one, two for a range, none for a sum.
    percentile
        99.9 % of the volume is below; NaN for smallest values.
    trust
        How far to trust it, as a value of its state; of a range the bounds of both states added.
    """

    of: Tracked
    column: int
    component: str
    value: float
    place: int
    states: tuple[int, ...]
    percentile: float
    trust: Trust = UNKNOWN

    @property
    def name(self) -> str:
        """The number: its measure and component."""
        return self.of.measure + (f"_{self.component}" if self.component else "")


@dataclass(frozen=True, eq=False)
class Envelope:
    """Extremes of a result over its states.

    Attributes
    ----------
    options, states
        As given.
    model
        Of the last state that was computed.
    arrays
        By name, `(n,)` or `(n, components)`, n cells or points in file order; NaN, or state -1, where no state was
        computed.
    components
        Names of the components.
    tracked
        Which of the arrays are extremes, in the order of the measures.
    judged
        Regions with their worst verdict.
    places
        Where the values live. On borders of regions nodes have a value for every region: `tracked` is of those.
    volume
        `(n_cells,)` of every cell that was computed at least once.
    left_out
        ``{reason: file positions}`` of cells that no state computed.
    failures
        State -> what went wrong.
    notes
        Sentences for the user.
    numbers
        The solver's element or node numbers, where an array holds them.
    extremes
        Those of each region, in the order of `judged`.
    """

    options: EnvelopeOptions
    states: tuple[State, ...]
    model: Model
    arrays: dict[str, Stored]
    components: dict[str, tuple[str, ...]]
    tracked: tuple[Tracked, ...]
    judged: tuple[Judged, ...]
    places: CellPlaces
    volume: Floats
    left_out: dict[str, NDArray[np.int64]]
    failures: dict[int, UnturnError]
    notes: tuple[str, ...]
    numbers: Numbering | None
    extremes: tuple[tuple[Extreme, ...], ...] = ()


def named(name: str, error: UnturnError, file: str = "") -> UnturnError:
    """Return an error that names its state, which may be a file or a step of one: no file is named twice.

    Parameters
    ----------
    name
        Of the state.
    error
        What went wrong.
    file
        Name of a file without its suffix: an error that names it needs no other name.

    Examples
    --------
    >>> from unturn.errors import InputError
    >>> str(named("step 3", InputError("run.xdmf: cut short.")))
    'step 3: run.xdmf: cut short.'
    >>> str(named("run.xdmf step 3", InputError("old/run.xdmf is cut short.")))
    'old/run.xdmf step 3 is cut short.'
    """
    said = str(error)
    told = _FILE.match(said)
    own, gap, step = name.partition(" step ")
    if told is not None and told[1] == own:
        said = f"{told[0]}{gap}{step}{said[told.end() :]}"
    elif told is None or PurePath(told[1]).stem != file:
        said = f"{name}: {said}"
    return type(error)(said)
