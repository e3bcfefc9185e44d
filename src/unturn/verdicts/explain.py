"""What a limits file would test, in words, without a result."""

from __future__ import annotations

import datetime
import textwrap

from unturn.pipeline import StrainOptions
from unturn.summary import CAUTION, equivalent_form
from unturn.verdicts.conclude import title_of
from unturn.verdicts.limit import Limit, Limits, Waiver
from unturn.verdicts.preconditions import PRECONDITIONS
from unturn.verdicts.statistic import STATISTICS
from unturn.verdicts.units import unit_words
from unturn.verdicts.wording import clean, number
from unturn.written_regions.kinds import region_words

_LINE = 110
_ALL_DIGITS = 17
_CONSENT = {
    "plus-minus": "the value is judged without its plus and minus",
    "singular": "a peak that is suspected singular is taken as it is",
    "mid-surface": "the strain of mid-surfaces and axes is what is meant",
    "turning": "the small strain is taken as it is where it does not hold",
}


def explain_limits(limits: Limits, today: datetime.date) -> str:
    """Return in words what would be tested, without a line end."""
    lines = [
        f"{clean(limits.path)}: {limits.written} limits"
        + (f", {clean(limits.title)}" if limits.title else "")
    ]
    lines += _section("how the result is read", _reading(limits))
    lines += _section("what it must be before any limit counts", _conditions(limits))
    regions = [f"{s.name}: {region_words(s)}{_least(s.cells_at_least)}" for s in limits.regions.values()]
    lines += _section("regions", regions or ["whole only"])
    lines.append("limits")
    for limit in limits.limits:
        lines += _limit(limit, today)
    return "\n".join([*lines, CAUTION])


def _section(title: str, sentences: list[str]) -> list[str]:
    return [title, *(line for s in sentences for line in _wrapped(s, "  "))]


def _wrapped(text: str, indent: str) -> list[str]:
    return textwrap.wrap(
        clean(text), _LINE, initial_indent=indent, subsequent_indent=indent + "  ", break_on_hyphens=False
    )


def _least(cells: int) -> str:
    return f"; at least {cells} cells" if cells > 1 else ""


def _reading(limits: Limits) -> list[str]:
    options, plain = limits.options, StrainOptions()
    said = [f"solve: stated {options.solve}" if options.solve != "unknown" else "solve: not stated"]
    stated = [n for n in limits.settings["reading"] if hasattr(options, n)]
    said += [f"{n} = {getattr(options, n)}" for n in stated if getattr(options, n) != getattr(plain, n)]
    if limits.surface_poisson is not None:
        said.append(f"surface_poisson = {limits.surface_poisson}")
    if limits.zero_step is not None:
        said.append(f"displacements are measured from step {limits.zero_step}")
    return [*said, f"equivalent = {equivalent_form(options.equivalent_poisson)}"]


def _conditions(limits: Limits) -> list[str]:
    said = []
    if limits.options.displacement is not None:
        said.append(f"its displacement is {limits.options.displacement!r}")
    for key, value in limits.required.items():
        words = PRECONDITIONS[key].words(value)
        if PRECONDITIONS[key].test is None and said:
            said[-1] += f", {words}"
        else:
            said.append(words)
    return said or ["nothing is required"]


def _limit(limit: Limit, today: datetime.date) -> list[str]:
    steps = {"all": "all steps", "last": "last step"}.get(str(limit.steps)) or (
        "step " + ", ".join(str(s) for s in limit.steps)
    )
    lines = [f"  {limit.id}", *_wrapped(f"{limit.title or title_of(limit)}; {steps}", "    ")]
    if limit.title:
        lines += _wrapped(title_of(limit), "    ")
    lines += _wrapped(bounds_words(limit), "    ")
    lines += [line for a in sorted(limit.accept) for line in _wrapped(f"accepted: {_CONSENT[a]}", "    ")]
    if limit.plus_minus is not None:
        lines += _wrapped(
            f"stated plus and minus: {_full(limit.plus_minus)} {unit_words(limit.unit)}", "    "
        )
    lines += _wrapped(f"reason: {limit.reason}", "    ") + _wrapped(f"source: {limit.source}", "    ")
    if limit.waiver is not None:
        lines += _wrapped(_waiver(limit.waiver, today), "    ")
    return lines


def _full(value: float) -> str:
    return number(value, digits=_ALL_DIGITS)


def bounds_words(limit: Limit) -> str:
    """Return the bounds and levels of a limit in words."""
    unit = unit_words(STATISTICS[limit.statistic].unit_of(limit))
    within = f", in {unit}" if unit else ""
    said = []
    if limit.at_least is not None:
        said.append(f"at least {_full(limit.at_least)} {unit}".rstrip())
    if limit.at_most is not None:
        said.append(f"at most {_full(limit.at_most)} {unit}".rstrip())
    if limit.at_least_array is not None:
        said.append(f"at least what the array {limit.at_least_array!r} holds there{within}")
    if limit.at_most_array is not None:
        said.append(f"at most what the array {limit.at_most_array!r} holds there{within}")
    text = "must be " + " and ".join(said)
    levels = (("below", limit.warn_below), ("above", limit.warn_above))
    warned = [f"{side} {_full(level)}" for side, level in levels if level is not None]
    return text + (f"; warning {' or '.join(warned)}" if warned else "")


def _waiver(waiver: Waiver, today: datetime.date) -> str:
    state = "waived" if waiver.holds(today) else f"its waiver has expired on {today.isoformat()}"
    return f"{state}: until {waiver.expires.isoformat()} by {waiver.owner}, {waiver.reason}"
