"""The function a library user calls for steps and load cases: envelope."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from os import PathLike
from pathlib import Path
from typing import Any

from unturn import io
from unturn._api import add_arrays
from unturn._api_meshes import strain_options
from unturn.combinations import Combination, expanded_combinations, read_combinations
from unturn.envelope_json import envelope_data
from unturn.envelope_text import envelope_text
from unturn.envelopes import envelope as find_envelope
from unturn.errors import UnturnError, UsageError
from unturn.extremes import Kind
from unturn.result import Result
from unturn.state_files import Files, chosen_states, open_states, read_first
from unturn.states import EnvelopeOptions, State

Name = str | PathLike[str]


@dataclass(frozen=True, eq=False)
class EnvelopeReport:
    """What `unturn.envelope` returns.

    Attributes
    ----------
    result
        The mesh and arrays of the last state that could be used (of combinations: of the first file), with the arrays of
        the envelope: ``NAME_maximum``, ``NAME_maximum_step`` ...
    data
        What the command writes as JSON, schema ``unturn.envelope/1``, without ``output``.
    text
        What the command prints.
    failures
        With `keep_going`: name of a state -> why it is left out.
    """

    result: Result
    data: dict[str, Any]
    text: str
    failures: dict[str, UnturnError]


def envelope(
    series: Name | Sequence[Name | Result] | Mapping[str, Name | Result],
    *,
    combinations: Name | Mapping[str, Mapping[str, float | str]] | None = None,
    as_series: bool = False,
    range: bool = True,
    keep_going: bool = False,
    displacement_table: Sequence[Name] = (),
    zero_step: int | None = None,
    region: Sequence[str] = (),
    prefix: str = "",
    overwrite: bool = False,
    **options: Any,
) -> EnvelopeReport:
    """Return the extremes of every cell or node over steps or load cases, and which of them made each.

    One state is in memory at a time where they come from files; those that made the extremes of regions are read twice, to
    tell how far to trust them.

    Parameters
    ----------
    series
        One series, by its path; or several paths or results, which are load cases on one mesh; or load cases by name.
        Of a series among load cases by name the last step counts; among paths every step is a load case.
    combinations
        Superpose the load cases, whose solves were linear: a TOML file, or combination -> (load case -> factor), where
        ``"+-1.5"`` is a load that acts either way. Load cases have the names of `series`, or of their files without suffix.
    as_series
        The paths or results are the steps of one series: paths in the order of the last number in their names, results as
        they come, with the times they hold.
    range
        Whether to find the largest difference of the strain tensors of any two states, by way of a temporary file.
    keep_going
        Leave out a state that fails, and go on.
    displacement_table
        Tables of displacements by node number, each a load case (with `as_series` a step) on the mesh of the one path.
    zero_step
        Measure displacements from this step of the series.
    region
        Report these regions only: groups, or ``array=value``.
    prefix
        Goes before each array name.
    overwrite
        Replace arrays of the same name; otherwise that is an error.
    **options
        The keywords of `unturn.strain` but for `zero`: ``measures`` (those of a series too), ``base``, ``at`` (``centroid``,
        ``mean`` or ``nodes``), ``solve``, ``alive``, ``frame``, ``remove_rigid``, ``thermal_expansion`` ...

    Returns
    -------
    EnvelopeReport
        Extremes are float64, `(n,)` or `(n, components)`; the states that made them int32, -1 for none, with their times as
        float64 where every step has one. Strain is dimensionless, rotation in radians, rates in 1/time.

    Raises
    ------
    UsageError
        A call that cannot be right: options that do not fit each other or the mesh, load cases that do not exist, a solve
        that is not stated linear for combinations.
    InputError
        A state that cannot be used, another mesh, or no state that can be used.

    Notes
    -----
    The range of the strain tensor is `max over k, l of sqrt(2/3 d':d')`, d the difference of the tensors of states k and
    l: an invariant's own range is not a strain range. Superposed are displacements, `H = sum of f_k H_k`; everything else
    is derived from the sum. Definitions and sources stand in `docs/conventions.md`.

    Examples
    --------
    >>> import numpy as np
    >>> from unturn import CellBlock, Result, envelope
    >>> points = np.array([[0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1.0]])
    >>> block = CellBlock("tetra", np.array([[0, 1, 2, 3]]), np.array([0]))
    >>> pull = Result(points, (block,), {"u": points * [1e-3, -0.3e-3, -0.3e-3]})
    >>> push = Result(points, (block,), {"u": points * [-1e-3, 0.3e-3, 0.3e-3]})
    >>> found = envelope({"pull": pull, "push": push}).result.cell_data
    >>> [round(float(found[n][0]) * 1e6) for n in ("equivalent_strain_maximum", "strain_range_equivalent")]
    [867, 1733]
    >>> int(found["principal_strain_minimum_case"][0, 2])
    1
    """
    strain = strain_options(options)
    chosen = _combinations(combinations)
    paths = _paths(series)
    if paths:
        tables = tuple(map(Path, displacement_table))
        asked = Files(paths, tables, chosen, as_series, keep_going, zero_step)
        states, strain, zero = open_states(asked, strain)
        kind, files = asked.kind, [str(f) for f in (*paths, *tables)]
        first: Callable[[], Result] = partial(read_first, paths)
    else:
        given = _given(series, as_series)
        if displacement_table or (chosen is not None and (as_series or zero_step is not None)):
            raise UsageError(
                "displacement_table is for a mesh given by its path, and as_series and zero_step are not for combinations."
            )
        kind = "step" if as_series else "case"
        zero = None if zero_step is None else _zero(given, zero_step, kind)
        states, strain = chosen_states(given, strain, chosen)
        files, first = [s.name for s in given], given[0].read
    found = find_envelope(
        states, EnvelopeOptions(strain, kind, range, keep_going, tuple(region), full=True), zero=zero
    )
    base = found.model.result if chosen is None else first()
    result = add_arrays(
        base, found.places.on, found.arrays, found.components, prefix=prefix, overwrite=overwrite
    )
    failures = {states[k].name: error for k, error in found.failures.items()}
    return EnvelopeReport(result, envelope_data(found, files), envelope_text(found, files), failures)


def _combinations(
    combinations: Name | Mapping[str, Mapping[str, float | str]] | None,
) -> tuple[Combination, ...] | None:
    if combinations is None or isinstance(combinations, Mapping):
        return None if combinations is None else expanded_combinations(combinations)
    return read_combinations(Path(combinations))


def _paths(series: Name | Sequence[Name | Result] | Mapping[str, Name | Result]) -> list[Path]:
    """Return the paths where nothing but paths is given, else none."""
    if isinstance(series, str | PathLike):
        return [Path(series)]
    if isinstance(series, Mapping) or any(isinstance(s, Result) for s in series):
        return []
    if not series:
        raise UsageError("the series is empty: give a path, or the paths or results of load cases.")
    return [Path(s) for s in series if not isinstance(s, Result)]


def _given(series: Any, as_series: bool) -> list[State]:
    """Return the states of results in memory, or of load cases by name."""
    if isinstance(series, Mapping):
        return [_state(str(name), source) for name, source in series.items()]
    word = "step" if as_series else "case"
    return [_state(f"{word} {k}", source) for k, source in enumerate(series)]


def _state(name: str, source: Name | Result) -> State:
    if not isinstance(source, Result):
        return State(name, partial(io.read, source))
    time = None if source.steps is None else source.steps.values[source.steps.current]
    return State(name, lambda: source, time)


def _zero(given: Sequence[State], number: int, kind: Kind) -> Result:
    if kind == "case" or not 0 <= number < len(given):
        raise UsageError(
            f"zero_step={number} is the number of a step of one series, 0 to {len(given) - 1}: say as_series=True for "
            "results that are the steps of one."
        )
    return given[number].read()
