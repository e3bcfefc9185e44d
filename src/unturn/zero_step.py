"""Displacements measured from a step of the series: what small and finite measures are then of."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from unturn.displacement import find_displacement
from unturn.errors import UsageError
from unturn.fields import CellDiagnostics, CellFields
from unturn.gradient import NodalFields
from unturn.model import Model
from unturn.result import Result


def zeroed(
    model: Model, zero: Result | None, displacement: str | None = None, scale: float = 1.0
) -> tuple[Model, Model | None]:
    """Return the model for small measures, and the one for finite measures when it differs.

    Parameters
    ----------
    model
        Of this step.
    zero
        The step from which displacements are measured; None for the undeformed state.
    displacement, scale
        Name and scale of the displacement that were asked for.

    Raises
    ------
    UsageError
        The steps have other numbers of points.
    """
    if zero is None:
        return model, None
    start = find_displacement(zero, displacement or model.displacement.name, scale).values
    if len(start) != len(model.points):
        raise UsageError(
            f"the zero step has {len(start)} points and this step {len(model.points)}: they cannot be subtracted."
        )
    normal = None if model.plane is None else model.plane.normal
    if normal is not None:
        start = start.copy()
        start[:, normal] = 0.0
    moved = model.displacement.values - start
    if normal is not None:
        moved[:, normal] = 0.0
    since = replace(model.displacement, values=moved)
    small = replace(model, displacement=since, fields=NodalFields(model.points, moved))
    points = model.points + start
    return small, replace(small, points=points, fields=NodalFields(points, moved))


def judged_from_zero(small: CellFields, finite: CellFields) -> CellDiagnostics | None:
    """Return the diagnostics of the small strain of `u - u_N`, judged by the motion since the zero step.

    Where the zero step itself is turned, the gradient of `u - u_N` is that of no motion. The strain since then is the
    stretch of `F F_N^-1`; what the small strain has more or less of than that, by its norm, is its error at least.
    """
    ours, real = small.diagnostics, finite.diagnostics
    if ours is None or real is None:
        return ours
    e = small.arrays["strain"].T
    size = np.sqrt(np.nansum(e[:3] ** 2, axis=0) + 2.0 * np.nansum(e[3:] ** 2, axis=0))
    error = np.maximum(real.error, np.abs(size - real.stretch))
    return replace(
        ours, error=error, stretch=real.stretch, angle=real.angle, det_f=real.det_f, stretches=real.stretches
    )


def check_zero_temperature(zero: Result, name: str, reference: float) -> None:
    """Refuse a zero step whose temperature is not the reference: the free strain since then is not that of `T - T0`."""
    values = zero.point_data.get(name, zero.cell_data.get(name))
    if values is None or not len(values):
        return
    low, high = float(np.nanmin(values)), float(np.nanmax(values))
    if max(abs(low - reference), abs(high - reference)) > 1e-6 * max(1.0, abs(reference)):
        raise UsageError(
            f"--reference-temperature {reference:g}: with --zero-step it must be the temperature of that step, whose "
            f"{name!r} is {low:g} to {high:g}. Where it is not one number, the free strain since then is not known here."
        )
