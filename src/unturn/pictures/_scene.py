"""The model in the picture: coloured faces without shading, edges, the undeformed shape behind."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.pictures._camera import Camera
from unturn.pictures._colours import ABOVE, BELOW, INK, NO_VALUE, Range
from unturn.pictures._surface import POSITION, VALUE
from unturn.pictures._window import FINE

Floats = NDArray[np.float64]
GHOST_FACE = (0.945, 0.945, 0.95)
GHOST_LINE = (0.60, 0.61, 0.65)
FAINT_FACE = (0.905, 0.915, 0.925)
FAINT_LINE = (0.42, 0.44, 0.49)
Colour = tuple[float, float, float]


Box = tuple[int, int, int, int]  # left, right, bottom, top, in pixels


def look(renderer: Any, camera: Camera, origin: Floats, reach: float, box: Box) -> None:
    """Aim the renderer, which draws into `box` alone; all is relative to `origin` and within `reach` of it."""
    width, height = camera.size
    renderer.SetViewport(box[0] / width, box[2] / height, box[1] / width, box[3] / height)
    view = renderer.GetActiveCamera()
    view.ParallelProjectionOn()
    aside = (box[0] + box[1] - width) / 2 * camera.pixel * camera.right
    above = (box[2] + box[3] - height) / 2 * camera.pixel * np.array(camera.up)
    focus = np.array(camera.focus) - origin + aside + above
    toward = np.array(camera.direction)
    middle = focus - (focus @ toward) * toward  # as deep as the model, also for a camera of another step
    view.SetFocalPoint(*middle)
    view.SetPosition(*(middle + toward * 2 * reach))
    view.SetViewUp(*camera.up)
    view.SetParallelScale(camera.pixel * (box[3] - box[2]) / 2)
    view.SetClippingRange(reach * 0.5, reach * 3.5)


def lookup(found: Range) -> Any:
    """Return VTK's table of the colours of values."""
    from vtkmodules.vtkCommonCore import vtkLookupTable

    table = vtkLookupTable()
    colours = found.colours / 255.0
    table.SetNumberOfTableValues(len(colours))
    for k, (red, green, blue) in enumerate(colours.tolist()):
        table.SetTableValue(k, red, green, blue, 1.0)
    table.SetTableRange(found.low, found.high)
    # where no value lies outside, what the functions of a face overshoot between its nodes is not outside either
    table.SetUseAboveRangeColor(bool(found.above))
    table.SetAboveRangeColor(*ABOVE, 1.0)
    table.SetUseBelowRangeColor(bool(found.below))
    table.SetBelowRangeColor(*BELOW, 1.0)
    table.SetNanColor(*NO_VALUE, 1.0)
    return table


def add_surface(renderer: Any, surface: Any, cell_values: Floats | None, found: Range) -> None:
    """Draw the faces in the colours of `cell_values` `(n_cells,)`, or of the nodal values they carry."""
    from vtkmodules.util.numpy_support import numpy_to_vtk, vtk_to_numpy

    mapper = _actor(renderer, surface, INK, 4.0).GetMapper()
    if cell_values is not None:
        own = vtk_to_numpy(surface.GetCellData().GetArray(POSITION))
        held = numpy_to_vtk(np.ascontiguousarray(cell_values[own]), deep=True)
        held.SetName(VALUE)
        surface.GetCellData().AddArray(held)
        mapper.SetScalarModeToUseCellFieldData()
    else:
        mapper.SetScalarModeToUsePointFieldData()
        mapper.InterpolateScalarsBeforeMappingOn()
    mapper.SelectColorArray(VALUE)
    mapper.SetLookupTable(lookup(found))
    mapper.UseLookupTableScalarRangeOn()
    mapper.ScalarVisibilityOn()
    _behind_lines(mapper)


def add_coded(renderer: Any, surface: Any, colours: NDArray[np.uint8]) -> None:
    """Draw the faces in colours of their own `(n_faces, 3)`."""
    from vtkmodules.util.numpy_support import numpy_to_vtk
    from vtkmodules.vtkCommonDataModel import vtkPolyData

    coded = vtkPolyData()
    coded.ShallowCopy(surface)
    coded.GetCellData().SetScalars(numpy_to_vtk(np.ascontiguousarray(colours), deep=True))
    mapper = _actor(renderer, coded, INK, 4.0).GetMapper()
    mapper.SetScalarModeToUseCellData()
    mapper.ScalarVisibilityOn()


def add_lines(renderer: Any, lines: Any, width: float, opacity: float = 1.0) -> None:
    """Draw the edges of cells, or the outline of the body."""
    _actor(renderer, lines, INK, width).GetProperty().SetOpacity(opacity)


def add_pale(
    renderer: Any, body: Any, outline: Any, width: float, face: Colour = GHOST_FACE, line: Colour = GHOST_LINE
) -> None:
    """Draw a shape without values; the renderer lies behind that of the model."""
    _behind_lines(_actor(renderer, body, face if body.GetNumberOfPolys() else line, width).GetMapper())
    _actor(renderer, outline, line, width)


def _behind_lines(mapper: Any) -> None:
    """Let lines that lie on faces win."""
    mapper.SetResolveCoincidentTopologyToPolygonOffset()
    mapper.SetRelativeCoincidentTopologyPolygonOffsetParameters(1.0, 1.0)


def _actor(renderer: Any, data: Any, colour: tuple[float, float, float], width: float) -> Any:
    from vtkmodules.vtkRenderingCore import vtkActor, vtkPolyDataMapper

    mapper = vtkPolyDataMapper()
    mapper.SetInputData(data)
    mapper.ScalarVisibilityOff()
    actor = vtkActor()
    actor.SetMapper(mapper)
    actor.GetProperty().LightingOff()
    actor.GetProperty().SetColor(*colour)
    actor.GetProperty().SetLineWidth(width * FINE)
    renderer.AddActor(actor)
    return actor
