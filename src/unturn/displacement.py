"""Which array of a result is the displacement."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass

import numpy as np

from unturn.errors import DisplacementError, UsageError, close_matches
from unturn.kinematics._symmetric import Floats
from unturn.result import Result

_NAMED = re.compile(
    r"^(u|uvec|u_?h|disp|displ|displacements?|deformation|translations?)$"
    r"|displacement|(^|[ _.])depl(acements?)?$|^disp(l)?[ _.-]|[ _.-]disp(l)?$|^u[ _.-]?(vector|total|mean)$",
    re.IGNORECASE,
)
_OTHER = re.compile(
    r"veloc|accel|force|reaction|normal|rotation|moment|momentum|traction|coord|posit|flux|stress|strain|gradient"
    r"|direction|axis|fib(er|re)|load|temperature|heat|pressure|residual|color|colour|texture|^v$|^a$|^rf$|^cf$",
    re.IGNORECASE,
)
_TRIPLES = (
    ("ux", "uy", "uz"),
    ("u_x", "u_y", "u_z"),
    ("u1", "u2", "u3"),
    ("u_1", "u_2", "u_3"),
    ("disp_x", "disp_y", "disp_z"),
    ("dispx", "dispy", "dispz"),
    ("displacement_x", "displacement_y", "displacement_z"),
)
_COMPLEX = re.compile(
    r"(^|[ _.(-])(re|real|im|imag|imaginary|phase|ampl?|amplitude)([ _.)-]|$)", re.IGNORECASE
)


@dataclass(frozen=True, eq=False)
class Displacement:
    """The displacement that was found.

    Parameters
    ----------
    name
        Array name, or three names joined by commas.
    values
        `(n_points, 3)` float64, scaled.
    stored
        The arrays as stored, for the storage resolution.
    why
        Why this one: ``only candidate``, ``chosen`` ...
    candidates
        Every name that could have been it.
    scale
        Factor from the stored arrays to the values.
    components
        How many of the three were stored: 2 or 3.
    """

    name: str
    values: Floats
    stored: tuple[np.ndarray, ...]
    why: str
    candidates: tuple[str, ...]
    scale: float = 1.0
    components: int = 3


def displacement_candidates(result: Result) -> tuple[list[str], list[str]]:
    """Return the point arrays named like a displacement, and other vectors that might be one."""
    vectors = [
        name
        for name, a in result.point_data.items()
        if a.ndim == 2
        and a.shape[1] in (2, 3, 6)
        and np.issubdtype(a.dtype, np.floating)
        and "XY" not in result.component_names.get(("point", name), ())
    ]
    named = [n for n in vectors if _NAMED.search(n.strip()) and not _OTHER.search(n)]
    scalars = _scalars(result) if not named else []
    triples = _scalar_triples(result, scalars)
    if scalars and not triples and _along_x(result):
        triples = [n for n in scalars if _NAMED.search(n.strip()) and not _OTHER.search(n)]
    others = [n for n in vectors if n not in named and not _OTHER.search(n)]
    return named + triples, others


def _scalars(result: Result) -> list[str]:
    return [
        n for n, a in result.point_data.items() if a.size == len(a) and np.issubdtype(a.dtype, np.floating)
    ]


def _along_x(result: Result) -> bool:
    """Whether the mesh is one-dimensional: all its points on one line along x."""
    return not np.ptp(result.points[:, 1:], axis=0).any()


def _scalar_triples(result: Result, scalars: list[str]) -> list[str]:
    by_folded = {n.strip().casefold(): n for n in scalars}
    found = []
    for triple in _TRIPLES:
        present = [by_folded[t] for t in triple if t in by_folded]
        if len(present) == 3 or (len(present) == 2 and result.point_dimension == 2):
            found.append(",".join(present))
    return found


def find_displacement(result: Result, name: str | None = None, scale: float = 1.0) -> Displacement:
    """Return the displacement of a result.

    Parameters
    ----------
    result
        The result.
    name
        Array to use; three scalar arrays as ``ux,uy,uz``. None: the one clear candidate.
    scale
        Factor from the array's unit to the unit of the points.

    Raises
    ------
    DisplacementError
        No candidate, several, only on cells, or a complex (harmonic) pair.
    UsageError
        The named array does not exist or is no vector, or the scale is no factor.
    """
    where = f"{result.path}: " if result.path else ""
    if not (math.isfinite(scale) and scale):
        raise UsageError(f"--displacement-scale {scale:g}: the factor must be a number other than zero.")
    named, others = displacement_candidates(result)
    candidates = tuple(named or others)
    if name is not None:
        return _chosen(result, name, scale, candidates, where)
    _refuse_complex(result, where)
    if len(candidates) == 1:
        return _chosen(result, candidates[0], scale, candidates, where, why="only candidate")
    if candidates:
        listed = ", ".join(f"'{c}'" for c in candidates)
        raise DisplacementError(
            f"{where}{len(candidates)} point arrays could be the displacement: {listed}. "
            "Say which with --displacement NAME."
        )
    on_cells = [
        n for n, a in result.cell_data.items() if a.ndim == 2 and a.shape[1] in (2, 3) and _NAMED.search(n)
    ]
    if on_cells:
        raise DisplacementError(
            f"{where}the displacement {on_cells[0]!r} is stored on cells; a gradient needs it at the nodes. "
            "Write nodal displacements from the solver."
        )
    present = ", ".join(repr(n) for n in result.point_data) or "none"
    raise DisplacementError(
        f"{where}no displacement found; the point arrays are: {present}. Name a vector with --displacement NAME, "
        "three scalars with --displacement ux,uy,uz, or give a table with --displacement-table FILE.csv."
        + "".join(f" {note}" for note in result.notes)
    )


def _refuse_complex(result: Result, where: str) -> None:
    for n, a in result.point_data.items():
        part = a.ndim == 2 and _COMPLEX.search(n)
        if np.iscomplexobj(a) or (part and (_NAMED.search(n) or _NAMED.search(_COMPLEX.sub("", n).strip()))):
            raise DisplacementError(
                f"{where}point array {n!r} looks like part of a complex (harmonic) displacement. Its strain has an "
                "amplitude and a phase, which is not supported yet; for one instant of the cycle name a real array "
                "with --displacement NAME."
            )


def _chosen(
    result: Result, name: str, scale: float, candidates: tuple[str, ...], where: str, why: str = "chosen"
) -> Displacement:
    data = result.point_data
    names = [name] if name in data else [part.strip() for part in name.split(",")]
    for part in names:
        if part not in data:
            on_cells = (
                " It is a cell array; a gradient needs nodal values." if part in result.cell_data else ""
            )
            present = ", ".join(repr(n) for n in data) or "none"
            raise UsageError(
                f"{where}no point array is called {part!r}.{on_cells}{close_matches(part, data)} "
                f"Point arrays: {present}."
            )
    stored = tuple(np.asarray(data[n]) for n in names)
    for part, a in zip(names, stored):
        if np.iscomplexobj(a):
            raise DisplacementError(
                f"{where}point array {part!r} is complex; complex (harmonic) results are not supported yet."
            )
        if a.dtype.kind not in "fiu":
            raise UsageError(f"{where}point array {part!r} holds {a.dtype}, not numbers.")
    columns = _columns(stored, name, where, _along_x(result))
    values = np.zeros((result.n_points, 3))
    values[:, : len(columns)] = np.stack(columns, axis=1)
    if scale != 1.0:
        values *= scale
    return Displacement(name, values, stored, why, candidates, scale, len(columns))


def _columns(stored: tuple[np.ndarray, ...], name: str, where: str, along_x: bool) -> list[np.ndarray]:
    if len(stored) == 1:
        a = stored[0]
        if along_x and a.size == len(a):
            return [a.reshape(-1)]
        if a.ndim != 2 or a.shape[1] not in (2, 3, 6):
            raise UsageError(
                f"{where}point array {name!r} has shape {a.shape}; a displacement has 2 or 3 components "
                "(6 with nodal rotations)."
            )
        return [a[:, k] for k in range(min(3, a.shape[1]))]
    if len(stored) not in (2, 3) or any(a.size != len(a) for a in stored):
        raise UsageError(f"{where}--displacement {name!r}: give two or three scalar point arrays.")
    return [a.reshape(-1) for a in stored]
