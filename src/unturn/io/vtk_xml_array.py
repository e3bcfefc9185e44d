"""The arrays of a file of VTK's XML family, proved one by one."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Any
from xml.etree import ElementTree

import numpy as np

from unturn.errors import InputError
from unturn.io.vtk_xml_data import Encoding, Stream, Unsound, count_numbers, decoded_size, tail

# Source: VTK 9.7, vtkXMLDataReader and vtkXMLWriter: the names of number types in files.
TYPES = {
    "Int8": "i1", "UInt8": "u1", "Int16": "i2", "UInt16": "u2", "Int32": "i4", "UInt32": "u4",
    "Int64": "i8", "UInt64": "u8", "Float32": "f4", "Float64": "f8",
}  # fmt: skip


@dataclass(frozen=True)
class XmlArrays:
    """A file under proof, and what is known of its arrays."""

    path: str
    encoding: Encoding
    appended: Stream | None

    def fail(self, what: str) -> InputError:
        return InputError(
            f"{self.path}: {what}. The file is damaged, incomplete or was written wrongly: write it again."
        )

    def count(self, element: ElementTree.Element, name: str, default: int | None = None) -> int:
        text = element.get(name, None if default is None else str(default))
        if text is None or not re.fullmatch(r"\s*\d{1,15}\s*", text):
            raise self.fail(f"{name} is {text!r} instead of a number")
        return int(text)

    def check_array(self, array: ElementTree.Element, n_rows: int, where: str) -> None:
        """Prove that an array has exactly the values that `n_rows` rows need."""
        name = array.get("Name", "")
        width = self.count(array, "NumberOfComponents", 1)
        if width < 1:
            raise self.fail(f"{where}array {name!r} has {width} components")
        needed = n_rows * width
        if array.get("type") == "String":
            found = int(np.count_nonzero(self.decode(array, None, where, "u1") == 0))
            unit = "strings"
        elif array.get("type") == "Bit":
            needed, found, unit = -(-needed // 8), self.values(array, where, "u1"), "bytes of bits"
            if array.get("format", "ascii") == "ascii":
                needed, unit = n_rows * width, "bits"
        else:
            found, unit = self.values(array, where), "values"
        if found != needed:
            raise self.fail(
                f"{where}array {name!r} has {found} {unit}; {needed} are needed ({n_rows} x {width})"
            )

    def dtype(self, array: ElementTree.Element) -> np.dtype[Any]:
        kind = array.get("type", "")
        if kind not in TYPES:
            raise self.fail(f"array {array.get('Name')!r} has the unknown number type {kind!r}")
        return np.dtype(self.encoding.order + TYPES[kind])

    def values(self, array: ElementTree.Element, where: str, dtype: str | None = None) -> int:
        """Return the number of values an array holds."""
        stream = self.stream(array, where)
        kind = np.dtype(dtype) if dtype else self.dtype(array)
        try:
            if isinstance(stream, bytes):
                return count_numbers(stream, kind)
            n_bytes = decoded_size(stream, self.encoding)
        except Unsound as error:
            raise self.fail(f"{where}array {array.get('Name')!r}: {error}") from error
        if n_bytes % kind.itemsize:
            raise self.fail(
                f"{where}array {array.get('Name')!r} has {n_bytes} bytes, no multiple of {kind.itemsize}"
            )
        return n_bytes // kind.itemsize

    def decode(
        self, array: ElementTree.Element, n_last: int | None, where: str, dtype: str | None = None
    ) -> Any:
        """Return the last values of an array, or all of them for `n_last` None."""
        kind = np.dtype(dtype) if dtype else self.dtype(array)
        stream = self.stream(array, where)
        try:
            if isinstance(stream, bytes):
                words = stream.split() if n_last is None else stream.rsplit(maxsplit=n_last)[-n_last:]
                return np.array(words, dtype=np.float64).astype(np.int64)
            n = decoded_size(stream, self.encoding) if n_last is None else n_last * kind.itemsize
            found = tail(stream, self.encoding, n)
            return np.frombuffer(found[: len(found) // kind.itemsize * kind.itemsize], kind)
        except (Unsound, ValueError) as error:
            raise self.fail(f"{where}array {array.get('Name')!r}: {error}") from error

    def stream(self, array: ElementTree.Element, where: str) -> Stream | bytes:
        """Return the encoded bytes of an array, or its text when it is ASCII."""
        form = array.get("format", "ascii").strip().lower()
        if form == "appended":
            if self.appended is None:
                raise self.fail(
                    f"{where}array {array.get('Name')!r} lies in appended data that are not there"
                )
            offset = self.count(array, "offset")
            start = self.appended.start + offset
            return Stream(self.appended.data, start, self.appended.is_text, False)
        text = (array.text or "") + "".join(child.tail or "" for child in array)
        if form == "ascii":
            return text.encode()
        if form == "binary":
            return Stream(b"".join(text.encode().split()), 0, True, True)
        raise self.fail(f"{where}array {array.get('Name')!r} has the unknown format {form!r}")
