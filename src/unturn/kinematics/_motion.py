"""Split of the displacement gradient, by component.

Gradients are `(3, 3, n)` arrays, `H[i, j] = du_i / dX_j`; symmetric tensors are `(6, n)`.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.kinematics._symmetric import PAIRS, Floats, contract, six_from_full


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
