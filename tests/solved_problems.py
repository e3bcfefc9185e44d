"""Solved problems whose peak is known: holes, cavities, cylinders, bars; and such as have none: corners, point loads."""

from __future__ import annotations

import numpy as np

import meshes
from small_solver import elasticity, solve
from test_fields_convergence import quarter, radial, unit_grid

Floats = np.ndarray
YOUNG, NU, PULL = 1000.0, 0.3, 1.0
# Source: Kirsch 1898; Timoshenko and Goodier, Theory of Elasticity, article 35: hoop strain 3 S/E at the hole.
PEAK = 3 * PULL / YOUNG
# Source: Lame; Timoshenko and Goodier, article 28: hoop strain at the bore of the cylinder of test_fields_convergence.
BORE = float(radial(np.array(1.0)))


def kirsch(x: Floats) -> Floats:
    """Displacement of a plate with a hole of radius 1 pulled along x, plane stress."""
    r, t = np.hypot(x[:, 0], x[:, 1]), np.arctan2(x[:, 1], x[:, 0])
    k, shear = (3 - NU) / (1 + NU), YOUNG / 2 / (1 + NU)
    u = r * (k + 1) * np.cos(t) + 2 / r * ((1 + k) * np.cos(t) + np.cos(3 * t)) - 2 / r**3 * np.cos(3 * t)
    v = r * (k - 3) * np.sin(t) + 2 / r * ((1 - k) * np.sin(t) + np.sin(3 * t)) - 2 / r**3 * np.sin(3 * t)
    return PULL / 8 / shear * np.stack([u, v, 0 * u], 1)


def plate(name: str, n: int) -> tuple[meshes.Mesh, Floats]:
    """A quarter of the plate, `n` cells a direction from the hole to radius 3; Kirsch's displacement on the outside."""
    mesh = unit_grid(name, n)
    r, angle = 1 + 2 * mesh.points[:, 0], np.pi / 2 * mesh.points[:, 1]
    mesh = mesh._replace(points=np.stack([r * np.cos(angle), r * np.sin(angle), 0 * r], 1))
    exact = kirsch(mesh.points)
    held = {d: np.flatnonzero((r > 3 - 1e-9) | (np.abs(mesh.points[:, d]) < 1e-9)) for d in (0, 1)}
    C = elasticity(YOUNG, NU, 2, "stress")
    return mesh, solve(mesh, C, {d: (k, exact[k, d]) for d, k in held.items()})


def cylinder(name: str, n: int) -> tuple[meshes.Mesh, Floats]:
    """A quarter of the thick cylinder under internal pressure, held by its exact displacement on both circles."""
    mesh = quarter(name, n)
    x = mesh.points
    r = np.hypot(x[:, 0], x[:, 1])
    exact = np.zeros(x.shape)
    exact[:, :2] = x[:, :2] * (radial(r) / r)[:, None]
    round_ = (np.abs(r - 1) < 1e-6) | (np.abs(r - 2) < 1e-6)
    held = [round_ | (np.abs(x[:, 0]) < 1e-9), round_ | (np.abs(x[:, 1]) < 1e-9)]
    held += [np.abs(x[:, 2] - 0.25) > 0.25 - 1e-9]
    fixed = {d: (np.flatnonzero(k), exact[k, d]) for d, k in enumerate(held)}
    return mesh, solve(mesh, elasticity(YOUNG, NU, 3), fixed)


def l_shape(name: str, n: int) -> meshes.Mesh:
    """The unit square without its upper right quarter, `2 n` cells along the long sides."""
    grid = unit_grid(name, 2 * n)
    x = grid.points[grid.cells].mean(axis=1)
    cells = grid.cells[(x[:, 0] < 0.5) | (x[:, 1] < 0.5)]
    used, cells = np.unique(cells, return_inverse=True)
    return grid._replace(points=grid.points[used], cells=cells.reshape(-1, grid.cells.shape[1]))


def corner_plate(name: str, n: int) -> tuple[meshes.Mesh, Floats]:
    """An L-shaped plate clamped on top and pulled down over its whole right end: re-entrant corner at (0.5, 0.5)."""
    mesh = l_shape(name, n)
    x = mesh.points
    top, end = np.flatnonzero(x[:, 1] > 1 - 1e-9), np.flatnonzero(x[:, 0] > 1 - 1e-9)
    force = np.zeros(x.shape)
    order = end[np.argsort(x[end, 1])]
    height = x[order, 1]
    force[order, 1] = -np.gradient(height) if mesh.element.order == 1 else -_thirds(len(order)) / (2 * n)
    C = elasticity(YOUNG, NU, 2, "stress")
    return mesh, solve(mesh, C, {d: (top, 0.0 * top) for d in (0, 1)}, force)


def corner_field(name: str, n: int) -> tuple[meshes.Mesh, Floats]:
    """The L-shaped plate (prism) with the symmetric field of its re-entrant corner given at the nodes.

    Source: Williams 1952, J. Appl. Mech. 19, 526-528: `r^lambda` with `sin 3/2 lambda pi + lambda sin 3/2 pi = 0`.
    """
    mesh = l_shape(name, n)
    power, half = 0.5444837367824622, 0.75 * np.pi
    turn = np.exp(1.25j * np.pi)
    z = (mesh.points[:, :2] - 0.5) @ [1, 1j] / turn
    b = -np.cos(2 * power * half) - power * np.cos(2 * half)
    k, radius = (3 - NU) / (1 + NU), np.where(z == 0, 1.0, np.abs(z))
    phi = np.where(z == 0, 0, radius**power * np.exp(1j * power * np.angle(z)))
    slope = power * phi / np.where(z == 0, 1.0, z)
    u = (k * phi - z * slope.conj() - b * phi.conj()) * turn / (YOUNG / (1 + NU))
    return mesh, np.stack([u.real, u.imag, 0 * u.real], 1)


def _thirds(count: int) -> Floats:
    """Simpson's weights along an edge of quadratic cells, as shares of a cell."""
    weights = np.full(count, 1 / 3)
    weights[1::2] = 2 / 3
    weights[[0, -1]] = 1 / 6
    return weights


def pressed(name: str, n: int) -> tuple[meshes.Mesh, Floats]:
    """A square (cube) on a fixed base, pulled by one force in the middle of its top."""
    mesh = unit_grid(name, n)
    dim, x = mesh.element.dim, mesh.points
    base = np.flatnonzero(np.abs(x[:, dim - 1]) < 1e-9)
    place = np.array([0.5, 1, 0]) if dim == 2 else np.array([0.5, 0.5, 1])
    force = np.zeros(x.shape)
    force[np.abs(x - place).sum(axis=1).argmin(), dim - 1] = 1.0
    C = elasticity(YOUNG, NU, dim, "stress")
    return mesh, solve(mesh, C, {d: (base, 0.0 * base) for d in range(dim)}, force)


def sphere(name: str, n: int) -> tuple[meshes.Mesh, Floats, float]:
    """A sector of a hollow sphere, radii 1 to 2, with `u_r = A r + B / r^2`; and the hoop strain at the bore, A + B.

    Source: Lame; Timoshenko and Goodier, article 136.
    """
    mesh = unit_grid(name, n)
    s = mesh.points
    direction = np.column_stack([np.ones(len(s)), (2 * s[:, 1:] - 1) * np.tan(np.pi / 6)])
    direction /= np.linalg.norm(direction, axis=1)[:, None]
    r = 1 + s[:, 0]
    exact = direction * (1e-4 * r + 1e-3 / r**2)[:, None]
    mesh = mesh._replace(points=direction * r[:, None])
    return mesh, _held_all_round(mesh, s, exact), 1.1e-3


def ring(name: str, n: int) -> tuple[meshes.Mesh, Floats, float]:
    """A sector of a ring, radii 1 to 1.5, pressed and twisted: `u_r = a / r + b r`, `u_t = c / r`; and the peak.

    Source: Lame; Timoshenko and Goodier, articles 28 and 43: at r = 1 the strain is
    `e_rr = b - a, e_tt = a + b, e_rt = -c`.
    """
    mesh = unit_grid(name, n)
    s = mesh.points
    r, angle = 1 + 0.5 * s[:, 0], np.pi / 3 * s[:, 1]
    a, b, c = 1e-3, 2e-4, 5e-4
    radial_, around = a / r + b * r, c / r
    cos, sin = np.cos(angle), np.sin(angle)
    exact = np.stack([radial_ * cos - around * sin, radial_ * sin + around * cos, 0 * r], 1)
    mesh = mesh._replace(points=np.stack([r * cos, r * sin, 0 * r], 1))
    peak = np.linalg.eigvalsh(np.array([[b - a, -c], [-c, a + b]]))[-1]
    return mesh, _held_all_round(mesh, s, exact), float(peak)


def _held_all_round(mesh: meshes.Mesh, s: Floats, exact: Floats) -> Floats:
    dim = mesh.element.dim
    border = np.flatnonzero((np.abs(s[:, :dim] - 0.5) > 0.5 - 1e-9).any(axis=1))
    return solve(mesh, elasticity(YOUNG, NU, dim), {k: (border, exact[border, k]) for k in range(dim)})


def _free_inside(
    mesh: meshes.Mesh, s: Floats, exact: Floats, sides: list[tuple[int, int]], plane: str = "strain"
) -> Floats:
    """Free where s[:, 0] is 0, held by the exact displacement where it is 1, and at `sides` (2 axis + end, direction)."""
    dim = mesh.element.dim
    held = {d: s[:, 0] > 1 - 1e-9 for d in range(dim)}
    for side, d in sides:
        held[d] = held[d] | (np.abs(s[:, side // 2] - side % 2) < 1e-9)
    fixed = {d: (np.flatnonzero(k), exact[k, d]) for d, k in held.items()}
    return solve(mesh, elasticity(YOUNG, NU, dim, plane), fixed)


def ellipse(name: str, n: int) -> tuple[meshes.Mesh, Floats, float]:
    """A quarter of a plate with an elliptical hole, half axes 2 and 1, pulled across its long axis; plane stress.

    Source: Inglis 1913, Trans. Inst. Naval Arch. 55, 219-241: the peak is `1 + 2 a / b` times the pull. Displacement from
    the complex potentials of Muskhelishvili, Some Basic Problems of the Mathematical Theory of Elasticity, section 82a.
    """
    mesh = unit_grid(name, n)
    s = mesh.points
    xi, angle = np.arctanh(0.5) + s[:, 0], np.pi / 2 * s[:, 1]
    x, y = np.sqrt(3) * np.cosh(xi) * np.cos(angle), np.sqrt(3) * np.sinh(xi) * np.sin(angle)
    mesh = mesh._replace(points=np.stack([x, y, 0 * x], 1))
    R, m, k = 1.5, 1 / 3, (3 - NU) / (1 + NU)
    z = x + 1j * y
    zeta = np.exp(xi + 1j * angle) * np.sqrt(3) / (2 * R)
    phi = PULL * R / 4 * (zeta - (2 + m) / zeta)
    slope = PULL / 4 * (1 + (2 + m) / zeta**2) / (1 - m / zeta**2)
    psi = PULL * R / 2 * (zeta + 1 / (m * zeta) - (1 + m**2) * (1 + m) / m * zeta / (zeta**2 - m))
    u = (k * phi - z * slope.conj() - psi.conj()) / (YOUNG / (1 + NU))
    exact = np.stack([u.real, u.imag, 0 * x], 1)
    return mesh, _free_inside(mesh, s, exact, [(2, 1), (3, 0)], "stress"), 5 * PULL / YOUNG


def cavity(name: str, n: int) -> tuple[meshes.Mesh, Floats, float]:
    """A sector around a spherical cavity, radii 1 to 2.2, pulled along z, with its equator; and the peak there.

    Source: Southwell and Gough 1926, Phil. Mag. 1, 71-97; Goodier 1933, J. Appl. Mech. 55, 39-44: stress at the equator
    `(27 - 15 nu) / (2 (7 - 5 nu))` along the pull and `(15 nu - 3) / (2 (7 - 5 nu))` around, times the pull.
    """
    mesh = unit_grid(name, n)
    s = mesh.points
    x = np.column_stack([np.ones(len(s)), (2 * s[:, 1] - 1) * np.tan(np.pi / 6), s[:, 2] * np.tan(np.pi / 6)])
    x *= ((1 + 1.2 * s[:, 0]) / np.linalg.norm(x, axis=1))[:, None]
    r, shear = np.linalg.norm(x, axis=1), YOUNG / 2 / (1 + NU)
    unit = PULL / 8 / shear / (7 - 5 * NU)
    A, B, C = -unit * (13 - 10 * NU), unit, 5 * unit * (1 - 2 * NU)
    cos, sin = x[:, 2] / r, np.hypot(x[:, 0], x[:, 1]) / r
    radial_ = (
        -A / r**2 - 3 * B / r**4 + ((5 - 4 * NU) / (1 - 2 * NU) * C / r**2 - 9 * B / r**4) * (2 * cos**2 - 1)
    )
    along = -(2 * C / r**2 + 6 * B / r**4) * 2 * sin * cos
    south = np.column_stack([x[:, :2] * (cos / (r * sin))[:, None], -sin])
    exact = x / r[:, None] * radial_[:, None] + south * along[:, None] + PULL / YOUNG * x * [-NU, -NU, 1]
    mesh = mesh._replace(points=x)
    sides = [(4, 2), *((side, d) for side in (2, 3, 5) for d in range(3))]
    peak = (27 - 15 * NU - NU * (15 * NU - 3)) / (2 * (7 - 5 * NU)) * PULL / YOUNG
    return mesh, _free_inside(mesh, s, exact, sides), peak


def bent(name: str, n: int) -> tuple[meshes.Mesh, Floats, float]:
    """A bar three times as long as thick, `n` cells a direction, bent by the exact displacement of its ends.

    Source: Timoshenko and Goodier, Theory of Elasticity, article 102: `e_xx = y / R`, largest at the surface.
    """
    mesh = unit_grid(name, n)
    s, dim = mesh.points, mesh.element.dim
    x, y, z = (s * [3, 1, 1] - [0, 0.5, 0.5 * (dim == 3)]).T
    mesh = mesh._replace(points=np.stack([x, y, z], 1))
    curvature = 2e-3
    across = NU * (y**2 - (z**2 if dim == 3 else 0))
    exact = curvature * np.stack([x * y, -(x**2 + across) / 2, -NU * y * z], 1)
    ends = np.flatnonzero(np.abs(s[:, 0] - 0.5) > 0.5 - 1e-9)
    u = solve(mesh, elasticity(YOUNG, NU, dim, "stress"), {d: (ends, exact[ends, d]) for d in range(dim)})
    return mesh, u, curvature / 2
