"""Random tensors for the laws of tensor algebra."""

from __future__ import annotations

from typing import Any

import numpy as np
from hypothesis import strategies as st
from numpy.typing import NDArray

Floats = NDArray[np.float64]


_UNIT = st.floats(-1.0, 1.0, allow_subnormal=False)


def axis_angle(axis: Any, angle: float) -> Floats:
    """Return `R - I` of the turn about a unit axis; nothing is lost at small angles.

    Rodrigues 1840: `R - I = sin(angle) K + 2 sin(angle/2)^2 K K`.
    """
    x, y, z = axis
    K = np.array([[0.0, -z, y], [z, 0.0, -x], [-y, x, 0.0]])
    turn: Floats = np.sin(angle) * K + 2.0 * np.sin(angle / 2) ** 2 * K @ K
    return turn


@st.composite
def unit_vectors(draw: st.DrawFn) -> Floats:
    """Unit vectors, with the coordinate axes among them."""
    if draw(st.booleans()):
        return np.eye(3)[draw(st.integers(0, 2))]
    vector = np.array([draw(_UNIT) for _ in range(3)])
    size = float(np.linalg.norm(vector))
    return vector / size if size > 1e-3 else np.array([0.6, 0.0, 0.8])


@st.composite
def rotations(draw: st.DrawFn, largest: float = np.pi) -> Floats:
    """Return `R - I`."""
    return axis_angle(draw(unit_vectors()), draw(st.floats(0.0, largest)))


@st.composite
def symmetric(draw: st.DrawFn) -> Floats:
    """Symmetric tensors with components up to one."""
    six = [draw(_UNIT) for _ in range(6)]
    xx, yy, zz, xy, yz, xz = six
    return np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]])


@st.composite
def gradients(draw: st.DrawFn) -> Floats:
    """Displacement gradients: a stretch up to 0.3, turned by up to 180 degrees, each over twelve decades."""
    stretch = draw(symmetric()) * 0.3 * 10.0 ** -draw(st.floats(0.0, 12.0))
    turn = axis_angle(draw(unit_vectors()), np.pi * 10.0 ** -draw(st.floats(0.0, 12.0)))
    return turn + stretch + turn @ stretch


def principal_cases() -> Floats:
    """`(n, 3, 3)` tensors whose roots are hard to tell apart: gaps of 1e-16 to 1, zero, diagonal, turned."""
    rng = np.random.default_rng(12)
    found = [np.zeros((3, 3)), np.eye(3), np.diag([1.0, 2.0, 3.0]), np.diag([3.0, 1.0, 1.0]), np.ones((3, 3))]
    gaps = [0.0, *10.0 ** np.arange(-16.0, 0.5, 0.5)]
    for gap in gaps:
        for low, mid, high in ((1.0, 1.0 + gap, 2.0), (0.0, 1.0, 1.0 + gap), (1.0, 1.0 + gap, 1.0 + 2 * gap)):
            for turned in range(4):
                Q = np.eye(3) if not turned else np.linalg.qr(rng.normal(size=(3, 3)))[0]
                found.append(Q @ np.diag([low, mid, high]) @ Q.T)
                found.append(Q @ np.diag([-low, -mid, -high]) @ Q.T)
    tensors = np.array(found)
    return 0.5 * (tensors + np.swapaxes(tensors, 1, 2))
