"""A result made ready for computing: reference coordinates, displacement, what each block of cells is."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from unturn.displacement import Displacement, find_displacement
from unturn.elements import Element, detect_spacing, element, not_computable
from unturn.errors import DisplacementError, InputError, UsageError
from unturn.gradient import ElementChunk, NodalFields, Plane, PlaneModel
from unturn.kinematics._symmetric import Floats
from unturn.midside import misplaced_mid_nodes
from unturn.result import CellBlock, Result, used_points

Kind = Literal["solid", "plane", "surface", "line"]
KINDS: tuple[Kind, ...] = ("line", "surface", "solid")

SKINS = "skins and edges of other cells"
"""Why they are left out."""

_IN_PLANE = 1e-9  # share of the model's size within which a mesh counts as lying in a coordinate plane


@dataclass(frozen=True)
class PlaneOptions:
    """What the user says of a plane mesh; see `Plane`."""

    model: PlaneModel | None = None
    poisson: float | None = None
    axis: Literal["x", "y"] = "y"
    surface: bool = False  # a flat mesh counts as a surface in space, also where nothing moves across it


@dataclass(frozen=True, eq=False)
class ModelBlock:
    """Cells of one type with their element row.

    Parameters
    ----------
    cells
        The block of the result.
    row
        Its row of the element table; None when it cannot be computed.
    kind
        ``solid``, ``plane``, ``surface`` or ``line``; None when it cannot be computed.
    active
        `(n,)` positions within the block that are computed.
    """

    cells: CellBlock
    row: Element | None
    kind: Kind | None
    active: NDArray[np.int64]

    @property
    def connectivity(self) -> NDArray[np.int64]:
        """Connectivity of the active cells."""
        conn = self.cells.connectivity
        return conn if len(self.active) == len(conn) else conn[self.active]

    @property
    def index(self) -> NDArray[np.int64]:
        """File positions of the active cells."""
        return self.cells.index if len(self.active) == len(self.cells) else self.cells.index[self.active]


@dataclass(frozen=True, eq=False)
class Model:
    """A result ready for computing.

    Parameters
    ----------
    result
        What was read.
    displacement
        The displacement that was found.
    points
        `(n, 3)` reference coordinates.
    fields
        Coordinates and displacement for gathering.
    blocks
        Blocks with their element rows.
    plane
        Set when the mesh is plane.
    left_out
        ``{reason: file positions}`` of cells that are not computed.
    notes
        Sentences for the user.
    back
        `(k, 2, 3, 3)` rigid motions to take out, see `ElementChunk`.
    back_of
        `(n_cells,)` which of them, -1 for none; None when there are none.
    poisson
        Poisson's ratio of surfaces in space, for their thickness stretch; None: they keep their thickness.
    """

    result: Result
    displacement: Displacement
    points: Floats
    fields: NodalFields
    blocks: tuple[ModelBlock, ...]
    plane: Plane | None
    left_out: Mapping[str, NDArray[np.int64]] = field(default_factory=dict)
    notes: tuple[str, ...] = ()
    back: Floats | None = None
    back_of: NDArray[np.int64] | None = None
    poisson: float | None = None

    def chunk(
        self, block: ModelBlock, connectivity: NDArray[np.int64], index: NDArray[np.int64]
    ) -> ElementChunk:
        """Return some elements of a block, gathered, without the rigid motions that are to be taken out."""
        assert block.row is not None
        back = None
        if self.back is not None and self.back_of is not None:
            which = self.back_of[index]
            if (which >= 0).any():
                same = bool((which == which[0]).all())
                tensors = np.concatenate([self.back, np.zeros((1, 2, 3, 3))])
                back = tensors[which[0]] if same else np.ascontiguousarray(np.moveaxis(tensors[which], 0, -1))
        return ElementChunk(self.fields, connectivity, block.row, self.plane, back, self.poisson)

    def only(self, cells: NDArray[np.int64]) -> Model:
        """Return the model with these cells alone computed; the others count neither as computed nor as left out."""
        mask = np.zeros(self.result.n_cells, dtype=bool)
        mask[cells] = True
        blocks = tuple(replace(b, active=b.active[mask[b.index]]) for b in self.blocks)
        return replace(self, blocks=blocks, left_out={})

    def turned(self) -> Model:
        """Return the model with the deformed body turned a quarter about (1, 1, 1), or about a plane mesh's normal."""
        axis = np.full(3, 3.0**-0.5) if self.plane is None else np.eye(3)[self.plane.normal]
        if self.plane is not None and self.plane.model == "axisymmetric":
            return self
        R = np.outer(axis, axis) + np.cross(np.eye(3), -axis)  # a quarter turn: cosine 0, sine 1
        rows = self.fields.rows
        place = rows[:3] + rows[3:]
        center = np.nanmean(np.where(np.isfinite(place), place, np.nan), axis=1, keepdims=True)
        moved = (np.einsum("ij,jn->in", R, place - center) + center - rows[:3]).T
        return replace(self, fields=NodalFields(rows[:3].T, moved))

    @property
    def dimension(self) -> int:
        """Highest dimension among the computed cells."""
        return max(b.row.dim for b in self.blocks if b.row is not None)


def build_model(
    result: Result,
    *,
    displacement: str | None = None,
    displacement_scale: float = 1.0,
    coordinates: Literal["reference", "deformed"] = "reference",
    plane: PlaneOptions | None = None,
    skin: bool = False,
    alive: str | None = None,
) -> Model:
    """Return the model of a result.

    Raises
    ------
    DisplacementError
        No displacement or several.
    UsageError
        Options that do not fit the mesh.
    InputError
        No computable element, or a node order that cannot be right.
    """
    options = plane or PlaneOptions()
    if options.poisson is not None and not -1.0 < options.poisson <= 0.5:
        raise UsageError(f"--poisson {options.poisson:g}: Poisson's ratio lies between -1 and 0.5.")
    found = find_displacement(result, displacement, displacement_scale)
    points = np.asarray(result.points, dtype=np.float64)
    if coordinates == "deformed":
        with np.errstate(invalid="ignore"):
            points = points - found.values
    notes = list(result.notes)
    rows = [_row(result, points, block, notes) for block in result.blocks]
    if all(row is None for row in rows):
        raise InputError(_nothing_to_compute(result))
    left_out, masks = _left_out(result, rows, skin, alive)
    _check_components(result, rows, points, found)
    flat, values = _plane_mesh(result, rows, points, found.values, options, notes)
    if options.poisson is not None and (flat is None or options.model is None):
        _check_poisson(result, rows, flat)
    blocks = []
    for block, row, mask in zip(result.blocks, rows, masks):
        kind: Kind | None = None
        if row is not None:
            kind = "plane" if flat is not None and row.dim == 2 else KINDS[row.dim - 1]
        active = np.flatnonzero(mask) if row is not None else np.zeros(0, dtype=np.int64)
        blocks.append(ModelBlock(block, row, kind, active))
    if not any(len(b.active) for b in blocks):
        raise InputError(
            f"{_where(result)}every cell is left out ({', '.join(left_out)}): nothing remains to compute."
        )
    return Model(
        result, found, points, NodalFields(points, values), tuple(blocks), flat, left_out, tuple(notes),
        poisson=options.poisson,
    )  # fmt: skip


def _check_components(
    result: Result, rows: list[Element | None], points: Floats, found: Displacement
) -> None:
    """Refuse a displacement in the plane for a mesh that is not in it."""
    if found.components != 2:
        return
    blocks = [b for b, row in zip(result.blocks, rows) if row is not None]
    z = points[used_points(blocks, result.n_points), 2]
    z = z[np.isfinite(z)]
    if len(z) and np.ptp(z) > _IN_PLANE * float(np.abs(points[np.isfinite(points)]).max(initial=0.0)):
        raise DisplacementError(
            f"{_where(result)}{found.name!r} has 2 components, and the mesh does not lie in the x-y plane: the third one is "
            "missing. Name an array of 3 components with --displacement NAME, or three scalars ux,uy,uz."
        )


def _check_poisson(result: Result, rows: list[Element | None], flat: Plane | None) -> None:
    """Refuse a Poisson ratio that nothing depends on."""
    if flat is not None:
        raise UsageError(
            f"{_where(result)}--poisson belongs to --plane stress; on its own it does nothing here."
        )
    if not any(row is not None and row.dim == 2 for row in rows):
        raise UsageError(
            f"{_where(result)}--poisson is for plane stress and for the thickness of surfaces; this mesh has no cells of "
            "either. For the form of the equivalent strain there is --equivalent-poisson."
        )


def _where(result: Result) -> str:
    return f"{result.path}: " if result.path else ""


def _row(result: Result, points: Floats, block: CellBlock, notes: list[str]) -> Element | None:
    n_nodes = block.connectivity.shape[1]
    if not_computable(block.cell_type, n_nodes) is not None:
        return None
    try:
        spacing = detect_spacing(points, block.connectivity, block.cell_type)
        row = element(block.cell_type, n_nodes, spacing)
    except InputError as error:
        raise InputError(f"{_where(result)}cell {int(block.index[0])}: {error}") from None
    check = misplaced_mid_nodes(points, block.connectivity, row)
    if check.count:
        found = (
            f"{check.count} of {len(block)} {block.cell_type} cells have mid-side nodes far from the middle of their "
            f"edges (first: cell {int(block.index[check.first])})"
        )
        if check.share > 0.5:
            raise InputError(
                f"{_where(result)}{found}: the node order of the file is not that of its format. Write the file again "
                "with the right node order."
            )
        notes.append(f"{found}: look at these cells before you trust their strain.")
    return row


def _nothing_to_compute(result: Result) -> str:
    reasons = {b.cell_type: not_computable(b.cell_type, b.connectivity.shape[1]) for b in result.blocks}
    listed = "; ".join(f"{name}: {reason}" for name, reason in reasons.items())
    return f"{_where(result)}no element of this mesh can be computed ({listed})."


def _left_out(
    result: Result, rows: list[Element | None], skin: bool, alive: str | None
) -> tuple[dict[str, NDArray[np.int64]], list[NDArray[np.bool_]]]:
    """Return the cells left out by reason and, per block, the mask of those that stay."""
    out: dict[str, list[NDArray[np.int64]]] = {}
    gone = np.zeros(result.n_cells, dtype=bool)
    for block, row in zip(result.blocks, rows):
        if row is None:
            reason = not_computable(block.cell_type, block.connectivity.shape[1])
            out.setdefault(f"{block.cell_type} ({reason})", []).append(block.index)
            gone[block.index] = True
    for reason, cells in result.left_out.items():
        fresh = np.asarray(cells)[~gone[cells]]
        if len(fresh):
            out.setdefault(reason, []).append(fresh)
        gone[cells] = True
    if alive is not None:
        dead = np.flatnonzero(_dead(result, alive) & ~gone)
        if len(dead):
            out["deleted"] = [dead]
        gone[dead] = True
    if not skin:
        for cells in skin_cells(result, rows):
            fresh = cells[~gone[cells]]
            if len(fresh):
                out.setdefault(SKINS, []).append(fresh)
            gone[cells] = True
    masks = [~gone[block.index] for block in result.blocks]
    return {reason: np.sort(np.concatenate(parts)) for reason, parts in out.items()}, masks


def _dead(result: Result, alive: str) -> NDArray[np.bool_]:
    if alive not in result.cell_data:
        present = ", ".join(repr(n) for n in result.cell_data) or "none"
        raise UsageError(
            f"{_where(result)}--alive: no cell array is called {alive!r}. Cell arrays: {present}."
        )
    values = result.cell_data[alive]
    if values.size != result.n_cells:
        raise UsageError(f"{_where(result)}--alive: cell array {alive!r} has more than one component.")
    dead: NDArray[np.bool_] = values.reshape(-1) == 0
    return dead


def skin_cells(result: Result, rows: list[Element | None]) -> list[NDArray[np.int64]]:
    """Return file positions of cells all of whose nodes belong to one cell of higher dimension."""
    dims = [row.dim if row is not None else 0 for row in rows]
    found = []
    for low in (1, 2):
        upper = [b for b, d in zip(result.blocks, dims) if d > low]
        if not upper or low not in dims:
            continue
        used = used_points(upper, result.n_points)
        for block, d in zip(result.blocks, dims):
            if d != low:
                continue
            maybe = np.flatnonzero(used[block.connectivity].all(axis=1))
            if len(maybe):
                inside = _inside_one(block.connectivity[maybe], upper, result.n_points)
                found.append(block.index[maybe[inside]])
    return found


def _incidence(connectivity: NDArray[np.int64], n_points: int) -> sparse.csr_array:
    n, k = connectivity.shape
    return sparse.csr_array(
        (np.ones(n * k, dtype=np.int32), connectivity.reshape(-1), np.arange(0, n * k + 1, k)),
        shape=(n, n_points),
    )


def _inside_one(low: NDArray[np.int64], upper: list[CellBlock], n_points: int) -> NDArray[np.bool_]:
    inside = np.zeros(len(low), dtype=bool)
    lower = _incidence(low, n_points)
    for block in upper:
        shared = lower @ _incidence(block.connectivity, n_points).T
        inside |= np.asarray(shared.max(axis=1).todense()).reshape(-1) >= low.shape[1]
    return inside


def _plane_mesh(
    result: Result,
    rows: list[Element | None],
    points: Floats,
    displacement: Floats,
    options: PlaneOptions,
    notes: list[str],
) -> tuple[Plane | None, Floats]:
    """Return the plane of the mesh, or None, and the displacement to use."""
    flat = [b for b, r in zip(result.blocks, rows) if r is not None and r.dim == 2]
    highest = max(r.dim for r in rows if r is not None)
    normal = _normal_axis(points, flat, used_points(flat, result.n_points)) if highest == 2 else None
    if options.surface and options.model is None:
        return None, displacement
    if normal is None:
        if options.model is not None:
            raise UsageError(
                f"{_where(result)}--plane {options.model} needs a mesh whose highest cells are two-dimensional "
                "and lie in one coordinate plane; this one does not."
            )
        return None, displacement
    used = used_points(flat, result.n_points)
    known = displacement[used & np.isfinite(displacement).all(axis=1)]
    moved = float(np.abs(known[:, normal]).max(initial=0.0))
    size = float(np.abs(known).max(initial=0.0))
    if moved > 1e-9 * size:
        if options.model is None:
            return None, displacement
        notes.append(
            f"--plane {options.model}: the displacement across the plane (up to {moved:.3g}) is left out."
        )
    displacement = displacement.copy()
    displacement[:, normal] = 0.0
    axis = {"x": 0, "y": 1}[options.axis]
    if options.model == "axisymmetric":
        _check_axis(result, points[used], normal, axis)
    if options.model == "stress" and options.poisson is None:
        raise UsageError("--plane stress needs --poisson NU: the strain across the plane follows from it.")
    return Plane(normal, options.model, options.poisson, axis), displacement


def _normal_axis(points: Floats, blocks: list[CellBlock], used: NDArray[np.bool_]) -> int | None:
    if not blocks:
        return None
    with np.errstate(invalid="ignore"):
        spread = np.ptp(points[used], axis=0)
    size = float(spread.max())
    thin = [k for k in range(3) if spread[k] <= _IN_PLANE * size]
    return thin[-1] if thin and size > 0 else None


def _check_axis(result: Result, points: Floats, normal: int, axis: int) -> None:
    if normal == axis:
        raise UsageError(
            f"{_where(result)}--axis {'xyz'[axis]}: the axis of revolution must lie in the plane of the mesh."
        )
    radius = points[:, 3 - normal - axis]
    low, high = float(radius.min()), float(radius.max())
    if low < -1e-9 * max(abs(low), abs(high)):
        raise UsageError(
            f"{_where(result)}--plane axisymmetric about {'xyz'[axis]}: the mesh reaches across the axis "
            f"(radius {low:.6g} to {high:.6g}). Choose the other axis with --axis, or move the mesh."
        )
