"""Prove that an installed package is found by PyVista alone: ``python tests/plugin_check.py``.

Run it with a Python into which the wheel was installed, from outside the source folder.
"""

from __future__ import annotations

import sys

import numpy as np
import pyvista


def check_plugin() -> str:
    """Return where the accessor came from; raise when ``mesh.unturn`` is not found or gives wrong numbers."""
    if "unturn" in sys.modules:
        raise RuntimeError("unturn was imported before PyVista looked for it: this proves nothing.")
    mesh = pyvista.ImageData(dimensions=(3, 3, 3)).cast_to_unstructured_grid()
    mesh.point_data["u"] = mesh.points * [1e-3, -0.3e-3, -0.3e-3]
    found = mesh.unturn.strain()
    # isochoric part of a pull of 1000 microstrain at 0.3: 2/3 (1 + 0.3) of it
    if not np.allclose(found.cell_data["equivalent_strain"], 2 / 3 * 1.3e-3, rtol=1e-12):
        raise RuntimeError(f"mesh.unturn.strain() is wrong: {found.cell_data['equivalent_strain']}")
    if "strain" in mesh.cell_data:
        raise RuntimeError("mesh.unturn.strain() changed the mesh it was called on.")
    return str(sys.modules["unturn"].__file__)


if __name__ == "__main__":
    print(f"mesh.unturn found by PyVista alone: {check_plugin()}")
