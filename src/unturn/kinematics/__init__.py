"""Pure tensor functions on arrays of shape `(..., 3, 3)`; no mesh is known here.

`H[..., i, j] = du_i / dX_j`. Shear is tensor shear. Angles are radians.
"""

from unturn.kinematics._public import (
    almansi_strain,
    biot_strain,
    det_f,
    deviatoric_strain,
    equivalent_strain,
    finite_rotation,
    green_lagrange_strain,
    hencky_strain,
    max_shear_strain,
    principal_strain,
    rotation_angle,
    rotation_tensor,
    rotation_vector,
    small_strain_error,
    strain,
    tensor_from_components,
    tensor_to_components,
    volumetric_strain,
)

__all__ = [
    "almansi_strain",
    "biot_strain",
    "det_f",
    "deviatoric_strain",
    "equivalent_strain",
    "finite_rotation",
    "green_lagrange_strain",
    "hencky_strain",
    "max_shear_strain",
    "principal_strain",
    "rotation_angle",
    "rotation_tensor",
    "rotation_vector",
    "small_strain_error",
    "strain",
    "tensor_from_components",
    "tensor_to_components",
    "volumetric_strain",
]
