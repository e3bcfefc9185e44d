"""Times unturn against referees in the same run and prints the ratios. Run by hand on a quiet machine:

    python benchmarks/compare.py            # everything, about two minutes
    python benchmarks/compare.py kernel     # or: finite, eigen, command, limits, help, memory

Nothing here is asserted: a ratio is read by a person, on a machine whose other work is known.
"""

from __future__ import annotations

import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np

from unturn.fields import compute_fields
from unturn.kinematics import principal_strain
from unturn.model import build_model
from unturn.result import CellBlock, Result

MEASURES = ["strain", "rotation", "equivalent_strain"]
SPLIT = ([0, 1, 2, 6], [0, 1, 6, 5], [0, 5, 6, 4], [0, 2, 3, 6], [0, 3, 7, 6], [0, 7, 4, 6])


def brick_mesh(n: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return points, hexahedra and displacement of a perturbed cube of n^3 hexahedra."""
    axis = np.arange(n + 1)
    z, y, x = np.meshgrid(axis, axis, axis, indexing="ij")
    points = np.stack([x.ravel(), y.ravel(), z.ravel()], axis=1).astype(float)
    points += 0.1 * np.random.default_rng(0).random(points.shape)
    corner = (
        axis[:-1, None, None] * (n + 1) ** 2 + axis[None, :-1, None] * (n + 1) + axis[None, None, :-1]
    ).ravel()
    step, layer = n + 1, (n + 1) ** 2
    offsets = np.array([0, 1, step + 1, step, layer, layer + 1, layer + step + 1, layer + step])
    x, y, z = points.T / n
    u = 1e-2 * np.stack([np.sin(x + y) * z, np.cos(y * z) * x, x * y * np.exp(z)], axis=1)
    return points, corner[:, None] + offsets, u


def million(kind: str) -> tuple[Result, int]:
    """Return a result of a million tetrahedra or hexahedra, and VTK's number of the cell type."""
    if kind == "tetra":
        points, bricks, u = brick_mesh(55)
        cells, vtk_type = np.concatenate([bricks[:, s] for s in SPLIT]), 10
    else:
        points, cells, u = brick_mesh(100)
        vtk_type = 12
    return Result(points, (CellBlock(kind, cells, np.arange(len(cells))),), {"u": u}), vtk_type


def best(work: Callable[[], Any], runs: int = 5) -> float:
    """Return the shortest time of some runs, in seconds."""
    times = []
    for _ in range(runs):
        start = time.perf_counter()
        work()
        times.append(time.perf_counter() - start)
    return min(times)


def kernel() -> None:
    """Strain, rotation and equivalent strain in memory against VTK's cell derivatives."""
    import pyvista as pv
    from vtkmodules.vtkFiltersGeneral import vtkCellDerivatives

    for kind in ("tetra", "hexahedron"):
        result, vtk_type = million(kind)
        grid = pv.UnstructuredGrid({vtk_type: result.blocks[0].connectivity}, result.points)
        grid.point_data["u"] = result.point_data["u"]
        grid.set_active_vectors("u")

        def referee(grid: Any = grid) -> None:
            derivatives = vtkCellDerivatives()
            derivatives.SetInputData(grid)
            derivatives.SetTensorModeToComputeStrain()
            derivatives.Update()

        theirs = best(referee)
        for threads in (1, 2):
            ours = best(lambda t=threads, r=result: compute_fields(build_model(r), MEASURES, threads=t))
            print(f"{kind}: {result.n_cells} cells, {threads} threads: {ours:.3f} s; VTK {theirs:.3f} s; "
                  f"{theirs / ours:.2f} times as fast")  # fmt: skip


FINITE = ["strain_green_lagrange", "strain_hencky", "strain_biot", "strain_almansi", "finite_rotation",
          "finite_rotation_angle", "det_f"]  # fmt: skip


def finite() -> None:
    """All finite measures against the default set, and against one LAPACK call per matrix through numpy."""
    result, _ = million("tetra")
    model = build_model(result)
    H = np.random.default_rng(0).normal(scale=0.1, size=(result.n_cells, 3, 3)) + np.eye(3)
    lapack = best(lambda: np.linalg.svd(H), 1)
    for threads in (1, 2):
        default = best(lambda t=threads: compute_fields(model, threads=t))
        ours = best(lambda t=threads: compute_fields(model, FINITE, threads=t))
        print(f"finite measures, {result.n_cells} tetrahedra, {threads} threads: {ours:.3f} s; default set {default:.3f} s; "
              f"{ours / default:.2f} times its time; numpy.linalg.svd of as many matrices alone: {lapack:.2f} s")  # fmt: skip


def eigen() -> None:
    """Principal values against LAPACK through numpy."""
    tensor = np.random.default_rng(0).normal(size=(1_000_000, 3, 3))
    tensor += tensor.swapaxes(1, 2)
    ours, theirs = best(lambda: principal_strain(tensor), 3), best(lambda: np.linalg.eigvalsh(tensor), 3)
    print(
        f"principal values, 1 M: {ours:.3f} s; numpy.linalg.eigvalsh {theirs:.3f} s; {theirs / ours:.2f} times as fast"
    )


SCRIPT = """
import numpy as np, pyvista as pv
g = pv.read({source!r}); n = g.n_cells
g.cell_data['strain'] = np.ones((n, 6)); g.cell_data['rotation'] = np.ones((n, 3))
g.cell_data['equivalent_strain'] = np.ones(n)
g.save({target!r}{options})
"""


def command() -> None:
    """The whole strain command against a script that only reads and writes through pyvista."""
    from unturn import write

    with tempfile.TemporaryDirectory() as folder:
        source = Path(folder) / "million.vtu"
        write(million("tetra")[0], source)
        target = str(Path(folder) / "out.vtu")
        run = [sys.executable, "-c", "from unturn.cli import main; main()", "strain", str(source), "-o", target,
               "--measures", ",".join(MEASURES)]  # fmt: skip
        ours = best(lambda: subprocess.run(run, check=True, capture_output=True), 3)
        for name, options in (("default", ""), ("uncompressed", ", compression=None")):
            script = SCRIPT.format(source=str(source), target=target, options=options)
            theirs = best(lambda s=script: subprocess.run([sys.executable, "-c", s], check=True), 3)
            print(f"whole command, 1 M tetrahedra: {ours:.2f} s; read and write through pyvista, {name}: {theirs:.2f} s; "
                  f"{ours / theirs:.2f} times its time")  # fmt: skip


def limits_text() -> str:
    """Return fifty limits on the measures, in ten regions and the whole, with five statistics."""
    lines = ['schema = "unturn.limits/1"', "number_of_limits = 50"]
    for k in range(10):
        low, high = 5.5 * k, 5.5 * (k + 1)
        lines += [f"[regions.slab{k}]", f"box = {{ from = [{low}, -1, -1], to = [{high}, 99, 99] }}"]
    statistics = ("'maximum'", "'minimum'", "'percentile'\npercent = 99.9", "'share'\nabove = 500", "'mean'")
    measures = ("'equivalent_strain'", "'strain'\ncomponent = 'XY'", "'strain'\ncomponent = 'XX'")
    for i in range(50):
        region = f"slab{i % 10}" if i % 3 else "whole"
        lines += ["[[limits]]", f"id = 'l{i}'", f"measure = {measures[i % 3]}", f"statistic = {statistics[i % 5]}",
                  f"region = '{region}'", "at_most = 1e9\nunit = 'microstrain'\nreason = 'r'\nsource = 's'",
                  "accept = ['singular', 'turning']"]  # fmt: skip
    return "\n".join(lines)


def limits() -> None:
    """The whole check command with fifty limits against the strain command with the same measures."""
    from unturn import write

    with tempfile.TemporaryDirectory() as folder:
        source, asked = Path(folder) / "million.vtu", Path(folder) / "limits.toml"
        write(million("tetra")[0], source)
        asked.write_text(limits_text())
        start = [sys.executable, "-c", "from unturn.cli import main; main()"]
        check = [*start, "check", str(source), str(asked)]
        strain = [
            *start,
            "strain",
            str(source),
            "-o",
            str(Path(folder) / "out.vtu"),
            "--measures",
            "strain,equivalent_strain",
        ]
        ours = best(lambda: subprocess.run(check, check=True, capture_output=True), 3)
        theirs = best(lambda: subprocess.run(strain, check=True, capture_output=True), 3)
        print(f"check, 50 limits, 1 M tetrahedra: {ours:.2f} s; strain with the same measures: {theirs:.2f} s; "
              f"{ours / theirs:.2f} times its time")  # fmt: skip


def help_text() -> None:
    """How soon `unturn --help` answers."""
    run = [sys.executable, "-c", "from unturn.cli import main; main()", "--help"]
    print(f"unturn --help: {best(lambda: subprocess.run(run, check=True, capture_output=True)):.3f} s")


MEMORY = """
import sys
sys.path.insert(0, {folder!r})
import compare, unturn
def status(key):
    return next(int(line.split()[1]) for line in open('/proc/self/status') if line.startswith(key)) / 1e3
result, _ = compare.million({kind!r})
unturn.strain(compare.small_result(), measures=compare.MEASURES)
open('/proc/self/clear_refs', 'w').write('5')  # the peak counts from here
before = status('VmRSS')
out = unturn.strain(result, measures=compare.MEASURES)
arrays = sum(a.nbytes for a in out.cell_data.values()) / 1e6
peak = status('VmHWM') - before
print(f'{kind}: peak rises by {{peak:.0f}} MB: {{arrays:.0f}} MB output arrays and {{peak - arrays:.0f}} MB more')
"""


def small_result() -> Result:
    """Return a few hexahedra, to load what is loaded at first use."""
    points, cells, u = brick_mesh(2)
    return Result(points, (CellBlock("hexahedron", cells, np.arange(len(cells))),), {"u": u})


def memory() -> None:
    """Peak memory over the input, less the output arrays (Linux)."""
    for kind in ("tetra", "hexahedron"):
        script = MEMORY.format(folder=str(Path(__file__).parent), kind=kind)
        subprocess.run([sys.executable, "-c", script], check=True)


PARTS = {
    "kernel": kernel,
    "finite": finite,
    "eigen": eigen,
    "command": command,
    "limits": limits,
    "help": help_text,
    "memory": memory,
}

if __name__ == "__main__":
    for part in sys.argv[1:] or PARTS:
        PARTS[part]()
