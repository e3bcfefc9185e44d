"""Which number a picture shows: a measure with its component, the displacement, or an array of the file."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from unturn.errors import UsageError, close_matches
from unturn.kinematics._finite import BASES
from unturn.measures import GEOMETRY, MEASURES, SURFACE_AXES, choose_measures
from unturn.picture_keys import At
from unturn.pipeline import StrainOptions
from unturn.result import Result
from unturn.surface import SURFACE_MEASURES

DISPLACEMENT = "displacement"
LOCATIONS: dict[str, str] = {
    "centroid": "at element centroids",
    "mean": "mean over each element",
    "nodes": "recovered at the nodes",
    "surface": "on free faces, at their centroids",
}
"""Where values live, in words."""


@dataclass(frozen=True)
class Wanted:
    """A number: of a measure that is computed, of the displacement, or of an array of the file.

    Attributes
    ----------
    kind
        Which of these.
    array
        Name of the array.
    component
        Name of its component; empty for a single number, and for the length of the displacement.
    """

    kind: Literal["measure", "displacement", "cell", "point"]
    array: str
    component: str = ""


def wanted(name: str, result: Result, options: StrainOptions, at: At) -> Wanted:
    """Return what a name stands for; a measure of the base that is asked for.

    Raises
    ------
    UsageError
        Nothing has that name, or it has several components.
    """
    for array, component in _split(name):
        components = _components(array, at)
        if components is None:
            continue
        turned = component and options.frame is not None  # its components have other names
        if component not in (components or ("",)) and not turned:
            listed = ", ".join(f"{array}_{c}" for c in components)
            what = f"no component {component!r}" if component else f"{len(components)} components"
            raise UsageError(f"{array} has {what}; a picture shows one of {listed}.")
        if array == DISPLACEMENT:
            return Wanted("displacement", array, component)
        return Wanted("measure", choose_measures([array], options.base)[0], component)
    return _of_file(name, result)


def _split(name: str) -> list[tuple[str, str]]:
    base, _, component = name.rpartition("_")
    return [(name, ""), (base, component)]


def _components(array: str, at: At) -> tuple[str, ...] | None:
    """Return the components of a measure, empty for a single number; None when there is no such measure."""
    if array == DISPLACEMENT:
        return ("", "X", "Y", "Z")
    if array in GEOMETRY:
        return ()
    if array in SURFACE_AXES:
        return ("X", "Y", "Z")
    if at == "surface" and f"surface_{array}" in SURFACE_MEASURES:
        return SURFACE_MEASURES[f"surface_{array}"].components
    return MEASURES[array].components if array in MEASURES else None


def _of_file(name: str, result: Result) -> Wanted:
    held: tuple[tuple[Literal["cell", "point"], dict[str, np.ndarray]], ...] = (
        ("cell", dict(result.cell_data)),
        ("point", dict(result.point_data)),
    )
    for place, data in held:
        if name in data:
            return Wanted(place, name)
        base, _, component = name.rpartition("_")
        if base in data:
            return Wanted(place, base, component)
    known = [*MEASURES, *GEOMETRY, DISPLACEMENT, *result.cell_data, *result.point_data]
    raise UsageError(
        f"{result.path + ': ' if result.path else ''}no measure and no array of the file is called {name!r}."
        f"{close_matches(name, known)} Measures are listed with 'unturn strain --help' and in the documents; arrays of "
        f"the file: {', '.join([*result.cell_data, *result.point_data]) or 'none'}."
    )


def directions_with(array: str, base: str, at: At) -> tuple[str, tuple[str, ...]]:
    """Return the principal values that go with a measure, and the arrays of their directions; two on faces."""
    own = next((b for b in (*BASES, "mechanical") if array.endswith("_" + b)), None)
    names = [
        "principal_strain",
        *(f"principal_direction_{k}" for k in ((1, 2) if at == "surface" else (1, 2, 3))),
    ]
    found = [choose_measures([n], base)[0] if own is None else f"{n}_{own}" for n in names]
    return found[0], tuple(found[1:])


TURNING = "finite_rotation"
"""The rotation by which directions turn with the part."""


def turns_with(array: str) -> bool:
    """Return whether the directions of principal values belong to the undeformed part and turn with it."""
    return array in MEASURES and MEASURES[array].finite and not array.endswith("_almansi")


def rotation_with(array: str, base: str) -> str:
    """Return the rotation vector that goes with a measure."""
    finite = base != "small" or (array in MEASURES and MEASURES[array].finite)
    return "finite_rotation" if finite else "rotation"


_SPOKEN = {
    "mechanical": "mechanical",
    "green_lagrange": "Green-Lagrange",
    "hencky": "Hencky",
    "biot": "Biot",
    "almansi": "Almansi",
}


def spoken(array: str, component: str = "") -> str:
    """Return the name of an array and a component of it as the legend says it.

    Examples
    --------
    >>> spoken("equivalent_strain_green_lagrange"), spoken("principal_strain_hencky", "1"), spoken("strain", "XX")
    ('equivalent strain, Green-Lagrange', 'principal strain 1, Hencky', 'strain XX')
    """
    for base, words in _SPOKEN.items():
        if array.endswith("_" + base):
            return f"{spoken(array.removesuffix('_' + base), component)}, {words}"
    return f"{array.replace('_', ' ')} {component}".rstrip()
