"""The FORMATS table, and which of its lines a file belongs to."""

from __future__ import annotations

import importlib
import re
from collections.abc import Callable
from pathlib import Path
from typing import Any

from unturn.errors import InputError, UsageError, close_matches
from unturn.io._format import Format
from unturn.result import Result


def _call(module: str, function: str, *extra: Any) -> Callable[..., Any]:
    """Return a function of an adapter that is imported at its first call."""

    def call(*args: Any) -> Any:
        return getattr(importlib.import_module(f"unturn.io.{module}"), function)(*args, *extra)

    return call


def _xml(name: str, suffix: str) -> Format:
    return Format(
        name, (suffix,), _call("vtk_xml", "open_file", suffix), _call("vtk_xml", "write_file", suffix)
    )


def _meshio(name: str, *suffixes: str) -> Format:
    return Format(name, suffixes, _call("_meshio", "open_file"))


FORMATS: tuple[Format, ...] = (
    _xml("VTU", ".vtu"),
    _xml("VTP", ".vtp"),
    _xml("VTS", ".vts"),
    _xml("VTR", ".vtr"),
    _xml("VTI", ".vti"),
    Format(
        "PVD", (".pvd",), _call("vtk_composite", "open_file"), None, _call("vtk_composite", "open_series")
    ),
    Format("PVTU", (".pvtu", ".pvtp"), _call("vtk_composite", "open_file")),
    Format("VTM", (".vtm",), _call("vtk_composite", "open_file")),
    Format(
        "VTKHDF",
        (".vtkhdf",),
        _call("vtk_hdf", "open_file"),
        _call("vtk_hdf_write", "write_file"),
        _call("vtk_hdf_write", "open_series"),
    ),
    Format("VTK legacy", (".vtk",), _call("vtk_legacy", "open_file"), _call("vtk_legacy", "write_file")),
    Format(
        "XDMF",
        (".xdmf", ".xmf", ".xdmf3"),
        _call("xdmf", "open_file"),
        _call("xdmf", "write"),
        _call("xdmf", "open_series"),
    ),
    _meshio("MSH", ".msh"),
    _meshio("MED", ".med"),
    _meshio("Exodus", ".exo", ".e", ".ex2"),
    _meshio("INP", ".inp"),
    _meshio("AVS-UCD", ".avs"),
    _meshio("Nastran bulk data", ".bdf", ".nas", ".fem"),
    _meshio("HMF", ".hmf"),
    _meshio("Medit", ".mesh", ".meshb"),
)

_BY_SUFFIX = {suffix: fmt for fmt in FORMATS for suffix in fmt.suffixes}
_BY_NAME = {fmt.name: fmt for fmt in FORMATS}

_VTKFILE_NAMES = {
    "UnstructuredGrid": "VTU",
    "PolyData": "VTP",
    "StructuredGrid": "VTS",
    "RectilinearGrid": "VTR",
    "ImageData": "VTI",
    "Collection": "PVD",
    "PUnstructuredGrid": "PVTU",
    "PPolyData": "PVTU",
    "vtkMultiBlockDataSet": "VTM",
}


def format_of_file(path: Path) -> Format:
    """Return the format of an existing file, by what it holds, else by its suffix.

    Raises
    ------
    InputError
        Neither the content nor the suffix is known.
    """
    with path.open("rb") as stream:
        head = stream.read(4096)
    by_suffix = _BY_SUFFIX.get(path.suffix.lower())
    name = _name_by_content(head, path)
    if name is not None:
        return _BY_NAME[name]
    if by_suffix is None:
        raise InputError(
            f"{path}: neither the suffix {path.suffix!r} nor the content is that of a known result format. "
            f"Formats that can be read: {_listing(FORMATS)}."
        )
    return by_suffix


def vtk_xml_type(head: bytes) -> str | None:
    """Return the type that the first bytes of a VTK XML file state; None for another file.

    Examples
    --------
    >>> vtk_xml_type(b"<VTKFile version='1.0' type='PolyData'>")
    'PolyData'
    """
    found = re.search(rb"<VTKFile\b[^>]*\btype\s*=\s*[\"'](\w+)[\"']", head)
    return None if found is None else found[1].decode()


def _name_by_content(head: bytes, path: Path) -> str | None:
    kind = vtk_xml_type(head)
    if kind is not None:
        if kind not in _VTKFILE_NAMES:
            raise InputError(f"{path}: VTK files of type {kind!r} cannot be read; write VTU instead.")
        return _VTKFILE_NAMES[kind]
    if head.startswith(b"# vtk DataFile"):
        return "VTK legacy"
    if re.search(rb"<Xdmf\b", head):
        return "XDMF"
    if head.startswith(b"$MeshFormat"):
        return "MSH"
    if head.startswith(b"CDF"):
        return "Exodus"
    return _hdf_name(path) if head.startswith(b"\x89HDF") else None


def _hdf_name(path: Path) -> str | None:
    """Return which format an HDF5 file is, by its topmost groups; None when they do not tell."""
    import h5py

    try:
        with h5py.File(path, "r") as file:
            groups = set(file)
            is_exodus = "title" in file.attrs and "api_version" in file.attrs
    except (OSError, RuntimeError, KeyError, ValueError) as error:
        raise InputError(
            f"{path} is an HDF5 file that cannot be opened ({error}). It is damaged, cut short or still "
            "being written by another program."
        ) from error
    if "VTKHDF" in groups:
        return "VTKHDF"
    if {"ENS_MAA", "INFOS_GENERALES"} & groups:
        return "MED"
    if is_exodus:
        return "Exodus"
    return None


def format_for_writing(path: Path, *, series: bool = False) -> Format:
    """Return the format to write for a target's suffix.

    Raises
    ------
    UsageError
        The suffix is not known, or that format is not written here.
    """
    fmt = _BY_SUFFIX.get(path.suffix.lower())
    able = [f for f in FORMATS if (f.write_series if series else f.write) is not None]
    if fmt is None:
        hint = close_matches(path.suffix.lower(), _BY_SUFFIX)
        raise UsageError(
            f"{path}: no format is written to the suffix {path.suffix!r}.{hint} Use {_listing(able)}."
        )
    if fmt not in able:
        what = "a series of steps is not written" if series and fmt.write else "results are not written"
        raise UsageError(
            f"{path}: {what} as {fmt.name}; use "
            + (f"{_listing(able)}." if series else "VTU (.vtu) or XDMF (.xdmf).")
        )
    return fmt


def _listing(formats: tuple[Format, ...] | list[Format]) -> str:
    return ", ".join(f"{f.name} ({' '.join(f.suffixes)})" for f in formats)


def writable_suffix(
    path: Path, result: Result | None = None, *, series: bool = False, duplicated: bool = False
) -> str:
    """Return the suffix of a new file for a result read from `path`: its own where that can be written.

    A format that is only read, a single step of a format that is only a series, and cells that XDMF has no name for, go to
    ``.vtu``, a series of them to ``.pvd``; other series to ``.xdmf``. With `duplicated` points the mesh is unstructured,
    whatever it was.
    """
    fmt = _BY_SUFFIX.get(path.suffix.lower())
    suffix = ".xdmf" if series else ".vtu"
    if fmt is not None and (fmt.write_series if series else fmt.write) is not None:
        suffix = path.suffix
    if duplicated and suffix.lower() in (".vtp", ".vts", ".vtr", ".vti"):
        suffix = ".vtu"
    blocks = () if result is None else result.blocks
    nameless = any(b.cell_type.startswith(("VTK_", "polyhedron")) for b in blocks)
    if nameless and _BY_SUFFIX.get(suffix.lower()) is _BY_NAME["XDMF"]:
        return ".pvd" if series else ".vtu"
    return suffix
