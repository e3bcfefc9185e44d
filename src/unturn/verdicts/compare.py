"""Two results, array by array and region by region: what differs, where, and whether by more than is tolerated."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from unturn.errors import InputError, UsageError, close_matches
from unturn.kinematics._symmetric import Floats
from unturn.measures import choose_measures
from unturn.model import PlaneOptions
from unturn.pipeline import StrainOptions, model_of
from unturn.result import Array, Result
from unturn.verdicts.compare_arrays import data_of, stored_pairs
from unturn.verdicts.compare_measures import measure_pairs
from unturn.verdicts.compare_words import (
    counted_finding,
    coverage_finding,
    difference_finding,
    groups_finding,
    mesh_finding,
    missing_findings,
    regions_findings,
)
from unturn.verdicts.differences import ArrayDifference, Pair, Where
from unturn.verdicts.directions import is_direction
from unturn.verdicts.finding import Finding
from unturn.verdicts.mesh_match import match
from unturn.verdicts.mesh_view import MeshView, view
from unturn.verdicts.overlay import Overlay
from unturn.verdicts.tolerances import Tolerance, Tolerances
from unturn.verdicts.wording import short_name

Ints = NDArray[np.int64]
OUTSIDE = 0.01
"""Share of the volume that may lie outside of the other mesh before nothing is decided."""


@dataclass(frozen=True)
class CompareOptions:
    """What is compared, and how far it may differ.

    Parameters
    ----------
    tolerances
        By array.
    arrays
        Only these arrays of the files; empty: all that both have.
    regions
        Only these regions of the reference; empty: those by which it is judged.
    measures
        Whether measures are computed on both sides and compared too.
    strain
        How; its `measures` say which.
    same_mesh
        Another mesh is a difference beyond tolerance.
    outside
        Share of the volume that may lie outside of the other mesh before a verdict is undecided.
    """

    tolerances: Tolerances = field(default_factory=Tolerances)
    arrays: tuple[str, ...] = ()
    regions: tuple[str, ...] = ()
    measures: bool = False
    strain: StrainOptions = field(default_factory=StrainOptions)
    same_mesh: bool = False
    outside: float = OUTSIDE


@dataclass(frozen=True, eq=False)
class Compared:
    """What a comparison of two states found.

    Parameters
    ----------
    findings
        On the mesh, then on what is missing, then on every array in every region.
    notes
        Sentences for the reader.
    differences
        The reference with the differences as further arrays, ``NAME_difference``: result less reference.
    overlay
        The result on its reference.
    """

    findings: tuple[Finding, ...]
    notes: tuple[str, ...]
    differences: Result
    overlay: Overlay


def compare_states(
    result: Result, reference: Result, options: CompareOptions, before: Overlay | None = None
) -> Compared:
    """Return the differences of one state of a result from one of its reference.

    Parameters
    ----------
    result, reference
        The two states.
    options
        What is compared.
    before
        Of an earlier comparison: on the same meshes nothing is searched again.

    Raises
    ------
    UsageError
        Unknown arrays or regions, or options that do not fit.
    InputError
        A result that cannot be used, or nothing to compare.
    """
    if not 0.0 <= options.outside < 1.0:
        raise UsageError(f"--outside {options.outside:g}: a share of the volume lies from 0 to below 1.")
    _check_names(result, reference, options)
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):  # numbers of any size are compared
        return _Comparison(_overlay(result, reference, options.strain, before), options).run()


def _overlay(result: Result, reference: Result, strain: StrainOptions, before: Overlay | None) -> Overlay:
    points, base_points = _points(result, strain), _points(reference, strain)
    if before is not None:
        mesh, base = before.mesh.of(result, points), before.base.of(reference, base_points)
        if mesh is not None and base is not None:
            return before.again(mesh, base)
    plane = PlaneOptions(strain.plane, strain.poisson, strain.axis) if strain.plane else None
    mesh, base = (
        view(result, points, plane, strain.threads),
        view(reference, base_points, plane, strain.threads),
    )
    return Overlay(mesh, base, match(mesh, base))


def _points(result: Result, strain: StrainOptions) -> Floats:
    if strain.coordinates == "deformed":
        return model_of(result, strain).points
    return np.asarray(result.points, dtype=np.float64)


def _check_names(result: Result, reference: Result, options: CompareOptions) -> None:
    """Refuse names of arrays that neither result has and that are no measures asked for."""
    known = {n for r in (result, reference) for d in (r.point_data, r.cell_data, r.field_data) for n in d}
    for name in options.arrays:
        if name not in known:
            raise UsageError(
                f"neither result has an array {name!r}.{close_matches(name, known)} Arrays: {', '.join(sorted(known))}."
            )
    computed = choose_measures(options.strain.measures, options.strain.base) if options.measures else ()
    options.tolerances.check_names({*known, *computed, *result.groups, *reference.groups})


@dataclass(frozen=True, eq=False)
class _Part:
    """A region of the reference: its cells and points, and what they weigh, `(4, k)` by dimension."""

    name: str
    cells: Ints
    cell_weights: Floats
    points: Ints
    point_weights: Floats


class _Comparison:
    """A result on its reference, and what is asked of them."""

    def __init__(self, overlay: Overlay, options: CompareOptions) -> None:
        self.overlay, self.options = overlay, options
        self.result, self.reference = overlay.mesh.result, overlay.base.result
        self.group = short_name(self.result.path)

    def run(self) -> Compared:
        """Compare."""
        overlay, options = self.overlay, self.options
        stored = stored_pairs(overlay, self.group, self._wanted)
        pairs, notes = stored.pairs, [*_notes(overlay.mesh, overlay.base), *stored.notes]
        if options.measures:
            computed = measure_pairs(overlay, options.strain)
            pairs, notes = [*pairs, *computed.pairs], [*notes, *computed.notes]
        if overlay.differ and (n := int((overlay.base.dimension == 0).sum())):
            notes.append(f"cells of the reference of no known element: {n}; not compared on another mesh")
        lost = [*missing_findings(self.group, self.result, self.reference, self._wanted), *stored.findings]
        arrays: list[Finding] = []
        written: dict[Where, dict[str, Array]] = {"point": {}, "cell": {}, "field": {}}
        for pair in pairs:
            difference = ArrayDifference(pair, self._tolerance(pair))
            arrays += self._judge(difference)
            _keep(written, difference, self.reference)
        if not arrays and all(f.passes() for f in lost):
            raise InputError(
                f"{self.group}: there is no array to compare with {short_name(self.reference.path)}. Ask for measures of "
                "ours with --measures, or look at what the files hold with 'unturn survey'."
            )
        kept = self.reference.with_arrays(
            point_data=written["point"], cell_data=written["cell"], field_data=written["field"]
        )
        return Compared((*self._mesh(), *lost, *arrays), tuple(notes), kept, overlay)

    def _wanted(self, name: str) -> bool:
        only = self.options.arrays
        return name not in self.options.tolerances.ignore and (not only or name in only)

    def _tolerance(self, pair: Pair) -> Tolerance:
        """Return the tolerance of an array; the sign of a principal direction says nothing."""
        tolerances = self.options.tolerances
        free = is_direction(pair.name) and "sign" not in tolerances.arrays.get(pair.name, {})
        return replace(tolerances.of(pair.name), sign="free") if free else tolerances.of(pair.name)

    def _mesh(self) -> list[Finding]:
        overlay, options = self.overlay, self.options
        mesh, base = overlay.mesh, overlay.base
        found = [mesh_finding(self.group, overlay.match, mesh, base, options.same_mesh)]
        if overlay.differ:
            limit = options.outside
            found += [
                coverage_finding(self.group, "reference", base, overlay.cells, limit, overlay.points),
                coverage_finding(self.group, "result", mesh, overlay.back, limit),
            ]
            found += regions_findings(self.group, mesh.regions(), base.regions())
        order = overlay.match.cell_of
        if order is not None:
            found += self._same_cells(order)
        return found

    def _same_cells(self, order: Ints) -> list[Finding]:
        """Return whether the same cells of one mesh count, and whether groups hold the same cells."""
        ours, theirs, base = self.result.groups, self.reference.groups, self.overlay.base
        found = []
        apart = np.flatnonzero(self.overlay.mesh.counted[order] != base.counted)
        if len(apart):
            found.append(counted_finding(self.group, len(apart), base.place("cell", int(apart[0]))))
        both = [n for n in theirs if n in ours and self._wanted(n)]
        if both:
            changed = [n for n in both if not np.array_equal(np.sort(order[theirs[n]]), np.sort(ours[n]))]
            found.append(groups_finding(self.group, changed))
        return found

    @cached_property
    def _parts(self) -> list[_Part]:
        base, found = self.overlay.base, []
        for region in base.regions(self.options.regions):
            cells = np.zeros((4, len(region.cells)))
            cells[base.dimension[region.cells], np.arange(len(region.cells))] = base.weight[region.cells]
            points = base.points_of(region.cells)
            weights = base.point_weights(region.cells)[:, points]
            found.append(_Part(region.name, region.cells, cells, points, weights))
        loose = base.loose_points
        if len(loose) and not self.options.regions:
            none = np.zeros(0, dtype=np.int64)
            found.append(_Part("points of no cell", none, np.zeros((4, 0)), loose, np.zeros((4, len(loose)))))
        return found

    def _judge(self, difference: ArrayDifference) -> list[Finding]:
        """Return the findings on one array: one for each region, or one for a field array."""
        pair, found = difference.pair, []
        if pair.where == "field":
            every = np.arange(len(pair.theirs))
            return [self._finding(difference, "", every, np.ones((4, len(every))))]
        for part in self._parts:
            cells = pair.where == "cell"
            places, weights = (part.cells, part.cell_weights) if cells else (part.points, part.point_weights)
            if pair.known is not None:
                places, weights = places[pair.known[places]], weights[:, pair.known[places]]
            if len(places):
                found.append(self._finding(difference, part.name, places, weights))
        return found

    def _finding(self, difference: ArrayDifference, region: str, places: Ints, weights: Floats) -> Finding:
        found = difference.in_region(places, weights)
        return difference_finding(
            self.group, difference, region, found, self.overlay.base, self.options.outside
        )


def _notes(*meshes: MeshView) -> list[str]:
    return list(
        dict.fromkeys(f"{short_name(m.result.path)}: {note}" for m in meshes for note in m.model.notes)
    )


def _keep(written: dict[Where, dict[str, Array]], difference: ArrayDifference, reference: Result) -> None:
    """Add the signed difference of an array to those that are written."""
    pair = difference.pair
    taken = {**data_of(reference, pair.where), **written[pair.where]}
    name = f"{pair.name}_difference"
    if name in taken:
        name = f"computed_{name}"
    if name in taken:
        raise UsageError(
            f"{short_name(reference.path)}: there is already an array {name!r}; compare the original results."
        )
    values = difference.signed
    written[pair.where][name] = values[:, 0] if values.shape[1] == 1 else values
