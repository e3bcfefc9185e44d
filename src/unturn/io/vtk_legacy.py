"""Legacy VTK files (.vtk), ASCII and binary."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from unturn.io.vtk_legacy_check import check_legacy
from unturn.io.vtk_result import dataset_from_result, result_from_vtk
from unturn.io.vtk_xml import lost_in_vtk, run_reader, run_writer, vtk_class
from unturn.result import Result

FORMAT_NAME = "VTK legacy"

_READERS = {
    "UNSTRUCTURED_GRID": "UnstructuredGrid",
    "STRUCTURED_GRID": "StructuredGrid",
    "RECTILINEAR_GRID": "RectilinearGrid",
    "STRUCTURED_POINTS": "StructuredPoints",
    "POLYDATA": "PolyData",
}


@dataclass(frozen=True)
class LegacyFile:
    """An opened legacy VTK file."""

    path: str
    format_name: str = FORMAT_NAME
    steps: tuple[float, ...] | None = None

    def read(self, step: int = 0) -> Result:
        """Read the file; there is only step 0."""
        kind = _READERS[check_legacy(self.path)]
        reader = vtk_class("vtkIOLegacy", f"vtk{kind}Reader")
        reader.ReadAllScalarsOn()
        reader.ReadAllVectorsOn()
        reader.ReadAllNormalsOn()
        reader.ReadAllTensorsOn()
        reader.ReadAllColorScalarsOn()
        reader.ReadAllTCoordsOn()
        reader.ReadAllFieldsOn()
        return result_from_vtk(run_reader(reader, self.path), self.path, format_name=FORMAT_NAME)


def open_file(path: Path) -> LegacyFile:
    """Open a legacy VTK file."""
    return LegacyFile(str(path))


def write_file(result: Result, path: Path) -> tuple[str, ...]:
    """Write a result in binary and return what the format could not hold."""
    dataset = dataset_from_result(result)
    kind = dataset.GetClassName().removeprefix("vtk").replace("ImageData", "StructuredPoints")
    writer = vtk_class("vtkIOLegacy", f"vtk{kind}Writer")
    writer.SetFileTypeToBinary()
    run_writer(writer, dataset, str(path))
    return lost_in_vtk(result)
