"""What helps where the small strain does not hold: tried on this very result, with the number that is left over."""

from __future__ import annotations

import math
import shlex
from dataclasses import dataclass
from typing import Any

import numpy as np

from unturn.fields import CellFields, compute_fields
from unturn.model import Model
from unturn.regions import Region
from unturn.rigid import take_out
from unturn.verdict import Level, Solve, judge


@dataclass(frozen=True)
class Trial:
    """Something that was tried on a region.

    Attributes
    ----------
    what
        In words.
    option
        What to say on the command line.
    left
        Largest error over size that is left.
    peak
        Largest equivalent strain then; NaN where it is not what was tried.
    level
        The verdict then.
    """

    what: str
    option: str
    left: float
    peak: float
    level: Level

    @property
    def helps(self) -> bool:
        """Whether less than 10 % error is left."""
        return self.level in ("holds", "marginal", "no strain")


def try_remedies(fields: CellFields, region: Region, solve: Solve, settings: dict[str, Any]) -> list[Trial]:
    """Return what is left of the error by the region's rigid motion taken out, and by a finite base if that is not enough.

    Parameters
    ----------
    fields
        The fields that were judged; their model has no rigid motion taken out yet.
    region
        The region, with the cells that count.
    solve
        What is known of it; what is tried is for a nonlinear one, and where that is not known the option says so.
    settings
        Location and threads, as the fields were computed.
    """
    model = fields.model.only(region.cells)
    trials = [_without_rigid_motion(model, region, solve, settings)]
    if not trials[0].helps and (model.plane is None or model.plane.model is not None):
        trials.append(_finite_base(model, region, settings))
    return trials


def _without_rigid_motion(model: Model, region: Region, solve: Solve, settings: dict[str, Any]) -> Trial:
    still, _ = take_out(model, [(region.name, region.cells) * 2], "nonlinear")
    again = compute_fields(still, ["small_strain_error"], **settings, diagnose=True)
    assert again.diagnostics is not None
    found = judge(again.diagnostics, region, "nonlinear")
    name = {"whole": "whole", "body": "bodies"}.get(region.origin, region.name)
    option = f"--remove-rigid {shlex.quote(name)}"
    if solve == "unknown":
        option = f"--solve nonlinear {option}"
    return Trial(f"rigid motion of {region.name} taken out", option, found.worst, math.nan, found.level)


def _finite_base(model: Model, region: Region, settings: dict[str, Any]) -> Trial:
    """Return what a finite base leaves: the change of its equivalent when the whole is turned by a right angle."""
    names = ["equivalent_strain_hencky"]
    before = compute_fields(model, names, **settings).arrays[names[0]]
    turned = compute_fields(model.turned(), names, **settings).arrays[names[0]]
    peak = float(np.nanmax(before, initial=0.0))
    left = float(np.nanmax(np.abs(turned - before), initial=0.0)) / peak if peak > 0 else 0.0
    return Trial(
        f"Hencky strain of {region.name}",
        "--base hencky",
        left,
        peak,
        "holds" if left < 0.01 else "does not hold",
    )
