"""`unturn envelope`: extremes over the steps of a series or over load cases, and which of them made each."""

from __future__ import annotations

import contextlib
from collections.abc import Mapping, Sequence
from enum import StrEnum
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from unturn.cli import _options as o
from unturn.cli._shared import EVERY, strain_options
from unturn.errors import UsageError

if TYPE_CHECKING:
    from unturn.envelopes import EachStep
    from unturn.options import StrainOptions
    from unturn.result import Array, Association, Result
    from unturn.states import Envelope, EnvelopeOptions, State


_MEASURES = Annotated[
    str | None,
    typer.Option(
        metavar="LIST",
        help="Measures by comma, or 'all'; of a series also strain_increment, rotation_increment, deformation_rate, "
        "spin, accumulated_equivalent_strain ... Default: strain,rotation,equivalent_strain,principal_strain.",
    ),
]


class _Place(StrEnum):
    centroid = "centroid"
    mean = "mean"
    nodes = "nodes"


_At = Annotated[_Place, typer.Option(help="Where values are taken.")]


@strain_options(*EVERY, measures=_MEASURES, at=_At)
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
    *,
    options: StrainOptions,
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
    displacement_table: Annotated[
        list[Path] | None,
        typer.Option(
            metavar="FILE.csv",
            help="Displacements by node number for a mesh without (repeatable): each table is a load case or step on the "
            "mesh of the one FILE.",
            readable=False,
        ),
    ] = None,
    zero_step: o.ZeroStep = None,
    region: Annotated[
        list[str] | None,
        typer.Option(metavar="NAME", help="Report this region only (repeatable): a group, or array=value."),
    ] = None,
    prefix: o.Prefix = "",
    overwrite: o.Overwrite = False,
    json: o.Json = None,
) -> None:
    """Find the extremes of every cell or node over steps or load cases, and which of them made each."""
    from unturn.cli._output import Places, check_place
    from unturn.combinations import read_combinations
    from unturn.io import check_target, writable_suffix
    from unturn.state_files import Files, numbered, open_states, read_first
    from unturn.states import EnvelopeOptions

    tables = tuple(displacement_table or ())
    inputs = [*files, *tables, *([combinations] if combinations is not None else [])]
    check_place(None, json, inputs)
    check_place(None, steps_output, inputs)
    files = numbered(files) if as_series and not tables else files
    suffix = writable_suffix(files[0], read_first(files))
    out = Places(output, files, (json, steps_output)).of(files[0], suffix, "envelope")
    check_target(out)
    chosen = None if combinations is None else read_combinations(combinations)
    asked = Files(files, tables, chosen, as_series, keep_going, zero_step)
    states, strain, zero = open_states(asked, options)
    folder, full = out.absolute().parent, json is not None
    wanted = EnvelopeOptions(strain, asked.kind, tensor_range, keep_going, tuple(region or ()), folder, full)
    found = _run(states, wanted, zero, steps_output, prefix, overwrite)
    base = read_first(files) if chosen is not None else found.model.result
    _write(found, base, out, [str(f) for f in (*files, *tables)], prefix, overwrite, json)
    if found.failures:
        typer.echo(f"unturn: {len(found.failures)} of {len(states)} {asked.kind}s failed", err=True)
        raise typer.Exit(max(e.exit_status for e in found.failures.values()))


def _run(
    states: Sequence[State],
    options: EnvelopeOptions,
    zero: Result | None,
    steps_output: Path | None,
    prefix: str,
    overwrite: bool,
) -> Envelope:
    from unturn._api import add_arrays
    from unturn.cli._progress import progress_bar
    from unturn.envelopes import envelope as find_envelope
    from unturn.io import series_writer
    from unturn.series import SERIES_MEASURES

    with contextlib.ExitStack() as stack:
        progress = stack.enter_context(progress_bar(f"{options.kind}s", len(states)))
        each: EachStep | None = None
        if steps_output is not None:
            if not any(m in SERIES_MEASURES for m in options.strain.measures or ()):
                raise UsageError(
                    f"--steps-output {steps_output}: no measure of a series is asked for; name some in --measures: "
                    f"{', '.join(SERIES_MEASURES)}."
                )
            writer = stack.enter_context(series_writer(steps_output))
            on: Association = "point" if options.strain.at == "nodes" else "cell"

            def each(
                result: Result,
                arrays: Mapping[str, Array],
                components: Mapping[str, tuple[str, ...]],
                time: float,
            ) -> None:
                writer.add(
                    add_arrays(result, on, arrays, components, prefix=prefix, overwrite=overwrite), time
                )

        return find_envelope(states, options, zero=zero, progress=progress, each=each)


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
    from unturn._api import add_arrays
    from unturn.envelope_json import envelope_data
    from unturn.envelope_text import envelope_text

    result = add_arrays(
        base, found.places.on, found.arrays, found.components, prefix=prefix, overwrite=overwrite
    )
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
