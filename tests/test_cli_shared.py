"""Options that commands share: declared once, turned into those of the library in one place."""

from __future__ import annotations

from dataclasses import fields
from typing import Annotated

import pytest
import typer
from typer.testing import CliRunner

from unturn.cli._shared import EVERY, PLACES, CellsOnly, strain_options
from unturn.options import StrainOptions

SEEN: list[tuple[str, StrainOptions, bool]] = []


@strain_options("plane", "poisson", "measures", "at", "axis", at=CellsOnly)
def command(
    file: Annotated[str, typer.Argument(help="A file.")],
    *,
    options: StrainOptions,
    loud: Annotated[bool, typer.Option("--loud")] = False,
) -> None:
    """Do something."""
    SEEN.append((file, options, loud))


app = typer.Typer(rich_markup_mode=None)
app.command()(command)


@pytest.mark.derived(
    "the options of the library are those of the command line, but for what the program decides itself"
)
def test_every_option_of_the_library_is_declared() -> None:
    assert {*EVERY, *PLACES} == {f.name for f in fields(StrainOptions)} - {"surface"}


@pytest.mark.source("typer: the declared options, run through its own parser")
def test_a_command_gets_the_options_of_the_library() -> None:
    asked = [
        "plate.vtu",
        "--plane",
        "stress",
        "--poisson",
        "0.3",
        "--measures",
        "strain, rotation,",
        "--loud",
    ]
    assert CliRunner().invoke(app, asked).exit_code == 0
    expected = StrainOptions(plane="stress", poisson=0.3, measures=["strain", "rotation"])
    assert SEEN.pop() == ("plate.vtu", expected, True)
    assert CliRunner().invoke(app, ["plate.vtu", "--at", "mean"]).exit_code == 0
    assert SEEN.pop() == ("plate.vtu", StrainOptions(at="mean"), False)
    for wrong in (["--at", "nodes"], ["--alive", "status"], ["--plane", "bent"]):
        assert CliRunner().invoke(app, ["plate.vtu", *wrong]).exit_code == 2
    said = CliRunner().invoke(app, ["--help"]).output
    assert "Do something." in said
    order = [said.index(f"--{name}") for name in ("plane", "poisson", "measures", "at ", "axis", "loud")]
    assert order == sorted(order)
