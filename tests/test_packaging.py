"""What the package promises to whoever installs it; the built wheel itself is used by `.ci/run`."""

from __future__ import annotations

import ast
import importlib
import re
import sys
import tomllib
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]


@pytest.mark.derived("entry points name what exists")
def test_the_entry_points_exist() -> None:
    module, function = PROJECT["scripts"]["unturn"].split(":")
    assert callable(getattr(importlib.import_module(module), function))
    plug_in = PROJECT["entry-points"]["pyvista.accessors"]["unturn"]
    assert hasattr(importlib.import_module(plug_in), "UnturnAccessor")


@pytest.mark.derived("what is imported is a dependency that is stated")
def test_every_package_that_is_imported_is_a_dependency() -> None:
    own = {"unturn", *sys.stdlib_module_names}
    of_pyvista = {"vtk", "vtkmodules"}
    stated, of_reports = (
        {re.split(r"[<>=!~ \[]", d)[0] for d in needed}
        for needed in (PROJECT["dependencies"], PROJECT["optional-dependencies"]["report"])
    )
    for source in (ROOT / "src").rglob("*.py"):
        imported = {_PACKAGE.get(name, name) for name in set(_imported(source)) - own - of_pyvista}
        assert imported <= (stated | of_reports if source.parent.name == "report" else stated), source.name


_PACKAGE = {"PIL": "pillow"}  # module -> the package that brings it


def _imported(source: Path) -> Iterator[str]:
    """Yield the packages that a file imports anywhere in it."""
    for node in ast.walk(ast.parse(source.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            yield from (name.name.split(".")[0] for name in node.names)
        elif isinstance(node, ast.ImportFrom) and node.module and not node.level:
            yield node.module.split(".")[0]


@pytest.mark.derived("types are shipped")
def test_the_package_says_that_it_is_typed() -> None:
    assert (ROOT / "src" / "unturn" / "py.typed").exists()
