"""What a page is made of: sections with text, tables and figures."""

from __future__ import annotations

import csv
import io
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Literal

from unturn.report.content import Shown
from unturn.verdicts.writers import csv_field

Tone = Literal["", "good", "open", "bad"]


@dataclass(frozen=True)
class Cell:
    """A cell of a table: what is shown, the value behind it for CSV (None: the text), and how it weighs."""

    text: str
    value: Any = None
    tone: Tone = ""


@dataclass(frozen=True)
class Table:
    """A table; the first cell of each row is its heading, `numeric` are the columns that stand to the right.

    `name` is that of its CSV file.
    """

    name: str
    caption: str
    head: Sequence[str]
    rows: Sequence[Sequence[Cell]]
    numeric: frozenset[int] = frozenset()
    kind: Literal["table"] = "table"


@dataclass(frozen=True)
class Said:
    """Sentences, each a paragraph or an entry of a list."""

    sentences: Sequence[str]
    kind: Literal["text", "list", "warning"] = "text"


@dataclass(frozen=True)
class Terms:
    """Names and what stands for each."""

    rows: Sequence[tuple[str, str]]
    kind: Literal["terms"] = "terms"


@dataclass(frozen=True)
class Outcome:
    """Verdicts in a few words: what, the word, a tone, one sentence."""

    rows: Sequence[tuple[str, str, Tone, str]]
    kind: Literal["outcome"] = "outcome"


@dataclass(frozen=True)
class Figures:
    """Images with captions: each for itself, small ones beside each other, or wide ones where the screen has room."""

    images: Sequence[Shown]
    layout: Literal["each", "small", "wide"] = "each"
    kind: Literal["figures"] = "figures"


Part = Table | Said | Terms | Outcome | Figures


@dataclass(frozen=True)
class Section:
    """A section: a name for links, its heading, what it holds."""

    name: str
    heading: str
    parts: Sequence[Part]


def table_csv(table: Table) -> str:
    """Return a table as CSV (RFC 4180): values with every digit where there are any, else the text."""
    out = io.StringIO()
    writer = csv.writer(out)
    writer.writerow(table.head)
    for row in table.rows:
        writer.writerow([csv_field(cell.text if cell.value is None else cell.value) for cell in row])
    return out.getvalue()
