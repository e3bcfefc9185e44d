"""The arrays of two results side by side: those of the files, and measures computed on both."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError
from unturn.frames import parse_frame
from unturn.kinematics._symmetric import Floats
from unturn.measures import MEASURES, choose_measures
from unturn.pipeline import Computed, StrainOptions, compute
from unturn.precision import MEANT_DISPLACEMENT, storage_resolution
from unturn.result import Array, Result
from unturn.verdicts.differences import Pair, Where
from unturn.verdicts.finding import Finding
from unturn.verdicts.overlay import Overlay
from unturn.verdicts.sampled_measures import measures_at
from unturn.verdicts.wording import short_name

_DIRECTION = "principal_direction_"
_NOISE = 4.0  # the floor is that of one nodal value; a gradient is a sum over all nodes
_ROUNDING = 1e-15  # of measures, times the square of the gradient where that is above 1


@dataclass(eq=False)
class SideBySide:
    """What was paired, and what could not be."""

    pairs: list[Pair] = field(default_factory=list)
    findings: list[Finding] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)


def data_of(result: Result, where: Where) -> dict[str, Array]:
    """Return the point, cell or field arrays of a result."""
    return dict({"point": result.point_data, "cell": result.cell_data, "field": result.field_data}[where])


def is_direction(name: str) -> bool:
    """Whether an array is called as a principal direction, whose sign says nothing."""
    return name.startswith(_DIRECTION) and name[len(_DIRECTION) :][:1] in ("1", "2", "3")


# --- arrays of the files ----------------------------------------------------------------------------------------------


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
    values = data_of(reference, where).get(_values_of(name))
    if values is None or values.ndim != 2 or values.shape[1] != 3:
        return np.zeros((1, 1))
    floor = _stored(values, _resolution(values)).max(axis=1)
    return _turned(values.astype(np.float64), _number_of(name), floor)


def _values_of(direction: str) -> str:
    return "principal_strain" + direction[len(_DIRECTION) + 1 :]


def _number_of(direction: str) -> int:
    return int(direction[len(_DIRECTION)]) - 1


def _turned(principal: Floats, which: int, noise: Floats) -> Floats:
    """Return how far a principal direction is left open: noise over the gap to the nearest other value, at most 2."""
    gap = np.abs(np.delete(principal, which, axis=1) - principal[:, which, None]).min(axis=1)
    with np.errstate(invalid="ignore", divide="ignore"):
        turned = np.where(gap > noise, np.minimum(2.0 * noise / gap, 2.0), 2.0)
    return np.repeat(turned[:, None], 3, axis=1)


# --- measures ---------------------------------------------------------------------------------------------------------


def measure_pairs(overlay: Overlay, strain: StrainOptions) -> SideBySide:
    """Return measures computed on both sides, at the cells of the reference.

    Raises
    ------
    UsageError
        Unknown measures, or options that do not fit the mesh, or two meshes.
    InputError
        A result without displacement, or none of whose cells can be computed.
    """
    names = choose_measures(strain.measures, strain.base)
    also = [_values_of(n) for n in names if is_direction(n)]
    asked = replace(strain, measures=list(dict.fromkeys([*names, *also])))
    ours, theirs = (compute(view.result, asked, diagnose=True) for view in (overlay.mesh, overlay.base))
    found = SideBySide()
    for computed in (ours, theirs):
        computed.require_some()
        result = computed.fields.model.result
        found.notes += [
            f"{short_name(result.path)}: {n}" for n in computed.fields.notes if n not in result.notes
        ]
    placed = _ours(overlay, ours, asked)
    assert theirs.fields.diagnostics is not None
    noise = placed.noise + theirs.fields.diagnostics.noise
    known = placed.known | (theirs.fields.diagnostics.dimension > 0)
    for name in names:
        b = columns(theirs.fields.arrays[name])
        measure = MEASURES.get(name)
        found.pairs.append(
            Pair(
                name, f"computed {name}", "cell", columns(placed.arrays[name]), b,
                _left_open(overlay, name, theirs, noise), theirs.fields.components.get(name, ()),
                "" if measure is None or measure.unit == "1" else measure.unit,
                outside=placed.outside, known=known,
            )
        )  # fmt: skip
    return found


@dataclass(frozen=True, eq=False)
class _Ours:
    """Measures of the result at the cells of the reference, their noise floor, cells with a value, cells it has not."""

    arrays: dict[str, Floats]
    noise: Floats
    known: NDArray[np.bool_]
    outside: NDArray[np.bool_] | None = None


def _ours(overlay: Overlay, ours: Computed, asked: StrainOptions) -> _Ours:
    diagnostics = ours.fields.diagnostics
    assert diagnostics is not None
    order = overlay.match.cell_of
    if order is not None:
        arrays = {n: v[order] for n, v in ours.fields.arrays.items()}
        return _Ours(arrays, diagnostics.noise[order], diagnostics.dimension[order] > 0)
    if asked.at == "mean":
        raise UsageError(
            "--at mean belongs to the cells of one mesh, and the meshes differ: use --at centroid."
        )
    frame = None if asked.frame is None else parse_frame(asked.frame, overlay.mesh.result)
    arrays, noise = measures_at(
        overlay.cells,
        overlay.base.centroid,
        ours.fields,
        list(ours.fields.arrays),
        frame,
        asked.equivalent_poisson,
    )
    return _Ours(arrays, noise, np.zeros(len(noise), dtype=bool), overlay.cells.outside)


def _left_open(overlay: Overlay, name: str, theirs: Computed, noise: Floats) -> Floats:
    """Return how far a measure is left open: by the noise floors of both sides, and by rounding of its own."""
    b = columns(theirs.fields.arrays[name])
    if name not in MEASURES:  # of the mesh alone
        blurred: Floats = overlay.base.blur[:, None] * np.abs(np.nan_to_num(b))
        return blurred
    size = np.sqrt(np.nansum(np.square(b), axis=1))
    floor = np.nan_to_num(_NOISE * noise + _ROUNDING * np.maximum(1.0, size) ** 2)
    if is_direction(name):
        return _turned(theirs.fields.arrays[_values_of(name)], _number_of(name), floor)
    return np.repeat(floor[:, None], b.shape[1], axis=1)
