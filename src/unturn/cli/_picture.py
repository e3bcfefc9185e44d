"""The picture of `unturn strain`: the equivalent strain on the deformed shape."""

from __future__ import annotations

from pathlib import Path

from unturn._api import add_fields
from unturn.summary import Summary, equivalent_form


def draw_summary(summary: Summary, path: Path) -> str:
    """Draw the equivalent strain (else the first array) of a summary, and return a line that says so.

    Raises
    ------
    UsageError
        Not a PNG name, or a place that cannot be written to.
    MissingExtraError
        No graphics library.
    """
    from unturn.pictures import draw

    fields = summary.fields
    model = fields.model
    array = "equivalent_strain" if "equivalent_strain" in fields.arrays else next(iter(fields.arrays))
    drawing = draw(
        add_fields(model.result, fields, overwrite=True),
        array,
        path,
        displacement=model.displacement.values,
        location={"mean": "mean over each element"}.get(summary.options.at, ""),
        legend=f"equivalent strain\n{equivalent_form(summary.options.equivalent_poisson)}"
        if array == "equivalent_strain"
        else "",
        numbers=None if summary.numbers is None else summary.numbers.numbers,
    )
    return f"drew {drawing.path}: {array} on the shape deformed x {drawing.factor:g}"
