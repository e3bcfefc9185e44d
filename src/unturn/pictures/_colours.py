"""The colours of values: one even map from light to dark, and colours that stand apart from it."""

from __future__ import annotations

import functools
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

ABOVE = (0.902, 0.224, 0.106)
BELOW = (0.792, 0.353, 0.706)
NO_VALUE = (0.745, 0.745, 0.745)
INK = (0.12, 0.13, 0.16)

# CIELAB lightness, a, b from the lowest to the highest value: straw, moss, petrol, night.
_ANCHORS = np.array([[94, -3, 22], [72, -22, 22], [46, -20, -10], [17, 12, -32]], dtype=np.float64)
# Two-sided: apricot, grey, plum.
_TWO_SIDED = np.array([[92, 11, 45], [58, 0, 0], [22, 38, -40]], dtype=np.float64)
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
def colour_table(two_sided: bool = False) -> NDArray[np.uint8]:
    """Return the `(256, 3)` bytes of a map, equal steps of CIELAB apart, dark for high values.

    The two-sided one goes from light to dark too, so that grey print keeps the sign, and is without colour in its middle.
    """
    anchors = _TWO_SIDED if two_sided else _ANCHORS
    t = np.linspace(0, 1, 2001)
    knots = np.linspace(0, 1, len(anchors))
    lab = np.stack([np.interp(t, knots, anchors[:, k]) for k in range(3)], axis=1)
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
    words
        How the range was chosen.
    two_sided
        Whether its middle stands out.
    """

    low: float
    high: float
    above: int
    below: int
    missing: int
    count: int
    words: str = ""
    two_sided: bool = False

    @property
    def dark_low(self) -> bool:
        """Whether the dark end is the low one: where all that matters is negative."""
        return not self.two_sided and self.low < 0 and -self.low >= _ONE_SIDED * max(self.high, 0.0)

    @property
    def colours(self) -> NDArray[np.uint8]:
        """Colours `(256, 3)` from low to high; the dark end is the one far from zero."""
        table = colour_table(self.two_sided)
        return table[::-1] if self.dark_low else table


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
