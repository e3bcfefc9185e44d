"""The difference of one array between two results, place by place, and what it comes to in a region."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from unturn.kinematics._symmetric import Floats
from unturn.verdicts.tolerances import Tolerance

Ints = NDArray[np.int64]
Where = Literal["point", "cell", "field"]


@dataclass(frozen=True, eq=False)
class Pair:
    """One array of both results, at the places of the reference.

    Parameters
    ----------
    name
        Of the array.
    label
        What findings call it: ``point u``, ``cell strain``, ``computed strain``.
    where
        Whether the places are points, cells or just positions.
    ours, theirs
        `(n, components)` of the result and of the reference: numbers as float64, or whole numbers and texts as they are.
    left_open
        `(n, components)`: by how much the storage of both leaves a difference open.
    components
        Their names; empty where they have none.
    unit
        Of the numbers; empty where it is not known.
    exact
        Whole numbers and texts: equal or not.
    outside
        `(n,)` places that the result does not have; they are not compared.
    known
        `(n,)` places where one of the two has a value at all; None: everywhere.
    """

    name: str
    label: str
    where: Where
    ours: NDArray[Any]
    theirs: NDArray[Any]
    left_open: Floats
    components: tuple[str, ...] = ()
    unit: str = ""
    exact: bool = False
    outside: NDArray[np.bool_] | None = None
    known: NDArray[np.bool_] | None = None


@dataclass(frozen=True)
class Extreme:
    """A largest value, the place and the number of the component that hold it (-1: there is none)."""

    value: float = 0.0
    place: int = -1
    component: int = -1


@dataclass(frozen=True)
class RegionDifference:
    """What the difference of an array comes to in a region.

    Attributes
    ----------
    places, outside, unknown
        How many places; how many of them the result does not have; where both are NaN.
    outside_share
        Share of the volume that is outside.
    one_sided, first_one_sided
        Places where one of the two is NaN and the other is not, and the first of them (-1: none).
    beyond, share
        Places beyond the tolerance, and their share of the volume.
    worst, allowed
        The difference that is largest against what is allowed there, and what is.
    largest
        The largest difference above what storage leaves open.
    relative
        The same against the size of the reference at the place.
    norm
        The largest norm of the difference.
    l2, l2_relative
        Root of the volume-weighted mean square of the norm of the difference, and its ratio to that of the reference.
    size
        The largest size of the reference.
    """

    places: int
    outside: int
    outside_share: float
    unknown: int
    one_sided: int
    first_one_sided: int
    beyond: int
    share: float
    worst: Extreme
    allowed: float
    largest: Extreme
    relative: Extreme
    norm: float
    l2: float
    l2_relative: float
    size: float


class ArrayDifference:
    """The difference of an array at every place."""

    def __init__(self, pair: Pair, tolerance: Tolerance) -> None:
        self.pair, self.tolerance = pair, tolerance
        n = len(pair.theirs)
        self.outside = np.zeros(n, dtype=bool) if pair.outside is None else pair.outside
        self.by_norm = tolerance.by == "norm" and pair.theirs.shape[1] > 1 and not pair.exact
        if pair.exact:
            self._exact()
        else:
            self._numbers()

    def _exact(self) -> None:
        differs = (self.pair.ours != self.pair.theirs).any(axis=1)
        self.signed = np.where(differs, 1.0, 0.0)[:, None]
        self.amount, self.left_open = self.signed, np.zeros_like(self.signed)
        self.size = np.zeros(len(differs))
        self.one_sided = self.unknown = np.zeros(len(differs), dtype=bool)
        self.norm = self.amount[:, 0]

    def _numbers(self) -> None:
        ours, theirs = self.pair.ours, self.pair.theirs
        with np.errstate(invalid="ignore", over="ignore"):
            if self.tolerance.sign == "free":
                ours = ours * np.where((ours * theirs).sum(axis=1, keepdims=True) < 0, -1.0, 1.0)
            missing, gone = np.isnan(theirs), np.isnan(ours)
            difference = np.where(ours == theirs, 0.0, ours - theirs)
            difference[missing & gone] = 0.0
            self.one_sided = (missing != gone).any(axis=1) & ~self.outside
            self.unknown = missing.all(axis=1) & gone.all(axis=1)
            self.signed = difference
            self.size = self._norm(theirs)
            self.norm = self._norm(difference)
            self.left_open = self.pair.left_open
            if self.by_norm:
                difference, self.left_open = self.norm[:, None], self._norm(self.left_open)[:, None]
            self.amount = np.abs(difference)

    def _norm(self, values: Floats) -> Floats:
        norm: Floats = np.sqrt(np.nansum(self._shear * values**2, axis=1))
        return norm

    @cached_property
    def _shear(self) -> Floats:
        """Weights of the components: the shear of a symmetric tensor counts twice."""
        names = self.pair.components
        if len(names) == 6 and self.pair.theirs.shape[1] == 6 and all(len(name) >= 2 for name in names):
            return np.array([1.0 if name[0] == name[1] else 2.0 for name in names])
        return np.ones(self.pair.theirs.shape[1])

    def component(self, number: int) -> str:
        """Return the name of a component; empty for a scalar."""
        if self.by_norm:
            return "norm"
        names, count = self.pair.components, self.pair.theirs.shape[1]
        if count == 1 or number < 0 or self.pair.exact:
            return ""
        return names[number] if len(names) == count else f"component {number + 1} of {count}"

    def allowed(self, places: Ints, largest: float) -> Floats:
        """Return how much each component `(m, components)` may differ at some places."""
        t = self.tolerance
        if self.pair.exact:
            return np.zeros((len(places), 1))
        size = np.nan_to_num(self.size[places])
        stated: Floats = t.absolute + t.relative * size + t.of_largest * largest
        return np.maximum(self.left_open[places], stated[:, None])

    def in_region(self, places: Ints, weights: Floats) -> RegionDifference:
        """Return what the difference comes to.

        Parameters
        ----------
        places
            Positions of the region's points or cells.
        weights
            `(4, k)` volume of these places by dimension of the cells; shares are taken in each dimension for itself, and the
            largest counts.
        """
        outside = self.outside[places]
        here = places[~outside]
        sizes = self.size[here][np.isfinite(self.size[here])]
        largest_size = float(sizes.max(initial=0.0))
        allowed, amount = self.allowed(here, largest_size), self.amount[here]
        one_sided = self.one_sided[here]
        numbers = np.where(np.isnan(amount), 0.0, amount)
        over = numbers > allowed
        beyond = over.any(axis=1) | one_sided
        real = np.where(numbers > self.left_open[here], numbers, 0.0)
        size = self.size[here][:, None]
        with np.errstate(invalid="ignore", divide="ignore"):
            ratio = np.where(numbers > 0, numbers / allowed, 0.0)
            relative = np.where((size > 0) & np.isfinite(size) & (real > 0), real / size, 0.0)
        row, column = _position(ratio, numbers)
        l2, l2_relative = self._l2(here, weights[:, ~outside])
        return RegionDifference(
            places=len(places),
            outside=int(outside.sum()),
            outside_share=_share(outside, weights),
            unknown=int(self.unknown[here].sum()),
            one_sided=int(one_sided.sum()),
            first_one_sided=int(here[np.argmax(one_sided)]) if one_sided.any() else -1,
            beyond=int(beyond.sum()),
            share=_share(beyond, weights[:, ~outside]),
            worst=_extreme(here, numbers, row, column),
            allowed=float(allowed[row, column]) if row >= 0 else 0.0,
            largest=_extreme(here, real, *_position(real, real)),
            relative=_extreme(here, relative, *_position(relative, relative)),
            norm=float(np.nan_to_num(self.norm[here], posinf=math.inf).max(initial=0.0)),
            l2=l2,
            l2_relative=l2_relative,
            size=largest_size,
        )

    def _l2(self, places: Ints, weights: Floats) -> tuple[float, float]:
        heavy = np.flatnonzero(weights.sum(axis=1) > 0)
        weight = weights[heavy[-1]] if len(heavy) else np.ones(len(places))
        known = np.isfinite(self.norm[places]) & np.isfinite(self.size[places]) & ~self.unknown[places]
        total = float(weight[known].sum())
        if not total > 0:
            return 0.0, 0.0
        with np.errstate(over="ignore"):
            mean = math.sqrt(float((weight * self.norm[places] ** 2)[known].sum()) / total)
            size = math.sqrt(float((weight * self.size[places] ** 2)[known].sum()) / total)
        return mean, mean / size if size > 0 else (math.inf if mean > 0 else 0.0)


def _position(key: Floats, amount: Floats) -> tuple[int, int]:
    """Return row and column of the largest key; among infinite ones, of the largest amount; (-1, -1) without any."""
    if not key.size:
        return -1, -1
    largest = key.max()
    flat = (
        int(np.argmax(np.where(key == largest, amount, -1.0))) if math.isinf(largest) else int(np.argmax(key))
    )
    return flat // key.shape[1], flat % key.shape[1]


def _extreme(here: Ints, values: Floats, row: int, column: int) -> Extreme:
    if row < 0 or not values[row, column] > 0:
        return Extreme()
    return Extreme(float(values[row, column]), int(here[row]), column)


def _share(mask: NDArray[np.bool_], weights: Floats) -> float:
    """Return the largest share, over the dimensions, of the weight that is marked; by number where nothing weighs."""
    if not mask.any():
        return 0.0
    shares = [float(w[mask].sum() / w.sum()) for w in weights if w.sum() > 0]
    known = [share for share in shares if math.isfinite(share)]
    return max(known, default=0.0) or float(mask.mean())
