"""The options of `unturn.strain` on the command line: declared once, for every command that computes strain."""

from __future__ import annotations

import inspect
from collections.abc import Callable, Sequence
from enum import Enum
from typing import Annotated, Any, get_type_hints

import typer

from unturn.cli import _options as o

Measures = Annotated[
    str | None,
    typer.Option(
        metavar="LIST",
        help="Arrays to add, by comma; 'all' for every small one. "
        "Default: strain,rotation,equivalent_strain,principal_strain.",
    ),
]
At = Annotated[o.PlaceChoice, typer.Option(help="Where values are taken.")]
CellsOnly = Annotated[o.LocationChoice, typer.Option(help="Where values are taken.")]
"""Instead of `At`, for commands that compute on cells alone."""

# StrainOptions field -> how it is declared, and its default; in the order of --help
_OPTIONS: dict[str, tuple[Any, Any]] = {
    "measures": (Measures, None),
    "base": (
        Annotated[
            o.BaseChoice, typer.Option(help="Replace each small measure by its counterpart of this finite base.")
        ],
        o.BaseChoice.small,
    ),
    "at": (At, o.PlaceChoice.centroid),
    "recovery": (
        Annotated[
            o.RecoveryChoice,
            typer.Option(help="How the gradient gets to the nodes, with --at nodes and for strain_error."),
        ],
        o.RecoveryChoice.patch,
    ),
    "borders": (
        Annotated[
            o.BordersChoice,
            typer.Option(
                help="With --at nodes, a point on the border of regions: the value of the dominant one, or "
                "duplicated, one for each region.",
            ),
        ],
        o.BordersChoice.dominant,
    ),
    "faces": (
        Annotated[
            o.FacesChoice,
            typer.Option(
                help="With --at surface: the free faces as a mesh of their own, or their values on the cells of the "
                "file, of the face with the largest principal strain.",
            ),
        ],
        o.FacesChoice.mesh,
    ),
    "between_regions": (
        Annotated[
            bool,
            typer.Option(
                "--between-regions",
                help="With --at surface: also the faces between cells of different regions.",
            ),
        ],
        False,
    ),
    "solve": (
        Annotated[o.SolveChoice, typer.Option(help="What the solve was; it decides what the verdict says.")],
        o.SolveChoice.unknown,
    ),
    "displacement": (o.Displacement, None),
    "displacement_scale": (o.Scale, 1.0),
    "coordinates": (o.Coordinates, o.CoordinatesChoice.reference),
    "plane": (o.Plane, None),
    "axis": (o.Axis, o.AxisChoice.y),
    "poisson": (o.Poisson, None),
    "equivalent_poisson": (
        Annotated[
            float | None,
            typer.Option(
                metavar="NU", help="Equivalent strain as 1/(1+NU) times the norm of the principal differences."
            ),
        ],
        None,
    ),
    "remove_rigid": (
        Annotated[
            str,
            typer.Option(
                "--remove-rigid",
                metavar="none|whole|bodies|regions|REGION",
                help="Take the rigid motion of these out first.",
            ),
        ],
        "none",
    ),
    "rigid_to": (
        Annotated[
            str | None,
            typer.Option(metavar="REGION|whole", help="Take it out of this part instead of the one it is of."),
        ],
        None,
    ),
    "rigid_axis": (
        Annotated[
            str | None,
            typer.Option(
                metavar="AXIS", help="Known axis instead of the full fit: '0,0,1 through 10,0,0'."
            ),
        ],
        None,
    ),
    "frame": (
        Annotated[
            str | None,
            typer.Option(
                metavar="FRAME",
                help="Axes of the components: 'cylindrical z', 'cylindrical 0,0,1 through 10,0,0', "
                "'cartesian 1,1,0 0,0,1', 'surface', or 'arrays FIRST SECOND' (cell arrays).",
            ),
        ],
        None,
    ),
    "thermal_expansion": (
        Annotated[
            str | None,
            typer.Option(
                metavar="ALPHA",
                help="Free thermal strain to take out: a number, three by comma along the axes of "
                "the frame, or by region 'part=1:12e-6;part=2:23e-6'.",
            ),
        ],
        None,
    ),
    "temperature": (
        Annotated[
            str | None, typer.Option(metavar="ARRAY", help="Point or cell array of temperature.")
        ],
        None,
    ),
    "reference_temperature": (
        Annotated[
            float | None, typer.Option(metavar="T0", help="Temperature without thermal strain.")
        ],
        None,
    ),
    "alive": (o.Alive, None),
    "skin": (o.Skin, False),
    "threads": (o.Threads, None),
}  # fmt: skip

PLACES = ("borders", "faces", "between_regions")
"""Options of values at nodes and on free faces, for commands that write those."""

EVERY = tuple(name for name in _OPTIONS if name not in PLACES)
"""Every other option of `unturn.strain`."""


def strain_options(*names: str, **instead: Any) -> Callable[[Callable[..., None]], Callable[..., None]]:
    """Return a decorator that gives a command these options, and the command its `options: StrainOptions`.

    Parameters
    ----------
    *names
        Fields of `StrainOptions`; in --help they stand where the command has its keyword-only `options`.
    **instead
        Field -> another declaration, ``at=CellsOnly``, with the same default.

    Examples
    --------
    >>> @strain_options("plane", "poisson", "at", at=CellsOnly)
    ... def command(file: str, *, options: StrainOptions) -> None:
    ...     print(file, options.plane, options.poisson, options.at)
    >>> command(file="plate.vtu", plane=o.PlaneChoice.stress, poisson=0.3, at=o.LocationChoice.mean)
    plate.vtu stress 0.3 mean
    """

    def decorate(command: Callable[..., None]) -> Callable[..., None]:
        def with_options(**given: Any) -> None:
            from unturn.options import StrainOptions

            asked = {name: _plain(name, given.pop(name)) for name in names}
            command(**given, options=StrainOptions(**asked))

        hints = get_type_hints(command, localns={"StrainOptions": object}, include_extras=True)
        declared = []
        for own in inspect.signature(command).parameters.values():
            if own.name == "options":
                for name in names:
                    kind, default = _OPTIONS[name]
                    declared.append((name, instead.get(name, kind), default))
            else:
                declared.append((own.name, hints[own.name], own.default))
        declare(with_options, command, declared)
        return with_options

    return decorate


def declare(
    shown: Callable[..., None], command: Callable[..., None], options: Sequence[tuple[str, Any, Any]]
) -> None:
    """Give a function the name and help of a command, and options as `(name, annotation, default)` as its parameters."""
    shown.__name__, shown.__doc__ = command.__name__, command.__doc__
    shown.__annotations__ = {name: kind for name, kind, _ in options}
    shown.__signature__ = inspect.Signature(  # type: ignore[attr-defined]
        [
            inspect.Parameter(name, inspect.Parameter.KEYWORD_ONLY, default=default, annotation=kind)
            for name, kind, default in options
        ]
    )


def _plain(name: str, value: Any) -> Any:
    """Return an option's value as the library takes it."""
    if name == "measures" and value is not None:
        return [m.strip() for m in value.split(",") if m.strip()]
    return value.value if isinstance(value, Enum) else value


__all__ = ["EVERY", "PLACES", "At", "CellsOnly", "Measures", "declare", "strain_options"]
