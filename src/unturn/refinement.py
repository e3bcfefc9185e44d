"""Mesh-refinement study of one quantity on three meshes: order, extrapolated value, grid convergence index."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

from scipy.optimize import brentq

from unturn.errors import UsageError
from unturn.source import Source

Behaviour = Literal["converges", "unchanged", "below precision", "oscillates", "diverges", "stalls"]
DECIDED: tuple[Behaviour, ...] = ("converges", "unchanged", "below precision")
"""Behaviours that leave no question open."""

Three = tuple[float, float, float]
"""One number for each mesh, coarse first."""

SAFETY = 1.25
"""Factor of the index for three meshes."""
SMALL_RATIO = 1.3
"""Ratio of sizes below which the study says little."""
SOURCE = Source(
    "published",
    "Celik, Ghia, Roache, Freitas, Coleman and Raad 2008, Procedure for estimation and reporting of uncertainty due to "
    "discretization in CFD applications, J. Fluids Eng. 130(7), 078001",
)
_NO_REFINEMENT = 1.02  # meshes this near in size are the same
_SAME = 1e-12  # share of a value within which two values are equal
LOWEST, HIGHEST = 0.05, 20.0
"""Orders outside which a sequence has no limit to speak of, or is no power of the size."""


@dataclass(frozen=True)
class Study:
    """What three meshes say of one quantity.

    Attributes
    ----------
    values
        On the coarse, medium and fine mesh.
    behaviour
        ``converges``; ``unchanged``: the same on all three; ``below precision``: zero as far as the stored numbers tell;
        otherwise there is no order, and `reason` says why.
    reason
        A sentence; empty when it converges.
    order
        Observed order p; NaN when there is none.
    extrapolated
        Value towards which the sequence tends; NaN when unknown.
    error
        Bound on the distance of the fine value, the index times the value: `1.25 |v1 - v2| / (r21^p - 1)`.
    index
        Grid convergence index of the fine mesh, a share of its value; infinite where that is zero.
    index_medium
        The same of the medium mesh, from the medium and the coarse.
    """

    values: Three
    behaviour: Behaviour
    reason: str = ""
    order: float = math.nan
    extrapolated: float = math.nan
    error: float = math.nan
    index: float = math.nan
    index_medium: float = math.nan


def check_refinement(sizes: Three) -> tuple[float, float]:
    """Return the ratios of sizes, coarse to medium and medium to fine.

    Raises
    ------
    UsageError
        The meshes do not get finer.
    """
    coarse, medium, fine = sizes
    ratios = coarse / medium, medium / fine
    for (a, b), r in zip((("coarse", "medium"), ("medium", "fine")), ratios):
        if not r > _NO_REFINEMENT:
            raise UsageError(
                f"the {b} mesh is not finer than the {a} one: representative sizes are {coarse:.4g}, {medium:.4g} and "
                f"{fine:.4g}. Give three meshes of one part in the order coarse, medium, fine."
            )
    return ratios


def study(values: Three, sizes: Three, floors: Three = (0.0, 0.0, 0.0)) -> Study:
    """Return order, extrapolated value and grid convergence index of a quantity.

    Parameters
    ----------
    values
        On the coarse, medium and fine mesh, in any unit.
    sizes
        Representative sizes `(volume / cells)^(1/dim)` of the meshes, in any unit of length.
    floors
        How far the stored precision can move each value; changes no larger than that of either mesh say nothing.

    Raises
    ------
    UsageError
        The meshes do not get finer, or a value is not finite.

    Notes
    -----
    With fine 1, medium 2, coarse 3, `e21 = v2 - v1`, `e32 = v3 - v2`, `s = sign(e32 / e21) = 1`: the order solves
    `p = (ln|e32/e21| + ln((r21^p - s)/(r32^p - s))) / ln r21`; extrapolated `(r21^p v1 - v2)/(r21^p - 1)`; index
    `1.25 |(v1 - v2)/v1| / (r21^p - 1)` (Celik et al. 2008, J. Fluids Eng. 130(7), steps 3 to 5). The right side is the
    condition that `v = v0 + C h^p` on all three meshes. It has a positive root only when `e32/e21 > ln r32 / ln r21`;
    otherwise, and below an order of 0.05, the sequence diverges. When s is negative it oscillates: three values do not
    tell an order then.

    Examples
    --------
    >>> found = study((5.863, 5.972, 6.063), (2.0, 1.5, 1.0))
    >>> round(found.order, 2), round(found.extrapolated, 2), round(100 * found.index, 1)
    (1.53, 6.17, 2.2)
    """
    r32, r21 = check_refinement(sizes)
    v3, v2, v1 = values
    if not all(math.isfinite(v) for v in values):
        raise UsageError(f"the values {v3:g}, {v2:g} and {v1:g} are not all finite: there is no sequence.")
    e32, e21 = v3 - v2, v2 - v1
    still = _still(values, floors)
    if still is not None:
        return still
    if e32 / e21 < 0:
        reason = (
            "it oscillates: up, then down, or the other way round. The meshes are too coarse for an order, or not "
            "alike: refine all of them in the same way"
        )
        return Study(values, "oscillates", reason)
    p = observed_order(e32 / e21, r21, r32)
    if p <= LOWEST:
        reason = (
            "it diverges: the change does not shrink with the size. A peak that grows so "
            "often sits at a sharp corner, a point load or a point support: take a value away from it"
        )
        return Study(values, "diverges", reason)
    if p >= HIGHEST:
        reason = f"it changes {e32 / e21:.3g} times less at the second refinement: faster than any order. Refine again"
        return Study(values, "stalls", reason)
    gain21, gain32 = math.expm1(p * math.log(r21)), math.expm1(p * math.log(r32))
    error, error_medium = SAFETY * abs(e21) / gain21, SAFETY * abs(e32) / gain32
    return Study(
        values, "converges", "", p, v1 - e21 / gain21, error, _share(error, v1), _share(error_medium, v2)
    )  # fmt: skip


def _still(values: Three, floors: Three) -> Study | None:
    """Return what there is to say of values that hardly change, or None when they do."""
    v3, v2, v1 = values
    e32, e21 = v3 - v2, v2 - v1
    blur = max(floors)
    if all(abs(v) <= f for v, f in zip(values, floors)) and blur:
        return Study(values, "below precision", "below the stored precision: zero as far as the numbers tell",
                     error=blur, index=_share(blur, v1), index_medium=_share(blur, v2))  # fmt: skip
    rounding = _SAME * max(abs(v) for v in values)
    still21, still32 = abs(e21) <= max(rounding, *floors[1:]), abs(e32) <= max(rounding, *floors[:2])
    if still21 and still32:
        to = " to the stored precision" if max(abs(e21), abs(e32)) > rounding else ""
        reason = f"it is the same on all three meshes{to}"
        error = blur if to else 0.0
        return Study(values, "unchanged", reason, math.nan, v1, error, _share(error, v1), _share(error, v2))
    if still21 or still32:
        which = "medium and fine" if still21 else "coarse and medium"
        to = " to the stored precision" if min(abs(e21), abs(e32)) > rounding else ""
        reason = f"it is the same on the {which} mesh{to} and another on the third: no order follows. " + (
            "Write the results with more digits" if to else "Refine again"
        )
        return Study(values, "stalls", reason)
    return None


def _share(error: float, value: float) -> float:
    if not error:
        return 0.0
    return error / abs(value) if value else math.inf


def observed_order(ratio: float, r21: float, r32: float) -> float:
    """Return the order p that solves Celik's equation for a ratio of changes `e32/e21`, cut to `LOWEST` and `HIGHEST`.

    Examples
    --------
    >>> round(observed_order(4.0, 2.0, 2.0), 12)
    2.0
    """

    def residual(p: float) -> float:
        q = math.log((r21**p - 1.0) / (r32**p - 1.0))
        return p * math.log(r21) - (math.log(ratio) + q)

    if residual(LOWEST) >= 0:
        return LOWEST
    if residual(HIGHEST) <= 0:
        return HIGHEST
    return float(brentq(residual, LOWEST, HIGHEST, xtol=1e-13))
