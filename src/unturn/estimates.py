"""Estimates as arrays: how far recovered strain departs from that of the elements, and how elements differ."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from unturn.errors import UsageError
from unturn.kinematics._symmetric import Floats
from unturn.measures import base_of
from unturn.model import Model
from unturn.recovery import Recovered
from unturn.trust import StrainError, strain_error, strain_jump


@dataclass(frozen=True, eq=False)
class Estimates:
    """Arrays of `unturn.measures.ESTIMATES`.

    Attributes
    ----------
    cells
        Name -> `(n_cells,)`; NaN where not computed.
    points
        Name -> `(n_points,)`, of those that nodes have too.
    shares
        Name -> `(n_shares,)`, the same of each side of a border that a node lies on.
    errors
        Name of the strain error -> the whole of it, for each base of the arrays; gives the global error of a region.
    """

    cells: dict[str, Floats]
    points: dict[str, Floats]
    shares: dict[str, Floats]
    errors: dict[str, StrainError]


def check_estimates(names: Sequence[str], model: Model) -> None:
    """Refuse estimates of finite strain that a mesh cannot give.

    Raises
    ------
    UsageError
        A plane mesh whose third direction is not stated.
    """
    finite = [n for n in names if base_of(n)]
    if finite and model.plane is not None and model.plane.model is None:
        raise UsageError(
            f"the mesh is plane, and {finite[0]} depends on the strain across the plane, which the displacement does not "
            "hold: state it with --plane strain, --plane stress --poisson NU or --plane axisymmetric."
        )


def estimate(
    names: Sequence[str], recovered: Callable[[str], Recovered], threads: int | None = None
) -> Estimates:
    """Return estimates by name.

    Parameters
    ----------
    names
        Names in `unturn.measures.ESTIMATES`.
    recovered
        Gives the recovered gradient that the strain of a base follows from.
    threads
        None: all processors.

    Notes
    -----
    Definitions: `unturn.trust`.
    """
    cells: dict[str, Floats] = {}
    points: dict[str, Floats] = {}
    shares: dict[str, Floats] = {}
    errors: dict[str, StrainError] = {}
    for name in names:
        base = base_of(name)
        whole = f"strain_error_{base}" if base else "strain_error"
        if whole not in errors:
            errors[whole] = strain_error(recovered(base), threads, base)
        if name == whole:
            cells[name] = errors[whole].strain_error
        else:
            cells[name], points[name], shares[name] = strain_jump(recovered(base), threads, base)
    return Estimates(cells, points, shares, errors)
