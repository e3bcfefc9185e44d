"""What a DataItem states about its numbers, and numbers in binary files."""

from __future__ import annotations

import bz2
import re
import zlib
from typing import Any, Literal

import numpy as np

from unturn.io.xdmf_hdf import beside
from unturn.io.xdmf_xml import Node, attribute, fault
from unturn.result import Array

TYPES: dict[tuple[str, int], str] = {
    ("float", 4): "f4",
    ("float", 8): "f8",
    ("int", 1): "i1",
    ("int", 2): "i2",
    ("int", 4): "i4",
    ("int", 8): "i8",
    ("uint", 1): "u1",
    ("uint", 2): "u2",
    ("uint", 4): "u4",
    ("uint", 8): "u8",
    ("char", 1): "i1",
    ("uchar", 1): "u1",
    ("short", 2): "i2",
    ("ushort", 2): "u2",
}
_ONE_SIZE = {"char": 1, "uchar": 1, "short": 2, "ushort": 2}


def dimensions(node: Node) -> tuple[int, ...] | None:
    """Return ``Dimensions`` as numbers, None when the element has none."""
    text = attribute(node, "Dimensions")
    if not text:
        return None
    words = text.split()
    if len(words) > 32 or not all(re.fullmatch(r"\d{1,15}", w) for w in words):
        raise fault(node, f"Dimensions={text!r} is not a list of whole numbers.")
    return tuple(int(w) for w in words)


def needed_dimensions(node: Node) -> tuple[int, ...]:
    shape = dimensions(node)
    if shape is None:
        raise fault(node, "a DataItem without Dimensions: its size cannot be checked.")
    return shape


def number_type(node: Node) -> tuple[np.dtype[Any], bool]:
    kind = attribute(node, "NumberType", "DataType", default="Float")
    precision = attribute(node, "Precision")
    size = precision or str(_ONE_SIZE.get(kind.lower(), 4))
    code = TYPES.get((kind.lower(), int(size) if re.fullmatch(r"\d{1,3}", size) else 0))
    if code is None:
        raise fault(node, f"NumberType={kind!r} with Precision={size!r} is no number type of XDMF.")
    return np.dtype(code), bool(precision)


def read_binary(node: Node) -> Array:
    shape = needed_dimensions(node)
    dtype, _ = number_type(node)
    endian = attribute(node, "Endian", default="Native").lower()
    orders: dict[str, Literal["=", "<", ">"]] = {"native": "=", "little": "<", "big": ">"}
    order = orders.get(endian)
    seek = attribute(node, "Seek", default="0")
    packing = attribute(node, "Compression", default="Raw").lower()
    if order is None or not re.fullmatch(r"\d{1,18}", seek) or packing not in ("raw", "zlib", "bzip2"):
        raise fault(node, f"Endian={endian!r}, Seek={seek!r}, Compression={packing!r} is not understood.")
    path = beside(node, (node.text or "").strip(), "binary file")
    n_bytes = int(np.prod(shape, dtype=object)) * dtype.itemsize
    try:
        with open(path, "rb") as stream:
            size = path.stat().st_size
            if packing == "raw":
                if int(seek) + n_bytes > size:
                    raise fault(
                        node,
                        f"{path.name} has {size} bytes; {n_bytes} bytes from byte {seek} on are asked for.",
                    )
                stream.seek(int(seek))
                raw = stream.read(n_bytes)
            else:
                stream.seek(min(int(seek), size))
                raw = _unpack(stream.read(), packing, n_bytes, node)
    except OSError as error:
        raise fault(node, f"{path} cannot be read: {error.strerror}. Check its permissions.") from error
    if len(raw) != n_bytes:
        raise fault(node, f"{path.name} gave {len(raw)} bytes; {n_bytes} were asked for.")
    return np.frombuffer(raw, dtype=dtype.newbyteorder(order)).astype(dtype).reshape(shape)


def _unpack(packed: bytes, packing: str, n_bytes: int, node: Node) -> bytes:
    try:
        if packing == "zlib":
            return zlib.decompressobj().decompress(packed, n_bytes + 1)
        return bz2.BZ2Decompressor().decompress(packed, n_bytes + 1)
    except (zlib.error, OSError, EOFError) as error:
        raise fault(node, f"the {packing} data cannot be unpacked: {error}.") from error
