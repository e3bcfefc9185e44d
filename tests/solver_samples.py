"""Files of solver formats, written by hand for the tests: Exodus II in both layouts, MSH as text."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import h5py
import numpy as np
from scipy.io import netcdf_file

EXODUS_NAMES = {
    "line": "BAR2", "line3": "BAR3", "triangle": "TRI3", "triangle6": "TRI6", "quad": "SHELL4",
    "quad8": "QUAD8", "quad9": "QUAD9", "tetra": "TETRA4", "tetra10": "TETRA10", "pyramid": "PYRAMID5",
    "pyramid13": "PYRAMID13", "wedge": "WEDGE", "wedge15": "WEDGE15", "hexahedron": "HEX8",
    "hexahedron20": "HEX20", "hexahedron27": "HEX27",
}  # fmt: skip


def characters(names: list[str], width: int = 33) -> np.ndarray:
    """Return names as Exodus stores them, one character to a place."""
    table = np.zeros((len(names), width), "S1")
    for row, name in enumerate(names):
        table[row, : len(name)] = [c.encode() for c in name]
    return table


def exodus(
    path: Path,
    points: np.ndarray,
    blocks: list[tuple[str, np.ndarray]],
    nodal: dict[str, np.ndarray] | None = None,
    elemental: dict[str, dict[int, np.ndarray]] | None = None,
    times: tuple[float, ...] = (0.0,),
    more: dict[str, np.ndarray] | None = None,
    hdf: bool = False,
) -> Path:
    """Write an Exodus II file; nodal arrays ``(n_steps, n_points)``, elemental ones by block, from 1."""
    variables: dict[str, Any] = {"time_whole": np.array(times)}
    variables |= {f"coord{a}": points[:, k] for k, a in enumerate("xyz"[: points.shape[1]])}
    variables["eb_prop1"] = np.arange(len(blocks), dtype=np.int32) * 10 + 10
    types = {}
    for k, (kind, nodes) in enumerate(blocks, 1):
        variables[f"connect{k}"] = (nodes + 1).astype(np.int32)
        types[f"connect{k}"] = kind
    if nodal:
        variables["name_nod_var"] = characters(list(nodal))
        variables |= {f"vals_nod_var{k}": v for k, v in enumerate(nodal.values(), 1)}
    if elemental:
        variables["name_elem_var"] = characters(list(elemental))
        for k, by_block in enumerate(elemental.values(), 1):
            variables |= {f"vals_elem_var{k}eb{b}": v for b, v in by_block.items()}
    variables |= more or {}
    if hdf:
        with h5py.File(path, "w") as file:
            for name, values in variables.items():
                file[name] = values
                if name in types:
                    file[name].attrs["elem_type"] = np.bytes_(types[name])
    else:
        _classic(path, variables, types, len(points), sum(len(n) for _, n in blocks))
    return path


def _classic(path: Path, variables: dict[str, Any], types: dict[str, str], n_nodes: int, n_elem: int) -> None:
    with netcdf_file(str(path), "w", version=2) as file:
        file.title, file.version, file.api_version = b"test", np.float32(5.1), np.float32(5.1)
        file.floating_point_word_size, file.file_size = np.int32(8), np.int32(1)
        # Exodus libraries ask for these dimensions by name.
        n_blocks = len(types)
        for name, size in (
            ("time_step", None), ("len_string", 33), ("len_line", 81), ("four", 4), ("num_nodes", n_nodes),
            ("num_dim", sum(v.startswith("coord") for v in variables)), ("num_elem", n_elem),
            ("num_el_blk", n_blocks),
        ):  # fmt: skip
            file.createDimension(name, size)
        for name, values in variables.items():
            dims = []
            for axis, size in enumerate(values.shape):
                dims.append(_dimension(file, name, axis, size, n_nodes, n_elem, n_blocks))
            variable = file.createVariable(
                name, "c" if values.dtype.kind == "S" else values.dtype, tuple(dims)
            )
            variable[:] = values
            if name in types:
                variable.elem_type = types[name].encode()


def _dimension(file: Any, name: str, axis: int, size: int, n_nodes: int, n_elem: int, n_blocks: int) -> str:
    number = "".join(c for c in name.rsplit("eb", maxsplit=1)[-1] if c.isdigit())
    known = {
        ("time_whole", 0): "time_step", ("coordx", 0): "num_nodes", ("coordy", 0): "num_nodes",
        ("coordz", 0): "num_nodes", ("eb_prop1", 0): "num_el_blk", ("name_nod_var", 0): "num_nod_var",
        ("name_elem_var", 0): "num_elem_var", ("name_nod_var", 1): "len_string",
        ("name_elem_var", 1): "len_string", ("eb_names", 0): "num_el_blk", ("eb_names", 1): "len_string",
        ("node_num_map", 0): "num_nodes", ("elem_num_map", 0): "num_elem",
    }.get((name, axis))  # fmt: skip
    if name.startswith("vals_") and axis == 0:
        known = "time_step"
    elif name.startswith("vals_nod"):
        known = "num_nodes"
    elif name.startswith("vals_elem"):
        known = f"num_el_in_blk{number}"
    elif name.startswith("connect"):
        known = (f"num_el_in_blk{number}", f"num_nod_per_el{number}")[axis]
    known = known or f"{name}_{axis}"
    if known not in file.dimensions:
        file.createDimension(known, size)
    return known


def msh(*sections: str) -> str:
    """Return an MSH 2.2 text file of these sections."""
    return "\n".join(["$MeshFormat", "2.2 0 8", "$EndMeshFormat", *sections]) + "\n"


def section(name: str, *lines: str) -> str:
    """Return one section."""
    return "\n".join([f"${name}", *lines, f"$End{name}"])


def view(name: str, time: float, step: int, rows: dict[int, list[float]], kind: str = "NodeData") -> str:
    """Return one step of values at nodes or elements."""
    width = len(next(iter(rows.values())))
    lines = [f"{number} {' '.join(map(repr, values))}" for number, values in rows.items()]
    return section(
        kind, "1", f'"{name}"', "1", repr(time), "3", str(step), str(width), str(len(rows)), *lines
    )
