"""What changes over the steps of a series: the extremes of each step, and plots of them."""

from __future__ import annotations

from unturn.io import ResultFile
from unturn.pictures.plan import Plan
from unturn.report.content import Curve, Extreme, Series, extremes_of
from unturn.report.plots import plot_series
from unturn.report.side import series_options, summary_options, zero_of
from unturn.stepwise import Stepwise
from unturn.summary import Summary, foremost, summarise
from unturn.trusted import Which


def over_steps(opened: ResultFile, plan: Plan, summary: Summary, threads: int | None) -> Series:
    """Return the extremes of every step of a series.

    Parameters
    ----------
    opened, plan
        The result and how it is read.
    summary
        Of the step of the report: its foremost regions are followed.
    threads
        None: all processors.

    Raises
    ------
    InputError
        A step that cannot be used.
    """
    assert opened.steps is not None
    names = [r.region.name for r in foremost(summary.regions)]
    stepwise = Stepwise(series_options(opened, plan, threads), zero_of(opened, plan))
    each: list[dict[tuple[str, str, Which], Extreme]] = []
    for number in range(len(opened.steps)):
        computed = stepwise.compute(opened.read(number), diagnose=True)
        found = extremes_of(summarise(computed, summary_options(plan, computed, full=False), threads))
        each.append({(e.region, e.array, e.which): e for e in found})
    curves = [
        Curve(*_named(key, each), tuple(step[key].value if key in step else float("nan") for step in each))
        for key in dict.fromkeys(k for step in each for k in step)
        if key[0] in names
    ]
    series = Series(tuple(range(len(each))), tuple(float(t) for t in opened.steps), tuple(curves))
    return Series(series.steps, series.times, series.curves, tuple(plot_series(series)))


def _named(
    key: tuple[str, str, Which], each: list[dict[tuple[str, str, Which], Extreme]]
) -> tuple[str, str, str, Which, str]:
    """Return region, label, array, which extreme and unit of a curve."""
    first = next(step[key] for step in each if key in step)
    return key[0], first.label, key[1], key[2], first.unit
