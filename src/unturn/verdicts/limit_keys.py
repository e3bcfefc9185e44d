"""The keys of one ``[[limits]]`` table."""

from __future__ import annotations

from unturn import toml_kinds as k
from unturn.kinematics._finite import BASES
from unturn.toml_kinds import REQUIRED, Key
from unturn.verdicts.statistic import STATISTICS
from unturn.verdicts.units import UNITS
from unturn.written_regions.kinds import WHOLE

BASE_NAMES = ("small", *(b.replace("_", "-") for b in BASES))
PLACES = ("centroid", "mean", "nodes", "surface")
ACCEPTED = ("plus-minus", "singular", "mid-surface", "turning")

_BOUND = k.either_kind(k.NUMBER, k.table_kind("a table of numbers by region", k.NUMBER))
_STEPS = k.either_kind(
    k.choice_kind(("all", "last")), k.POSITION, k.list_kind("a list of whole numbers from 0", k.POSITION)
)
_TABLE = k.Kind("a table", lambda value: value)

LIMIT_KEYS = (
    Key("id", k.TEXT, "stable name, unique in the file", REQUIRED),
    Key("title", k.TEXT, "in words; default: made from the rest", ""),
    Key("measure", k.TEXT, "a measure of `unturn strain`; or else `array`"),
    Key("base", k.choice_kind(BASE_NAMES), "strain that the measure is of", "small"),
    Key("array", k.TEXT, "an array of the file, instead of a measure"),
    Key("component", k.TEXT, "name of a component, or `magnitude` of a vector", ""),
    Key("frame", k.TEXT, "axes of the components, as `--frame` has them"),
    Key("at", k.choice_kind(PLACES), "where values are taken; default: `centroid`, of an array where it is"),
    Key("region", k.either_kind(k.TEXT, k.TEXTS), "name of a region, or a list: one verdict each", WHOLE),
    Key("statistic", k.choice_kind(tuple(STATISTICS)), "the number that is held against the bound", REQUIRED),
    Key("percent", k.number_kind("a number above 0, up to 100", lambda q: 0 < q <= 100), "of a percentile"),
    Key("above", k.NUMBER, "threshold of `share` and `count`, in `unit`"),
    Key("below", k.NUMBER, "threshold of `share` and `count` on the other side, in `unit`"),
    Key("at_most", _BOUND, "upper bound: a number, or a table of one number a region"),
    Key("at_least", _BOUND, "lower bound, likewise"),
    Key("at_most_array", k.TEXT, "array of the file with an upper bound for each value, in `unit`"),
    Key("at_least_array", k.TEXT, "array of the file with a lower bound for each value, in `unit`"),
    Key("warn_above", k.NUMBER, "warning level within the upper bound"),
    Key("warn_below", k.NUMBER, "warning level within the lower bound"),
    Key("unit", k.choice_kind(tuple(UNITS)), "unit of bounds, levels and thresholds", REQUIRED),
    Key("stored_in", k.choice_kind(tuple(UNITS)), "unit in which `array` holds its values; default: `unit`"),
    Key("plus_minus", k.NOT_NEGATIVE, "how far the values of `array` may be off, in `unit`"),
    Key("steps", _STEPS, "which steps of a series; counted from 0", "all"),
    Key("accept", k.list_kind("a list", k.choice_kind(ACCEPTED)), "what is consented to", ()),
    Key("reason", k.TEXT, "why there is this limit", REQUIRED),
    Key("source", k.TEXT, "where its bound comes from: code, clause, edition, test", REQUIRED),
    Key("waiver", _TABLE, "who lets it be exceeded, why and until when"),
)  # fmt: skip
"""Keys of ``[[limits]]``."""

WAIVER_KEYS = (
    Key("owner", k.TEXT, "who answers for it", REQUIRED),
    Key("reason", k.TEXT, "why", REQUIRED),
    Key("expires", k.DATE, "last day on which it holds", REQUIRED),
)
"""Keys of ``waiver``."""
