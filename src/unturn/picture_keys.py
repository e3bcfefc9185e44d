"""What one picture shows: the table of all that can be asked for, on the command line, in a plan, in Python."""

from __future__ import annotations

import contextlib
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any, Literal

from unturn import picture_wishes as w
from unturn import toml_kinds as k
from unturn.errors import UnturnError, UsageError, close_matches
from unturn.toml_kinds import Key, Wrong

At = Literal["centroid", "mean", "nodes", "surface", "quadrature"]
"""Where values may live; what cannot be drawn there is refused when it is drawn."""


@dataclass(frozen=True)
class PictureKey(Key):
    """One thing that can be asked for; `metavar` stands for its value on the command line."""

    metavar: str = ""


def _dpi(value: Any) -> float:
    try:
        found = float(value)
    except (TypeError, ValueError):
        raise Wrong from None
    if isinstance(value, bool) or not 30 <= found <= 2400:
        raise Wrong
    return found


def _names(value: Any) -> tuple[str, ...]:
    found: tuple[str, ...] = k.TEXTS.read([value] if isinstance(value, str) else list(value))
    return found


_AUTO = w.RangeWish("auto")
NAMES = k.Kind("the name of a region, or a list of names", _names)

PICTURE_KEYS = (
    PictureKey("measure", k.TEXT, "the number that is drawn: an array, with its component where it has several "
               "(equivalent_strain, principal_strain_1, strain_XX, rotation_Z), displacement, or an array of the file",
               "equivalent_strain", "NAME"),
    PictureKey("title", k.TEXT, "words above the picture; default: the name of the measure", "", "TEXT"),
    PictureKey("factor", w.FACTOR, "how many times the displacement is drawn; fitted: the largest is 5 % of the model",
               None, "fitted|X"),
    PictureKey("undeformed", k.BOOLEAN, "the undeformed shape, pale behind", True),
    PictureKey("camera", w.CAMERA, "where the model is seen from: auto, front, back, left, right, top, bottom, several "
               "joined, or X,Y,Z towards the eye; with 'up X,Y,Z', 'at X,Y,Z' and 'width LENGTH' where wanted",
               None, "VIEW"),
    PictureKey("close_up", w.CLOSE_UP, "look closely at largest, smallest, 'region NAME', 'element NUMBER' or X,Y,Z; "
               "with 'width LENGTH' where wanted", None, "WHAT"),
    PictureKey("cut", w.CUT, "take away the half towards the eye of a plane in undeformed coordinates: 'y', 'y=0.01', "
               "or '1,1,0 through 0,0,0'", None, "PLANE"),
    PictureKey("only", NAMES, "draw these regions only", (), "REGION"),
    PictureKey("leave_out", NAMES, "do not draw these regions", (), "REGION"),
    PictureKey("faint", NAMES, "draw these regions pale, without values", (), "REGION"),
    PictureKey("edges", k.BOOLEAN, "the edges of the cells; default: up to 20 000 cells", None),
    PictureKey("range", w.RANGE, "the colour range: auto (to the extremes, drawn in where they lie far beyond 99.9 % of the "
               "values), full, 'percentile Q', LOW,HIGH in the unit of the legend, or shared by the pictures of a plan",
               _AUTO, "RANGE"),
    PictureKey("symmetric", k.BOOLEAN, "a colour range as wide below zero as above", False),
    PictureKey("colours", k.choice_kind(("auto", "one-sided", "two-sided")), "the colour map: from light to dark, or with "
               "grey at zero; auto: two-sided for a symmetric range", "auto", "auto|one-sided|two-sided"),
    PictureKey("extremes", k.BOOLEAN, "mark the extremes with value and number", True),
    PictureKey("arrows", k.choice_kind(("none", "principal", "rotation")), "arrows on the surface: principal directions "
               "(heads outwards: stretch, inwards: shortening), or the axes of rotation", "none", "none|principal|rotation"),
    PictureKey("size", w.SIZE, "width and height in pixels", (1600, 1000), "WxH"),
    PictureKey("dpi", k.Kind("a resolution, 30 to 2400 pixels an inch", _dpi), "pixels an inch, kept in the file for print",
               200.0, "X"),
)  # fmt: skip
"""Everything a picture can be asked for."""

STRAIN_OPTIONS = (
    "base", "at", "recovery", "solve", "displacement", "displacement_scale", "coordinates", "plane", "axis", "poisson",
    "equivalent_poisson", "remove_rigid", "rigid_to", "rigid_axis", "frame", "thermal_expansion", "temperature",
    "reference_temperature", "alive", "skin", "threads",
)  # fmt: skip
"""The options of strain that pictures take."""


@dataclass(frozen=True)
class PictureRequest:
    """A picture that is asked for: a value for each of `PICTURE_KEYS`, where values live, and the name of its file.

    `source` tells where it is written, for errors.
    """

    measure: str = "equivalent_strain"
    title: str = ""
    factor: float | None = None
    undeformed: bool = True
    camera: w.CameraWish | None = None
    close_up: w.CloseUp | None = None
    cut: w.CutPlane | None = None
    only: tuple[str, ...] = ()
    leave_out: tuple[str, ...] = ()
    faint: tuple[str, ...] = ()
    edges: bool | None = None
    range: w.RangeWish = _AUTO
    symmetric: bool = False
    colours: str = "auto"
    extremes: bool = True
    arrows: str = "none"
    size: tuple[int, int] = (1600, 1000)
    dpi: float = 200.0
    at: At = "centroid"
    name: str = ""
    source: str = ""

    @contextlib.contextmanager
    def told_where(self) -> Iterator[None]:
        """Return a context manager in which errors say which picture they are about."""
        try:
            yield
        except UnturnError as error:
            if not self.source or str(error).startswith(self.source):
                raise
            raise type(error)(f"{self.source}: {error}") from error


def request_of(given: Mapping[str, Any], spelt: str = "{}") -> PictureRequest:
    """Return the request of values by key, as written on the command line or in Python.

    Parameters
    ----------
    given
        Keys of `PICTURE_KEYS` with their values, None for what is not asked for; also ``at`` and ``name``.
    spelt
        How a key is told in an error: ``--{}``.

    Raises
    ------
    UsageError
        A key that is not known, or a value that is not of its kind.

    Examples
    --------
    >>> request_of({"camera": "front", "factor": 1}).camera.direction
    (0.0, -1.0, 0.0)
    """
    kinds = {key.name: key.kind for key in PICTURE_KEYS}
    found: dict[str, Any] = {}
    for name, value in given.items():
        if name in ("at", "name"):
            found[name] = value
            continue
        if name not in kinds:
            raise UsageError(
                f"{name!r} is nothing a picture can be asked for.{close_matches(name, kinds)} It can: "
                f"{', '.join(kinds)}."
            )
        if value is None:
            continue
        try:
            found[name] = kinds[name].read(value)
        except Wrong as wrong:
            option = spelt.format(name.replace("_", "-") if spelt != "{}" else name)
            raise UsageError(
                f"{option} {k.shown(value)}: expected {kinds[name].words}. {wrong}".rstrip()
            ) from None
    return PictureRequest(**found)
