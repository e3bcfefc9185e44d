"""From a result and the user's options to computed fields: what the library and the command line share."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import asdict, dataclass, field, replace
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from unturn.displacement import find_displacement
from unturn.errors import InputError, UsageError
from unturn.fields import CellDiagnostics, CellFields, compute_fields
from unturn.frames import Frame, parse_frame
from unturn.gradient import NodalFields, PlaneModel
from unturn.kinematics._symmetric import Floats
from unturn.measures import GEOMETRY, MEASURES, SMALL, choose_measures
from unturn.model import Model, PlaneOptions, build_model
from unturn.nodal import NodeFields, nodal_fields
from unturn.quadrature_points import quadrature_result
from unturn.recovery import METHODS, Method
from unturn.regions import bodies, find_regions, named_regions
from unturn.result import Result
from unturn.rigid import Axis, Removal, RigidMotion, take_out, unwrapped
from unturn.surface import SurfaceFields, free_faces, surface_result
from unturn.thermal import Thermal, parse_thermal
from unturn.verdict import Solve

Place = Literal["centroid", "mean", "nodes", "surface", "quadrature"]
OWN_MESH: tuple[Place, ...] = ("surface", "quadrature")
"""Places whose values do not fit on the mesh of the file."""
PLACES: tuple[Place, ...] = ("centroid", "mean", "nodes", "surface", "quadrature")


@dataclass(frozen=True)
class StrainOptions:
    """The options of `unturn.strain`, by the same names."""

    displacement: str | None = None
    measures: Sequence[str] | None = None
    base: str = "small"
    at: Place = "centroid"
    recovery: Method = "patch"
    solve: Solve = "unknown"
    plane: PlaneModel | None = None
    poisson: float | None = None
    axis: Literal["x", "y"] = "y"
    coordinates: Literal["reference", "deformed"] = "reference"
    displacement_scale: float = 1.0
    equivalent_poisson: float | None = None
    remove_rigid: str = "none"
    rigid_to: str | None = None
    rigid_axis: str | None = None
    frame: str | None = None
    thermal_expansion: str | float | None = None
    temperature: str | None = None
    reference_temperature: float | None = None
    skin: bool = False
    alive: str | None = None
    threads: int | None = None
    surface: bool = False


@dataclass(frozen=True, eq=False)
class Computed:
    """Computed fields, and the rigid motions that were taken out first.

    `fields` are those of cells: at centroids where the values asked for live elsewhere. `nodes`, `surface` and `cloud` hold
    those. `finite_model` is that of finite measures where it is another one than that of `fields`: with a zero step.
    """

    fields: CellFields
    removals: tuple[Removal, ...] = ()
    request: dict[str, Any] = field(default_factory=dict)
    nodes: NodeFields | None = None
    surface: SurfaceFields | None = None
    cloud: Result | None = None
    equivalent_poisson: float | None = None
    finite_model: Model | None = None

    def require_some(self) -> None:
        """Refuse a result of which no cell could be computed.

        Raises
        ------
        InputError
            Every cell was left out.
        """
        n = self.fields.model.result.n_cells
        out = self.fields.left_out
        if sum(len(cells) for cells in out.values()) >= n:
            where = self.fields.model.result.path
            reasons = ", ".join(f"{len(cells)} {reason}" for reason, cells in out.items())
            raise InputError(
                f"{where + ': ' if where else ''}no cell could be computed: {reasons}. Look at the displacement and the mesh "
                "with 'unturn survey'."
            )


def settled(options: StrainOptions, last: Result) -> StrainOptions:
    """Return the options for a whole series: a flat mesh that moves across its plane in the end is a surface throughout.

    Parameters
    ----------
    options
        As asked for.
    last
        The last step.
    """
    if options.plane is not None or model_of(last, options).plane is not None:
        return options
    return replace(options, surface=True)


def compute(
    result: Result,
    options: StrainOptions,
    *,
    zero: Result | None = None,
    diagnose: bool = False,
    previous: Sequence[RigidMotion] = (),
) -> Computed:
    """Return the fields of a result.

    Parameters
    ----------
    result
        The result.
    options
        What is asked for.
    zero
        The step of the same series from which displacements are measured; None for the undeformed state.
    diagnose
        Also compute what verdict and summary need.
    previous
        Motions of the step before, to unwrap rotation vectors over a series.

    Raises
    ------
    UsageError
        Options that do not fit each other or the mesh.
    InputError
        A result that cannot be used.
    """
    _check_choices(options)
    names = _checked_measures(options)
    _check_numbers(options)
    model = model_of(result, options)
    frame = None if options.frame is None else parse_frame(options.frame, result)
    settings: dict[str, Any] = {
        "at": options.at if options.at == "mean" else "centroid",
        "equivalent_poisson": options.equivalent_poisson,
        "frame": frame,
        "thermal": _thermal(result, zero, options, frame),
        "threads": options.threads,
    }
    small, finite = _zeroed(model, zero, options)
    parts = _parts(small, options)
    removals: tuple[Removal, ...] = ()
    if parts:
        wanted = any(n in MEASURES and MEASURES[n].finite for n in names)
        small, removals = take_out(small, parts, options.solve, _axis(options.rigid_axis), wanted)
    if finite is not None and parts:
        finite, of_finite = take_out(finite, parts, "nonlinear", _axis(options.rigid_axis))
        if not any(n in SMALL for n in names):
            removals = of_finite
    if previous and len(previous) == len(removals):
        removals = tuple(_unwrap(r, p) for r, p in zip(removals, previous))
    computed = Computed(
        _fields(small, finite, names, settings, options, diagnose),
        removals,
        _request(options, zero),
        equivalent_poisson=options.equivalent_poisson,
        finite_model=finite,
    )
    del settings["at"]
    if options.at == "nodes":
        return replace(computed, nodes=_at_nodes(small, finite, names, settings, options.recovery))
    if options.at in ("surface", "quadrature"):
        model = small if finite is None else _one_model(small, finite, names)
        if options.at == "quadrature":
            return replace(computed, cloud=quadrature_result(model, names, **settings))
        return replace(computed, surface=_on_surface(model, options))
    return computed


def _at_nodes(
    small: Model, finite: Model | None, names: Sequence[str], settings: dict[str, Any], method: Method
) -> NodeFields:
    regions = find_regions(small, computed_cells(small))
    if finite is None:
        return nodal_fields(small, names, regions, method=method, **settings)
    real = [n for n in names if n in MEASURES and MEASURES[n].finite]
    if len(real) == len(names):
        return nodal_fields(finite, names, regions, method=method, **settings)
    first = nodal_fields(small, [n for n in names if n not in real], regions, method=method, **settings)
    if not real:
        return first
    second = nodal_fields(finite, real, regions, method=method, **settings)
    return NodeFields(
        {n: (second if n in real else first).arrays[n] for n in names},
        {**first.components, **second.components},
        first.recovered,
        second.recovered,
        first.free,
    )


def _one_model(small: Model, finite: Model, names: Sequence[str]) -> Model:
    """Return the model for measures of one kind; with a zero step small and finite ones have different ones."""
    real = [n for n in names if n in MEASURES and MEASURES[n].finite]
    if real and len(real) < len(names):
        raise UsageError(
            f"with --zero-step, small and finite measures ({real[0]} ...) are not given together here: ask for them in two "
            "runs."
        )
    return finite if real else small


def _on_surface(model: Model, options: StrainOptions) -> SurfaceFields:
    if options.frame is not None or options.thermal_expansion is not None:
        raise UsageError(
            "--at surface has its own frame and no free thermal strain: leave --frame and --thermal-* out."
        )
    if not any(b.kind == "solid" and len(b.active) for b in model.blocks):
        raise UsageError(
            "--at surface needs solids: it is the strain on their free faces. This mesh has none."
        )
    return surface_result(
        model,
        free_faces(model, threads=options.threads),
        options.measures,
        base=options.base,
        poisson=options.poisson,
        solve=options.solve,
        equivalent_poisson=options.equivalent_poisson,
        threads=options.threads,
    )


def _request(options: StrainOptions, zero: Result | None) -> dict[str, Any]:
    """Return what was asked for beyond the defaults, by option name, and the zero step."""
    default = StrainOptions()
    told = {
        k: v
        for k, v in asdict(options).items()
        if v != getattr(default, k) and k not in ("threads", "surface")
    }
    if zero is not None:
        told["zero_step"] = None if zero.steps is None else zero.steps.current
    return told


def _fields(
    small: Model,
    finite: Model | None,
    names: Sequence[str],
    settings: dict[str, Any],
    options: StrainOptions,
    diagnose: bool,
) -> CellFields:
    if finite is None:
        return compute_fields(small, names, **settings, diagnose=diagnose)
    real = [n for n in names if n in MEASURES and MEASURES[n].finite]
    linear = [n for n in names if n not in real]
    judged = diagnose and options.solve != "linear"
    first = compute_fields(small, list(dict.fromkeys([*linear, "strain"])), **settings, diagnose=diagnose)
    second = compute_fields(finite, real or ["det_f"], **settings, diagnose=judged)
    return replace(
        first,
        arrays={n: (second if n in real else first).arrays[n] for n in names},
        components={**first.components, **second.components},
        diagnostics=_judged_from_zero(first, second) if judged else first.diagnostics,
    )


def _judged_from_zero(small: CellFields, finite: CellFields) -> CellDiagnostics | None:
    """Return the diagnostics of the small strain of `u - u_N`, judged by the motion since the zero step.

    Where the zero step itself is turned, the gradient of `u - u_N` is that of no motion. The strain since then is the
    stretch of `F F_N^-1`; what the small strain has more or less of than that, by its norm, is its error at least.
    """
    ours, real = small.diagnostics, finite.diagnostics
    if ours is None or real is None:
        return ours
    e = small.arrays["strain"].T
    size = np.sqrt(np.nansum(e[:3] ** 2, axis=0) + 2.0 * np.nansum(e[3:] ** 2, axis=0))
    error = np.maximum(real.error, np.abs(size - real.stretch))
    return replace(
        ours, error=error, stretch=real.stretch, angle=real.angle, det_f=real.det_f, stretches=real.stretches
    )


def _checked_measures(options: StrainOptions) -> tuple[str, ...]:
    names = choose_measures(options.measures, options.base, options.thermal_expansion is not None)
    if options.at in ("nodes", "quadrature") and "all" in (options.measures or ()):
        names = tuple(n for n in names if n not in GEOMETRY or n in (options.measures or ()))
    finite = [n for n in names if n in MEASURES and MEASURES[n].finite]
    if finite and options.solve == "linear":
        raise UsageError(
            f"finite measures ({finite[0]} ...) of a geometrically linear solve are fiction: the solve itself used the small "
            "strain. Ask for the "
            "small measures, or state --solve nonlinear if it was."
        )
    return names


_CHOICES: dict[str, tuple[str | None, ...]] = {
    "at": PLACES,
    "recovery": METHODS,
    "solve": ("linear", "nonlinear", "unknown"),
    "plane": (None, "strain", "stress", "axisymmetric"),
    "axis": ("x", "y"),
    "coordinates": ("reference", "deformed"),
}


def _check_choices(options: StrainOptions) -> None:
    for name, known in _CHOICES.items():
        value = getattr(options, name)
        if value not in known:
            raise UsageError(
                f"{name}={value!r} is not known; use one of {', '.join(repr(k) for k in known)}."
            )


def _check_numbers(options: StrainOptions) -> None:
    effective = options.equivalent_poisson
    if effective is not None and not -1.0 < effective <= 0.5:
        raise UsageError(
            f"--equivalent-poisson {effective:g}: an effective Poisson ratio lies between -1 and 0.5."
        )
    reference = options.reference_temperature
    if reference is not None and not math.isfinite(reference):
        raise UsageError(f"--reference-temperature {reference:g} is not a temperature.")
    if options.axis != "y" and options.plane != "axisymmetric":
        raise UsageError(
            f"--axis {options.axis} belongs to --plane axisymmetric; without it, it does nothing."
        )


def model_of(result: Result, options: StrainOptions) -> Model:
    """Return the model of a result as the options ask."""
    # on free faces of solids Poisson's ratio is that of the faces, which are no cells of the model
    poisson = None if options.at == "surface" and options.plane is None else options.poisson
    return build_model(
        result,
        displacement=options.displacement,
        displacement_scale=options.displacement_scale,
        coordinates=options.coordinates,
        plane=PlaneOptions(options.plane, poisson, options.axis, options.surface),
        skin=options.skin,
        alive=options.alive,
    )


def _thermal(
    result: Result, zero: Result | None, options: StrainOptions, frame: Frame | None
) -> Thermal | None:
    given = (options.thermal_expansion, options.temperature, options.reference_temperature)
    if all(g is None for g in given):
        return None
    expansion, temperature, reference = given
    if expansion is None or temperature is None or reference is None:
        raise UsageError(
            "free thermal strain needs all three of --thermal-expansion, --temperature and --reference-temperature."
        )
    if zero is not None:
        _check_zero_temperature(zero, temperature, float(reference))
    return parse_thermal(result, str(expansion), temperature, float(reference))


def _check_zero_temperature(zero: Result, name: str, reference: float) -> None:
    """Refuse a zero step whose temperature is not the reference: the free strain since then is not `T - T0`."""
    values = zero.point_data.get(name, zero.cell_data.get(name))
    if values is None or not len(values):
        return
    low, high = float(np.nanmin(values)), float(np.nanmax(values))
    if max(abs(low - reference), abs(high - reference)) > 1e-6 * max(1.0, abs(reference)):
        raise UsageError(
            f"--reference-temperature {reference:g}: with --zero-step it must be the temperature of that step, whose "
            f"{name!r} is {low:g} to {high:g}. Where it is not one number, the free strain since then is not known here."
        )


def _zeroed(model: Model, zero: Result | None, options: StrainOptions) -> tuple[Model, Model | None]:
    """Return the model for small measures, and the one for finite measures when it differs."""
    if zero is None:
        return model, None
    start = find_displacement(
        zero, options.displacement or model.displacement.name, options.displacement_scale
    ).values
    if len(start) != len(model.points):
        raise UsageError(
            f"the zero step has {len(start)} points and this step {len(model.points)}: they cannot be subtracted."
        )
    normal = None if model.plane is None else model.plane.normal
    if normal is not None:
        start = start.copy()
        start[:, normal] = 0.0
    moved = model.displacement.values - start
    if normal is not None:
        moved[:, normal] = 0.0
    displacement = replace(model.displacement, values=moved)
    small = replace(model, displacement=displacement, fields=NodalFields(model.points, moved))
    points = model.points + start
    return small, replace(small, points=points, fields=NodalFields(points, moved))


def _parts(
    model: Model, options: StrainOptions
) -> list[tuple[str, NDArray[np.int64], str, NDArray[np.int64]]]:
    """Return name and cells over which each rigid motion is fitted, and name and cells it is taken from."""
    how = options.remove_rigid
    if how == "none":
        if options.rigid_to is not None or options.rigid_axis is not None:
            raise UsageError(
                "--rigid-to and --rigid-axis belong to --remove-rigid: name what is to be taken out."
            )
        return []
    computed = computed_cells(model)
    everything = np.flatnonzero(computed)
    if how == "whole":
        regions = [("whole", everything)]
    elif how == "bodies":
        regions = [(r.name, r.cells) for r in bodies(model, computed, most=None)] or [("body 1", everything)]
    elif how == "regions":
        regions = [(r.name, r.cells) for r in find_regions(model, computed, most=None)]
    else:
        regions = [(r.name, r.cells) for r in named_regions(model, [how], computed)]
    if options.rigid_to is None:
        return [(name, cells, name, cells) for name, cells in regions]
    if len(regions) != 1:
        raise UsageError(
            "--rigid-to needs one region in --remove-rigid, whose motion is then taken out of the other."
        )
    if options.rigid_to == "whole":
        target = ("whole", everything)
    else:
        target = (options.rigid_to, named_regions(model, [options.rigid_to], computed)[0].cells)
    return [(*regions[0], *target)]


def computed_cells(model: Model) -> NDArray[np.bool_]:
    """Return which cells are computed, `(n_cells,)`."""
    computed = np.zeros(model.result.n_cells, dtype=bool)
    for block in model.blocks:
        computed[block.index] = True
    return computed


def _axis(text: str | None) -> Axis | None:
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
