"""VTU, VTP, VTS, VTR and VTI: one piece of VTK's XML family a file."""

from __future__ import annotations

import importlib
from dataclasses import dataclass
from pathlib import Path
from typing import Any
from xml.sax.saxutils import escape

from unturn.errors import InputError, UsageError
from unturn.io.vtk_arrays import quiet_vtk, roles_of, set_arrays, text_of
from unturn.io.vtk_result import dataset_from_result, result_from_vtk, vtk_from_result
from unturn.io.vtk_xml_check import check_xml
from unturn.result import Result

# Suffix -> name for people and middle part of VTK's class names.
KINDS = {
    ".vtu": ("VTU", "UnstructuredGrid"),
    ".vtp": ("VTP", "PolyData"),
    ".vts": ("VTS", "StructuredGrid"),
    ".vtr": ("VTR", "RectilinearGrid"),
    ".vti": ("VTI", "ImageData"),
}


def vtk_class(module: str, name: str) -> Any:
    """Return a class of one of VTK's modules, loaded only now."""
    return getattr(importlib.import_module(f"vtkmodules.{module}"), name)()


@dataclass(frozen=True)
class XmlFile:
    """An opened file of VTK's XML family."""

    path: str
    format_name: str
    kind: str
    steps: tuple[float, ...] | None = None

    def read(self, step: int = 0) -> Result:
        """Read the file; there is only step 0."""
        return result_from_vtk(read_dataset(self.path, self.kind), self.path, format_name=self.format_name)


def open_file(path: Path, suffix: str) -> XmlFile:
    """Open a file of the kind that `suffix` stands for."""
    name, kind = KINDS[suffix]
    return XmlFile(str(path), name, kind)


def read_dataset(path: str, kind: str) -> Any:
    """Return the VTK data set in a file of VTK's XML family, read by VTK after the file was proved sound."""
    check_xml(path, kind)
    reader = vtk_class("vtkIOXML", f"vtkXML{kind}Reader")
    return run_reader(reader, path)


def run_reader(reader: Any, path: str) -> Any:
    """Run a VTK reader on a file and return its output; raise `InputError` in VTK's words when it fails."""
    errors: list[str] = []
    with quiet_vtk() as said:
        reader.SetFileName(path)
        reader.Update()
    # VTK's own ranges of an array of NaN are written as nan, which it cannot read; the values are untouched by that
    errors.extend(s for s in said if not s.startswith("Error reading InformationKey"))
    if reader.GetErrorCode() or errors:
        reason = "; ".join(dict.fromkeys(errors)) or f"error {reader.GetErrorCode()}"
        raise InputError(
            f"{path} cannot be read: {reason}. The file is damaged or incomplete: write it again, "
            "or ask the program that made it for another format."
        )
    return reader.GetOutputDataObject(0)


def write_file(result: Result, path: Path, suffix: str) -> tuple[str, ...]:
    """Write a result and return what the format could not hold."""
    dataset = vtk_from_result(result) if suffix == ".vtu" else dataset_from_result(result)
    name, kind = KINDS[suffix]
    if not dataset.IsA(f"vtk{kind}"):
        raise UsageError(
            f"{path.name}: a result that was not read from {name} cannot be written as {name}; "
            "give the output the suffix .vtu or .xdmf."
        )
    write_dataset(dataset, str(path), kind)
    return lost_in_vtk(result)


def lost_in_vtk(result: Result) -> tuple[str, ...]:
    """Return a sentence for everything in a result that has no place in VTK's formats."""
    lost = []
    if result.groups:
        names = ", ".join(repr(n) for n in result.groups)
        lost.append(
            f"The cell groups {names} were not written: VTK's formats have none; write XDMF to keep them."
        )
    for kind in ("point", "cell", "field"):
        for name, values in getattr(result, f"{kind}_data").items():
            if values.dtype.kind == "b":
                lost.append(f"The {kind} array {name!r} of true and false is stored as 1 and 0 in one byte.")
    return tuple(lost)


def write_dataset(dataset: Any, path: str, kind: str) -> None:
    """Write a VTK data set uncompressed with 64-bit sizes (measured: fastest to write and to read back)."""
    for attributes in (dataset.GetPointData(), dataset.GetCellData(), dataset.GetFieldData()):
        _escape_names(attributes)
    writer = vtk_class("vtkIOXML", f"vtkXML{kind}Writer")
    writer.SetDataModeToAppended()
    writer.EncodeAppendedDataOff()
    writer.SetCompressorTypeToNone()
    writer.SetHeaderTypeToUInt64()
    run_writer(writer, dataset, path)


def _escape_names(attributes: Any) -> None:
    """Replace arrays whose names XML cannot hold: VTK writes names as they are and reads them unescaped."""
    arrays = [attributes.GetAbstractArray(i) for i in range(attributes.GetNumberOfArrays())]
    twins = [_with_escaped_names(array) for array in arrays]
    if any(twin is not array for twin, array in zip(twins, arrays, strict=True)):
        set_arrays(attributes, twins, roles_of(attributes))


def _with_escaped_names(array: Any) -> Any:
    """Return the array, or a copy that shares its values when one of its names must be escaped."""
    labels = [text_of(array.GetComponentName(k)) for k in range(array.GetNumberOfComponents())]
    special = {k: _escaped(text) for k, text in enumerate(labels) if text and _escaped(text) != text}
    name = text_of(array.GetName())
    if _escaped(name) == name and not special:
        return array
    twin = array.NewInstance()
    twin.ShallowCopy(array)
    twin.SetName(_escaped(name))
    for k, text in special.items():
        twin.SetComponentName(k, text)
    return twin


def _escaped(text: str) -> str:
    unprintable = [c for c in text if ord(c) < 32 and c not in "\t\n\r"]
    if unprintable:
        raise UsageError(
            f"the name {text!r} holds a control character, which no XML file can; rename the array."
        )
    return escape(text, {'"': "&quot;", "\t": "&#9;", "\n": "&#10;", "\r": "&#13;"})


def run_writer(writer: Any, dataset: Any, path: str) -> None:
    """Run a VTK writer; raise `OSError` with VTK's own words when it fails."""
    with quiet_vtk() as said:
        writer.SetFileName(path)
        writer.SetInputData(dataset)
        done = writer.Write()
    if not done or said or (hasattr(writer, "GetErrorCode") and writer.GetErrorCode()):
        raise OSError("; ".join(dict.fromkeys(said)) or f"error {writer.GetErrorCode()}")
