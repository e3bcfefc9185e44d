"""VTK arrays to numpy arrays and back, without copying where the memory allows it."""

from __future__ import annotations

import contextlib
import re
from collections.abc import Iterator, Mapping, Sequence
from typing import Any

import numpy as np
from vtkmodules.util.numpy_support import numpy_to_vtk, vtk_to_numpy
from vtkmodules.vtkCommonCore import (
    vtkDataArray,
    vtkLogger,
    vtkOutputWindow,
    vtkStringArray,
    vtkStringOutputWindow,
)

from unturn.errors import InputError, UsageError
from unturn.result import Array, Association


@contextlib.contextmanager
def quiet_vtk() -> Iterator[list[str]]:
    """Collect what VTK would print; the list is filled when the block ends."""
    said: list[str] = []
    before, cutoff = vtkOutputWindow.GetInstance(), vtkLogger.GetCurrentVerbosityCutoff()
    window = vtkStringOutputWindow()
    vtkOutputWindow.SetInstance(window)
    vtkLogger.SetStderrVerbosity(vtkLogger.VERBOSITY_OFF)
    try:
        yield said
    finally:
        vtkLogger.SetStderrVerbosity(vtkLogger.ConvertToVerbosity(int(cutoff)))
        vtkOutputWindow.SetInstance(before)
        said.extend(_sentences(text_of(window.GetOutput())))


def _sentences(text: str) -> list[str]:
    """Return VTK's messages without the source file, line, object address and request dump around them."""
    found = re.findall(r"^(?:ERROR|.*Warning): In .*\n(?:vtk\w+ \(0x[0-9a-f]+\): )?(.*)", text, re.MULTILINE)
    sentences = [line.strip() for line in found if not line.startswith("Algorithm ")]
    return list(dict.fromkeys(sentences)) or (["VTK gave no reason"] if text.strip() else [])


def text_of(value: str | bytes | None) -> str:
    """Return text that VTK gave; what is not UTF-8 comes as bytes and is taken for Latin-1."""
    return value.decode("latin-1") if isinstance(value, bytes) else value or ""


def name_of(array: Any, position: int) -> str:
    """Return the name of a VTK array, made up from its position when it has none."""
    return text_of(array.GetName()) or f"unnamed_{position}"


def to_numpy(array: Any) -> Array | None:
    """Return a VTK array as numpy, ``(n,)`` for one component, ``(n, c)`` else; None if numpy cannot hold it.

    Strings become an array of `str`; numbers share VTK's memory where it is one block.
    """
    if isinstance(array, vtkStringArray):
        n, c = array.GetNumberOfTuples(), array.GetNumberOfComponents()
        strings = np.array([text_of(array.GetValue(i)) for i in range(n * c)], dtype=np.str_)
        return strings if c == 1 else strings.reshape(n, c)
    if not isinstance(array, vtkDataArray) or array.GetNumberOfComponents() == 0:
        return None
    if not array.HasStandardMemoryLayout():
        array = array.ToAOSDataArray()
    values: Array = vtk_to_numpy(array)
    return values


def from_numpy(values: Array, name: str) -> Any:
    """Return a VTK array of this name; numbers share the memory of `values` when they lie in one block.

    Axes after the first are laid out row by row as components.
    """
    values = np.atleast_1d(values)
    if values.dtype.kind in "US":
        return _strings_to_vtk(values, name)
    if values.dtype.kind == "b":
        values = values.astype(np.uint8)
    if (
        values.dtype.kind not in "iuf"
        or values.dtype.itemsize not in (1, 2, 4, 8)
        or values.dtype == np.float16
    ):
        raise UsageError(
            f"array {name!r} has numbers of type {values.dtype}, which the VTK formats cannot hold; "
            "convert it to an integer, float32 or float64 type first."
        )
    native = values.dtype.newbyteorder("=")
    flat = np.ascontiguousarray(values.reshape(len(values), -1) if values.ndim > 2 else values, dtype=native)
    array = numpy_to_vtk(flat)
    array.SetName(name)
    return array


def _strings_to_vtk(values: Array, name: str) -> Any:
    array = vtkStringArray()
    array.SetName(name)
    array.SetNumberOfComponents(1 if values.ndim == 1 else int(np.prod(values.shape[1:])))
    array.SetNumberOfTuples(len(values))
    for i, text in enumerate(values.astype(np.str_).ravel()):
        array.SetValue(i, str(text))
    return array


def read_attributes(
    attributes: Any, association: Association, where: str
) -> tuple[dict[str, Array], dict[tuple[Association, str], tuple[str, ...]], list[str]]:
    """Return the arrays of a VTK field-data object, their component names, and notes on skipped ones."""
    arrays: dict[str, Array] = {}
    names: dict[tuple[Association, str], tuple[str, ...]] = {}
    notes = []
    for i in range(attributes.GetNumberOfArrays()):
        array = attributes.GetAbstractArray(i)
        name = name_of(array, i)
        if name in arrays:
            raise InputError(
                f"{where}two {association} arrays are called {name!r}, so one would be lost. "
                "Rename one of them in the program that wrote the file."
            )
        values = to_numpy(array)
        if values is None:
            notes.append(f"{association} array {name!r} ({array.GetClassName()}) is passed through unread")
            continue
        arrays[name] = values
        if array.HasAComponentName():
            c = array.GetNumberOfComponents()
            names[association, name] = tuple(text_of(array.GetComponentName(k)) for k in range(c))
    return arrays, names, notes


def set_arrays(attributes: Any, arrays: Sequence[Any], roles: Mapping[int, int]) -> None:
    """Make a VTK field-data object hold these arrays in this order; `roles`: attribute type -> position."""
    for i in reversed(range(attributes.GetNumberOfArrays())):
        attributes.RemoveArray(i)
    for array in arrays:
        attributes.AddArray(array)
    for number, i in roles.items():
        attributes.SetActiveAttribute(arrays[i].GetName(), number)


def roles_of(attributes: Any) -> dict[int, int]:
    """Return which arrays are the active scalars, vectors, global ids ...: attribute type -> position."""
    arrays = [attributes.GetAbstractArray(i) for i in range(attributes.GetNumberOfArrays())]
    roles = {}
    for number in range(getattr(attributes, "NUM_ATTRIBUTES", 0)):
        active = attributes.GetAbstractAttribute(number)
        if active is not None:
            roles[number] = next(i for i, array in enumerate(arrays) if array is active)
    return roles


def update_attributes(
    attributes: Any,
    wanted: Mapping[str, Array],
    association: Association,
    component_names: Mapping[tuple[Association, str], tuple[str, ...]],
) -> None:
    """Make a VTK field-data object hold exactly these arrays, leaving alone those it already holds.

    Arrays numpy cannot hold stay; an array keeps its place and its role (active scalars ...) when replaced.
    """
    for i in reversed(range(attributes.GetNumberOfArrays())):
        array = attributes.GetAbstractArray(i)
        name = name_of(array, i)
        if name not in wanted and to_numpy(array) is not None:
            attributes.RemoveArray(i)
    for name, values in wanted.items():
        present = attributes.GetAbstractArray(name)
        labels = component_names.get((association, name), ())
        if present is not None and _is_same(present, values, labels):
            continue
        array = from_numpy(values, name)
        for k, label in enumerate(labels):
            array.SetComponentName(k, label)
        attributes.AddArray(array)


def _is_same(present: Any, values: Array, labels: tuple[str, ...]) -> bool:
    """Whether VTK's array is these very values (same memory, or equal strings) with these component names."""
    held = to_numpy(present)
    if held is None or held.dtype != values.dtype or held.shape != values.shape:
        return False
    if any(text_of(present.GetComponentName(k)) != label for k, label in enumerate(labels)):
        return False
    if held.dtype.kind == "U":
        return bool((held == values).all())
    return bool(held.__array_interface__["data"] == values.__array_interface__["data"])
