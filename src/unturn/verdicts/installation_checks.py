"""The checks of an installation that need no mesh of the user: one record each, with where its truth comes from."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass
from itertools import product
from math import factorial
from typing import Any

import numpy as np

from unturn import kinematics
from unturn.elements import ELEMENTS, FAMILIES, Element, element
from unturn.gradient import displacement_gradient
from unturn.kinematics._symmetric import Floats
from unturn.refinement import SOURCE as CELIK
from unturn.refinement import study
from unturn.source import Source
from unturn.statistics import weighted_percentiles
from unturn.verdicts.builtin_meshes import straight_cell

_EPS = 2.0**-53
_ROUNDINGS = 200.0
_HIGHEST = 6
_LOGARITHMS = 20


@dataclass(frozen=True)
class Case:
    """One comparison: its error, what is allowed, both in `unit`."""

    name: str
    error: float
    bound: float
    unit: str = "1"


@dataclass(frozen=True)
class Check:
    """One check of an installation.

    Parameters
    ----------
    name
        Stable name.
    title
        What is held against what.
    source
        Where the truth comes from.
    cases
        Makes the comparisons.
    """

    name: str
    title: str
    source: Source
    cases: Callable[[], Iterable[Case]]


def compared(name: str, found: Any, expected: Any, allowed: float | None = None) -> Case:
    """Return the comparison of numbers; allowed by default is rounding of their size."""
    a, b = np.asarray(found, dtype=np.float64), np.asarray(expected, dtype=np.float64)
    error = float(np.abs(a - b).max())
    bound = _ROUNDINGS * _EPS * max(1.0, float(np.abs(b).max())) if allowed is None else allowed
    return Case(name, error if np.isfinite(error) else np.inf, bound)


def every_element() -> list[tuple[str, Element]]:
    """Return every element of the table, and VTK's Lagrange cells up to order 6, with a name each."""
    found = [(row.name, row) for row in ELEMENTS.values()]
    for family in FAMILIES.values():
        orders = [k for k in range(1, _HIGHEST + 1) if family.n_nodes(k) not in family.refused]
        found += [(f"{family.name}.{k}", element(family.name, family.n_nodes(k))) for k in orders]
    return found


# --- elements -----------------------------------------------------------------------------------------------------


def _completeness() -> Iterator[Case]:
    """Gradients of all monomials up to the order of each element, at the centroid of a straight cell."""
    for name, row in every_element():
        mesh = straight_cell(row)
        x, cells = np.asarray(mesh.points), mesh.blocks[0].connectivity
        middle = row.shape_functions(row.centroid[None])[0] @ x[cells[0]]
        worst, size = 0.0, 1.0
        powers = _powers(row.dim, row.order)
        for start in range(0, len(powers), 3):  # three monomials are the components of one displacement
            some = powers[start : start + 3]
            u = np.stack([_monomial(x, p) for p in (*some, *some)[:3]], axis=1)
            H = displacement_gradient(x, cells, u, mesh.blocks[0].cell_type)[0]
            exact = np.array([[_derivative(middle, p, k) for k in range(row.dim)] for p in some])
            worst = max(worst, float(np.abs(H[: len(some), : row.dim] - exact).max()))
            size = max(size, float(np.abs(u).max()))
        # differentiation of a polynomial of order p is worse conditioned by about p squared
        yield Case(name, worst, _ROUNDINGS * _EPS * size * row.order**2)


def _powers(dim: int, order: int) -> list[tuple[int, ...]]:
    return [(*p, *(0,) * (3 - dim)) for p in product(range(order + 1), repeat=dim) if sum(p) <= order]


def _monomial(x: Floats, powers: tuple[int, ...]) -> Floats:
    return np.asarray(np.prod([x[..., k] ** n for k, n in enumerate(powers)], axis=0))


def _derivative(x: Floats, powers: tuple[int, ...], k: int) -> float:
    if powers[k] == 0:
        return 0.0
    lower = tuple(n - (i == k) for i, n in enumerate(powers))
    return powers[k] * float(_monomial(x, lower))


def _quadrature() -> Iterator[Case]:
    """Integrals of all monomials up to the degree of each rule, over the reference cell."""
    for name, row in every_element():
        rule = row.quadrature
        worst = 0.0
        for powers in product(range(rule.degree + 1), repeat=row.dim):
            if sum(powers) <= rule.degree:
                value = float(rule.weights @ np.prod(rule.points ** np.array(powers), axis=1))
                worst = max(worst, abs(value - _integral(row.shape.name, powers)))
        yield Case(name, worst, _ROUNDINGS * _EPS * row.shape.volume)


def _integral(shape: str, powers: tuple[int, ...]) -> float:
    """Return the integral of a monomial over a reference shape, in closed form."""
    if shape in ("triangle", "tetra"):
        top = np.prod([float(factorial(n)) for n in powers])
        return float(top / factorial(sum(powers) + len(powers)))
    if shape == "wedge":
        return _integral("triangle", powers[:2]) * _integral("line", powers[2:])
    if shape == "pyramid":
        i, j, k = powers
        up = factorial(k) * factorial(i + j + 2) / factorial(i + j + k + 3)
        return _integral("line", (i,)) * _integral("line", (j,)) * up
    return float(np.prod([(1.0 - (-1.0) ** (n + 1)) / (n + 1) for n in powers]))


# --- kinematics ---------------------------------------------------------------------------------------------------


def _simple_shear() -> Iterator[Case]:
    for g in (0.01, 0.4, 2.0):
        H = np.zeros((3, 3))
        H[0, 1] = g
        long, short = (np.sqrt(4.0 + g * g) + g) / 2.0, (np.sqrt(4.0 + g * g) - g) / 2.0
        biot = kinematics.principal_strain(kinematics.biot_strain(H))
        yield compared(f"principal stretches, shear {g:g}", biot + 1.0, [long, 1.0, short])
        hencky = kinematics.principal_strain(kinematics.hencky_strain(H))
        yield compared(
            f"principal Hencky strains, shear {g:g}", hencky, np.arcsinh(g / 2.0) * np.array([1, 0, -1])
        )
        green = np.array([[0.0, g / 2.0, 0.0], [g / 2.0, g * g / 2.0, 0.0], [0.0, 0.0, 0.0]])
        yield compared(f"Green-Lagrange strain, shear {g:g}", kinematics.green_lagrange_strain(H), green)
        turned = kinematics.finite_rotation(H)
        yield compared(f"rotation, shear {g:g}", turned, [0.0, 0.0, -np.arctan(g / 2.0)])


def _rotation() -> Iterator[Case]:
    from unturn.verdicts.imposed import rotation_tensor

    axis = np.array([1.0, 2.0, 2.0]) / 3.0
    for degrees in (0.5, 5.0, 90.0, 179.0):
        angle = np.deg2rad(degrees)
        H = rotation_tensor(axis, angle) - np.eye(3)
        small = (np.cos(angle) - 1.0) * (np.eye(3) - np.outer(axis, axis))
        yield compared(f"small strain, {degrees:g} degrees", kinematics.strain(H), small)
        yield compared(f"rotation vector, {degrees:g} degrees", kinematics.finite_rotation(H), angle * axis)
        for name in ("green_lagrange_strain", "hencky_strain", "biot_strain", "almansi_strain"):
            found = getattr(kinematics, name)(H)
            yield compared(f"{name.replace('_', ' ')}, {degrees:g} degrees", found, np.zeros((3, 3)))


def _equivalent() -> Iterator[Case]:
    rounding = 1e-3 * _ROUNDINGS * _EPS
    pull = np.diag([1e-3, -0.5e-3, -0.5e-3])
    yield compared("isochoric pull of 1000 microstrain", kinematics.equivalent_strain(pull), 1e-3, rounding)
    shear = np.array([[0.0, 0.5e-3, 0.0], [0.5e-3, 0.0, 0.0], [0.0, 0.0, 0.0]])
    yield compared(
        "pure shear of 1000 microstrain", kinematics.equivalent_strain(shear), 1e-3 / np.sqrt(3.0), rounding
    )
    pull = np.diag([1e-3, -0.3e-3, -0.3e-3])
    yield compared(
        "pull at Poisson's ratio 0.3", kinematics.equivalent_strain(pull), 2.0 / 3.0 * 1.3e-3, rounding
    )


def _tensors() -> Floats:
    return np.random.default_rng(1985).uniform(-0.6, 0.6, (200, 3, 3))


def _eigenvalues() -> Iterator[Case]:
    e = kinematics.strain(_tensors())
    yield compared("200 tensors", kinematics.principal_strain(e), np.linalg.eigvalsh(e)[:, ::-1])


def _polar() -> Iterator[Case]:
    from scipy.linalg import logm, polar

    H = _tensors()
    H = H[np.linalg.det(np.eye(3) + H) > 0.1]
    U = np.array([polar(np.eye(3) + h)[1] for h in H])
    yield compared(f"Biot strain of {len(H)} gradients", kinematics.biot_strain(H), U - np.eye(3))
    logs = np.array([logm(u).real for u in U[:_LOGARITHMS]])
    # logm itself is good to some 1e-13 where the smallest stretch is 0.1
    hencky = kinematics.hencky_strain(H[:_LOGARITHMS])
    yield compared(f"Hencky strain of {_LOGARITHMS} gradients", hencky, logs, 1e-12)


# --- statistics and studies ---------------------------------------------------------------------------------------


def _percentiles() -> Iterator[Case]:
    values = np.random.default_rng(1996).normal(size=997)
    wanted = [0.1, 1.0, 5.0, 50.0, 95.0, 99.0, 99.9]
    numpy = np.percentile(values, wanted, method="inverted_cdf")
    yield compared("997 equal weights", weighted_percentiles(values, np.ones(997), wanted), numpy, 0.0)
    repeated = weighted_percentiles(
        np.array([3.0, 1.0, 2.0]), np.array([1.0, 1.0, 8.0]), [10.0, 50.0, 90.0, 95.0]
    )
    yield compared("weights 1, 8, 1", repeated, [1.0, 2.0, 2.0, 3.0], 0.0)


def _refinement() -> Iterator[Case]:
    found = study((5.863, 5.972, 6.063), (2.0, 1.5, 1.0))
    yield compared("order", found.order, 1.53, 0.005)
    yield compared("extrapolated value", found.extrapolated, 6.1685, 0.00005)
    yield compared("grid convergence index, percent", 100.0 * found.index, 2.2, 0.05)


_HOLZAPFEL = Source("published", "Holzapfel 2000, Nonlinear Solid Mechanics, chapter 2: simple shear")
FORMULAS: tuple[Check, ...] = (
    Check(
        "completeness", "gradients of all monomials up to the order of the element",
        Source("published", "Zienkiewicz and Taylor, The Finite Element Method: completeness"), _completeness,
    ),
    Check(
        "quadrature", "integrals of all monomials up to the degree of the rule",
        Source("published", "Abramowitz and Stegun 1964, section 25.4; the integrals in closed form"), _quadrature,
    ),
    Check("simple_shear", "stretches (sqrt(4 + g^2) +- g)/2, Hencky asinh(g/2), rotation atan(g/2)", _HOLZAPFEL,
          _simple_shear),
    Check(
        "rotation", "small strain (cos - 1), finite strains zero, rotation vector angle times axis",
        Source("published", "Rodrigues 1840"), _rotation,
    ),
    Check(
        "equivalent_strain", "isochoric pull e gives e, pure shear gives gamma/sqrt 3",
        Source("practice", "von Mises form sqrt(2/3 e':e')"), _equivalent,
    ),
    Check(
        "principal_strain", "eigenvalues of symmetric tensors",
        Source("published", "LAPACK symmetric eigenvalues, through the installed numpy"), _eigenvalues,
    ),
    Check(
        "stretch", "right stretch and its logarithm",
        Source("published", "scipy.linalg.polar and scipy.linalg.logm, as installed"), _polar,
    ),
    Check(
        "percentiles", "smallest value whose cumulative weight reaches the percentage",
        Source("published", "Hyndman and Fan 1996, The American Statistician 50, 361-365, definition 1; numpy as installed"),
        _percentiles,
    ),
    Check(
        "refinement", "three grids: order 1.53, extrapolated 6.1685, index 2.2 %",
        Source("memory", f"{CELIK.text}, the example; solved again from the equations"), _refinement,
    ),
)  # fmt: skip
"""Checks of formulas."""
