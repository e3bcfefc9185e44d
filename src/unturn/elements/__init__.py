"""The element table: every cell that can be computed, and why the others cannot.

A row is reference nodes and a space of functions; shape functions, gradients, edges and faces follow from
them. Names are meshio's, node orders are VTK's.
"""

from __future__ import annotations

from unturn.elements._detect import detect_spacing
from unturn.elements._element import Element, FaceNodes
from unturn.elements._lookup import ELEMENTS, FAMILIES, element, not_computable
from unturn.elements._quadrature import Quadrature
from unturn.elements._shape import Shape
from unturn.elements._spacing import Spacing

__all__ = [
    "ELEMENTS",
    "FAMILIES",
    "Element",
    "FaceNodes",
    "Quadrature",
    "Shape",
    "Spacing",
    "detect_spacing",
    "element",
    "not_computable",
]
