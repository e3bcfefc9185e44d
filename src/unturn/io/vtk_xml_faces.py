"""The faces of polyhedra in a VTU file: VTK follows these lists while it reads, so each entry is proved before.

Source: VTK 9.7, vtkXMLUnstructuredDataReader: one stream ("faces") up to file version 2.2, lists with their own
offsets from 2.3 on.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any
from xml.etree import ElementTree

import numpy as np

from unturn.io.vtk_xml_array import XmlArrays


def check_faces(
    file: XmlArrays, arrays: Mapping[str, ElementTree.Element], n_points: int, n_cells: int, where: str
) -> None:
    """Raise `InputError` when the faces of a piece's polyhedra, if it has any, are not sound."""
    if "faces" in arrays and "faceoffsets" in arrays:
        _check_list(file, arrays["connectivity"], arrays["offsets"], n_cells, n_points, where)
        _check_face_stream(file, arrays["faces"], arrays["faceoffsets"], n_points, n_cells, where)
    new = ("face_connectivity", "face_offsets", "polyhedron_to_faces", "polyhedron_offsets")
    present = [name for name in new if name in arrays]
    if not present:
        return
    missing = [name for name in new if name not in arrays]
    if missing:
        raise file.fail(f"{where}it has {present[0]} and no {missing[0]}")
    _check_list(file, arrays["connectivity"], arrays["offsets"], n_cells, n_points, where)
    n_faces = file.values(arrays["face_offsets"], where)
    _check_list(file, arrays["face_connectivity"], arrays["face_offsets"], n_faces, n_points, where)
    _check_list(file, arrays["polyhedron_to_faces"], arrays["polyhedron_offsets"], n_cells, n_faces, where)


def _check_list(
    file: XmlArrays,
    entries: ElementTree.Element,
    offsets: ElementTree.Element,
    n_rows: int,
    limit: int,
    where: str,
) -> None:
    """Prove that offsets rise to the number of entries, and that entries are from 0 to below `limit`."""
    name = entries.get("Name")
    file.check_array(offsets, n_rows, where)
    ends = file.decode(offsets, None, where).astype(np.int64)
    listed = file.decode(entries, None, where).astype(np.int64)
    if (np.diff(ends, prepend=0) < 0).any() or (ends[-1] if len(ends) else 0) != len(listed):
        raise file.fail(
            f"{where}the {offsets.get('Name')} do not rise to the length of {name}, {len(listed)}"
        )
    if len(listed) and (listed.min() < 0 or listed.max() >= limit):
        bad = int(listed[np.flatnonzero((listed < 0) | (listed >= limit))[0]])
        raise file.fail(f"{where}{name} refers to {bad}; it may be 0 to {limit - 1}")


def _check_face_stream(
    file: XmlArrays,
    faces: ElementTree.Element,
    offsets: ElementTree.Element,
    n_points: int,
    n_cells: int,
    where: str,
) -> None:
    """Prove the stream ``[number of faces, (number of nodes, nodes ...) ...]`` of every polyhedron."""
    file.check_array(offsets, n_cells, where)
    ends = file.decode(offsets, None, where).astype(np.int64)
    stream = file.decode(faces, None, where).astype(np.int64)
    start = 0
    for cell in np.flatnonzero(ends >= 0):
        end = -1
        for position, nodes in _faces(stream, start):
            end = position
            if len(nodes) and (nodes.min() < 0 or nodes.max() >= n_points):
                raise file.fail(
                    f"{where}a face of the polyhedron in cell {int(cell)} has a node out of range"
                )
        if end != ends[cell]:
            raise file.fail(f"{where}the faces of the polyhedron in cell {int(cell)} do not fit their offset")
        start = end
    if start != len(stream):
        raise file.fail(f"{where}faces has {len(stream)} numbers and its polyhedra take {start}")


def _faces(stream: Any, start: int) -> Iterator[tuple[int, Any]]:
    """Yield the position after each face of the polyhedron at `start`, and its nodes; -1 when it runs out."""
    nothing = stream[:0]
    if not 0 <= start < len(stream) or stream[start] < 0:
        yield -1, nothing
        return
    position = start + 1
    yield position, nothing
    for _ in range(int(stream[start])):
        if position >= len(stream) or not 0 <= stream[position] <= len(stream) - position - 1:
            yield -1, nothing
            return
        nodes = stream[position + 1 : position + 1 + int(stream[position])]
        position += 1 + int(stream[position])
        yield position, nodes
