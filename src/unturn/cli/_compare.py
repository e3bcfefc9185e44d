"""`unturn compare`: two results, array by array and region by region, against tolerances."""

from __future__ import annotations

import contextlib
import itertools
from collections.abc import Callable, Iterator
from dataclasses import asdict, replace
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from unturn.cli import _options as o
from unturn.cli import _reports as r
from unturn.cli._shared import strain_options
from unturn.errors import UsageError

if TYPE_CHECKING:
    from unturn.io import ResultFile
    from unturn.pipeline import StrainOptions
    from unturn.result import Result
    from unturn.verdicts.compare_series import Step
    from unturn.verdicts.tolerances import Tolerances

Measures = Annotated[
    str | None,
    typer.Option(
        metavar="LIST",
        help="Also compute these measures on both sides and compare them, by comma; 'all' for every one.",
    ),
]
_ONLY_WITH_MEASURES = (
    "base", "at", "recovery", "solve", "displacement", "displacement_scale", "equivalent_poisson", "remove_rigid", "rigid_to",
    "rigid_axis", "frame", "alive", "skin",
)  # fmt: skip


@strain_options(
    "measures", "base", "at", "recovery", "solve", "displacement", "displacement_scale", "coordinates", "plane", "axis",
    "poisson", "equivalent_poisson", "remove_rigid", "rigid_to", "rigid_axis", "frame", "alive", "skin", "threads",
    measures=Measures,
)  # fmt: skip
def compare(
    file: Annotated[Path, typer.Argument(metavar="FILE", help="The result.", readable=False)],
    reference: Annotated[
        Path, typer.Argument(metavar="REFERENCE", help="The result it is held against.", readable=False)
    ],
    output: Annotated[
        Path | None,
        typer.Option(
            "-o",
            "--output",
            metavar="OUT",
            help="Also write the reference with the differences as arrays NAME_difference.",
        ),
    ] = None,
    step: o.Step = "last",
    tolerances: Annotated[
        Path | None,
        typer.Option(metavar="FILE.toml", help="Tolerances by array.", readable=False),
    ] = None,
    absolute: Annotated[
        list[str] | None,
        typer.Option(metavar="[NAME=]X", help="Tolerance in the unit of the array (repeatable)."),
    ] = None,
    relative: Annotated[
        list[str] | None,
        typer.Option(
            metavar="[NAME=]X",
            help="Tolerance as a share of the reference's size at the place (repeatable).",
        ),
    ] = None,
    of_largest: Annotated[
        list[str] | None,
        typer.Option(
            metavar="[NAME=]X",
            help="Tolerance as a share of the reference's largest size in the region (repeatable).",
        ),
    ] = None,
    array: Annotated[
        list[str] | None, typer.Option(metavar="NAME", help="Compare this array only (repeatable).")
    ] = None,
    ignore: Annotated[
        list[str] | None, typer.Option(metavar="NAME", help="Do not compare this array (repeatable).")
    ] = None,
    region: Annotated[
        list[str] | None,
        typer.Option(metavar="NAME", help="Compare this region only (repeatable): a group, or array=value."),
    ] = None,
    same_mesh: Annotated[
        bool,
        typer.Option(
            "--same-mesh", help="Another mesh is beyond tolerance; other numbers of one mesh are not."
        ),
    ] = False,
    outside: Annotated[
        float,
        typer.Option(
            metavar="SHARE",
            help="Share of the volume that may lie outside of the other mesh before it is undecided.",
        ),
    ] = 0.01,
    *,
    options: StrainOptions,
    allow_undecided: r.AllowUndecided = False,
    json: o.Json = None,
    junit: r.Junit = None,
    markdown: r.Markdown = None,
    csv: r.Csv = None,
) -> None:
    """Hold a result against a reference: what differs, where, and whether by more than is tolerated."""
    from unturn import io
    from unturn.cli._progress import progress_bar
    from unturn.verdicts.compare import CompareOptions
    from unturn.verdicts.compare_series import compare_opened
    from unturn.verdicts.finding import Report, hashed_file
    from unturn.verdicts.inputs import hashed_inputs

    _check_options(options)
    places = r.ReportPlaces(json, junit, markdown, csv)
    inputs = [file, reference, *([tolerances] if tolerances is not None else [])]
    places.check(inputs, output)
    asked = _tolerances(tolerances, absolute, relative, of_largest, ignore)
    chosen = _step(step)
    wanted = CompareOptions(
        asked,
        tuple(array or ()),
        tuple(region or ()),
        options.measures is not None,
        options,
        same_mesh,
        outside,
    )
    opened, base = io.open_result(file), io.open_result(reference)
    places.check([*io.files_behind(file), *io.files_behind(reference)], output)
    n = len(base.steps) if chosen == "all" and base.steps is not None else 1
    with _writer(output, base, chosen) as keep, progress_bar(file.name, n) as progress:
        count = itertools.count(1)

        def keep_and_tell(result: Result, time: float | None) -> None:
            keep(result, time)
            progress(next(count))

        found = compare_opened(opened, base, chosen, wanted, keep_and_tell)
    hashed = [*hashed_inputs("result", file), *hashed_inputs("reference", reference)]
    hashed += [hashed_file("tolerances", tolerances)] if tolerances is not None else []
    settings = {
        "step": chosen, "arrays": array or [], "regions": region or [], "measures": options.measures,
        "same_mesh": same_mesh, "outside": outside, "default": asdict(asked.default), "ignore": list(asked.ignore),
    }  # fmt: skip
    places.put(
        Report("compare", found.findings, tuple(hashed), allow_undecided, found.notes, settings=settings)
    )


def _check_options(options: StrainOptions) -> None:
    """Refuse options of measures where none are asked for: they would do nothing."""
    if options.measures is not None:
        return
    default = type(options)()
    deformed = options.coordinates == "deformed"
    for name in _ONLY_WITH_MEASURES:
        if deformed and name.startswith("displacement"):
            continue
        if getattr(options, name) != getattr(default, name):
            raise UsageError(
                f"--{name.replace('_', '-')} is for measures that are computed on both sides: name them with --measures."
            )


def _tolerances(
    path: Path | None,
    absolute: list[str] | None,
    relative: list[str] | None,
    of_largest: list[str] | None,
    ignore: list[str] | None,
) -> Tolerances:
    from unturn.verdicts.tolerances import Tolerances, read_tolerances

    stated = Tolerances() if path is None else read_tolerances(path)
    stated = stated.with_options(absolute or (), relative or (), of_largest or ())
    return replace(stated, ignore=(*stated.ignore, *(ignore or ())))


def _step(text: str) -> Step:
    if text == "last":
        return "last"
    if text == "all":
        return "all"
    try:
        return int(text)
    except ValueError:
        raise UsageError(f"--step {text!r}: use 'last', 'all' or a number from 0.") from None


@contextlib.contextmanager
def _writer(
    output: Path | None, base: ResultFile, step: Step
) -> Iterator[Callable[[Result, float | None], Any]]:
    """Yield what takes the differences of each step, to write them where they were asked for."""
    from unturn import io

    if output is None:
        yield lambda result, time: None
        return
    series = step == "all" and base.steps is not None
    io.check_target(output, series=series)
    if series:
        with io.series_writer(output) as writer:
            yield lambda result, time: writer.add(result, 0.0 if time is None else time)
            _say(output, writer.lost)
        return
    yield lambda result, time: _say(output, io.write(result, output))


def _say(output: Path, lost: tuple[str, ...]) -> None:
    for sentence in (f"wrote {output}", *(f"note: {s}" for s in lost)):
        typer.echo(sentence, err=True)
