"""How far to trust values at cells: from the cells around alone, the same as from the whole mesh."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from recovery_meshes import block, smooth
from unturn import Result, cutout
from unturn.around import Asked, groups_of, trust_of
from unturn.elements import ELEMENTS
from unturn.model import Model
from unturn.options import StrainOptions
from unturn.pipeline import Computed, compute
from unturn.recovery import recover_gradient
from unturn.trust import strain_error

LINEAR = [n for n, row in ELEMENTS.items() if row.order == 1]


@pytest.fixture(autouse=True)
def always_cut(monkeypatch: pytest.MonkeyPatch) -> None:
    """Small meshes are cut too: otherwise the whole is taken and nothing is proved."""
    monkeypatch.setattr(cutout, "_WHOLE", 2.0)


def computed_of(result: Result, **options: Any) -> Computed:
    return compute(result, StrainOptions(**{"displacement": "u", **options}), diagnose=True)


def with_parts(name: str, n: int, seam: float = 0.55) -> Result:
    """A block of cells moved at random, cut into two regions at x = seam, with a smooth displacement and noise."""
    mesh = block(ELEMENTS[name], n, 0.15)
    u, _ = smooth(mesh.points, mesh.element.dim)
    noise = np.random.default_rng(2).normal(scale=1e-3, size=u.shape)
    noise[:, mesh.element.dim :] = 0.0
    part = (mesh.points[mesh.cells].mean(axis=1)[:, 0] > seam).astype(np.int32)
    return mesh.result(u=1e-2 * (u + noise)).with_arrays(cell_data={"part": part})


def whole(model: Model, at: str = "centroid", base: str = "") -> np.ndarray:
    recovered = recover_gradient(model, groups_of(model))
    return strain_error(recovered, base=base, at=at).plus_minus  # type: ignore[arg-type]


SIZES = {1: 40, 2: 12, 3: 8}


@pytest.mark.derived("a recovery of the whole mesh, cell by cell")
@pytest.mark.parametrize("name", [n for n in ELEMENTS if n != "vertex"])
def test_cells_cut_out_have_the_values_of_the_whole_mesh(name: str) -> None:
    row = ELEMENTS[name]
    n = SIZES[row.dim] if row.order < 3 else SIZES[row.dim] // 2
    computed = computed_of(with_parts(name, n), plane="strain" if row.dim == 2 else None)
    model = computed.fields.model
    values = computed.fields.arrays["principal_strain"][:, 0]
    expected = whole(model)
    cells = np.random.default_rng(0).permutation(len(values))[:12]
    for cell in cells.tolist():
        asked = Asked("principal_strain", values, np.arange(len(values)), cell)
        (found,) = trust_of(computed, [asked])
        assert found.plus_minus == pytest.approx(expected[cell], rel=1e-9), cell
