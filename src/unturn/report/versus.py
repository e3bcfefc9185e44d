"""A result beside its reference: extremes, differences, pictures in one colour range, and a picture of the difference."""

from __future__ import annotations

import tempfile
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

from unturn.errors import UsageError
from unturn.measures import MEASURES
from unturn.picture_keys import PictureRequest
from unturn.pictures._measure import LOCATIONS, spoken, wanted
from unturn.pictures._range import automatic
from unturn.pictures._subject import Subject
from unturn.pictures._values import values_with
from unturn.pictures._window import usable_window
from unturn.pictures.draw import draw_subject
from unturn.pictures.drawing import Drawn, draw_one, ranged, shared_ends
from unturn.pictures.plan import Plan
from unturn.report.content import Extreme, Shown, Versus, extremes_of
from unturn.report.drawing import shown
from unturn.report.side import Side
from unturn.verdicts.compare import Compared, CompareOptions, compare_states
from unturn.verdicts.finding import Report
from unturn.verdicts.tolerances import Tolerances, read_tolerances

NEW, OLD = "This result", "Reference"


def compare_with(side: Side, base: Side, plan: Plan, tolerances: Path | None) -> Versus:
    """Return the comparison of a result with its reference.

    Parameters
    ----------
    side, base
        The result and the reference.
    plan
        Its pictures, and which of them are shown side by side.
    tolerances
        Without them differences are told, and not judged.

    Raises
    ------
    UsageError
        A picture of something that the reference does not have, tolerances that do not fit, or a zero step.
    """
    if plan.zero_step is not None:
        raise UsageError(
            f"{plan.path}: a reference is compared from the undeformed state: leave out reference, or zero_step."
        )
    asked = plan.report.side_by_side or (plan.pictures[0].name,)
    requests = [p for p in plan.pictures if p.name in asked]
    stated = Tolerances() if tolerances is None else read_tolerances(tolerances)
    measures = tuple(side.computed.fields.arrays)
    strain = replace(
        side.options, at="mean" if side.options.at == "mean" else "centroid", measures=measures, base="small"
    )
    moved = side.summary.fields.model.displacement.name
    arrays = () if tolerances is not None else tuple(name.strip() for name in moved.split(","))
    wanted_too = CompareOptions(stated, arrays, measures=True, strain=strain)
    compared = compare_states(side.result, base.result, wanted_too)
    return Versus(
        base.result.path,
        _pairs(side, base),
        Report("compare", compared.findings, notes=compared.notes),
        tolerances is not None,
        tuple(_pictures(side, base, requests, compared)),
    )


def _pairs(side: Side, base: Side) -> tuple[tuple[Extreme, Extreme | None], ...]:
    """Return the extremes of the result, each with that of the reference."""
    old = {(e.region, e.array, e.which): e for e in extremes_of(base.summary)}
    return tuple((e, old.get((e.region, e.array, e.which))) for e in extremes_of(side.summary))


def _pictures(side: Side, base: Side, requests: Sequence[PictureRequest], compared: Compared) -> list[Shown]:
    """Return each picture of the result and of the reference in one colour range, and that of the difference."""
    usable_window()
    steps = [side.step(requests), base.step(requests)]
    found = []
    with tempfile.TemporaryDirectory() as folder:
        for k, (request, range_) in enumerate(zip(requests, shared_ends(steps, requests))):
            place = Path(folder)
            ends = replace(range_, words=range_.words.replace("of all steps", "of both results"))
            with request.told_where():
                subject = steps[0].subject(request)
                new = Drawn(request, subject, draw_one(subject, request, ends, place / f"{k}-new.png", NEW))
                same = replace(request, factor=new.drawing.factor)
                subject = steps[1].subject(same)
                camera, target = new.drawing.camera, place / f"{k}-old.png"
                old = draw_subject(subject, same, ranged(subject, same, ends), target, camera, OLD)
            found += [
                shown(new, f"{request.name}-this", NEW),
                shown(Drawn(same, subject, old), f"{request.name}-reference", OLD),
            ]
            difference = _difference(side, base, same, compared)
            if difference is not None:
                target = place / f"{k}-difference.png"
                asked = replace(same, title="", colours="two-sided", arrows="none", range=request.range)
                even = ranged(difference, asked, automatic(difference.values.numbers).symmetric())
                drawn = Drawn(asked, difference, draw_subject(difference, asked, even, target, camera))
                found.append(shown(drawn, f"{request.name}-difference"))
    return found


def _difference(side: Side, base: Side, request: PictureRequest, compared: Compared) -> Subject | None:
    """Return the difference of a measure at cells on the mesh of the reference; None where there is none."""
    what = wanted(request.measure, side.result, side.options, "centroid")
    held = compared.differences.cell_data.get(f"{what.array}_difference")
    if what.kind != "measure" or held is None or what.array not in base.computed.fields.arrays:
        return None
    labels = base.computed.fields.components.get(what.array, ())
    numbers = held if held.ndim == 1 else held[:, labels.index(what.component)]
    name = f"difference in {spoken(what.array)} {what.component}".rstrip()
    values = values_with(numbers, f"{name}\n{NEW.lower()} less the {OLD.lower()}", _unit(what.array))
    at_cells = replace(request, at="centroid", arrows="none")
    location = LOCATIONS["mean" if side.options.at == "mean" else "centroid"]
    return replace(base.step([at_cells]).subject(at_cells), values=values, location=location)


def _unit(array: str) -> str:
    return MEASURES[array].unit if array in MEASURES else "1"
