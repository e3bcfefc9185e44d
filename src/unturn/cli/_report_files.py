"""The files beside a report: its images and, as CSV, its tables."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from unturn.cli._output import check_places
from unturn.errors import UsageError

if TYPE_CHECKING:
    from unturn.report.content import Content
    from unturn.report.parts import Section


def write_folder(
    content: Content, sections: Sequence[Section], folder: Path, inputs: Sequence[Path]
) -> list[Path]:
    """Write every image, the values of those that were asked for, and every table into a folder, and return the files.

    Raises
    ------
    UsageError
        Two of them have one name, or one would replace an input.
    """
    from unturn.io._atomic import replacing
    from unturn.report.parts import Table, table_csv

    named = [(image.file, image.image) for image in content.images]
    named += [(f"{image.name}.csv", image.table) for image in content.images if image.table is not None]
    tables = [part for section in sections for part in section.parts if isinstance(part, Table)]
    named += [(f"table-{t.name}.csv", table_csv(t).encode("utf-8", "backslashreplace")) for t in tables]
    held: dict[str, bytes] = {}
    for name, data in named:
        if name.casefold() in map(str.casefold, held):
            raise UsageError(
                f"--folder: two files would be called {name}; give the picture another name in the plan."
            )
        held[name] = data
    files = [folder / name for name in held]
    check_places(files, inputs)
    for path, data in zip(files, held.values()):
        with replacing(path) as work:
            work.write_bytes(data)
    return files


def report_line(content: Content, target: Path) -> str:
    """Return what was written, and how it stands, in a line."""
    from unturn.verdicts.wording import counts_text

    n, images = len(content.summary.regions), len(content.images)
    parts = [f"wrote {target}: {n} region{'s' * (n != 1)}, {images} image{'s' * (images != 1)}"]
    if content.limits is not None:
        parts.append(f"limits: {counts_text(content.limits)}")
    if content.versus is not None and content.versus.judged:
        parts.append(f"tolerances: {counts_text(content.versus.findings)}")
    return "; ".join(parts)
