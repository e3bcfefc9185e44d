"""Comparing results from Python: of results in memory, and of files."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields, replace
from os import PathLike
from typing import Any

from unturn.errors import UsageError, close_matches
from unturn.io import open_result
from unturn.pipeline import StrainOptions
from unturn.result import Result
from unturn.verdicts.compare import OUTSIDE, CompareOptions, compare_states
from unturn.verdicts.compare_series import Step, compare_opened
from unturn.verdicts.finding import Report
from unturn.verdicts.inputs import hashed_inputs
from unturn.verdicts.tolerances import Tolerances, parse_tolerances, read_tolerances

Stated = Mapping[str, Any] | str | PathLike[str] | None


@dataclass(frozen=True, eq=False)
class Comparison:
    """What a comparison of two results found.

    Attributes
    ----------
    report
        Its findings; `passed` says whether all are within tolerance.
    differences
        The reference with the difference of each array, result less reference, as ``NAME_difference``.
    """

    report: Report
    differences: Result

    @property
    def passed(self) -> bool:
        """Whether nothing is beyond tolerance, and nothing undecided."""
        return self.report.passed


def compare(
    result: Result,
    reference: Result,
    *,
    absolute: float = 0.0,
    relative: float = 0.0,
    tolerances: Stated = None,
    arrays: Sequence[str] = (),
    regions: Sequence[str] = (),
    measures: Sequence[str] | None = None,
    same_mesh: bool = False,
    outside: float = OUTSIDE,
    **strain: Any,
) -> Comparison:
    """Return the differences of a result from a reference, array by array and region by region.

    Parameters
    ----------
    result, reference
        As read, or made in memory; on one mesh, on one with other numbers, or on different meshes: values are then taken
        at the points and cell middles of the reference, by the shape functions of the result's own elements.
    absolute, relative
        Tolerances of every array: in its unit, and as a share of the reference's size at the place.
    tolerances
        A TOML file, or tables that say what it says, for more: by array, of the largest value, of a share of the volume.
        `docs/compare.md` has its keys.
    arrays
        Only these arrays; none: all that both have.
    regions
        Only these regions of the reference.
    measures
        Measures that are computed on both sides and compared too, ``["all"]`` or names as in `unturn.strain`; None: none.
    same_mesh
        Another mesh is a difference beyond tolerance.
    outside
        Share of the volume that may lie outside of the other mesh before the verdict is undecided.
    **strain
        Options of `unturn.strain` for the measures: displacement, base, solve, plane ...

    Returns
    -------
    Comparison
        Findings, and the differences as arrays of the reference's mesh.

    Raises
    ------
    UsageError
        Unknown arrays, regions, measures or options, or tolerances that are none.
    InputError
        A result that cannot be used, or nothing to compare.

    Notes
    -----
    A place is within tolerance where the difference is at most `absolute + relative * size`, or at most what the stored
    precision of both values leaves open. Without tolerances every difference above the stored precision counts.

    Examples
    --------
    >>> import numpy as np
    >>> from unturn import CellBlock, Result, compare
    >>> points = np.array([[0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1.0]])
    >>> block = CellBlock("tetra", np.array([[0, 1, 2, 3]]), np.array([0]))
    >>> old, new = (Result(points, (block,), {"u": points * x}) for x in (1e-3, 1.02e-3))
    >>> compare(new, old, relative=0.01).passed, compare(new, old, relative=0.03).passed
    (False, True)
    """
    options = _options(absolute, relative, tolerances, arrays, regions, measures, same_mesh, outside, strain)
    found = compare_states(result, reference, options)
    return Comparison(Report("compare", found.findings, notes=found.notes), found.differences)


def compare_files(
    result: str | PathLike[str],
    reference: str | PathLike[str],
    step: Step = "last",
    *,
    absolute: float = 0.0,
    relative: float = 0.0,
    tolerances: Stated = None,
    arrays: Sequence[str] = (),
    regions: Sequence[str] = (),
    measures: Sequence[str] | None = None,
    same_mesh: bool = False,
    outside: float = OUTSIDE,
    **strain: Any,
) -> Report:
    """Return what the comparison of two files found; see `compare`, and `compare_opened` for the step."""
    options = _options(absolute, relative, tolerances, arrays, regions, measures, same_mesh, outside, strain)
    found = compare_opened(open_result(result), open_result(reference), step, options)
    inputs = (*hashed_inputs("result", str(result)), *hashed_inputs("reference", str(reference)))
    return Report("compare", found.findings, inputs, notes=found.notes)


def _options(
    absolute: float,
    relative: float,
    tolerances: Stated,
    arrays: Sequence[str],
    regions: Sequence[str],
    measures: Sequence[str] | None,
    same_mesh: bool,
    outside: float,
    strain: Mapping[str, Any],
) -> CompareOptions:
    known = [f.name for f in fields(StrainOptions) if f.name not in ("measures", "surface")]
    for name in strain:
        if name not in known:
            raise UsageError(f"compare has no option {name!r}.{close_matches(name, known)}")
    for name, value in (("arrays", arrays), ("regions", regions)):
        if isinstance(value, str):
            raise UsageError(f"{name}={value!r} is one text; give a list of names: [{value!r}].")
    stated = Tolerances() if tolerances is None else (
        parse_tolerances(tolerances) if isinstance(tolerances, Mapping) else read_tolerances(str(tolerances))
    )  # fmt: skip
    over = {"absolute": absolute, "relative": relative}
    checked = parse_tolerances({"default": {k: v for k, v in over.items() if v != 0.0}})
    given = {k: getattr(checked.default, k) for k, v in over.items() if v != 0.0}
    return CompareOptions(
        replace(stated, default=replace(stated.default, **given)),
        tuple(arrays),
        tuple(regions),
        measures is not None,
        StrainOptions(measures=measures, **strain),
        same_mesh,
        outside,
    )
