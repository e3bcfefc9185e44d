"""What an envelope says, as data for JSON."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from unturn._version import __version__
from unturn.numbering import element_numbers, node_numbers
from unturn.states import Envelope, Extreme, Judged
from unturn.summary import CAUTION, cell_counts, equivalent_form, mesh_kind
from unturn.trusted import node_of

SCHEMA = "unturn.envelope/1"


def envelope_data(envelope: Envelope, files: Sequence[str]) -> dict[str, Any]:
    """Return the envelope as plain data, schema ``unturn.envelope/1``: extremes by region, not the arrays."""
    model, strain = envelope.model, envelope.options.strain
    result = model.result
    return {
        "schema": SCHEMA,
        "tool": {"name": "unturn", "version": __version__},
        "files": list(files),
        "kind": envelope.options.kind,
        "states": [
            {
                "number": k,
                "name": s.name,
                "time": s.time,
                "factors": None if s.factors is None else dict(s.factors),
                "failed": str(envelope.failures[k]) if k in envelope.failures else None,
            }
            for k, s in enumerate(envelope.states)
        ],
        "mesh": {
            "points": result.n_points,
            "cells": result.n_cells,
            "types": cell_counts(model),
            "kind": mesh_kind(model),
        },
        "displacement": model.displacement.name,
        "solve": strain.solve,
        "location": strain.at,
        "equivalent_strain": equivalent_form(strain.equivalent_poisson),
        "arrays": list(envelope.arrays),
        "regions": [
            _region_data(envelope, r, extremes) for r, extremes in zip(envelope.judged, envelope.extremes)
        ],
        "suspected_singular": _suspected(envelope),
        "left_out": {reason: len(cells) for reason, cells in envelope.left_out.items()},
        "notes": list(envelope.notes),
        "units": {"strain": "1", "rotation": "radian", "rate": "1 / time of the file", "volume": "length of the file"},
        "caution": CAUTION,
    }  # fmt: skip


def _region_data(envelope: Envelope, r: Judged, extremes: Sequence[Extreme]) -> dict[str, Any]:
    cells, v = r.region.cells, r.verdict
    found: dict[str, Any] = {}
    for e in extremes:
        entry = {
            "value": e.value,
            "plus_minus": e.trust.plus_minus,
            "suspected_singular": e.trust.singular,
            **place_data(envelope, e.place),
            "states": list(e.states),
            "times": [envelope.states[k].time for k in e.states],
        }
        if e.of.which == "maximum":
            entry["99.9_percent_of_volume_below"] = e.percentile
        found.setdefault(e.name, {})[e.of.which] = entry
    return {
        "name": r.region.name,
        "origin": r.region.origin,
        "cells": len(cells),
        "volume": float(np.nansum(envelope.volume[cells])),
        "verdict": {
            "small_strain": v.level,
            "state": r.state,
            "largest_error_over_size": v.worst,
            "largest_rotation_degrees": v.largest_rotation,
            "action": v.action,
        },
        "noise_floor": v.noise,
        "extremes": found,
    }


def place_data(envelope: Envelope, place: int) -> dict[str, Any]:
    """Return our position of a place, the solver's number where the file has them, and the coordinates."""
    found: dict[str, Any] = dict.fromkeys(("cell", "element", "point", "node", "at"))
    if place >= 0:
        position = int(envelope.places.position[place])
        ours, theirs = ("point", "node") if envelope.places.on == "point" else ("cell", "element")
        found[ours] = position
        if envelope.numbers is not None:
            found[theirs] = int(envelope.numbers.numbers[position])
        found["at"] = [float(x) for x in envelope.places.at[place]]
    return found


def element_of(envelope: Envelope, cell: int) -> int | None:
    """Return the solver's number of a cell, where the file has them."""
    numbering = element_numbers(envelope.model.result)
    return None if numbering is None or cell < 0 else int(numbering.numbers[cell])


def _suspected(envelope: Envelope) -> list[dict[str, Any]]:
    """Return the extremes that are suspected singular, region by region."""
    nodes = node_numbers(envelope.model.result)
    return [
        {
            "region": r.region.name,
            "array": e.name,
            "extreme": e.of.which,
            "states": list(e.states),
            "value": e.value,
            "plus_minus": e.trust.plus_minus,
            "point": e.trust.point,
            "node": node_of(nodes, e.trust.point),
            "growth": e.trust.growth,
            "next": _next(envelope, e),
        }
        for r, extremes in zip(envelope.judged, envelope.extremes)
        for e in extremes
        if e.trust.singular
    ]


def _next(envelope: Envelope, e: Extreme) -> dict[str, Any] | None:
    t = e.trust
    if t.next_cell < 0:
        return None
    element = element_of(envelope, t.next_cell)
    return {"cell": t.next_cell, "element": element, "value": t.next_value, "plus_minus": t.next_plus_minus}
