"""The project's documents as tests see them: their fenced blocks, tables and links, and how an example is run."""

from __future__ import annotations

import contextlib
import io
import math
import re
import shlex
import sys
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any
from unittest.mock import patch

ROOT = Path(__file__).parents[1]
PAGES = [ROOT / "README.md", *sorted((ROOT / "docs").glob("*.md"))]
EVERY_PAGE = [*PAGES, ROOT / "DEVELOPERS.md", ROOT / "CHANGELOG.md", ROOT / "sample_meshes" / "README.md"]

_STATUS = re.compile(r"\s+# exit status (\d+)$")
_NUMBER = re.compile(r"(?<![\w.])[-+]?\d+(?:\.\d+)?(?:e[-+]?\d+)?(?![\w])")
_PLACE = re.compile(r"\b(cell|element) \d+")


@dataclass(frozen=True)
class Block:
    """A fenced block: what follows its fence, its text, and the line it starts on."""

    info: str
    text: str
    line: int


def blocks(page: Path) -> list[Block]:
    """Return the fenced blocks of a page."""
    found: list[Block] = []
    inside: list[str] | None = None
    info, start = "", 0
    for number, line in enumerate(page.read_text(encoding="utf-8").splitlines(), 1):
        if inside is None and line.startswith("```"):
            info, start, inside = line[3:].strip(), number, []
        elif inside is not None and line == "```":
            found.append(Block(info, "\n".join(inside), start))
            inside = None
        elif inside is not None:
            inside.append(line)
    assert inside is None, f"{page.name}:{start}: the block is not closed"
    return found


def tables(page: Path) -> Iterator[tuple[list[str], list[list[str]]]]:
    """Yield the heading and the rows of each table of a page."""
    lines = [*page.read_text(encoding="utf-8").splitlines(), ""]
    start = None
    for number, line in enumerate(lines):
        if line.startswith("|"):
            start = number if start is None else start
        elif start is not None:
            rows = [[c.strip() for c in row.strip("|").split(" | ")] for row in lines[start:number]]
            yield rows[0], rows[2:]
            start = None


def table(page: Path, *heading: str) -> list[list[str]]:
    """Return the rows of the one table whose heading starts with these words."""
    found = [rows for head, rows in tables(page) if head[: len(heading)] == list(heading)]
    assert len(found) == 1, f"{page.name}: {len(found)} tables start with {heading}"
    return found[0]


def spoken(command: str) -> list[str]:
    """Return the arguments of one `unturn` command line."""
    name, *arguments = shlex.split(command)
    assert name == "unturn", f"only unturn commands are run: {command}"
    return arguments


def run(arguments: list[str]) -> tuple[int, str]:
    """Run the program in this process; return its exit status and what it printed."""
    from unturn.cli import main

    said = io.StringIO()
    status: Any = 0
    with (
        patch.object(sys, "argv", ["unturn", *arguments]),
        contextlib.redirect_stdout(said),
        contextlib.redirect_stderr(said),
    ):
        try:
            main()
        except SystemExit as stop:
            status = stop.code or 0
    return int(status), said.getvalue()


@dataclass
class Session:
    """The examples of one page, run one after the other in the working folder."""

    page: Path
    said: str | None = None
    names: dict[str, Any] = field(default_factory=lambda: {"__name__": "example"})

    def play(self, block: Block) -> None:
        """Run a block, or compare a `text` block with what the block before it printed."""
        where = f"{self.page.name}:{block.line}"
        if block.info == "sh":
            self.said = "".join(self._command(line, where) for line in block.text.splitlines())
        elif block.info == "python":
            said = io.StringIO()
            with contextlib.redirect_stdout(said):
                exec(compile(block.text, where, "exec"), self.names)
            self.said = said.getvalue()
        else:
            assert block.info == "text", f"{where}: the block is neither run nor compared: {block.info!r}"
            assert self.said is not None, f"{where}: there is no example before this output"
            difference = compare(block.text, self.said)
            assert not difference, f"{where}: {difference}\n--- printed:\n{self.said}"
            self.said = None

    @staticmethod
    def _command(line: str, where: str) -> str:
        expected = _STATUS.search(line)
        status, said = run(spoken(_STATUS.sub("", line)))
        assert status == (int(expected[1]) if expected else 0), (
            f"{where}: exit status {status}: {line}\n{said}"
        )
        return said


def compare(shown: str, printed: str) -> str:
    """Return where a shown output departs from a printed one; empty when it does not.

    A line of three dots stands for any lines. Spaces count once. Numbers agree to one percent, or when both are noise
    below 1e-9; which of several equal cells holds an extreme is rounding, so cell numbers and positions are not
    compared.
    """
    parts = [part.strip("\n").splitlines() for part in re.split(r"^\.\.\.$", shown, flags=re.MULTILINE)]
    lines = printed.strip("\n").splitlines()
    at = 0
    for number, part in enumerate(parts):
        last = number == len(parts) - 1
        if number == 0:
            starts = [0]
        elif last:
            starts = [len(lines) - len(part)]
        else:
            starts = list(range(at, len(lines) - len(part) + 1))
        fits = [s for s in starts if s >= at and _all_same(part, lines[s : s + len(part)])]
        if not fits or (last and fits[0] + len(part) != len(lines)):
            return _first_difference(part, lines[max(at, starts[0] if starts else at) :])
        at = fits[0] + len(part)
    return ""


def _all_same(shown: list[str], printed: list[str]) -> bool:
    return len(shown) == len(printed) and all(_same(a, b) for a, b in zip(shown, printed))


def _first_difference(shown: list[str], printed: list[str]) -> str:
    for a, b in zip(shown, printed):
        if not _same(a, b):
            return f"shown:   {a}\nprinted: {b}"
    return f"{len(shown)} lines are shown where {len(printed)} are printed"


def _same(shown: str, printed: str) -> bool:
    a, b = (_PLACE.sub(r"\1", " ".join(line.split())) for line in (shown, printed))
    if _NUMBER.sub("#", a) != _NUMBER.sub("#", b):
        return False
    if a.startswith("at x, y, z"):
        return True
    pairs = zip(_NUMBER.findall(a), _NUMBER.findall(b))
    return all(math.isclose(float(x), float(y), rel_tol=0.01, abs_tol=1e-9) for x, y in pairs)
