"""What helps where the small strain does not hold: tried on this very result, with the number that is left over."""

from __future__ import annotations

from dataclasses import dataclass

from unturn.fields import CellFields, compute_fields
from unturn.regions import Region
from unturn.rigid import take_out
from unturn.verdict import Level, judge


@dataclass(frozen=True)
class Trial:
    """Rigid motion of a region taken out, and what is then left.

    Attributes
    ----------
    option
        What to say on the command line.
    left
        Largest error over size that is left.
    level
        The verdict then.
    """

    option: str
    left: float
    level: Level


def try_without_rigid_motion(fields: CellFields, region: Region, at: str, threads: int | None) -> Trial:
    """Return what is left of the error when the region's own best-fit rotation is taken out of it.

    Parameters
    ----------
    fields
        The fields that were judged; their model has no rigid motion taken out yet.
    region
        The region, with the cells that count.
    at, threads
        As the fields were computed.
    """
    model, _ = take_out(fields.model.only(region.cells), [(region.name, region.cells) * 2], "nonlinear")
    again = compute_fields(
        model,
        ["small_strain_error"],
        at="mean" if at == "mean" else "centroid",
        threads=threads,
        diagnose=True,
    )
    assert again.diagnostics is not None
    found = judge(again.diagnostics, region, "nonlinear")
    name = {"whole": "whole", "body": "bodies"}.get(region.origin, region.name)
    option = f"--remove-rigid {name}" if " " not in name else f"--remove-rigid '{name}'"
    return Trial(option, found.worst, found.level)
