"""Numbers and lines of an MSH file, one after the other, from text or binary."""

from __future__ import annotations

import re
import warnings
from pathlib import Path
from typing import Literal

import numpy as np

from unturn.errors import InputError
from unturn.result import Array


class MshReader:
    """Numbers and lines of one file, one after the other, from text or binary."""

    def __init__(self, path: Path, data: bytes) -> None:
        self.path, self.data, self.at = path, data, 0
        self.binary, self.version = False, ""
        self.order: Literal["<", ">"] = "<"
        self._text: Array | None = None
        self._next = 0

    def fault(self, text: str) -> InputError:
        return InputError(
            f"{self.path}: byte {self.at}: {text}. The file is damaged or incomplete: write it again."
        )

    def line(self) -> str:
        """Return the next line that is not empty."""
        while self.at < len(self.data):
            end = self.data.find(b"\n", self.at)
            end = len(self.data) if end < 0 else end
            raw, self.at = self.data[self.at : end], end + 1
            if raw.strip():
                return raw.decode("utf-8", "replace").strip()
        raise self.fault("the file ends too early")

    def whole(self, text: str) -> int:
        """Return one count that stands on a line of its own."""
        if not re.fullmatch(r"-?\d{1,15}", text):
            raise self.fault(f"{text[:40]!r} is not a whole number")
        return int(text)

    def begin(self, name: str) -> None:
        """Prepare for `take` in a text file: all numbers up to the end of the section."""
        if self.binary:
            return
        end = self.data.find(f"$End{name}".encode(), self.at)
        if end < 0:
            raise self.fault(f"the section ${name} has no end")
        text = self.data[self.at : end].decode("ascii", "replace")
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("error")
                self._text = np.fromstring(text, sep=" ") if text.strip() else np.empty(0)
        except (ValueError, DeprecationWarning) as error:
            raise self.fault(f"the section ${name} holds something that is not a number") from error
        self._next, self.at = 0, end

    def take(self, kind: str, count: int) -> Array:
        """Return the next numbers: ``i`` 4-byte whole, ``z`` 8-byte whole, ``d`` floating-point."""
        if count < 0:
            raise self.fault("a count is below zero")
        if self.binary:
            code = {"i": "i4", "z": "u8", "d": "f8"}[kind]
            size = count * int(code[1])
            if self.at + size > len(self.data):
                raise self.fault("the file ends too early")
            raw = np.frombuffer(self.data, f"{self.order}{code}", count, self.at)
            self.at += size
            return raw.astype(np.float64 if kind == "d" else np.int64)
        assert self._text is not None
        if self._next + count > len(self._text):
            raise self.fault("a section holds too few numbers")
        found = self._text[self._next : self._next + count]
        self._next += count
        if kind == "d":
            return found
        if not np.isfinite(found).all() or (found != np.floor(found)).any() or (np.abs(found) > 2**53).any():
            raise self.fault("a section holds a number that should be whole and is not")
        return found.astype(np.int64)

    def left(self) -> int:
        """Return how many numbers of a text section are left."""
        return 0 if self._text is None else len(self._text) - self._next

    def end(self, name: str) -> None:
        """Read the line that ends a section."""
        found = self.line()
        if found != f"$End{name}":
            raise self.fault(f"$End{name} was expected and {found[:40]!r} found")


def read_records(
    reader: MshReader, fields: list[tuple[str, ...] | tuple[str, str, tuple[int, ...]]], count: int
) -> Array:
    dtype = np.dtype(fields).newbyteorder(reader.order)
    if count < 0 or reader.at + count * dtype.itemsize > len(reader.data):
        raise reader.fault("the file ends too early")
    rows: Array = np.frombuffer(reader.data, dtype, count, reader.at)
    reader.at += count * dtype.itemsize
    return rows
