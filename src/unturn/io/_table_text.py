"""The text of a displacement table: lines, separators, names of columns, numbers."""

from __future__ import annotations

import codecs
import re
from collections.abc import Callable, Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from unturn.errors import InputError

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

# Common practice, no source: names that tables give to node numbers and displacements.
_NODE_HEADS = (
    "node", "nodeid", "nodeno", "nodenumber", "nodenr", "nodelabel", "nodetag", "id", "nid", "no", "nr",
    "number", "label", "grid", "gridid", "point", "pointid", "globalid", "n",
)  # fmt: skip
_AXIS_HEADS = tuple(
    tuple(form.format(letter, number) for form in (
        "u{0}", "u{1}", "uu{1}", "d{0}", "t{1}", "u{0}displacement", "disp{0}", "disp{1}", "displ{0}",
        "displ{1}", "displacement{0}", "displacement{1}", "{0}displacement", "{0}disp", "dof{1}",
    ))
    for letter, number in (("x", "1"), ("y", "2"), ("z", "3"))
)  # fmt: skip
_COUNTED_HEADS = tuple(
    tuple(f"{stem}{k}" for stem in ("u", "disp", "displ", "displacement")) for k in range(3)
)
_COMMENTS = ("#", "%", "//", "**", "$", "!")
_NUMBER = re.compile(r"[-+]?(\d+\.?\d*|\.\d+)([eEdD][-+]?\d{1,3}|[-+]\d{3})?|[-+]?(nan|inf)", re.IGNORECASE)


def table_lines(path: Path, where: str) -> list[tuple[int, str]]:
    """Return the lines that count, with their numbers."""
    try:
        raw = path.read_bytes()
    except OSError as error:
        raise InputError(f"{where}: cannot be opened: {error.strerror}.") from error
    wide = raw.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE))
    try:
        text = raw.decode("utf-16" if wide else "utf-8-sig")
    except UnicodeDecodeError:
        text = raw.decode("latin-1")
    if "\0" in text:
        raise InputError(f"{where}: holds binary data and is not a text table. Export it as CSV.")
    rows = [(number, line.strip(" \r")) for number, line in enumerate(text.split("\n"), 1)]
    rows = [(n, line) for n, line in rows if line.strip() and not line.lstrip().startswith(_COMMENTS)]
    if not rows:
        raise InputError(f"{where}: the table is empty. Write it again.")
    return rows


def separator(rows: Sequence[tuple[int, str]], where: str) -> tuple[Callable[[str], list[str]], bool]:
    """Return how to split a line, and whether numbers have a decimal comma; judged by the last line."""
    number, line = rows[-1]
    marks = [mark for mark in (";", "\t") if mark in line]
    comma = any("," in text for _, text in rows[1:] or rows)
    if marks:
        return lambda text: _cleaned(text.split(marks[0])), comma
    if re.search(r",\s|\s,", line) or ("," in line and not re.search(r"\S\s+\S", line)):
        return lambda text: _cleaned(text.split(",")), False
    if comma and not all(is_number(word, True) for word in line.split()):
        raise InputError(
            f"{where}, line {number}: it is not clear whether commas separate columns or are decimal commas. "
            "Separate the columns by semicolons."
        )
    return lambda text: _cleaned(text.split()), comma


def _cleaned(words: list[str]) -> list[str]:
    words = [word.strip().strip('"').strip() for word in words]
    while len(words) > 1 and not words[-1]:
        words.pop()
    return words


def is_number(word: str, decimal_comma: bool) -> bool:
    return _NUMBER.fullmatch(word.replace(",", ".") if decimal_comma else word) is not None


def _value(word: str, decimal_comma: bool) -> float | None:
    if not is_number(word, decimal_comma):
        return None
    text = (word.replace(",", ".") if decimal_comma else word).lower().replace("d", "e")
    # Fortran drops the letter when the exponent has three digits: 1.0-100.
    text = re.sub(r"(?<=[\d.])([-+]\d{3})$", r"e\1", text)
    return float(text)


def _plain(word: str) -> str:
    """Return a column name without case, unit, blanks and signs."""
    without_unit = re.sub(r"[\[(].*?[\])]", "", word.lower())
    return re.sub(r"[^a-z0-9]", "", without_unit)


def named_columns(head: list[str], where: str) -> tuple[int, tuple[int, ...]]:
    plain = [_plain(word) for word in head]
    nodes = [k for k, word in enumerate(plain) if word in _NODE_HEADS]
    from_zero = any(word in _COUNTED_HEADS[0] for word in plain)
    heads = _COUNTED_HEADS if from_zero else _AXIS_HEADS
    axes = [[k for k, word in enumerate(plain) if word in names] for names in heads]
    listed = ", ".join(repr(word) for word in head)
    if len(nodes) != 1:
        found = "no column" if not nodes else f"{len(nodes)} columns"
        raise InputError(
            f"{where}: {found} of the table could be the node number; the columns are {listed}. "
            "Call one of them 'node'."
        )
    if len(axes[0]) != 1 or len(axes[1]) != 1 or len(axes[2]) > 1:
        raise InputError(
            f"{where}: the displacement columns are not clear; the columns are {listed}. "
            "Call them 'ux', 'uy' and 'uz' (x, y and z alone may be coordinates)."
        )
    return nodes[0], tuple(k for found in axes for k in found)


def unnamed_columns(width: int, where: str) -> tuple[int, tuple[int, ...]]:
    if width not in (3, 4):
        raise InputError(
            f"{where}: a table without column names has a node number and two or three displacements; "
            "this has "
            f"{width} columns. Put the names 'node ux uy uz' above them."
        )
    return 0, tuple(range(1, width))


def read_numbers(
    body: Sequence[tuple[int, str]],
    split: Callable[[str], list[str]],
    decimal_comma: bool,
    columns: tuple[int, ...],
    width: int,
    where: str,
) -> Floats:
    table = np.empty((len(body), len(columns)))
    for row, (line, text) in enumerate(body):
        words = split(text)
        if len(words) != width:
            raise InputError(
                f"{where}, line {line}: {len(words)} columns; the lines before have {width}. "
                "The table is damaged or uses another separator here."
            )
        for place, column in enumerate(columns):
            value = _value(words[column], decimal_comma)
            if value is None:
                raise InputError(
                    f"{where}, line {line}, column {column + 1}: {words[column]!r} is not a number."
                )
            table[row, place] = value
    return table


def whole_numbers(column: Floats, body: Sequence[tuple[int, str]], node: int, where: str) -> Integers:
    with np.errstate(invalid="ignore"):
        wrong = ~np.isfinite(column) | (column != np.floor(column)) | (column < 0) | (column > 2**53)
    if wrong.any():
        row = int(np.flatnonzero(wrong)[0])
        raise InputError(
            f"{where}, line {body[row][0]}, column {node + 1}: the node number {column[row]:g} is not "
            "a whole "
            "number. If node numbers stand in another column, call it 'node'."
        )
    numbers = column.astype(np.int64)
    order = np.argsort(numbers, kind="stable")
    again = order[1:][numbers[order][1:] == numbers[order][:-1]]
    if len(again):
        row = int(again.min())
        raise InputError(
            f"{where}, line {body[row][0]}: node {numbers[row]} stands there a second time; "
            f"{len(again)} lines repeat a node. Give each node one line (one step, one load case)."
        )
    return numbers
