"""What a mesh-refinement study says: as data for JSON, and as text for people."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import PurePath
from typing import Any

import numpy as np

from unturn._version import __version__
from unturn.fields import CellFields
from unturn.quantities import Found, Quantity
from unturn.refinement import SAFETY, SMALL_RATIO, Study, check_refinement, study
from unturn.summary import CAUTION, cell_counts, mesh_kind
from unturn.summary_text import _aligned

SCHEMA = "unturn.convergence/1"
_LEVELS = ("coarse", "medium", "fine")
_OTHER_PART = 0.02  # share by which the volumes of one part may differ between its meshes
_LOW_ORDER = 0.5


@dataclass(frozen=True)
class MeshSize:
    """One mesh of a study: file, cells that are computed, their volume, representative size, what they are."""

    path: str
    cells: int
    volume: float
    size: float
    types: dict[str, int]
    kind: str
    order: int


def mesh_size(fields: CellFields) -> MeshSize:
    """Return the size of a mesh: `(volume / cells)^(1/dim)` of its cells of the highest dimension.

    Parameters
    ----------
    fields
        Computed with ``diagnose=True``.
    """
    d, model = fields.diagnostics, fields.model
    assert d is not None
    counted = (d.dimension == model.dimension) & np.isfinite(d.volume)
    volume, n = float(d.volume[counted].sum()), int(counted.sum())
    size = (volume / n) ** (1.0 / model.dimension) if n else math.nan
    orders = [b.row.order for b in model.blocks if b.row is not None and b.row.dim == model.dimension]
    return MeshSize(model.result.path, n, volume, size, cell_counts(model), mesh_kind(model), min(orders))


@dataclass(frozen=True, eq=False)
class Refinement:
    """Three meshes, coarse first, and each quantity on them."""

    meshes: tuple[MeshSize, ...]
    quantities: tuple[Quantity, ...]
    found: tuple[tuple[Found, ...], ...]  # by quantity
    studies: tuple[Study, ...]
    notes: tuple[str, ...]

    @property
    def undecided(self) -> int:
        """How many quantities have no order."""
        return sum(s.behaviour not in ("converges", "unchanged") for s in self.studies)


def refinement(
    meshes: Sequence[MeshSize], quantities: Sequence[Quantity], found: Sequence[Sequence[Found]]
) -> Refinement:
    """Return the studies of quantities on three meshes.

    Raises
    ------
    UsageError
        The meshes do not get finer.
    """
    sizes = meshes[0].size, meshes[1].size, meshes[2].size
    ratios = check_refinement(sizes)
    notes = []
    if min(ratios) < SMALL_RATIO:
        notes.append(
            f"the meshes differ in size by a factor of {min(ratios):.3g} only; below {SMALL_RATIO} the index says little"
        )
    volumes = [m.volume for m in meshes]
    if max(volumes) - min(volumes) > _OTHER_PART * max(volumes):
        notes.append(
            f"the meshes have volumes of {', '.join(f'{v:.6g}' for v in volumes)}: is it the same part?"
        )
    if len({tuple(m.types) for m in meshes}) > 1:
        notes.append("the meshes have different types of elements: an order belongs to one type")
    studies = tuple(study((f[0].value, f[1].value, f[2].value), sizes) for f in found)
    order = min(m.order for m in meshes)
    for q, s in zip(quantities, studies):
        if not _LOW_ORDER <= s.order <= order + 1.5 and s.behaviour == "converges":
            notes.append(
                f"{q.text}: an order of {s.order:.3g} is far from the {order} to {order + 1} of these elements, so its index "
                "is doubtful: refine once more"
            )
    return Refinement(tuple(meshes), tuple(quantities), tuple(map(tuple, found)), studies, tuple(notes))


def refinement_data(r: Refinement) -> dict[str, Any]:
    """Return the study as plain data, schema ``unturn.convergence/1``."""
    return {
        "schema": SCHEMA,
        "tool": {"name": "unturn", "version": __version__},
        "meshes": [
            {"level": level, "file": m.path, "cells": m.cells, "volume": m.volume, "size": m.size, "types": m.types,
             "kind": m.kind}
            for level, m in zip(_LEVELS, r.meshes)
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
            {"value": f.value, "cell": f.cell if f.cell >= 0 else None, "at": [float(x) for x in f.at], "cells": f.cells}
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
        ["mesh", *_LEVELS],
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
            rows.append(["  at x, y, z", *(", ".join(f"{x:.5g}" for x in f.at) for f in found)])
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
    if s.behaviour == "unchanged":
        return f"{_number(s.values[2], strain)}, {s.reason}"
    if s.behaviour != "converges":
        return f"NO ORDER, {s.reason}."
    share = f" ({100 * s.index:.3g} % of it)" if math.isfinite(s.index) else ""
    return (
        f"{_number(s.values[2], strain)} on the fine mesh, +-{_rounded(s.error, strain)}{share}; order {s.order:.3g}; "
        f"extrapolated {_number(s.extrapolated, strain)}"
    )
