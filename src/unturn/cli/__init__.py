"""The command line: parse, call, print, exit code."""

from unturn.cli._main import main

__all__ = ["main"]
