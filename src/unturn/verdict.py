"""May the small strain be trusted here? The verdict, region by region."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np

from unturn.fields import CellDiagnostics
from unturn.regions import Region
from unturn.statistics import weighted_percentiles

Solve = Literal["linear", "nonlinear", "unknown"]
Level = Literal["holds", "marginal", "does not hold", "no strain", "not judged"]

MARGINAL, BROKEN = 0.01, 0.10
"""Error over size above which the small strain is marginal, and above which it does not hold."""


@dataclass(frozen=True)
class Verdict:
    """Whether the small strain holds in a region.

    Attributes
    ----------
    region
        Its name.
    level
        ``holds``: no volume above 1 %; ``marginal``: 1 to 10 % somewhere; ``does not hold``: above; ``no strain``.
    size
        The strain that matters: the larger of the 99th percentile of `norm(U - I)` and the noise floor.
    noise
        99th percentile of the noise floor.
    worst
        Largest error over size.
    worst_cell
        Where, file position; -1 when nothing was computed.
    share_marginal, share_broken
        Share of the region's volume above 1 % and above 10 %.
    largest_rotation
        Degrees.
    action
        What to do, a sentence; empty when nothing is.
    """

    region: str
    level: Level
    size: float
    noise: float
    worst: float
    worst_cell: int
    share_marginal: float
    share_broken: float
    largest_rotation: float
    action: str


def judge(diagnostics: CellDiagnostics, region: Region, solve: Solve, mode: bool = False) -> Verdict:
    """Return the verdict on one region.

    Parameters
    ----------
    diagnostics
        Of every cell.
    region
        Which cells.
    solve
        What is known of the solve.
    mode
        A mode shape: its amplitude is arbitrary, so nothing is judged.
    """
    d, cells = diagnostics, region.cells
    usable = cells[np.isfinite(d.volume[cells]) & np.isfinite(d.stretch[cells])]
    if not len(usable):
        return Verdict(region.name, "not judged", math.nan, math.nan, math.nan, -1, 0.0, 0.0, math.nan, "")
    weight, error = d.volume[usable], d.error[usable]
    noise = weighted_percentiles(d.noise[usable], weight, [99.0])[0]
    stretch = weighted_percentiles(d.stretch[usable], weight, [99.0])[0]
    size = max(stretch, noise)
    turned = d.angle[usable]
    rotation = math.degrees(float(turned.max(initial=0.0, where=np.isfinite(turned))))
    if mode:
        return Verdict(region.name, "not judged", size, noise, math.nan, -1, 0.0, 0.0, rotation, "")
    worst_at = int(np.nanargmax(error))
    if not size > 0:
        return Verdict(
            region.name, "no strain", size, noise, 0.0, int(usable[worst_at]), 0.0, 0.0, rotation, ""
        )
    ratio = error / size
    total = float(weight.sum())
    marginal, broken = (
        float(weight[ratio > bound].sum() / total) if total else 0.0 for bound in (MARGINAL, BROKEN)
    )
    worst = float(ratio[worst_at])
    level: Level = "does not hold" if worst > BROKEN else "marginal" if worst > MARGINAL else "holds"
    if level == "holds" and stretch <= noise:
        level = "no strain"
    action = "" if level in ("holds", "no strain") else _action(solve, level)
    return Verdict(
        region.name, level, size, noise, worst, int(usable[worst_at]), marginal, broken, rotation, action
    )


_SOLVE_AGAIN = "solve it again as geometrically nonlinear"
_ACTIONS: dict[tuple[Solve, Level], str] = {
    (
        "linear",
        "marginal",
    ): "the strain is that of the linear solve, good to the error stated; where that matters, "
    + _SOLVE_AGAIN,
    (
        "linear",
        "does not hold",
    ): "the solve was linear and its rotations are beyond what linear theory covers: "
    + _SOLVE_AGAIN
    + "; no measure of this result mends it",
    (
        "nonlinear",
        "marginal",
    ): "the small strain is good to the error stated; where that matters, use the solver's own strain",
    (
        "nonlinear",
        "does not hold",
    ): "the small strain contains turning; it is not the strain of the material here",
    (
        "unknown",
        "marginal",
    ): "the small strain is good to the error stated; --solve linear or nonlinear tells what to do "
    "where that matters",
    ("unknown", "does not hold"): "if the solve was linear, "
    + _SOLVE_AGAIN
    + "; if it was nonlinear, the small strain is "
    "not the strain of the material here (state it with --solve)",
}


def _action(solve: Solve, level: Level) -> str:
    return _ACTIONS[solve, level]
