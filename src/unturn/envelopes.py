"""Extremes over the steps of a series or over load cases, and which of them made each.

One state is in memory at a time. What is kept per cell does not depend on the number of states.
"""

from __future__ import annotations

import contextlib
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path, PurePath
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unturn.errors import InputError, UnturnError, UsageError
from unturn.extremes import Extremes, Kind, Stored, plan_envelope, strain_tensor
from unturn.fields import CellDiagnostics, CellFields
from unturn.kinematics._symmetric import Floats
from unturn.measures import MEASURES
from unturn.model import Model
from unturn.numbering import Numbering, element_numbers
from unturn.pipeline import StrainOptions, compute
from unturn.regions import Region, find_regions, named_regions
from unturn.result import Result
from unturn.rigid import RigidMotion
from unturn.same_mesh import ReferenceMesh
from unturn.series import SERIES_MEASURES, StepChanges, choose_series_measures
from unturn.tensor_range import TensorRange
from unturn.verdict import Level, Verdict, judge

RANGE = "strain_range_equivalent"
_ENDS: tuple[Literal["maximum", "minimum"], ...] = ("maximum", "minimum")
_LEVELS: tuple[Level, ...] = ("not judged", "no strain", "holds", "marginal", "does not hold")


@dataclass(frozen=True, eq=False)
class State:
    """One step or load case.

    Parameters
    ----------
    name
        For people: ``step 3``, ``wind.vtu``.
    read
        Reads it.
    time
        Its time; None when the file holds none.
    factors
        For a combination: load case -> factor.
    noise
        Called after `read`: floor of its strain from the stored precision, `(n_cells,)`, where that is coarser than the
        arrays that are read tell. None: they tell.
    """

    name: str
    read: Callable[[], Result]
    time: float | None = None
    factors: Mapping[str, float] | None = None
    noise: Callable[[], Floats | None] | None = None


@dataclass(frozen=True)
class EnvelopeOptions:
    """What an envelope is of.

    Parameters
    ----------
    strain
        Options of every state; `measures` may name those of `unturn.series.SERIES_MEASURES` too.
    kind
        Whether the states are steps of one series or load cases.
    tensor_range
        Whether to find the largest difference of strain tensors.
    keep_going
        Whether the other states go on when one fails.
    regions
        Names of regions; none: all of them.
    folder
        Where the temporary file of the tensor range lies; None: the system's own place.
    """

    strain: StrainOptions = field(default_factory=StrainOptions)
    kind: Kind = "step"
    tensor_range: bool = True
    keep_going: bool = False
    regions: tuple[str, ...] = ()
    folder: Path | None = None


@dataclass(frozen=True, eq=False)
class Judged:
    """The worst verdict on a region over the states, and the state it is of (-1: none)."""

    region: Region
    verdict: Verdict
    state: int


@dataclass(frozen=True)
class Tracked:
    """An array of an envelope that has a peak: of which measure, which extreme, and the arrays of states that made it."""

    array: str
    measure: str
    which: Literal["maximum", "minimum"]
    made_by: tuple[str, ...]


@dataclass(frozen=True, eq=False)
class Envelope:
    """Extremes of a result over its states.

    Attributes
    ----------
    options, states
        As given.
    model
        Of the last state that was computed.
    arrays
        By name, `(n_cells,)` or `(n_cells, components)` in file order; NaN, or state -1, where no state was computed.
    components
        Names of the components.
    tracked
        Which of the arrays are extremes, in the order of the measures.
    judged
        Regions with their worst verdict.
    volume, centroid
        Of every cell that was computed at least once.
    left_out
        ``{reason: file positions}`` of cells that no state computed.
    failures
        State -> what went wrong.
    notes
        Sentences for the user.
    numbers
        The solver's element numbers, where an array holds them.
    """

    options: EnvelopeOptions
    states: tuple[State, ...]
    model: Model
    arrays: dict[str, Stored]
    components: dict[str, tuple[str, ...]]
    tracked: tuple[Tracked, ...]
    judged: tuple[Judged, ...]
    volume: Floats
    centroid: Floats
    left_out: dict[str, NDArray[np.int64]]
    failures: dict[int, UnturnError]
    notes: tuple[str, ...]
    numbers: Numbering | None


def envelope(
    states: Sequence[State],
    options: EnvelopeOptions | None = None,
    *,
    zero: Result | None = None,
    progress: Callable[[int], None] | None = None,
    each: Callable[[CellFields, float], None] | None = None,
) -> Envelope:
    """Return the extremes of a result over its states, cell by cell, and which state made each.

    Parameters
    ----------
    states
        Steps or load cases on one mesh, each read when its turn comes.
    options
        See `EnvelopeOptions`.
    zero
        The step from which displacements are measured; None for the undeformed state.
    progress
        Called with the number of states done.
    each
        Called with the measures of the series at every step that was computed, and its time (its number where it has
        none).

    Returns
    -------
    Envelope
        For each measure ``NAME_maximum``, ``NAME_minimum``, ``NAME_largest_magnitude`` (of signed ones) and with
        ``_step`` or ``_case`` the zero-based state that made it; principal directions at the extremes; and
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


def named(name: str, error: UnturnError, file: str = "") -> UnturnError:
    """Return an error that names its state, which may be a file: no file is named twice.

    Parameters
    ----------
    name
        Of the state.
    error
        What went wrong.
    file
        Name of a file, without folder and suffix, of which `name` says no more than the error itself does.

    Examples
    --------
    >>> str(named("step 3", InputError("run.xdmf: cut short.")))
    'step 3: run.xdmf: cut short.'
    >>> str(named("run.xdmf step 3", InputError("old/run.xdmf: cut short.")))
    'old/run.xdmf step 3: cut short.'
    """
    said = str(error)
    where, colon, rest = said.partition(": ")
    place = PurePath(where)
    if colon and place.name and (name == place.name or name.startswith(f"{place.name} ")):
        said = f"{where}{name.removeprefix(place.name)}: {rest}"
    elif not (colon and file and place.stem == file):
        said = f"{name}: {said}"
    return type(error)(said)


class _Run:
    """The arrays being filled."""

    def __init__(
        self,
        options: EnvelopeOptions,
        zero: Result | None,
        each: Callable[[CellFields, float], None] | None,
    ) -> None:
        self.options, self.zero, self.each = options, zero, each
        strain = options.strain
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
        self.components: dict[str, tuple[str, ...]] = {}
        self.judged: list[Judged] = []
        self.previous: Sequence[RigidMotion] = ()
        self.failures: dict[int, UnturnError] = {}
        self.left_out: dict[str, NDArray[np.int64]] = {}
        self.notes: list[str] = list(self.plan.notes)
        self.said: tuple[str, ...] = ()

    def add(self, state: State, number: int) -> None:
        options = replace(self.options.strain, measures=self.plan.needs, base="small")
        computed = compute(state.read(), options, zero=self.zero, diagnose=True, previous=self.previous)
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
        changed = self.changes.add(fields.arrays, state.time) if self.changes.names else {}
        self._take(fields, changed, number)
        self._judge(d, number)
        self._left_out(fields)
        fresh = np.isnan(self.volume) & np.isfinite(d.stretch)
        self.volume[fresh], self.centroid[fresh] = d.volume[fresh], d.centroid[fresh]
        if self.each is not None:
            names = {n: self.components[n] for n in changed if n in self.components}
            self.each(
                CellFields(fields.model, dict(changed), names), number if state.time is None else state.time
            )
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
        names = self.options.regions
        whole = replace(model, blocks=tuple(replace(b, active=np.arange(len(b.cells))) for b in model.blocks))
        regions = (
            named_regions(whole, names, dimension > 0)
            if names
            else find_regions(whole, dimension == model.dimension)
        )
        for r in regions:
            cells = r.cells[dimension[r.cells] == dimension[r.cells].max()]
            nothing = judge(d, Region(r.name, cells[:0], r.origin), self.options.strain.solve)
            self.judged.append(Judged(Region(r.name, cells, r.origin), nothing, -1))
        self.volume, self.centroid = np.full(n, np.nan), np.full((n, 3), np.nan)
        self.components = {k: v for k, v in fields.components.items() if k in self.plan.extremes}
        self.components |= {
            n: SERIES_MEASURES[n].components for n in self.plan.series if SERIES_MEASURES[n].components
        }
        families = self.plan.families
        if model.plane is not None and model.plane.model is None:
            families = ()
            self.notes.append(
                "no strain range: it depends on the strain across the plane, which is not stated"
            )
        for family in families:
            self.ranges[family] = self.stack.enter_context(TensorRange(n, self.options.folder))

    def _take(self, fields: CellFields, changed: Mapping[str, Floats], number: int) -> None:
        for name, values in [*((n, fields.arrays[n]) for n in self.plan.extremes), *changed.items()]:
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
                            f"{key}_at_{end}", np.full_like(fields.arrays[key], np.nan)
                        )
                        np.copyto(kept, fields.arrays[key], where=mask[:, k, None])
        for family, tensor_range in self.ranges.items():
            tensor_range.add(fields.arrays[strain_tensor(family)], number)

    def _judge(self, d: CellDiagnostics, number: int) -> None:
        for k, before in enumerate(self.judged):
            verdict = judge(d, before.region, self.options.strain.solve)
            worse = (_LEVELS.index(verdict.level), verdict.worst) > (
                _LEVELS.index(before.verdict.level),
                before.verdict.worst,
            )
            turned = np.fmax(verdict.largest_rotation, before.verdict.largest_rotation)
            kept = verdict if worse else before.verdict
            self.judged[k] = Judged(
                before.region,
                replace(kept, largest_rotation=float(turned)),
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
        kind = self.options.kind
        arrays: dict[str, Stored] = {}
        components: dict[str, tuple[str, ...]] = {}
        tracked: list[Tracked] = []
        for name, extremes in self.extremes.items():
            signed = SERIES_MEASURES[name].signed if name in SERIES_MEASURES else MEASURES[name].signed
            found = extremes.arrays(name, kind, signed)
            arrays |= found
            if name in self.components:
                components |= dict.fromkeys(found, self.components[name])
            tracked += [Tracked(f"{name}_{w}", name, w, (f"{name}_{w}_{kind}",)) for w in _ENDS]
        arrays |= self.directions
        components |= {n: MEASURES["principal_direction_1"].components for n in self.directions}
        arrays |= self.totals
        tracked += [Tracked(name, name, "maximum", ()) for name in self.totals]
        for family, tensor_range in self.ranges.items():
            name = f"{RANGE}_{family}" if family else RANGE
            made_by = (f"{name}_first_{kind}", f"{name}_second_{kind}")
            size, *steps = tensor_range.finish(self.options.strain.equivalent_poisson)
            arrays[name] = size
            arrays |= {key: at.astype(np.int32) for key, at in zip(made_by, steps)}
            tracked.append(Tracked(name, name, "maximum", made_by))
        return Envelope(
            self.options, states, self.model, arrays, components, tuple(tracked), tuple(self.judged), self.volume,
            self.centroid, self.left_out, self.failures, (*self.said, *self.notes),
            element_numbers(self.model.result),
        )  # fmt: skip
