"""The solver's own strain array against ours: finds a wrong displacement, unit or node order at once."""

from __future__ import annotations

import re
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from unturn.fields import CellFields, compute_fields
from unturn.kinematics._motion import green_lagrange
from unturn.kinematics._symmetric import Floats, six_from_full
from unturn.statistics import weighted_percentiles

_NAMES = re.compile(r"strain|^e$|^el$|^le$|^ee$|^eps(ilon)?$|^epto$|^epel$", re.IGNORECASE)
_NOT = re.compile(
    r"plastic|thermal|creep|inelastic|energy|rate|equiv|mises|princ|_?pe$|error|eff|volum|direction|max",
    re.IGNORECASE,
)

_ORDERS: dict[str, tuple[int, ...]] = {
    "XX YY ZZ XY YZ XZ": (0, 1, 2, 3, 4, 5),
    "XX YY ZZ XY XZ YZ": (0, 1, 2, 3, 5, 4),
    "XX YY ZZ YZ XZ XY": (0, 1, 2, 5, 3, 4),
    "XX XY XZ YY YZ ZZ": (0, 3, 5, 1, 4, 2),
}
"""Order in the file -> for each of our six components, its column in the file."""

_CLOSE = 0.02


@dataclass(frozen=True)
class Agreement:
    """How well a strain array of the file agrees with ours.

    Attributes
    ----------
    array, association
        Its name and where it lives.
    difference
        99th percentile, weighted by volume, of the norm of the difference over that of the strain; NaN where neither
        holds strain above the stored precision, or the array no numbers where ours does.
    guess
        What was assumed of it: measure, order, factor of shear; empty when it was not compared.
    agrees
        Whether the difference is below 2 %.
    """

    array: str
    association: Literal["point", "cell"]
    difference: float
    guess: str
    agrees: bool


def strain_arrays(fields: CellFields) -> list[tuple[str, Literal["point", "cell"], Floats]]:
    """Return arrays of the file that look like a strain tensor, as `(n_cells, 6 | 9)` cell values."""
    result = fields.model.result
    found: list[tuple[str, Literal["point", "cell"], Floats]] = []
    for name, values in result.cell_data.items():
        if _usable(name, values):
            found.append((name, "cell", _flat(values)))
    for name, values in result.point_data.items():
        if _usable(name, values):
            nodal = _flat(values)
            means = np.full((result.n_cells, nodal.shape[1]), np.nan)
            for block in fields.model.blocks:
                if block.row is not None:
                    means[block.index] = nodal[block.connectivity[:, : block.row.n_corners]].mean(axis=1)
            found.append((name, "point", means))
    return found


def _usable(name: str, values: np.ndarray) -> bool:
    width = values.size // max(1, len(values))
    named = bool(_NAMES.search(name.strip())) and not _NOT.search(name.strip())
    return named and values.dtype.kind == "f" and width in (6, 9)


def _flat(values: np.ndarray) -> Floats:
    return np.asarray(values, dtype=np.float64).reshape(len(values), -1)


def compare_with_solver(fields: CellFields, threads: int | None = None) -> list[Agreement]:
    """Return one agreement for each strain array of the file, with the best guess of what it holds.

    Parameters
    ----------
    fields
        Computed fields with diagnostics.
    threads
        None: all processors.
    """
    candidates = strain_arrays(fields)
    if not candidates or fields.diagnostics is None:
        return []
    whole = replace(fields.model, back=None, back_of=None)  # the solver's strain is that of the whole motion
    H = compute_fields(whole, ["displacement_gradient"], threads=threads).arrays["displacement_gradient"]
    gradient = np.moveaxis(H.reshape(-1, 3, 3), 0, -1)
    ours = {"small strain": six_from_full(gradient), "Green-Lagrange strain": green_lagrange(gradient)}
    return [_best(name, where, values, ours, fields) for name, where, values in candidates]


def _best(
    name: str, where: Literal["point", "cell"], values: Floats, ours: dict[str, Floats], fields: CellFields
) -> Agreement:
    assert fields.diagnostics is not None
    weight, noise = fields.diagnostics.volume, fields.diagnostics.noise
    best = (np.nan, "")
    for measure, e in ours.items():
        known = np.flatnonzero(np.isfinite(e).any(axis=1))  # not the strain across a plane that is not stated
        for label, theirs in _readings(values).items():
            keep = (
                np.isfinite(weight)
                & np.isfinite(e[known]).all(axis=0)
                & np.isfinite(theirs[known]).all(axis=0)
            )
            if not keep.any():
                continue
            pair = np.zeros((6, 2, int(keep.sum())))
            pair[known] = np.stack([e[known], theirs[known]], axis=1)[:, :, keep]
            norms = (pair[:, 0] - pair[:, 1], pair[:, 0], pair[:, 1])
            gap, size, their_size = (weighted_percentiles(_norm(n), weight[keep], [99.0])[0] for n in norms)
            if max(size, their_size) <= weighted_percentiles(noise[keep], weight[keep], [99.0])[0]:
                continue
            part = gap / size if size > 0 else np.inf
            if not part >= best[0]:
                best = (part, f"{measure}, {label}")
    return Agreement(name, where, float(best[0]), best[1], bool(best[0] < _CLOSE))


def _readings(values: Floats) -> dict[str, Floats]:
    if values.shape[1] == 9:
        full = np.moveaxis(values.reshape(-1, 3, 3), 0, -1)
        return {"full tensor": six_from_full(full)}
    readings = {}
    for label, columns in _ORDERS.items():
        picked = values[:, columns].T
        readings[f"{label}, tensor shear"] = picked
        readings[f"{label}, engineering shear"] = picked * np.array([1, 1, 1, 0.5, 0.5, 0.5])[:, None]
    return readings


def _norm(e: Floats) -> Floats:
    total: Floats = np.sqrt((e[:3] ** 2).sum(axis=0) + 2.0 * (e[3:] ** 2).sum(axis=0))
    return total
