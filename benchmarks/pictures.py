"""Times pictures of a million cells as the command draws them: one, and ten of one plan. Run by hand on a quiet machine:

    python benchmarks/pictures.py

Nothing here is asserted: wall and processor time are read by a person, on a machine whose other work is known.
"""

from __future__ import annotations

import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

import unturn
from unturn.result import CellBlock, Result

CAMERAS = ("front", "front-right-top", "back-left-top", "top", "right")
MEASURES = ("equivalent_strain", "principal_strain_1")
COMMAND = "import sys; sys.argv[0] = 'unturn'; from unturn.cli import main; main()"


def cube(n: int) -> Result:
    """Return a cube of n^3 hexahedra with a displacement that bends and twists it."""
    number = np.arange((n + 1) ** 3).reshape((n + 1,) * 3)
    low, high = slice(None, -1), slice(1, None)
    corners = [(low, low, low), (high, low, low), (high, high, low), (low, high, low)]
    corners += [(a, b, high) for a, b, _ in corners]
    cells = np.stack([number[c] for c in corners], axis=-1).reshape(-1, 8)
    axis = np.linspace(0, 1, n + 1)
    points = np.stack(np.meshgrid(axis, axis, axis, indexing="ij"), axis=-1).reshape(-1, 3)
    x, y, z = points.T
    u = 1e-3 * np.stack([x**2, x * y, np.sin(3 * z)], axis=1)
    return Result(points, (CellBlock("hexahedron", cells, np.arange(len(cells))),), {"u": u})


def timed(*arguments: str) -> tuple[float, float]:
    """Return wall and processor seconds of one run of the command."""
    before, start = resource.getrusage(resource.RUSAGE_CHILDREN), time.perf_counter()
    subprocess.run([sys.executable, "-c", COMMAND, "picture", *arguments], check=True, capture_output=True)
    wall, after = time.perf_counter() - start, resource.getrusage(resource.RUSAGE_CHILDREN)
    return wall, after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime


def main() -> None:
    """Print the times."""
    with tempfile.TemporaryDirectory() as folder:
        mesh, plan = Path(folder) / "cube.vtu", Path(folder) / "plan.toml"
        unturn.write(cube(100), mesh)
        wanted = [(camera, measure) for camera in CAMERAS for measure in MEASURES]
        tables = [
            f'[[pictures]]\nname = "p{k}"\ncamera = "{c}"\nmeasure = "{m}"\n'
            for k, (c, m) in enumerate(wanted)
        ]
        plan.write_text('schema = "unturn.plan/1"\n' + "".join(tables), encoding="utf-8")
        one = timed(str(mesh), "-o", str(Path(folder) / "one.png"))
        ten = timed(str(mesh), "--plan", str(plan), "-o", folder)
    print("1 000 000 hexahedra, 1600 x 1000 pixels     wall s   processor s")
    print(f"one picture, reading and computing included {one[0]:8.1f} {one[1]:13.1f}")
    print(f"ten pictures of one plan                    {ten[0]:8.1f} {ten[1]:13.1f}")
    print(f"ten over one                                {ten[0] / one[0]:8.2f} {ten[1] / one[1]:13.2f}")


if __name__ == "__main__":
    main()
