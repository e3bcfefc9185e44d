"""The plan of a report that was asked for without one, as a text to start from."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import fields
from pathlib import PurePath
from typing import Any

from unturn.model import Model
from unturn.options import StrainOptions
from unturn.pictures.plan import PLAN_READING_KEYS, SCHEMA
from unturn.summary import mesh_kind
from unturn.verdicts.wording import clean

_NOT_READ = ("measures", "at", "threads", "surface", "borders", "faces", "between_regions")


def plan_text(
    name: str, model: Model, options: StrainOptions, zero_step: int | None, report: Mapping[str, Any]
) -> str:
    """Return a plan, TOML, of what is sensible for a model.

    Parameters
    ----------
    name
        Of the result.
    model
        What it holds.
    options, zero_step
        How it is read.
    report
        Keys of ``[report]`` that were asked for.
    """
    lines = [
        "# Plan of a report (unturn report) and of its pictures (unturn picture --plan).",
        f"schema = {_value(SCHEMA)}",
        f"title = {_value('Strain in ' + clean(PurePath(name).name or 'a result'))}",
        "",
        "[report]",
        *(f"{key} = {_value(value)}" for key, value in report.items()),
        *(['measures = ["strain", "rotation"]'] if _flat(model) else []),
        "",
        "[reading]",
        *(f"{key} = {_value(value)}" for key, value in _reading(options, zero_step).items()),
    ]
    for picture in _pictures(model):
        lines += ["", "[[pictures]]", *(f"{key} = {_value(value)}" for key, value in picture.items())]
    return "\n".join(lines) + "\n"


def _reading(options: StrainOptions, zero_step: int | None) -> dict[str, Any]:
    """Return the keys of the reading that are not as they are without being said."""
    usual, known = StrainOptions(), [key.name for key in PLAN_READING_KEYS]
    found = {
        f.name: getattr(options, f.name)
        for f in fields(options)
        if f.name in known and getattr(options, f.name) != getattr(usual, f.name)
    }
    return {"solve": options.solve, **found, **({} if zero_step is None else {"zero_step": zero_step})}


def _pictures(model: Model) -> Sequence[dict[str, Any]]:
    """Return a whole view and a close-up of the number that matters most, and where the model turns."""
    if _flat(model):
        assert model.plane is not None
        first, second = (f"strain_{'XYZ'[k] * 2}" for k in range(3) if k != model.plane.normal)
        return (
            {"name": "first", "measure": first},
            {"name": "second", "measure": second},
            {"name": "turning", "measure": "rotation_angle"},
        )
    main = "equivalent_strain" if mesh_kind(model) != "line" else "principal_strain_1"
    return (
        {"name": "whole", "measure": main},
        {"name": "peak", "measure": main, "close_up": "largest", "title": "Around the largest value"},
        {"name": "stretch", "measure": "principal_strain_1", "range": "percentile 99.9"},
        {"name": "turning", "measure": "rotation_angle"},
    )


def _flat(model: Model) -> bool:
    """Return whether nothing is known of the direction across a plane mesh."""
    return model.plane is not None and model.plane.model is None


def _value(value: Any) -> str:
    """Return a value as TOML writes it: text with the escapes of JSON, which are those of TOML."""
    if isinstance(value, list | tuple):
        return f"[{', '.join(map(_value, value))}]"
    return json.dumps(value, ensure_ascii=False).replace("\x7f", r"\u007f")
