"""Plots over the steps of a series, as SVG: lines told apart by mark and dash, so that they survive grey print."""

from __future__ import annotations

import io
import warnings
from collections.abc import Sequence
from typing import Any

from unturn.errors import MissingExtraError
from unturn.report.content import Curve, Series, Shown
from unturn.report.words import outward, shown_value, unit_name
from unturn.verdicts.wording import clean

# from dark to light, each with its own mark and dash
_STYLES = (
    ("#1f2d50", "o", "-"),
    ("#a4442d", "s", "--"),
    ("#3d7a6a", "^", "-."),
    ("#8a6a1f", "D", ":"),
    ("#7a7f8c", "v", "-"),
)
_SETTINGS = {"svg.hashsalt": "unturn", "svg.fonttype": "path", "font.family": "DejaVu Sans", "font.size": 8}


def check_plotting() -> None:
    """Refuse a computer without the plotting library, before anything is computed.

    Raises
    ------
    MissingExtraError
        It is not installed.
    """
    try:
        import matplotlib  # noqa: F401
    except ImportError:
        raise MissingExtraError(
            "plots over the steps of a series need matplotlib: pip install 'unturn[report]'; or leave them out of the "
            "plan: steps = false."
        ) from None


def plot_series(series: Series) -> list[Shown]:
    """Return a plot for each number of the regions over the steps."""
    by_label: dict[tuple[str, str], list[Curve]] = {}
    for curve in series.curves:
        by_label.setdefault((curve.label, curve.unit), []).append(curve)
    return [
        _plot(label, unit, curves, series, k) for k, ((label, unit), curves) in enumerate(by_label.items())
    ]


def _plot(label: str, unit: str, curves: Sequence[Curve], series: Series, position: int) -> Shown:
    import matplotlib as mpl
    from matplotlib.figure import Figure

    title = f"{label[:1].upper()}{label[1:]}"
    with mpl.rc_context(), warnings.catch_warnings():
        mpl.rcdefaults()  # nobody's own settings change a report
        mpl.rcParams.update(_SETTINGS)
        # a letter that the font lacks is a box here; the table below and the words beside it have the name
        warnings.filterwarnings("ignore", "Glyph .* missing from font", UserWarning)
        figure = Figure(figsize=(4.4, 2.9), layout="constrained")
        axes: Any = figure.subplots()
        for curve, (colour, mark, dash) in zip(curves, _STYLES):
            axes.plot(
                series.times, [shown_value(v, unit) for v in curve.values], color=colour, marker=mark, linestyle=dash,
                markersize=4, linewidth=1.4, label=_plain(curve.region),
            )  # fmt: skip
        axes.set_xlabel("time, or what the file counts its steps by")
        axes.set_ylabel(f"{title}\n{unit_name(unit)}")
        axes.grid(True, color="#d9dbe0", linewidth=0.6)
        axes.spines[["top", "right"]].set_visible(False)
        axes.legend(frameon=False, fontsize=8)
        held = io.BytesIO()
        figure.savefig(held, format="svg", metadata={"Date": None, "Creator": None})
    return Shown(
        f"steps-{position + 1}",
        title,
        _told(curves),
        _alt(title, unit, curves, series),
        held.getvalue(),
        "svg",
    )


def _plain(text: str) -> str:
    """Return a name that the plotting library takes for no formula, nor for a line that is to be hidden."""
    return " " + clean(text).replace("$", r"\$")


def _told(curves: Sequence[Curve]) -> str:
    return "; ".join(f"{c.region}: {c.label} from {_ends(c)}" for c in curves) + "."


def _ends(curve: Curve) -> str:
    first, last = (outward(v, curve.which, curve.unit) for v in (curve.values[0], curve.values[-1]))
    return f"{first} to {last} {unit_name(curve.unit)}"


def _alt(title: str, unit: str, curves: Sequence[Curve], series: Series) -> str:
    times = f"{series.times[0]:g} to {series.times[-1]:g}"
    return f"Plot of {title} in {unit_name(unit)} over {len(series.times)} steps, {times}. {_told(curves)}"
