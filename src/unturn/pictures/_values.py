"""What is drawn: the numbers, their unit, what they are called, how far the shape is deformed."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unturn.errors import InputError, UsageError, close_matches
from unturn.measures import GEOMETRY, MEASURES
from unturn.pictures._colours import round_up
from unturn.result import Association, Result, used_points

Floats = NDArray[np.float64]

# unit of an array -> (factor, what the legend says)
_UNITS = {
    "strain": (1e6, "microstrain (strain × 10⁻⁶)"),
    "radian": (1e3, "milliradian (rad × 10⁻³)"),
    "1": (1.0, "dimensionless"),
    "": (1.0, "unit of the array"),
}
_SHORT = {"strain": "microstrain", "radian": "mrad"}
FITTED_SHARE = 0.05
FARTHEST = 1e6  # sizes of the model that a displacement is drawn across


@dataclass(frozen=True, eq=False)
class Values:
    """The numbers of a picture.

    Attributes
    ----------
    numbers
        `(n_cells,)` or `(n_points,)` in the unit of the array.
    name
        What the legend calls them; lines after the first are remarks.
    scale, unit, short_unit
        Number shown per number held; the unit shown, at length and beside a number.
    """

    numbers: Floats
    name: str
    scale: float
    unit: str
    short_unit: str


def values_of(
    result: Result, array: str, association: Association, component: int | str | None, legend: str, unit: str
) -> Values:
    """Return the numbers of one component of an array.

    Raises
    ------
    UsageError
        No such array or component, or an array that does not hold numbers.
    """
    where = f"{result.path}: " if result.path else ""
    if association not in ("cell", "point"):
        raise UsageError(f"association={association!r} is not known; use 'cell' or 'point'.")
    data = result.cell_data if association == "cell" else result.point_data
    if array not in data:
        present = ", ".join(repr(n) for n in data) or "none"
        raise UsageError(
            f"{where}no {association} array is called {array!r}.{close_matches(array, data)} "
            f"{association.capitalize()} arrays: {present}."
        )
    held = np.asarray(data[array])
    if held.dtype.kind not in "fiub":
        raise UsageError(f"{where}{association} array {array!r} holds {held.dtype}, not real numbers.")
    columns = held.reshape(len(held), -1)
    labels = result.component_names.get((association, array), ()) or _labels(array, columns.shape[1])
    k = _component(component, columns.shape[1], labels, f"{where}{association} array {array!r}")
    name = legend or array.replace("_", " ") + (f" {labels[k]}" if columns.shape[1] > 1 else "")
    unit = unit or (MEASURES[array].unit if array in MEASURES else "1" if array in GEOMETRY else "")
    return values_with(columns[:, k].astype(np.float64), name, unit)


def values_with(numbers: Floats, name: str, unit: str) -> Values:
    """Return numbers with what the legend says of them; `unit` as in `unturn.measures.MEASURES`, or any other."""
    scale, long = _UNITS.get(unit, (1.0, unit))
    return Values(numbers, name, scale, long, _SHORT.get(unit, "" if unit in _UNITS else unit))


def _labels(array: str, n: int) -> tuple[str, ...]:
    known = MEASURES[array].components if array in MEASURES else ()
    return known if len(known) == n else tuple(str(k + 1) for k in range(n))


def _component(component: int | str | None, n: int, labels: tuple[str, ...], where: str) -> int:
    if component is None and n == 1:
        return 0
    if isinstance(component, str) and component in labels:
        return labels.index(component)
    if isinstance(component, int) and 0 <= component < n:
        return component
    listed = ", ".join(labels)
    if component is None:
        raise UsageError(f"{where} has {n} components; choose one to draw: {listed}.")
    raise UsageError(
        f"{where} has no component {component!r}; its {n} components are {listed} (or 0 to {n - 1} by position)."
    )


@dataclass(frozen=True, eq=False)
class Shape:
    """The shape that is drawn.

    Attributes
    ----------
    points
        `(n, 3)` deformed points.
    rest
        `(n, 3)` undeformed points.
    factor
        Displacements are drawn this many times as large.
    fitted
        Whether the factor was chosen here.
    """

    points: Floats
    rest: Floats
    factor: float
    fitted: bool


def shape_of(result: Result, rest: Floats, displacement: Floats | None, factor: float | None) -> Shape:
    """Return the deformed points and the factor used; `rest` `(n_points, 3)` are the undeformed ones.

    Raises
    ------
    UsageError
        A displacement of another shape, a factor that is not a number, or one that moves points beyond what can be
        drawn.
    InputError
        No point with finite coordinates.
    """
    if not np.isfinite(rest).all(axis=1).any():
        raise InputError(f"{result.path + ': ' if result.path else ''}no point has finite coordinates.")
    if displacement is None:
        if factor not in (None, 0.0):
            raise UsageError("a deformation factor was given and no displacement.")
        return Shape(rest, rest, 0.0, False)
    moved = np.asarray(displacement, dtype=np.float64)
    if moved.shape != rest.shape:
        raise UsageError(f"the displacement has shape {moved.shape}; expected {rest.shape}.")
    if factor is not None and not np.isfinite(factor):
        raise UsageError(f"the deformation factor is {factor}; give a number.")
    there = used_points(result.blocks, result.n_points) & np.isfinite(rest).all(axis=1)
    moved = np.where((there & np.isfinite(moved).all(axis=1))[:, None], moved, 0.0)
    points = rest[there] if there.any() else rest
    used = fitted_factor(points, moved) if factor is None else float(factor)
    _check_reach(points, moved, used)
    return Shape(rest + used * moved, rest, used, factor is None)


def _check_reach(points: Floats, displacement: Floats, factor: float) -> None:
    """Refuse a drawn displacement that leaves nothing of the model to be seen, and overflows single precision."""
    finite = points[np.isfinite(points).all(axis=1)]
    size = float(np.linalg.norm(np.ptp(finite, axis=0)))
    each = np.abs(displacement).max(axis=1)
    if factor and size and each.max() > FARTHEST * size / abs(factor):
        node = int(each.argmax())
        raise UsageError(
            f"the displacement of point {node}, {each[node]:.4g} in the length unit of the file, drawn x {factor:g} is more "
            f"than a million times the size of the model ({size:.4g}): look for a wrong unit or a value that stands "
            "for 'none', and draw with a smaller factor, or 0."
        )


def fitted_factor(points: Floats, displacement: Floats) -> float:
    """Return the factor that makes the largest displacement about 5 % of the model, never below 1."""
    finite = points[np.isfinite(points).all(axis=1)]
    size = float(np.linalg.norm(np.ptp(finite, axis=0)))
    largest = float(np.linalg.norm(displacement, axis=1).max())
    if largest == 0.0 or largest >= FITTED_SHARE * size:
        return 1.0
    return max(1.0, round_up(FITTED_SHARE * size / largest))
