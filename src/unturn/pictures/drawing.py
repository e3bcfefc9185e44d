"""Several pictures of one step: read once, computed once, shaped once."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from unturn.picture_keys import PictureRequest
from unturn.pictures._colours import Range
from unturn.pictures._range import Ends, in_range, joined
from unturn.pictures._subject import Subject
from unturn.pictures._window import usable_window
from unturn.pictures.computing import Step
from unturn.pictures.draw import Drawing, draw_subject


@dataclass(frozen=True, eq=False)
class Drawn:
    """A picture that was drawn: what was asked for, of what, and what came out."""

    request: PictureRequest
    subject: Subject
    drawing: Drawing


def shared_ends(steps: Sequence[Step], requests: Sequence[PictureRequest]) -> list[Ends]:
    """Return the ends of the colour range of each picture, the same in all steps.

    Those of ``range = "shared"`` hold the values of all such pictures of the same unit.
    """
    found = []
    for request in requests:
        with request.told_where():
            found.append([step.ends(request) for step in steps])
    units = [steps[0].subject(request).values.unit for request in requests]
    ends = []
    for request, own, unit in zip(requests, found, units):
        if request.range.how != "shared":
            ends.append(of_steps(own))
            continue
        others = [
            e for r, of, u in zip(requests, found, units) if r.range.how == "shared" and u == unit for e in of
        ]
        ends.append(joined(others))
    return ends


def of_steps(ends: Sequence[Ends]) -> Ends:
    """Return the ends that hold those of all steps."""
    if len(ends) == 1:
        return ends[0]
    low, high = min(e.low for e in ends), max(e.high for e in ends)
    return Ends(low, high, f"{ends[0].words}, of all steps")


def draw_all(
    step: Step, requests: Sequence[PictureRequest], targets: Sequence[Path], title: str = ""
) -> list[Drawn]:
    """Return what was drawn into PNG files.

    Parameters
    ----------
    step
        The step, made for these requests.
    requests, targets
        The pictures and where they go, one for each.
    title
        Stands before the title of each.

    Raises
    ------
    UsageError
        Something that is asked for does not exist, or a place cannot be written to.
    MissingExtraError
        No graphics library.
    """
    usable_window()
    found = []
    for request, target, ends in zip(requests, targets, shared_ends([step], requests)):
        with request.told_where():
            subject = step.subject(request)
            found.append(Drawn(request, subject, draw_one(subject, request, ends, target, title)))
    return found


def draw_one(subject: Subject, request: PictureRequest, ends: Ends, target: Path, title: str = "") -> Drawing:
    """Return what was drawn of one subject in a colour range."""
    return draw_subject(subject, request, ranged(subject, request, ends), target, title=title)


def ranged(subject: Subject, request: PictureRequest, ends: Ends) -> Range:
    """Return the colour range of a picture between two ends."""
    which = subject.which(subject.shown(request))
    even = ends.low == -ends.high and ends.high != 0.0
    two_sided = request.colours == "two-sided" or (request.colours == "auto" and even)
    return in_range(subject.values.numbers[which], ends, two_sided)
