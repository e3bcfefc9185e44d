"""From a result and the user's options to computed fields: what the library and the command line share."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from unturn.borders import ORIGINAL_POINT
from unturn.errors import InputError, UsageError
from unturn.estimates import Estimates, check_estimates, estimate
from unturn.fields import CellFields, compute_fields
from unturn.frames import Frame, parse_frame
from unturn.measures import ESTIMATES, SMALL
from unturn.model import Model, PlaneOptions, build_model
from unturn.nodal import NodeFields, nodal_fields, recover_in_regions
from unturn.options import OWN_MESH, FacesTo, StrainOptions, check_options, is_finite, measures_of, told
from unturn.quadrature_points import quadrature_result
from unturn.recovery import Recovered
from unturn.regions import find_regions
from unturn.result import Array, Association, Result
from unturn.rigid import Removal, RigidMotion, take_out
from unturn.rigid_parts import computed_cells, continued, parse_axis, rigid_parts
from unturn.surface import SurfaceFields, free_faces, surface_result
from unturn.thermal import Thermal, parse_thermal
from unturn.zero_step import check_zero_temperature, judged_from_zero, zeroed


@dataclass(frozen=True, eq=False)
class Computed:
    """Computed fields, and the rigid motions that were taken out first.

    `fields` are those of cells: at centroids where the values asked for live elsewhere. `nodes`, `surface` and `cloud` hold
    those. `estimates` are those of the strain; `faces` says where the values of free faces go. `finite_model` is that of
    finite measures where it is another one than that of `fields`: with a zero step.
    """

    fields: CellFields
    removals: tuple[Removal, ...] = ()
    request: dict[str, Any] = field(default_factory=dict)
    nodes: NodeFields | None = None
    surface: SurfaceFields | None = None
    cloud: Result | None = None
    equivalent_poisson: float | None = None
    estimates: Estimates | None = None
    faces: FacesTo = "mesh"
    finite_model: Model | None = None

    @property
    def own_mesh(self) -> Result | None:
        """The mesh of values that do not fit on that of the file."""
        on_faces = self.surface if self.faces == "mesh" else None
        return self.cloud if on_faces is None else on_faces.result

    def arrays(
        self,
    ) -> tuple[dict[str, Array], dict[str, Array], dict[tuple[Association, str], tuple[str, ...]]]:
        """Return the point and cell arrays for the mesh of the file, and the names of their components."""
        if self.surface is not None:
            values, names = self.surface.on_cells()
            return {}, values, {("cell", n): labels for n, labels in names.items()}
        if self.nodes is None:
            return {}, dict(self.fields.arrays), {("cell", n): c for n, c in self.fields.components.items()}
        points: dict[str, Array] = {**self.nodes.arrays, **self.nodes.changes}
        layout = self.nodes.layout
        if self.estimates is not None and layout.cells is None:
            points |= self.estimates.points
        elif self.estimates is not None:
            share = layout.shares(self.nodes.recovered)
            each = self.estimates.shares.items()
            points |= {n: np.where(share >= 0, values[share], np.nan) for n, values in each}
        if layout.cells is not None:
            points[ORIGINAL_POINT] = layout.point
        cells = {} if self.estimates is None else dict(self.estimates.cells)
        return points, cells, {("point", n): c for n, c in self.nodes.components.items()}

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
    check_options(options)
    names = measures_of(options)
    model = model_of(result, options)
    frame = None if options.frame is None else parse_frame(options.frame, result)
    settings: dict[str, Any] = {
        "at": options.at if options.at == "mean" else "centroid",
        "equivalent_poisson": options.equivalent_poisson,
        "frame": frame,
        "thermal": _thermal(result, zero, options, frame),
        "threads": options.threads,
    }
    small, finite = zeroed(model, zero, options.displacement, options.displacement_scale)
    small, finite, removals = _without_rigid(small, finite, names, options)
    asked = [n for n in names if n in ESTIMATES]
    names = tuple(n for n in names if n not in ESTIMATES)
    check_estimates(asked, small)
    computed = Computed(
        _fields(small, finite, names, settings, options, diagnose),
        continued(removals, previous),
        told(options, zero),
        equivalent_poisson=options.equivalent_poisson,
        faces=options.faces,
        finite_model=finite,
    )
    del settings["at"]
    if options.at in OWN_MESH:
        model = small if finite is None else _one_model(small, finite, names)
        if options.at == "quadrature":
            return replace(computed, cloud=quadrature_result(model, names, **settings))
        return replace(computed, surface=_on_surface(model, options))
    if options.at == "nodes":
        computed = replace(computed, nodes=_at_nodes(small, finite, names, settings, options))
    if asked:
        computed = _estimated(computed, asked, small, finite or small, options)
    return computed


def _without_rigid(
    small: Model, finite: Model | None, names: Sequence[str], options: StrainOptions
) -> tuple[Model, Model | None, tuple[Removal, ...]]:
    """Return the models without the rigid motions that are to be taken out, and these."""
    parts = rigid_parts(small, options.remove_rigid, options.rigid_to, options.rigid_axis)
    if not parts:
        return small, finite, ()
    axis = parse_axis(options.rigid_axis)
    small, removals = take_out(small, parts, options.solve, axis, any(map(is_finite, names)))
    if finite is not None:
        finite, of_finite = take_out(finite, parts, "nonlinear", axis)
        if not any(n in SMALL for n in names):
            removals = of_finite
    return small, finite, removals


def _at_nodes(
    small: Model,
    finite: Model | None,
    names: Sequence[str],
    settings: dict[str, Any],
    options: StrainOptions,
) -> NodeFields:
    regions = find_regions(small, computed_cells(small))
    how = {**settings, "method": options.recovery, "split": options.borders == "split"}
    if finite is None:
        return nodal_fields(small, names, regions, **how)
    real = [n for n in names if is_finite(n)]
    if real and len(real) == len(names):
        return nodal_fields(finite, names, regions, **how)
    first = nodal_fields(small, [n for n in names if n not in real], regions, **how)
    if not real:
        return first
    second = nodal_fields(finite, real, regions, layout=first.layout, **how)
    return replace(
        first,
        arrays={n: (second if n in real else first).arrays[n] for n in names},
        components={**first.components, **second.components},
        of_finite=second.of_finite,
    )


def _estimated(
    computed: Computed, asked: Sequence[str], small: Model, finite: Model, options: StrainOptions
) -> Computed:
    """Return the fields with estimates of the strain; what was recovered for values at nodes is used again."""
    known = [] if computed.nodes is None else [computed.nodes.recovered, computed.nodes.of_finite]

    def recovered(base: str) -> Recovered:
        model = finite if base else small
        if not any(r.shares.model is model for r in known):
            regions = find_regions(small, computed_cells(small))
            known.append(recover_in_regions(model, regions, options.recovery, options.threads))
        return next(r for r in known if r.shares.model is model)

    found = estimate(asked, recovered, options.threads)
    fields = replace(computed.fields, arrays={**computed.fields.arrays, **found.cells})
    return replace(computed, fields=fields, estimates=found)


def _one_model(small: Model, finite: Model, names: Sequence[str]) -> Model:
    """Return the model for measures of one kind; with a zero step small and finite ones have different ones."""
    real = [n for n in names if is_finite(n)]
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
        free_faces(model, between_groups=options.between_regions, threads=options.threads),
        options.measures,
        base=options.base,
        poisson=options.poisson,
        solve=options.solve,
        equivalent_poisson=options.equivalent_poisson,
        threads=options.threads,
    )


def _fields(
    small: Model,
    finite: Model | None,
    names: Sequence[str],
    settings: dict[str, Any],
    options: StrainOptions,
    diagnose: bool,
) -> CellFields:
    if finite is None:
        found = compute_fields(small, names or ["strain"], **settings, diagnose=diagnose)
        return replace(found, arrays={n: found.arrays[n] for n in names})
    real = [n for n in names if is_finite(n)]
    linear = [n for n in names if n not in real]
    judged = diagnose and options.solve != "linear"
    first = compute_fields(small, list(dict.fromkeys([*linear, "strain"])), **settings, diagnose=diagnose)
    second = compute_fields(finite, real or ["det_f"], **settings, diagnose=judged)
    return replace(
        first,
        arrays={n: (second if n in real else first).arrays[n] for n in names},
        components={**first.components, **second.components},
        diagnostics=judged_from_zero(first, second) if judged else first.diagnostics,
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
        check_zero_temperature(zero, temperature, float(reference))
    return parse_thermal(result, str(expansion), temperature, float(reference))


__all__ = ["Computed", "StrainOptions", "compute", "model_of", "settled"]
