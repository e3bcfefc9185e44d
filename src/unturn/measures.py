"""The table of small-strain measures: what each is called, what it needs, how it follows from the gradient."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from unturn.errors import UsageError, close_matches
from unturn.kinematics import _motion, _symmetric
from unturn.kinematics._symmetric import Floats
from unturn.source import Source

TENSOR = ("XX", "YY", "ZZ", "XY", "YZ", "XZ")
VECTOR = ("X", "Y", "Z")
FULL = ("XX", "XY", "XZ", "YX", "YY", "YZ", "ZX", "ZY", "ZZ")
PRINCIPAL = ("1", "2", "3")


class Split:
    """Everything that follows from the gradient of some points, computed when first asked for.

    Parameters
    ----------
    H
        `(3, 3, n)` displacement gradient.
    poisson
        Effective Poisson ratio of the equivalent strain, or None for `sqrt(2/3 e':e')`.
    directions
        Whether principal directions will be asked for.
    finite_H
        `(3, 3, n)` gradient with the completion for finite measures, when it differs from H.
    """

    def __init__(
        self,
        H: Floats,
        poisson: float | None = None,
        directions: bool = False,
        finite_H: Floats | None = None,
    ) -> None:
        self.H = H
        self.poisson = poisson
        self._directions = directions
        self._finite_H = finite_H if finite_H is not None else H

    @cached_property
    def strain(self) -> Floats:
        """Small strain, `(6, n)`."""
        return _symmetric.six_from_full(self.H)

    @cached_property
    def rotation(self) -> Floats:
        """Small rotation vector, `(3, n)`."""
        return _motion.rotation_vector(self.H)

    @cached_property
    def eigen(self) -> tuple[Floats, Floats]:
        """Principal values `(3, n)` and directions `(3, 3, n)`."""
        return _symmetric.eigen(self.strain)

    @cached_property
    def principal(self) -> Floats:
        """Principal values, `(3, n)`."""
        return self.eigen[0] if self._directions else _symmetric.eigenvalues(self.strain)

    @cached_property
    def finite_H(self) -> Floats:
        """`F - I`, `(3, 3, n)`; a plane mesh whose third direction is not stated counts as not stretched across."""
        H = self._finite_H
        for k in range(3):
            if np.isnan(H[k, k]).all():
                H = H.copy()
                H[k, k] = 0.0
        return H

    @cached_property
    def turning(self) -> _motion.Turning:
        """Error, size and angle of the small-strain split."""
        return _motion.turning(self.finite_H)


@dataclass(frozen=True)
class Measure:
    """One measure.

    Parameters
    ----------
    name
        Array name, fixed: users' scripts depend on it.
    components
        Names of the components; empty for a scalar.
    compute
        From a `Split`, `(components, n)` or `(n,)`.
    unit
        ``strain`` (dimensionless), ``radian``, ``1``.
    needs_third
        Whether a plane mesh must state its third direction first.
    signed
        Whether low percentiles say something.
    meaning
        One line for people.
    source
        Where the formula comes from.
    directions
        Whether it needs principal directions.
    """

    name: str
    components: tuple[str, ...]
    compute: Callable[[Split], Floats]
    unit: str
    needs_third: bool
    signed: bool
    meaning: str
    source: Source
    directions: bool = False


_ELASTICITY = Source("published", "Timoshenko and Goodier, Theory of Elasticity, chapters 1 and 7")


def _direction(k: int) -> Callable[[Split], Floats]:
    return lambda s: s.eigen[1][k]


def _table() -> dict[str, Measure]:
    rows = [
        Measure("strain", TENSOR, lambda s: s.strain, "strain", False, True,
                "small strain tensor, tensor shear", _ELASTICITY),
        Measure("rotation", VECTOR, lambda s: s.rotation, "radian", False, True,
                "small rotation vector, curl(u)/2", _ELASTICITY),
        Measure("rotation_angle", (), lambda s: _motion.length(s.rotation), "radian", False, False,
                "small rotation angle, length of the rotation vector", _ELASTICITY),
        Measure("equivalent_strain", (), lambda s: _motion.equivalent(s.strain, s.poisson), "strain", True, False,
                "equivalent strain of the total strain",
                Source("practice", "von Mises form sqrt(2/3 e':e') of the strain deviator")),
        Measure("principal_strain", PRINCIPAL, lambda s: s.principal, "strain", True, True,
                "principal strains, largest first", _ELASTICITY),
        *(
            Measure(f"principal_direction_{k + 1}", VECTOR, _direction(k), "1", True, True,
                    f"unit direction of principal strain {k + 1}", _ELASTICITY, directions=True)
            for k in range(3)
        ),
        Measure("max_shear_strain", (), lambda s: s.principal[0] - s.principal[2], "strain", True, False,
                "largest engineering shear strain, e1 - e3", _ELASTICITY),
        Measure("volumetric_strain", (), lambda s: s.strain[0] + s.strain[1] + s.strain[2], "strain", True, True,
                "trace of the small strain", _ELASTICITY),
        Measure("deviatoric_strain", TENSOR, lambda s: _motion.deviator(s.strain), "strain", True, True,
                "strain less a third of its trace", _ELASTICITY),
        Measure("displacement_gradient", FULL, lambda s: s.H.reshape(9, -1), "strain", False, True,
                "du_i/dX_j, row-major", Source("published", "Hughes 2000, The Finite Element Method, section 3.9")),
        Measure("small_strain_error", (), lambda s: s.turning.error, "strain", False, False,
                "norm(e - (U - I)): what turning adds to the small strain",
                Source("derived", "polar decomposition F = R U")),
    ]  # fmt: skip
    return {row.name: row for row in rows}


MEASURES: dict[str, Measure] = _table()

GEOMETRY: dict[str, str] = {
    "element_volume": "reference volume, area or length of the cell",
    "jacobian_min_over_max": "smallest over largest Jacobian determinant at the quadrature points",
}
"""Measures of the mesh alone."""

DEFAULT_MEASURES = ("strain", "rotation", "equivalent_strain", "principal_strain")


def choose_measures(names: list[str] | tuple[str, ...] | None) -> tuple[str, ...]:
    """Return the names asked for, in table order, without repeats; ``all`` is every small measure.

    Raises
    ------
    UsageError
        A name that is not in the table.

    Examples
    --------
    >>> choose_measures(["rotation", "strain"])
    ('strain', 'rotation')
    """
    known = [*MEASURES, *GEOMETRY]
    if not names:
        return DEFAULT_MEASURES
    wanted: set[str] = set()
    for name in names:
        if name == "all":
            wanted.update(known)
        elif name in known:
            wanted.add(name)
        else:
            raise UsageError(
                f"no measure is called {name!r}.{close_matches(name, [*known, 'all'])} "
                f"Measures: {', '.join(known)}, or all."
            )
    return tuple(k for k in known if k in wanted)
