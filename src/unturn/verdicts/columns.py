"""Numbers that limits are of: one for each cell, node, share of a node or free face."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from unturn.kinematics._symmetric import Floats
from unturn.measures import FULL, TENSOR, VECTOR
from unturn.pipeline import Computed
from unturn.recovery import NodeShares
from unturn.result import Result

Ints = NDArray[np.int64]
MAGNITUDE = "magnitude"


class NoValues(Exception):
    """What a limit is of cannot be had from a result; the text says why."""


@dataclass(frozen=True, eq=False)
class Column:
    """One number for each cell, node, share of a node or face.

    Attributes
    ----------
    values
        `(n,)`.
    on
        What they are on.
    computed
        What they come from; None for arrays of the file.
    """

    values: Floats
    on: Literal["cells", "points", "shares", "faces"]
    computed: Computed | None

    @property
    def surface(self) -> Result:
        """The free faces that it is on."""
        assert self.computed is not None
        assert self.computed.surface is not None
        return self.computed.surface.result

    @property
    def shares(self) -> NodeShares:
        """The shares of the nodes that it is on."""
        assert self.computed is not None
        assert self.computed.nodes is not None
        return self.computed.nodes.recovered.shares

    def owners(self, index: Ints) -> Ints:
        """Return the cell or point of the file behind each position of a column."""
        if self.on == "shares":
            return np.asarray(self.shares.point)[index]
        if self.on == "faces":
            return np.asarray(self.surface.cell_data["parent_cell"])[index]
        return index


@dataclass(frozen=True, eq=False)
class Selection:
    """The values of a column in a region.

    Attributes
    ----------
    column
        The column.
    index
        `(n,)` positions in it.
    values, weights
        `(n,)` finite ones.
    missing
        How many values are left out because they are not finite.
    cells
        `(m,)` the cells of the region.
    region
        Its name.
    """

    column: Column
    index: Ints
    values: Floats
    weights: Floats
    missing: int
    cells: Ints
    region: str


def one_component(values: NDArray[Any], labels: tuple[str, ...], component: str, name: str) -> Floats:
    """Return one component of an array, or the length of a vector.

    Raises
    ------
    NoValues
        It has no such component, or holds no numbers.
    """
    if values.dtype.kind not in "iufb":
        raise NoValues(f"the array {name!r} holds no real numbers")
    if values.ndim == 1 or values[:1].size == 1:
        if component:
            raise NoValues(f"the array {name!r} is one number each and has no component {component!r}")
        return values.reshape(len(values)).astype(np.float64, copy=False)
    values = values.reshape(len(values), -1)
    n = values.shape[1]
    if component == MAGNITUDE and n <= len(VECTOR):
        length: Floats = np.sqrt(np.square(values.astype(np.float64, copy=False)).sum(axis=1))
        return length
    usual = {2: VECTOR[:2], 3: VECTOR, 6: TENSOR, 9: FULL}.get(n, ())
    known = labels if len(labels) == n else usual
    names = [*known, *(str(k + 1) for k in range(n))]
    if component not in names:
        more = [MAGNITUDE] if n <= len(VECTOR) else []
        raise NoValues(
            f"the array {name!r} has components: name one of {', '.join(dict.fromkeys([*names, *more]))}"
            + (f", not {component!r}" if component else "")
        )
    column: Floats = values[:, names.index(component) % n].astype(np.float64, copy=False)
    return column
