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

from unturn.errors import MissingExtraError, UnturnError

_PROBE_SECONDS = 60

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
print("rendered", bool(window.GetGenericContext() or True))
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


def make_window(size: tuple[int, int]) -> tuple[Any, Any]:
    """Return an invisible render window of `size` pixels and its white renderer."""
    check_graphics()
    import vtkmodules.vtkRenderingFreeType  # noqa: F401  (text)
    import vtkmodules.vtkRenderingOpenGL2 as gl
    from vtkmodules.vtkRenderingCore import vtkRenderer, vtkRenderWindow

    name = _window_class()
    window = getattr(gl, name)() if name != "vtkRenderWindow" else vtkRenderWindow()
    window.SetOffScreenRendering(1)
    window.SetShowWindow(False)
    window.SetMultiSamples(8)
    window.SetSize(*size)
    renderer = vtkRenderer()
    renderer.SetBackground(1.0, 1.0, 1.0)
    window.AddRenderer(renderer)
    return window, renderer


def capture(window: Any) -> Any:
    """Return what the window shows as a `vtkImageData` of RGB bytes."""
    from vtkmodules.vtkRenderingCore import vtkWindowToImageFilter

    window.Render()
    grab = vtkWindowToImageFilter()
    grab.SetInput(window)
    grab.ReadFrontBufferOff()
    grab.SetInputBufferTypeToRGB()
    grab.Update()
    return grab.GetOutput()


def pixels(image: Any) -> NDArray[np.uint8]:
    """Return `(height, width, 3)` bytes of an image, top row first."""
    from vtkmodules.util.numpy_support import vtk_to_numpy

    width, height, _ = image.GetDimensions()
    values = vtk_to_numpy(image.GetPointData().GetScalars()).reshape(height, width, 3)
    return np.asarray(values[::-1], dtype=np.uint8)


def write_png(image: Any, path: Path) -> None:
    """Write an image as PNG.

    Raises
    ------
    OSError
        The file cannot be written.
    """
    from vtkmodules.vtkIOImage import vtkPNGWriter

    writer = vtkPNGWriter()
    writer.WriteToMemoryOn()
    writer.SetInputData(image)
    writer.Write()
    from vtkmodules.util.numpy_support import vtk_to_numpy

    held = writer.GetResult()
    if held is None:
        raise UnturnError("the picture could not be encoded as PNG.")
    path.write_bytes(vtk_to_numpy(held).tobytes())
