"""Of what a rigid motion is taken out: the options in words, regions by name, motions as arrays and over a series."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError
from unturn.kinematics._symmetric import Floats
from unturn.model import Model
from unturn.regions import bodies, find_regions, named_regions
from unturn.rigid import Axis, Removal, RigidMotion, unwrapped


def rigid_parts(
    model: Model, how: str, to: str | None = None, axis: str | None = None
) -> list[tuple[str, NDArray[np.int64], str, NDArray[np.int64]]]:
    """Return name and cells over which each rigid motion is fitted, and name and cells it is taken from.

    Parameters
    ----------
    model
        See `build_model`.
    how
        ``none``, ``whole``, ``bodies``, ``regions`` or the name of a region.
    to
        Take the motion out of this region, or of the ``whole``, instead.
    axis
        The axis that was stated, if any.

    Raises
    ------
    UsageError
        No such region, several where one is needed, or a target or axis without anything to take out.
    """
    if how == "none":
        if to is not None or axis is not None:
            raise UsageError(
                "--rigid-to and --rigid-axis belong to --remove-rigid: name what is to be taken out."
            )
        return []
    computed = computed_cells(model)
    everything = np.flatnonzero(computed)
    if how == "whole":
        regions = [("whole", everything)]
    elif how == "bodies":
        regions = [(r.name, r.cells) for r in bodies(model, computed)] or [("body 1", everything)]
    elif how == "regions":
        regions = [(r.name, r.cells) for r in find_regions(model, computed, most=None)]
    else:
        regions = [(r.name, r.cells) for r in named_regions(model, [how], computed)]
    if to is None:
        return [(name, cells, name, cells) for name, cells in regions]
    if len(regions) != 1:
        raise UsageError(
            "--rigid-to needs one region in --remove-rigid, whose motion is then taken out of the other."
        )
    target = everything if to == "whole" else named_regions(model, [to], computed)[0].cells
    return [(*regions[0], to, target)]


def computed_cells(model: Model) -> NDArray[np.bool_]:
    """Return which cells are computed, `(n_cells,)`."""
    computed = np.zeros(model.result.n_cells, dtype=bool)
    for block in model.blocks:
        computed[block.index] = True
    return computed


def parse_axis(text: str | None) -> Axis | None:
    """Return the axis of ``DX,DY,DZ through X,Y,Z``."""
    if text is None:
        return None
    words = text.split()
    try:
        if len(words) == 1:
            words += ["through", "0,0,0"]
        direction, point = (np.array([float(w) for w in words[k].split(",")]) for k in (0, 2))
    except (ValueError, IndexError):
        direction = point = np.zeros(0)
    sound = all(v.shape == (3,) and np.isfinite(v).all() for v in (direction, point))
    if len(words) != 3 or words[1] != "through" or not sound:
        raise UsageError(f"--rigid-axis {text!r} is not understood. Use '0,0,1' or '0,0,1 through 10,0,0'.")
    return Axis(point, direction)


def continued(removals: tuple[Removal, ...], previous: Sequence[RigidMotion]) -> tuple[Removal, ...]:
    """Return motions whose rotation vectors continue those of the step before by whole turns."""
    if not previous or len(previous) != len(removals):
        return removals
    return tuple(_unwrap(r, p) for r, p in zip(removals, previous))


def _unwrap(removal: Removal, previous: RigidMotion) -> Removal:
    if "linearised" in (removal.motion.fit, previous.fit):
        return removal  # its rotation vector has no whole turns
    rotation = unwrapped(removal.motion.rotation, previous.rotation)
    return replace(removal, motion=replace(removal.motion, rotation=rotation))


def rigid_arrays(removals: Sequence[Removal], prefix: str = "") -> dict[str, Floats]:
    """Return the rigid motions that were taken out as field arrays, `(k, 3)` each, in the order of the parts."""
    if not removals:
        return {}
    motions = [r.motion for r in removals]
    return {
        prefix + "rigid_translation": np.array([m.translation for m in motions]),
        prefix + "rigid_rotation": np.array([m.rotation for m in motions]),
        prefix + "rigid_center": np.array([m.center for m in motions]),
    }
