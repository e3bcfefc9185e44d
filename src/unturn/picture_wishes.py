"""What a picture is asked for in short texts: camera, close-up, cut, colour range."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any, Literal

from unturn.toml_kinds import Kind, Wrong

Three = tuple[float, float, float]

# name -> (from the model towards the eye, up)
DIRECTIONS: dict[str, tuple[Three, Three]] = {
    "front": ((0, -1, 0), (0, 0, 1)),
    "back": ((0, 1, 0), (0, 0, 1)),
    "left": ((-1, 0, 0), (0, 0, 1)),
    "right": ((1, 0, 0), (0, 0, 1)),
    "top": ((0, 0, 1), (0, 1, 0)),
    "bottom": ((0, 0, -1), (0, 1, 0)),
}
"""The named directions: z is up, the front looks along y."""


@dataclass(frozen=True)
class CameraWish:
    """A view that is asked for.

    Parameters
    ----------
    direction, up
        From the model towards the eye, and upwards in the picture; no unit vectors, not at right angles.
    point
        What is seen in the middle; None: the middle of the model.
    width
        Length that the picture spans beside the legend; None: the model fits.
    """

    direction: Three
    up: Three
    point: Three | None = None
    width: float | None = None


@dataclass(frozen=True)
class CloseUp:
    """What is looked at closely: an extreme, a region, a cell by its number, or a point; and the length across."""

    what: Literal["largest", "smallest", "region", "element", "point"]
    name: str = ""
    point: Three | None = None
    width: float | None = None


@dataclass(frozen=True)
class CutPlane:
    """A plane in undeformed coordinates; `point` None: through the middle of the model."""

    normal: Three
    point: Three | None
    text: str


@dataclass(frozen=True)
class RangeWish:
    """A colour range: ``auto``, ``full``, ``fixed``, ``percentile`` or ``shared``."""

    how: Literal["auto", "full", "fixed", "percentile", "shared"]
    low: float = 0.0
    high: float = 0.0
    percentage: float = 100.0


def _numbers(words: str, n: int) -> tuple[float, ...]:
    try:
        found = tuple(float(w) for w in words.split(","))
    except ValueError:
        raise Wrong(f"{words!r} is not understood.") from None
    if len(found) != n or not all(map(math.isfinite, found)):
        raise Wrong(f"{words!r} must be {n} numbers with commas between them.")
    return found


def _three(words: str) -> Three:
    x, y, z = _numbers(words, 3)
    return x, y, z


def _length(words: str) -> float:
    (found,) = _numbers(words, 1)
    if not found > 0:
        raise Wrong(f"{words!r} must be a length above zero.")
    return found


def _parts(text: str, words: dict[str, Callable[[str], Any]]) -> tuple[str, dict[str, Any]]:
    """Return what stands before the first key word, and what follows each of them."""
    pieces = re.split(rf"\s+({'|'.join(words)})\s+", text.strip())
    found: dict[str, Any] = {}
    for word, value in zip(pieces[1::2], pieces[2::2]):
        if word in found:
            raise Wrong(f"{word!r} is said twice.")
        found[word] = words[word](value.strip())
    return pieces[0], found


def _camera(value: Any) -> CameraWish | None:
    if value == "auto":
        return None
    if not isinstance(value, str):
        raise Wrong
    first, more = _parts(value, {"up": _three, "at": _three, "width": _length})
    names = first.split("-")
    if all(n in DIRECTIONS for n in names):
        direction = _as_three([sum(axis) for axis in zip(*(DIRECTIONS[n][0] for n in names))])
        up = DIRECTIONS[names[0]][1] if len(names) == 1 else (0.0, 0.0, 1.0)
    else:
        direction, up = _three(first), (0.0, 0.0, 1.0)
        if direction[0] == direction[1] == 0.0:
            up = (0.0, 1.0, 0.0)
    up = more.get("up", up)
    if not _sine(direction, up) > 1e-6:
        raise Wrong("The directions cancel, or the one of view and the one upwards are parallel.")
    return CameraWish(direction, up, more.get("at"), more.get("width"))


def _sine(a: Three, b: Three) -> float:
    """Return the sine of the angle between two vectors; 0 where one has no length."""
    across = (a[1] * b[2] - a[2] * b[1], a[2] * b[0] - a[0] * b[2], a[0] * b[1] - a[1] * b[0])
    lengths = math.hypot(*a) * math.hypot(*b)
    return math.hypot(*across) / lengths if lengths else 0.0


def _as_three(vector: Sequence[float]) -> Three:
    return (float(vector[0]), float(vector[1]), float(vector[2]))


def _close_up(value: Any) -> CloseUp:
    if not isinstance(value, str):
        raise Wrong
    first, more = _parts(value, {"width": _length})
    width = more.get("width")
    kind, _, name = first.partition(" ")
    if first in ("largest", "smallest"):
        return CloseUp("largest" if first == "largest" else "smallest", width=width)
    if kind in ("region", "element") and name.strip():
        return CloseUp("region" if kind == "region" else "element", name.strip(), width=width)
    return CloseUp("point", point=_three(first), width=width)


def _cut(value: Any) -> CutPlane:
    if not isinstance(value, str):
        raise Wrong
    found = re.fullmatch(r"\s*([xyz])\s*(?:=\s*(\S+)\s*)?", value)
    if found is not None:
        axis = "xyz".index(found[1])
        normal = [1.0 if k == axis else 0.0 for k in range(3)]
        point = None if found[2] is None else _as_three([n * _numbers(found[2], 1)[0] for n in normal])
        return CutPlane(_as_three(normal), point, value.strip())
    first, more = _parts(value, {"through": _three})
    across = _three(first)
    if math.hypot(*across) == 0:
        raise Wrong("The normal of the plane has no length.")
    return CutPlane(across, more.get("through"), value.strip())


def _range(value: Any) -> RangeWish:
    if isinstance(value, list) and len(value) == 2:
        value = ",".join(str(v) for v in value)
    if not isinstance(value, str):
        raise Wrong
    if value in ("auto", "full", "shared"):
        return RangeWish("auto" if value == "auto" else "full" if value == "full" else "shared")
    words = value.split()
    if len(words) == 2 and words[0] == "percentile":
        (q,) = _numbers(words[1], 1)
        if not 50 < q <= 100:
            raise Wrong("A percentile lies above 50 and not above 100.")
        return RangeWish("percentile", percentage=q)
    low, high = _numbers(value, 2)
    if not low < high:
        raise Wrong("The lower end comes first.")
    return RangeWish("fixed", low, high)


def _size(value: Any) -> tuple[int, int]:
    words = value.lower().split("x") if isinstance(value, str) else value
    try:
        width, height = (int(w) for w in words)
    except (TypeError, ValueError):
        raise Wrong from None
    if not (480 <= width <= 4000 and 480 <= height <= 4000):
        raise Wrong("Each side must be 480 to 4000 pixels.")
    return width, height


def _factor(value: Any) -> float | None:
    if value == "fitted":
        return None
    try:
        found = float(value)
    except (TypeError, ValueError):
        raise Wrong from None
    if isinstance(value, bool) or not math.isfinite(found):
        raise Wrong
    return found


CAMERA = Kind(
    f"auto, a direction ({', '.join(DIRECTIONS)}, or several joined: front-right-top) or X,Y,Z towards the eye; "
    "'up X,Y,Z', 'at X,Y,Z' and 'width LENGTH' may follow",
    _camera,
)
CLOSE_UP = Kind(
    "largest, smallest, 'region NAME', 'element NUMBER' or a point X,Y,Z; 'width LENGTH' may follow",
    _close_up,
)
CUT = Kind("x, y or z, with '= PLACE' after it, or a normal X,Y,Z, with 'through X,Y,Z' after it", _cut)
RANGE = Kind("auto, full, shared, 'percentile Q', or the two ends LOW,HIGH in the unit of the legend", _range)
SIZE = Kind("a size in pixels, 1600x1000 or [1600, 1000]", _size)
FACTOR = Kind("fitted, or a number", _factor)
