"""Indexes of other files: PVTU and PVTP (pieces), VTM (blocks) and PVD (steps)."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any
from xml.etree import ElementTree
from xml.sax.saxutils import quoteattr

import numpy as np
from numpy.typing import NDArray

from unturn.errors import InputError
from unturn.io._format import check_step_value
from unturn.io._formats import vtk_xml_type
from unturn.io.vtk_arrays import name_of, roles_of, set_arrays
from unturn.io.vtk_result import result_from_vtk
from unturn.io.vtk_xml import KINDS, read_dataset, vtk_class, write_file
from unturn.io.vtk_xml_check import parse_root
from unturn.result import Result, Steps

_SINGLE = {kind: name for name, kind in KINDS.values()}
_PIECES = ("PUnstructuredGrid", "PPolyData")
_BLOCKS = "vtkMultiBlockDataSet"
_SERIES = "Collection"


@dataclass(frozen=True)
class _Part:
    """One file of an index and the names of the groups its cells belong to."""

    file: Path
    groups: tuple[str, ...]


@dataclass(frozen=True)
class IndexFile:
    """An opened PVTU, PVTP, VTM or PVD file."""

    path: str
    format_name: str
    parts: tuple[tuple[_Part, ...], ...]
    steps: tuple[float, ...] | None = None

    def read(self, step: int = 0) -> Result:
        """Read one step (0 when the file is not a series)."""
        state = None if self.steps is None else Steps(self.steps, step)
        dataset, groups, notes = _assemble(self.parts[step], self.path)
        return result_from_vtk(
            dataset, self.path, format_name=self.format_name, steps=state, groups=groups, notes=notes
        )


def open_file(path: Path) -> IndexFile:
    """Open an index file after proving that its text is sound; the files it names are read later."""
    root = parse_root(str(path))
    kind = root.get("type", "")
    body = root.find(kind)
    if body is None:
        raise InputError(f"{path}: it has no {kind} element. The file is incomplete: write it again.")
    if kind == _SERIES:
        steps = _steps(body, path)
        return IndexFile(str(path), "PVD", tuple(steps.values()), tuple(steps))
    parts = _pieces(body, path) if kind in _PIECES else _leaves(body, path, ())
    if not parts:
        raise InputError(f"{path}: it names no file, so there is no mesh. Write it again.")
    return IndexFile(str(path), "VTM" if kind == _BLOCKS else "PVTU", (tuple(parts),))


def _target(element: ElementTree.Element, attribute: str, path: Path) -> Path:
    name = element.get(attribute, "")
    if not name:
        raise InputError(f"{path}: a {element.tag} element names no file. Write it again.")
    place = path.parent / name
    return place if place.exists() else path.parent / name.replace("\\", "/")


def _pieces(body: ElementTree.Element, path: Path) -> list[_Part]:
    return [_Part(_target(piece, "Source", path), ()) for piece in body.findall("Piece")]


def _leaves(element: ElementTree.Element, path: Path, above: tuple[str, ...]) -> list[_Part]:
    """Return the files of nested blocks; each block's path of names is a group."""
    if len(above) > 100:
        raise InputError(f"{path}: its blocks are nested more than 100 deep. Write it again.")
    parts = []
    for position, child in enumerate(element):
        if child.tag not in ("Block", "DataSet", "Piece"):
            continue
        name = child.get("name") or f"block {child.get('index', position)}"
        names = (*above, f"{above[-1]}/{name}" if above else name)
        if child.tag == "DataSet":
            if child.get("file"):  # an empty block names no file
                parts.append(_Part(_target(child, "file", path), names))
        else:
            parts.extend(_leaves(child, path, names))
    return parts


def _steps(body: ElementTree.Element, path: Path) -> dict[float, tuple[_Part, ...]]:
    """Return the files of each step, steps in file order; several parts of a step become groups."""
    steps: dict[float, list[_Part]] = {}
    for position, entry in enumerate(body.findall("DataSet")):
        text = entry.get("timestep", str(position))
        try:
            value = float(text)
        except ValueError:
            raise InputError(f"{path}: timestep {text!r} is not a number. Correct it in the file.") from None
        name = entry.get("name") or f"part {entry.get('part', '0')}"
        steps.setdefault(value, []).append(_Part(_target(entry, "file", path), (name,)))
    if not steps:
        raise InputError(f"{path}: the series has no step. The program that writes it did not finish.")
    return {
        value: tuple(parts) if len(parts) > 1 else (_Part(parts[0].file, ()),)
        for value, parts in steps.items()
    }


def _assemble(parts: Sequence[_Part], path: str) -> tuple[Any, dict[str, NDArray[np.int64]], tuple[str, ...]]:
    """Return the data sets of all parts as one, with the cells of each group."""
    held: list[tuple[Any, _Part, dict[str, NDArray[np.int64]]]] = []
    notes: list[str] = []
    for part in parts:
        dataset, groups = _read_part(part.file, path)
        if dataset.GetNumberOfCells() == 0 and len(parts) > 1:
            notes.append(f"{part.file.name} holds no cells")
            continue
        held.append((dataset, part, groups))
    if not held:
        raise InputError(
            f"{path}: none of its {len(parts)} files holds a cell. Check that they are complete."
        )
    _demand_same_arrays(held, path)
    cells: dict[str, list[NDArray[np.int64]]] = {}
    start = 0
    for dataset, part, inner in held:
        n = dataset.GetNumberOfCells()
        for name in part.groups:
            cells.setdefault(name, []).append(np.arange(start, start + n))
        for name, members in inner.items():
            cells.setdefault(name, []).append(members + start)
        start += n
    return _merge([h[0] for h in held]), {k: np.concatenate(v) for k, v in cells.items()}, tuple(notes)


def _read_part(file: Path, index: str) -> tuple[Any, dict[str, NDArray[np.int64]]]:
    """Read one file that an index names, checked; an index within an index only where that cannot go on."""
    try:
        with file.open("rb") as stream:
            head = stream.read(4096)
    except OSError as error:
        raise InputError(
            f"{index} names the file {file.name}, which cannot be opened ({error.strerror}). A part of the "
            "result would be missing: put the file where the index looks for it, or write the result again."
        ) from error
    kind = vtk_xml_type(head)
    if kind in _SINGLE:
        dataset = read_dataset(str(file), kind)
        if dataset.GetNumberOfCells():
            result_from_vtk(dataset, str(file))  # refuses what must not reach a filter
        return dataset, {}
    inner_index_allowed = (kind in _PIECES and not index.endswith((".pvtu", ".pvtp"))) or (
        kind == _BLOCKS and index.endswith(".pvd")
    )
    if not inner_index_allowed:
        raise InputError(
            f"{index} names {file.name}, which is not a mesh file that can stand there. Expected "
            f"{', '.join(KINDS)}: write the result again."
        )
    inner = open_file(file)
    dataset, groups, _ = _assemble(inner.parts[0], str(file))
    return dataset, groups


def _demand_same_arrays(held: Sequence[tuple[Any, _Part, Any]], path: str) -> None:
    first, first_part, _ = held[0]
    for dataset, part, _ in held[1:]:
        for kind in ("Point", "Cell"):
            ours, theirs = (_arrays(d, kind) for d in (first, dataset))
            if ours != theirs:
                odd = ", ".join(sorted({repr(a[0]) for a in ours ^ theirs}))
                raise InputError(
                    f"{path}: {kind.lower()} array {odd} is not the same in {first_part.file.name} and "
                    f"{part.file.name} (missing, or another type or number of components), so the parts "
                    "cannot be put together. Read the parts one by one, or write them with the same arrays."
                )


def _arrays(dataset: Any, kind: str) -> set[tuple[str, int, int]]:
    data = dataset.GetPointData() if kind == "Point" else dataset.GetCellData()
    arrays = [data.GetAbstractArray(i) for i in range(data.GetNumberOfArrays())]
    return {(name_of(a, i), a.GetDataType(), a.GetNumberOfComponents()) for i, a in enumerate(arrays)}


def _merge(datasets: Sequence[Any]) -> Any:
    """Return one data set: the only one as it is, several appended point by point and cell by cell."""
    if len(datasets) == 1:
        return datasets[0]
    append = vtk_class("vtkFiltersCore", "vtkAppendFilter")
    append.MergePointsOff()
    append.SetOutputPointsPrecision(_precision(datasets))
    for dataset in datasets:
        append.AddInputData(dataset)
    append.Update()
    merged = append.GetOutput()
    _restore(merged, datasets[0])
    return merged


def _precision(datasets: Sequence[Any]) -> int:
    """Return VTK's setting for points as precise as the most precise part's."""
    double = any(not hasattr(d, "GetPoints") or d.GetPoints().GetDataType() == 11 for d in datasets)
    return 1 if double else 0


def _restore(merged: Any, first: Any) -> None:
    """Give the merged data set the order, roles and component names of the first part, and its field data."""
    for data, source in (
        (merged.GetPointData(), first.GetPointData()),
        (merged.GetCellData(), first.GetCellData()),
    ):
        models = [source.GetAbstractArray(i) for i in range(source.GetNumberOfArrays())]
        arrays = [data.GetAbstractArray(model.GetName()) for model in models]
        for array, model in zip(arrays, models, strict=True):
            array.CopyComponentNames(model)
        set_arrays(data, arrays, roles_of(source))
    merged.GetFieldData().ShallowCopy(first.GetFieldData())


class PvdWriter:
    """Writes a series as one VTU file a step in a folder beside the PVD file that lists them."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self.folder = path.parent / path.stem
        self.entries: list[tuple[float, str]] = []
        self._lost: dict[str, None] = {}

    @property
    def lost(self) -> tuple[str, ...]:
        """What VTU could not hold, so far."""
        return tuple(self._lost)

    def add(self, result: Result, value: float) -> None:
        """Write one step and bring the list of steps up to date.

        Raises
        ------
        UsageError
            A step with this value was written before.
        """
        check_step_value(value, [known for known, _ in self.entries])
        self.folder.mkdir(exist_ok=True)
        name = f"{self.path.stem}_{len(self.entries):04d}.vtu"
        self._lost.update(dict.fromkeys(write_file(result, self.folder / name, ".vtu")))
        self.entries.append((float(value), f"{self.folder.name}/{name}"))
        lines = [
            f'    <DataSet timestep="{value!r}" part="0" file={quoteattr(file)}/>'
            for value, file in self.entries
        ]
        text = "\n".join(
            ['<?xml version="1.0"?>', '<VTKFile type="Collection" version="0.1">', "  <Collection>", *lines]
        )
        self.path.write_text(text + "\n  </Collection>\n</VTKFile>\n", encoding="utf-8")

    def close(self) -> None:
        """Finish the file: nothing is left to do, it is complete after each step."""


def open_series(path: Path) -> PvdWriter:
    """Open a writer of a PVD series."""
    return PvdWriter(path)
