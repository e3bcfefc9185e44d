"""The colours of values: one even map from light to dark, and colours that stand apart from it."""

from __future__ import annotations

import functools
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError

Floats = NDArray[np.float64]

ABOVE = (0.902, 0.224, 0.106)
BELOW = (0.792, 0.353, 0.706)
NO_VALUE = (0.745, 0.745, 0.745)
INK = (0.12, 0.13, 0.16)

# CIELAB lightness, a, b from the lowest to the highest value: straw, moss, petrol, night.
_ANCHORS = np.array([[94, -3, 22], [72, -22, 22], [46, -20, -10], [17, 12, -32]], dtype=np.float64)
N_COLOURS = 256
_ONE_SIDED = 10.0  # a range reaches this much further below zero than above: as good as negative


def srgb_from_lab(lab: Floats) -> Floats:
    """Return sRGB `(n, 3)`, 0 to 1, of CIELAB colours `(n, 3)` under D65.

    Notes
    -----
    From memory, not looked up: CIE 15 (CIELAB) and IEC 61966-2-1 (sRGB).
    """
    fy = (lab[:, 0] + 16) / 116
    f = np.stack([fy + lab[:, 1] / 500, fy, fy - lab[:, 2] / 200], axis=1)
    xyz = np.where(f > 6 / 29, f**3, 3 * (6 / 29) ** 2 * (f - 4 / 29)) * [0.95047, 1.0, 1.08883]
    linear = xyz @ np.array(
        [
            [3.2404542, -0.9692660, 0.0556434],
            [-1.5371385, 1.8760108, -0.2040259],
            [-0.4985314, 0.0415560, 1.0572252],
        ]
    )
    linear = np.clip(linear, 0, 1)
    return np.asarray(np.where(linear <= 0.0031308, 12.92 * linear, 1.055 * linear ** (1 / 2.4) - 0.055))


@functools.cache
def colour_table() -> NDArray[np.uint8]:
    """Return the `(256, 3)` bytes of the map, equal steps of CIELAB apart, dark for high values."""
    t = np.linspace(0, 1, 2001)
    knots = np.linspace(0, 1, len(_ANCHORS))
    lab = np.stack([np.interp(t, knots, _ANCHORS[:, k]) for k in range(3)], axis=1)
    way = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(lab, axis=0), axis=1))])
    even = np.interp(np.linspace(0, way[-1], N_COLOURS), way, t)
    lab = np.stack([np.interp(even, t, lab[:, k]) for k in range(3)], axis=1)
    return np.round(srgb_from_lab(lab) * 255).astype(np.uint8)


@dataclass(frozen=True)
class Range:
    """The colour range and what lies outside.

    Parameters
    ----------
    low, high
        Ends of the colour map, in the unit of the array.
    above, below
        Number of values above `high` and below `low`.
    missing
        Number of values that are not finite.
    count
        Number of all values.
    """

    low: float
    high: float
    above: int
    below: int
    missing: int
    count: int

    @property
    def dark_low(self) -> bool:
        """Whether the dark end is the low one: where all that matters is negative."""
        return self.low < 0 and -self.low >= _ONE_SIDED * max(self.high, 0.0)

    @property
    def colours(self) -> NDArray[np.uint8]:
        """Colours `(256, 3)` from low to high; the dark end is the one far from zero."""
        table = colour_table()
        return table[::-1] if self.dark_low else table


_FAR = 1.25  # the range is cut where the extreme is this much larger than the percentile


def choose_range(values: Floats, given: tuple[float, float] | None = None) -> Range:
    """Return the range of `values` `(n,)`, which always holds 0: from the smallest to the largest.

    An end that lies far beyond 99.9 % of the values is drawn in to them; ends are rounded outwards to two digits.

    Raises
    ------
    UsageError
        A `given` range that is none.
    """
    finite = np.sort(values[np.isfinite(values)])
    missing = len(values) - len(finite)
    if given is not None:
        low, high = given
        if not (np.isfinite(low) and np.isfinite(high) and low < high):
            raise UsageError(f"the colour range {low} to {high}: give two numbers, the lower one first.")
    elif not len(finite):
        low = high = 0.0
    else:
        high = round_up(_drawn_in(finite)) if finite[-1] > 0 else 0.0
        low = -round_up(_drawn_in(-finite[::-1])) if finite[0] < 0 else 0.0
    return Range(low, high, int((finite > high).sum()), int((finite < low).sum()), missing, len(values))


def _drawn_in(ascending: Floats) -> float:
    """Return the largest value, or the one 99.9 % do not exceed when that is far below it."""
    most = float(ascending[int(np.ceil(0.999 * len(ascending))) - 1])
    largest = float(ascending[-1])
    return most if most > 0 and largest > _FAR * most else largest


def round_up(value: float) -> float:
    """Return `value` rounded upwards to two significant digits.

    Examples
    --------
    >>> round_up(0.000836)
    0.00084
    >>> round_up(-1234.0)
    -1200.0
    """
    if value == 0 or not np.isfinite(value):
        return value
    power = int(np.floor(np.log10(abs(value)))) - 1
    digits = value / 10.0**power
    near = round(digits)
    whole = near if abs(digits - near) < 1e-9 * abs(digits) else int(np.ceil(digits))
    return float(f"{whole}e{power}")
