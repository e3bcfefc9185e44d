"""Steps and load cases from files: which states a call is about, and the combinations of them."""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import partial
from pathlib import Path

from unturn import io
from unturn.combinations import Combination
from unturn.errors import UnturnError, UsageError
from unturn.extremes import Kind
from unturn.io.table import attach_displacement_table, read_displacement_table
from unturn.pipeline import StrainOptions, settled
from unturn.result import Result
from unturn.states import State
from unturn.superposition import superposed_states

TABLE_ARRAY = "displacement"
"""Name of the point array that a table of displacements becomes."""


@dataclass(frozen=True)
class Files:
    """What a call names.

    Parameters
    ----------
    files
        One series, or load cases.
    tables
        Tables of displacements: each is a load case, or a step, on the mesh of the one file.
    combinations
        Of the load cases; None: they are taken as they are.
    as_series
        The files or tables are the steps of one series, in the order of the last number in their names.
    keep_going
        A file that cannot be opened fails when its turn comes, not at once.
    zero_step
        Step of the one series from which displacements are measured.
    """

    files: Sequence[Path]
    tables: Sequence[Path] = ()
    combinations: Sequence[Combination] | None = None
    as_series: bool = False
    keep_going: bool = False
    zero_step: int | None = None

    @property
    def kind(self) -> Kind:
        """Whether the states are steps or load cases."""
        alone = len(self.files) == 1 and not self.tables and self.combinations is None
        return "step" if alone or self.as_series else "case"


def open_states(asked: Files, options: StrainOptions) -> tuple[Sequence[State], StrainOptions, Result | None]:
    """Return the states that a call is about, the options with which to compute them, and the zero step.

    Raises
    ------
    UsageError
        A call that cannot be right.
    InputError
        A file that cannot be opened.
    """
    _check(asked, options)
    zero = None
    if asked.zero_step is not None:
        zero = _step(asked.files[0], asked.zero_step)
    if asked.tables:
        options = replace(options, displacement=TABLE_ARRAY)
    return *chosen_states(_states(asked), options, asked.combinations), zero


def chosen_states(
    states: Sequence[State], options: StrainOptions, combinations: Sequence[Combination] | None
) -> tuple[Sequence[State], StrainOptions]:
    """Return the states, or the combinations of them, and the options with which to compute them.

    Raises
    ------
    UsageError
        Too few states, or load cases that cannot be combined.
    """
    if combinations is None:
        if len(states) == 1:
            raise UsageError(
                f"{states[0].name} holds one step: an envelope needs a series, several files or "
                "--combinations."
            )
        return states, _settled(options, states[-1])
    names = [s.name for s in states]
    twice = {n for n in names if names.count(n) > 1}
    if twice:
        raise UsageError(f"two load cases are called {min(twice)!r}: give the files different names.")
    return superposed_states({s.name: s.read for s in states}, combinations, options)


def _check(asked: Files, options: StrainOptions) -> None:
    combined = asked.combinations is not None
    if combined and asked.as_series:
        raise UsageError(
            "--as-series makes steps of the files, and --combinations load cases: give one of them."
        )
    if asked.tables and len(asked.files) > 1:
        raise UsageError(
            "--displacement-table: each table is a load case on the mesh of one file, and several files are given."
        )
    if asked.tables and options.displacement is not None:
        raise UsageError("--displacement and --displacement-table exclude each other: give one of them.")
    if asked.zero_step is None:
        return
    if combined:
        raise UsageError(
            "--zero-step does not go with --combinations: a load case has its own undeformed state."
        )
    if len(asked.files) > 1 or asked.tables:
        raise UsageError("--zero-step is a step of one series; several files are given.")


def _step(path: Path, number: int) -> Result:
    opened = io.open_result(path)
    n = 1 if opened.steps is None else len(opened.steps)
    if not 0 <= number < n:
        raise UsageError(
            f"{path} has {n} step{'s' * (n != 1)}, 0 to {n - 1}; --zero-step {number} does not exist."
        )
    return opened.read(number)


def _settled(options: StrainOptions, last: State) -> StrainOptions:
    """Return the options with the kind of a flat mesh settled by the last state, where that can be used."""
    try:
        return settled(options, last.read())
    except UnturnError:  # it is told where it is met
        return options


def _states(asked: Files) -> list[State]:
    as_case = asked.combinations is not None
    if asked.tables:
        mesh = partial(io.read, asked.files[0])
        tables = numbered(asked.tables) if asked.as_series else asked.tables
        return [State(t.stem if as_case else t.name, partial(_with_table, mesh, t)) for t in tables]
    files = numbered(asked.files) if asked.as_series else asked.files
    return [s for f in files for s in _of_file(f, len(files) > 1, as_case, asked.keep_going)]


def _with_table(mesh: Callable[[], Result], table: Path) -> Result:
    return attach_displacement_table(mesh(), read_displacement_table(table), TABLE_ARRAY)


def numbered(files: Sequence[Path]) -> list[Path]:
    """Return the files in the order of the last number in their names.

    Raises
    ------
    UsageError
        A name without a number.
    """
    numbers = [re.findall(r"\d+", f.stem) for f in files]
    for file, found in zip(files, numbers):
        if not found:
            raise UsageError(f"--as-series: the name of {file} holds no number by which to order it.")
    return [f for _, f in sorted(zip([int(n[-1]) for n in numbers], files))]


def _of_file(path: Path, several: bool, as_case: bool, keep_going: bool) -> list[State]:
    """Return the states of one file; with `as_case` their names are those of load cases in combinations."""
    try:
        opened = io.open_result(path)
    except UnturnError as error:
        if not keep_going:
            raise
        return [State(path.stem if as_case else path.name, partial(_fail, error))]
    if opened.steps is None:
        return [State(path.stem if as_case else path.name, partial(opened.read, 0))]
    number = "{0}:{1}" if as_case else "{0} step {1}" if several else "step {1}"
    alone = len(opened.steps) == 1 and as_case
    return [
        State(
            path.stem if alone else number.format(path.stem if as_case else path.name, k),
            partial(opened.read, k),
            time,
        )
        for k, time in enumerate(opened.steps)
    ]


def _fail(error: UnturnError) -> Result:
    """Stand for a file that could not be opened."""
    raise error


def read_first(files: Sequence[Path]) -> Result:
    """Return the first file that can be read: it tells what the output can hold, and carries that of combinations.

    Raises
    ------
    InputError
        None can be read.
    """
    errors = []
    for path in files:
        try:
            return io.read(path)
        except UnturnError as error:
            errors.append(error)
    raise errors[0]
