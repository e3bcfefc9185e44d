"""The options of `unturn.strain`: their names and defaults, and which of them fit each other."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from typing import Any, Literal

from unturn.errors import UsageError
from unturn.gradient import PlaneModel
from unturn.measures import ESTIMATES, GEOMETRY, MEASURES, base_of, choose_measures
from unturn.recovery import METHODS, Method
from unturn.result import Result
from unturn.surface import choose_surface_measures
from unturn.verdict import Solve

Place = Literal["centroid", "mean", "nodes", "surface", "quadrature"]
OWN_MESH: tuple[Place, ...] = ("surface", "quadrature")
"""Places whose values do not fit on the mesh of the file."""
Borders = Literal["dominant", "split"]
FacesTo = Literal["mesh", "cells"]
PLACES: tuple[Place, ...] = ("centroid", "mean", "nodes", "surface", "quadrature")


@dataclass(frozen=True)
class StrainOptions:
    """The options of `unturn.strain`, by the same names."""

    displacement: str | None = None
    measures: Sequence[str] | None = None
    base: str = "small"
    at: Place = "centroid"
    recovery: Method = "patch"
    solve: Solve = "unknown"
    plane: PlaneModel | None = None
    poisson: float | None = None
    axis: Literal["x", "y"] = "y"
    coordinates: Literal["reference", "deformed"] = "reference"
    displacement_scale: float = 1.0
    equivalent_poisson: float | None = None
    remove_rigid: str = "none"
    rigid_to: str | None = None
    rigid_axis: str | None = None
    frame: str | None = None
    thermal_expansion: str | float | None = None
    temperature: str | None = None
    reference_temperature: float | None = None
    skin: bool = False
    alive: str | None = None
    threads: int | None = None
    borders: Borders = "dominant"
    faces: FacesTo = "mesh"
    between_regions: bool = False
    surface: bool = False

    @property
    def own_mesh(self) -> bool:
        """Whether the values do not fit on the mesh of the file."""
        return self.at in OWN_MESH and not (self.at == "surface" and self.faces == "cells")


_CHOICES: dict[str, tuple[str | None, ...]] = {
    "at": PLACES,
    "recovery": METHODS,
    "solve": ("linear", "nonlinear", "unknown"),
    "plane": (None, "strain", "stress", "axisymmetric"),
    "axis": ("x", "y"),
    "coordinates": ("reference", "deformed"),
    "borders": ("dominant", "split"),
    "faces": ("mesh", "cells"),
}


def check_options(options: StrainOptions) -> None:
    """Refuse values that are not known, out of range, or without effect.

    Raises
    ------
    UsageError
        Such a value.
    """
    for name, known in _CHOICES.items():
        value = getattr(options, name)
        if value not in known:
            raise UsageError(
                f"{name}={value!r} is not known; use one of {', '.join(repr(k) for k in known)}."
            )
    _check_numbers(options)


def _check_numbers(options: StrainOptions) -> None:
    effective = options.equivalent_poisson
    if effective is not None and not -1.0 < effective <= 0.5:
        raise UsageError(
            f"--equivalent-poisson {effective:g}: an effective Poisson ratio lies between -1 and 0.5."
        )
    for name, at in (("borders", "nodes"), ("faces", "surface"), ("between_regions", "surface")):
        value = getattr(options, name)
        if value != getattr(StrainOptions(), name) and options.at != at:
            given = f"--{name.replace('_', '-')}" + ("" if value is True else f" {value}")
            raise UsageError(f"{given} belongs to --at {at}; without it, it does nothing.")
    reference = options.reference_temperature
    if reference is not None and not math.isfinite(reference):
        raise UsageError(f"--reference-temperature {reference:g} is not a temperature.")
    if options.axis != "y" and options.plane != "axisymmetric":
        raise UsageError(
            f"--axis {options.axis} belongs to --plane axisymmetric; without it, it does nothing."
        )


def measures_of(options: StrainOptions) -> tuple[str, ...]:
    """Return the names of the arrays that options ask for, on cells or at nodes.

    Raises
    ------
    UsageError
        A name that is not known, or that does not go with the place or the solve.
    """
    asked, surface = options.measures, options.at == "surface"
    if surface and asked and not isinstance(asked, str):
        choose_surface_measures(asked, options.base, options.poisson)  # it has names of its own
        asked = [n for n in (n.removeprefix("surface_") for n in asked) if n in MEASURES or n == "all"]
    only_of_surfaces = surface and not asked and bool(options.measures)
    names: tuple[str, ...] = ()
    if not only_of_surfaces:
        names = choose_measures(asked, options.base, options.thermal_expansion is not None)
    if options.at in ("nodes", "quadrature") and "all" in (options.measures or ()):
        names = tuple(n for n in names if n not in GEOMETRY or n in (options.measures or ()))
    finite = [n for n in names if is_finite(n)]
    if finite and options.solve == "linear":
        raise UsageError(
            f"finite measures ({finite[0]} ...) of a geometrically linear solve are fiction: the solve itself used the small "
            "strain. Ask for the "
            "small measures, or state --solve nonlinear if it was."
        )
    estimates = [n for n in names if n in ESTIMATES]
    if estimates and options.at in OWN_MESH:
        raise UsageError(
            f"{estimates[0]} belongs to the cells and nodes of the mesh: ask for it with --at centroid, mean or nodes."
        )
    return names


def is_finite(name: str) -> bool:
    """Return whether an array comes from finite strain or rotation."""
    return MEASURES[name].finite if name in MEASURES else bool(base_of(name))


def told(options: StrainOptions, zero: Result | None) -> dict[str, Any]:
    """Return what was asked for beyond the defaults, by option name, and the zero step."""
    default = StrainOptions()
    given = {
        k: v
        for k, v in asdict(options).items()
        if v != getattr(default, k) and k not in ("threads", "surface")
    }
    if zero is not None:
        given["zero_step"] = None if zero.steps is None else zero.steps.current
    return given
