"""How a result is read, as written in a TOML file: the options of `unturn strain` by the same names."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

from unturn import toml_kinds as k
from unturn.pipeline import StrainOptions
from unturn.toml_kinds import Key

READING_KEYS = (
    Key("displacement_scale", k.POSITIVE, "factor from the displacement's unit to the mesh's", 1.0),
    Key("coordinates", k.choice_kind(("reference", "deformed")), "whether the coordinates are already moved", "reference"),
    Key("plane", k.choice_kind(("strain", "stress", "axisymmetric")), "what a plane mesh assumes of the direction across it"),
    Key("axis", k.choice_kind(("x", "y")), "axis of revolution", "y"),
    Key("poisson", k.NUMBER, "Poisson's ratio for plane stress and the thickness of surfaces"),
    Key("surface_poisson", k.NUMBER, "Poisson's ratio of solids, for the strain across their free faces"),
    Key("equivalent_poisson", k.NUMBER, "the other form of the equivalent strain"),
    Key("remove_rigid", k.TEXT, "take the rigid motion of these out first", "none"),
    Key("rigid_to", k.TEXT, "take it out of this region instead"),
    Key("rigid_axis", k.TEXT, "a known axis instead of the full fit"),
    Key("thermal_expansion", k.either_kind(k.NUMBER, k.TEXT), "free thermal strain to take out"),
    Key("temperature", k.TEXT, "array of temperature"),
    Key("reference_temperature", k.NUMBER, "temperature without thermal strain"),
    Key("recovery", k.choice_kind(("patch", "extrapolate", "average")), "how the gradient gets to nodes", "patch"),
    Key("zero_step", k.POSITION, "step from which displacements are measured"),
    Key("alive", k.TEXT, "cell array; cells where it is zero do not count"),
    Key("skin", k.BOOLEAN, "also compute cells whose nodes all belong to one larger cell", False),
)  # fmt: skip
"""Keys of ``[reading]``: the options of ``unturn strain`` by the same names."""

DISPLACEMENT_KEY = Key(
    "displacement", k.TEXT, 'the point array that holds the displacement, or three scalars: "ux,uy,uz"'
)
SOLVE_KEY = Key("solve", k.choice_kind(("linear", "nonlinear", "unknown")), "what the solve was", "unknown")
BASE_KEY = Key(
    "base", k.choice_kind(("small", "green-lagrange", "hencky", "biot", "almansi")),
    "replace each small measure by its counterpart of this base", "small",
)  # fmt: skip
FRAME_KEY = Key("frame", k.TEXT, "axes of the components")


def options_of(reading: Mapping[str, Any]) -> tuple[StrainOptions, int | None]:
    """Return the options of a table that was read, and the zero step."""
    names = [n for n in reading if n not in ("zero_step", "surface_poisson")]
    return replace(StrainOptions(), **{n: reading[n] for n in names}), reading.get("zero_step")
