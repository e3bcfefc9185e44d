"""Quadrature rules against closed-form integrals of every monomial."""

from __future__ import annotations

from collections.abc import Callable
from itertools import product
from math import factorial, prod

import numpy as np
import pytest

from unturn.elements import ELEMENTS, FAMILIES, Quadrature, Shape, element
from unturn.elements._quadrature import box_rule, pyramid_rule, tetra_rule, triangle_rule, wedge_rule

# Source: closed forms: integral of x^a y^b z^c is a! b! c! / (a + b + c + dim)! on the unit simplex (Stroud
# 1971, Approximate Calculation of Multiple Integrals, section 7.8); 2 / (a + 1) for even a on [-1, 1].


def _on_line(a: int) -> float:
    return 0.0 if a % 2 else 2 / (a + 1)


def _on_simplex(*powers: int) -> float:
    return prod(map(factorial, powers)) / factorial(sum(powers) + len(powers))


def _on_pyramid(a: int, b: int, c: int) -> float:
    # x = X (1 - z), y = Y (1 - z): two line integrals times a beta function in z.
    m = a + b + 2
    return _on_line(a) * _on_line(b) * factorial(m) * factorial(c) / factorial(m + c + 1)


EXACT: dict[str, Callable[..., float]] = {
    "line": _on_line,
    "quad": lambda *p: prod(map(_on_line, p)),
    "pixel": lambda *p: prod(map(_on_line, p)),
    "hexahedron": lambda *p: prod(map(_on_line, p)),
    "voxel": lambda *p: prod(map(_on_line, p)),
    "triangle": _on_simplex,
    "tetra": _on_simplex,
    "wedge": lambda a, b, c: _on_simplex(a, b) * _on_line(c),
    "pyramid": _on_pyramid,
}
SHAPES = {row.shape.name: row.shape for row in ELEMENTS.values()}
RULES: list[tuple[str, Shape, Quadrature]] = [
    *((name, row.shape, row.quadrature) for name, row in ELEMENTS.items()),
    *(
        (f"{name}_{order}", family.shape, element(name, family.n_nodes(order)).quadrature)
        for name, family in FAMILIES.items()
        for order in range(1, 7)
    ),
    *((f"line_gauss_{n}", SHAPES["line"], box_rule(1, n)) for n in range(1, 9)),
    *((f"triangle_degree_{d}", SHAPES["triangle"], triangle_rule(d)) for d in range(11)),
    *((f"tetra_degree_{d}", SHAPES["tetra"], tetra_rule(d)) for d in range(9)),
    *((f"wedge_degree_{d}", SHAPES["wedge"], wedge_rule(d, n)) for d, n in ((1, 1), (2, 2), (5, 3))),
    *((f"pyramid_gauss_{n}", SHAPES["pyramid"], pyramid_rule(n)) for n in range(1, 5)),
]
each_rule = pytest.mark.parametrize(("shape", "rule"), [r[1:] for r in RULES], ids=[r[0] for r in RULES])


def _misses(shape: Shape, rule: Quadrature, degree: int) -> float:
    powers = [p for p in product(range(degree + 1), repeat=shape.dim) if sum(p) == degree]
    return max(
        abs(rule.weights @ np.prod(rule.points ** np.array(p), axis=1) - EXACT[shape.name](*p))
        for p in powers
    )


@each_rule
def test_every_monomial_of_the_stated_degree_is_exact(shape: Shape, rule: Quadrature) -> None:
    assert max(_misses(shape, rule, d) for d in range(rule.degree + 1)) < 2e-14


@each_rule
def test_the_degree_is_not_understated(shape: Shape, rule: Quadrature) -> None:
    assert _misses(shape, rule, rule.degree + 1) > 1e-12


@each_rule
def test_weights_are_positive_and_points_inside(shape: Shape, rule: Quadrature) -> None:
    assert (rule.weights > 0).all()
    assert len(rule) == len(rule.points)
    for facet, normal in zip(shape.facets, shape.facet_normals, strict=True):
        assert ((rule.points - shape.vertices[facet[0]]) @ normal < 0).all()
    with pytest.raises(ValueError, match="read-only"):
        rule.points[0] = 0


@pytest.mark.parametrize("degree", range(11))
def test_a_rule_is_at_least_of_the_degree_asked_for(degree: int) -> None:
    assert triangle_rule(degree).degree >= degree
    assert tetra_rule(degree).degree >= degree


@pytest.mark.parametrize(
    ("name", "n"),
    [("tetra", 1), ("tetra10", 4), ("hexahedron", 8), ("hexahedron20", 8), ("triangle6", 3), ("quad8", 4)],
)
def test_usual_numbers_of_points(name: str, n: int) -> None:
    # Common practice, no source.
    assert len(ELEMENTS[name].quadrature) == n


def test_two_gauss_points_a_direction() -> None:
    # Source: Abramowitz and Stegun 1964, table 25.4: n = 2 has x = 0.57735 02691 89626, w = 1.
    rule = ELEMENTS["hexahedron20"].quadrature
    np.testing.assert_allclose(np.abs(rule.points), 0.577350269189626, atol=1e-15)
    np.testing.assert_allclose(rule.weights, 1, atol=1e-15)


def test_radon_points() -> None:
    # Source: Dunavant 1985, High degree efficient symmetrical Gaussian quadrature rules for the triangle,
    # Int. J. Numer. Meth. Eng. 21, 1129-1148, p = 5: weights 0.225, 0.132394152788506, 0.125939180544827.
    # From memory, not looked up: the digits; the monomial test above is the independent computation.
    weights = np.unique(np.round(2 * triangle_rule(5).weights, 12))
    np.testing.assert_allclose(weights, [0.125939180544827, 0.132394152788506, 0.225], atol=1e-12)


def test_four_tetrahedron_points() -> None:
    # Source: Keast 1986, Moderate-degree tetrahedral quadrature formulas: 0.1381966011250105.
    # From memory, not looked up: the digits; the monomial test above is the independent computation.
    points = tetra_rule(2).points
    np.testing.assert_allclose(
        np.unique(np.round(points, 13)), [0.1381966011250, 0.5854101966250], atol=1e-12
    )
