"""What a report is asked for, beside its pictures: the keys of a table ``[report]``."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from unturn import toml_kinds as k
from unturn.toml_kinds import Key

REPORT_KEYS = (
    Key("number", k.TEXT, "number of the report; stands at the foot of every printed page", ""),
    Key("revision", k.TEXT, "its revision", ""),
    Key("project", k.TEXT, "the machine, product or order it belongs to", ""),
    Key("prepared", k.TEXT, "who prepared it; without a name an empty field to sign", ""),
    Key("checked", k.TEXT, "who checked it", ""),
    Key("approved", k.TEXT, "who approved it", ""),
    Key("remarks", k.TEXTS, "sentences that stand under the title block", ()),
    Key("regions", k.TEXTS, "report these regions only; the peak of everything else is told", ()),
    Key("measures", k.TEXTS, "arrays that are computed, as in unturn strain; default: strain, rotation, equivalent_strain, "
        "principal_strain", ()),
    Key("at", k.choice_kind(("centroid", "mean", "nodes", "surface")), "where values live; extremes at nodes or on free "
        "surfaces are told beside those of the cells", "centroid"),
    Key("mode", k.BOOLEAN, "a mode shape: no verdict, values per unit amplitude", False),
    Key("limits", k.TEXT, "a limits file, beside the plan", ""),
    Key("reference", k.TEXT, "a result to compare with, beside the plan: the revision before", ""),
    Key("tolerances", k.TEXT, "tolerances of the comparison, a file beside the plan; without it differences are told, "
        "not judged", ""),
    Key("side_by_side", k.TEXTS, "names of the pictures that are also drawn of the reference, in one colour range; "
        "default: the first", ()),
    Key("steps", k.BOOLEAN, "of a series, plots over its steps", True),
)  # fmt: skip
"""Keys of ``[report]``."""


@dataclass(frozen=True)
class ReportWish:
    """A report that is asked for: a value for each of `REPORT_KEYS`."""

    number: str = ""
    revision: str = ""
    project: str = ""
    prepared: str = ""
    checked: str = ""
    approved: str = ""
    remarks: tuple[str, ...] = ()
    regions: tuple[str, ...] = ()
    measures: tuple[str, ...] = ()
    at: Literal["centroid", "mean", "nodes", "surface"] = "centroid"
    mode: bool = False
    limits: str = ""
    reference: str = ""
    tolerances: str = ""
    side_by_side: tuple[str, ...] = ()
    steps: bool = True
