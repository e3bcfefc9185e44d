"""Options that several commands share, declared once."""

from __future__ import annotations

from enum import StrEnum
from pathlib import Path
from typing import Annotated

import typer


class SolveChoice(StrEnum):
    """Kind of solve."""

    linear = "linear"
    nonlinear = "nonlinear"
    unknown = "unknown"


class PlaneChoice(StrEnum):
    """Assumption on the third direction of a plane mesh."""

    strain = "strain"
    stress = "stress"
    axisymmetric = "axisymmetric"


class AxisChoice(StrEnum):
    """Axis of revolution."""

    x = "x"
    y = "y"


class BaseChoice(StrEnum):
    """Strain measure that the others derive from."""

    small = "small"
    green_lagrange = "green-lagrange"
    hencky = "hencky"
    biot = "biot"
    almansi = "almansi"


class LocationChoice(StrEnum):
    """Where values of cells live."""

    centroid = "centroid"
    mean = "mean"


class PlaceChoice(StrEnum):
    """Where values live."""

    centroid = "centroid"
    mean = "mean"
    nodes = "nodes"
    surface = "surface"
    quadrature = "quadrature"


class RecoveryChoice(StrEnum):
    """How the gradient gets to nodes."""

    patch = "patch"
    extrapolate = "extrapolate"
    average = "average"


class BordersChoice(StrEnum):
    """What a point on the border of regions shows."""

    dominant = "dominant"
    apart = "split"  # the name would hide a method of str


class FacesChoice(StrEnum):
    """Where the values of free faces go."""

    mesh = "mesh"
    cells = "cells"


class CoordinatesChoice(StrEnum):
    """What the coordinates of the file are."""

    reference = "reference"
    deformed = "deformed"


Displacement = Annotated[
    str | None,
    typer.Option(metavar="NAME", help="Point array that holds the displacement, or three scalars: ux,uy,uz."),
]
Table = Annotated[
    Path | None,
    typer.Option(
        "--displacement-table",
        metavar="FILE.csv",
        help="Displacements by node number, for a mesh without.",
        readable=False,
    ),
]
Scale = Annotated[
    float,
    typer.Option(
        "--displacement-scale", metavar="X", help="Factor from the displacement's unit to the mesh's."
    ),
]
Coordinates = Annotated[
    CoordinatesChoice, typer.Option(help="Whether the file's coordinates are already deformed.")
]
Step = Annotated[str, typer.Option(metavar="last|all|N", help="Step of a series; N counts from zero.")]
ZeroStep = Annotated[
    int | None, typer.Option(metavar="N", help="Measure displacements from this step of the series.")
]
Prefix = Annotated[str, typer.Option(metavar="TEXT", help="Goes before the name of each new array.")]
Overwrite = Annotated[bool, typer.Option("--overwrite", help="Replace arrays of the same name.")]
Plane = Annotated[
    PlaneChoice | None, typer.Option(help="What a plane mesh assumes of the direction across it.")
]
Axis = Annotated[AxisChoice, typer.Option(help="Axis of revolution for --plane axisymmetric.")]
Poisson = Annotated[
    float | None,
    typer.Option(
        metavar="NU",
        help="Poisson's ratio for --plane stress, and for the thickness of surfaces in finite measures.",
    ),
]
Alive = Annotated[
    str | None,
    typer.Option(metavar="ARRAY", help="Cell array; cells where it is zero are left out as deleted."),
]
Skin = Annotated[
    bool,
    typer.Option(
        "--skin", help="Also compute skins and edges: cells whose nodes all belong to one larger cell."
    ),
]
Threads = Annotated[int | None, typer.Option(metavar="N", min=1, help="Threads; default: all processors.")]
Json = Annotated[
    Path | None, typer.Option("--json", metavar="FILE", help="Also write everything as JSON ('-': stdout).")
]
