"""A window that is never shown: software rendering without a display, and a proof that it cannot crash."""

from __future__ import annotations

import functools
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.errors import MissingExtraError

_PROBE_SECONDS = 60
FINE = 2  # pixels drawn for each pixel of the picture, on a side

# Rendering without a graphics library ends the interpreter (VTK 9.7), so a child process tries it first.
_PROBE = """
from vtkmodules.vtkRenderingCore import vtkRenderer, vtkRenderWindow
import vtkmodules.vtkRenderingOpenGL2 as gl
window = getattr(gl, {name!r}, vtkRenderWindow)()
window.SetOffScreenRendering(1)
window.SetShowWindow(False)
window.SetSize(16, 16)
window.AddRenderer(vtkRenderer())
window.Render()
print("rendered")
"""


def _candidates() -> tuple[str, ...]:
    """Return VTK's window classes to try; those of Linux need no display."""
    if sys.platform.startswith("linux"):
        return ("vtkEGLRenderWindow", "vtkOSOpenGLRenderWindow")
    return ("vtkRenderWindow",)


@functools.cache
def usable_window() -> str:
    """Return, found once a process, the name of a window class that renders here.

    Raises
    ------
    MissingExtraError
        No graphics library; the message names the package.
    """
    said = ""
    for name in _candidates():
        failure = _try(name)
        if failure is None:
            return name
        said = said or failure
    raise MissingExtraError(
        "pictures cannot be drawn here: no graphics library that renders without a display. Install one "
        f"(Debian, Ubuntu: apt install libegl1 libgl1-mesa-dri). A trial drawing ended with: {said}"
    )


def _try(name: str) -> str | None:
    """Return None when a child process can render with this window class, else its last words."""
    if not sys.executable:
        return None
    try:
        done = subprocess.run(
            [sys.executable, "-c", _PROBE.format(name=name)],
            capture_output=True,
            text=True,
            timeout=_PROBE_SECONDS,
            env={**os.environ, "PYTHONPATH": os.pathsep.join(p for p in sys.path if p)},
            check=False,
        )
    except subprocess.TimeoutExpired:
        return f"no answer within {_PROBE_SECONDS} s"
    except OSError as error:
        return str(error)
    if done.returncode == 0 and "rendered" in done.stdout:
        return None
    lines = done.stderr.strip().splitlines()
    return lines[-1] if lines else f"a crash without a message (status {done.returncode})"


def make_window(
    size: tuple[int, int], ground: tuple[float, float, float] = (1.0, 1.0, 1.0)
) -> tuple[Any, Any, Any, Any]:
    """Return an invisible render window, its renderers: behind, in front of it, and flat over both.

    The window has `FINE` times as many pixels on a side as the picture.
    """
    name = usable_window()
    import vtkmodules.vtkRenderingFreeType  # noqa: F401  (text)
    import vtkmodules.vtkRenderingOpenGL2 as gl
    from vtkmodules.vtkRenderingCore import vtkRenderer, vtkRenderWindow

    window: Any = getattr(gl, name, vtkRenderWindow)()
    window.SetOffScreenRendering(1)
    window.SetShowWindow(False)
    window.SetMultiSamples(0)
    window.SetSize(size[0] * FINE, size[1] * FINE)
    window.SetNumberOfLayers(4)
    under, back, front, flat = (vtkRenderer() for _ in range(4))
    under.SetBackground(*ground)
    for layer, renderer in enumerate((under, back, front, flat)):
        renderer.SetLayer(layer)
        window.AddRenderer(renderer)
    return window, back, front, flat


def capture(window: Any, single: bool = False, over: Any = None) -> NDArray[np.uint8]:
    """Return the picture, `(height, width, 3)` bytes, top row first, without steps in its lines.

    Parameters
    ----------
    window
        See `make_window`.
    single
        Of all pixels that were drawn for one of the picture only one is kept: no colours are mixed.
    over
        A renderer that alone is drawn, over what is there from the time before.
    """
    from vtkmodules.util.numpy_support import vtk_to_numpy
    from vtkmodules.vtkRenderingCore import vtkWindowToImageFilter

    if over is not None:
        renderers = window.GetRenderers()
        for k in range(renderers.GetNumberOfItems()):
            renderer = renderers.GetItemAsObject(k)
            renderer.SetDraw(renderer is over)
        window.EraseOff()
    window.Render()
    grab = vtkWindowToImageFilter()
    grab.SetInput(window)
    grab.ReadFrontBufferOff()
    grab.ShouldRerenderOff()
    grab.SetInputBufferTypeToRGB()
    grab.Update()
    image = grab.GetOutput()
    width, height, _ = image.GetDimensions()
    fine = vtk_to_numpy(image.GetPointData().GetScalars()).reshape(height, width, 3)[::-1]
    if single:
        return np.ascontiguousarray(fine[FINE // 2 :: FINE, FINE // 2 :: FINE])
    total = sum(fine[i::FINE, j::FINE].astype(np.uint16) for i in range(FINE) for j in range(FINE))
    return np.asarray((total + FINE * FINE // 2) // (FINE * FINE), dtype=np.uint8)


def write_png(picture: NDArray[np.uint8], path: Path, dpi: float = 200.0) -> None:
    """Write a picture `(height, width, 3)` as PNG with `dpi` pixels an inch.

    Raises
    ------
    OSError
        The file cannot be written.
    """
    from PIL import Image

    Image.fromarray(picture).save(path, format="PNG", dpi=(dpi, dpi))
