"""Parts of a result by which it is judged: cell groups, tags, connected bodies, else the whole."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError, close_matches
from unturn.kinematics._symmetric import Floats
from unturn.model import Model
from unturn.result import Result

Origin = Literal["group", "tag", "body", "whole", "plan"]

_TAG_NAMES = re.compile(
    r"region|material|^mat(_?id)?$|part|body|bodies|group|tag|physical|propert|^[pm]id$|domain|section|component|zone",
    re.IGNORECASE,
)
_NOT_TAGS = re.compile(
    r"number|ghost|owner|proc|rank|partition|element.?id|cell.?id|node|global|type|status|alive|geometrical|index",
    re.IGNORECASE,
)
_MOST_TAGS = 200
_MOST_BODIES = 50
_REPEATED = 0.4  # share of nodes with a twin from which a writer is taken to have repeated them


@dataclass(frozen=True, eq=False)
class Region:
    """A named part.

    Parameters
    ----------
    name
        Group name, ``array=value``, ``body 1`` ... or ``whole``.
    cells
        Zero-based file positions.
    origin
        What it comes from.
    n_bodies
        Of the whole: how many connected bodies it is when they are too many to be judged apart.
    """

    name: str
    cells: NDArray[np.int64]
    origin: Origin
    n_bodies: int = 1


def tag_arrays(result: Result, most: int | None = _MOST_TAGS) -> list[str]:
    """Return the integer cell arrays that number parts, the likeliest first; not those of more parts than `most`."""
    likely = []
    for name, values in result.cell_data.items():
        if values.size != result.n_cells or values.dtype.kind not in "iu" or _NOT_TAGS.search(name):
            continue
        if _TAG_NAMES.search(name) and (most is None or len(np.unique(values)) <= most):
            likely.append(name)
    return likely


def unused_tags(result: Result) -> str:
    """Return a sentence on an array that numbers more parts than are judged apart; empty when there is none."""
    used = tag_arrays(result)
    if used or result.groups:
        return ""
    for name in tag_arrays(result, most=None):
        return (
            f"{name!r} numbers {len(np.unique(result.cell_data[name]))} parts, more than the {_MOST_TAGS} that are "
            f"judged apart: --region {name}=NUMBER judges one"
        )
    return ""


def judged_together(regions: Sequence[Region]) -> str:
    """Return a sentence on bodies that are judged as one because there are so many; empty when there are none."""
    for region in regions:
        if region.n_bodies > 1:
            return (
                f"the mesh is {region.n_bodies} bodies, more than the {_MOST_BODIES} that are judged apart: they are judged "
                "as one, each against the strain of all; an integer cell array 'part' would tell them apart"
            )
    return ""


def find_regions(model: Model, cells: NDArray[np.bool_], most: int | None = _MOST_TAGS) -> list[Region]:
    """Return the regions of a model; only the `cells` (mask) that are judged belong to them.

    Groups come before tags, tags before connected bodies. Cells that are in no group make the region ``(no group)``.
    Arrays that number more than `most` parts are no tags; None: whatever their number.
    """
    result = model.result
    found = _groups(result, cells) or _tags(result, cells, most)
    if found:
        return found
    positions, part, counts = _body_of_cells(model, cells)
    if len(counts) > 1 and (most is None or len(counts) <= _MOST_BODIES):
        return _bodies(positions, part, counts)
    return [Region("whole", np.flatnonzero(cells), "whole", max(1, len(counts)))]


def _groups(result: Result, cells: NDArray[np.bool_]) -> list[Region]:
    found = []
    rest = cells.copy()
    for name, members in result.groups.items():
        inside = np.asarray(members)[cells[members]]
        if len(inside):
            found.append(Region(name, np.sort(inside), "group"))
            rest[inside] = False
    if found and rest.any():
        found.append(Region("(no group)", np.flatnonzero(rest), "group"))
    return found


def _tags(result: Result, cells: NDArray[np.bool_], most: int | None) -> list[Region]:
    for name in tag_arrays(result, most):
        values = result.cell_data[name].reshape(-1)
        distinct = np.unique(values[cells])
        if len(distinct) < 2:
            continue
        return [
            Region(f"{name}={v}", np.flatnonzero(cells & (values == v)), "tag") for v in distinct.tolist()
        ]
    return []


def bodies(model: Model, cells: NDArray[np.bool_]) -> list[Region]:
    """Return connected bodies: cells that share nodes; an empty list for a single one: the whole is then the better unit.

    Coincident nodes count as one where two fifths of the nodes or more have a twin: the writer repeated them per element or
    per block. Parts that only touch stay apart.
    """
    positions, part, counts = _body_of_cells(model, cells)
    return _bodies(positions, part, counts) if len(counts) > 1 else []


def _bodies(positions: NDArray[np.int64], part: NDArray[np.int64], counts: NDArray[np.int64]) -> list[Region]:
    order = np.argsort(-counts, kind="stable")
    return [Region(f"body {rank + 1}", np.sort(positions[part == k]), "body") for rank, k in enumerate(order)]


def _body_of_cells(
    model: Model, cells: NDArray[np.bool_]
) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]]:
    """Return file positions of cells, the body of each, and how many cells each body has."""
    corners, index = [], []
    for block in model.blocks:
        if block.row is not None:
            mask = cells[block.index]
            conn = block.connectivity[:, : block.row.n_corners]
            corners.append(conn if mask.all() else conn[mask])
            index.append(block.index if mask.all() else block.index[mask])
    part = _parts(corners, model.result.n_points)
    if part.max(initial=0) > 0:
        used = np.zeros(model.result.n_points, dtype=bool)
        for conn in corners:
            used[conn] = True
        where = np.flatnonzero(used)  # a node of no cell may lie anywhere
        label = np.arange(model.result.n_points)
        label[where] = where[merge_coincident(model.points[where])[0]]
        single = np.bincount(label[where], minlength=len(label))[label[where]] == 1
        if len(where) and np.mean(~single) >= _REPEATED:
            part = _parts([label[conn] for conn in corners], model.result.n_points)
    _, part, counts = np.unique(part, return_inverse=True, return_counts=True)
    return np.concatenate(index), part, counts


def _parts(corners: Sequence[NDArray[np.int64]], n_points: int) -> NDArray[np.int64]:
    """Return for each cell the number of its connected part, from zero."""
    from scipy import sparse
    from scipy.sparse.csgraph import connected_components

    lengths = np.concatenate([np.full(len(conn), conn.shape[1]) for conn in corners])
    # a graph of points, then cells, each cell joined to its corners
    ends = np.concatenate([np.zeros(n_points + 1, dtype=np.int64), np.cumsum(lengths)]).astype(np.int32)
    joined = np.concatenate([conn.reshape(-1) for conn in corners]).astype(np.int32)
    size = n_points + len(lengths)
    graph = sparse.csr_array((np.ones(len(joined), dtype=np.int8), joined, ends), shape=(size, size))
    _, part = connected_components(graph, directed=False)
    return np.unique(part[n_points:], return_inverse=True)[1]


def merge_coincident(points: Floats) -> tuple[NDArray[np.int64], float]:
    """Return for each point the smallest position among coincident points, and the tolerance used."""
    finite = np.isfinite(points).all(axis=1)
    spread = float(np.ptp(points[finite], axis=0).max()) if finite.any() else 0.0
    tolerance = 1e-9 * spread
    label = np.arange(len(points))
    where = np.flatnonzero(finite)
    where = where[_near_along(points[where], tolerance)]
    if not len(where):
        return label, tolerance
    from scipy import sparse
    from scipy.sparse.csgraph import connected_components
    from scipy.spatial import cKDTree

    pairs = cKDTree(points[where]).query_pairs(tolerance, output_type="ndarray")
    if len(pairs):
        graph = sparse.csr_array(
            (np.ones(len(pairs), dtype=np.int8), (pairs[:, 0], pairs[:, 1])), shape=(len(where), len(where))
        )
        _, part = connected_components(graph, directed=False)
        smallest = np.full(part.max() + 1, len(points))
        np.minimum.at(smallest, part, where)
        label[where] = smallest[part]
    return label, tolerance


def _near_along(points: Floats, tolerance: float) -> NDArray[np.bool_]:
    """Return which points have another within a tolerance along one direction: others have none anywhere.

    The direction is one along which hardly any two points of a regular grid are that near.
    """
    found = np.zeros(len(points), dtype=bool)
    if len(points) < 2:
        return found
    direction = np.sqrt([1.0, 2.0, 3.0, 5.0, 7.0])[: points.shape[1]]
    along = points @ (direction / np.linalg.norm(direction))
    order = np.argsort(along)
    near = np.diff(along[order]) <= tolerance + 1e-15 * float(np.abs(along).max())
    found[order[:-1][near]] = found[order[1:][near]] = True
    return found


def named_regions(
    model: Model, names: Sequence[str], cells: NDArray[np.bool_], known: Sequence[Region] | None = None
) -> list[Region]:
    """Return the regions asked for by name: a group, ``array=value``, or a name that `find_regions` gives.

    `known` is what `find_regions` gives for these cells, where it is at hand.

    Raises
    ------
    UsageError
        No such region, or it holds no computed cell.
    """
    default = {r.name: r for r in (find_regions(model, cells) if known is None else known)}
    return [_one_region(model.result, name, cells, default) for name in names]


def _one_region(result: Result, name: str, cells: NDArray[np.bool_], default: dict[str, Region]) -> Region:
    if name in result.groups:
        members = np.asarray(result.groups[name])
        region = Region(name, np.sort(members[cells[members]]), "group")
    elif "=" in name and name.rsplit("=", 1)[0] in result.cell_data:
        region = _tag_region(result, name, cells)
    elif name in default:
        region = default[name]
    else:
        known = [*result.groups, *default, *(f"{t}=VALUE" for t in tag_arrays(result))]
        raise UsageError(
            f"no region is called {name!r}.{close_matches(name, known)} Regions: "
            f"{', '.join(dict.fromkeys(known))}."
        )
    if not len(region.cells):
        raise UsageError(f"region {name!r} holds no cell that is computed.")
    return region


def _tag_region(result: Result, name: str, cells: NDArray[np.bool_]) -> Region:
    array, text = name.rsplit("=", 1)
    values = result.cell_data[array]
    if values.size != result.n_cells or values.dtype.kind not in "iufb":
        raise UsageError(f"region {name!r}: cell array {array!r} is not one number a cell.")
    try:
        value = float(text)
    except ValueError:
        raise UsageError(f"region {name!r}: {text!r} is not a number.") from None
    return Region(name, np.flatnonzero(cells & (values.reshape(-1) == value)), "tag")
