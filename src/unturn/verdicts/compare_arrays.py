"""The arrays of two result files side by side."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np

from unturn.kinematics._symmetric import Floats
from unturn.precision import MEANT_DISPLACEMENT, storage_resolution
from unturn.result import Array, Result
from unturn.verdicts.differences import Pair, Where
from unturn.verdicts.directions import is_direction, turned, values_of
from unturn.verdicts.finding import Finding
from unturn.verdicts.overlay import Overlay


@dataclass(eq=False)
class SideBySide:
    """What was paired, and what could not be."""

    pairs: list[Pair] = field(default_factory=list)
    findings: list[Finding] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)


def data_of(result: Result, where: Where) -> dict[str, Array]:
    """Return the point, cell or field arrays of a result."""
    return dict({"point": result.point_data, "cell": result.cell_data, "field": result.field_data}[where])


def stored_pairs(overlay: Overlay, group: str, wanted: Callable[[str], bool]) -> SideBySide:
    """Return the arrays that both files have.

    Parameters
    ----------
    overlay
        The result on its reference.
    group
        Of the findings on arrays that are not the same kind of array.
    wanted
        Whether an array is to be compared.
    """
    found = SideBySide()
    wheres: tuple[Where, ...] = ("point", "cell", "field")
    for where in wheres:
        ours, theirs = data_of(overlay.mesh.result, where), data_of(overlay.base.result, where)
        for name in theirs:
            if name in ours and wanted(name):
                _pair(found, overlay, group, where, name)
    return found


def _pair(found: SideBySide, overlay: Overlay, group: str, where: Where, name: str) -> None:
    result, reference, label = overlay.mesh.result, overlay.base.result, f"{where} {name}"
    a, b = columns(data_of(result, where)[name]), columns(data_of(reference, where)[name])
    names = reference.component_names.get((where, name), ())
    own = result.component_names.get((where, name), ())
    other = ""
    if a.shape[1] != b.shape[1]:
        other = f"{a.shape[1]} components; {b.shape[1]} in the reference"
    elif where == "field" and len(a) != len(b):
        other = f"{len(a)} values; {len(b)} in the reference"
    elif sorted(own) != sorted(names) and own and names:
        other = f"components {', '.join(own)}; {', '.join(names)} in the reference"
    elif {a.dtype.kind, b.dtype.kind} != {"f"} and not _alike(a, b):
        other = f"{a.dtype}; {b.dtype} in the reference"
    if other:
        message = f"the array is another one: {other}"
        found.findings.append(
            Finding(f"kind of {label}", group, "the same kind of array", "exceeded", message)
        )
        return
    if own and names and own != names:
        a = a[:, [own.index(n) for n in names]]
    exact = "f" not in (a.dtype.kind, b.dtype.kind)
    if exact and overlay.differ and where != "field":
        found.notes.append(f"{label}: whole numbers and texts belong to one mesh; not compared on another")
        return
    if a.dtype != b.dtype and not (exact and a.dtype.kind == b.dtype.kind == "U"):
        found.notes.append(f"{label}: {a.dtype} here, {b.dtype} in the reference")
    if exact:
        at = overlay.placed(where, a)
        none = np.zeros((len(b), 1))
        found.pairs.append(
            Pair(name, label, where, at.values, b, none, names, exact=True, outside=at.outside)
        )
        return
    at = overlay.placed(where, a.astype(np.float64))
    left_open = _stored(at.values, _resolution(a)) + _stored(b, _resolution(b)) + at.left_open
    if is_direction(name) and b.shape[1] == 3:
        left_open = left_open + _between_equal(reference, where, name)
    found.pairs.append(
        Pair(
            name, label, where, at.values, b.astype(np.float64), left_open, names,
            outside=at.outside, known=overlay.known(where),
        )
    )  # fmt: skip


def _alike(a: Array, b: Array) -> bool:
    """Whether both are numbers, or both texts."""
    return all(v.dtype.kind in "iubf" for v in (a, b)) or all(v.dtype.kind in "USO" for v in (a, b))


def columns(values: Array) -> Array:
    """Return an array as `(n, components)`."""
    values = np.asarray(values)
    return values.reshape(len(values), -1) if values.ndim else values.reshape(1, 1)


def _resolution(values: Array) -> tuple[float, float]:
    if values.dtype.kind != "f":
        return 0.0, 0.0
    found = storage_resolution(values, MEANT_DISPLACEMENT)
    return found.relative, found.absolute


def _stored(values: Array, resolution: tuple[float, float]) -> Floats:
    """Return by how much stored values may be off."""
    size = np.abs(values.astype(np.float64))
    left_open: Floats = resolution[0] * np.where(np.isfinite(size), size, 0.0) + resolution[1]
    return left_open


def _between_equal(reference: Result, where: Where, name: str) -> Floats:
    """Return how far a stored principal direction is left open, where principal values nearly coincide."""
    values = data_of(reference, where).get(values_of(name))
    if values is None or values.ndim != 2 or values.shape[1] != 3:
        return np.zeros((1, 1))
    floor = _stored(values, _resolution(values)).max(axis=1)
    return turned(values.astype(np.float64), name, floor)
