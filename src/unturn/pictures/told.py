"""What is told of pictures: a line for people, data for programs, the drawn values as a table."""

from __future__ import annotations

import csv
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from unturn._version import __version__
from unturn.io._atomic import replacing
from unturn.pictures._numbers import written

if TYPE_CHECKING:
    from unturn.pictures._marks import Mark
    from unturn.pictures.animation import Animation
    from unturn.pictures.drawing import Drawn

SCHEMA = "unturn.pictures/1"


def drawn_text(drawn: Drawn) -> str:
    """Return what was drawn, in words."""
    subject, drawing, values = drawn.subject, drawn.drawing, drawn.subject.values
    factor = f"displacement x {drawing.factor:g}" if drawing.factor else "undeformed"
    if drawing.factor and drawn.request.factor is None:
        factor += " (fitted)"
    low, high = (written(x * values.scale, 4) for x in drawing.colour_range)
    parts = [
        f"drew {drawing.path}: {drawn.request.measure} {subject.location}",
        factor,
        f"colours {low} to {high} {values.short_unit}".rstrip(),
    ]
    for count, word in (
        (drawing.above, "above"),
        (drawing.below, "below"),
        (drawing.missing, "without value"),
    ):
        if count:
            parts.append(f"{count} {word}")
    parts += [_mark_text(drawn, mark) for mark in drawing.marks]
    return ", ".join(parts) + f"\n  camera: {drawing.camera_words}"


def _mark_text(drawn: Drawn, mark: Mark) -> str:
    values, subject = drawn.subject.values, drawn.subject
    where = f"{subject.noun} {mark.position}"
    if subject.numbers is not None:
        of = "node" if subject.association == "point" else "element"
        where = f"{of} {subject.numbers[mark.position]} ({where})"
    value = f"{written(mark.value * values.scale, 4)} {values.short_unit}".rstrip()
    return f"{mark.kind} {value} at {where}" + ("" if mark.visible else ", not seen")


def pictures_data(file: str, pictures: Sequence[dict[str, Any]], tables: Sequence[Path]) -> dict[str, Any]:
    """Return what was drawn of a file as data: what `drawn_data` or `series_data` say of each picture."""
    return {
        "schema": SCHEMA,
        "tool": {"name": "unturn", "version": __version__},
        "file": file,
        "pictures": list(pictures),
        "tables": [str(table) for table in tables],
    }


def drawn_data(drawn: Drawn) -> dict[str, Any]:
    """Return what was drawn as data; numbers in the units of the arrays."""
    subject, drawing = drawn.subject, drawn.drawing
    numbers = subject.numbers
    return {
        "path": drawing.path,
        "name": drawn.request.name,
        "measure": drawn.request.measure,
        "location": subject.location,
        "unit": subject.values.unit,
        "unit_factor": subject.values.scale,
        "factor": drawing.factor,
        "factor_fitted": drawn.request.factor is None,
        "range": list(drawing.colour_range),
        "above": drawing.above,
        "below": drawing.below,
        "without_value": drawing.missing,
        "camera": drawing.camera_words,
        "extremes": [
            {
                "kind": mark.kind,
                "value": mark.value,
                "position": mark.position,
                "number": None if numbers is None else int(numbers[mark.position]),
                "point": list(mark.point),
                "pixel": list(mark.pixel),
                "visible": mark.visible,
            }
            for mark in drawing.marks
        ],
    }


def series_text(drawn: Animation) -> str:
    """Return in words what an animation shows."""
    values = drawn.subject.values
    low, high = (written(x * values.scale, 4) for x in drawn.colour_range)
    return (
        f"drew {drawn.path}: {drawn.request.measure} {drawn.subject.location}, {drawn.frames} steps, displacement x "
        f"{drawn.request.factor:g}, colours {low} to {high} {values.short_unit}".rstrip()
        + f"\n  camera: {drawn.camera_words}"
    )


def series_data(drawn: Animation) -> dict[str, Any]:
    """Return as data what an animation shows."""
    return {
        "path": drawn.path,
        "measure": drawn.request.measure,
        "location": drawn.subject.location,
        "unit": drawn.subject.values.unit,
        "unit_factor": drawn.subject.values.scale,
        "factor": drawn.request.factor,
        "range": list(drawn.colour_range),
        "camera": drawn.camera_words,
        "frames": drawn.frames,
    }


def write_values(drawn: Drawn, path: Path) -> None:
    """Write the values that a picture shows as CSV: position, number, undeformed place, value in the array's unit.

    Raises
    ------
    UsageError
        The file cannot be written.
    """
    subject, stage = drawn.subject, drawn.subject.stage
    shown = np.flatnonzero(subject.which(subject.shown(drawn.request)))
    if subject.association == "point":
        place = stage.rest[shown]
    else:
        middle = np.empty((stage.result.n_cells, 3))
        for block in stage.result.blocks:
            middle[block.index] = stage.rest[block.connectivity].mean(axis=1)
        place = middle[shown]
    numbers = subject.numbers
    of = "node" if subject.association == "point" else "element"
    head = [f"{subject.noun}_position", *([f"{of}_number"] if numbers is not None else []), "x", "y", "z",
            drawn.request.measure]  # fmt: skip
    columns = [shown.tolist(), *([numbers[shown].tolist()] if numbers is not None else []),
               *place.T.tolist(), subject.values.numbers[shown].tolist()]  # fmt: skip
    with replacing(path) as work, open(work, "w", encoding="utf-8", newline="") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(head)
        writer.writerows(zip(*columns))
