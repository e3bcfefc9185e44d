"""The files behind a result file: what an index of other files names."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

from unturn.errors import InputError
from unturn.io._formats import format_of_file

_MOST = 1_000_000  # files; an index that names itself would go on for ever


def files_behind(path: Path) -> Iterator[Path]:
    """Yield the files that a result file names and keeps its numbers in; none for a file that cannot be read.

    Parameters
    ----------
    path
        XDMF names HDF5 and binary files and includes; PVD, PVTU and VTM name meshes; other formats name none.
    """
    seen, waiting = {path.resolve()}, [path]
    while waiting and len(seen) < _MOST:
        for file in _named(waiting.pop()):
            if file.resolve() not in seen:
                seen.add(file.resolve())
                waiting.append(file)
                yield file


def _named(path: Path) -> list[Path]:
    try:
        name = format_of_file(path).name
        if name == "XDMF":
            return list(_of_xdmf(path))
        if name in ("PVD", "PVTU", "VTM"):
            from unturn.io.vtk_composite import open_file

            return [part.file for step in open_file(path).parts for part in step]
    except (InputError, OSError):  # told where it is read
        pass
    return []


def _of_xdmf(path: Path) -> Iterator[Path]:
    from unturn.io.xdmf_xml import attribute, local_name, parse

    for node in parse(path).iter():
        text = (node.text or "").strip()
        layout = attribute(node, "Format", default="XML").lower()
        if local_name(node) == "include" and attribute(node, "href"):
            yield path.parent / attribute(node, "href")
        elif local_name(node) == "DataItem" and layout == "hdf":
            yield path.parent / text.rpartition(":")[0].strip()
        elif local_name(node) == "DataItem" and layout == "binary":
            yield path.parent / text
