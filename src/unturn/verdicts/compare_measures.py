"""Measures computed on both results, side by side."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError
from unturn.frames import parse_frame
from unturn.kinematics._symmetric import Floats
from unturn.measures import MEASURES, choose_measures
from unturn.options import OWN_MESH
from unturn.pipeline import Computed, StrainOptions, compute
from unturn.verdicts.compare_arrays import SideBySide, columns
from unturn.verdicts.differences import Pair, Where
from unturn.verdicts.directions import is_direction, turned, values_of
from unturn.verdicts.overlay import Overlay
from unturn.verdicts.sampled_measures import measures_at
from unturn.verdicts.wording import short_name

_NOISE = {"cell": 4.0, "point": 8.0}
"""Times the noise floor, which is that of one nodal value: a gradient is a sum over the nodes of a cell, and one that is
recovered at a node a fit over the cells around it."""
_ROUNDING = 1e-15  # of measures, times the square of the gradient where that is above 1


def measure_pairs(overlay: Overlay, strain: StrainOptions) -> SideBySide:
    """Return measures computed on both sides, at the cells (or with ``at="nodes"`` the points) of the reference.

    Raises
    ------
    UsageError
        Unknown measures, or options that do not fit the mesh, or two meshes.
    InputError
        A result without displacement, or none of whose cells can be computed.
    """
    if strain.at in OWN_MESH:
        raise UsageError(
            f"--at {strain.at} makes a mesh of its own: write it of both results with 'unturn strain', and compare those."
        )
    names = choose_measures(strain.measures, strain.base)
    also = [values_of(n) for n in names if is_direction(n)]
    asked = replace(strain, measures=list(dict.fromkeys([*(strain.measures or names), *also])))
    ours, theirs = (compute(view.result, asked, diagnose=True) for view in (overlay.mesh, overlay.base))
    found = SideBySide()
    for computed in (ours, theirs):
        computed.require_some()
        result = computed.fields.model.result
        found.notes += [
            f"{short_name(result.path)}: {n}" for n in computed.fields.notes if n not in result.notes
        ]
    base = _values(theirs)
    placed = _placed(overlay, ours, asked)
    noise, known = placed.noise + base.noise, placed.known | base.known
    for name in (n for n in names if n in base.arrays):
        measure = MEASURES.get(name)
        found.pairs.append(
            Pair(
                name, f"computed {name}", base.where, columns(placed.arrays[name]), columns(base.arrays[name]),
                _left_open(overlay, name, base, noise), base.components.get(name, ()),
                "" if measure is None or measure.unit == "1" else measure.unit,
                outside=placed.outside, known=known,
            )
        )  # fmt: skip
    return found


@dataclass(frozen=True, eq=False)
class _Values:
    """Measures at cells or points, their noise floor, and which places are computed, or not there at all."""

    where: Where
    arrays: Mapping[str, Floats]
    components: Mapping[str, tuple[str, ...]]
    noise: Floats
    known: NDArray[np.bool_]
    outside: NDArray[np.bool_] | None = None


def _values(computed: Computed) -> _Values:
    """Return measures on the mesh they were computed on."""
    d, fields = computed.fields.diagnostics, computed.fields
    assert d is not None
    if computed.nodes is None:
        return _Values("cell", fields.arrays, fields.components, d.noise, d.dimension > 0)
    n = fields.model.result.n_points
    noise, known = np.zeros(n), np.zeros(n, dtype=bool)
    for block in fields.model.blocks:
        nodes = block.connectivity.reshape(-1)
        floor = np.repeat(np.nan_to_num(d.noise[block.index]), block.connectivity.shape[1])
        np.maximum.at(noise, nodes, floor)
        known[nodes] = True
    return _Values("point", computed.nodes.arrays, computed.nodes.components, noise, known)


def _placed(overlay: Overlay, ours: Computed, asked: StrainOptions) -> _Values:
    """Return measures of the result at the places of the reference."""
    own = _values(ours)
    order = overlay.match.cell_of if own.where == "cell" else overlay.match.point_of
    if order is not None:
        arrays = {n: v[order] for n, v in own.arrays.items()}
        return replace(own, arrays=arrays, noise=own.noise[order], known=own.known[order] & (order >= 0))
    if asked.at != "centroid":
        raise UsageError(f"--at {asked.at} belongs to one mesh, and the meshes differ: use --at centroid.")
    frame = None if asked.frame is None else parse_frame(asked.frame, overlay.mesh.result)
    places = overlay.base.centroid
    arrays, noise = measures_at(
        overlay.cells, places, ours.fields, list(own.arrays), frame, asked.equivalent_poisson
    )
    known = np.zeros(len(places), dtype=bool)
    return _Values("cell", arrays, own.components, noise, known, overlay.cells.outside)


def _left_open(overlay: Overlay, name: str, base: _Values, noise: Floats) -> Floats:
    """Return how far a measure is left open: by the noise floors of both sides, and by rounding of its own."""
    b = columns(base.arrays[name])
    if name not in MEASURES:  # of the mesh alone
        blurred: Floats = overlay.base.blur[:, None] * np.abs(np.nan_to_num(b))
        return blurred
    size = np.sqrt(np.nansum(np.square(b), axis=1))
    floor = np.nan_to_num(_NOISE[base.where] * noise + _ROUNDING * np.maximum(1.0, size) ** 2)
    if is_direction(name):
        return turned(base.arrays[values_of(name)], name, floor)
    return np.repeat(floor[:, None], b.shape[1], axis=1)
