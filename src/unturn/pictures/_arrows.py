"""Directions on the surface: principal strains with heads outwards or inwards, axes of rotation."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unturn.pictures._camera import Camera
from unturn.pictures._colours import INK
from unturn.pictures._page import Page
from unturn.pictures._scene import Colour
from unturn.pictures._subject import Arrows

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
_LONGEST = 28.0  # half the length of the longest
_SHORTEST = 0.12  # share of the longest below which nothing is drawn
_END_ON = 0.35  # share of its length below which an axis of rotation is seen from its end
_WHITE: Colour = (1.0, 1.0, 1.0)


@dataclass(frozen=True, eq=False)
class Place:
    """Where arrows are drawn: column and row from the lower left corner, and the position of their values."""

    at: Floats
    position: int


def longest(arrows: Arrows, which: NDArray[np.bool_]) -> float:
    """Return the largest of some values, without sign."""
    values = np.abs(arrows.values[which])
    return float(np.nanmax(values)) if np.isfinite(values).any() else 0.0


def draw_arrows(page: Page, camera: Camera, arrows: Arrows, where: list[Place], most: float) -> None:
    """Draw the arrows of some places; the length of `most` is the longest."""
    axes = np.stack([camera.right, np.array(camera.up), np.array(camera.direction)], axis=1)
    strokes: list[Floats] = []
    heads: list[Floats] = []
    for place in where:
        for vector, value in zip(arrows.vectors[place.position], arrows.values[place.position]):
            if not np.isfinite(value) or abs(value) < _SHORTEST * most:
                continue
            seen = vector @ axes
            length = _LONGEST * page.unit * abs(value) / most
            make = _principal if arrows.kind == "principal" else _rotation
            lines, tips = make(place.at, seen, length, value, page.unit)
            strokes += lines
            heads += tips
    for colour, more in ((_WHITE, 2.6), (INK, 0.0)):
        for line in strokes:
            page.line(line, colour, (1.5 + more) * page.unit)
        for tip in heads:
            page.areas(
                _grown(tip, more * 0.5 * page.unit), np.round(np.array([colour]) * 255).astype(np.uint8)
            )


def _grown(tip: Floats, by: float) -> Floats:
    middle = tip.mean(axis=0)
    away = tip - middle
    length = np.linalg.norm(away, axis=1, keepdims=True)
    return np.asarray((middle + away * (1 + 1.6 * by / np.where(length > 0, length, 1.0)))[None])


def _head(tip: Floats, along: Floats, size: float) -> Floats:
    """Return the triangle of an arrow head that ends at `tip`, pointing `along`."""
    side = np.array([-along[1], along[0]])
    back = tip - along * size
    return np.array([tip, back + side * 0.45 * size, back - side * 0.45 * size])


def _principal(
    at: Floats, seen: Floats, length: float, value: float, unit: float
) -> tuple[list[Floats], list[Floats]]:
    """Return lines and heads of a principal strain: heads at the ends point outwards (stretch) or inwards."""
    flat = float(np.linalg.norm(seen[:2]))
    reach = length * flat
    size = min(9.0 * unit, 0.75 * reach)
    if reach < 7.0 * unit:
        return [], []
    along = seen[:2] / flat
    lines, heads = [], []
    for way in (along, -along):
        end = at + way * reach
        if value > 0:
            heads.append(_head(end, way, size))
            lines.append(np.array([at, end - way * size * 0.7]))
        else:
            heads.append(_head(end - way * size, -way, size))
            lines.append(np.array([at, end]))
    return lines, heads


def _rotation(
    at: Floats, seen: Floats, length: float, value: float, unit: float
) -> tuple[list[Floats], list[Floats]]:
    """Return lines and heads of an axis of rotation: two heads along it (right hand), or an arc seen from its end."""
    flat = float(np.linalg.norm(seen[:2]))
    if flat < _END_ON:
        turn = np.sign(seen[2])
        angle = np.linspace(0.2, 0.2 + turn * 1.5 * np.pi, 40)
        radius = max(0.55 * length, 3.0 * unit)
        arc = at + radius * np.stack([np.cos(angle), np.sin(angle)], axis=1)
        along = turn * np.array([-np.sin(angle[-1]), np.cos(angle[-1])])
        return [arc], [_head(arc[-1] + along * 7.0 * unit, along, 9.0 * unit)]
    along = seen[:2] / flat
    end = at + along * length * flat
    size = min(9.0 * unit, 0.6 * length * flat)
    heads = [_head(end, along, size), _head(end - along * size * 0.9, along, size)]
    return [np.array([at - along * length * flat, end - along * size * 0.8])], heads
