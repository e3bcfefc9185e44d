"""The model in the picture: coloured faces without shading, edges, the undeformed outline."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.pictures._camera import Camera
from unturn.pictures._colours import ABOVE, BELOW, INK, NO_VALUE, Range, colour_table
from unturn.pictures._surface import POSITION, VALUE

Floats = NDArray[np.float64]
_OUTLINE = (0.50, 0.52, 0.56)


def look(renderer: Any, camera: Camera, origin: Floats, reach: float) -> None:
    """Aim the renderer; everything is drawn relative to `origin` and lies within `reach` of the focus."""
    view = renderer.GetActiveCamera()
    view.ParallelProjectionOn()
    focus = np.array(camera.focus) - origin
    eye = focus + np.array(camera.direction) * 2 * reach
    view.SetFocalPoint(*focus)
    view.SetPosition(*eye)
    view.SetViewUp(*camera.up)
    view.SetParallelScale(camera.pixel * camera.size[1] / 2)
    view.SetClippingRange(reach * 0.01, reach * 4)


def lookup(found: Range) -> Any:
    """Return VTK's table of the colours of values."""
    from vtkmodules.vtkCommonCore import vtkLookupTable

    table = vtkLookupTable()
    colours = colour_table() / 255.0
    table.SetNumberOfTableValues(len(colours))
    for k, colour in enumerate(colours):
        table.SetTableValue(k, *colour, 1.0)
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

    actor = _actor(renderer, surface)
    mapper = actor.GetMapper()
    if cell_values is not None:
        own = vtk_to_numpy(surface.GetCellData().GetArray(POSITION))
        held = numpy_to_vtk(np.ascontiguousarray(cell_values[own], dtype=np.float64), deep=True)
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
    mapper.SetResolveCoincidentTopologyToPolygonOffset()
    mapper.SetRelativeCoincidentTopologyPolygonOffsetParameters(1.0, 1.0)
    actor.GetProperty().SetLineWidth(4.0)


def add_edges(renderer: Any, edges: Any, width: float, strong: bool) -> None:
    """Draw the edges of cells, or the outline of the body."""
    actor = _actor(renderer, edges)
    actor.GetProperty().SetColor(*INK)
    actor.GetProperty().SetOpacity(1.0 if strong else 0.35)
    actor.GetProperty().SetLineWidth(width)


def add_ghost(renderer: Any, outline: Any, width: float) -> None:
    """Draw the undeformed outline."""
    actor = _actor(renderer, outline)
    actor.GetProperty().SetColor(*_OUTLINE)
    actor.GetProperty().SetOpacity(0.6)
    actor.GetProperty().SetLineWidth(width)


def _actor(renderer: Any, data: Any) -> Any:
    from vtkmodules.vtkRenderingCore import vtkActor, vtkPolyDataMapper

    mapper = vtkPolyDataMapper()
    mapper.SetInputData(data)
    mapper.ScalarVisibilityOff()
    actor = vtkActor()
    actor.SetMapper(mapper)
    actor.GetProperty().LightingOff()
    renderer.AddActor(actor)
    return actor
