"""Solve every sample and write the files that lie beside this script.

Run from the folder above: ``python -m sample_meshes.make``.
Needs felupe, scikit-fem, meshio, pyvista and h5py.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from sample_meshes import _bracket, _lever, _ring, _skin

HERE = Path(__file__).parent


def main(folder: Path = HERE) -> None:
    """Write all results, and ``reference.npz``: the strain that the solving library itself finds.

    Its arrays are ``(n_cells, 6)`` at the reference centroids, in the order of the cells: XX, YY, ZZ,
    XY, YZ, XZ with tensor shear: ``<file>.strain`` is the small strain (of the last step),
    ``<file>.green_lagrange`` is there where the solve was nonlinear.
    """
    bricks, tetrahedra = _bracket.bricks(), _bracket.tetrahedra()
    lever, ring, skin = _lever.solve(), _ring.solve(), _skin.solve()
    _bracket.write(folder / "bracket.vtu", bricks)
    _bracket.write(folder / "bracket_tets.vtu", tetrahedra)
    _lever.write(folder / "lever.xdmf", lever)
    _ring.write(folder / "ring.vtu", ring)
    _skin.write(folder / "skin.vtu", skin)
    reference: dict[str, NDArray[np.float64]] = {
        "bracket.strain": bricks.strain,
        "bracket_tets.strain": tetrahedra.strain,
        "lever.strain": lever.strain,
        "lever.green_lagrange": lever.green_lagrange,
        "ring.strain": ring.strain,
        "skin.strain": skin.strain,
    }
    np.savez_compressed(folder / "reference.npz", **reference)


if __name__ == "__main__":
    main()
