"""Pictures for reports, drawn without a screen."""

from __future__ import annotations

from unturn.pictures._camera import Camera
from unturn.pictures._marks import Mark
from unturn.pictures.draw import Drawing, draw

__all__ = ["Camera", "Drawing", "Mark", "draw"]
