"""What a mesh-refinement study says: as data for JSON, and as text for people."""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import PurePath
from typing import Any

from unturn._version import __version__
from unturn.mesh_study import LEVELS, Refinement
from unturn.quantities import Found
from unturn.quantity_text import Quantity
from unturn.refinement import SAFETY, Study, check_refinement
from unturn.summary import CAUTION
from unturn.summary_text import _aligned

SCHEMA = "unturn.convergence/1"


def refinement_data(r: Refinement) -> dict[str, Any]:
    """Return the study as plain data, schema ``unturn.convergence/1``."""
    return {
        "schema": SCHEMA,
        "tool": {"name": "unturn", "version": __version__},
        "meshes": [
            {"level": level, "file": m.path, "cells": m.cells, "volume": m.volume, "size": m.size, "types": m.types,
             "kind": m.kind}
            for level, m in zip(LEVELS, r.meshes)
        ],
        "safety_factor": SAFETY,
        "quantities": [_quantity_data(*parts) for parts in zip(r.quantities, r.found, r.studies)],
        "notes": list(r.notes),
        "caution": CAUTION,
    }  # fmt: skip


def _quantity_data(quantity: Quantity, found: Sequence[Found], s: Study) -> dict[str, Any]:
    return {
        "quantity": quantity.text,
        "unit": "1" if quantity.measure.unit == "strain" else quantity.measure.unit,
        "on": [
            {"value": f.value, "cell": f.cell if f.cell >= 0 else None,
             "at": None if f.at is None else [float(x) for x in f.at], "cells": f.cells, "floor": f.floor}
            for f in found
        ],
        "behaviour": s.behaviour,
        "reason": s.reason,
        "order": s.order,
        "extrapolated": s.extrapolated,
        "error": s.error,
        "grid_convergence_index": s.index if math.isfinite(s.index) else None,
        "grid_convergence_index_medium": s.index_medium if math.isfinite(s.index_medium) else None,
    }  # fmt: skip


def refinement_text(r: Refinement) -> str:
    """Return the study as text, without a line end."""
    ratios = check_refinement((r.meshes[0].size, r.meshes[1].size, r.meshes[2].size))
    rows = [
        ["mesh", *LEVELS],
        ["  file", *(PurePath(m.path).name or "(in memory)" for m in r.meshes)],
        ["  cells", *(str(m.cells) for m in r.meshes)],
        ["  size (volume/cells)^(1/dim)", *(f"{m.size:.4g}" for m in r.meshes)],
        ["  times finer than the one before", "", *(f"{x:.4g}" for x in ratios)],
    ]
    ends = []
    for quantity, found, s in zip(r.quantities, r.found, r.studies):
        strain = quantity.measure.unit == "strain"
        rows.append([quantity.text, *(_number(f.value, strain) for f in found)])
        if any(f.cell >= 0 for f in found) and quantity.form != "value":
            places = (() if f.at is None else f.at for f in found)
            rows.append(["  at x, y, z", *(", ".join(f"{x:.5g}" for x in at) for at in places)])
        ends.append((quantity, s, strain))
    lines = _aligned(rows)
    lines.append("")
    for quantity, s, strain in ends:
        lines.append(f"{quantity.text}: {_words(s, strain)}")
    lines.append("")
    if any(strain for _, _, strain in ends):
        lines.append("strain in microstrain")
    lines.append(
        f"grid convergence index: {SAFETY} times the relative change, carried on with the order (Celik et al. 2008)"
    )
    lines += [f"note: {note}" for note in r.notes]
    lines.append(CAUTION)
    return "\n".join(lines)


def _number(value: float, strain: bool) -> str:
    return f"{value * 1e6 if strain else value:.6g}"


def _rounded(value: float, strain: bool) -> str:
    return f"{value * 1e6 if strain else value:.3g}"


def _words(s: Study, strain: bool) -> str:
    if s.behaviour in ("unchanged", "below precision"):
        blur = f" +-{_rounded(s.error, strain)}" if s.error else ""
        return f"{_number(s.values[2], strain)}{blur}, {s.reason}"
    if s.behaviour != "converges":
        return f"NO ORDER, {s.reason}."
    share = f" ({100 * s.index:.3g} % of it)" if math.isfinite(s.index) else ""
    return (
        f"{_number(s.values[2], strain)} on the fine mesh, +-{_rounded(s.error, strain)}{share}; order {s.order:.3g}; "
        f"extrapolated {_number(s.extrapolated, strain)}"
    )
