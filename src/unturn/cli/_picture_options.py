"""The options of a picture on the command line: declared from the table of what a picture can be asked for."""

from __future__ import annotations

import inspect
from collections.abc import Callable
from typing import Annotated, Any, get_type_hints

import typer

from unturn import toml_kinds as k
from unturn.cli._shared import declare
from unturn.picture_keys import NAMES, PICTURE_KEYS


def picture_options(command: Callable[..., None]) -> Callable[..., None]:
    """Give a command every option that a picture can be asked for, and the command its `asked`: value by key."""

    def with_options(**given: Any) -> None:
        asked = {key.name: given.pop(key.name) for key in PICTURE_KEYS}
        command(asked={n: v for n, v in asked.items() if v is not None and v != []}, **given)

    hints = get_type_hints(command, localns={"StrainOptions": object}, include_extras=True)
    declared: list[tuple[str, Any, Any]] = []
    for own in inspect.signature(command).parameters.values():
        if own.name != "asked":
            declared.append((own.name, hints[own.name], own.default))
            continue
        for key in PICTURE_KEYS:
            text = key.meaning[:1].upper() + key.meaning[1:] + "."
            flag = "--" + key.name.replace("_", "-")
            kind: Any = str | None
            names, metavar = [flag], key.metavar or None
            if key.kind is k.BOOLEAN:
                kind, names = bool | None, [f"{flag}/--no-{flag[2:]}"]
            elif key.kind is NAMES:
                kind, text = list[str] | None, text[:-1] + " (repeatable)."
            declared.append(
                (key.name, Annotated[kind, typer.Option(*names, metavar=metavar, help=text)], None)
            )
    declare(with_options, command, declared)
    return with_options
