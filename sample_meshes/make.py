"""Solve every sample and write the files that lie beside this script.

Run from the folder above: ``python -m sample_meshes.make``. Needs felupe, scikit-fem, meshio, pyvista, h5py.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from sample_meshes import _bracket

HERE = Path(__file__).parent
Reference = dict[str, NDArray[np.float64]]


def make_brackets(folder: Path) -> Reference:
    """Write ``bracket.vtu`` and ``bracket_tets.vtu``; return the library's strain at the centroids."""
    bricks, tetrahedra = _bracket.bricks(), _bracket.tetrahedra()
    _bracket.write(folder / "bracket.vtu", bricks)
    _bracket.write(folder / "bracket_tets.vtu", tetrahedra)
    return {"bracket.strain": bricks.strain, "bracket_tets.strain": tetrahedra.strain}


def main(folder: Path = HERE) -> None:
    """Write all files into the folder."""
    np.savez_compressed(folder / "reference.npz", **make_brackets(folder))


if __name__ == "__main__":
    main()
