"""What is asked of a result by name: a peak, a percentile or a value at a point, each from one line of text."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from typing import Literal

import numpy as np

from unturn.errors import UsageError, close_matches
from unturn.kinematics._symmetric import Floats
from unturn.measures import MEASURES, Measure

Form = Literal["peak", "lowest", "percentile", "value"]

FORMS = (
    "'peak NAME', 'lowest NAME' or 'percentile Q NAME', each with 'in REGION' or 'within R of X,Y,Z' after it where "
    "wanted, or 'value NAME at X,Y,Z'"
)
_PATTERN = re.compile(
    r"(?:(?P<form>peak|lowest|value)|percentile\s+(?P<q>\S+))\s+(?P<name>\S+)"
    r"(?:\s+in\s+(?P<region>.+)|\s+within\s+(?P<radius>\S+)\s+of\s+(?P<centre>.+)|\s+at\s+(?P<at>.+))?"
)


@dataclass(frozen=True, eq=False)
class Quantity:
    """A number to be had from a result.

    Parameters
    ----------
    text
        As the user wrote it.
    form
        What is taken over the cells.
    measure, component
        Of what; component -1 for a scalar.
    percentage
        For a percentile.
    region
        Name of a region; empty for the whole.
    point, radius
        Centre and radius of a ball that must hold the centroid of a cell; or the place of a value.
    """

    text: str
    form: Form
    measure: Measure
    component: int
    percentage: float = math.nan
    region: str = ""
    point: Floats | None = None
    radius: float = math.inf


def parse_quantity(text: str) -> Quantity:
    """Return the quantity of a text; see `FORMS`.

    NAME is a scalar measure or one with its component: ``equivalent_strain``, ``principal_strain_1``, ``strain_XX``.

    Raises
    ------
    UsageError
        The text is none of these forms, or names no measure.

    Examples
    --------
    >>> parse_quantity("peak principal_strain_1 within 5 of 10,0,0").radius
    5.0
    """
    found = _PATTERN.fullmatch(text.strip())
    if found is None:
        raise UsageError(f"--quantity {text!r} is not understood. Use {FORMS}.")
    form: Form = "percentile" if found["form"] is None else found["form"]  # type: ignore[assignment]
    if (form == "value") is not (found["at"] is not None):
        raise UsageError(
            f"--quantity {text!r}: 'value NAME' goes with 'at X,Y,Z', and nothing else does. Use {FORMS}."
        )
    measure, component = _measure(found["name"], text)
    place = found["centre"] or found["at"]
    return Quantity(
        text, form, measure, component,
        percentage=math.nan if found["q"] is None else _number(found["q"], text, 0.0, 100.0),
        region=(found["region"] or "").strip(),
        point=None if place is None else _point(place, text),
        radius=math.inf if found["radius"] is None else _number(found["radius"], text, 0.0, math.inf),
    )  # fmt: skip


def _number(word: str, text: str, low: float, high: float) -> float:
    try:
        value = float(word)
    except ValueError:
        value = math.nan
    if not low < value <= high:
        raise UsageError(f"--quantity {text!r}: {word!r} is no number above {low:g}" + (
            f" and up to {high:g}." if math.isfinite(high) else "."))  # fmt: skip
    return value


def _point(words: str, text: str) -> Floats:
    try:
        values = np.array([float(w) for w in words.split(",")])
    except ValueError:
        values = np.zeros(0)
    if len(values) not in (2, 3) or not np.isfinite(values).all():
        raise UsageError(f"--quantity {text!r}: {words!r} is no point; write X,Y,Z.")
    return np.append(values, 0.0)[:3]


def _measure(name: str, text: str) -> tuple[Measure, int]:
    if name in MEASURES and not MEASURES[name].components:
        return MEASURES[name], -1
    base, _, component = name.rpartition("_")
    if base in MEASURES and component in MEASURES[base].components:
        return MEASURES[base], MEASURES[base].components.index(component)
    known = [
        m.name if not m.components else f"{m.name}_{c}"
        for m in MEASURES.values()
        for c in m.components or ("",)
    ]
    if name in MEASURES:
        listed = ", ".join(f"{name}_{c}" for c in MEASURES[name].components)
        raise UsageError(f"--quantity {text!r}: {name} has components; name one of {listed}.")
    raise UsageError(f"--quantity {text!r}: no number is called {name!r}.{close_matches(name, known)}")
