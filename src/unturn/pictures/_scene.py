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


def look(renderer: Any, camera: Camera, origin: Floats, reach: float) -> None:
    """Aim the renderer; everything is drawn relative to `origin` and lies within `reach` of it."""
    view = renderer.GetActiveCamera()
    view.ParallelProjectionOn()
    focus = np.array(camera.focus) - origin
    toward = np.array(camera.direction)
    middle = focus - (focus @ toward) * toward  # as deep as the model, also for a camera of another step
    view.SetFocalPoint(*middle)
    view.SetPosition(*(middle + toward * 2 * reach))
    view.SetViewUp(*camera.up)
    view.SetParallelScale(camera.pixel * camera.size[1] / 2)
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
    table.UseAboveRangeColorOn()
    table.SetAboveRangeColor(*ABOVE, 1.0)
    table.UseBelowRangeColorOn()
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


def add_lines(renderer: Any, lines: Any, width: float, opacity: float = 1.0) -> None:
    """Draw the edges of cells, or the outline of the body."""
    _actor(renderer, lines, INK, width).GetProperty().SetOpacity(opacity)


def add_ghost(renderer: Any, body: Any, outline: Any, width: float) -> None:
    """Draw the undeformed shape, pale; the renderer lies behind that of the model."""
    colour = GHOST_FACE if body.GetNumberOfPolys() else GHOST_LINE
    _behind_lines(_actor(renderer, body, colour, width).GetMapper())
    _actor(renderer, outline, GHOST_LINE, width)


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
