"""What turning does to the small strain: the error of the split, the size of the strain, the angle of the turn."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.kinematics._finite import Finite
from unturn.kinematics._motion import gradient_product, length, rotation_vector
from unturn.kinematics._symmetric import Floats, contract, six_from_full


@dataclass(frozen=True, eq=False)
class Turning:
    """What turning does to the small strain, per point.

    Parameters
    ----------
    error
        `(n,)` Frobenius norm of `e - (U - I)`: what turning adds to the small strain.
    stretch
        `(n,)` Frobenius norm of `U - I`: the size of the strain.
    angle
        `(n,)` rotation angle in radians, of R where the gradient is not small, else of the small rotation.
        NaN where the displacement flattens the material: R is not defined there.
    """

    error: Floats
    stretch: Floats
    angle: Floats


_NEGLIGIBLE = (
    1e-3  # H^T H / 2 below this share of the stretch: the second-order series is right to 0.2 % of itself
)


def turning(H: NDArray[Any]) -> Turning:
    """Return error, size and rotation angle of the small-strain split of `H` `(3, 3, n)`.

    Notes
    -----
    Where the norm of `H^T H / 2` is above 0.1 % of the stretch the polar decomposition is made. Elsewhere the series
    `U - I - e = (H^T H - e^2)/2 + O(H^3)` is used, whose remainder is then below `2e-3 |H|` of the stretch.
    Derived from `U^2 = I + 2e + H^T H`.
    """
    with np.errstate(invalid="ignore", over="ignore"):
        e = six_from_full(H)
        theta = rotation_vector(H)
        product = gradient_product(H)
        addition = 0.5 * (product - _square(e))
        stretch_tensor = e + addition
        stretch = np.sqrt(contract(stretch_tensor, stretch_tensor))
        error = np.sqrt(contract(addition, addition))
        angle = length(theta)
        large = 0.5 * np.sqrt(contract(product, product)) > _NEGLIGIBLE * stretch
    index = np.flatnonzero(large)
    if len(index):
        picked = np.ascontiguousarray(H[:, :, index])
        error[index], stretch[index], angle[index] = _exact_turning(picked, e[:, index])
    return Turning(error, stretch, angle)


def _square(e: NDArray[Any]) -> Floats:
    xx, yy, zz, xy, yz, xz = e
    return np.stack(
        [
            xx * xx + xy * xy + xz * xz,
            xy * xy + yy * yy + yz * yz,
            xz * xz + yz * yz + zz * zz,
            xx * xy + xy * yy + xz * yz,
            xy * xz + yy * yz + yz * zz,
            xx * xz + xy * yz + xz * zz,
        ]
    )


def _exact_turning(H: Floats, e: Floats) -> tuple[Floats, Floats, Floats]:
    finite = Finite(H)
    with np.errstate(invalid="ignore", divide="ignore"):
        difference = e - finite.stretch_tensor
        error = np.sqrt(contract(difference, difference))
        s = finite.stretch_values
        size = np.sqrt(s[0] ** 2 + s[1] ** 2 + s[2] ** 2)
        return error, size, finite.rotation_angle
