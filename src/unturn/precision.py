"""Storage resolution of arrays: how finely the file can tell two values apart."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

_SAMPLE = 20_000
_FEWEST = 8
"""Different values needed to tell digits that were cut off from chance."""
_ZERO = 1e-280
"""Leftovers of a subtraction below this have no digits to speak of."""
_MARK = 1e30  # from here on a number is no coordinate or displacement but a mark for "nothing here"


@dataclass(frozen=True)
class Resolution:
    """Half of the step between neighbouring stored values.

    Parameters
    ----------
    relative
        Share of a value's own size.
    kind
        What was found, in words: ``float64``, ``float32``, ``7 digits``, ``6 decimals``.
    absolute
        The same for all values, in their unit: where a fixed number of decimals was written.
    """

    relative: float
    kind: str
    absolute: float = 0.0


MEANT_COORDINATE, MEANT_DISPLACEMENT = 4, 2
"""Digits up to which a value is taken as meant: people type coordinates such as 0.125; displacements are computed."""


def storage_resolution(values: NDArray[Any], meant: int = MEANT_COORDINATE) -> Resolution:
    """Return the resolution found from the values themselves, not only from their type.

    float32 values kept in a float64 array, and text with few digits or a fixed number of decimals, are recognised.
    Values of `meant` digits or fewer, and those of a regular grid, are taken as meant and not as rounded.

    Examples
    --------
    >>> import numpy as np
    >>> storage_resolution(np.linspace(0, 1, 99) ** 2).kind
    'float64'
    >>> storage_resolution((np.linspace(0, 1, 99) ** 2).astype(np.float32).astype(float)).kind
    'float32'
    """
    if values.dtype == np.float32:
        wide = values.astype(np.float64)
        return _fixed(wide, meant, 1e6) or _decimal(wide, meant, 6) or Resolution(2.0**-24, "float32")
    if values.dtype == np.float16 or values.dtype.kind in "iu":
        return _coarse(values.dtype.kind, meant)
    flat = np.asarray(values, dtype=np.float64).reshape(-1)
    sample = _distinct(flat)
    if len(sample) < _FEWEST:
        return Resolution(2.0**-53, "float64")
    # values such as 0.5 fit float32 exactly without having been stored so: most must use its last bits
    as_single = sample.astype(np.float32).astype(np.float64)
    if np.array_equal(as_single, sample):
        mantissa = np.abs(np.frexp(sample)[0]) * 2.0**24
        if np.mean(np.fmod(mantissa, 256.0) != 0) > 0.5:
            return Resolution(2.0**-24, "float32")
        return Resolution(2.0**-53, "float64")
    return _fixed(sample, meant, 1e12) or _decimal(sample, meant, 14) or Resolution(2.0**-53, "float64")


def _coarse(kind: str, meant: int) -> Resolution:
    if kind == "f":
        return Resolution(2.0**-11, "float16")
    return Resolution(2.0**-53, "whole numbers", 0.5 if meant == MEANT_DISPLACEMENT else 0.0)


def _distinct(flat: NDArray[np.float64]) -> NDArray[np.float64]:
    step = max(1, len(flat) // _SAMPLE)
    sample = flat[::step]
    sample = sample[(np.abs(sample) < _MARK) & (np.abs(sample) > _ZERO)]
    return np.unique(sample)


def _regular(sample: NDArray[np.float64]) -> bool:
    """Return whether sorted values lie on a regular grid: at most three different gaps, multiples of the smallest."""
    gaps = np.diff(sample)
    multiples = gaps / gaps.min()
    return len(np.unique(np.rint(multiples))) <= 3 and bool(
        (np.abs(multiples - np.rint(multiples)) < 0.05).all()
    )


def _decimal(values: NDArray[np.float64], low: int, high: int) -> Resolution | None:
    """Return the resolution of decimals with more than `low` and at most `high` digits, or None."""
    sample = _distinct(values.reshape(-1))
    if len(sample) < _FEWEST or _regular(sample):
        return None
    single = high < 8
    exponent = np.floor(np.log10(np.abs(sample)))
    for digits in range(1, high + 1):
        scaled = sample * 10.0 ** (digits - 1 - exponent)
        nearest = np.rint(scaled)
        slack = np.abs(scaled) * (6e-8 if single else 1e-15) + 1e-9
        if not (np.abs(scaled - nearest) <= slack).all():
            continue
        used = np.mean(np.fmod(np.abs(nearest), 10.0) != 0)
        if digits > low and used > 0.5:
            return Resolution(0.5 * 10.0 ** (1 - digits), f"{digits} digits")
        return None
    return None


def _fixed(values: NDArray[np.float64], meant: int, most: float) -> Resolution | None:
    """Return the resolution of values written with the same number of decimals, or None.

    They are whole multiples of a power of ten, up to more than `meant` digits and less than `most` of it, use its
    last digit as evenly as chance, and their gaps are not those of a regular grid.
    """
    sample = _distinct(values.reshape(-1))
    if len(sample) < _FEWEST or _regular(sample):
        return None
    largest = float(np.abs(sample).max())
    first = meant - int(np.floor(np.log10(largest)))
    for places in range(first, first + 9):
        scaled = sample * 10.0**places
        if np.abs(scaled).max() >= most:
            return None
        nearest = np.rint(scaled)
        if (np.abs(scaled - nearest) <= np.abs(scaled) * (0.1 / most) + 1e-9).all():
            even = np.mean(np.fmod(np.abs(nearest), 10.0) != 0) > 0.8
            if not even or places < 1:
                return None
            return Resolution(0.0, f"{places} decimals", 0.5 * 10.0**-places)
    return None
