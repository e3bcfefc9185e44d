"""How far single values of a step can be trusted: plus and minus, and whether a peak is suspected singular."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from unturn.around import Asked, Trust, bound_of, trust_of
from unturn.elsewhere import trust_on_faces
from unturn.kinematics._symmetric import Floats
from unturn.pipeline import Computed
from unturn.trust import strain_error
from unturn.verdicts.columns import Selection, one_component
from unturn.verdicts.limit import Quantity
from unturn.verdicts.step import Step
from unturn.verdicts.step_fields import group_of
from unturn.verdicts.units import Unit, unit_words
from unturn.verdicts.wording import number


@dataclass(frozen=True, eq=False)
class Ask:
    """One value of a selection.

    Attributes
    ----------
    quantity
        What it is of.
    selection
        Where it is from.
    position
        Its position there.
    smallest
        Whether the smallest was looked for.
    extreme
        Whether it is one value of its region that may be a singular peak.
    unit
        In which a sentence about it gives values.
    """

    quantity: Quantity
    selection: Selection
    position: int
    smallest: bool
    extreme: bool
    unit: Unit


@dataclass(frozen=True)
class Certainty:
    """Plus and minus of a value (NaN: not known), and a sentence when its peak is suspected singular."""

    plus_minus: float = math.nan
    singular: str = ""


def certainties(step: Step, asked: Sequence[Ask]) -> list[Certainty]:
    """Return how far each value can be trusted.

    What must be recovered for it is recovered once for all values that are computed together. Arrays of the file have
    none.
    """
    found = [Certainty()] * len(asked)
    together: dict[int, list[int]] = {}
    for k, ask in enumerate(asked):
        if ask.selection.column.computed is not None:
            together.setdefault(id(ask.selection.column.computed), []).append(k)
    for members in together.values():
        computed = asked[members[0]].selection.column.computed
        assert computed is not None
        answers = _trusts(step, computed, [asked[k] for k in members])
        at_nodes = _NodeBounds(computed, step)
        for k, trust in zip(members, answers):
            ask = asked[k]
            plus_minus = at_nodes.of(ask) if ask.selection.column.on == "shares" else trust.plus_minus
            found[k] = Certainty(plus_minus, _singular(step, ask, trust) if ask.extreme else "")
    return found


def _trusts(step: Step, computed: Computed, asked: Sequence[Ask]) -> list[Trust]:
    questions = [_at_cell(step, computed, a) for a in asked]
    if computed.surface is not None:
        return trust_on_faces(computed, computed.surface, questions, step.groups, step.threads)
    return trust_of(computed, questions, step.groups, step.threads)


def _at_cell(step: Step, computed: Computed, ask: Ask) -> Asked:
    """Return the question about a value at a cell or face; of a value at a node, about the extreme at centroids behind it."""
    selection, name = ask.selection, ask.quantity.name
    if selection.column.on == "shares":
        fields, cells = computed.fields, selection.cells
        labels = fields.components.get(name, ())
        values = one_component(fields.arrays[name], labels, ask.quantity.component, name)
        known = cells[np.isfinite(values[cells])]
        best = np.argmin if ask.smallest else np.argmax
        cell = int(known[best(values[known])]) if len(known) and ask.extreme else -1
    else:
        values, cells, cell = selection.column.values, selection.index, int(selection.index[ask.position])
    # what is no extreme is no peak either: beside an infinite strain every value is negligible
    size = step.largest_strain(selection) if ask.extreme else math.inf
    return Asked(name, values, cells, cell, ask.smallest, size)


def _singular(step: Step, ask: Ask, trust: Trust) -> str:
    if not trust.singular:
        return ""
    said = f"suspected singular: it keeps growing towards {step.node_words(trust.point)}, so with a finer mesh too"
    if trust.next_cell < 0:
        return said
    column = ask.selection.column
    cell = int(column.owners(np.array([trust.next_cell]))[0]) if column.on == "faces" else trust.next_cell
    after = f"{number(ask.unit.from_base(trust.next_value))} {unit_words(ask.unit)}".rstrip()
    return f"{said} (next peak away from it: {after}, {step.cell_words(cell)})"


def plus_minus_at(step: Step, asked: Sequence[tuple[Quantity, bool, int]]) -> list[float]:
    """Return the plus and minus of quantities at cells; of a tensor, that of the equivalent of its change."""
    found = []
    for quantity, tensor, cell in asked:
        computed = step.computed(group_of(quantity))
        if tensor:
            name = quantity.name.replace("strain", "equivalent_strain", 1)
            values = np.zeros(step.result.n_cells)
        else:
            name, values = quantity.name, step.column(quantity).values
        question = Asked(name, values, np.array([cell]), cell, size=math.inf)
        found.append(trust_of(computed, [question], step.groups, step.threads)[0].plus_minus)
    return found


class _NodeBounds:
    """Bounds of values at nodes; the error behind them is found when first asked for."""

    def __init__(self, computed: Computed, step: Step) -> None:
        self._computed, self._threads = computed, step.threads
        self._errors: dict[tuple[bool, str], Floats] = {}

    def of(self, ask: Ask) -> float:
        nodes, name = self._computed.nodes, ask.quantity.name
        assert nodes is not None
        recovered = nodes.behind(name)
        bound = bound_of(name, recovered.shares.model.poisson, self._computed.equivalent_poisson)
        if bound is None:
            return math.nan
        total = 0.0
        for base in bound.bases:
            key = recovered is nodes.of_finite, base
            if key not in self._errors:
                self._errors[key] = strain_error(recovered, self._threads, base).plus_minus_shares
            total += float(self._errors[key][ask.selection.index[ask.position]])
        return bound.of(total, float(ask.selection.values[ask.position]))
