"""The picture of `unturn strain`: the equivalent strain on the deformed shape."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from unturn._api import add_fields
from unturn.borders import ORIGINAL_POINT
from unturn.measures import ESTIMATES, MEASURES, SURFACE_AXES
from unturn.numbering import node_numbers
from unturn.pictures._measure import LOCATIONS
from unturn.pipeline import Computed
from unturn.series import SERIES_MEASURES
from unturn.summary import Summary, equivalent_form
from unturn.surface import SURFACE_MEASURES, SurfaceFields

_LOCATIONS = {at: words for at, words in LOCATIONS.items() if at != "centroid"}


def draw_summary(summary: Summary, computed: Computed, at: str, path: Path) -> str:
    """Draw the equivalent strain (else the largest principal, else the first array), and return a line that says so.

    Parameters
    ----------
    summary
        Of the fields.
    computed
        The fields: values at nodes are drawn at nodes, those of free faces on the faces.
    at
        Where the values live; not at quadrature points.
    path
        The picture.

    Raises
    ------
    UsageError
        Not a PNG name, or a place that cannot be written to.
    MissingExtraError
        No graphics library.
    """
    from unturn.pictures import draw

    how = _on_faces(computed.surface) if computed.surface is not None else _on_the_mesh(summary, computed)
    array, component = _chosen(how.pop("arrays"))
    at = (
        "" if at == "nodes" and how.get("association") == "cell" else at
    )  # an estimate of cells, asked for beside
    drawing = draw(
        **how,
        array=array,
        path=path,
        component=component,
        location=_LOCATIONS.get(at, ""),
        legend=f"{array.replace('_', ' ')}\n{equivalent_form(summary.options.equivalent_poisson)}"
        if "equivalent_strain" in array
        else "",
        unit=_unit(array),
    )
    drawn = array if component is None else f"{array} (component {component + 1})"
    where = f", {_LOCATIONS[at]}," if at in _LOCATIONS else ""
    return f"drew {drawing.path}: {drawn}{where} on the shape deformed x {drawing.factor:g}"


def _chosen(arrays: Mapping[str, Any]) -> tuple[str, int | None]:
    """Return the array to draw, and its component where it has several."""
    liked = [n for word in ("equivalent_strain", "principal_strain", "") for n in arrays if word in n]
    return liked[0], None if np.ndim(arrays[liked[0]]) == 1 else 0


def _unit(array: str) -> str:
    if array in SURFACE_MEASURES:
        array = SURFACE_MEASURES[array].replaces
        return MEASURES[array].unit if array in MEASURES else "strain"  # along the normal, in local axes
    measure = MEASURES.get(array) or SERIES_MEASURES.get(array)
    return "strain" if array in ESTIMATES else measure.unit if measure is not None else ""


def _on_the_mesh(summary: Summary, computed: Computed) -> dict[str, Any]:
    model = summary.fields.model
    on_points, on_cells, _ = computed.arrays()
    arrays = {n: a for n, a in on_points.items() if n != ORIGINAL_POINT} or on_cells
    at_nodes = arrays is not on_cells
    numbering = node_numbers(model.result) if at_nodes else summary.numbers
    numbers = None if numbering is None else numbering.numbers
    displacement = model.displacement.values
    if computed.nodes is not None:
        point = computed.nodes.layout.point
        displacement = displacement[point]
        numbers = numbers if numbers is None or not at_nodes else numbers[point]
    return {
        "result": add_fields(model.result, replace(computed, removals=()), overwrite=True),
        "association": "point" if at_nodes else "cell",
        "arrays": arrays,
        "displacement": displacement,
        "numbers": numbers,
    }


def _on_faces(surface: SurfaceFields) -> dict[str, Any]:
    arrays = surface.result.cell_data
    used = np.unique(np.concatenate([b.connectivity.reshape(-1) for b in surface.faces.blocks]))
    return {
        "result": surface.result,
        "arrays": {n: a for n, a in arrays.items() if n in SURFACE_MEASURES and n not in SURFACE_AXES},
        "displacement": surface.faces.model.displacement.values[used],
        "numbers": arrays.get("parent_element"),
    }
