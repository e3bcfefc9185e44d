"""The table of small-strain measures: what each is called, what it needs, how it follows from the gradient."""

from __future__ import annotations

from collections.abc import Callable, Collection, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import cast

import numpy as np

from unturn.errors import UsageError, close_matches
from unturn.kinematics import _motion, _symmetric, _turning
from unturn.kinematics._finite import BASES, Finite
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
    free
        `(6, n)` free thermal strain, for the mechanical strain.
    """

    def __init__(
        self,
        H: Floats,
        poisson: float | None = None,
        directions: bool = False,
        finite_H: Floats | None = None,
        free: Floats | None = None,
    ) -> None:
        self.H = H
        self.poisson = poisson
        self._directions = directions
        self._finite_H = finite_H if finite_H is not None else H
        self._free = free

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
    def mechanical(self) -> Floats:
        """Strain less the free thermal strain, `(6, n)`."""
        assert self._free is not None
        return self.strain - self._free

    @cached_property
    def mechanical_eigen(self) -> tuple[Floats, Floats]:
        """Principal values and directions of the mechanical strain."""
        return _symmetric.eigen(self.mechanical)

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
    def finite(self) -> Finite:
        """Finite measures of the same points."""
        return Finite(self.finite_H)

    @cached_property
    def turning(self) -> _turning.Turning:
        """Error, size and angle of the small-strain split."""
        return _turning.turning(self.finite_H)


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
    finite
        Whether it is a finite measure: real only for a geometrically nonlinear solve.
    mechanical
        Whether it needs a free thermal strain.
    base
        The small measure it replaces when a finite base is asked for; empty for those that have no counterpart.
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
    finite: bool = False
    mechanical: bool = False
    base: str = ""

    @property
    def turns(self) -> bool:
        """Whether its components depend on the frame; principal values do not, directions stay in the file's axes."""
        return bool(self.components) and not self.name.startswith("principal_")


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
        Measure("displacement_gradient", FULL, lambda s: s.H.reshape(9, -1), "1", False, True,
                "du_i/dX_j, row-major", Source("published", "Hughes 2000, The Finite Element Method, section 3.9")),
        Measure("small_strain_error", (), lambda s: s.turning.error, "strain", False, False,
                "norm(e - (U - I)): what turning adds to the small strain",
                Source("derived", "polar decomposition F = R U")),
    ]  # fmt: skip
    return {row.name: row for row in rows}


_FINITE = Source("published", "Holzapfel 2000, Nonlinear Solid Mechanics, sections 2.5 and 2.6")
_BASE_WORDS = {
    "green_lagrange": "Green-Lagrange strain (H + H^T + H^T H)/2",
    "hencky": "Hencky (logarithmic) strain ln U",
    "biot": "Biot strain U - I",
    "almansi": "Almansi strain F^-T E F^-1",
}


def _tensor(base: str) -> Callable[[Split], Floats]:
    return lambda s: cast(Floats, getattr(s.finite, base))


def _values(base: str) -> Callable[[Split], Floats]:
    return lambda s: cast(Floats, getattr(s.finite, base + "_values"))


def _finite_direction(base: str, k: int) -> Callable[[Split], Floats]:
    which = "spatial_directions" if base == "almansi" else "material_directions"
    return lambda s: cast(Floats, getattr(s.finite, which))[k]


def _finite_rows(base: str) -> list[Measure]:
    """Return a finite strain and the measures derived from it; their names carry the base."""
    tensor, values, word = _tensor(base), _values(base), _BASE_WORDS[base]

    def row(small: str, components: tuple[str, ...], compute: Callable[[Split], Floats], unit: str, signed: bool,
            meaning: str) -> Measure:  # fmt: skip
        name = f"strain_{base}" if small == "strain" else f"{small}_{base}"
        return Measure(
            name, components, compute, unit, True, signed, meaning, _FINITE, finite=True, base=small
        )

    return [
        row("strain", TENSOR, tensor, "strain", True, word),
        row("equivalent_strain", (), lambda s: _motion.equivalent(tensor(s), s.poisson), "strain", False,
            f"equivalent strain of the {word}"),
        row("principal_strain", PRINCIPAL, values, "strain", True, f"principal values of the {word}, largest first"),
        *(
            row(f"principal_direction_{k + 1}", VECTOR, _finite_direction(base, k), "1", True,
                f"unit direction of principal value {k + 1} of the {word}")
            for k in range(3)
        ),
        row("max_shear_strain", (), lambda s: values(s)[0] - values(s)[2], "strain", False,
            f"largest less smallest principal value of the {word}"),
        row("volumetric_strain", (), lambda s: tensor(s)[0] + tensor(s)[1] + tensor(s)[2], "strain", True,
            f"trace of the {word}"),
        row("deviatoric_strain", TENSOR, lambda s: _motion.deviator(tensor(s)), "strain", True,
            f"{word} less a third of its trace"),
    ]  # fmt: skip


def _finite_motion() -> list[Measure]:
    return [
        Measure("finite_rotation", VECTOR, lambda s: s.finite.rotation, "radian", False, True,
                "rotation vector of R, angle times axis", _FINITE, finite=True, base="rotation"),
        Measure("finite_rotation_angle", (), lambda s: s.finite.rotation_angle, "radian", False, False,
                "angle of R, 0 to pi", _FINITE, finite=True, base="rotation_angle"),
        Measure("det_f", (), lambda s: s.finite.det_f, "1", True, True,
                "determinant of F: deformed over undeformed volume", _FINITE, finite=True),
    ]  # fmt: skip


def _mechanical_rows() -> list[Measure]:
    word = "mechanical strain (total less free thermal strain)"
    source = Source("published", "Timoshenko and Goodier, Theory of Elasticity, chapter 13")

    def row(name: str, components: tuple[str, ...], compute: Callable[[Split], Floats], unit: str, signed: bool,
            meaning: str) -> Measure:  # fmt: skip
        return Measure(name, components, compute, unit, True, signed, meaning, source, mechanical=True)

    return [
        row("mechanical_strain", TENSOR, lambda s: s.mechanical, "strain", True, word),
        row("equivalent_strain_mechanical", (), lambda s: _motion.equivalent(s.mechanical, s.poisson), "strain", False,
            f"equivalent strain of the {word}"),
        row("principal_strain_mechanical", PRINCIPAL, lambda s: s.mechanical_eigen[0], "strain", True,
            f"principal values of the {word}, largest first"),
        *(
            row(f"principal_direction_{k + 1}_mechanical", VECTOR, _mechanical_direction(k), "1", True,
                f"unit direction of principal value {k + 1} of the {word}")
            for k in range(3)
        ),
        row("max_shear_strain_mechanical", (), lambda s: s.mechanical_eigen[0][0] - s.mechanical_eigen[0][2], "strain",
            False, f"largest engineering shear of the {word}"),
        row("volumetric_strain_mechanical", (), lambda s: s.mechanical[0] + s.mechanical[1] + s.mechanical[2],
            "strain", True, f"trace of the {word}"),
        row("deviatoric_strain_mechanical", TENSOR, lambda s: _motion.deviator(s.mechanical), "strain", True,
            f"{word} less a third of its trace"),
    ]  # fmt: skip


def _mechanical_direction(k: int) -> Callable[[Split], Floats]:
    return lambda s: s.mechanical_eigen[1][k]


SMALL: dict[str, Measure] = _table()
"""The measures of the small-strain split."""

MEASURES: dict[str, Measure] = {
    **SMALL,
    **{row.name: row for row in _finite_motion()},
    **{row.name: row for base in BASES for row in _finite_rows(base)},
    **{row.name: row for row in _mechanical_rows()},
}
"""Every measure of the gradient."""

GEOMETRY: dict[str, str] = {
    "element_volume": "reference volume, area or length of the cell",
    "jacobian_min_over_max": "smallest over largest Jacobian determinant at the quadrature points",
}
"""Measures of the mesh alone."""

SURFACE_AXES: dict[str, str] = {
    "surface_direction_1": "first axis within the surface: the direction x laid into it",
    "surface_direction_2": "second axis within the surface",
    "surface_normal": "unit normal of the surface, right-handed with the order of the nodes",
}
"""Axes of the frame of a surface mesh, on request only."""

ESTIMATES: dict[str, str] = {
    name + (f"_{base}" if base else ""): meaning + (f", of the {_BASE_WORDS[base]}" if base else "")
    for base in ("", *BASES)
    for name, meaning in (
        ("strain_error", "root mean square over the cell of norm(e* - e): recovered less its own strain"),
        ("strain_jump", "largest norm(e_a - e_b) between cells of one region that meet at a node"),
    )
}
"""Estimates of how far a strain can be trusted, on request only: they need the gradient at nodes."""

DEFAULT_MEASURES = ("strain", "rotation", "equivalent_strain", "principal_strain")
DEFAULT_MECHANICAL = ("mechanical_strain", "equivalent_strain_mechanical", "principal_strain_mechanical")


def choose_measures(
    names: Sequence[str] | None,
    base: str = "small",
    mechanical: bool = False,
    others: Collection[str] = (),
) -> tuple[str, ...]:
    """Return the names asked for, in table order, without repeats.

    Parameters
    ----------
    names
        Array names; ``all`` is every small measure. None: the default set.
    base
        ``small``, or a finite base: each small measure is then replaced by its counterpart of that base.
    mechanical
        Whether a free thermal strain is given: the default set then has the mechanical strain too.
    others
        Names that are chosen elsewhere, but may be meant by an unknown one.

    Raises
    ------
    UsageError
        No name, a name or base that is not in the table, or a mechanical measure without a free thermal strain.

    Examples
    --------
    >>> choose_measures(["rotation", "strain"])
    ('strain', 'rotation')
    >>> choose_measures(["rotation", "strain"], base="green-lagrange")
    ('finite_rotation', 'strain_green_lagrange')
    """
    known = [*MEASURES, *GEOMETRY, *SURFACE_AXES, *ESTIMATES]
    counterpart = _counterparts(base)
    wanted: set[str] = set()
    if isinstance(names, str):
        raise UsageError(f"measures={names!r} is one text; give a list of names: [{names!r}].")
    if names is not None and not len(names):
        raise UsageError("no measure is named; leave --measures away for the default set, or name some.")
    if names is None:
        names = (*DEFAULT_MEASURES, *(DEFAULT_MECHANICAL if mechanical else ()))
    for name in names:
        if name == "all":
            wanted.update(counterpart.get(k, k) for k in (*SMALL, *GEOMETRY))
            if mechanical:
                wanted.update(k for k, m in MEASURES.items() if m.mechanical)
        elif name in known:
            wanted.add(counterpart.get(name, name))
        else:
            raise UsageError(
                f"no measure is called {name!r}.{close_matches(name, [*known, 'all', *others])} "
                f"Measures: {', '.join((*SMALL, *GEOMETRY))}, or all; beside them: strain_error, strain_jump; finite ones: "
                f"{', '.join(_finite_names())}."
            )
    bound = [k for k in wanted if k in MEASURES and MEASURES[k].mechanical]
    if bound and not mechanical:
        raise UsageError(
            f"{min(bound)} needs the free thermal strain: give --thermal-expansion, --temperature and "
            "--reference-temperature."
        )
    return tuple(k for k in known if k in wanted)


def _finite_names() -> list[str]:
    plain = [
        m.name
        for m in MEASURES.values()
        if m.finite and m.base in ("", "strain", "rotation", "rotation_angle")
    ]
    return [*plain, "and those derived from a strain, as equivalent_strain_hencky"]


def _counterparts(base: str) -> dict[str, str]:
    """Return for each small measure its counterpart of a finite base."""
    if base == "small":
        return {}
    key = base.replace("-", "_")
    if key not in BASES:
        names = ["small", *(b.replace("_", "-") for b in BASES)]
        raise UsageError(
            f"no base is called {base!r}.{close_matches(base, names)} Bases: {', '.join(names)}."
        )
    rows = [*_finite_motion(), *_finite_rows(key)]
    estimates = {n: f"{n}_{key}" for n in ("strain_error", "strain_jump")}
    return {**{row.base: row.name for row in rows if row.base}, **estimates}


def base_of(name: str) -> str:
    """Return the finite base in the name of an array; empty for none.

    Examples
    --------
    >>> base_of("strain_error_green_lagrange"), base_of("strain_error")
    ('green_lagrange', '')
    """
    return next((b for b in BASES if name.endswith(f"_{b}")), "")
