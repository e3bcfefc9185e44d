"""Free faces of solids, and the strain on them from the faces' own nodes."""

from __future__ import annotations

from unturn.surface._faces import FaceBlock, Faces, faces_model, free_faces
from unturn.surface._fields import SurfaceFields, surface_result
from unturn.surface._measures import SURFACE_MEASURES, SurfaceMeasure, choose_surface_measures

__all__ = [
    "SURFACE_MEASURES",
    "FaceBlock",
    "Faces",
    "SurfaceFields",
    "SurfaceMeasure",
    "choose_surface_measures",
    "faces_model",
    "free_faces",
    "surface_result",
]
