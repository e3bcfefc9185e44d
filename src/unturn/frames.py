"""Frames in which components are given: turned cartesian, cylindrical, of the surface, or directions from cell arrays.

Components change, invariants do not. Principal directions stay in the axes of the file.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError, close_matches
from unturn.kinematics._symmetric import PAIRS, Floats
from unturn.result import Result

_SAME = 1e-12
_ACROSS = (
    0.9999985  # cosine of 0.1 degree: a surface whose normal is this near to x takes its first axis from z
)


@dataclass(frozen=True, eq=False)
class Frame:
    """Axes for each cell.

    Attributes
    ----------
    text
        As the user wrote it.
    letters
        Names of the three axes: ``R``, ``T``, ``Z`` or ``1``, ``2``, ``3``.
    fixed
        `(3, 3)` axes as rows, for a turned cartesian frame.
    point, direction
        A point on the axis and its unit direction, for a cylindrical frame.
    cells
        `(n_cells, 3, 3)` axes as rows, from arrays.
    surface
        Whether the axes are those of `surface_axes`.
    """

    text: str
    letters: tuple[str, str, str]
    fixed: Floats | None = None
    point: Floats | None = None
    direction: Floats | None = None
    cells: Floats | None = None
    surface: bool = False

    def axes(self, centroid: Floats, rows: slice | NDArray[np.int64], tangents: Floats | None) -> Floats:
        """Return the axes as rows `(3, 3, m)` of cells with this centroid `(3, m)`, file positions, and tangents.

        On the axis of a cylindrical frame the radial direction is not defined: NaN; as is the frame of the surface of
        cells that are none.
        """
        if self.surface:
            return surface_axes(tangents, centroid.shape[1])
        if self.fixed is not None:
            return np.repeat(self.fixed[:, :, None], centroid.shape[1], axis=2)
        if self.cells is not None:
            return np.moveaxis(self.cells[rows], 0, -1)
        assert self.point is not None
        assert self.direction is not None
        n = self.direction[:, None]
        arm = centroid - self.point[:, None]
        arm = arm - n * (n * arm).sum(axis=0)
        radius = np.sqrt((arm * arm).sum(axis=0))
        reach = np.abs(centroid).max(initial=0.0) + np.abs(self.point).max(initial=0.0)
        radial = arm / np.where(radius > _SAME * reach, radius, np.nan)
        hoop = np.cross(n, radial, axis=0)
        return np.stack([radial, hoop, np.broadcast_to(n, radial.shape)])

    def component_names(self, count: int) -> tuple[str, ...]:
        """Return the names of 3, 6 or 9 components."""
        a = self.letters
        if count == 3:
            return a
        if count == 6:
            return tuple(a[i] + a[j] for i, j in PAIRS)
        return tuple(x + y for x in a for y in a)


def surface_axes(tangents: Floats | None, count: int) -> Floats:
    """Return the axes `(3, 3, m)` of surface cells as rows from their tangents `(2, 3, m)`; NaN for other cells.

    Notes
    -----
    3 is the normal, right-handed with the order of the nodes; 1 is the direction x laid into the surface, or z where the
    normal is within 0.1 degree of x; 2 completes them. Common practice for shells, no source.
    """
    if tangents is None or len(tangents) != 2:
        return np.full((3, 3, count), np.nan)
    with np.errstate(invalid="ignore", divide="ignore"):
        normal = np.cross(tangents[0], tangents[1], axis=0)
        normal /= np.sqrt((normal * normal).sum(axis=0))
        start = np.where(np.abs(normal[0]) > _ACROSS, np.eye(3)[2][:, None], np.eye(3)[0][:, None])
        first = start - normal * (start * normal).sum(axis=0)
        first /= np.sqrt((first * first).sum(axis=0))
    return np.stack([first, np.cross(normal, first, axis=0), normal])


def turned_components(values: Floats, axes: Floats) -> Floats:
    """Return a vector `(3, m)`, symmetric tensor `(6, m)` or full tensor `(9, m)` in the frame of `axes`.

    A component that is not known, as the strain across a plane mesh, spoils those that it enters and no others.
    """
    missing = np.isnan(values)
    if not missing.any():
        return _turned(values, axes)
    turned = _turned(np.where(missing, 0.0, values), axes)
    turned[_turned(missing.astype(np.float64), np.abs(axes)) > _SAME] = np.nan
    return turned


def _turned(values: Floats, axes: Floats) -> Floats:
    if len(values) == 3:
        vector: Floats = np.einsum("aim,im->am", axes, values)
        return vector
    if len(values) == 9:
        turned: Floats = np.einsum("aim,ijm,bjm->abm", axes, values.reshape(3, 3, -1), axes, optimize=True)
        return turned.reshape(9, -1)
    full = np.empty((3, 3, values.shape[1]))
    for k, (i, j) in enumerate(PAIRS):
        full[i, j] = full[j, i] = values[k]
    half = np.einsum("aim,ijm->ajm", axes, full)
    return np.stack([(half[i] * axes[j]).sum(axis=0) for i, j in PAIRS])


def parse_frame(text: str, result: Result) -> Frame:
    """Return the frame of a text.

    ``cylindrical AXIS [through X,Y,Z]`` with AXIS ``x``, ``y``, ``z`` or a direction ``a,b,c``;
    ``cartesian FIRST SECOND`` with two directions: 1 along the first, 2 in their plane;
    ``surface``, see `surface_axes`;
    ``arrays FIRST SECOND`` with two cell arrays of directions, taken the same way.

    Raises
    ------
    UsageError
        The text is none of these, or names an array that does not exist.
    """
    words = text.split()
    if words and words[0] == "cylindrical" and len(words) in (2, 4):
        point = np.zeros(3)
        if len(words) == 4:
            if words[2] != "through":
                raise _unclear(text)
            point = _vector(words[3], text)
        return Frame(text, ("R", "T", "Z"), point=point, direction=_unit(_direction(words[1], text), text))
    if words and words[0] == "cartesian" and len(words) == 3:
        first, second = (_direction(w, text) for w in words[1:])
        return Frame(text, ("1", "2", "3"), fixed=_orthonormal(first[None], second[None], text)[0])
    if words and words[0] == "arrays" and len(words) == 3:
        first, second = (_cell_directions(result, w) for w in words[1:])
        return Frame(text, ("1", "2", "3"), cells=_orthonormal(first, second, text))
    if words == ["surface"]:
        return Frame(text, ("1", "2", "3"), surface=True)
    raise _unclear(text)


def _unclear(text: str) -> UsageError:
    return UsageError(
        f"--frame {text!r} is not understood. Use 'cylindrical z', 'cylindrical 0,0,1 through 10,0,0', "
        "'cartesian 1,1,0 0,0,1', 'surface' or 'arrays FIRST SECOND' (two cell arrays of directions)."
    )


def _vector(word: str, text: str) -> Floats:
    try:
        values = np.array([float(w) for w in word.split(",")])
    except ValueError:
        raise _unclear(text) from None
    if values.shape != (3,) or not np.isfinite(values).all():
        raise _unclear(text)
    return values


def _direction(word: str, text: str) -> Floats:
    if word in ("x", "y", "z"):
        axis: Floats = np.eye(3)["xyz".index(word)]
        return axis
    return _vector(word, text)


def _unit(vector: Floats, text: str) -> Floats:
    size = float(np.linalg.norm(vector))
    if not size > 0:
        raise UsageError(f"--frame {text!r}: a direction has no length.")
    unit: Floats = vector / size
    return unit


def _orthonormal(first: Floats, second: Floats, text: str) -> Floats:
    """Return axes `(n, 3, 3)` as rows from two directions `(n, 3)`; NaN where they are parallel or zero."""
    with np.errstate(invalid="ignore", divide="ignore"):
        one = first / np.linalg.norm(first, axis=1, keepdims=True)
        two = second / np.linalg.norm(second, axis=1, keepdims=True)
        two = two - (two * one).sum(axis=1, keepdims=True) * one
        size = np.linalg.norm(two, axis=1, keepdims=True)
        two = two / np.where(size > _SAME, size, np.nan)
    if not np.isfinite(two).any():
        raise UsageError(f"--frame {text!r}: the two directions are parallel or have no length.")
    axes: Floats = np.stack([one, two, np.cross(one, two)], axis=1)
    return axes


def _cell_directions(result: Result, name: str) -> Floats:
    values: Any = result.cell_data.get(name)
    if values is None:
        present = ", ".join(repr(n) for n in result.cell_data) or "none"
        raise UsageError(
            f"--frame: no cell array is called {name!r}.{close_matches(name, result.cell_data)} Cell arrays: {present}."
        )
    if values.ndim != 2 or values.shape[1] != 3:
        raise UsageError(
            f"--frame: cell array {name!r} has shape {values.shape}; a direction has 3 components."
        )
    return np.asarray(values, dtype=np.float64)
