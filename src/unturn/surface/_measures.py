"""The table of measures on a surface: what each is called, what it needs, how it follows from the surface gradient."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from unturn.errors import UsageError, close_matches
from unturn.kinematics import _motion
from unturn.kinematics._symmetric import Floats
from unturn.measures import TENSOR, VECTOR
from unturn.source import Source
from unturn.surface._split import BASES, SurfaceSplit

PRINCIPAL = ("1", "2")
IN_PLANE = ("11", "22", "12")


@dataclass(frozen=True)
class SurfaceMeasure:
    """One measure on a surface.

    Parameters
    ----------
    name
        Array name, fixed.
    replaces
        The measure of cells whose place it takes: ``strain``, ``principal_strain`` ...
    base
        ``small``, or the finite base.
    components
        Names of the components; empty for a scalar.
    compute
        From a `SurfaceSplit`, `(components, n)` or `(n,)`.
    needs_normal
        Whether it needs the strain along the normal, and so Poisson's ratio.
    meaning
        One line for people.
    source
        Where the formula comes from.
    """

    name: str
    replaces: str
    base: str
    components: tuple[str, ...]
    compute: Callable[[SurfaceSplit], Floats]
    needs_normal: bool
    meaning: str
    source: Source

    @property
    def finite(self) -> bool:
        """Whether it is a finite measure."""
        return self.base != "small"

    @property
    def moves(self) -> bool:
        """Whether it needs the deformed normal."""
        return self.replaces in ("finite_rotation", "finite_rotation_angle")


_SURFACE = Source(
    "published", "Timoshenko and Goodier, Theory of Elasticity, articles 10 and 16 (plane stress)"
)
_METRIC = Source("published", "Holzapfel 2000, Nonlinear Solid Mechanics, section 2.5, in the tangent plane")
_WORDS = {"small": "small strain", "green_lagrange": "Green-Lagrange strain", "hencky": "Hencky strain",
          "biot": "Biot strain"}  # fmt: skip


def _direction(base: str, k: int) -> Callable[[SurfaceSplit], Floats]:
    return lambda s: s.of_base(base).directions[k]


def _rows(base: str) -> list[SurfaceMeasure]:
    word = _WORDS[base]
    ending = "" if base == "small" else f"_{base}"
    source = _SURFACE if base == "small" else _METRIC

    def row(replaces: str, components: tuple[str, ...], compute: Callable[[SurfaceSplit], Floats], needs_normal: bool,
            meaning: str) -> SurfaceMeasure:  # fmt: skip
        name = f"surface_{replaces}{ending}"
        return SurfaceMeasure(name, replaces, base, components, compute, needs_normal, meaning, source)

    return [
        row("strain", TENSOR, lambda s: s.of_base(base).six, False,
            f"{word} in the tangent plane, axes of the file"),
        row("in_plane_strain", IN_PLANE, lambda s: s.of_base(base).local, False, f"{word} in the local axes"),
        row("principal_strain", PRINCIPAL, lambda s: s.of_base(base).values, False,
            f"principal values of the {word} in the tangent plane"),
        *(
            row(f"principal_direction_{k + 1}", VECTOR, _direction(base, k), False,
                f"unit direction of principal value {k + 1} in the tangent plane")
            for k in range(2)
        ),
        row("max_shear_strain", (), lambda s: s.of_base(base).values[0] - s.of_base(base).values[1], False,
            f"largest engineering shear in the tangent plane, of the {word}"),
        row("normal_strain", (), lambda s: s.normal(base), True, f"{word} along the normal, of a surface without load"),
        row("equivalent_strain", (), lambda s: s.equivalent(base), True,
            f"equivalent strain of the {word}"),
    ]  # fmt: skip


def _motion_rows() -> list[SurfaceMeasure]:
    def row(replaces: str, base: str, components: tuple[str, ...], compute: Callable[[SurfaceSplit], Floats],
            meaning: str) -> SurfaceMeasure:  # fmt: skip
        source = _SURFACE if base == "small" else _METRIC
        return SurfaceMeasure(
            f"surface_{replaces}", replaces, base, components, compute, False, meaning, source
        )

    return [
        row("rotation", "small", VECTOR, lambda s: s.rotation, "small rotation vector of surface and normal"),
        row("rotation_angle", "small", (), lambda s: _motion.length(s.rotation), "its length"),
        row("finite_rotation", "finite", VECTOR, lambda s: s.finite.rotation, "rotation vector of surface and normal"),
        row("finite_rotation_angle", "finite", (), lambda s: s.finite.rotation_angle, "its angle, 0 to pi"),
    ]  # fmt: skip


SURFACE_MEASURES: dict[str, SurfaceMeasure] = {
    m.name: m for m in (*_rows("small"), *_motion_rows(), *(m for b in BASES for m in _rows(b)))
}
"""Every measure on a surface, by array name."""

DEFAULT = ("strain", "rotation", "equivalent_strain", "principal_strain", "normal_strain")


def choose_surface_measures(
    names: Sequence[str] | None = None, base: str = "small", poisson: float | None = None
) -> tuple[str, ...]:
    """Return the array names of the measures asked for, in table order, without repeats.

    Parameters
    ----------
    names
        Names of measures on cells (``strain``, ``principal_strain``) or of arrays (``surface_strain``); ``all`` is every
        small measure. None: the default set. Those that need the strain along the normal are then left out without
        Poisson's ratio.
    base
        ``small``, ``green-lagrange``, ``hencky`` or ``biot``: each small measure is then replaced by its counterpart.
    poisson
        Poisson's ratio of the material, or None.

    Raises
    ------
    UsageError
        A name or base that is not known here, or one that needs Poisson's ratio.

    Examples
    --------
    >>> choose_surface_measures(["rotation", "strain"])
    ('surface_strain', 'surface_rotation')
    >>> choose_surface_measures(["strain", "rotation"], base="hencky")
    ('surface_finite_rotation', 'surface_strain_hencky')
    """
    key = base.replace("-", "_")
    if key not in ("small", *BASES):
        known = ["small", *(b.replace("_", "-") for b in BASES)]
        raise UsageError(
            f"no base on surfaces is called {base!r}.{close_matches(base, known)} Bases: {', '.join(known)}."
        )
    small = [m for m in SURFACE_MEASURES.values() if not m.finite]
    wanted: set[str] = set()
    for name in names if names is not None else DEFAULT:
        every = name == "all"
        for row in [
            _counterpart(m.replaces if every else name, key) for m in (small if every else small[:1])
        ]:
            if not row.needs_normal or poisson is not None:
                wanted.add(row.name)
            elif names is not None and not every:
                raise UsageError(
                    f"{row.name} needs the strain along the normal, which a surface does not show: state Poisson's "
                    "ratio with --poisson NU."
                )
    return tuple(n for n in SURFACE_MEASURES if n in wanted)


def _counterpart(name: str, base: str) -> SurfaceMeasure:
    """Return the measure on a surface of a measure's name, in this base where it has a counterpart."""
    row = SURFACE_MEASURES.get(name) or SURFACE_MEASURES.get(f"surface_{name}")
    if row is None:
        known = [*(n.removeprefix("surface_") for n, m in SURFACE_MEASURES.items() if not m.finite), "all"]
        raise UsageError(
            f"no measure on surfaces is called {name!r}.{close_matches(name, known)} Measures: {', '.join(known)}."
        )
    if base == "small" or row.finite:
        return row
    if row.replaces in ("rotation", "rotation_angle"):
        return SURFACE_MEASURES[f"surface_finite_{row.replaces}"]
    return SURFACE_MEASURES[f"surface_{row.replaces}_{base}"]
