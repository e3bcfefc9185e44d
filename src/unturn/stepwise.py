"""The steps of a series one after the other: each one's fields, and what changed since the step before."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from unturn.errors import UsageError
from unturn.frames import parse_frame
from unturn.kinematics._symmetric import Floats
from unturn.measures import choose_measures
from unturn.options import OWN_MESH, StrainOptions
from unturn.pipeline import Computed, compute
from unturn.result import Result
from unturn.rigid import RigidMotion
from unturn.same_mesh import ReferenceMesh
from unturn.series import SERIES_MEASURES, StepChanges, choose_series_measures


class Stepwise:
    """Computes the steps of a series in their order; one is held at a time.

    Parameters
    ----------
    options
        As for `unturn.pipeline.compute`; `measures` may name those of `unturn.series.SERIES_MEASURES` too.
    zero
        The step from which displacements are measured; None for the undeformed state.

    Raises
    ------
    UsageError
        Measures of a series at a place or for a solve that has none.

    Notes
    -----
    Rotation vectors of rigid motions that are taken out continue those of the step before by whole turns.
    """

    def __init__(self, options: StrainOptions, zero: Result | None = None) -> None:
        self._zero = zero
        asked = (
            () if isinstance(options.measures, str) else tuple(options.measures or ())
        )  # a text is refused later
        self.series = choose_series_measures(asked, options.base, options.solve)
        if self.series:
            _check_place(options, self.series[0])
        self.options = options
        self._plain = tuple(n for n in asked if n not in SERIES_MEASURES)
        self._kept: tuple[str, ...] = ()
        if self._plain and options.at != "surface":  # names of surfaces are looked at where they are computed
            heated = options.thermal_expansion is not None
            self._kept = choose_measures(self._plain, options.base, heated, others=SERIES_MEASURES)
        kinds = ("cell", "point") if options.at == "nodes" else ("cell",)
        self._changes = {
            k: StepChanges(self.series, options.solve, options.equivalent_poisson) for k in kinds
        }
        self._motions: Sequence[RigidMotion] = ()
        self._mesh: ReferenceMesh | None = None

    @property
    def total(self) -> str:
        """A measure that is a sum over all steps; empty for none."""
        return next((n for n in self.series if SERIES_MEASURES[n].total), "")

    def first_needed(self, step: int) -> int:
        """Return the first step that must be gone through before a step; itself for none."""
        if self.total:
            return 0
        return max(step - 1, 0) if self.series else step

    def pass_over(self, result: Result) -> None:
        """Take note of a step of which only what the next ones need is computed."""
        needs = self._changes["cell"].needs
        at = self.options.at if self.series else "centroid"
        options = replace(
            self.options, measures=needs or ("rotation",), at=at,
            borders="dominant", faces="mesh", between_regions=False,
        )  # fmt: skip
        self._changed(compute(result, options, zero=self._zero, previous=self._motions), result)

    def compute(self, result: Result, *, diagnose: bool = False) -> Computed:
        """Return the fields of the next step, those of what changed since the last one among them.

        Raises
        ------
        UsageError
            Options that do not fit each other or the mesh; rates of steps without times.
        InputError
            A step that cannot be used, has another mesh, or whose time does not rise.
        """
        options = self.options
        if self.series:
            options = replace(options, measures=(*self._plain, *self._changes["cell"].needs))
        computed = compute(result, options, zero=self._zero, diagnose=diagnose, previous=self._motions)
        changed = self._changed(computed, result)
        if not self.series:
            return computed
        kept = self._kept
        frame = None if options.frame is None else parse_frame(options.frame, result)
        labels = {
            n: c if frame is None else frame.component_names(len(c))
            for n in self.series
            if (c := SERIES_MEASURES[n].components)
        }
        fields, nodes = computed.fields, computed.nodes
        request = {**computed.request, "measures": tuple(self.options.measures or ())}
        fields = replace(
            fields,
            arrays={**{n: a for n, a in fields.arrays.items() if n in kept}, **changed["cell"]},
            components={**{n: c for n, c in fields.components.items() if n in kept}, **labels},
        )
        if nodes is not None:
            nodes = replace(
                nodes,
                arrays={n: a for n, a in nodes.arrays.items() if n in kept},
                components={**{n: c for n, c in nodes.components.items() if n in kept}, **labels},
                changes=changed["point"],
            )
        return replace(computed, fields=fields, nodes=nodes, request=request)

    def _changed(self, computed: Computed, result: Result) -> dict[str, dict[str, Floats]]:
        self._motions = tuple(r.motion for r in computed.removals)
        if not self.series:
            return {}
        model = computed.fields.model
        if self._mesh is None:
            self._mesh = ReferenceMesh(model)
        else:
            self._mesh.compare(model)
        time = None if result.steps is None else result.steps.values[result.steps.current]
        of_points = {} if computed.nodes is None else computed.nodes.arrays
        arrays = {"cell": computed.fields.arrays, "point": of_points}
        return {k: changes.add(arrays[k], time) for k, changes in self._changes.items()}


def _check_place(options: StrainOptions, name: str) -> None:
    if options.at in OWN_MESH:
        raise UsageError(
            f"{name} belongs to the cells and nodes of the mesh: ask for it with --at centroid, mean or nodes."
        )
    if options.borders == "split":
        raise UsageError(
            f"{name} is not given on duplicated points: leave --borders split out, or ask for it on the cells."
        )
