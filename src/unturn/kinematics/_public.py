"""The public face of the tensor algebra: arrays `(..., 3, 3)` in, arrays out."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from unturn.errors import UsageError
from unturn.kinematics import _motion, _symmetric, _turning
from unturn.kinematics._finite import Finite
from unturn.kinematics._symmetric import Floats


def _first(tensor: ArrayLike) -> tuple[NDArray[Any], tuple[int, ...]]:
    """Return the tensor with its axes first and one batch axis last, and the batch shape."""
    array = np.asarray(tensor, dtype=np.float64)
    if array.shape[-2:] != (3, 3):
        raise UsageError(f"expected an array of shape (..., 3, 3), got {array.shape}.")
    batch = array.shape[:-2]
    return np.moveaxis(array.reshape(-1, 3, 3), 0, -1), batch


def _last(array: NDArray[Any], batch: tuple[int, ...]) -> Floats:
    """Undo `_first`: batch axes first, the others after."""
    moved = np.moveaxis(array, -1, 0)
    return np.ascontiguousarray(moved).reshape(batch + array.shape[:-1])


def strain(H: ArrayLike) -> Floats:
    """Return the small strain `e = (H + H^T)/2`.

    Parameters
    ----------
    H
        `(..., 3, 3)` displacement gradient, dimensionless.

    Returns
    -------
    numpy.ndarray
        `(..., 3, 3)`, dimensionless.

    Notes
    -----
    Timoshenko and Goodier, Theory of Elasticity, article 6 (with tensor shear).

    Examples
    --------
    >>> strain([[1e-3, 2e-3, 0], [0, 0, 0], [0, 0, 0]])[0]
    array([0.001, 0.001, 0.   ])
    """
    array, batch = _first(H)
    return _last(_symmetric.full_from_six(_symmetric.six_from_full(array)), batch)


def rotation_tensor(H: ArrayLike) -> Floats:
    """Return the small rotation tensor `w = (H - H^T)/2`, `(..., 3, 3)`, radians."""
    array = np.asarray(H, dtype=np.float64)
    _first(array)
    result: Floats = 0.5 * (array - np.swapaxes(array, -1, -2))
    return result


def rotation_vector(H: ArrayLike) -> Floats:
    """Return the small rotation vector `curl(u)/2`, `(..., 3)`, radians.

    Notes
    -----
    `theta_x = (H[z, y] - H[y, z])/2` and so on; in the plane positive is anticlockwise about +z.

    Examples
    --------
    >>> rotation_vector([[0, -0.01, 0], [0.01, 0, 0], [0, 0, 0]])
    array([0.  , 0.  , 0.01])
    """
    array, batch = _first(H)
    return _last(_motion.rotation_vector(array), batch)


def rotation_angle(H: ArrayLike) -> Floats:
    """Return the small rotation angle, the length of `rotation_vector`, `(...)`, radians."""
    array, batch = _first(H)
    return _last(_motion.length(_motion.rotation_vector(array)), batch)


def volumetric_strain(e: ArrayLike) -> Floats:
    """Return the trace of a strain tensor `(..., 3, 3)`: small relative change of volume, dimensionless."""
    array, batch = _first(e)
    return _last(array[0, 0] + array[1, 1] + array[2, 2], batch)


def deviatoric_strain(e: ArrayLike) -> Floats:
    """Return the deviator `e - tr(e)/3 I` of a symmetric strain tensor, `(..., 3, 3)`, dimensionless."""
    array, batch = _first(e)
    return _last(_symmetric.full_from_six(_motion.deviator(_symmetric.six_from_full(array))), batch)


def equivalent_strain(e: ArrayLike, poisson: float | None = None) -> Floats:
    """Return the equivalent strain of a symmetric strain tensor, `(...)`, dimensionless.

    Parameters
    ----------
    e
        `(..., 3, 3)` total strain.
    poisson
        None: `sqrt(2/3 e':e')`, the von Mises form. A number: `1/(1+poisson)` times the norm of the principal
        differences `sqrt(((e1-e2)^2 + (e2-e3)^2 + (e3-e1)^2)/2)`, with that effective Poisson ratio.

    Examples
    --------
    A pull of 1000 microstrain at Poisson's ratio 0.3:

    >>> import numpy as np
    >>> pull = np.diag([1e-3, -0.3e-3, -0.3e-3])
    >>> round(float(equivalent_strain(pull)) * 1e6)
    867
    >>> round(float(equivalent_strain(pull, poisson=0.3)) * 1e6)
    1000
    """
    array, batch = _first(e)
    return _last(_motion.equivalent(_symmetric.six_from_full(array), poisson), batch)


def principal_strain(e: ArrayLike, directions: bool = False) -> Any:
    """Return the principal values `(..., 3)`, largest first, of a symmetric strain tensor; with directions on request.

    Parameters
    ----------
    e
        `(..., 3, 3)` symmetric tensor.
    directions
        Also return `(..., 3, 3)`: row k is the unit direction of value k, first non-zero component positive.

    Notes
    -----
    See `unturn.kinematics._symmetric.eigen`. Within 1e-14 of LAPACK relative to the tensor's norm, also for nearly
    equal roots.

    Examples
    --------
    >>> principal_strain([[0, 1e-3, 0], [1e-3, 0, 0], [0, 0, 0]])
    array([ 0.001,  0.   , -0.001])
    """
    array, batch = _first(e)
    six = _symmetric.six_from_full(array)
    if not directions:
        return _last(_symmetric.eigenvalues(six), batch)
    values, vectors = _symmetric.eigen(six)
    return _last(values, batch), _last(vectors, batch)


def max_shear_strain(e: ArrayLike) -> Floats:
    """Return the largest engineering shear strain `e1 - e3`, `(...)`, dimensionless."""
    array, batch = _first(e)
    values = _symmetric.eigenvalues(_symmetric.six_from_full(array))
    return _last(values[0] - values[2], batch)


def green_lagrange_strain(H: ArrayLike) -> Floats:
    """Return the Green-Lagrange strain `E = (H + H^T + H^T H)/2`, `(..., 3, 3)`, dimensionless.

    Notes
    -----
    Holzapfel 2000, Nonlinear Solid Mechanics, section 2.5. Computed from H, not from F, so
    small strain keeps its digits.
    """
    array, batch = _first(H)
    return _last(_symmetric.full_from_six(_motion.green_lagrange(array)), batch)


def small_strain_error(H: ArrayLike) -> Floats:
    """Return `norm(e - (U - I))`, `(...)`: what turning adds to the small strain; zero for a stretch without turning.

    Examples
    --------
    A turn of 5 degrees without any strain:

    >>> import numpy as np
    >>> c, s = np.cos(np.radians(5)), np.sin(np.radians(5))
    >>> round(float(small_strain_error([[c - 1, -s, 0], [s, c - 1, 0], [0, 0, 0]])), 6)
    0.005382
    """
    array, batch = _first(H)
    return _last(_turning.turning(array).error, batch)


def tensor_to_components(tensor: ArrayLike) -> Floats:
    """Return `(..., 6)` components XX, YY, ZZ, XY, YZ, XZ of the symmetric part of `(..., 3, 3)`."""
    array, batch = _first(tensor)
    return _last(_symmetric.six_from_full(array), batch)


def tensor_from_components(components: ArrayLike) -> Floats:
    """Return the symmetric tensor `(..., 3, 3)` of `(..., 6)` components XX, YY, ZZ, XY, YZ, XZ."""
    array = np.asarray(components, dtype=np.float64)
    if array.shape[-1:] != (6,):
        raise UsageError(f"expected an array of shape (..., 6), got {array.shape}.")
    batch = array.shape[:-1]
    return _last(_symmetric.full_from_six(np.moveaxis(array.reshape(-1, 6), 0, -1)), batch)


def hencky_strain(H: ArrayLike) -> Floats:
    """Return the Hencky (logarithmic) strain `ln U`, `(..., 3, 3)`, dimensionless; NaN where `det F` is not positive.

    Notes
    -----
    Holzapfel 2000, Nonlinear Solid Mechanics, section 2.6.

    Examples
    --------
    >>> import numpy as np
    >>> hencky_strain(np.diag([1.0, 0.0, 0.0]))[0, 0].round(6)
    np.float64(0.693147)
    """
    array, batch = _first(H)
    return _last(_symmetric.full_from_six(Finite(array).hencky), batch)


def biot_strain(H: ArrayLike) -> Floats:
    """Return the Biot strain `U - I`, `(..., 3, 3)`, dimensionless; NaN where `det F` is not positive."""
    array, batch = _first(H)
    return _last(_symmetric.full_from_six(Finite(array).biot), batch)


def almansi_strain(H: ArrayLike) -> Floats:
    """Return the Almansi strain `F^-T E F^-1`, `(..., 3, 3)`, dimensionless; NaN where `det F` is not positive."""
    array, batch = _first(H)
    return _last(_symmetric.full_from_six(Finite(array).almansi), batch)


def finite_rotation(H: ArrayLike) -> Floats:
    """Return the rotation vector of R in `F = R U`, `(..., 3)`, radians: angle in [0, pi] times axis.

    Examples
    --------
    A quarter turn about z:

    >>> finite_rotation([[-1, -1, 0], [1, -1, 0], [0, 0, 0]]).round(6)
    array([0.      , 0.      , 1.570796])
    """
    array, batch = _first(H)
    return _last(Finite(array).rotation, batch)


def det_f(H: ArrayLike) -> Floats:
    """Return the determinant of `F = I + H`, `(...)`: deformed over undeformed volume."""
    array, batch = _first(H)
    return _last(Finite(array).det_f, batch)
