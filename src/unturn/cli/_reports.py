"""Where the findings of a command go: options, files and exit status that `check`, `compare` and `patchtest` share."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

if TYPE_CHECKING:
    from unturn.verdicts.finding import Report

Junit = Annotated[
    Path | None,
    typer.Option(
        "--junit", metavar="FILE.xml", help="Also write JUnit XML for a build server ('-': stdout)."
    ),
]
Markdown = Annotated[
    Path | None,
    typer.Option(
        "--markdown", metavar="FILE.md", help="Also write a table for a merge request ('-': stdout)."
    ),
]
Csv = Annotated[
    Path | None,
    typer.Option("--csv", metavar="FILE.csv", help="Also write a table for a table program ('-': stdout)."),
]
AllowUndecided = Annotated[
    bool, typer.Option("--allow-undecided", help="What is undecided does not make the exit status 1.")
]


@dataclass(frozen=True)
class ReportPlaces:
    """The files that were asked for; ``-`` is the standard output, and the text then goes to the standard error."""

    json: Path | None = None
    junit: Path | None = None
    markdown: Path | None = None
    csv: Path | None = None

    def check(self, inputs: Sequence[Path], *others: Path | None) -> None:
        """Refuse places that cannot be written to, before anything is computed; `others` are further outputs.

        Raises
        ------
        UsageError
            See `check_places`.
        """
        from unturn.cli._output import check_places

        check_places((*self._asked.values(), *others), inputs)

    @property
    def _asked(self) -> dict[str, Path | None]:
        return {"json": self.json, "junit": self.junit, "markdown": self.markdown, "csv": self.csv}

    def put(self, report: Report, at_least: int = 0) -> None:
        """Print the report, write the files that were asked for, and end the command with its exit status.

        Parameters
        ----------
        report
            What to tell.
        at_least
            An exit status that stands for something worse than a finding.

        Raises
        ------
        typer.Exit
            Always.
        """
        from unturn.cli._output import write_json, write_text
        from unturn.verdicts.writers import WRITERS, json_report, text_report

        typer.echo(text_report(report), err="-" in map(str, self._asked.values()))
        for name, place in self._asked.items():
            if place is None:
                continue
            if name == "json":
                write_json(json_report(report), place)
            else:
                write_text(WRITERS[name].write(report), place)
        raise typer.Exit(max(report.exit_status, at_least))
