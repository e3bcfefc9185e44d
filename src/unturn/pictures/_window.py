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
from vtkmodules.vtkRenderingCore import vtkRenderer
import vtkmodules.vtkRenderingOpenGL2 as gl
window = getattr(gl, {name!r})()
window.SetOffScreenRendering(1)
window.SetShowWindow(False)
window.SetSize(16, 16)
window.AddRenderer(vtkRenderer())
window.Render()
print("rendered")
"""


def _window_class() -> str:
    """Return the name of VTK's window class that needs no display."""
    return "vtkEGLRenderWindow" if sys.platform.startswith("linux") else "vtkRenderWindow"


@functools.cache
def check_graphics() -> None:
    """Make sure, once a process, that rendering works here.

    Raises
    ------
    MissingExtraError
        No graphics library; the message names the package.
    """
    if not sys.executable:
        return
    name = _window_class()
    code = _PROBE.format(name=name)
    if name == "vtkRenderWindow":
        code = code.replace("import vtkmodules.vtkRenderingOpenGL2 as gl", "import vtkmodules.all as gl")
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join(p for p in sys.path if p)}
    try:
        done = subprocess.run(
            [sys.executable, "-c", code],
            capture_output=True,
            text=True,
            timeout=_PROBE_SECONDS,
            env=environment,
            check=False,
        )
        said = done.stderr.strip()
        if done.returncode == 0 and "rendered" in done.stdout:
            return
    except subprocess.TimeoutExpired:
        said = f"no answer within {_PROBE_SECONDS} s"
    except OSError as error:
        said = str(error)
    raise MissingExtraError(
        "pictures cannot be drawn here: no graphics library that renders without a display. Install it "
        "(Debian, Ubuntu: apt install libegl1 libgl1-mesa-dri). "
        f"A trial drawing ended with: {said.splitlines()[-1] if said else 'a crash and no message'}"
    )


def make_window(size: tuple[int, int]) -> tuple[Any, Any, Any]:
    """Return an invisible render window, the renderer behind (white ground) and the one in front.

    The window has `FINE` times as many pixels on a side as the picture.
    """
    check_graphics()
    import vtkmodules.vtkRenderingFreeType  # noqa: F401  (text)
    import vtkmodules.vtkRenderingOpenGL2 as gl
    from vtkmodules.vtkRenderingCore import vtkRenderer, vtkRenderWindow

    name = _window_class()
    window = getattr(gl, name)() if name != "vtkRenderWindow" else vtkRenderWindow()
    window.SetOffScreenRendering(1)
    window.SetShowWindow(False)
    window.SetMultiSamples(0)
    window.SetSize(size[0] * FINE, size[1] * FINE)
    window.SetNumberOfLayers(2)
    back, front = vtkRenderer(), vtkRenderer()
    back.SetBackground(1.0, 1.0, 1.0)
    front.SetLayer(1)
    for renderer in (back, front):
        window.AddRenderer(renderer)
    return window, back, front


def capture(window: Any) -> NDArray[np.uint8]:
    """Return the picture, `(height, width, 3)` bytes, top row first, without steps in its lines."""
    from vtkmodules.util.numpy_support import vtk_to_numpy
    from vtkmodules.vtkRenderingCore import vtkWindowToImageFilter

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
    total = sum(fine[i::FINE, j::FINE].astype(np.uint16) for i in range(FINE) for j in range(FINE))
    return np.asarray((total + FINE * FINE // 2) // (FINE * FINE), dtype=np.uint8)


def write_png(picture: NDArray[np.uint8], path: Path) -> None:
    """Write a picture `(height, width, 3)` as PNG.

    Raises
    ------
    OSError
        The file cannot be written.
    """
    from vtkmodules.util.numpy_support import numpy_to_vtk, vtk_to_numpy
    from vtkmodules.vtkCommonDataModel import vtkImageData
    from vtkmodules.vtkIOImage import vtkPNGWriter

    height, width, _ = picture.shape
    image = vtkImageData()
    image.SetDimensions(width, height, 1)
    image.GetPointData().SetScalars(numpy_to_vtk(picture[::-1].reshape(-1, 3), deep=True))
    writer = vtkPNGWriter()
    writer.WriteToMemoryOn()
    writer.SetInputData(image)
    writer.Write()
    path.write_bytes(vtk_to_numpy(writer.GetResult()).tobytes())
