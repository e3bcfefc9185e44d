"""The bytes of one array in a file of VTK's XML family: how many there are, and the last of them.

VTK's own reader trusts the sizes a file states and ends the interpreter when they are wrong, so they are
proved here before it runs. Layouts as in the VTK file format description (VTK 9.7 documentation,
"VTK XML file format"): a length before uncompressed data, a table of block lengths before compressed data.
"""

from __future__ import annotations

import base64
import binascii
import lzma
import re
import zlib
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

# Values larger than this cannot be the length of anything that fits in memory.
_LARGEST = 2**47
_SPACE = re.compile(rb"\s")


class Unsound(Exception):
    """The bytes of an array contradict the header; the text says how."""


@dataclass(frozen=True)
class Encoding:
    """What the root element of a file says about all its arrays.

    Parameters
    ----------
    header
        Type of the lengths in front of the data, ``u4`` or ``u8`` with its byte order.
    order
        Byte order of the data, ``<`` or ``>``.
    compressor
        VTK's class name, or an empty string.
    """

    header: np.dtype[Any]
    order: str
    compressor: str


@dataclass(frozen=True)
class Stream:
    """Where the encoded bytes of an array begin, and whether they are base64 text.

    `whole` says that the text holds this array and nothing else.
    """

    data: Any
    start: int
    is_text: bool
    whole: bool

    def take(self, start: int, n: int) -> tuple[bytes, int]:
        """Return n decoded bytes that begin at an encoded position, and the encoded position after them."""
        size = _characters(n) if self.is_text else n
        if n < 0 or start + size > len(self.data):
            raise Unsound(
                f"its data end early: {size} bytes are needed and {len(self.data) - start} are left"
            )
        part = bytes(self.data[start : start + size])
        if self.is_text:
            try:
                part = base64.b64decode(part, validate=True)
            except binascii.Error as error:
                raise Unsound("its data are not base64 text") from error
        if len(part) < n:
            raise Unsound("its base64 text ends early")
        return part[:n], start + size


def decoded_size(stream: Stream, encoding: Encoding) -> int:
    """Return the number of bytes of an array once decoded, after proving that the file holds all of them."""
    return _compressed(stream, encoding)[0] if encoding.compressor else _plain(stream, encoding)


def tail(stream: Stream, encoding: Encoding, n: int) -> bytes:
    """Return the last `n` decoded bytes of an array (all, if there are fewer)."""
    if encoding.compressor:
        total, position, lengths, sizes = _compressed(stream, encoding)
        n = min(n, total)
        blocks: list[bytes] = []
        while sum(len(b) for b in blocks) < n:
            block = len(lengths) - 1 - len(blocks)
            blocks.append(_inflate(stream, encoding, position, lengths[: block + 1], int(sizes[block])))
        found = b"".join(reversed(blocks))
        return found[len(found) - n :]
    total = _plain(stream, encoding)
    width = encoding.header.itemsize
    n = min(n, total)
    if not stream.is_text:
        end = stream.start + width + total
        return bytes(stream.data[end - n : end])
    start, before = (stream.start + _characters(width), 0) if _apart(stream, width) else (stream.start, width)
    skip = (before + total - n) // 3  # whole groups of three bytes before the tail
    part, _ = stream.take(start + 4 * skip, before + total - 3 * skip)
    return part[len(part) - n :]


def _characters(n: int) -> int:
    """Return the length of n bytes as base64 text."""
    return -(-n // 3) * 4


def _apart(stream: Stream, width: int) -> bool:
    """Whether the length in front of uncompressed data is base64 text of its own, which ends in padding."""
    end = stream.start + _characters(width)
    return stream.is_text and bytes(stream.data[end - -width % 3 : end]) == b"=" * (-width % 3)


def _plain(stream: Stream, encoding: Encoding) -> int:
    width = encoding.header.itemsize
    head, _ = stream.take(stream.start, width)
    n = int(np.frombuffer(head, encoding.header)[0])
    size = _characters(width + n) if stream.is_text else width + n
    if _apart(stream, width):
        size = _characters(width) + _characters(n)
    left = len(stream.data) - stream.start
    if stream.whole and size > left and left % 4 == 0:
        return _held(stream, width)
    if size > left or (stream.whole and size != left):
        raise Unsound(f"it says it has {n} bytes, which does not fit the {left} bytes that are there")
    return n


def _held(stream: Stream, width: int) -> int:
    """Return how many bytes base64 text holds behind its length.

    Some writers put another number where the length belongs; VTK reads as many values as the mesh needs, so that what
    counts is how many are there.
    """
    text = bytes(stream.data[stream.start :])
    before = _characters(width) // 4 * 3 if _apart(stream, width) else width
    return max(0, len(text) // 4 * 3 - (len(text) - len(text.rstrip(b"="))) - before)


def _compressed(stream: Stream, encoding: Encoding) -> tuple[int, int, Any, Any]:
    """Return the decoded size, the position of the first block, and the coded and decoded block lengths."""
    width = encoding.header.itemsize
    head, _ = stream.take(stream.start, 3 * width)
    n_blocks, size, last = (int(v) for v in np.frombuffer(head, encoding.header))
    if n_blocks * width > len(stream.data) or size > _LARGEST or last > size:
        raise Unsound(f"its block table is wrong ({n_blocks} blocks of {size} bytes, the last of {last})")
    table, position = stream.take(stream.start, (3 + n_blocks) * width)
    lengths = np.frombuffer(table, encoding.header)[3:].astype(object)
    sizes = np.full(n_blocks, size, dtype=object)
    if n_blocks and last:
        sizes[-1] = last
    needed = sum(lengths)
    if stream.is_text:
        needed = _characters(needed)
    if sum(sizes) > 10_000 * needed + 2**20:  # no compressor packs that well
        raise Unsound(f"it says that {needed} bytes unpack to {sum(sizes)}")
    left = len(stream.data) - position
    if needed > left or (stream.whole and needed != left):
        raise Unsound(
            f"its blocks add up to {needed} bytes, which does not fit the {left} bytes that are there"
        )
    return int(sum(sizes)), position, lengths, sizes


def _inflate(stream: Stream, encoding: Encoding, position: int, lengths: Any, size: int) -> bytes:
    """Return the decoded last one of the blocks of these coded lengths."""
    before, coded = int(sum(lengths[:-1])), int(lengths[-1])
    if stream.is_text:
        part, _ = stream.take(position + 4 * (before // 3), before % 3 + coded)
        part = part[before % 3 :]
    else:
        part, _ = stream.take(position + before, coded)
    try:
        block = _decompress(encoding.compressor, part, size)
    except (zlib.error, lzma.LZMAError) as error:
        raise Unsound(f"its blocks cannot be decompressed ({error})") from error
    if len(block) != size:
        raise Unsound(f"one of its blocks has {len(block)} bytes instead of {size}")
    return block


def _decompress(compressor: str, part: bytes, size: int) -> bytes:
    if compressor == "vtkZLibDataCompressor":
        return zlib.decompressobj().decompress(part, size + 1)
    if compressor == "vtkLZMADataCompressor":
        return lzma.LZMADecompressor().decompress(part, size + 1)
    from vtkmodules.util.numpy_support import vtk_to_numpy
    from vtkmodules.vtkIOCore import vtkLZ4DataCompressor

    from unturn.io.vtk_arrays import quiet_vtk

    with quiet_vtk():
        block = vtkLZ4DataCompressor().Uncompress(part, len(part), size)
    return b"" if block is None else bytes(vtk_to_numpy(block).tobytes())


def count_numbers(text: bytes, dtype: np.dtype[Any]) -> int:
    """Return how many numbers an ASCII array holds, each of them proved to be one of this type.

    VTK would split a damaged number in two and shift the rest, and let one that is too large run over.

    Examples
    --------
    >>> count_numbers(b" 1 2.5e-3 nan ", np.dtype("f8"))
    3
    """
    is_real = dtype.kind == "f"
    parse: Callable[[bytes], float] = float if is_real else int
    low, high = (0, 0) if is_real else (int(np.iinfo(dtype).min), int(np.iinfo(dtype).max))
    count = start = 0
    if b"_" in text:  # Python would take it for a separator of digits
        raise Unsound("'_' is no part of a number")
    while start < len(text):
        # Pieces of about a megabyte, cut at white space, keep the list of words small.
        cut = _SPACE.search(text, start + 2**20)
        end = cut.start() if cut else len(text)
        words = text[start:end].split()
        for word in words:
            try:
                value = parse(word)
            except ValueError:
                kind = "a" if is_real else "a whole"
                raise Unsound(f"{word[:40].decode('latin-1')!r} is not {kind} number") from None
            if not (is_real or low <= value <= high):
                raise Unsound(f"{word.decode()} is out of the range of {dtype.name}")
        count += len(words)
        start = end
    return count
