"""The summary for people: plain, aligned, ten seconds to read."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Callable, Sequence
from pathlib import PurePath

import numpy as np

from unturn.agreement import Agreement
from unturn.elsewhere import ElsewhereExtreme
from unturn.fields import CellFields
from unturn.measures import MEASURES
from unturn.options import OWN_MESH
from unturn.rigid import Removal
from unturn.summary import (
    CAUTION,
    MOST_SHOWN,
    RegionSummary,
    Summary,
    cell_counts,
    equivalent_form,
    foremost,
    leading,
    mesh_kind,
)
from unturn.trial import Trial
from unturn.trusted import BASE_WORDS, Growth, Which, table_rows
from unturn.verdict import Solve, Verdict

_MOST_VERDICTS = 12
_LINE = 120  # where sentences are broken


def summary_text(summary: Summary) -> str:
    """Return the summary as text, without a line end."""
    lines = [
        *_head(summary),
        *_verdicts(summary),
        "",
        *_table(summary),
        *_elsewhere(summary),
        *_tail(summary),
    ]
    return "\n".join(lines)


_TOLD = (
    "base", "zero_step", "coordinates", "displacement_scale", "remove_rigid", "rigid_to", "rigid_axis", "frame",
    "thermal_expansion", "temperature", "reference_temperature", "alive",
)  # fmt: skip


def _head(summary: Summary) -> list[str]:
    model, options = summary.fields.model, summary.options
    result = model.result
    parts = [PurePath(result.path).name or "(in memory)"]
    if result.steps is not None:
        value = result.steps.values[result.steps.current]
        parts.append(f"step {result.steps.current} (of 0 to {len(result.steps.values) - 1}), t = {value:g}")
    types = ", ".join(f"{n} {name}" for name, n in cell_counts(model).items())
    n = len(summary.regions)
    parts += [f"{result.n_cells} cells ({types})", f"{n} region{'s' * (n != 1)}"]
    parts.append(f"displacement '{model.displacement.name}' ({model.displacement.why})")
    solve = "not stated" if options.solve == "unknown" else f"stated {options.solve}"
    lines = ["   ".join(parts), f"solve: {solve}   {kind_text(summary)}"]
    asked = [f"--{k.replace('_', '-')} {v}" for k, v in summary.request.items() if k in _TOLD]
    if asked:
        lines.append("asked: " + ", ".join(asked))
    return lines + [agreement_text(a) for a in summary.agreements]


def agreement_text(a: Agreement) -> str:
    """Return how the solver's own strain array compares with ours."""
    where = "cells" if a.association == "cell" else "nodes, averaged to cells"
    start = f"solver's strain array '{a.array}' ({where}):"
    if not a.guess:
        return f"{start} not compared, there is no strain in both"
    part = _ratio(a.difference) if math.isfinite(a.difference) else "everything"
    said = "equal to ours within" if a.agrees else "DIFFERS from ours by"
    return f"{start} {said} {part} (read as {a.guess})"


def kind_text(summary: Summary) -> str:
    """Return what kind of mesh it is, and what is assumed of the directions that it does not hold."""
    model = summary.fields.model
    kind = mesh_kind(model)
    plane = model.plane
    if plane is not None:
        axes = "xyz".replace("xyz"[plane.normal], "")
        said = f"plane mesh in {axes}, third direction "
        if plane.model is None:
            return said + "not stated: the strain across the plane is NaN"
        extra = {
            "stress": f", nu = {plane.poisson}",
            "axisymmetric": f" about {'xyz'[plane.axis]}",
            "strain": "",
        }
        return said + f"plane {plane.model}{extra[plane.model]}".replace("plane axi", "axi")
    if kind == "surface":
        nu = model.poisson
        across = "" if nu is None else f"; finite measures: thickness of plane stress, nu = {nu}"
        return f"surface mesh: in-plane strain of the mid-surface only{across}"
    if kind == "line":
        return "line mesh: axial strain only; twist and bending are not in the nodal displacements"
    return "solid mesh"


def _verdicts(summary: Summary) -> list[str]:
    if summary.options.mode:
        return ["mode shape: amplitude is arbitrary, so nothing is judged; values are per unit amplitude"]
    shown = sorted(summary.regions, key=lambda r: -r.verdict.worst if math.isfinite(r.verdict.worst) else 0.0)
    lines = ["small strain" + (", rigid motion taken out as stated below" if summary.removals else "")]
    lines += _aligned([["  " + r.region.name, *_words(r.verdict)] for r in shown[:_MOST_VERDICTS]], left=True)
    if len(shown) > _MOST_VERDICTS:
        lines.append(f"  {len(shown) - _MOST_VERDICTS} more regions with smaller errors")
    if summary.finite_only:
        return [*lines, *_advice(_FINITE_ONLY[summary.options.solve])]
    tried = [(r.region.name, trial) for r in shown[:_MOST_VERDICTS] for trial in r.trials]
    lines += [tried_text(name, trial, summary.options.solve) for name, trial in tried]
    by_action: dict[str, list[str]] = {}
    for r in shown:
        if r.verdict.action:
            by_action.setdefault(r.verdict.action, []).append(r.region.name)
    for action, names in by_action.items():
        listed = ", ".join(names[:4]) + (f" and {len(names) - 4} more" if len(names) > 4 else "")
        lines += _advice(f"{listed}: {action}")
    return lines


_FINITE_ONLY: dict[Solve, str] = {
    "nonlinear": "that is for the small strain; the arrays that are written are finite measures, which contain no turning",
    "unknown": "that is for the small strain; the arrays that are written are finite measures, which contain no turning "
    "but are real only if the solve was geometrically nonlinear (say which with --solve)",
}
"""What a verdict on the small strain means where only finite measures are asked for."""


def _advice(sentence: str) -> list[str]:
    return textwrap.wrap(
        sentence,
        _LINE,
        initial_indent="  -> ",
        subsequent_indent="     ",
        break_on_hyphens=False,
        break_long_words=False,
    )


def tried_text(region: str, trial: Trial, solve: Solve) -> str:
    """Return what a trial leaves, and the option that does it when that helps."""
    supposed = "" if solve == "nonlinear" else " (if the solve was nonlinear)"
    peak = "" if math.isnan(trial.peak) else f", largest equivalent {_micro(trial.peak)} microstrain"
    left = f"error left {_of_its_strain(trial.left)}{peak}"
    return f"  tried{supposed}: {trial.what}, {left}" + (
        f" -> {trial.option}" if trial.helps else ": not enough"
    )


def _words(v: Verdict) -> tuple[str, str]:
    turns = f"turns up to {_degrees(v.largest_rotation)} degrees"
    worst = _of_its_strain(v.worst)
    return {
        "not judged": ("not judged", "no cell was computed"),
        "no strain": ("no strain", f"none above the stored precision; {turns}"),
        "holds": ("holds", f"{turns}, error at most {worst}"),
        "marginal": (
            "MARGINAL",
            f"{turns}, error up to {worst}, above 1 % in {_share(v.share_marginal)} of the volume",
        ),
        "does not hold": (
            "DOES NOT HOLD",
            f"{turns}, error up to {worst}, above 10 % in {_share(v.share_broken)} of the volume",
        ),
    }[v.level]


def _degrees(value: float) -> str:
    if value < 1e-6:
        return "0"
    return f"{value:.2g}" if value < 10 else f"{value:.1f}"


def _ratio(value: float) -> str:
    if value < 1e-6:
        return "0 %"
    if value < 0.995:
        return f"{100 * value:.2g} %"
    return "100 %" if value < 1 else f"{value:.3g} x"


def _of_its_strain(value: float) -> str:
    return _ratio(value) + (" of its strain" if value < 1 else " its strain")


def _share(value: float) -> str:
    return f"{100 * value:.2g} %" if value < 0.995 else f"{100 * value:.0f} %"


_FINITE_ENDS = tuple(
    f"{base}{end}" for base in BASE_WORDS if base not in ("", "_mechanical") for end in ("", "_1", "_3")
)


_BESIDE = ("strain_error", "strain_jump", "equivalent_strain_increment", "accumulated")
"""Rows that are not values of the strain of this step: no bound of theirs is known, and no error that turning makes."""


def _rows(summary: Summary, shown: Sequence[RegionSummary]) -> list[tuple[str, str, Which]]:
    """Return label, statistics name and which extreme of the rows of the table."""
    rows = table_rows(shown[0].statistics, summary.fields.components.get("strain", ()))
    return [
        (label, name, which)
        for label, name, which in rows
        if not _always_zero(name, shown) and any(math.isfinite(r.statistics[name].maximum) for r in shown)
    ]


def _always_zero(name: str, shown: Sequence[RegionSummary]) -> bool:
    """Return whether a component is zero by what the mesh is: the shear across a plane."""
    return name.startswith("strain_") and all(
        r.statistics[name].minimum == 0 == r.statistics[name].maximum for r in shown
    )


def _table(summary: Summary) -> list[str]:
    shown = foremost(summary.regions)
    unit = "microstrain" + (" per unit amplitude" if summary.options.mode else "")
    digits = _digits(summary)
    rows: list[list[str]] = [[unit, *(r.region.name for r in shown)]]
    for label, name, which in _rows(summary, shown):
        rows.append([label, *(_extreme(r, name, which) for r in shown)])
        at = f"at_{which}"
        rows.append(["  where", *(_where(getattr(r.statistics[name], at), summary) for r in shown)])
        rows.append(
            ["  at x, y, z", *(_position(getattr(r.statistics[name], at), summary, digits) for r in shown)]
        )
        if not summary.options.mode and not name.endswith(_FINITE_ENDS) and not name.startswith(_BESIDE):
            rows.append(
                ["  error there", *(_error(getattr(r.statistics[name], at), r, summary) for r in shown)]
            )
    if any(math.isfinite(_percentile(r)) for r in shown):
        rows.append(
            ["99.9 % of volume below" + _base_words(shown[0]), *(_micro(_percentile(r)) for r in shown)]
        )
    for label, name, which in _FACTORS:
        if name in shown[0].statistics:
            rows.append([label, *(_factor(r, name, which) for r in shown)])
    for name in shown[0].error_percent if summary.elsewhere is None else ():
        words = BASE_WORDS[name.removeprefix("strain_error")]
        rows.append(
            [f"estimated error of the strain{words}", *(_percent(r.error_percent[name]) for r in shown)]
        )
    left = " left" if summary.removals else ""
    rows.append([f"largest rotation{left}, degree", *(_rotation(r) for r in shown)])
    lines = _aligned(rows)
    if len(shown) < len(summary.regions):
        rest = len(summary.regions) - len(shown)
        lines.append(f"{rest} more regions with smaller peaks: all are in --json; --region NAME shows one")
    return lines + _suspected(summary, "cells", shown)


def _extreme(r: RegionSummary, name: str, which: Which) -> str:
    value = getattr(r.statistics[name], which)
    return _micro(value) if name.startswith(_BESIDE) else _bounded(value, r.plus_minus(name, which))


def _bounded(value: float, plus_minus: float) -> str:
    return f"{_micro(value)} +-{_above(plus_minus * 1e6)}" if math.isfinite(value) else "-"


def _rotation(r: RegionSummary) -> str:
    bound = math.degrees(r.plus_minus("angle_of_turn", "maximum"))
    return f"{_degrees(r.verdict.largest_rotation)} +-{_above(bound)}"


def _suspected(summary: Summary, location: str, shown: Sequence[RegionSummary]) -> list[str]:
    """Return a line for each peak of the table that is suspected singular, and how many there are in other regions."""
    if not shown:
        return []
    names = [r.region.name for r in shown]
    in_table = {(name, which) for _, name, which in _rows(summary, shown)}
    here = [
        g
        for g in summary.growths
        if g.location == location and (location != "cells" or (g.array, g.which) in in_table)
    ]
    lines = [_growth(g, summary) for g in here if g.region in names]
    others = len({g.region for g in here if g.region not in names})
    if others:
        lines.append(f"suspected singular too: peaks of {others} more region{'s' * (others > 1)}, see --json")
    return lines


def _growth(g: Growth, summary: Summary) -> str:
    t = g.trust
    after = "none is found away from it"
    if t.next_cell >= 0:
        after = (
            f"next away from it {_bounded(t.next_value, t.next_plus_minus)} in {_where(t.next_cell, summary)}"
        )
    return (
        f"suspected singular, {g.region}: {g.label} keeps growing towards {_point(t.point, g.node)}; {after}"
    )


def _elsewhere(summary: Summary) -> list[str]:
    """Return the extremes at nodes or on free surfaces, region by region, and what is suspected of them."""
    found = summary.elsewhere
    if found is None:
        return []
    named = {e.region for e in found.extremes} | set(found.error_percent or ())
    ranked = [r for r in foremost(summary.regions, len(summary.regions)) if r.region.name in named]
    shown = ranked[:MOST_SHOWN]
    of_region = [[e for e in found.extremes if e.region == r.region.name] for r in shown]
    labels = list(dict.fromkeys(e.label for e in found.extremes))
    digits = _digits(summary)
    rows = [[f"microstrain at {found.title}", *(r.region.name for r in shown)]]
    for label in labels:
        each = [next((e for e in extremes if e.label == label), None) for extremes in of_region]
        rows.append([label, *("-" if e is None else _bounded(e.value, e.plus_minus) for e in each)])
        rows.append(["  where", *(_spot(e) for e in each)])
        rows.append(["  at x, y, z", *("-" if e is None else _coordinates(e.at, digits) for e in each)])
    if found.error_percent is not None:
        errors = (_percent(found.error_percent[r.region.name]) for r in shown)
        rows.append(["estimated error of the strain", *errors])
    lines = ["", *_aligned(rows)]
    if found.border is not None:
        jump, border = found.border.jump, found.border
        lines.append(
            f"largest jump at a border: {_micro(jump.value)} microstrain (norm of the difference) between "
            f"{jump.regions[0]} and {jump.regions[1]} at {_point(jump.point, border.node)}, "
            f"{_coordinates(border.at, digits)}"
        )
    if len(shown) < len(ranked):
        lines.append(
            f"{len(ranked) - len(shown)} more regions, whose peaks at cells are smaller: all are in --json"
        )
    return [*lines, *_suspected(summary, found.title, shown), *found.notes]


def _percent(value: float) -> str:
    return f"{value:.2g} %" if math.isfinite(value) else "-"


def _point(point: int, node: int | None) -> str:
    return f"point {point}" if node is None else f"node {node} (point {point})"


def _spot(e: ElsewhereExtreme | None) -> str:
    if e is None:
        return "-"
    point = e.place.get("point")
    if point is not None:
        return _point(point, e.place["node"])
    number = e.place["element"]
    return f"cell {e.place['cell']}" if number is None else f"element {number} (cell {e.place['cell']})"


def _coordinates(at: Sequence[float], digits: int) -> str:
    return ", ".join(f"{x + 0.0:.{digits}f}" if digits < 9 else f"{x:.4g}" for x in at)


_FACTORS: tuple[tuple[str, str, Which], ...] = (
    ("det F, smallest", "det_f", "minimum"),
    ("det F, largest", "det_f", "maximum"),
    ("stretch, smallest", "stretch_3", "minimum"),
    ("stretch, largest", "stretch_1", "maximum"),
)


def _factor(r: RegionSummary, name: str, which: Which) -> str:
    return f"{getattr(r.statistics[name], which):.5g} +-{_above(r.plus_minus(name, which))}"


def _percentile(r: RegionSummary) -> float:
    name = leading(r)
    return math.nan if name == "angle_of_turn" else r.statistics[name].percentiles.get(99.9, math.nan)


def _base_words(r: RegionSummary) -> str:
    return BASE_WORDS.get(leading(r).removeprefix("equivalent_strain"), "")


def _micro(value: float) -> str:
    if not math.isfinite(value):
        return "-"
    micro = value * 1e6
    if abs(micro) < 1e-6:
        return "0"
    return f"{micro:.0f}" if abs(micro) >= 100 else f"{micro:.3g}"


def _above(value: float, least: float = 1e-6) -> str:
    """Return a bound with two digits, never rounded down; less than `least` is nothing.

    Examples
    --------
    >>> _above(1234.0), _above(40.0), _above(0.0731), _above(0.0)
    ('1300', '40', '0.074', '0')
    """
    if not math.isfinite(value):
        return " -"
    if value < least:
        return "0"
    unit = 10.0 ** (math.floor(math.log10(value)) - 1)
    rounded = math.ceil(value / unit * (1.0 - 1e-12)) * unit
    return f"{rounded:.0f}" if rounded >= 10 else f"{rounded:.2g}"


def _where(cell: int, summary: Summary) -> str:
    if cell < 0:
        return "-"
    if summary.numbers is None:
        return f"cell {cell}"
    return f"element {summary.numbers.numbers[cell]} (cell {cell})"


def extent_of(summary: Summary) -> float:
    """Return the largest extent of the model along an axis."""
    points = summary.fields.model.points
    return float(np.nanmax(np.nanmax(points, axis=0) - np.nanmin(points, axis=0)))


def _digits(summary: Summary) -> int:
    """Return how many decimals tell a position to a ten-thousandth of the model's size."""
    extent = extent_of(summary)
    return max(0, 4 - math.ceil(math.log10(extent))) if 0 < extent < math.inf else 3


def _position(cell: int, summary: Summary, digits: int) -> str:
    d = summary.fields.diagnostics
    if cell < 0 or d is None:
        return "-"
    return _coordinates(d.centroid[cell], digits)


def _error(cell: int, r: RegionSummary, summary: Summary) -> str:
    d = summary.fields.diagnostics
    if cell < 0 or d is None or not r.verdict.size > 0:
        return "-"
    return _ratio(float(d.error[cell]) / r.verdict.size)


def _aligned(rows: list[list[str]], left: bool = False) -> list[str]:
    widths = [max(len(row[k]) for row in rows) for k in range(len(rows[0]))]
    other = str.ljust if left else str.rjust
    pad: list[Callable[[str, int], str]] = [str.ljust, *[other] * (len(widths) - 1)]
    return ["  ".join(p(cell, w) for p, cell, w in zip(pad, row, widths)).rstrip() for row in rows]


_PLUS_MINUS = (
    "+- is estimated from the elements around; at cells it covers the whole element, not its centroid alone"
)


def _tail(summary: Summary) -> list[str]:
    fields, options = summary.fields, summary.options
    lines = [_PLUS_MINUS]
    values = "values of the table" if summary.request.get("at") in ("nodes", *OWN_MESH) else "values"
    values += f" at element {_location(options.at)}; shear is tensor shear"
    if any("equivalent" in name for name in fields.arrays):
        form = equivalent_form(options.equivalent_poisson)
        if any(name.endswith("_mechanical") for name in fields.arrays):
            form += " (mechanical: of the total less the free thermal strain)"
        lines.append(f"equivalent = {form}; {values}")
    else:
        lines.append(values)
    lines += _frame(fields)
    lines += _removals(summary)
    left = ", ".join(f"{len(cells)} {reason}" for reason, cells in fields.left_out.items())
    noise = max((r.verdict.noise for r in summary.regions), default=math.nan)
    floor = "below 1e-6" if noise < 1e-12 else f"+-{_one_digit(noise * 1e6)}"
    precision = f"; stored precision {floor} microstrain" if math.isfinite(noise) else ""
    lines.append(f"left out: {left or 'no cell'}{precision}")
    if summary.numbers is not None:
        lines.append(
            f"element numbers are those of '{summary.numbers.name}'; cell = zero-based position in the file"
        )
    else:
        lines.append("cell = zero-based position in the file")
    for dimension, n in summary.other_dimensions.items():
        lines.append(f"{n} cells of dimension {dimension} are computed and written, but not in this table")
    lines += [f"note: {note}" for note in fields.notes]
    lines += [f"WARNING: {warning}" for warning in summary.warnings]
    lines.append(CAUTION)
    return lines


def _one_digit(value: float) -> str:
    """Return a positive number with one digit, and no power of ten where it is not small.

    Examples
    --------
    >>> _one_digit(172.0), _one_digit(0.034), _one_digit(2e-5)
    ('200', '0.03', '2e-05')
    """
    rounded = f"{value:.1g}"
    return f"{float(rounded):.0f}" if value >= 1 else rounded


def _frame(fields: CellFields) -> list[str]:
    named = {
        names: None
        for name, names in fields.components.items()
        if name in MEASURES and names != MEASURES[name].components
    }
    if not named:
        return []
    listed = "; ".join(", ".join(names) for names in named)
    return [f"components are in the frame that was asked for: {listed}"]


def _removals(summary: Summary) -> list[str]:
    """Return what was taken out: two lines a part, and of many parts only those that turn most."""
    if not summary.removals:
        return []
    order = sorted(summary.removals, key=lambda r: -float(np.linalg.norm(r.motion.rotation)))
    shown = summary.removals if len(order) <= MOST_SHOWN else order[:MOST_SHOWN]
    lines = [line for r in shown for line in removed_text(r, extent_of(summary))]
    if len(shown) < len(order):
        lines.append(
            f"rigid motion taken out of {len(order) - len(shown)} more that turn less: all are in --json"
        )
    lines.append("where it was taken out, strain is in the axes of the undeformed part")
    return lines


def removed_text(r: Removal, extent: float) -> list[str]:
    """Return the rigid motion that was taken out; numbers that are nothing beside the model's size are zero."""
    m = r.motion
    turn = np.degrees(m.rotation)
    fits = {"linearised": "linearised fit", "finite": "best-fit rotation"}
    over = "" if r.fitted == r.applied else f" (as fitted over {r.fitted})"
    other = "" if r.other is None else f" ({fits[r.other.fit]}: {r.other.residual:.3g})"
    angle = float(np.linalg.norm(turn))
    return [
        f"rigid motion taken out of {r.applied}{over}, {fits[m.fit]}: {0.0 if angle < 1e-9 else angle:.6g} degrees, "
        f"rotation vector {_three(turn, 1e3)} degrees",
        f"  translation {_three(m.translation, extent)} of the centre {_three(m.center, extent)}; "
        f"RMS displacement left {m.residual:.3g}{other}",
    ]


def _three(values: np.ndarray, size: float) -> str:
    return "(" + ", ".join("0" if abs(v) <= 1e-12 * size else f"{v:.6g}" for v in values) + ")"


def _location(at: str) -> str:
    return {"centroid": "centroids", "mean": "means over the volume"}.get(at, at)
