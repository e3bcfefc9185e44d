"""How far to trust values at nodes: the bound of each from the recovery that it follows from."""

from __future__ import annotations

import math

from unturn.around import bound_of
from unturn.nodal import NodeFields
from unturn.recovery import Recovered
from unturn.trust import StrainError, strain_error


class NodeErrors:
    """Bounds of measures at the shares of the nodes, computed when first asked for.

    Parameters
    ----------
    nodes
        The values at nodes.
    equivalent_poisson
        Effective Poisson ratio of the equivalent strain.
    threads
        None: all processors.
    """

    def __init__(
        self, nodes: NodeFields, equivalent_poisson: float | None = None, threads: int | None = None
    ) -> None:
        self._nodes, self._poisson, self._threads = nodes, equivalent_poisson, threads
        self._known: dict[tuple[bool, str], StrainError] = {}

    def error(self, recovered: Recovered, base: str) -> StrainError:
        """Return the error of a tensor that follows from one of the recovered gradients of the nodes."""
        key = recovered is self._nodes.recovered, base
        if key not in self._known:
            self._known[key] = strain_error(recovered, self._threads, base)
        return self._known[key]

    def plus_minus(self, measure: str, share: int, value: float) -> float:
        """Return the bound of a measure, or one of its components, at a share; NaN where none is known."""
        bound = bound_of(measure, equivalent_poisson=self._poisson)
        if bound is None or share < 0:
            return math.nan
        recovered = self._nodes.behind(measure)
        total = sum(float(self.error(recovered, base).plus_minus_shares[share]) for base in bound.bases)
        return bound.of(total, value)
