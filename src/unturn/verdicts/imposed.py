"""The table of fields that `unturn patchtest` imposes, each with the exact value of what is computed from it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from unturn.kinematics._symmetric import PAIRS, Floats, six_from_full
from unturn.source import Source

TURN = np.deg2rad(50.0)
SMALL_TURN = 1e-3
SHIFT = 10.0
"""Length of the translation, in sizes of the mesh."""
_AXIS = np.array([1.0, 2.0, 2.0]) / 3.0
_DIRECTION = np.array([2.0, -3.0, 6.0]) / 7.0
# every second derivative of every component is there, and no two are alike
_CURVATURE = np.array(
    [
        [[1.0, 0.6, -0.8], [0.6, -0.7, 0.3], [-0.8, 0.3, 0.9]],
        [[-0.5, 0.4, 0.2], [0.4, 1.1, -0.6], [0.2, -0.6, 0.8]],
        [[0.7, -0.3, 0.5], [-0.3, 0.4, 0.9], [0.5, 0.9, -1.2]],
    ]
)


@dataclass(frozen=True, eq=False)
class ImposedField:
    """A displacement known at every point, `u = t + G x + x Q x / 2` with x from the middle of the mesh.

    Parameters
    ----------
    name
        Stable name: part of the names of findings.
    title
        What it is, with its constants, for people.
    source
        Where it, or the closed form of its strain, comes from.
    gradient
        `(3, 3)` G.
    shift
        `(3,)` t.
    curvature
        `(3, 3, 3)` Q, `Q[i, j, k] = d2u_i / dX_j dX_k`; None for the fields that every element must give exactly.
    single
        Whether the displacement is stored in single precision.
    everywhere
        Measure -> exact value on lines, surfaces and solids alike.
    full
        Measure -> exact value where the whole gradient is seen: solids and plane strain.
    within
        Measure -> exact tensor `(3, 3)`, of which surfaces and lines show the part along themselves.
    """

    name: str
    title: str
    source: Source
    gradient: Floats
    shift: Floats
    curvature: Floats | None = None
    single: bool = False
    everywhere: tuple[tuple[str, Any], ...] = ()
    full: tuple[tuple[str, Any], ...] = ()
    within: tuple[tuple[str, Floats], ...] = ()

    @property
    def measures(self) -> list[str]:
        """The measures that are looked at."""
        return ["strain", "rotation", *(name for name, _ in (*self.everywhere, *self.full, *self.within))]

    def displacement(self, x: Floats) -> Floats:
        """Return the displacement `(n, 3)` at points `(n, 3)`; float32 where it is stored so."""
        u = x @ self.gradient.T + self.shift
        if self.curvature is not None:
            u += 0.5 * np.stack([np.einsum("nj,nj->n", x @ Q, x) for Q in self.curvature], axis=1)
        return np.asarray(u, dtype=np.float32 if self.single else np.float64)

    def gradient_at(self, x: Floats) -> Floats:
        """Return the exact gradient at points `(n, 3)`: `(n, 3, 3)`, or `(1, 3, 3)` where it is the same everywhere."""
        if self.curvature is None:
            return self.gradient[None]
        return np.asarray(self.gradient + np.einsum("ijk,nk->nij", self.curvature, x))

    def expected(self, x: Floats, along: Floats | None) -> dict[str, Floats]:
        """Return the exact values at points, by measure: one row for each point, or one for all.

        Parameters
        ----------
        x
            `(n, 3)` points, from the middle of the mesh.
        along
            `(n, 3, 3)` projectors onto surfaces or lines in space; None where the whole gradient is seen.

        Notes
        -----
        With P the projector, the gradient seen is `G P - P G^T (I - P)`: the part along the surface or line, completed by
        fibres across it that follow without strain.
        """
        G = self.gradient_at(x)
        if along is not None:
            G = G @ along - along @ np.swapaxes(G, -1, -2) @ (np.eye(3) - along)
        found = {"strain": _six(G), "rotation": _rotation(G)}
        for name, value in self.everywhere:
            found[name] = np.atleast_2d(np.asarray(value, dtype=np.float64))
        for name, tensor in self.within:
            found[name] = _six(tensor[None] if along is None else along @ tensor @ along)
        if along is None:
            for name, value in self.full:
                found[name] = np.atleast_2d(np.asarray(value, dtype=np.float64))
        return found


def _six(tensor: Floats) -> Floats:
    return six_from_full(np.moveaxis(tensor, 0, -1)).T


def _rotation(H: Floats) -> Floats:
    return 0.5 * np.stack([H[:, 2, 1] - H[:, 1, 2], H[:, 0, 2] - H[:, 2, 0], H[:, 1, 0] - H[:, 0, 1]], axis=1)


def rotation_tensor(axis: Floats, angle: float) -> Floats:
    """Return the rotation `(3, 3)` by an angle about a unit axis (Rodrigues 1840)."""
    x, y, z = axis
    K = np.array([[0.0, -z, y], [z, 0.0, -x], [-y, x, 0.0]])
    return np.asarray(np.eye(3) + np.sin(angle) * K + (1.0 - np.cos(angle)) * K @ K)


_MACNEAL = Source(
    "memory",
    "strain of the patch tests of MacNeal and Harder 1985, A proposed standard set of problems to test finite element "
    "accuracy, Finite Elem. Anal. Des. 1, 3-20",
)
_RODRIGUES = Source("published", "Rodrigues 1840: F = R; R + R^T = 2 I - 2 (1 - cos) (I - a a^T); U = I")
_POLAR = Source(
    "published", "Holzapfel 2000, Nonlinear Solid Mechanics, sections 2.5 and 2.6: F = R U, strains are f(U)"
)
_SMALL = Source("published", "Timoshenko and Goodier, Theory of Elasticity, chapters 1 and 7")
_TAYLOR = Source(
    "derived", "gradient of a quadratic polynomial; elements that hold all of them give it exactly"
)


def imposed_fields(normal: int | None, size: float) -> list[ImposedField]:
    """Return the table of fields for a mesh.

    Parameters
    ----------
    normal
        Coordinate axis across a plane mesh, in which the fields then lie; None for all others.
    size
        Length of the mesh: the translation is ten times it, and the strain of the quadratic field changes by about a
        thousandth over it.
    """
    flat = np.eye(3)
    if normal is not None:
        flat[normal, normal] = 0.0
    axis = _AXIS if normal is None else np.eye(3)[normal]
    shift = SHIFT * size * (flat @ _DIRECTION)
    return [
        _translation(shift),
        _small_turn(axis),
        _uniform_strain(flat),
        _turn(axis),
        _strain_and_turn(flat, axis, shift, single=False),
        _strain_and_turn(flat, axis, shift, single=True),
        _quadratic(flat, size),
    ]


def _translation(shift: Floats) -> ImposedField:
    title = f"rigid translation by {SHIFT:g} times the size of the mesh: no strain, no rotation"
    return ImposedField("translation", title, _SMALL, np.zeros((3, 3)), shift)


def _small_turn(axis: Floats) -> ImposedField:
    x, y, z = SMALL_TURN * axis
    W = np.array([[0.0, -z, y], [z, 0.0, -x], [-y, x, 0.0]])
    title = f"small rotation of {SMALL_TURN:g} radian about {_words(axis)}: no small strain, rotation vector exact"
    return ImposedField("small_turn", title, _SMALL, W, np.zeros(3))


def _macneal(flat: Floats) -> tuple[Floats, Floats, float, float]:
    """Return strain, its one direction n, and its principal strains along n and across it.

    All normal strains are a thousandth, and so are all engineering shears: `lo (I - n n^T) + hi n n^T`, n the diagonal.
    """
    n = flat @ np.ones(3)
    n /= np.linalg.norm(n)
    lo = 0.5e-3
    hi = lo * (1.0 + np.trace(flat))
    return lo * (flat - np.outer(n, n)) + hi * np.outer(n, n), n, hi, lo


def _uniform_strain(flat: Floats) -> ImposedField:
    E, _, hi, lo = _macneal(flat)
    solid = np.trace(flat) > 2.5
    principal = (hi, lo, lo) if solid else (hi, lo, 0.0)
    a, b, c = principal
    equivalent = np.sqrt(2.0 / 9.0 * ((a - b) ** 2 + (b - c) ** 2 + (c - a) ** 2))
    shears = "all three engineering shears" if solid else "the engineering shear"
    return ImposedField(
        "uniform_strain", f"uniform strain: the normal strains and {shears} 1000 microstrain", _MACNEAL, E, np.zeros(3),
        full=(("principal_strain", principal), ("equivalent_strain", equivalent)),
    )  # fmt: skip


_FINITE: dict[str, Callable[[float], float]] = {
    "strain_green_lagrange": lambda e: e + 0.5 * e * e,
    "strain_hencky": lambda e: float(np.log1p(e)),
    "strain_biot": lambda e: e,
    "strain_almansi": lambda e: 0.5 * (1.0 - (1.0 + e) ** -2),
}
"""Finite strain along a principal direction from the stretch less one."""


def _turn(axis: Floats) -> ImposedField:
    error = np.sqrt(2.0) * (1.0 - np.cos(TURN))
    title = (
        f"rotation of 50 degrees about {_words(axis)}: finite strains zero; the small strain (cos - 1) across the axis is "
        f"the error of turning, {error * 1e6:.0f} microstrain by its norm"
    )
    return ImposedField(
        "turn", title, _RODRIGUES, rotation_tensor(axis, TURN) - np.eye(3), np.zeros(3),
        everywhere=tuple((name, np.zeros(6)) for name in _FINITE),
        full=(("small_strain_error", error), ("finite_rotation", TURN * axis), ("finite_rotation_angle", TURN)),
    )  # fmt: skip


def _strain_and_turn(flat: Floats, axis: Floats, shift: Floats, single: bool) -> ImposedField:
    E, n, hi, lo = _macneal(flat)
    R = rotation_tensor(axis, TURN)
    across = flat - np.outer(n, n)
    exact = {name: f(lo) * across + f(hi) * np.outer(n, n) for name, f in _FINITE.items()}
    within = (("strain_green_lagrange", exact["strain_green_lagrange"]),)
    title = "uniform strain, then the rotation of 50 degrees and the translation"
    if single:
        return ImposedField(
            "strain_and_turn_float32", f"{title}, stored in single precision: within the noise floor that is reported",
            _POLAR, R @ (np.eye(3) + E) - np.eye(3), shift, single=True, within=within,
        )  # fmt: skip
    full: list[tuple[str, Any]] = [(name, _row(exact[name])) for name in ("strain_hencky", "strain_biot")]
    full.append(("strain_almansi", _row(R @ exact["strain_almansi"] @ R.T)))
    full.append(("det_f", (1.0 + hi) * (1.0 + lo) ** (np.trace(flat) - 1.0)))
    return ImposedField(
        "strain_and_turn", f"{title}: finite strains are those of the uniform strain", _POLAR,
        R @ (np.eye(3) + E) - np.eye(3), shift, within=within, full=tuple(full),
    )  # fmt: skip


def _row(tensor: Floats) -> Floats:
    return np.array([tensor[i, j] for i, j in PAIRS])


def _quadratic(flat: Floats, size: float) -> ImposedField:
    Q = np.einsum("ai,ijk,jb,kc->abc", flat, _CURVATURE, flat, flat) * (1e-3 / size)
    title = (
        "quadratic displacement, strain that changes by about 1000 microstrain over the mesh: exact for straight elements "
        "that hold all quadratics, and at the middle of straight lines, quads and hexahedra"
    )
    return ImposedField("quadratic", title, _TAYLOR, np.zeros((3, 3)), np.zeros(3), curvature=Q)


def _words(axis: Floats) -> str:
    whole = axis / np.abs(axis[np.abs(axis) > 1e-9]).min()
    return "(" + ", ".join(f"{x:g}" for x in whole.round(9)) + ")"
