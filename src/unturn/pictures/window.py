"""A window with the scene of a picture, opened only when it is asked for."""

from __future__ import annotations

import os
import sys
from typing import Any

import numpy as np

from unturn.errors import UsageError
from unturn.pictures._picture import Picture
from unturn.pictures._range import Ends
from unturn.pictures._surface import POSITION, VALUE
from unturn.pictures.drawing import Drawn, ranged

_SIZE = (1200, 800)


def show_scene(drawn: Drawn) -> None:
    """Open a window in which the model of a picture can be turned; return when it is closed.

    Raises
    ------
    UsageError
        There is no display.
    """
    check_display()
    import pyvista

    plotter: Any = pyvista.Plotter(title=drawn.drawing.path, window_size=list(_SIZE))
    fill(plotter, drawn)
    plotter.show()


def check_display() -> None:
    """Refuse to open a window where there is no display.

    Raises
    ------
    UsageError
        Neither X nor Wayland is there.
    """
    if sys.platform.startswith("linux") and not (
        os.environ.get("DISPLAY") or os.environ.get("WAYLAND_DISPLAY")
    ):
        raise UsageError(
            "--show opens a window, and there is no display here. Leave it out: the picture needs none."
        )


def fill(plotter: Any, drawn: Drawn) -> None:
    """Put the model of a picture into a plotter of PyVista: faces in their colours, edges, colour bar, axes."""
    import pyvista
    from vtkmodules.util.numpy_support import vtk_to_numpy

    subject, drawing = drawn.subject, drawn.drawing
    found = ranged(subject, drawn.request, Ends(*drawing.colour_range, ""))
    picture = Picture(subject, drawn.request, found, drawing.camera)
    surface = pyvista.wrap(picture.skin.surface)
    if subject.association == "cell":
        own = vtk_to_numpy(surface.GetCellData().GetArray(POSITION))
        surface.cell_data[VALUE] = subject.values.numbers[own] * subject.values.scale
    else:
        surface.point_data[VALUE] = np.asarray(surface.point_data[VALUE]) * subject.values.scale
    name = subject.values.name.splitlines()[0]
    surface.rename_array(VALUE, name)
    plotter.set_background("white")
    plotter.add_mesh(
        surface,
        scalars=name,
        preference=subject.association,
        lighting=False,
        clim=[x * subject.values.scale for x in drawing.colour_range],
        cmap=[f"#{r:02x}{g:02x}{b:02x}" for r, g, b in found.colours.tolist()],
        scalar_bar_args={
            "title": f"{name} {subject.values.short_unit}".rstrip(), "color": "black", "vertical": True, "fmt": "%.4g",
            "position_x": 0.82, "position_y": 0.15, "height": 0.6, "width": 0.06,
        },
    )  # fmt: skip
    if picture.skin.edges is not None:
        plotter.add_mesh(pyvista.wrap(picture.skin.edges), color="black", lighting=False, line_width=1)
    plotter.add_axes(color="black", x_color="black", y_color="black", z_color="black")
    camera = picture.camera
    plotter.enable_parallel_projection()
    middle = np.array(camera.focus) - subject.stage.origin
    plotter.camera_position = [middle + np.array(camera.direction) * 2 * picture.reach, middle, camera.up]
    plotter.camera.parallel_scale = camera.pixel * camera.size[1] / 2
