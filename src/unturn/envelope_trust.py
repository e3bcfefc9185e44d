"""How far to trust the extremes of an envelope: the states that made them are read and computed once more."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from unturn.around import Asked, Trust, trust_of
from unturn.borders import Layout
from unturn.envelope_arrays import RANGE
from unturn.envelope_extremes import foremost, in_table, unit_of
from unturn.envelope_places import NodePlaces
from unturn.errors import UnturnError
from unturn.measures import MEASURES
from unturn.model import Model
from unturn.node_errors import NodeErrors
from unturn.pipeline import Computed, compute
from unturn.result import Result
from unturn.series import SERIES_MEASURES
from unturn.states import UNKNOWN, Envelope, Extreme, Judged, State, named

Ints = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class _Question:
    """An extreme of a region in one of the states that made it."""

    region: int
    number: int
    extreme: Extreme
    size: float

    @property
    def measure(self) -> str:
        """The measure of a state on which the extreme depends: of a range the equivalent strain of its family."""
        name = self.extreme.of.measure
        return name.replace(RANGE, "equivalent_strain") if name.startswith(RANGE) else name


def trusted_extremes(
    envelope: Envelope, zero: Result | None = None, progress: Callable[[int], None] | None = None
) -> tuple[tuple[Extreme, ...], ...]:
    """Return the extremes of an envelope with how far to trust each.

    Parameters
    ----------
    envelope
        With the extremes of its regions. Those of the table are asked for, with the option `full` all of them.
    zero
        The step from which displacements are measured.
    progress
        Called with the number of states done.

    Raises
    ------
    InputError
        A state that can no longer be read.

    Notes
    -----
    One state is in memory at a time, and none is read more than once. An extreme has the bound of its value in the state
    that made it. The range is a norm of the difference of two tensors, so it changes by no more than both together: the
    bounds that the equivalents have in the two states add up. Changes between steps and their sums have no bound.
    """
    questions = _questions(envelope)
    answers: dict[tuple[int, int], list[Trust]] = {}
    # from the last one on: sums of load cases are held for the last combinations that were gone through
    for done, state in enumerate(sorted(questions, reverse=True), 1):
        asked = questions[state]
        for q, trust in zip(asked, _answers(envelope, envelope.states[state], asked, zero)):
            answers.setdefault((q.region, q.number), []).append(trust)
        if progress is not None:
            progress(done)
    return tuple(
        tuple(replace(e, trust=_together(e, answers.get((r, k), []))) for k, e in enumerate(extremes))
        for r, extremes in enumerate(envelope.extremes)
    )


def _questions(envelope: Envelope) -> dict[int, list[_Question]]:
    """Return what is asked of each state."""
    found: dict[int, list[_Question]] = {}
    full = envelope.options.full
    for r in range(len(envelope.judged)) if full else foremost(envelope):
        extremes = envelope.extremes[r]
        size = _size(extremes)
        for k, e in enumerate(extremes):
            if e.of.measure in SERIES_MEASURES or not (full or in_table(envelope, e)):
                continue
            for state in e.states if e.states[:1] != e.states[1:] else ():
                found.setdefault(state, []).append(_Question(r, k, e, size))
    return found


def _size(extremes: Sequence[Extreme]) -> float:
    """Return the largest strain among the extremes of a region."""
    of_strain = (e.value for e in extremes if e.of.measure in MEASURES and unit_of(e.of.measure) == "strain")
    return max((abs(v) for v in of_strain if math.isfinite(v)), default=0.0)


def _answers(
    envelope: Envelope, state: State, asked: Sequence[_Question], zero: Result | None
) -> list[Trust]:
    """Return how far to trust extremes of one state."""
    strain = envelope.options.strain
    names = tuple(dict.fromkeys(q.measure for q in asked))
    borders = "split" if strain.at == "nodes" else strain.borders
    options = replace(strain, measures=names, base="small", borders=borders)
    try:
        computed = compute(state.read(), options, zero=zero, diagnose=True)
    except UnturnError as error:
        raise named(state.name, error) from error
    places = envelope.places
    if isinstance(places, NodePlaces):
        return _at_nodes(envelope, places, computed, asked)
    cells = [int(places.position[q.extreme.place]) for q in asked]
    about = [_about(computed, envelope.judged[q.region], q, cell) for q, cell in zip(asked, cells)]
    return trust_of(computed, about, threads=strain.threads)


def _about(computed: Computed, region: Judged, q: _Question, cell: int) -> Asked:
    values = computed.fields.arrays[q.measure]
    column = values if values.ndim == 1 else values[:, q.extreme.column]
    smallest = q.extreme.of.which == "minimum"
    return Asked(q.measure, column, region.region.cells, cell, smallest, q.size)


def _at_nodes(
    envelope: Envelope, places: NodePlaces, computed: Computed, asked: Sequence[_Question]
) -> list[Trust]:
    """Return the bounds at nodes; whether a peak is suspected is told by the cell there that comes first."""
    nodes, model, threads = computed.nodes, computed.fields.model, envelope.options.strain.threads
    assert nodes is not None
    rows = places.row_of(model, nodes.layout)
    errors = NodeErrors(nodes, computed.equivalent_poisson, threads)
    about, bounds = [], []
    for q in asked:
        row = int(rows[q.extreme.place])
        share = int(nodes.layout.shares(nodes.behind(q.measure))[row]) if row >= 0 else -1
        bounds.append(errors.plus_minus(q.measure, share, q.extreme.value))
        of_cells = _about(computed, envelope.judged[q.region], q, -1)
        about.append(replace(of_cells, cell=_first(of_cells, _cells_at(model, nodes.layout, row))))
    found = trust_of(computed, about, threads=threads)
    return [replace(trust, plus_minus=bound) for trust, bound in zip(found, bounds)]


def _cells_at(model: Model, layout: Layout, row: int) -> Ints:
    """Return the cells (file positions) that meet at a row of the values at nodes."""
    assert layout.cells is not None
    met = [b.index[(cells == row).any(axis=1)] for b, cells in zip(model.blocks, layout.cells)]
    return np.concatenate(met)


def _first(asked: Asked, around: Ints) -> int:
    """Return which of some cells has the most extreme value; -1 for none."""
    known = around[np.isfinite(asked.values[around])]
    if not len(known):
        return -1
    values = asked.values[known]
    return int(known[values.argmin() if asked.smallest else values.argmax()])


def _together(e: Extreme, answers: Sequence[Trust]) -> Trust:
    """Return the trust in an extreme, from those in its states."""
    if len(e.states) < 2:
        return answers[0] if answers else UNKNOWN
    if e.states[0] == e.states[1]:  # one state alone: its tensor differs from itself by nothing
        return Trust(0.0)
    total = sum(a.plus_minus for a in answers) if answers else math.nan
    grown = [a for a in answers if a.singular]
    if not grown:
        return Trust(total)
    worst = max(grown, key=lambda a: a.plus_minus)
    return Trust(total, True, worst.point, worst.growth)
