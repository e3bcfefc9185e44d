"""Whether the states of a series, or load cases, are on one mesh."""

from __future__ import annotations

import hashlib

import numpy as np

from unturn.errors import InputError
from unturn.model import Model
from unturn.result import used_points

_SAME = 1e-6  # share of the model's size within which two meshes have the same coordinates


class ReferenceMesh:
    """The mesh of the first state, to hold the others against."""

    def __init__(self, model: Model) -> None:
        self._blocks = _blocks(model)
        self._used = used_points(model.result.blocks, model.result.n_points)
        self._points = model.points
        self._plane = model.plane is not None
        used = self._points[self._used]
        self._tolerance = _SAME * float(np.nanmax(np.nanmax(used, axis=0) - np.nanmin(used, axis=0)))

    def compare(self, model: Model) -> None:
        """Refuse another mesh.

        Raises
        ------
        InputError
            Other cells, or nodes elsewhere.
        """
        if model.result.n_points != len(self._points) or _blocks(model) != self._blocks:
            raise InputError(
                f"{model.result.path}: its mesh is another one than that of the first state ({model.result.n_points} "
                f"points and {model.result.n_cells} cells; before {len(self._points)} points): values of a cell "
                "cannot be compared. Give states on one mesh."
            )
        if (model.plane is not None) is not self._plane:
            raise InputError(
                f"{model.result.path}: the flat mesh moves across its plane here and not in the first state, or the other "
                "way round: it counts as a surface once and as plane once. State --plane, or leave out the states "
                "without such displacement."
            )
        apart = np.abs(model.points - self._points).max(axis=1)
        worst = float(np.nanmax(apart, where=self._used, initial=0.0))
        if worst > self._tolerance:
            node = int(np.nanargmax(np.where(self._used, apart, -1.0)))
            raise InputError(
                f"{model.result.path}: node {node} lies {worst:.3g} away from where it is in the first state: another "
                "mesh, or coordinates that are already deformed (--coordinates deformed)."
            )


def _blocks(model: Model) -> list[tuple[str, tuple[int, ...], bytes]]:
    found = []
    for block in model.result.blocks:
        digest = hashlib.blake2b(np.ascontiguousarray(block.connectivity).data, digest_size=16)
        digest.update(np.ascontiguousarray(block.index).data)
        found.append((block.cell_type, block.connectivity.shape, digest.digest()))
    return found
