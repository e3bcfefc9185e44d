"""The solver's own element and node numbers, where an array holds them."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unturn.result import Array, Result

_ELEMENTS = re.compile(
    r"^(global)?[ _-]?(element|elem|elt|cell)s?[ _-]?(number|numbers|num|no|id|ids|label|labels)$"
    r"|^eid$|^GlobalElementIds?$|^GlobalCellIds?$",
    re.IGNORECASE,
)
_NODES = re.compile(
    r"^(global)?[ _-]?(node|nodal|point|vertex|grid)s?[ _-]?(number|numbers|num|no|id|ids|label|labels)$"
    r"|^nid$|^GlobalNodeIds?$|^GlobalPointIds?$",
    re.IGNORECASE,
)


@dataclass(frozen=True, eq=False)
class Numbering:
    """Numbers of the solver: the array's name and one number for each position."""

    name: str
    numbers: NDArray[np.int64]


def element_numbers(result: Result) -> Numbering | None:
    """Return the solver's element numbers, or None when no cell array holds them."""
    return _find(result.cell_data, _ELEMENTS)


def node_numbers(result: Result) -> Numbering | None:
    """Return the solver's node numbers, or None when no point array holds them."""
    return _find(result.point_data, _NODES)


def _find(data: Mapping[str, Array], pattern: re.Pattern[str]) -> Numbering | None:
    for name, values in data.items():
        flat = np.asarray(values)
        if flat.size != len(flat) or flat.dtype.kind not in "iu" or not pattern.search(name.strip()):
            continue
        flat = flat.reshape(-1).astype(np.int64)
        if len(np.unique(flat)) == len(flat):
            return Numbering(name, flat)
    return None
