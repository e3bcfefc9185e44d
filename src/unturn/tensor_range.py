"""The largest difference of strain tensors between any two steps: exact, in memory that does not grow with the steps.

The deviators of every step go to a temporary file; then the cells are taken in blocks, all steps of a block at once.
"""

from __future__ import annotations

import shutil
import tempfile
from pathlib import Path
from types import TracebackType
from typing import IO

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError
from unturn.kinematics._symmetric import Floats

Ints = NDArray[np.int64]

_BLOCK = 300_000  # numbers of a block of cells, all steps: 2.4 MB
_COMPONENTS = 5
_ROW = 8 * _COMPONENTS


def deviator_coordinates(strain: Floats) -> Floats:
    """Return five coordinates `(n, 5)` of the deviator of strain tensors `(n, 6)`: distances are Frobenius norms.

    Notes
    -----
    An orthonormal basis of the symmetric tensors without trace; `|a - b|^2 = e':e'` of the difference.

    Examples
    --------
    >>> pull = np.array([[2.0, -1.0, -1.0, 0.0, 0.0, 0.0]])
    >>> round(float((deviator_coordinates(pull) ** 2).sum()), 12)
    6.0
    """
    xx, yy, zz, xy, yz, xz = strain.T
    return np.stack(
        [
            (xx - yy) / np.sqrt(2.0),
            (xx + yy - 2.0 * zz) / np.sqrt(6.0),
            np.sqrt(2.0) * xy,
            np.sqrt(2.0) * yz,
            np.sqrt(2.0) * xz,
        ],
        axis=1,
    )


def largest_distances(points: Floats) -> tuple[Floats, Ints, Ints]:
    """Return for each cell the largest distance between any two of its points, and which two, earlier one first.

    Parameters
    ----------
    points
        `(n_steps, d, m)`; a step whose point is not finite does not count.

    Returns
    -------
    tuple
        Distance `(m,)`, NaN where no step counts, and the two steps `(m,)`, -1 there.

    Notes
    -----
    Exact to rounding. A first pair that is far apart gives a distance L; a pair can only be farther apart when its
    distances from the middle of that pair add up to more than L, and only those pairs are measured. For strain that
    moves to and fro along one line that is none.

    Examples
    --------
    >>> line = np.array([[[0.0]], [[2.0]], [[-1.0]]])
    >>> [float(x[0]) for x in largest_distances(line)]
    [3.0, 1.0, 2.0]
    """
    n, _, m = points.shape
    counts: NDArray[np.bool_] = np.asarray(np.isfinite(points).all(axis=1))
    first = np.argmax(counts, axis=0)
    cells = np.arange(m)
    points = np.where(counts[:, None], points, points[first, :, cells].T)
    a = np.argmax(_squares(points - points[0]), axis=0)
    start = points[a, :, cells].T
    b = np.argmax(_squares(points - start), axis=0)
    end = points[b, :, cells].T
    distance = np.sqrt(_squares(end - start))
    radius = np.sqrt(_squares(points - 0.5 * (start + end)))
    order = np.argsort(-radius, axis=0)
    radius = np.take_along_axis(radius, order, axis=0)
    for i in range(n - 1):
        for j in range(i + 1, n):
            maybe = np.flatnonzero(radius[i] + radius[j] > distance)
            if not len(maybe):
                break
            p, q = order[i, maybe], order[j, maybe]
            found = np.sqrt(_squares((points[p, :, maybe] - points[q, :, maybe]).T))
            farther = found > distance[maybe]
            better = maybe[farther]
            distance[better], a[better], b[better] = found[farther], p[farther], q[farther]
        if 2.0 * radius[i].max(initial=0.0) <= distance.min(initial=np.inf):
            break
    none = ~np.asarray(counts.any(axis=0))
    distance[none] = np.nan
    # a step that does not count stood for the first that does
    a, b = (np.where(none, -1, np.where(counts[k, cells], k, first)) for k in (a, b))
    return distance, np.minimum(a, b), np.maximum(a, b)


def _squares(vectors: Floats) -> Floats:
    total: Floats = np.einsum("...im,...im->...m", vectors, vectors)
    return total


class TensorRange:
    """Takes the strain of one step after the other; used as a context manager.

    Parameters
    ----------
    n_cells
        Number of cells.
    folder
        Where the temporary file lies: 40 bytes for each cell and step. None: the system's own place.
    """

    def __init__(self, n_cells: int, folder: Path | None = None) -> None:
        self._n_cells, self._folder = n_cells, folder
        self._states: list[int] = []
        self._file: IO[bytes] | None = None

    def __enter__(self) -> TensorRange:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._file is not None:
            self._file.close()

    def add(self, strain: Floats, state: int) -> None:
        """Take the strain `(n_cells, 6)` of a step.

        Raises
        ------
        UsageError
            The temporary file has no room.
        """
        try:
            if self._file is None:
                self._file = tempfile.TemporaryFile(prefix=".unturn-", dir=self._folder)  # noqa: SIM115
            if shutil.disk_usage(self._folder or tempfile.gettempdir()).free < self._n_cells * _ROW:
                raise OSError("no space left on the disk")
            for start in range(0, self._n_cells, _BLOCK // _COMPONENTS):
                part = strain[start : start + _BLOCK // _COMPONENTS]
                self._file.write(np.ascontiguousarray(deviator_coordinates(part)).data)
            self._file.flush()
        except OSError as error:
            raise UsageError(
                f"the strain range needs a temporary file of {self._n_cells * _ROW / 1e6:.3g} MB a step in "
                f"{self._folder or tempfile.gettempdir()}, which cannot be written: {error.strerror or error}. Make "
                "room, or leave the range out with --no-range."
            ) from error
        self._states.append(state)

    def finish(self, equivalent_poisson: float | None = None) -> tuple[Floats, Ints, Ints]:
        """Return the equivalent of the largest difference `(n_cells,)` and the two states that make it.

        NaN and -1 where no step was computed; zero where only one was.

        Notes
        -----
        `max over k, l of sqrt(2/3 d':d')`, d the difference of the strain tensors of steps k and l.
        """
        size = np.full(self._n_cells, np.nan)
        first, second = np.full(self._n_cells, -1), np.full(self._n_cells, -1)
        n = len(self._states)
        if n:
            states = np.array([*self._states, -1])
            width = max(1, _BLOCK // (_COMPONENTS * n))
            for start in range(0, self._n_cells, width):
                cells = slice(start, min(start + width, self._n_cells))
                size[cells], a, b = largest_distances(self._block(cells))
                first[cells], second[cells] = states[a], states[b]
        factor = 2.0 / 3.0 if equivalent_poisson is None else 1.5 / (1.0 + equivalent_poisson) ** 2
        return np.sqrt(factor) * size, first, second

    def _block(self, cells: slice) -> Floats:
        """Return `(n_steps, 5, m)` of some cells."""
        assert self._file is not None
        m = cells.stop - cells.start
        block = np.empty((len(self._states), m, _COMPONENTS))
        for k in range(len(self._states)):
            self._file.seek((k * self._n_cells + cells.start) * _ROW)
            self._file.readinto(block[k].data)  # type: ignore[attr-defined]
        return np.ascontiguousarray(block.swapaxes(1, 2))
