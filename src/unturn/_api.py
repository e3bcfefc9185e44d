"""The functions a library user calls: read, strain, write."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from os import PathLike
from typing import Literal

from unturn import io
from unturn.borders import split_mesh
from unturn.errors import UsageError
from unturn.gradient import PlaneModel
from unturn.kinematics._symmetric import Floats
from unturn.options import Borders, FacesTo, Place, StrainOptions
from unturn.pipeline import Computed
from unturn.recovery import Method
from unturn.result import Array, Association, Result
from unturn.rigid_parts import rigid_arrays
from unturn.stepwise import Stepwise
from unturn.verdict import Solve

_LONGEST_PREFIX = 100


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
    base: str = "small",
    at: Place = "centroid",
    recovery: Method = "patch",
    solve: Solve = "unknown",
    plane: PlaneModel | None = None,
    poisson: float | None = None,
    axis: Literal["x", "y"] = "y",
    coordinates: Literal["reference", "deformed"] = "reference",
    displacement_scale: float = 1.0,
    equivalent_poisson: float | None = None,
    remove_rigid: str = "none",
    rigid_to: str | None = None,
    rigid_axis: str | None = None,
    frame: str | None = None,
    thermal_expansion: str | float | None = None,
    temperature: str | None = None,
    reference_temperature: float | None = None,
    zero: Result | None = None,
    previous: Result | Iterable[Result] = (),
    borders: Borders = "dominant",
    faces: FacesTo = "mesh",
    between_regions: bool = False,
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
    base
        ``small``, or ``green-lagrange``, ``hencky``, ``biot``, ``almansi``: each small measure is then replaced by its
        counterpart of that base, whose name carries it.
    at
        ``centroid``; ``mean``: the volume mean of the gradient, from which the rest is derived; ``nodes``: the gradient is
        recovered at nodes, the arrays are point arrays; ``surface``: the free faces of solids, returned as a surface mesh of
        their own; ``quadrature``: every quadrature point, returned as a cloud of points.
    recovery
        How the gradient gets to nodes: ``patch`` (least squares over the cells around, Zienkiewicz and Zhu 1992),
        ``extrapolate`` or ``average``. Never across regions.
    solve
        ``linear``, ``nonlinear`` or ``unknown``: decides how rigid motion is fitted; finite measures of a linear solve
        are refused.
    plane
        What a plane mesh assumes of its third direction: ``strain``, ``stress`` (with `poisson`), ``axisymmetric``.
    poisson
        Poisson's ratio for plane stress, and for the thickness stretch that finite measures of surfaces in space have.
    axis
        Axis of revolution for ``axisymmetric``.
    coordinates
        ``deformed`` when the points are already moved: the reference is then point minus displacement.
    displacement_scale
        Factor from the displacement's unit to that of the points.
    equivalent_poisson
        None: `sqrt(2/3 e':e')`. A number: `1/(1+number)` times the norm of the principal differences.
    remove_rigid
        ``none``, ``whole``, ``bodies``, ``regions``, or the name of a region: take its rigid motion out first. Strain is
        then in the axes of the undeformed part.
    rigid_to
        Take the motion of the region out of this one instead, or of the ``whole``.
    rigid_axis
        A known axis instead of the full fit: ``0,0,1 through 10,0,0``.
    frame
        Axes of the components: ``cylindrical z``, ``cylindrical 0,0,1 through 10,0,0``, ``cartesian 1,1,0 0,0,1``,
        ``surface``, ``arrays FIRST SECOND``.
    thermal_expansion, temperature, reference_temperature
        Free thermal strain to take out: a coefficient (number, three along the axes of the frame, or by region
        ``part=1:12e-6;part=2:23e-6``), a point or cell array, a number. Gives `mechanical_strain` and what derives from it.
    zero
        A step of the same series from which displacements are measured: `u - u_N` for small, `F F_N^-1` for finite
        measures.
    previous
        The steps before this one, in their order; a generator is read one by one. Needed by measures of what changes between
        steps (``strain_increment``, ``deformation_rate``, ``accumulated_equivalent_strain`` ...): increments and rates take
        the last of them, accumulated strain all. Without any at the first step of a series: the undeformed state. Rotation
        vectors of rigid motions that are taken out continue those of the last one by whole turns.
    borders
        With ``at="nodes"``: ``dominant``: a point on the border of regions shows the value of the one with most volume
        there; ``split``: such points are duplicated, so that every region shows its own value. The mesh then has more points;
        the point array ``original_point`` holds the position of each in the file.
    faces
        With ``at="surface"``: ``mesh``: the free faces as a surface mesh of their own; ``cells``: their values as cell
        arrays of the mesh itself, of each cell's face with the largest principal strain by magnitude.
    between_regions
        With ``at="surface"``: also the faces between cells of different regions, once for each side.
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
    options = StrainOptions(
        displacement, measures, base, at, recovery, solve, plane, poisson, axis, coordinates, displacement_scale,
        equivalent_poisson, remove_rigid, rigid_to, rigid_axis, frame, thermal_expansion, temperature,
        reference_temperature, skin, alive, threads, borders, faces, between_regions,
    )  # fmt: skip
    stepwise = Stepwise(options, zero)
    if stepwise.series or remove_rigid != "none":
        _go_through(stepwise, (previous,) if isinstance(previous, Result) else previous, result)
    computed = stepwise.compute(result)
    computed.require_some()
    return add_fields(result, computed, prefix=prefix, overwrite=overwrite)


def _go_through(stepwise: Stepwise, previous: Iterable[Result], result: Result) -> None:
    """Take note of the steps before a result, and refuse measures of what changed when they are not there."""
    number = None if result.steps is None else result.steps.current
    count = 0
    for step in previous:
        stepwise.pass_over(step)
        count += 1
    if not stepwise.series:
        return
    name = stepwise.series[0]
    if not count and number != 0:
        raise UsageError(
            f"{name} is what changes from one step of a series to the next: give the steps before this one with previous=."
        )
    total = stepwise.total
    if total and number is not None and count != number:
        raise UsageError(
            f"{total} is a sum over all steps: step {number} has {number} before it, and previous= gives {count}. Give "
            "all of them in their order."
        )


def add_fields(result: Result, computed: Computed, *, prefix: str = "", overwrite: bool = False) -> Result:
    """Return the result with computed fields as cell or point arrays, or their own mesh; rigid motions as field arrays.

    Raises
    ------
    UsageError
        An array of that name is already there and `overwrite` is not set, or a prefix that formats cannot hold.
    """
    _check_prefix(prefix)
    own = computed.own_mesh
    if own is not None:
        if prefix:
            raise UsageError(
                "--at surface and --at quadrature make a mesh of their own, whose arrays have fixed names: leave "
                "--prefix out."
            )
        return own.with_arrays(field_data=_motions(own, computed, prefix, overwrite))
    on_points, on_cells, components = computed.arrays()
    points = {prefix + name: values for name, values in on_points.items()}
    cells = {prefix + name: values for name, values in on_cells.items()}
    for where, arrays, present in (("point", points, result.point_data), ("cell", cells, result.cell_data)):
        _refuse_taken(result, where, [name for name in arrays if name in present and not overwrite])
    if computed.nodes is not None and computed.nodes.layout.cells is not None:
        layout = computed.nodes.layout
        mesh = split_mesh(result, layout, computed.fields.model)
        result = io.with_points(result, mesh, layout.point)
    names = {(where, prefix + name): labels for (where, name), labels in components.items()}
    motions = _motions(result, computed, prefix, overwrite)
    return result.with_arrays(point_data=points, cell_data=cells, field_data=motions, component_names=names)


def add_arrays(
    result: Result,
    where: Association,
    arrays: Mapping[str, Array],
    components: Mapping[str, tuple[str, ...]],
    *,
    prefix: str = "",
    overwrite: bool = False,
) -> Result:
    """Return the result with these cell or point arrays.

    Raises
    ------
    UsageError
        An array of that name is already there and `overwrite` is not set, or a prefix that formats cannot hold.
    """
    _check_prefix(prefix)
    present = result.cell_data if where == "cell" else result.point_data
    named = {prefix + name: values for name, values in arrays.items()}
    _refuse_taken(result, where, [name for name in named if name in present and not overwrite])
    names: dict[tuple[Association, str], tuple[str, ...]] = {
        (where, prefix + name): labels for name, labels in components.items()
    }
    if where == "point":
        return result.with_arrays(point_data=named, component_names=names)
    return result.with_arrays(cell_data=named, component_names=names)


def _check_prefix(prefix: str) -> None:
    if prefix != prefix.strip() or not prefix.isprintable() or len(prefix) > _LONGEST_PREFIX:
        raise UsageError(
            f"--prefix {prefix[:40]!r}: not every format keeps blanks at the ends of a name, characters that cannot be "
            f"printed, or more than {_LONGEST_PREFIX} of them; choose another one."
        )


def _refuse_taken(result: Result, where: str, taken: Sequence[str]) -> None:
    if taken:
        raise UsageError(
            f"{result.path + ': ' if result.path else ''}the file already has a {where} array called {taken[0]!r}; it is "
            "not overwritten unasked. Give the new "
            "arrays other names with --prefix TEXT, or replace the old ones with --overwrite."
        )


def _motions(result: Result, computed: Computed, prefix: str, overwrite: bool) -> dict[str, Floats]:
    """Return the rigid motions that were taken out as field arrays."""
    motions = rigid_arrays(computed.removals, prefix)
    kept = [name for name in motions if name in result.field_data]
    if kept and not overwrite:
        raise UsageError(
            f"{result.path + ': ' if result.path else ''}the file already has a field array called {kept[0]!r}; it is not "
            "overwritten unasked. Use --prefix TEXT or --overwrite."
        )
    return motions
