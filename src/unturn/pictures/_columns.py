"""One number of computed fields, of the displacement, or of an array of the file, with what the legend says of it."""

from __future__ import annotations

from dataclasses import replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError
from unturn.measures import GEOMETRY, MEASURES
from unturn.model import Model
from unturn.picture_keys import At, PictureRequest
from unturn.pictures._measure import (
    LOCATIONS,
    TURNING,
    Wanted,
    directions_with,
    rotation_with,
    spoken,
    turns_with,
)
from unturn.pictures._subject import Arrows
from unturn.pictures._values import Values, values_of, values_with
from unturn.pipeline import Computed, StrainOptions
from unturn.result import Result
from unturn.summary import equivalent_form

Floats = NDArray[np.float64]
_LENGTH = "length unit of the file"


def displacement_values(model: Model, what: Wanted) -> Values:
    """Return a component of the displacement, or its length."""
    u = model.displacement.values
    if what.component:
        numbers, name = u[:, "XYZ".index(what.component)], f"displacement {what.component}"
    else:
        numbers, name = np.linalg.norm(u, axis=1), "displacement\nlength of the vector"
    return replace(values_with(np.ascontiguousarray(numbers), name, _LENGTH), short_unit="")


def file_values(result: Result, what: Wanted) -> Values:
    """Return a component of an array of the file; numbers stand for components without name, from one."""
    component: str | int | None = what.component or None
    if what.component.isdigit():
        component = int(what.component) - 1
    place: Literal["cell", "point"] = "cell" if what.kind == "cell" else "point"
    values = values_of(result, what.array, place, component, "", "unit of the array")
    return replace(values, name=f"{values.name}\narray of the file", short_unit="")


def measure_values(computed: Computed, what: Wanted, at: At, options: StrainOptions) -> Values:
    """Return a component of a measure.

    Raises
    ------
    UsageError
        It has no value at this place, or no such component in this frame.
    """
    arrays, components = _held(computed, at)
    array = f"surface_{what.array}" if at == "surface" else what.array
    if array not in arrays:
        raise UsageError(
            f"{what.array} has no value {LOCATIONS[at]}; ask for another --measure, or another --at."
        )
    numbers = arrays[array]
    if numbers.ndim == 2:
        labels = components.get(array, ())
        if what.component not in labels:
            raise UsageError(
                f"{what.array} has no component {what.component!r} here; its components are {', '.join(labels)}."
            )
        numbers = np.ascontiguousarray(numbers[:, labels.index(what.component)])
    name = spoken(what.array, what.component)
    frame = f"\naxes: {options.frame}" if options.frame and what.component else ""
    if what.array in GEOMETRY:
        unit = "unit of the mesh" if what.array == "element_volume" else "1"
        values = values_with(numbers, f"{name}\n{GEOMETRY[what.array]}", unit)
        return replace(values, short_unit="")
    measure = MEASURES[what.array]
    form = what.array == "equivalent_strain"
    meaning = equivalent_form(options.equivalent_poisson) if form else measure.meaning
    return values_with(numbers, f"{name}\n{meaning}{frame}", measure.unit)


def _held(computed: Computed, at: At) -> tuple[dict[str, Floats], dict[str, tuple[str, ...]]]:
    """Return the arrays at a place, and the names of their components."""
    if at == "surface":
        assert computed.surface is not None
        mesh = computed.surface.result
        return dict(mesh.cell_data), {array: names for (_, array), names in mesh.component_names.items()}
    found = computed.fields if computed.nodes is None else computed.nodes
    return found.arrays, found.components


_PRINCIPAL = "principal directions{}, heads outwards for stretch, inwards for shortening"
_ROTATION = "axes of rotation by the right hand, arcs where they point to the eye or away"


def arrows_of(
    computed: Computed, request: PictureRequest, what: Wanted, options: StrainOptions, factor: float
) -> Arrows:
    """Return the directions that a picture asks for.

    Directions of finite strains that belong to the undeformed part are turned with it where the displacement is drawn
    as it is (`factor` 1); those of Almansi's strain belong to the deformed part already.
    """
    arrays, _ = _held(computed, request.at)
    front = "surface_" if request.at == "surface" else ""
    place: Literal["cell", "point"] = "point" if request.at == "nodes" else "cell"
    if request.arrows == "principal":
        name, directions = directions_with(what.array, options.base, request.at)
        vectors = np.stack([arrays[front + n] for n in directions], axis=1)
        values = arrays[front + name][:, : vectors.shape[1]]
        words = ""
        if turns_with(name) and factor == 1.0:
            vectors, words = turned(vectors, arrays[front + TURNING]), " turned with the part"
        return Arrows("principal", place, vectors, values, 1e6, "microstrain", _PRINCIPAL.format(words))
    turn = arrays[front + rotation_with(what.array, options.base)]
    angle = np.linalg.norm(turn, axis=1)
    with np.errstate(invalid="ignore", divide="ignore"):
        axis = turn / angle[:, None]
    return Arrows(
        "rotation", place, axis[:, None], angle[:, None], float(np.degrees(1.0)), "degrees", _ROTATION
    )


def turned(vectors: Floats, rotation: Floats) -> Floats:
    """Return vectors `(n, k, 3)` turned by rotation vectors `(n, 3)`: angle times axis.

    Notes
    -----
    Rodrigues' formula, `v cos a + (n x v) sin a + n (n . v)(1 - cos a)`.

    Examples
    --------
    >>> turned(np.array([[[1.0, 0, 0]]]), np.array([[0, 0, np.pi / 2]])).round(12)
    array([[[0., 1., 0.]]])
    """
    angle = np.linalg.norm(rotation, axis=1)[:, None, None]
    axis = rotation[:, None] / np.where(angle > 0, angle, 1.0)
    along = np.sum(axis * vectors, axis=2, keepdims=True)
    return np.asarray(
        vectors * np.cos(angle) + np.cross(axis, vectors) * np.sin(angle) + axis * along * (1 - np.cos(angle))
    )
