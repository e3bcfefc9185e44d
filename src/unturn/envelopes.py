"""Extremes over the steps of a series or over load cases, and which of them made each.

One state is in memory at a time. What is kept for each place does not depend on the number of states.
"""

from __future__ import annotations

import contextlib
from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from unturn.envelope_arrays import EnvelopeArrays
from unturn.envelope_extremes import find_extremes
from unturn.envelope_places import Arrays, CellPlaces, Components, NodePlaces
from unturn.envelope_trust import trusted_extremes
from unturn.errors import InputError, UnturnError, UsageError
from unturn.extremes import Extremes, Stored, plan_envelope, strain_tensor
from unturn.fields import CellDiagnostics, CellFields
from unturn.frames import parse_frame
from unturn.kinematics._symmetric import Floats
from unturn.measures import MEASURES
from unturn.model import Model
from unturn.numbering import element_numbers, node_numbers
from unturn.pipeline import compute
from unturn.regions import Region, find_regions, judged_together, named_regions
from unturn.result import Result
from unturn.rigid import RigidMotion
from unturn.same_mesh import ReferenceMesh
from unturn.series import SERIES_MEASURES, StepChanges, choose_series_measures
from unturn.states import Envelope, EnvelopeOptions, Judged, State, named
from unturn.tensor_range import TensorRange
from unturn.verdict import Level, judge

LOCATIONS = ("centroid", "mean", "nodes")
"""Where the values of an envelope can live."""
_LEVELS: tuple[Level, ...] = ("not judged", "no strain", "holds", "marginal", "does not hold")

EachStep = Callable[[Result, Mapping[str, Stored], Components, float], None]
"""Called with a step, the arrays of the series there, names of their components, and the time (or number) of the step."""


def envelope(
    states: Sequence[State],
    options: EnvelopeOptions | None = None,
    *,
    zero: Result | None = None,
    progress: Callable[[int], None] | None = None,
    each: EachStep | None = None,
) -> Envelope:
    """Return the extremes of a result over its states, cell by cell or node by node, and which state made each.

    Parameters
    ----------
    states
        Steps or load cases on one mesh, each read when its turn comes; those that made extremes of regions once more.
    options
        See `EnvelopeOptions`.
    zero
        The step from which displacements are measured; None for the undeformed state.
    progress
        Called with the number of states done.
    each
        Called with the measures of the series at every step that was computed.

    Returns
    -------
    Envelope
        For each measure ``NAME_maximum``, ``NAME_minimum``, ``NAME_largest_magnitude`` (of signed ones) and with
        ``_step`` or ``_case`` the zero-based state that made it, with ``_time`` its time where the steps have one;
        principal directions at the extremes; and
        ``strain_range_equivalent``, the equivalent of the largest difference of the strain tensors of any two states.

    Raises
    ------
    UsageError
        Options that do not fit each other or the mesh.
    InputError
        A state that cannot be used (unless the others are to go on), another mesh, or no state that can be used.

    Notes
    -----
    The range of an invariant is not a strain range: when strain reverses in full, an invariant has the same value
    twice while the tensors differ by twice the amplitude.
    """
    options = options or EnvelopeOptions()
    if not states:
        raise InputError("the series holds no step: there is nothing to envelop.")
    found = _gone_through(states, options, zero, progress, each)
    found = replace(found, extremes=find_extremes(found))
    return replace(found, extremes=trusted_extremes(found, zero))


def _gone_through(
    states: Sequence[State],
    options: EnvelopeOptions,
    zero: Result | None,
    progress: Callable[[int], None] | None,
    each: EachStep | None,
) -> Envelope:
    """Return the envelope of the states, without the extremes of its regions."""
    run = _Run(options, zero, each)
    with run.stack:
        for number, state in enumerate(states):
            try:
                run.add(state, number)
            except UnturnError as error:
                if not options.keep_going or len(states) == 1:
                    raise named(state.name, error) from error
                run.failures[number] = error
            if progress is not None:
                progress(number + 1)
        if len(run.failures) == len(states):
            first = run.failures[0]
            raise named(states[0].name, first) from first
        return run.finish(tuple(states))


class _Run:
    """The arrays being filled."""

    def __init__(self, options: EnvelopeOptions, zero: Result | None, each: EachStep | None) -> None:
        self.options, self.zero, self.each = options, zero, each
        strain = options.strain
        if strain.at not in LOCATIONS:
            raise UsageError(f"an envelope is of values at {', '.join(LOCATIONS)}, not at={strain.at!r}.")
        series = choose_series_measures(strain.measures or (), strain.base, strain.solve)
        if series and options.kind == "case":
            raise UsageError(
                f"{series[0]} needs the steps of one series; load cases do not follow one another."
            )
        self.changes = StepChanges(series, strain.solve, strain.equivalent_poisson)
        heated = strain.thermal_expansion is not None
        self.plan = plan_envelope(strain.measures, strain.base, self.changes, options.tensor_range, heated)
        self.stack = contextlib.ExitStack()
        self.mesh: ReferenceMesh | None = None
        self.model: Model | None = None
        self.extremes: dict[str, Extremes] = {}
        self.directions: dict[str, Floats] = {}
        self.totals: dict[str, Floats] = {}
        self.ranges: dict[str, TensorRange] = {}
        self.components: Components = {}
        self.judged: list[Judged] = []
        self.previous: Sequence[RigidMotion] = ()
        self.failures: dict[int, UnturnError] = {}
        self.left_out: dict[str, NDArray[np.int64]] = {}
        self.notes: list[str] = list(self.plan.notes)
        self.said: tuple[str, ...] = ()

    def add(self, state: State, number: int) -> None:
        strain = self.options.strain
        borders = "split" if strain.at == "nodes" else strain.borders
        asked = replace(strain, measures=self.plan.needs, base="small", borders=borders)
        computed = compute(state.read(), asked, zero=self.zero, diagnose=True, previous=self.previous)
        fields, d = computed.fields, computed.fields.diagnostics
        assert d is not None
        noise = None if state.noise is None else state.noise()
        if noise is not None:
            d.noise = np.maximum(d.noise, noise)
        if self.mesh is None:
            mesh = ReferenceMesh(fields.model)
            self._begin(fields, d)
            self.mesh = mesh
        else:
            self.mesh.compare(fields.model)
        arrays, components = self.places.values(computed, self.plan.needs)
        changed = self.changes.add(arrays, state.time) if self.changes.names else {}
        self.components |= {k: v for k, v in components.items() if k in self.plan.extremes}
        self._take(arrays, changed, number)
        self._judge(d, number)
        self._left_out(fields)
        fresh = np.isnan(self.volume) & np.isfinite(d.stretch)
        self.volume[fresh], self.centroid[fresh] = d.volume[fresh], d.centroid[fresh]
        if self.each is not None:
            self.places.settle(self.volume, self.centroid)
            named_ones = {n: self.components[n] for n in changed if n in self.components}
            written = {n: self.places.written(values) for n, values in changed.items()}
            self.each(fields.model.result, written, named_ones, number if state.time is None else state.time)
        self.model, self.said = fields.model, fields.notes
        self.previous = tuple(r.motion for r in computed.removals)

    def _begin(self, fields: CellFields, d: CellDiagnostics) -> None:
        model = fields.model
        n = model.result.n_cells
        dimension = np.zeros(n, dtype=np.int8)
        for block in model.blocks:
            dimension[block.cells.index] = 0 if block.row is None else block.row.dim
        for reason, cells in model.left_out.items():
            if reason != "deleted":  # it may be alive in another step
                dimension[cells] = 0
        blocks = (replace(b, active=np.flatnonzero(dimension[b.cells.index] > 0)) for b in model.blocks)
        whole = replace(model, blocks=tuple(blocks))
        names = self.options.regions
        regions = (
            named_regions(whole, names, dimension > 0)
            if names
            else find_regions(whole, dimension == model.dimension)
        )
        together = judged_together(regions)
        self.notes += [together] if together else []
        for r in regions:
            cells = r.cells[dimension[r.cells] == dimension[r.cells].max()]
            nothing = judge(d, Region(r.name, cells[:0], r.origin), self.options.strain.solve)
            self.judged.append(Judged(Region(r.name, cells, r.origin), nothing, -1))
        self.places = NodePlaces(whole) if self.options.strain.at == "nodes" else CellPlaces(whole)
        self.volume, self.centroid = np.full(n, np.nan), np.full((n, 3), np.nan)
        frame = self.options.strain.frame
        axes = None if frame is None else parse_frame(frame, model.result)
        for name in self.plan.series:
            labels = SERIES_MEASURES[name].components
            if labels:
                self.components[name] = labels if axes is None else axes.component_names(len(labels))
        families = self.plan.families
        if model.plane is not None and model.plane.model is None:
            families = ()
            self.notes.append(
                "no strain range: it depends on the strain across the plane, which is not stated"
            )
        for family in families:
            self.ranges[family] = self.stack.enter_context(TensorRange(self.places.n, self.options.folder))

    def _take(self, arrays: Arrays, changed: Mapping[str, Floats], number: int) -> None:
        for name, values in [*((n, arrays[n]) for n in self.plan.extremes), *changed.items()]:
            if name in SERIES_MEASURES and SERIES_MEASURES[name].total:
                self.totals[name] = values
                continue
            extremes = self.extremes.setdefault(name, Extremes(values.shape))
            higher, lower = extremes.add(values, number)
            suffix = name.removeprefix("principal_strain")
            if suffix in self.plan.principal and name.startswith("principal_strain"):
                for k in range(3):
                    key = f"principal_direction_{k + 1}{suffix}"
                    for mask, end in ((higher, "maximum"), (lower, "minimum")):
                        kept = self.directions.setdefault(
                            f"{key}_at_{end}", np.full_like(arrays[key], np.nan)
                        )
                        np.copyto(kept, arrays[key], where=mask[:, k, None])
        for family, tensor_range in self.ranges.items():
            tensor_range.add(arrays[strain_tensor(family)], number)

    def _judge(self, d: CellDiagnostics, number: int) -> None:
        for k, before in enumerate(self.judged):
            verdict = judge(d, before.region, self.options.strain.solve)
            worse = (_LEVELS.index(verdict.level), verdict.worst) > (
                _LEVELS.index(before.verdict.level),
                before.verdict.worst,
            )
            turned = np.fmax(verdict.largest_rotation, before.verdict.largest_rotation)
            noise = np.fmax(verdict.noise, before.verdict.noise)
            kept = verdict if worse else before.verdict
            self.judged[k] = Judged(
                before.region,
                replace(kept, largest_rotation=float(turned), noise=float(noise)),
                number if worse else before.state,
            )

    def _left_out(self, fields: CellFields) -> None:
        """Keep of the cells left out those that no state has computed."""
        if self.model is None:
            self.left_out = fields.left_out
            return
        always = np.zeros(fields.model.result.n_cells, dtype=bool)
        always[np.concatenate([*fields.left_out.values(), np.zeros(0, dtype=np.int64)])] = True
        kept = {reason: cells[always[cells]] for reason, cells in self.left_out.items()}
        self.left_out = {reason: cells for reason, cells in kept.items() if len(cells)}

    def finish(self, states: tuple[State, ...]) -> Envelope:
        assert self.model is not None
        if np.isnan(self.volume).all():
            reasons = ", ".join(f"{len(cells)} {reason}" for reason, cells in self.left_out.items())
            raise InputError(
                f"no cell could be computed in any {self.options.kind}: {reasons}. Look at the displacement and the mesh "
                "with 'unturn survey'."
            )
        self.places.settle(self.volume, self.centroid)
        made = EnvelopeArrays(self.places, self.options.kind, [s.time for s in states])
        for name, extremes in self.extremes.items():
            made.add_extremes(name, extremes, self.components.get(name))
        for name, values in self.directions.items():
            made.add(name, values, MEASURES["principal_direction_1"].components)
        for name, values in self.totals.items():
            made.add_total(name, values)
        for family, tensor_range in self.ranges.items():
            made.add_range(family, *tensor_range.finish(self.options.strain.equivalent_poisson))
        result = self.model.result
        numbers = node_numbers(result) if self.places.on == "point" else element_numbers(result)
        return Envelope(
            self.options, states, self.model, made.arrays, made.components, tuple(made.tracked), tuple(self.judged),
            self.places, self.volume, self.left_out, self.failures, (*self.said, *self.notes), numbers,
        )  # fmt: skip
