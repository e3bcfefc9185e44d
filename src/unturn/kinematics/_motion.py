"""Split of the displacement gradient and the polar decomposition, by component.

Gradients are `(3, 3, n)` arrays, `H[i, j] = du_i / dX_j`; symmetric tensors are `(6, n)`.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.kinematics._symmetric import PAIRS, Floats, contract, eigen, six_from_full, spectral


def rotation_vector(H: NDArray[Any]) -> Floats:
    """Return the small rotation vector `(3, n)`, half the curl of the displacement, radians."""
    theta = np.empty((3, *H.shape[2:]))
    for k, (i, j) in enumerate(((2, 1), (0, 2), (1, 0))):
        np.subtract(H[i, j], H[j, i], out=theta[k])
    theta *= 0.5
    return theta


def length(vector: NDArray[Any]) -> Floats:
    """Return the Euclidean length of `(3, n)` vectors."""
    size: Floats = np.sqrt(vector[0] ** 2 + vector[1] ** 2 + vector[2] ** 2)
    return size


def deviator(e: NDArray[Any]) -> Floats:
    """Return the deviator `e - tr(e)/3 I`, six components."""
    dev = np.array(e, dtype=np.float64)
    dev[:3] -= (e[0] + e[1] + e[2]) / 3.0
    return dev


def equivalent(e: NDArray[Any], poisson: float | None = None) -> Floats:
    """Return the equivalent strain of a symmetric strain tensor.

    `sqrt(2/3 e':e')`; with an effective Poisson ratio `1/(1+poisson)` times the norm of the principal differences,
    `sqrt(3/2 e':e') / (1+poisson)`, which is the same at one half.
    """
    dev = deviator(e)
    factor = 2.0 / 3.0 if poisson is None else 1.5 / (1.0 + poisson) ** 2
    total = contract(dev, dev)
    total *= factor
    return np.sqrt(total, out=total)


def gradient_product(H: NDArray[Any]) -> Floats:
    """Return `H^T H` as six components."""
    product = np.empty((6, *H.shape[2:]))
    for k, (i, j) in enumerate(PAIRS):
        product[k] = H[0, i] * H[0, j] + H[1, i] * H[1, j] + H[2, i] * H[2, j]
    return product


def green_lagrange(H: NDArray[Any]) -> Floats:
    """Return `E = (H + H^T + H^T H)/2` as six components."""
    E = gradient_product(H)
    E *= 0.5
    E += six_from_full(H)
    return E


def relative_volume_change(H: NDArray[Any]) -> Floats:
    """Return `J - 1 = I1 + I2 + I3` of H: small changes keep their digits."""
    first = H[0, 0] + H[1, 1] + H[2, 2]
    second = (
        H[0, 0] * H[1, 1] - H[0, 1] * H[1, 0] + H[1, 1] * H[2, 2] - H[1, 2] * H[2, 1] + H[0, 0] * H[2, 2]
        - H[0, 2] * H[2, 0]
    )  # fmt: skip
    third = (
        H[0, 0] * (H[1, 1] * H[2, 2] - H[1, 2] * H[2, 1])
        - H[0, 1] * (H[1, 0] * H[2, 2] - H[1, 2] * H[2, 0])
        + H[0, 2] * (H[1, 0] * H[2, 1] - H[1, 1] * H[2, 0])
    )
    total: Floats = first + second + third
    return total


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
    values, directions = eigen(green_lagrange(H))
    with np.errstate(invalid="ignore", divide="ignore"):
        # principal stretches minus one; rounding may leave a flattened point's E just below -1/2
        stretches = np.expm1(0.5 * np.log1p(np.maximum(2.0 * values, -1.0)))
        inverse = spectral(-stretches / (1.0 + stretches), directions)  # U^-1 - I
        difference = e - spectral(stretches, directions)
        error = np.sqrt(contract(difference, difference))
        size = np.sqrt(stretches[0] ** 2 + stretches[1] ** 2 + stretches[2] ** 2)
        return error, size, _angle_of_turn(H, inverse)


def _angle_of_turn(H: Floats, inverse: Floats) -> Floats:
    """Return the angle of `R = (I + H)(I + K)` in [0, pi], K given by six components."""
    index = {(i, j): k for k, (i, j) in enumerate(PAIRS)}
    turn = np.empty_like(H)  # R - I
    for i in range(3):
        for j in range(3):
            turn[i, j] = H[i, j] + inverse[index[min(i, j), max(i, j)]]
            for m in range(3):
                turn[i, j] += H[i, m] * inverse[index[min(m, j), max(m, j)]]
    cosine = 0.5 * (2.0 + turn[0, 0] + turn[1, 1] + turn[2, 2])
    angle: Floats = np.arctan2(length(rotation_vector(turn)), cosine)
    return angle
