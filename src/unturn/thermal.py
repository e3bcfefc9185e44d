"""Free thermal strain: what the material would do unloaded, taken out of the total strain."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unturn.errors import InputError, UsageError, close_matches
from unturn.kinematics._symmetric import PAIRS, Floats
from unturn.result import Result

# Common practice, no source: steel has 1.2e-5 a degree, plastics and rubber 5e-5 to 3e-4.
MOST_EXPANSION = 1e-3
"""Coefficient above which a wrong unit is likelier than such a material."""


@dataclass(frozen=True, eq=False)
class Thermal:
    """Expansion and temperature of every cell.

    Attributes
    ----------
    expansion
        `(n_cells, 3)` coefficients along the axes of the frame, 1/temperature unit.
    nodal, cell
        Temperature at points `(n_points,)` or on cells `(n_cells,)`; one of them is set.
    reference
        Temperature at which there is no thermal strain.
    isotropic
        Whether the three coefficients are equal everywhere.
    """

    expansion: Floats
    nodal: Floats | None
    cell: Floats | None
    reference: float
    isotropic: bool

    @property
    def notes(self) -> tuple[str, ...]:
        """Sentences for the user on coefficients that no material has."""
        largest = float(np.abs(self.expansion).max(initial=0.0))
        if largest <= MOST_EXPANSION:
            return ()
        return (
            f"an expansion of {largest:g} a degree is more than any material has (up to {MOST_EXPANSION:g}): "
            "write twelve millionths as --thermal-expansion 12e-6",
        )

    def free_strain(
        self,
        rows: slice | NDArray[np.int64],
        connectivity: NDArray[np.int64],
        functions: Floats,
        axes: Floats | None,
    ) -> Floats:
        """Return the free strain `(6, m)` of some cells where the shape functions have these values `(nodes,)`."""
        if self.nodal is not None:
            temperature = np.einsum("ma,a->m", self.nodal[connectivity], functions)
        else:
            assert self.cell is not None
            temperature = self.cell[rows]
        growth = self.expansion[rows].T * (temperature - self.reference)
        if axes is None or self.isotropic:
            return np.concatenate([growth, np.zeros((3, growth.shape[1]))])
        return np.stack([(growth * axes[:, i] * axes[:, j]).sum(axis=0) for i, j in PAIRS])


def parse_thermal(result: Result, expansion: str, temperature: str, reference: float) -> Thermal:
    """Return the thermal data of a result.

    Parameters
    ----------
    result
        The result.
    expansion
        A number, three numbers ``a,b,c`` along the axes of the frame, or by region ``part=1:12e-6;part=2:23e-6``, where
        every region has a number or three.
    temperature
        Point or cell array.
    reference
        Temperature without thermal strain.

    Raises
    ------
    UsageError
        Text that is not understood, an array or region that does not exist, or cells without a coefficient.
    InputError
        No finite temperature.
    """
    values = np.full((result.n_cells, 3), np.nan)
    if ":" in expansion:
        for part in expansion.split(";"):
            name, _, numbers = part.strip().rpartition(":")
            values[_cells_of(result, name.strip())] = _numbers(numbers)
        missing = int(np.isnan(values).any(axis=1).sum())
        if missing:
            raise UsageError(
                f"--thermal-expansion {expansion!r}: {missing} cells belong to none of these regions; give every region "
                "a coefficient (0 for none)."
            )
    else:
        values[:] = _numbers(expansion)
    nodal, cell = _temperature(result, temperature)
    isotropic = bool((values == values[:, :1]).all())
    return Thermal(values, nodal, cell, reference, isotropic)


def _numbers(text: str) -> Floats:
    try:
        numbers = np.array([float(w) for w in text.split(",")])
    except ValueError:
        numbers = np.zeros(0)
    if numbers.size not in (1, 3) or not np.isfinite(numbers).all():
        raise UsageError(
            f"--thermal-expansion: {text!r} is neither one number nor three (along the axes of the frame)."
        )
    return numbers


def _cells_of(result: Result, name: str) -> NDArray[np.int64]:
    if name in result.groups:
        return np.asarray(result.groups[name])
    array, _, value = name.rpartition("=")
    if array in result.cell_data:
        try:
            return np.flatnonzero(np.asarray(result.cell_data[array]).reshape(-1) == float(value))
        except ValueError:
            pass
    known = [*result.groups, *(f"{n}=VALUE" for n in result.cell_data)]
    raise UsageError(
        f"--thermal-expansion: no region is called {name!r}.{close_matches(name, known)} Regions: {', '.join(known)}."
    )


def _temperature(result: Result, name: str) -> tuple[Floats | None, Floats | None]:
    for data, nodal in ((result.point_data, True), (result.cell_data, False)):
        if name in data:
            values = np.asarray(data[name])
            if values.size != len(values) or values.dtype.kind not in "fiu":
                raise UsageError(f"--temperature: array {name!r} is not one number a node or cell.")
            flat = values.reshape(-1).astype(np.float64)
            if not np.isfinite(flat).any():
                raise InputError(f"--temperature: array {name!r} holds no finite number.")
            return (flat, None) if nodal else (None, flat)
    known = [*result.point_data, *result.cell_data]
    raise UsageError(f"--temperature: no array is called {name!r}.{close_matches(name, known)}")
