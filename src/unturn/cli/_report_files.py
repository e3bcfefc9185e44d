"""The files beside a report: its images and, as CSV, its tables."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from unturn.cli._output import check_places

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
        One of them would replace an input.
    """
    from unturn.io._atomic import replacing
    from unturn.report.parts import Table, table_csv

    held: dict[str, bytes] = {}
    for image in content.images:
        held[f"{image.name}.{image.kind}"] = image.image
        if image.table is not None:
            held[f"{image.name}.csv"] = image.table
    for section in sections:
        for part in section.parts:
            if isinstance(part, Table):
                held[f"table-{part.name}.csv"] = table_csv(part).encode("utf-8", "backslashreplace")
    files = [folder / name for name in held]
    check_places(files, inputs)
    for path, data in zip(files, held.values()):
        with replacing(path) as work:
            work.write_bytes(data)
    return files


def report_line(content: Content, target: Path) -> str:
    """Return what was written, and how it stands, in a line."""
    n, images = len(content.summary.regions), len(content.images)
    parts = [f"wrote {target}: {n} region{'s' * (n != 1)}, {images} image{'s' * (images != 1)}"]
    if content.limits is not None:
        parts.append("limits met" if content.limits.passed else "limits NOT all met")
    if content.versus is not None and content.versus.judged:
        parts.append("within tolerance" if content.versus.findings.passed else "NOT within tolerance")
    return ", ".join(parts)
