"""What a patch test found, told as findings: what must be exact, what is informative, what was not tested."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from decimal import ROUND_CEILING
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.measures import MEASURES
from unturn.summary import cell_counts, mesh_kind
from unturn.verdicts.finding import Finding, InputFile, Report, State
from unturn.verdicts.patchtest import Group, PatchTest
from unturn.verdicts.patchtest_errors import Errors, blind
from unturn.verdicts.patchtest_places import Elsewhere
from unturn.verdicts.wording import number

MOST_LEFT_OUT = 50.0
"""Percent of the cells of a type in a region above which nothing is said of it."""
LARGE = 100.0
"""Percent of the change of strain over a cell above which the error at its middle is a warning."""
_NOT_MEANT = ("skins and edges of other cells", "deleted")
_UNITS = {"strain": "microstrain", "radian": "microradian", "1": "1e-6"}


def patch_report(
    test: PatchTest, group: str, inputs: Sequence[InputFile] = (), allow_undecided: bool = False
) -> Report:
    """Return the findings of a patch test.

    Parameters
    ----------
    test
        What was found.
    group
        Name of the result file.
    inputs
        The file behind it.
    allow_undecided
        Whether a build may go on with what is undecided.
    """
    findings = [*_cells(test, group), *_orders(test, group)]
    for errors in test.errors:
        unsure = blind(errors)
        for cells in test.groups:
            findings += _of_group(test, errors, cells, unsure, group)
    for place in test.elsewhere:
        findings.append(_elsewhere(place, group))
    settings = {
        "mesh": mesh_kind(test.model),
        "cells": cell_counts(test.model),
        "regions": [r.name for r in test.regions],
        "middle": [float(x) for x in test.shapes.origin],
        "fields": [_field_data(e) for e in test.errors],
    }
    return Report("patchtest", tuple(findings), tuple(inputs), allow_undecided, tuple(_notes(test)), settings)


def _notes(test: PatchTest) -> Iterator[str]:
    model = test.model
    counts = ", ".join(f"{n} {name}" for name, n in cell_counts(model).items())
    kind = f"{mesh_kind(model)} mesh" + (" (as plane strain)" if model.plane is not None else "")
    yield f"{kind}: {counts}; the displacement of the file was not used"
    for errors in test.errors:
        source = errors.field.source
        yield f"{errors.field.name}: {errors.field.title} [{source.text} ({source.kind})]"
    yield from test.notes


def _field_data(errors: Errors) -> dict[str, Any]:
    f = errors.field
    return {
        "name": f.name,
        "title": f.title,
        "source": f.source.text,
        "source_kind": f.source.kind,
        "gradient": [[float(x) for x in row] for row in f.gradient],
        "shift": [float(x) for x in f.shift],
        "second_derivatives": None if f.curvature is None else f.curvature.tolist(),
        "stored": "float32" if f.single else "float64",
        "measures": f.measures,
    }


# --- what was tested ----------------------------------------------------------------------------------------------


def _cells(test: PatchTest, group: str) -> Iterator[Finding]:
    """Yield how many cells were not computed: of the file, and by type and region."""
    n = test.model.result.n_cells
    meant = np.ones(n, dtype=bool)
    for reason, cells in test.left_out.items():
        if reason in _NOT_MEANT or reason.startswith("vertex") or reason in test.model.result.left_out:
            meant[cells] = False
    if not meant.any():
        meant[:] = True
    yield _left_out(test, group, "tested", "cells of the file", np.flatnonzero(meant))
    for g in test.groups:
        yield _left_out(test, group, f"tested.{_of(g)}", _words(g), g.cells)


def _left_out(test: PatchTest, group: str, name: str, what: str, cells: NDArray[np.int64]) -> Finding:
    missing = cells[~test.computed[cells]]
    share = 100.0 * len(missing) / len(cells)
    reasons = (
        {r: int(np.isin(out, missing).sum()) for r, out in test.left_out.items()} if len(missing) else {}
    )
    reasons = {r: k for r, k in reasons.items() if k}
    listed = ", ".join(f"{k} {r}" for r, k in reasons.items())
    state: State = "met" if not len(missing) else "warning" if share <= MOST_LEFT_OUT else "undecided"
    message = ""
    if state != "met":
        message = f"{len(missing)} of {len(cells)} cells were not computed: {listed}"
        message += "; too many to say that the rest stands for them" if state == "undecided" else ""
    return Finding(
        name, group, f"{what}: share not computed", state, message, value=share, bound=MOST_LEFT_OUT, unit="percent",
        place=test.place(int(missing[0])) if len(missing) else {},
        details={"cells": len(cells), "left_out": reasons},
    )  # fmt: skip


def _orders(test: PatchTest, group: str) -> Iterator[Finding]:
    """Yield the cells whose nodes are in a wrong order, or may be."""
    signs = (
        ("hold the nodes of a straight cell in another order than that of a {} cell", test.shapes.reordered),
        ("have an edge that is a diagonal of a neighbour, or the other way round", test.joined),
        ("have mid-side nodes far from the middle of their edges", test.far),
    )
    for g in test.groups:
        counts = [int(mask[g.cells].sum()) for _, mask in signs]
        odd = g.cells[test.shapes.reordered[g.cells] | test.joined[g.cells] | test.far[g.cells]]
        state: State = "exceeded" if counts[0] else "undecided" if len(odd) else "met"
        found = [f"{n} {what.format(g.cell_type)}" for n, (what, _) in zip(counts, signs) if n]
        message = f"{'; '.join(found)}: {_ADVICE[state]}" if found else ""
        yield Finding(
            f"node_order.{_of(g)}", group, f"{_words(g)}: cells whose nodes are in a wrong order, or may be", state, message,
            value=float(len(odd)), bound=0.0, unit="cells", place=test.place(int(odd[0])) if len(odd) else {},
            details={"cell_type": g.cell_type, "region": g.region, "reordered": counts[0], "joined_otherwise": counts[1],
                     "far": counts[2]},
        )  # fmt: skip


_ADVICE = {
    "exceeded": "write the file again with the node order of its format",
    "undecided": "look whether the mesh is so, or the order of its nodes wrong",
}


def _of(g: Group) -> str:
    return f"{g.cell_type}.{g.region}"


def _words(g: Group) -> str:
    return f"{g.cell_type} in {g.region}" if g.region != "whole" else g.cell_type


# --- one field ----------------------------------------------------------------------------------------------------


def _of_group(
    test: PatchTest, errors: Errors, g: Group, unsure: NDArray[np.bool_], group: str
) -> Iterator[Finding]:
    cells = g.cells[test.computed[g.cells]]
    exact = errors.exact[cells]
    if exact.any():
        yield _exact(test, errors, g, cells[exact], unsure, group)
    if errors.field.curvature is not None and len(cells):
        yield _resolved(test, errors, g, cells, group)


def _exact(
    test: PatchTest, errors: Errors, g: Group, cells: NDArray[np.int64], unsure: NDArray[np.bool_], group: str
) -> Finding:
    error, bound = errors.error[cells], errors.bound[cells]
    beyond = error > bound
    if beyond.any():
        with np.errstate(divide="ignore", invalid="ignore"):
            cell = int(cells[np.argmax(np.where(beyond, error / bound, -1.0))])
    else:
        cell = int(cells[np.argmax(error)])
    doubtful = cells[unsure[cells]]
    state: State = "exceeded" if beyond.any() else "undecided" if len(doubtful) else "met"
    if state == "undecided":
        cell = int(doubtful[np.argmax(errors.bound[doubtful])])
    imposed, measure = errors.field, errors.field.measures[errors.which[cell]]
    scale = 1e6
    unit = _UNITS[MEASURES[measure].unit]
    details = {
        "field": imposed.name, "cell_type": g.cell_type, "region": g.region, "measure": measure, "cells": len(cells),
        "beyond": int(beyond.sum()), "doubtful": len(doubtful), "relative": _relative(errors, cell),
        "source": imposed.source.text, "source_kind": imposed.source.kind,
    }  # fmt: skip
    if errors.noise is not None:
        details |= _floor(errors, cells)
    return Finding(
        f"{imposed.name}.{_of(g)}", group, f"{_spoken(imposed.name)}, {_words(g)}: largest error of {measure}", state,
        _why(errors, cells, beyond, doubtful, measure), value=float(errors.error[cell]) * scale,
        bound=_two_digits(float(errors.bound[cell]) * scale, state), unit=unit, place=test.place(cell), details=details,
    )  # fmt: skip


def _two_digits(bound: float, state: State) -> float:
    """Return a bound rounded up to two digits, so that it can be read; as it is where something is beyond it."""
    return float(number(bound, ROUND_CEILING, 2)) if state == "met" and math.isfinite(bound) else bound


def _relative(errors: Errors, cell: int) -> float | None:
    """Return the error as a share of the size of the imposed gradient."""
    size = float(np.linalg.norm(errors.field.gradient))
    if errors.field.curvature is not None:
        size = 1e-3
    return float(errors.error[cell]) / size if size else None


def _floor(errors: Errors, cells: NDArray[np.int64]) -> dict[str, float]:
    assert errors.noise is not None
    floor = errors.noise[cells]
    with np.errstate(divide="ignore", invalid="ignore"):
        times = errors.error[cells] / floor
    return {
        "noise_floor_largest": 1e6 * float(floor.max()),
        "error_in_noise_floors": float(np.nanmax(times)),
        "percent_above_noise_floor": 100.0 * float(np.mean(times > 1.0)),
    }


def _why(
    errors: Errors,
    cells: NDArray[np.int64],
    beyond: NDArray[np.bool_],
    doubtful: NDArray[np.int64],
    measure: str,
) -> str:
    if beyond.any():
        what = f"{int(beyond.sum())} of {len(cells)} cells are beyond what rounding explains"
        if not np.isfinite(errors.error[cells]).all():
            what += f", some without a value of {measure}"
        if errors.field.curvature is not None:
            return f"{what}: the order of their nodes or their element type is not what the file says"
        return f"{what}: do not use this file before you know why"
    if len(doubtful):
        return (
            f"{len(doubtful)} of {len(cells)} cells are so thin, or so small beside the mesh, that rounding alone may move "
            "their strain by more than 1 %"
        )
    if errors.noise is not None:
        floor = _floor(errors, cells)
        return (
            f"at most {_few(floor['error_in_noise_floors'])} times the noise floor reported for the cell, above it in "
            f"{_few(floor['percent_above_noise_floor'])} % of the cells; the bound is what rounding of every node can do "
            "at worst"
        )
    return ""


def _resolved(test: PatchTest, errors: Errors, g: Group, cells: NDArray[np.int64], group: str) -> Finding:
    """Return how well a mesh resolves a strain that changes over each cell."""
    with np.errstate(divide="ignore", invalid="ignore"):
        share = 100.0 * errors.error[cells] / test.shapes.change[cells]
    share[np.isnan(share)] = 0.0
    worst = int(np.argmax(share))
    value = float(share[worst])
    median, most = np.percentile(share, [50.0, 99.0])
    large = value > LARGE
    message = f"informative: median {_few(median)}, 99 % of the cells below {_few(most)} percent of the change over a cell"
    if large:
        message = (
            f"in {int((share > LARGE).sum())} of {len(cells)} cells the error is larger than the change of strain over the "
            "cell: look at their shape and the order of their nodes"
        )
    return Finding(
        f"resolution.{_of(g)}", group, f"strain gradient, {_words(g)}: largest error at the middle of a cell",
        "warning" if large else "met", message, value=value if math.isfinite(value) else None, unit="percent",
        place=test.place(int(cells[worst])),
        details={"cell_type": g.cell_type, "region": g.region, "cells": len(cells), "median": float(median),
                 "percentile_99": float(most), "informative": True},
    )  # fmt: skip


def _few(value: float) -> str:
    return number(float(value), digits=2) if abs(value) > 1e-6 else "0"


def _spoken(name: str) -> str:
    return name.replace("_", " ")


def _elsewhere(found: Elsewhere, group: str) -> Finding:
    return Finding(
        found.name, group, found.title, "met", found.message, value=found.value, unit=found.unit, place=found.place,
        details={"informative": True, **found.details},
    )  # fmt: skip
