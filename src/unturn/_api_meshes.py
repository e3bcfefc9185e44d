"""The function a library user calls for one part on three meshes: convergence."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields
from functools import partial
from os import PathLike
from typing import Any

from unturn import io
from unturn.convergence_text import refinement_data, refinement_text
from unturn.errors import UsageError, close_matches
from unturn.mesh_study import study_meshes
from unturn.pipeline import StrainOptions
from unturn.quantity_text import FORMS, parse_quantity
from unturn.refinement import Study
from unturn.result import Result

Name = str | PathLike[str]
_OF_ONE_RESULT = ("borders", "faces", "between_regions", "surface")
"""Options of `unturn.strain` that an envelope or study has no use for."""


def strain_options(options: dict[str, Any]) -> StrainOptions:
    """Return keywords as options.

    Raises
    ------
    UsageError
        An unknown one.
    """
    known = [f.name for f in fields(StrainOptions) if f.name not in _OF_ONE_RESULT]
    for name in options:
        if name not in known:
            raise UsageError(
                f"{name!r} is no option of an envelope or study.{close_matches(name, known)} Options: those named in the "
                f"documentation, and {', '.join(known)}."
            )
    return StrainOptions(**options)


@dataclass(frozen=True, eq=False)
class ConvergenceReport:
    """What `unturn.convergence` returns.

    Attributes
    ----------
    studies
        By the text of the quantity: its values, order, extrapolated value, index, or why there is none.
    data
        What the command writes as JSON, schema ``unturn.convergence/1``.
    text
        What the command prints.
    """

    studies: dict[str, Study]
    data: dict[str, Any]
    text: str


def convergence(
    coarse: Name | Result,
    medium: Name | Result,
    fine: Name | Result,
    *,
    quantity: str | Sequence[str],
    step: int | str = "last",
    **options: Any,
) -> ConvergenceReport:
    """Return order, extrapolated value and grid convergence index of quantities on three meshes of one part.

    Parameters
    ----------
    coarse, medium, fine
        Paths or results, from coarse to fine.
    quantity
        What is followed: ``peak NAME``, ``lowest NAME`` or ``percentile Q NAME``, each with ``in REGION`` or ``within R of
        X,Y,Z`` after it where wanted, or ``value NAME at X,Y,Z``; one text or several. NAME is one number:
        ``equivalent_strain``, ``principal_strain_1``, ``strain_XX``.
    step
        Of files that are series: ``last`` or a zero-based number.
    **options
        The keywords of `unturn.strain` but for ``measures``, ``base``, ``recovery``, ``frame`` and `zero`; ``at`` is
        ``centroid`` or ``mean``.

    Returns
    -------
    ConvergenceReport
        A study for each quantity; strain dimensionless, rotation in radians.

    Raises
    ------
    UsageError
        A quantity that is not understood or does not fit a mesh, or meshes that do not get finer.
    InputError
        A mesh that cannot be used.

    Notes
    -----
    Celik, Ghia, Roache, Freitas, Coleman and Raad 2008, J. Fluids Eng. 130(7), 078001, with the safety factor 1.25; see
    `docs/conventions.md`.

    Examples
    --------
    >>> import numpy as np
    >>> from unturn import CellBlock, Result, convergence
    >>> def bar(n):
    ...     x = np.linspace(0, 1, n + 1)
    ...     points = np.stack([x, 0 * x, 0 * x], axis=1)
    ...     cells = CellBlock("line", np.stack([np.arange(n), np.arange(1, n + 1)], axis=1), np.arange(n))
    ...     return Result(points, (cells,), {"u": 1e-3 * points**2})
    >>> found = convergence(bar(4), bar(8), bar(16), quantity="peak principal_strain_1")
    >>> study = found.studies["peak principal_strain_1"]
    >>> round(study.order, 6), round(study.extrapolated * 1e6, 6)
    (1.0, 2000.0)
    """
    texts = [quantity] if isinstance(quantity, str) else list(quantity)
    if not texts:
        raise UsageError(f"quantity is empty; name one or more: {FORMS}.")
    for name in ("measures", "base", "recovery", "frame"):
        if name in options:
            raise UsageError(f"{name!r} is no option of a refinement study: quantities name their measures.")
    strain = strain_options(options)
    if strain.at not in ("centroid", "mean"):
        raise UsageError(f"a refinement study takes values at 'centroid' or 'mean', not at={strain.at!r}.")
    chosen: Any = step
    meshes = [
        partial(_same, mesh) if isinstance(mesh, Result) else partial(io.read, mesh, chosen)
        for mesh in (coarse, medium, fine)
    ]
    quantities = [parse_quantity(text) for text in texts]
    found = study_meshes(meshes, quantities, strain)
    studies = {q.text: s for q, s in zip(found.quantities, found.studies)}
    return ConvergenceReport(studies, refinement_data(found), refinement_text(found))


def _same(result: Result) -> Result:
    return result
