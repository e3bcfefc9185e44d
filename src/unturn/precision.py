"""Storage resolution of arrays: how finely the file can tell two values apart."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

_SAMPLE = 20_000
_MARK = 1e30  # from here on a number is no coordinate or displacement but a mark for "nothing here"


@dataclass(frozen=True)
class Resolution:
    """Half of the step between neighbouring stored values.

    Parameters
    ----------
    relative
        Share of a value's own size.
    kind
        What was found, in words: ``float64``, ``float32``, ``7 digits``.
    """

    relative: float
    kind: str


def storage_resolution(values: NDArray[Any]) -> Resolution:
    """Return the resolution found from the values themselves, not only from their type.

    float32 values kept in a float64 array, and text with few digits, are recognised. Four digits or fewer are taken as
    meant (a coordinate of 0.125), not as rounded.

    Examples
    --------
    >>> import numpy as np
    >>> storage_resolution(np.linspace(0, 1, 99) ** 2).kind
    'float64'
    >>> storage_resolution((np.linspace(0, 1, 99) ** 2).astype(np.float32).astype(float)).kind
    'float32'
    """
    if values.dtype == np.float32:
        return _decimal(values.astype(np.float64), 4, 6) or Resolution(2.0**-24, "float32")
    if values.dtype == np.float16:
        return Resolution(2.0**-11, "float16")
    flat = np.asarray(values, dtype=np.float64).reshape(-1)
    sample = _distinct(flat)
    if len(sample) < 16:
        return Resolution(2.0**-53, "float64")
    # values such as 0.5 fit float32 exactly without having been stored so: most must use its last bits
    as_single = sample.astype(np.float32).astype(np.float64)
    if np.array_equal(as_single, sample):
        mantissa = np.abs(np.frexp(sample)[0]) * 2.0**24
        if np.mean(np.fmod(mantissa, 256.0) != 0) > 0.5:
            return Resolution(2.0**-24, "float32")
        return Resolution(2.0**-53, "float64")
    return _decimal(sample, 4, 14) or Resolution(2.0**-53, "float64")


def _distinct(flat: NDArray[np.float64]) -> NDArray[np.float64]:
    step = max(1, len(flat) // _SAMPLE)
    sample = flat[::step]
    sample = sample[(np.abs(sample) < _MARK) & (sample != 0)]
    return np.unique(sample)


def _decimal(values: NDArray[np.float64], low: int, high: int) -> Resolution | None:
    """Return the resolution of decimals with more than `low` and at most `high` digits, or None."""
    sample = _distinct(values.reshape(-1))
    if len(sample) < 16:
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
