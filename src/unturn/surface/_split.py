"""Strain in the tangent plane of a surface, by component: tensors of two directions, and the motion of the normal."""

from __future__ import annotations

from functools import cached_property

import numpy as np

from unturn.kinematics import _motion, _symmetric
from unturn.kinematics._finite import Finite
from unturn.kinematics._symmetric import PAIRS, Floats

BASES = ("green_lagrange", "hencky", "biot")


class PlaneTensor:
    """A symmetric tensor in the tangent plane.

    Parameters
    ----------
    local
        `(3, n)` components 11, 22, 12 in the local axes.
    axes
        `(3, 3, n)` local axes as rows; the third is the normal.
    """

    def __init__(self, local: Floats, axes: Floats) -> None:
        self.local, self.axes = local, axes

    @cached_property
    def values(self) -> Floats:
        """Principal values `(2, n)`, largest first (Mohr's circle)."""
        middle, half = 0.5 * (self.local[0] + self.local[1]), 0.5 * (self.local[0] - self.local[1])
        radius = np.hypot(half, self.local[2])
        return np.stack([middle + radius, middle - radius])

    @cached_property
    def angle(self) -> Floats:
        """Angle `(n,)` from the first local axis to the first principal direction, radians."""
        angle: Floats = 0.5 * np.arctan2(2.0 * self.local[2], self.local[0] - self.local[1])
        return angle

    @cached_property
    def directions(self) -> Floats:
        """Unit principal directions `(2, 3, n)` in the axes of the file, first non-zero component positive."""
        cosine, sine = np.cos(self.angle), np.sin(self.angle)
        first, second = self.axes[0], self.axes[1]
        found = np.stack([cosine * first + sine * second, cosine * second - sine * first])
        for k in range(2):
            found[k] *= _symmetric.leading_sign(found[k])
        return found

    @cached_property
    def six(self) -> Floats:
        """The tensor in the axes of the file, `(6, n)`; nothing along the normal."""
        first, second = self.axes[0], self.axes[1]
        one, two, shear = self.local
        return np.stack(
            [
                one * first[i] * first[j]
                + two * second[i] * second[j]
                + shear * (first[i] * second[j] + second[i] * first[j])
                for i, j in PAIRS
            ]
        )


class SurfaceSplit:
    """Everything that follows from the surface gradient of some points, computed when first asked for.

    Parameters
    ----------
    H
        `(3, 3, n)` displacement gradient of surface elements, with the small completion.
    axes
        `(3, 3, n)` local axes as rows: two in the tangent plane, then the outward normal.
    poisson
        Poisson's ratio of the material, or None when the strain along the normal is not to be had.
    finite_H
        `F - I` with the normal of the deformed surface, for the rotation of finite measures.
    equivalent_poisson
        Effective Poisson ratio of the equivalent strain, or None for `sqrt(2/3 e':e')`.
    """

    def __init__(
        self,
        H: Floats,
        axes: Floats,
        poisson: float | None = None,
        finite_H: Floats | None = None,
        equivalent_poisson: float | None = None,
    ) -> None:
        self.H, self.axes = H, axes
        self._finite_H, self._equivalent_poisson = finite_H, equivalent_poisson
        self._known: dict[str, PlaneTensor] = {}
        self.thinning = None if poisson is None else -poisson / (1.0 - poisson)

    @cached_property
    def _along(self) -> tuple[Floats, Floats]:
        """Displacement differentiated along the two axes of the tangent plane, `(3, n)` each."""
        one, two = (np.einsum("ijn,jn->in", self.H, self.axes[k]) for k in range(2))
        return one, two

    @cached_property
    def small(self) -> PlaneTensor:
        """The small strain in the tangent plane."""
        one, two = self._along
        t, s = self.axes[0], self.axes[1]
        local = [(one * t).sum(axis=0), (two * s).sum(axis=0), 0.5 * (one * s + two * t).sum(axis=0)]
        return PlaneTensor(np.stack(local), self.axes)

    @cached_property
    def metric(self) -> PlaneTensor:
        """The Green-Lagrange strain in the tangent plane: half the change of the metric."""
        one, two = self._along
        half = 0.5 * np.stack([one * one, two * two, one * two]).sum(axis=1)
        return PlaneTensor(self.small.local + half, self.axes)

    def of_base(self, base: str) -> PlaneTensor:
        """Return the strain of a base, ``small`` or a finite one, in the tangent plane."""
        if base in ("small", "green_lagrange"):
            return self.small if base == "small" else self.metric
        if base not in self._known:
            one, two = _from_logarithm(base, self._logarithms)
            cosine, sine = np.cos(self.metric.angle), np.sin(self.metric.angle)
            c2, s2 = cosine * cosine, sine * sine
            local = np.stack([one * c2 + two * s2, one * s2 + two * c2, (one - two) * cosine * sine])
            self._known[base] = PlaneTensor(local, self.axes)
        return self._known[base]

    @cached_property
    def _logarithms(self) -> Floats:
        """Logarithms of the stretches in the tangent plane, `(2, n)`."""
        with np.errstate(invalid="ignore", divide="ignore"):
            logarithms: Floats = 0.5 * np.log1p(2.0 * self.metric.values)
        return logarithms

    def normal(self, base: str) -> Floats:
        """Return the strain along the normal of a surface without load, `(n,)`.

        Small: `-nu/(1-nu) (e_1 + e_2)`. Finite: from `ln l_n = -nu/(1-nu) (ln l_1 + ln l_2)`.
        """
        assert self.thinning is not None
        if base == "small":
            normal: Floats = self.thinning * (self.small.local[0] + self.small.local[1])
            return normal
        return _from_logarithm(base, self.thinning * self._logarithms.sum(axis=0))

    def equivalent(self, base: str) -> Floats:
        """Return the equivalent strain `(n,)` of the principal values in the plane and the one along the normal."""
        normal = self.normal(base)
        zero = np.zeros_like(normal)
        six = np.stack([*self.of_base(base).values, normal, zero, zero, zero])
        return _motion.equivalent(six, self._equivalent_poisson)

    @cached_property
    def rotation(self) -> Floats:
        """Small rotation vector, `(3, n)`."""
        return _motion.rotation_vector(self.H)

    @cached_property
    def finite(self) -> Finite:
        """The motion of surface and normal."""
        assert self._finite_H is not None
        return Finite(self._finite_H)


def _from_logarithm(base: str, logarithm: Floats) -> Floats:
    """Return the strain of a base whose stretch has this logarithm."""
    if base == "hencky":
        return logarithm
    factor = 1.0 if base == "biot" else 2.0
    strain: Floats = np.expm1(factor * logarithm) / factor
    return strain
