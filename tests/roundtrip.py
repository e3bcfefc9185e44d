"""What every format must pass: written and read back, a result is the same bit for bit."""

from __future__ import annotations

import hashlib
from pathlib import Path

import numpy as np

import unturn.io
from unturn.result import Array, Result


def same_bits(a: Array, b: Array) -> bool:
    """Whether two arrays agree in type, shape and every bit, NaN and minus zero included."""
    if a.dtype.kind == "U" or b.dtype.kind == "U":
        return a.dtype.kind == b.dtype.kind and a.shape == b.shape and bool((a == b).all())
    return a.dtype == b.dtype and a.shape == b.shape and a.tobytes() == b.tobytes()


def assert_same(meant: Result, found: Result, *, ordered: bool = True) -> None:
    """Assert that two results are the same: mesh, arrays, types, order, component names and groups.

    `ordered` False: the format has an order of arrays of its own.
    """
    assert same_bits(meant.points, found.points), "points"
    assert [(b.cell_type, b.connectivity.shape) for b in meant.blocks] == [
        (b.cell_type, b.connectivity.shape) for b in found.blocks
    ]
    for ours, theirs in zip(meant.blocks, found.blocks, strict=True):
        assert np.array_equal(ours.connectivity, theirs.connectivity), ours.cell_type
        assert np.array_equal(ours.index, theirs.index), ours.cell_type
    for kind in ("point_data", "cell_data", "field_data"):
        a, b = getattr(meant, kind), getattr(found, kind)
        assert (list(a) == list(b)) if ordered else (set(a) == set(b)), f"{kind}: {list(a)} and {list(b)}"
        for name in a:
            assert same_bits(a[name], b[name]), f"{kind} {name!r}: {a[name].dtype} and {b[name].dtype}"
    assert dict(meant.component_names) == dict(found.component_names)
    assert set(meant.groups) == set(found.groups)
    for name in meant.groups:
        assert np.array_equal(meant.groups[name], found.groups[name]), f"group {name!r}"
    assert set(meant.left_out) == set(found.left_out)
    for reason in meant.left_out:
        assert np.array_equal(meant.left_out[reason], found.left_out[reason]), reason


def round_trip(result: Result, target: Path, *, ordered: bool = True) -> Result:
    """Write a result, read it back, and return what was read after asserting that it is the same.

    Also proves that writing touched neither the file the result came from nor anything else in the folder.
    """
    before = digests(target.parent, Path(result.path) if result.path else None)
    assert unturn.io.write(result, target) == ()
    found = unturn.io.read(target)
    assert_same(result, found, ordered=ordered)
    after = digests(target.parent, Path(result.path) if result.path else None)
    assert {k: v for k, v in after.items() if k in before} == before
    assert len(after) - len(before) <= 2, "at most the target and its companion are new"
    return found


def digests(folder: Path, source: Path | None) -> dict[Path, str]:
    """Return a digest of every file in a folder, and of a source elsewhere."""
    files = [p for p in folder.rglob("*") if p.is_file()]
    if source is not None and source not in files:
        files.append(source)
    return {p: hashlib.sha256(p.read_bytes()).hexdigest() for p in files}
