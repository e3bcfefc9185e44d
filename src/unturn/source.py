"""Where a formula or a number comes from."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

Kind = Literal["published", "practice", "derived", "memory"]


@dataclass(frozen=True, slots=True)
class Source:
    """The origin of a formula or number.

    Parameters
    ----------
    kind
        ``published``: standard, handbook, paper or general-purpose library;
        ``practice``: common practice, no source;
        ``derived``: derived here from stated definitions;
        ``memory``: a published value written down without the publication at hand.
    text
        Author, year, title, section; or the derivation in one line.
    """

    kind: Kind
    text: str
