"""Numbers as people write them in a report."""

from __future__ import annotations

import numpy as np


def written(value: float, digits: int = 3) -> str:
    """Return a number with so many significant digits, never fewer than its whole part has.

    Examples
    --------
    >>> written(835.96), written(12345.6), written(0.0012345), written(2.0), written(-1.5e-9)
    ('836', '12 346', '0.00123', '2', '-1.5e-9')
    """
    if not np.isfinite(value):
        return "no value"
    if value == 0:
        return "0"
    power = int(np.floor(np.log10(abs(value))))
    if power < -4 or power > 8:
        mantissa, exponent = f"{value:.{digits - 1}e}".split("e")
        return f"{_bare(mantissa)}e{int(exponent)}"
    return _bare(f"{value:,.{max(0, digits - 1 - power)}f}".replace(",", " "))


def _bare(text: str) -> str:
    return text.rstrip("0").rstrip(".") if "." in text else text


def nice_step(span: float, steps: int) -> float:
    """Return 1, 2, 2.5 or 5 times a power of ten so that about `steps` of them make `span`.

    Examples
    --------
    >>> nice_step(840.0, 6), nice_step(0.09, 4)
    (200.0, 0.025)
    """
    rough = span / steps
    power = 10.0 ** np.floor(np.log10(rough))
    return float(next(m for m in (1, 2, 2.5, 5, 10) if m * power >= rough * (1 - 1e-9)) * power)


def ticks(low: float, high: float, steps: int = 6) -> list[float]:
    """Return the two ends and the multiples of a nice step between them that do not crowd the ends.

    Examples
    --------
    >>> ticks(0.0, 840.0)
    [0.0, 200.0, 400.0, 600.0, 840.0]
    """
    if not high > low:
        return [low]
    step = nice_step(high - low, steps)
    first, last = int(np.ceil(low / step)), int(np.floor(high / step))
    inner = [k * step for k in range(first, last + 1)]
    apart = 0.6 * step
    return [low, *(float(t) for t in inner if t - low > apart and high - t > apart), high]
