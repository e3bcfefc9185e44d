"""What was written is read again and compared with what was meant."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from unturn.errors import UnturnError
from unturn.result import Array, Result


def check_same(meant: Result, found: Result, lost: tuple[str, ...]) -> None:
    """Raise `UnturnError` unless `found`, read back from a file, is bit for bit what was `meant`.

    An array may be missing or changed only when a sentence in `lost` names it in quotes.
    """
    _demand(_same_bits(meant.points, found.points), "the points")
    theirs = {(b.cell_type, b.connectivity.shape[1], len(b), _first(b.index)): b for b in found.blocks}
    for block in meant.blocks:
        twin = theirs.get((block.cell_type, block.connectivity.shape[1], len(block), _first(block.index)))
        same = twin is not None and np.array_equal(block.connectivity, twin.connectivity)
        _demand(
            same and twin is not None and np.array_equal(block.index, twin.index),
            f"the {block.cell_type} cells",
        )
    text = " ".join(lost)
    for kind in ("point", "cell", "field"):
        _check_arrays(kind, getattr(meant, f"{kind}_data"), getattr(found, f"{kind}_data"), text)
    for key, names in meant.component_names.items():
        is_there = key[1] in getattr(meant, f"{key[0]}_data")
        if is_there and repr(key[1]) not in text:
            _demand(
                found.component_names.get(key) == tuple(names), f"the component names of array {key[1]!r}"
            )


def _first(index: Array) -> int:
    return int(index[0]) if len(index) else -1


def _check_arrays(kind: str, meant: Mapping[str, Array], found: Mapping[str, Array], lost: str) -> None:
    for name, values in meant.items():
        if repr(name) not in lost:
            _demand(name in found and _same_bits(values, found[name]), f"{kind} array {name!r}")


def _demand(same: bool, what: str) -> None:
    if not same:
        raise UnturnError(
            f"{what} did not come back from the written file as meant, so the file was not put in place and "
            "what was there before is unchanged. Write another format, and report this as a fault."
        )


def _same_bits(a: Array, b: Array) -> bool:
    """Whether two arrays hold the same values bit for bit (NaN and minus zero included), dtype included."""
    if a.dtype.kind in "US" or b.dtype.kind in "US":
        return a.shape == b.shape and bool((a.astype(np.str_) == b.astype(np.str_)).all())
    if a.dtype.newbyteorder("=") != b.dtype.newbyteorder("=") or _rows(a) != _rows(b):
        return False
    same = np.array_equal(_bits(a), _bits(b))
    return bool(same)


def _rows(a: Array) -> tuple[int, int]:
    whole = np.atleast_1d(a)
    return len(whole), int(np.prod(whole.shape[1:], dtype=np.int64))


def _bits(a: Array) -> Array:
    native = np.ascontiguousarray(a, dtype=a.dtype.newbyteorder("=")).ravel()
    return native.view(f"u{native.dtype.itemsize}") if native.dtype.kind == "f" else native
