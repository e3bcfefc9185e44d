"""XDMF DataItems: numbers from XML text, HDF5, binary files, and the items made of other items."""

from __future__ import annotations

import re
import warnings
from typing import Any

import numpy as np

from unturn.io.xdmf_binary import dimensions, needed_dimensions, number_type, read_binary
from unturn.io.xdmf_hdf import hdf_dataset, load
from unturn.io.xdmf_tree import MAX_DEPTH, XdmfTree
from unturn.io.xdmf_xml import Node, attribute, fault, local_name
from unturn.result import Array


class ItemReader:
    """Reads DataItems of one XDMF file; collects what the user must know in `notes`."""

    def __init__(self, tree: XdmfTree) -> None:
        self.tree = tree
        self.notes: dict[str, None] = {}

    def children(self, node: Node) -> list[Node]:
        """Return the DataItems directly under an element."""
        return [c for c in self.tree.children(node) if local_name(c) == "DataItem"]

    def only(self, node: Node) -> Array:
        """Return the data of the one DataItem under an element."""
        return self.read(self.only_item(node))

    def only_item(self, node: Node) -> Node:
        """Return the one DataItem under an element, references followed."""
        items = self.children(node)
        if len(items) != 1:
            what = f"<{local_name(node)} {attribute(node, 'Name')!r}>"
            raise fault(node, f"{what} has {len(items)} DataItems; one is expected.")
        return self.tree.resolve(items[0])

    def read(self, node: Node, depth: int = 0) -> Array:
        """Return the data of one DataItem in the shape of its ``Dimensions``.

        Raises
        ------
        InputError
            The data is missing, does not fit ``Dimensions``, or is of a kind that is not read.
        """
        if depth > MAX_DEPTH:
            raise fault(node, "the DataItems go round in a circle.")
        node = self.tree.resolve(node)
        kind = attribute(node, "ItemType", default="Uniform").lower()
        readers = {"hyperslab": self._hyperslab, "function": self._function, "coordinates": self._coordinates}
        if kind in readers:
            return _shaped(readers[kind](node, depth + 1), dimensions(node), node, "selection")
        if kind != "uniform":
            raise fault(node, f"a DataItem of type {attribute(node, 'ItemType')!r} is not read.")
        layout = attribute(node, "Format", default="XML").lower()
        if layout == "hdf":
            with hdf_dataset(node) as dataset:
                return _shaped(load(dataset, (), node), dimensions(node), node, "HDF5 dataset")
        if layout == "xml":
            return self._text(node)
        if layout == "binary":
            return read_binary(node)
        raise fault(
            node, f"a DataItem of format {attribute(node, 'Format')!r} is not read; XML, HDF and Binary are."
        )

    def _text(self, node: Node) -> Array:
        shape = needed_dimensions(node)
        dtype, stated = number_type(node)
        wide = {"f": "f8", "i": "i8", "u": "u8"}[dtype.kind]
        text = (node.text or "").strip()
        if wide == "u8" and "-" in text:
            raise fault(node, "a negative number where the file states unsigned ones.")
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("error")
                values = np.fromstring(text, dtype=wide, sep=" ") if text else np.empty(0, wide)
        except (ValueError, DeprecationWarning, OverflowError) as error:
            raise fault(
                node, f"the text is not a list of {_word(dtype)} numbers: {_first_bad(text, dtype)}."
            ) from error
        if wide != "f8" and text and re.search(r"\d{18,}", text):
            values = self._long_integers(node, text, wide)
        values = _shaped(values, shape, node, "text")
        with np.errstate(over="ignore"):
            narrow = values.astype(dtype)
        if dtype.kind == "f":
            if dtype.itemsize == 4 and not stated and self._loses(values, narrow):
                self.notes[
                    "Some numbers in the XML have more digits than the 4 bytes of a DataItem that states no "
                    "Precision; they were read with all their digits."
                ] = None
                return values
        elif not np.array_equal(values, narrow):
            raise fault(
                node, f"a number does not fit into {8 * dtype.itemsize} bits, the Precision of this DataItem."
            )
        return narrow

    @staticmethod
    def _loses(values: Array, narrow: Array) -> bool:
        with np.errstate(invalid="ignore", over="ignore"):
            some = values.ravel()[:1000]
            short = np.array([float(f"{v:.9g}") for v in some])
            return bool(np.any((short != some) & (narrow.ravel()[:1000] != some) & np.isfinite(some)))

    @staticmethod
    def _long_integers(node: Node, text: str, dtype: str) -> Array:
        try:
            return np.array([int(word) for word in text.split()], dtype=dtype)
        except (OverflowError, ValueError) as error:
            raise fault(node, "a whole number is too large for 64 bits.") from error

    def _parts(self, node: Node, at_least: int) -> list[Node]:
        parts = [self.tree.resolve(p) for p in self.children(node)]
        if len(parts) < at_least:
            kind = attribute(node, "ItemType")
            raise fault(node, f"a {kind} DataItem needs {at_least} DataItems inside and has {len(parts)}.")
        return parts

    def _hyperslab(self, node: Node, depth: int) -> Array:
        selection, source = self._parts(node, 2)[:2]
        numbers = self.read(selection, depth)
        if numbers.dtype.kind not in "iu" or numbers.size % 3 or not numbers.size:
            raise fault(node, "a HyperSlab needs whole numbers: start, stride and count of every axis.")
        start, stride, count = ([int(v) for v in row] for row in numbers.reshape(3, -1))
        plain = attribute(source, "ItemType", default="Uniform").lower() == "uniform"
        if plain and attribute(source, "Format", default="XML").lower() == "hdf":
            with hdf_dataset(source) as dataset:
                shape = _checked_shape(dataset.shape, dimensions(source), source)
                cut = _slices(start, stride, count, shape, node)
                if dataset.shape == shape:
                    return load(dataset, cut, source)
        data = self.read(source, depth)
        return data[_slices(start, stride, count, data.shape, node)]

    def _coordinates(self, node: Node, depth: int) -> Array:
        where, source = self._parts(node, 2)[:2]
        index, data = self.read(where, depth), self.read(source, depth)
        if index.dtype.kind not in "iu" or index.size % max(data.ndim, 1):
            raise fault(node, "a Coordinates DataItem needs whole numbers, one for each axis of the data.")
        rows = index.reshape(-1, data.ndim)
        if rows.size and ((rows < 0).any() or (rows >= np.array(data.shape)).any()):
            raise fault(node, f"a coordinate lies outside the data of shape {data.shape}.")
        picked: Array = data[tuple(rows.astype(np.int64).T)]
        return picked

    def _function(self, node: Node, depth: int) -> Array:
        text = attribute(node, "Function")
        match = re.fullmatch(r"JOIN\s*\(\s*(\$\d{1,3}(?:\s*[,;]\s*\$\d{1,3})*)\s*\)", text, re.IGNORECASE)
        if match is None:
            raise fault(node, f"the function {text!r} is not read; JOIN($0, $1 ...) is.")
        numbers = [int(n) for n in re.findall(r"\d+", match[1])]
        parts = self._parts(node, max(numbers) + 1)
        data = [self.read(parts[n], depth) for n in numbers]
        if len({d.shape for d in data}) != 1:
            raise fault(node, f"JOIN of arrays of different shapes: {', '.join(str(d.shape) for d in data)}.")
        column = data[0].ndim == 2 and data[0].shape[1] == 1
        return np.stack([d[:, 0] if column else d for d in data], axis=-1)


def _word(dtype: np.dtype[Any]) -> str:
    return {"f": "floating-point", "i": "whole", "u": "unsigned whole"}[dtype.kind]


def _first_bad(text: str, dtype: np.dtype[Any]) -> str:
    for number, word in enumerate(text.split()):
        try:
            float(word) if dtype.kind == "f" else int(word)
        except ValueError:
            return f"number {number} is {word[:40]!r}"
    return "it cannot be read"


def _shaped(data: Array, shape: tuple[int, ...] | None, node: Node, what: str) -> Array:
    return data.reshape(_checked_shape(data.shape, shape, node, what))


def _checked_shape(
    found: tuple[int, ...], stated: tuple[int, ...] | None, node: Node, what: str = "HDF5 dataset"
) -> tuple[int, ...]:
    """Return the stated shape if data of the found shape may be read as such."""
    if stated is None:
        return found
    here, there = ([n for n in shape if n != 1] for shape in (found, stated))
    flat = len(here) < 2 or len(there) < 2 or here[0] == there[0] or here[-1] == there[-1]
    if int(np.prod(found, dtype=object)) == int(np.prod(stated, dtype=object)) and flat:
        return stated
    raise fault(
        node,
        f"Dimensions says {_times(stated)}, the {what} holds {_times(found)} numbers. "
        "The file is incomplete or still being written: write it again.",
    )


def _times(shape: tuple[int, ...]) -> str:
    return " x ".join(map(str, shape)) or "1"


def _slices(
    start: list[int], stride: list[int], count: list[int], shape: tuple[int, ...], node: Node
) -> tuple[slice, ...]:
    if len(start) != len(shape):
        raise fault(node, f"a HyperSlab of {len(start)} axes of data with {len(shape)} axes.")
    for s, d, c, n in zip(start, stride, count, shape):
        if s < 0 or d < 1 or c < 1 or s + (c - 1) * d >= n:
            raise fault(
                node, f"a HyperSlab from {s} by {d}, {c} times, does not lie inside an axis of length {n}."
            )
    return tuple(slice(s, s + (c - 1) * d + 1, d) for s, d, c in zip(start, stride, count))
