"""The functions a library user calls: read, strain, write."""

from __future__ import annotations

from collections.abc import Sequence
from os import PathLike
from typing import Literal

from unturn import io
from unturn.errors import UsageError
from unturn.fields import CellFields, Location, compute_fields
from unturn.gradient import PlaneModel
from unturn.measures import MEASURES
from unturn.model import PlaneOptions, build_model
from unturn.result import Result


def read(path: str | PathLike[str], step: Literal["last"] | int = "last") -> Result:
    """Return one step of a result file.

    Parameters
    ----------
    path
        Any format of `docs/formats.md`.
    step
        ``last`` or a zero-based number.

    Raises
    ------
    InputError
        The file cannot be read right; the message says what is wrong, where, and what to do.
    UsageError
        There is no such step.
    """
    return io.read(path, step)


def write(result: Result, path: str | PathLike[str]) -> tuple[str, ...]:
    """Write a result whole or not at all; return sentences on what the format could not hold.

    Parameters
    ----------
    result
        What to write.
    path
        The suffix decides the format.

    Raises
    ------
    UsageError
        The format is not written here, or the place cannot be written to.
    """
    return io.write(result, path)


def strain(
    result: Result,
    *,
    displacement: str | None = None,
    measures: Sequence[str] | None = None,
    at: Location = "centroid",
    plane: PlaneModel | None = None,
    poisson: float | None = None,
    axis: Literal["x", "y"] = "y",
    coordinates: Literal["reference", "deformed"] = "reference",
    displacement_scale: float = 1.0,
    equivalent_poisson: float | None = None,
    skin: bool = False,
    alive: str | None = None,
    prefix: str = "",
    overwrite: bool = False,
    threads: int | None = None,
) -> Result:
    """Return the result with strain, rotation and what follows from them added as cell arrays.

    Parameters
    ----------
    result
        As read, or made in memory.
    displacement
        Point array to use, three scalar arrays as ``ux,uy,uz``; None: the one clear candidate.
    measures
        Array names, or ``["all"]``; None: strain, rotation, equivalent_strain, principal_strain.
    at
        ``centroid``, or ``mean``: the volume mean of the gradient, from which the rest is derived.
    plane
        What a plane mesh assumes of its third direction: ``strain``, ``stress`` (with `poisson`), ``axisymmetric``.
    poisson
        Poisson's ratio for plane stress.
    axis
        Axis of revolution for ``axisymmetric``.
    coordinates
        ``deformed`` when the points are already moved: the reference is then point minus displacement.
    displacement_scale
        Factor from the displacement's unit to that of the points.
    equivalent_poisson
        None: `sqrt(2/3 e':e')`. A number: `1/(1+number)` times the norm of the principal differences.
    skin
        Also compute cells whose nodes all belong to one cell of higher dimension.
    alive
        Cell array; cells where it is zero are left out.
    prefix
        Goes before each array name.
    overwrite
        Replace arrays of the same name; otherwise that is an error.
    threads
        None: all processors.

    Returns
    -------
    Result
        The same mesh and arrays, and the new ones: float64, `(n_cells,)` or `(n_cells, components)`, symmetric tensors in
        the order XX, YY, ZZ, XY, YZ, XZ with tensor shear, NaN where a cell cannot be computed; strain dimensionless,
        rotation in radians.

    Raises
    ------
    DisplacementError
        No displacement or several candidates.
    UsageError
        Unknown names, options that do not fit the mesh, or an array of that name is already there.
    InputError
        No computable element, or a node order that cannot be right.

    Notes
    -----
    The formulas and their sources are in `docs/conventions.md`.

    Examples
    --------
    >>> import numpy as np
    >>> from unturn import CellBlock, Result, strain
    >>> points = np.array([[0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1.0]])
    >>> block = CellBlock("tetra", np.array([[0, 1, 2, 3]]), np.array([0]))
    >>> pulled = Result(points, (block,), {"u": points * [1e-3, -0.3e-3, -0.3e-3]})
    >>> round(strain(pulled).cell_data["equivalent_strain"][0] * 1e6)
    867
    """
    model = build_model(
        result,
        displacement=displacement,
        displacement_scale=displacement_scale,
        coordinates=coordinates,
        plane=PlaneOptions(plane, poisson, axis),
        skin=skin,
        alive=alive,
    )
    fields = compute_fields(model, measures, at=at, equivalent_poisson=equivalent_poisson, threads=threads)
    return add_fields(result, fields, prefix=prefix, overwrite=overwrite)


def add_fields(result: Result, fields: CellFields, *, prefix: str = "", overwrite: bool = False) -> Result:
    """Return the result with computed fields as cell arrays.

    Raises
    ------
    UsageError
        An array of that name is already there and `overwrite` is not set.
    """
    arrays = {prefix + name: values for name, values in fields.arrays.items()}
    taken = [name for name in arrays if name in result.cell_data]
    if taken and not overwrite:
        where = f"{result.path}: " if result.path else ""
        raise UsageError(
            f"{where}the file already has a cell array called {taken[0]!r}; it is not overwritten unasked. Give the new "
            "arrays other names with --prefix TEXT, or replace the old ones with --overwrite."
        )
    names: dict[tuple[Literal["cell"], str], Sequence[str]] = {
        ("cell", prefix + name): MEASURES[name].components
        for name in fields.arrays
        if name in MEASURES and MEASURES[name].components
    }
    return result.with_arrays(cell_data=arrays, component_names=names)  # type: ignore[arg-type]
