"""The rigid motion in a displacement: fitted over a part of the body, taken out of any other part.

The fit minimises the integral of the squared distance over the volume (area, length), with the shape functions, not
over the nodes. Two kinds: linearised (translation plus `theta x X`) for a geometrically linear solve, the best proper
rotation for a nonlinear one.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unturn.elements import rule_of_degree
from unturn.errors import InputError, UsageError
from unturn.gradient import ElementChunk, chunk_ranges
from unturn.kinematics._symmetric import Floats
from unturn.model import Model
from unturn.point_gradient import reversing_turn

Fit = Literal["linearised", "finite"]


@dataclass(frozen=True, eq=False)
class RigidMotion:
    """A rigid motion.

    Attributes
    ----------
    fit
        ``linearised``: `u = translation + rotation x (X - center)`; ``finite``: `x = center + translation +
        R (X - center)`.
    center
        `(3,)` centroid of what was fitted, length unit of the file.
    translation
        `(3,)` of that centroid.
    rotation
        `(3,)` rotation vector, radians.
    residual
        Root mean square of the displacement that is left.
    size
        Root mean square distance of what was fitted from its centroid.
    """

    fit: Fit
    center: Floats
    translation: Floats
    rotation: Floats
    residual: float = 0.0
    size: float = 0.0

    @property
    def turn(self) -> Floats:
        """`R - I`, or the skew tensor of `rotation` for the linearised fit, `(3, 3)`."""
        return skew(self.rotation) if self.fit == "linearised" else turn_of(self.rotation)


@dataclass(frozen=True, eq=False)
class Axis:
    """A known axis of rotation: a point on it and its direction, `(3,)` each."""

    point: Floats
    direction: Floats


@dataclass(frozen=True, eq=False)
class Removal:
    """A rigid motion that was taken out.

    Attributes
    ----------
    fitted, applied
        Names of the parts over which it was fitted, and from which it was taken.
    motion
        What was taken out.
    other
        The motion of the other kind of fit, for its residual; None when the kind of solve is known.
    """

    fitted: str
    applied: str
    motion: RigidMotion
    other: RigidMotion | None


def take_out(
    model: Model,
    parts: Sequence[tuple[str, NDArray[np.int64], str, NDArray[np.int64]]],
    solve: Literal["linear", "nonlinear", "unknown"],
    axis: Axis | None = None,
    finite: bool = False,
) -> tuple[Model, tuple[Removal, ...]]:
    """Return the model without the rigid motions of some parts, and what was taken out.

    Parameters
    ----------
    model
        The model.
    parts
        For each motion: name and cells over which it is fitted, name and cells from which it is taken.
    solve
        ``linear``: the linearised fit; ``nonlinear``: the best proper rotation; ``unknown``: both are fitted, and the
        one that leaves less is taken out, the rotation where they are equal.
    axis
        A known axis of rotation instead of the full fit.
    finite
        Whether finite measures follow: an unknown solve then takes the rotation out, which does not change them.
    """
    back, back_of, removals = [], np.full(model.result.n_cells, -1, dtype=np.int64), []
    for number, (fitted, cells, applied, target) in enumerate(parts):
        found = [fit_rigid_motion(model, cells, kind, axis) for kind in _KINDS[solve]]
        if len(found) > 1 and not finite and found[1].residual < found[0].residual - _EQUAL * found[0].size:
            found.reverse()
        motion, other = found[0], found[1] if len(found) > 1 else None
        back.append(_back(motion))
        back_of[target] = number
        removals.append(Removal(fitted, applied, motion, other))
    return replace(model, back=np.array(back), back_of=back_of), tuple(removals)


_EQUAL = 1e-12  # residuals that differ by less than this share of the part's size are equal
_KINDS: dict[str, tuple[Fit, ...]] = {
    "linear": ("linearised",),
    "nonlinear": ("finite",),
    "unknown": ("finite", "linearised"),
}


def _back(motion: RigidMotion) -> Floats:
    turn = motion.turn
    if motion.fit == "linearised":
        return np.array([-turn, np.zeros((3, 3))])
    return np.array([turn.T, turn.T])


def skew(vector: Floats) -> Floats:
    """Return the tensor W with `W a = vector x a`."""
    x, y, z = vector
    return np.array([[0.0, -z, y], [z, 0.0, -x], [-y, x, 0.0]])


def turn_of(vector: Floats) -> Floats:
    """Return `R - I` of a rotation vector; small rotations keep their digits.

    Notes
    -----
    `R = I + sin(a)/a W + (1 - cos(a))/a^2 W^2` (Rodrigues 1840).
    """
    angle = float(np.linalg.norm(vector))
    W = skew(vector)
    first = np.sinc(angle / np.pi)
    half = np.sinc(0.5 * angle / np.pi)
    return np.asarray(first * W + 0.5 * half * half * (W @ W))


def rotation_vector_of(turn: Floats) -> Floats:
    """Return the rotation vector of a proper rotation given as `R - I`."""
    from unturn.kinematics._finite import Finite

    return Finite(turn[:, :, None]).rotation[:, 0]


@dataclass(eq=False)
class _Moments:
    """Integrals over some cells: volume, centroid, mean displacement, and second moments about them."""

    volume: float
    center: Floats
    mean: Floats
    XX: Floats
    uX: Floats


def fit_rigid_motion(
    model: Model, cells: NDArray[np.int64], fit: Fit, axis: Axis | None = None
) -> RigidMotion:
    """Return the rigid motion of some cells of a model.

    Parameters
    ----------
    model
        The model.
    cells
        File positions; only those of the highest dimension among them that are computed count.
    fit
        ``linearised`` or ``finite``.
    axis
        A known axis: only the angle about it is fitted.

    Raises
    ------
    InputError
        No volume, or a displacement that is not finite.
    """
    mask = np.zeros(model.result.n_cells, dtype=bool)
    mask[cells] = True
    m = _moments(model, mask)
    if axis is not None:
        _check_axis(model, axis)
    if model.plane is not None and model.plane.model == "axisymmetric":
        motion = _axial(model, m, fit)
    elif axis is not None:
        motion = _about_axis(m, fit, axis)
    else:
        planar = None if model.plane is None else model.plane.normal
        rotation = _linear_rotation(m, planar) if fit == "linearised" else _finite_rotation(m, planar)
        motion = RigidMotion(fit, m.center, m.mean, rotation)
    return _with_residual(model, mask, m, motion)


def _moments(model: Model, mask: NDArray[np.bool_]) -> _Moments:
    origin = _start(model, mask)
    volume, first, second = 0.0, np.zeros(6), np.zeros((6, 6))
    for points, weights in _points(model, mask):
        values = points - origin[:, None]
        volume += float(weights.sum())
        first += np.einsum("im,m->i", values, weights)
        second += np.einsum("im,jm,m->ij", values, values, weights)
    if not volume > 0:
        raise InputError(
            f"{model.result.path + ': ' if model.result.path else ''}no rigid motion can be fitted: the cells have no "
            "volume or no finite displacement."
        )
    mean = first / volume
    second -= volume * np.outer(mean, mean)
    return _Moments(volume, origin[:3] + mean[:3], origin[3:] + mean[3:], second[:3, :3], second[3:, :3])


def _points(model: Model, mask: NDArray[np.bool_]) -> Iterator[tuple[Floats, Floats]]:
    """Yield coordinates with displacements `(6, k)`, and volume weights `(k,)`, at points that integrate squares."""
    dims = [b.row.dim for b in model.blocks if b.row is not None and mask[b.index].any()]
    for block in model.blocks:
        if block.row is None or not dims or block.row.dim != max(dims):
            continue
        conn, row = block.connectivity[mask[block.index]], block.row
        rule = rule_of_degree(row.shape, 2 * row.order)
        functions, gradients = row.shape_functions(rule.points), row.shape_gradients(rule.points)
        for start, stop in chunk_ranges(len(conn), conn.shape[1]):
            with np.errstate(invalid="ignore", divide="ignore"):
                chunk = ElementChunk(model.fields, conn[start:stop], row, model.plane)
                for N, dN, weight in zip(functions, gradients, rule.weights):
                    values = np.stack([chunk.interpolate(N, k) for k in range(6)])
                    weights = weight * chunk.at(dN, N).weight
                    keep = np.isfinite(weights) & np.isfinite(values).all(axis=0)
                    yield (values, weights) if keep.all() else (values[:, keep], weights[keep])


def _start(model: Model, mask: NDArray[np.bool_]) -> Floats:
    """Return the mean coordinates and displacement of some of the nodes: sums are taken relative to it."""
    for block in model.blocks:
        nodes = (
            block.connectivity[mask[block.index]].reshape(-1)
            if block.row is not None
            else np.zeros(0, np.int64)
        )
        rows = model.fields.rows[:, nodes[:: max(1, len(nodes) // 1000)]]
        rows = rows[:, np.isfinite(rows).all(axis=0)]
        if rows.shape[1]:
            middle: Floats = rows.mean(axis=1)
            return middle
    return np.zeros(6)


def _linear_rotation(m: _Moments, planar: int | None) -> Floats:
    """Return theta that minimises the integral of `|u - theta x X|^2` about the centroids."""
    load = np.array([m.uX[2, 1] - m.uX[1, 2], m.uX[0, 2] - m.uX[2, 0], m.uX[1, 0] - m.uX[0, 1]])
    inertia = np.trace(m.XX) * np.eye(3) - m.XX
    if planar is not None:
        theta = np.zeros(3)
        theta[planar] = load[planar] / inertia[planar, planar]
        return theta
    return np.asarray(np.linalg.lstsq(inertia, load, rcond=1e-12)[0])


def _finite_rotation(m: _Moments, planar: int | None) -> Floats:
    """Return the rotation vector of the proper R that minimises the integral of `|x - R X|^2` about the centroids.

    Notes
    -----
    Singular value decomposition of the moment of x and X with the determinant's sign (Kabsch 1976; Markley 1988).
    The best turn is found first from scratch, then what it leaves is fitted once more linearly: small turns keep their
    digits.
    """
    moment = m.uX + m.XX
    if planar is not None:
        a, b = [(1, 2), (2, 0), (0, 1)][planar]
        angle = np.arctan2(m.uX[b, a] - m.uX[a, b], moment[a, a] + moment[b, b])
        theta = np.zeros(3)
        theta[planar] = angle
        return theta
    left, size, right = np.linalg.svd(moment)
    signs = np.ones(3)
    signs[2] = np.sign(np.linalg.det(left) * np.linalg.det(right)) or 1.0
    R = (left * signs) @ right
    if size[1] <= 1e-12 * size[0]:  # a straight line: any turn about it does as well; take the smallest
        R = _smallest_turn(right[0], left[:, 0])
    small = np.linalg.norm(R - np.eye(3)) < 0.1
    if not small:
        return rotation_vector_of(R - np.eye(3))
    return _refined(moment, rotation_vector_of(R - np.eye(3)), m)


def _refined(moment: Floats, theta: Floats, m: _Moments) -> Floats:
    """Improve a small turn: the linear fit of what it leaves, from `u - (R - I) X`, which does not cancel."""
    for _ in range(2):
        turn = turn_of(theta)
        rest = m.uX - turn @ m.XX  # moment of what is left
        back = rest + turn.T @ rest  # turned back into the undeformed axes
        load = np.array([back[2, 1] - back[1, 2], back[0, 2] - back[2, 0], back[1, 0] - back[0, 1]])
        inertia = np.trace(m.XX) * np.eye(3) - m.XX
        step = np.linalg.lstsq(inertia, load, rcond=1e-12)[0]
        theta = theta + step
    return np.asarray(theta)


def _smallest_turn(old: Floats, new: Floats) -> Floats:
    """Return the smallest rotation that takes one unit vector to another; where they are opposite, one of them."""
    cosine = float(old @ new)
    if cosine < -0.5:
        return np.eye(3) + reversing_turn(old[:, None], new[:, None])[:, :, 0]
    W = skew(np.cross(old, new))
    return np.asarray(np.eye(3) + W + W @ W / (1.0 + cosine))


def _check_axis(model: Model, axis: Axis) -> None:
    if not np.linalg.norm(axis.direction) > 0:
        raise UsageError("--rigid-axis: the direction of the axis has no length.")
    if model.plane is None:
        return
    if model.plane.model == "axisymmetric":
        raise UsageError("--rigid-axis: an axisymmetric mesh cannot turn, it only moves along its own axis.")
    if np.delete(axis.direction, model.plane.normal).any():
        raise UsageError(
            f"--rigid-axis: a plane mesh turns about {'xyz'[model.plane.normal]} only; the axis given points elsewhere."
        )


def _about_axis(m: _Moments, fit: Fit, axis: Axis) -> RigidMotion:
    """Return the rotation about a known axis that fits best."""
    n = axis.direction / float(np.linalg.norm(axis.direction))
    arm = m.center - axis.point
    XX = m.XX + m.volume * np.outer(arm, arm)
    uX = m.uX + m.volume * np.outer(m.mean, arm)
    P = np.eye(3) - np.outer(n, n)
    sine = float(np.einsum("ij,ij->", skew(n), uX))
    spread = float(np.trace(P @ XX))
    if not spread > 1e-20 * float(np.trace(XX)):
        raise UsageError("--rigid-axis: the part lies on the axis; the angle of its turn cannot be found.")
    angle = (
        sine / spread if fit == "linearised" else float(np.arctan2(sine, spread + float(np.trace(P @ uX))))
    )
    theta = angle * n
    turn = skew(theta) if fit == "linearised" else turn_of(theta)
    return RigidMotion(fit, m.center, turn @ arm, theta)


def _axial(model: Model, m: _Moments, fit: Fit) -> RigidMotion:
    """Return the only rigid motion that keeps an axisymmetric state: along the axis."""
    assert model.plane is not None
    translation = np.zeros(3)
    translation[model.plane.axis] = m.mean[model.plane.axis]
    return RigidMotion(fit, m.center, translation, np.zeros(3))


def _with_residual(model: Model, mask: NDArray[np.bool_], m: _Moments, motion: RigidMotion) -> RigidMotion:
    """Return the motion with the root mean square of what it leaves."""
    turn, square = motion.turn, 0.0
    for values, weights in _points(model, mask):
        left = (
            values[3:]
            - motion.translation[:, None]
            - np.einsum("ij,jm->im", turn, values[:3] - m.center[:, None])
        )
        square += float(np.einsum("im,im,m->", left, left, weights))
    size = float(np.sqrt(np.trace(m.XX) / m.volume))
    return replace(motion, residual=float(np.sqrt(square / m.volume)), size=size)


def unwrapped(rotation: Floats, previous: Floats) -> Floats:
    """Return the rotation vector of the same turn, plus whole turns, that is nearest to the previous one."""
    angle = float(np.linalg.norm(rotation))
    size = float(np.linalg.norm(previous))
    if size == 0:
        return rotation
    n = rotation / angle if angle > 1e-12 else previous / size
    turns = (
        np.rint((float(previous @ n) - angle) / (2.0 * np.pi))
        if angle > 1e-12
        else np.rint(size / (2.0 * np.pi))
    )
    start = angle if angle > 1e-12 else 0.0
    return np.asarray(n * (start + 2.0 * np.pi * turns))
