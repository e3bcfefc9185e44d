"""Which module may import which: a file imports only what is above it, so that data flows one way."""

from __future__ import annotations

import ast
import subprocess
import sys
from pathlib import Path

import pytest

import unturn.errors

PACKAGE = Path(unturn.errors.__file__).parent

# From the foundation up. Modules on one line do not import each other, except where a package holds several files.
LAYERS = (
    ("errors", "source", "_version"),
    ("kinematics", "elements", "toml_kinds"),
    ("toml_keys", "picture_wishes", "report_keys"),
    ("picture_keys",),
    ("result", "statistics", "precision", "node_sets"),
    ("numbering", "frames", "point_gradient"),
    ("gradient", "measures", "midside", "displacement", "thermal"),
    ("model",),
    ("fields", "regions", "jacobian", "written_regions"),
    ("recovery", "tensor_range", "rigid", "verdict"),
    ("trust", "peaks", "surface", "quadrature_points", "rigid_parts", "zero_step", "cutout"),
    ("borders", "neighbourhood"),
    ("nodal", "estimates", "options"),
    ("agreement", "pipeline", "trial", "series"),
    ("around",),
    ("trusted", "node_errors"),
    ("elsewhere", "reading_keys"),
    ("extremes", "same_mesh", "locate", "refinement", "combinations", "quantity_text"),
    ("envelope_places",),
    ("states",),
    ("envelope_arrays",),
    ("envelope_extremes",),
    ("envelope_trust",),
    ("envelopes", "quantities", "stepwise"),
    ("superposition",),
    ("io",),
    ("state_files",),
    ("survey", "summary"),
    ("summary_text",),
    ("mesh_study",),
    ("envelope_json",),
    ("envelope_text", "convergence_text"),
    ("_api",),
    ("_api_meshes",),
    ("_api_states",),
    ("verdicts", "gauges", "pictures"),
    ("report",),
    ("_accessor", "testing", "__init__"),
    ("cli", "__main__"),
)
LEVEL = {name: level for level, names in enumerate(LAYERS) for name in names}
FILES = sorted(PACKAGE.rglob("*.py"))
# `unturn.__init__` is what users import; inside the package its parts are named in full.
OUTSIDE = {"vtk", "vtkmodules", "pyvista", "meshio", "matplotlib", "jinja2"}


def part(path: Path) -> str:
    """The module or package directly below unturn that a file belongs to."""
    return path.relative_to(PACKAGE).parts[0].removesuffix(".py")


def imported(path: Path, top_only: bool = False) -> set[str]:
    """Full names of the modules a file imports; with `top_only` not those inside functions or for typing."""
    tree = ast.parse(path.read_text(encoding="utf-8"))
    nodes = tree.body if top_only else list(ast.walk(tree))
    found: set[str] = set()
    for node in nodes:
        if isinstance(node, ast.Import):
            found.update(alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            found.add(node.module or "")
            found.update(f"{node.module}.{alias.name}" for alias in node.names)
    return found


def parts_imported(path: Path) -> set[str]:
    """Parts of unturn that a file imports."""
    names = {n.split(".")[1] for n in imported(path) if n.startswith("unturn.")}
    known = {part(f) for f in FILES}
    return {n for n in names if n in known}


@pytest.mark.parametrize("name", sorted({part(f) for f in FILES}))
def test_every_module_has_its_place(name: str) -> None:
    assert name in LEVEL, f"give {name} a place in LAYERS"


@pytest.mark.parametrize("path", FILES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_a_file_imports_only_what_is_above_it(path: Path) -> None:
    own = part(path)
    for other in parts_imported(path) - {own}:
        assert LEVEL[other] < LEVEL[own], f"{path.relative_to(PACKAGE)} imports unturn.{other}"


@pytest.mark.parametrize("path", FILES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_mechanics_know_no_file_and_pictures_come_late(path: Path) -> None:
    if LEVEL.get(part(path), 99) < LEVEL["io"]:
        assert not {n.split(".")[0] for n in imported(path)} & {*OUTSIDE, "h5py", "typer", "rich"}
    top = {n.split(".")[0] for n in imported(path, top_only=True)}
    if part(path) not in {"io", "_accessor"}:
        assert not top & OUTSIDE


@pytest.mark.parametrize("module", ["unturn", "unturn.io", "unturn.cli"])
def test_heavy_libraries_are_not_loaded_before_they_are_needed(module: str) -> None:
    code = (
        f"import sys; sys.path[:0] = {[str(PACKAGE.parent)]!r}; import {module}; "
        f"print(sorted({OUTSIDE!r} & set(sys.modules)))"
    )
    run = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=120
    )
    assert run.stdout.strip() == "[]"
