"""The checks of an installation on built-in meshes: patches of every element, handbook fields, referees, files."""

from __future__ import annotations

import tempfile
from collections.abc import Callable, Iterable, Iterator
from dataclasses import replace
from functools import lru_cache, partial
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from unturn import io
from unturn.elements import ELEMENTS, Element
from unturn.fields import compute_fields
from unturn.kinematics._symmetric import Floats
from unturn.model import build_model
from unturn.result import Array, CellBlock, Result
from unturn.source import Source
from unturn.verdicts.builtin_meshes import SOURCE as MACNEAL
from unturn.verdicts.builtin_meshes import patch, straight_cell
from unturn.verdicts.imposed import rotation_tensor
from unturn.verdicts.installation_checks import Case, Check, compared, every_element
from unturn.verdicts.patchtest import PatchTest, patch_test
from unturn.verdicts.patchtest_errors import Errors

_POISSON, _RADIUS, _TWIST = 0.3, 500.0, 2e-3
_ROUNDING = 1e-12
"""Share of the largest value; the cells are well shaped."""


# --- patches ------------------------------------------------------------------------------------------------------


@lru_cache(maxsize=128)
def _tests(row: Element) -> tuple[tuple[str, PatchTest], ...]:
    """Every imposed field on the patch, on one straight cell and, for surfaces, on the patch turned into space."""
    meshes = {"patch": patch(row), "straight cell": straight_cell(row)}
    if row.dim == 2:
        R = rotation_tensor(np.array([1.0, 2.0, 2.0]) / 3.0, 0.7)
        meshes["patch in space"] = replace(meshes["patch"], points=meshes["patch"].points @ R.T)
    return tuple((name, patch_test(mesh)) for name, mesh in meshes.items())


def _patches(row: Element) -> Iterator[Case]:
    for name, test in _tests(row):
        for errors in test.errors:
            if not errors.field.single:
                yield from _worst(errors, test.computed, f"{errors.field.name}, {name}")
        # a cell of the cube has a corner with a negative Jacobian, and the rule of order 6 has a point there
        known = float(name == "patch" and row.shape.name == "hexahedron" and row.order == 6)
        missing = float((~test.computed).sum())
        yield Case(f"cells not computed, {name} ({known:g} known)", max(0.0, missing - known), 0.0, "cells")


def _single() -> Iterator[Case]:
    for element_name, row in every_element():
        for name, test in _tests(row):
            for errors in (e for e in test.errors if e.field.single):
                yield from _worst(errors, test.computed, f"{element_name}, {name}")


def _worst(errors: Errors, computed: NDArray[np.bool_], name: str) -> Iterator[Case]:
    """Yield the comparison nearest to its bound; none where the field is not exact in any cell."""
    cells = np.flatnonzero(computed & errors.exact)
    if len(cells):
        error, bound = errors.error[cells], errors.bound[cells]
        with np.errstate(divide="ignore", invalid="ignore"):
            worst = int(cells[np.argmax(np.where(error > 0, error / bound, 0.0))])
        yield Case(name, 1e6 * float(errors.error[worst]), 1e6 * float(errors.bound[worst]), "1e-6")


def _patch_checks() -> Iterator[Check]:
    for name, row in every_element():
        title = f"imposed fields on a patch of {name}: linear ones on distorted cells, a quadratic one on straight cells"
        yield Check(f"patch.{name}", title, MACNEAL, partial(_patches, row))
    yield Check(
        "float32", "large motion stored in single precision, on the patches: what rounding of the nodes can do",
        Source("derived", "every nodal displacement is off by at most 2^-24 of its size"), _single,
    )  # fmt: skip


# --- handbook fields ----------------------------------------------------------------------------------------------


def _bar(name: str) -> Result:
    """Return a bar of 3 x 2 x 2 straight cells, or each cut into six tetrahedra."""
    n = (3, 2, 2)
    line = [np.linspace(0.0, size, k + 1) for size, k in zip((30.0, 8.0, 6.0), n)]
    corners = np.stack(np.meshgrid(*line, indexing="ij"), axis=-1).reshape(-1, 3) - [0.0, 4.0, 3.0]
    number = np.arange(len(corners)).reshape([k + 1 for k in n])
    square = ((0, 0), (1, 0), (1, 1), (0, 1))
    hexes = [number[a : a + n[0], b : b + n[1], c : c + n[2]].ravel() for c in (0, 1) for a, b in square]
    cells = np.stack(hexes, axis=1)
    row = ELEMENTS[name]
    if row.shape.name == "tetra":
        six = [(0, 1, 2, 6), (0, 2, 3, 6), (0, 3, 7, 6), (0, 7, 4, 6), (0, 4, 5, 6), (0, 5, 1, 6)]
        cells = np.concatenate([cells[:, list(t)] for t in six])
    linear = ELEMENTS[row.shape.name].shape_functions(row.nodes)
    places = np.einsum("an,cnx->cax", linear, corners[cells]).reshape(-1, 3)
    _, first, inverse = np.unique(np.round(places, 9) + 0.0, axis=0, return_index=True, return_inverse=True)
    block = CellBlock(name, inverse.reshape(len(cells), -1).astype(np.int64), np.arange(len(cells)))
    return Result(places[first], (block,))


def _bending(x: Floats) -> Floats:
    X, Y, Z = x.T
    u = [-X * Y, (X**2 + _POISSON * (Y**2 - Z**2)) / 2, _POISSON * Y * Z]
    return np.stack(u, axis=1) / _RADIUS


def _bending_exact(x: Floats) -> tuple[Floats, Floats]:
    X, Y, Z = x.T / _RADIUS
    zero = 0 * X
    strain = np.stack([-Y, _POISSON * Y, _POISSON * Y, zero, zero, zero], axis=1)
    return strain, np.stack([_POISSON * Z, zero, X], axis=1)


def _twist(x: Floats) -> Floats:
    X, Y, Z = x.T
    return np.asarray(_TWIST * np.stack([0 * X, -X * Z, X * Y], axis=1))


def _twist_exact(x: Floats) -> tuple[Floats, Floats]:
    X, Y, Z = _TWIST * x.T
    zero = 0 * X
    strain = np.stack([zero, zero, zero, -Z / 2, zero, Y / 2], axis=1)
    return strain, np.stack([X, -Y / 2, -Z / 2], axis=1)


def _handbook(
    displacement: Callable[[Floats], Floats], exact: Callable[[Floats], tuple[Floats, Floats]]
) -> Iterator[Case]:
    for name in ("tetra10", "hexahedron20", "hexahedron27"):
        mesh = _bar(name)
        moved = replace(mesh, point_data={"u": displacement(mesh.points)})
        found = compute_fields(build_model(moved), ["strain", "rotation"], diagnose=True)
        assert found.diagnostics is not None
        strain, rotation = exact(found.diagnostics.centroid)
        for what, values in (("strain", strain), ("rotation", rotation)):
            yield compared(
                f"{what}, {name}", found.arrays[what], values, _ROUNDING * float(np.abs(values).max())
            )


# --- referees and files -------------------------------------------------------------------------------------------


def _loaded(name: str) -> Result:
    """Return a patch with a displacement that no polynomial describes, and its strain as a cell array."""
    mesh = patch(ELEMENTS[name])
    u = 1e-3 * np.random.default_rng(2008).normal(size=mesh.points.shape)
    moved = replace(mesh, point_data={"u": u})
    strain = compute_fields(build_model(moved), ["strain"]).arrays["strain"]
    return moved.with_arrays(cell_data={"strain": strain})


def _vtk_derivatives() -> Iterator[Case]:
    import pyvista
    from vtkmodules.vtkFiltersGeneral import vtkCellDerivatives

    for name in ("tetra", "hexahedron", "tetra10", "hexahedron20"):
        mesh = _loaded(name)
        row = ELEMENTS[name]
        grid = pyvista.UnstructuredGrid({row.vtk_type: mesh.blocks[0].connectivity}, mesh.points)
        grid.point_data["u"] = mesh.point_data["u"]
        grid.set_active_vectors("u")
        derivatives = vtkCellDerivatives()
        derivatives.SetInputData(grid)
        derivatives.SetTensorModeToComputeStrain()
        derivatives.Update()
        theirs = (
            pyvista.wrap(derivatives.GetOutput()).cell_data["Strain"].reshape(-1, 9)[:, [0, 4, 8, 1, 5, 2]]
        )
        ours = mesh.cell_data["strain"]
        yield compared(name, ours, theirs, _ROUNDING * float(np.abs(ours).max()))


def _files() -> Iterator[Case]:
    """Values that differ after writing, read back by other libraries and by the program itself."""
    mesh = _loaded("hexahedron20")
    with tempfile.TemporaryDirectory() as folder:
        for suffix in (".vtu", ".vtkhdf", ".xdmf", ".vtk"):
            path = Path(folder) / f"record{suffix}"
            io.write(mesh, path)
            yield _difference(f"{suffix}, read by unturn", mesh, io.read(path))
            if suffix in (".vtu", ".vtk"):
                yield _by_pyvista(suffix, mesh, path)
            if suffix == ".vtu":
                yield _by_meshio(suffix, mesh, path)


def _difference(name: str, mesh: Result, other: Result) -> Case:
    pairs = (
        (mesh.points, other.points),
        (mesh.point_data["u"], other.point_data["u"]),
        (mesh.cell_data["strain"], other.cell_data["strain"]),
        (mesh.blocks[0].connectivity, other.blocks[0].connectivity),
    )
    return Case(name, float(sum(_unlike(np.asarray(a), np.asarray(b)) for a, b in pairs)), 0.0, "values")


def _unlike(a: Array, b: Array) -> int:
    return int((a != b).sum()) if a.shape == b.shape else max(a.size, b.size)


def _by_pyvista(suffix: str, mesh: Result, path: Path) -> Case:
    import pyvista

    grid = pyvista.read(path)
    unlike = _unlike(mesh.points, grid.points) + _unlike(mesh.point_data["u"], grid.point_data["u"])
    unlike += _unlike(mesh.cell_data["strain"], grid.cell_data["strain"])
    return Case(f"{suffix}, read by pyvista", float(unlike), 0.0, "values")


def _by_meshio(suffix: str, mesh: Result, path: Path) -> Case:
    import meshio

    other = meshio.read(path)
    unlike = _unlike(mesh.points, other.points) + _unlike(mesh.point_data["u"], other.point_data["u"])
    unlike += _unlike(mesh.cell_data["strain"], other.cell_data["strain"][0])
    return Case(f"{suffix}, read by meshio", float(unlike), 0.0, "values")


def _threads() -> Iterator[Case]:
    rng = np.random.default_rng(7)
    points = rng.normal(size=(40_000, 3))
    cells = rng.permuted(np.arange(40_000)).reshape(-1, 4)
    cells = np.concatenate([cells, np.roll(cells, 1, axis=0)[:, [1, 2, 3, 0]]])
    block = CellBlock("tetra", cells, np.arange(len(cells)))
    model = build_model(Result(points, (block,), {"u": rng.normal(size=points.shape)}))
    one = compute_fields(model, ["strain", "strain_hencky"], threads=1).arrays
    many = compute_fields(model, ["strain", "strain_hencky"], threads=4).arrays
    for name in one:
        same = np.array_equal(one[name], many[name], equal_nan=True)
        yield Case(f"{name}, 1 and 4 threads, {len(cells)} tetrahedra", float(not same), 0.0, "differ")


def mesh_checks() -> Iterable[Check]:
    """Return the checks on built-in meshes."""
    timoshenko = "Timoshenko and Goodier, Theory of Elasticity, "
    yield from _patch_checks()
    yield Check(
        "bending", "pure bending of a bar: e_xx = -y/R, e_yy = e_zz = nu y/R, rotation (nu z/R, 0, x/R)",
        Source("memory", timoshenko + "pure bending of prismatical bars; differentiated again"),
        partial(_handbook, _bending, _bending_exact),
    )  # fmt: skip
    yield Check(
        "twist", "twist of a shaft about x: engineering shear twist times radius, rotation twist times x",
        Source("memory", timoshenko + "torsion of circular shafts; differentiated again"),
        partial(_handbook, _twist, _twist_exact),
    )  # fmt: skip
    yield Check(
        "cell_derivatives", "strain of patches with a random displacement",
        Source("published", "vtkCellDerivatives, as installed"), _vtk_derivatives,
    )  # fmt: skip
    yield Check(
        "files", "values that are not the same after writing and reading",
        Source("published", "pyvista and meshio, as installed; the program's own readers"), _files,
    )  # fmt: skip
    yield Check(
        "threads", "the same bits whatever the number of threads", Source("derived", "one thread"), _threads
    )
