"""The pictures of a plan, drawn for a report, with the words for those who cannot see them."""

from __future__ import annotations

import tempfile
from decimal import ROUND_CEILING, ROUND_FLOOR
from pathlib import Path

from unturn.pictures.draw import full_title
from unturn.pictures.drawing import Drawn, draw_all
from unturn.pictures.plan import Plan
from unturn.pictures.told import drawn_data, write_values
from unturn.report.content import Shown
from unturn.report.side import Side
from unturn.verdicts.finding import Place
from unturn.verdicts.wording import number, place_text


def draw_pictures(side: Side, plan: Plan) -> list[Shown]:
    """Return the pictures of a plan.

    Raises
    ------
    UsageError
        A picture of something that does not exist.
    MissingExtraError
        No graphics library.
    """
    with tempfile.TemporaryDirectory() as folder:
        targets = [Path(folder) / f"{k}.png" for k in range(len(plan.pictures))]
        drawn = draw_all(side.step(plan.pictures), plan.pictures, targets)
        return [shown(d, with_values=d.request.name in plan.csv) for d in drawn]


def shown(drawn: Drawn, name: str = "", of: str = "", with_values: bool = False) -> Shown:
    """Return a picture that lies in a file as a report shows it; `of` says which result, where there are two."""
    path = Path(drawn.drawing.path)
    title = full_title(drawn.subject, drawn.request)
    title = f"{of}: {title}" if of else title
    table = None
    if with_values:
        write_values(drawn, path.with_suffix(".csv"))
        table = path.with_suffix(".csv").read_bytes()
    data = {**drawn_data(drawn), "name": name or drawn.request.name}
    data.pop("path")
    shape = _shape(drawn)
    colours = _colours(drawn)
    marks = " ".join(_marks(drawn))
    meaning = ", ".join(drawn.subject.values.name.splitlines()[1:])
    location = drawn.subject.location[:1].upper() + drawn.subject.location[1:]
    caption = f"{location}{'; ' if meaning else ''}{meaning}. {shape}. {marks}".strip()
    where = "cells" if drawn.subject.association == "cell" else "nodes"
    outside = (
        f" Outside of the range: {drawn.drawing.out_of_range} {where}." if drawn.drawing.out_of_range else ""
    )
    alt = f"Picture of the model: {title}, {drawn.subject.location}. {shape}. {colours}.{outside} {marks}".strip()
    return Shown(data["name"], title, caption, alt, path.read_bytes(), "png", data, table)


def _shape(drawn: Drawn) -> str:
    factor = drawn.drawing.factor
    if not factor:
        return "Undeformed shape"
    if factor == 1.0:
        return "Displacement drawn true to scale"
    fitted = ", chosen to be seen" if drawn.request.factor is None else ""
    return f"Displacement drawn {number(factor)} times{fitted}"


def _colours(drawn: Drawn) -> str:
    values = drawn.subject.values
    low, high = (number(x * values.scale, digits=4) for x in drawn.drawing.colour_range)
    return f"Colours from {low} to {high} {values.short_unit}".rstrip()


def _marks(drawn: Drawn) -> list[str]:
    values, subject = drawn.subject.values, drawn.subject
    said = []
    for mark in drawn.drawing.marks:
        rounding = ROUND_FLOOR if mark.kind == "smallest" else ROUND_CEILING
        theirs = None if subject.numbers is None else int(subject.numbers[mark.position])
        point = subject.association == "point"
        place = (
            Place(point=mark.position, node=theirs) if point else Place(cell=mark.position, element=theirs)
        )
        where = f"free face of element {theirs}" if subject.of_faces else place_text(place)
        value = f"{number(float(f'{mark.value * values.scale:.15g}'), rounding)} {values.short_unit}".rstrip()
        unseen = "" if mark.visible else ", not seen from here"
        said.append(f"{mark.kind[:1].upper()}{mark.kind[1:]}: {value} in {where}{unseen}.")
    return said
