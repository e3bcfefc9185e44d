"""`unturn envelope`: extremes over the steps of a series or over load cases, and which of them made each."""

from __future__ import annotations

import contextlib
import os
import re
from collections.abc import Callable, Sequence
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, cast

import typer

from unturn.cli import _options as o
from unturn.errors import UnturnError, UsageError

if TYPE_CHECKING:
    from unturn.envelope import Envelope, EnvelopeOptions, State
    from unturn.fields import CellFields
    from unturn.pipeline import StrainOptions
    from unturn.result import Result


def envelope(
    files: Annotated[
        list[Path],
        typer.Argument(
            metavar="SERIES...", help="One series, or several files: load cases on one mesh.", readable=False
        ),
    ],
    output: Annotated[
        Path | None,
        typer.Option(
            "-o",
            "--output",
            metavar="OUT",
            help="Output file, or an existing folder. "
            "Default: the first input's name with .envelope before the suffix.",
        ),
    ] = None,
    measures: Annotated[
        str | None,
        typer.Option(
            metavar="LIST",
            help="Measures by comma, or 'all'; of a series also strain_increment, rotation_increment, deformation_rate, "
            "spin, accumulated_equivalent_strain ... Default: strain,rotation,equivalent_strain,principal_strain.",
        ),
    ] = None,
    base: Annotated[
        o.BaseChoice, typer.Option(help="Replace each small measure by its counterpart of this finite base.")
    ] = o.BaseChoice.small,
    at: Annotated[o.LocationChoice, typer.Option(help="Where values are taken.")] = o.LocationChoice.centroid,
    solve: Annotated[
        o.SolveChoice, typer.Option(help="What the solve was; it decides what the verdict says.")
    ] = o.SolveChoice.unknown,
    combinations: Annotated[
        Path | None,
        typer.Option(
            metavar="FILE.toml",
            help="Superpose the load cases of a linear solve: tables [combinations.NAME] with CASE = FACTOR, or "
            'CASE = "+-FACTOR" for a load that acts either way. CASE is a file\'s name without suffix, with :N after '
            "it where the file is a series.",
        ),
    ] = None,
    as_series: Annotated[
        bool,
        typer.Option(
            "--as-series", help="The files are the steps of one series, by the last number in their names."
        ),
    ] = False,
    steps_output: Annotated[
        Path | None,
        typer.Option(
            metavar="FILE",
            help="Also write a series with the increments, rates and accumulated strain of every step.",
        ),
    ] = None,
    tensor_range: Annotated[
        bool,
        typer.Option(
            "--range/--no-range",
            help="Find the largest difference of strain tensors between any two states, by way of a temporary file "
            "beside the output.",
        ),
    ] = True,
    keep_going: Annotated[
        bool,
        typer.Option(
            "--keep-going",
            help="Leave out a state that fails, name it, and go on; the exit status is still that of the failure.",
        ),
    ] = False,
    displacement: o.Displacement = None,
    displacement_scale: o.Scale = 1.0,
    coordinates: o.Coordinates = o.CoordinatesChoice.reference,
    plane: o.Plane = None,
    axis: o.Axis = o.AxisChoice.y,
    poisson: o.Poisson = None,
    equivalent_poisson: Annotated[
        float | None,
        typer.Option(
            metavar="NU", help="Equivalent strain as 1/(1+NU) times the norm of the principal differences."
        ),
    ] = None,
    remove_rigid: Annotated[
        str,
        typer.Option(
            "--remove-rigid",
            metavar="none|whole|bodies|regions|REGION",
            help="Take the rigid motion of these out of every state first.",
        ),
    ] = "none",
    frame: Annotated[
        str | None,
        typer.Option(
            metavar="FRAME", help="Axes of the components: 'cylindrical z', 'cartesian 1,1,0 0,0,1' ..."
        ),
    ] = None,
    zero_step: Annotated[
        int | None, typer.Option(metavar="N", help="Measure displacements from this step of the series.")
    ] = None,
    region: Annotated[
        list[str] | None,
        typer.Option(metavar="NAME", help="Report this region only (repeatable): a group, or array=value."),
    ] = None,
    alive: o.Alive = None,
    skin: o.Skin = False,
    prefix: Annotated[str, typer.Option(metavar="TEXT", help="Goes before the name of each new array.")] = "",
    overwrite: Annotated[bool, typer.Option("--overwrite", help="Replace arrays of the same name.")] = False,
    json: o.Json = None,
    threads: o.Threads = None,
) -> None:
    """Find the extremes of every cell over steps or load cases, and which of them made each."""
    from unturn.cli._output import Places, check_place
    from unturn.envelope import EnvelopeOptions
    from unturn.io import writable_suffix
    from unturn.pipeline import StrainOptions

    strain = StrainOptions(
        displacement=displacement,
        measures=None if measures is None else [m.strip() for m in measures.split(",") if m.strip()],
        base=base.value, at=at.value, solve=solve.value, plane=plane.value if plane else None, poisson=poisson,
        axis=axis.value, coordinates=coordinates.value, displacement_scale=displacement_scale,
        equivalent_poisson=equivalent_poisson, remove_rigid=remove_rigid, frame=frame, skin=skin, alive=alive,
        threads=threads,
    )  # fmt: skip
    files = _numbered(files) if as_series else files
    inputs = [*files, *([combinations] if combinations is not None else [])]
    check_place(None, json, inputs)
    check_place(None, steps_output, inputs)
    suffix = writable_suffix(files[0], _read_first(files))
    out = Places(output, files, (json, steps_output)).of(files[0], suffix, "envelope")
    _check_target(out)
    states, strain, zero = _states(files, strain, combinations, as_series, keep_going, zero_step)
    options = EnvelopeOptions(
        strain,
        "step" if as_series or (len(files) == 1 and combinations is None) else "case",
        tensor_range,
        keep_going,
        tuple(region or ()),
        out.absolute().parent,
    )
    found = _run(states, options, zero, steps_output, prefix, overwrite)
    base_result = _read_first(files) if combinations is not None else found.model.result
    _write(found, base_result, out, [str(f) for f in files], prefix, overwrite, json)
    if found.failures:
        typer.echo(f"unturn: {len(found.failures)} of {len(states)} {options.kind}s failed", err=True)
        raise typer.Exit(max(e.exit_status for e in found.failures.values()))


def _numbered(files: Sequence[Path]) -> list[Path]:
    """Return the files in the order of the last number in their names."""
    numbers = [re.findall(r"\d+", f.stem) for f in files]
    for file, found in zip(files, numbers):
        if not found:
            raise UsageError(f"--as-series: the name of {file} holds no number by which to order it.")
    return [f for _, f in sorted(zip([int(n[-1]) for n in numbers], files))]


def _check_target(out: Path) -> None:
    """Refuse before the work what could not be written after it."""
    from unturn.io._formats import format_for_writing

    format_for_writing(out)
    folder = out.absolute().parent
    if not folder.is_dir() or not os.access(folder, os.W_OK):
        raise UsageError(f"-o {out}: there is no folder {folder} that may be written to. Choose another one.")


def _settled(strain: StrainOptions, last: State) -> StrainOptions:
    """Return the options with the kind of a flat mesh settled by the last state, where that can be used."""
    from unturn.errors import UnturnError
    from unturn.pipeline import settled

    try:
        return settled(strain, last.read())
    except UnturnError:  # it is told where it is met
        return strain


def _states(
    files: Sequence[Path],
    strain: StrainOptions,
    combinations: Path | None,
    as_series: bool,
    keep_going: bool,
    zero_step: int | None,
) -> tuple[Sequence[State], StrainOptions, Result | None]:
    from unturn import io
    from unturn.cli._steps import chosen_step
    from unturn.superposition import read_combinations, superposed_states

    if combinations is not None and as_series:
        raise UsageError(
            "--as-series makes steps of the files, and --combinations load cases: give one of them."
        )
    zero = None
    if zero_step is not None:
        if len(files) > 1:
            raise UsageError("--zero-step is a step of one series; several files are given.")
        opened = io.open_result(files[0])
        zero = opened.read(chosen_step(opened, str(zero_step)))
    chosen = read_combinations(combinations) if combinations is not None else None
    states = [s for f in files for s in _of_file(f, len(files) > 1, chosen is not None, keep_going)]
    names = [s.name for s in states]
    twice = {n for n in names if names.count(n) > 1}
    if chosen is None:
        if len(states) == 1:
            raise UsageError(
                f"{files[0]} holds one step: an envelope needs a series, several files or --combinations."
            )
        return states, _settled(strain, states[-1]), zero
    if zero is not None:
        raise UsageError(
            "--zero-step does not go with --combinations: a load case has its own undeformed state."
        )
    if twice:
        raise UsageError(f"two load cases are called {min(twice)!r}: give the files different names.")
    return *superposed_states({s.name: s.read for s in states}, chosen, strain), None


def _of_file(path: Path, several: bool, as_case: bool, keep_going: bool) -> list[State]:
    """Return the states of one file; with `as_case` their names are those of load cases in combinations."""
    from unturn import io
    from unturn.envelope import State

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


def _run(
    states: Sequence[State],
    options: EnvelopeOptions,
    zero: Result | None,
    steps_output: Path | None,
    prefix: str,
    overwrite: bool,
) -> Envelope:
    from unturn._api import add_fields
    from unturn.cli._progress import progress_bar
    from unturn.envelope import envelope as find_envelope
    from unturn.io import series_writer
    from unturn.pipeline import Computed
    from unturn.series import SERIES_MEASURES

    with contextlib.ExitStack() as stack:
        progress = stack.enter_context(progress_bar(f"{options.kind}s", len(states)))
        each: Callable[[CellFields, float], None] | None = None
        if steps_output is not None:
            if not any(m in SERIES_MEASURES for m in options.strain.measures or ()):
                raise UsageError(
                    f"--steps-output {steps_output}: no measure of a series is asked for; name some in --measures: "
                    f"{', '.join(SERIES_MEASURES)}."
                )
            writer = stack.enter_context(series_writer(steps_output))

            def each(fields: CellFields, time: float) -> None:
                computed = Computed(fields)
                writer.add(
                    add_fields(fields.model.result, computed, prefix=prefix, overwrite=overwrite), time
                )

        return find_envelope(states, options, zero=zero, progress=progress, each=each)


def _read_first(files: Sequence[Path]) -> Result:
    """Return the first file that can be read: it tells what the output can hold, and carries that of combinations."""
    from unturn import io

    errors = []
    for path in files:
        try:
            return io.read(path)
        except UnturnError as error:
            errors.append(error)
    raise errors[0]


def _write(
    found: Envelope,
    base: Result,
    out: Path,
    files: list[str],
    prefix: str,
    overwrite: bool,
    json: Path | None,
) -> None:
    from unturn import io
    from unturn._api import add_fields
    from unturn.envelope_text import envelope_data, envelope_text
    from unturn.fields import CellFields
    from unturn.kinematics._symmetric import Floats
    from unturn.pipeline import Computed

    fields = CellFields(found.model, cast("dict[str, Floats]", found.arrays), found.components)
    result = add_fields(base, Computed(fields), prefix=prefix, overwrite=overwrite)
    lost = io.write(result, out)
    to_stderr = str(json) == "-"
    typer.echo(envelope_text(found, files), err=to_stderr)
    kept = len(base.point_data) + len(base.cell_data) + len(base.field_data)
    of = f" of {base.path}" + (f" step {base.steps.current}" if base.steps is not None else "")
    typer.echo(f"wrote {out}: {len(found.arrays)} arrays added, {kept}{of} unchanged", err=to_stderr)
    for sentence in lost:
        typer.echo(f"note: {sentence}", err=to_stderr)
    if json is not None:
        from unturn.cli._output import write_json

        write_json({**envelope_data(found, files), "output": str(out)}, json)
