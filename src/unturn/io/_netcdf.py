"""All variables of a netCDF file: the classic layout through scipy, the HDF5 one through h5py."""

from __future__ import annotations

import warnings
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from scipy.io import netcdf_file

from unturn.errors import InputError
from unturn.result import Array

_FAILURES = (
    OSError, ValueError, TypeError, KeyError, IndexError, AttributeError, AssertionError, OverflowError,
    MemoryError, RuntimeError, EOFError,
)  # fmt: skip


def load_exodus(path: Path) -> tuple[dict[str, Array], dict[str, str]]:
    """Return the variables of a netCDF file, and the element types that are attributes of some."""
    try:
        with path.open("rb") as stream:
            head = stream.read(8)
    except OSError as error:
        raise InputError(f"{path}: cannot be opened: {error.strerror}.") from error
    if head[:4] not in (b"CDF\x01", b"CDF\x02") and head != b"\x89HDF\r\n\x1a\n":
        raise InputError(
            f"{path}: is not an Exodus II file in the classic, 64-bit-offset or HDF5 layout. "
            "Write it in one of these, or as VTU."
        )
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            return _load_classic(path) if head[:3] == b"CDF" else _load_hdf(path)
    except _FAILURES as error:
        raise InputError(
            f"{path}: cannot be read as Exodus II ({error}). The file is damaged, incomplete or still being "
            "written: write it again."
        ) from error


def _load_classic(path: Path) -> tuple[dict[str, Array], dict[str, str]]:
    variables: dict[str, Array] = {}
    types: dict[str, str] = {}
    with netcdf_file(str(path), "r", mmap=False) as file:
        for name, variable in file.variables.items():
            variables[name] = _native(np.array(variable.data))
            if hasattr(variable, "elem_type"):
                types[name] = _text(variable.elem_type)
    return variables, types


def _load_hdf(path: Path) -> tuple[dict[str, Array], dict[str, str]]:
    variables: dict[str, Array] = {}
    types: dict[str, str] = {}
    with h5py.File(path, "r") as file:
        for name in file:
            link = file.get(name, getlink=True)
            dataset: Any = file[name] if isinstance(link, h5py.HardLink) else None
            if not isinstance(dataset, h5py.Dataset) or dataset.is_virtual or dataset.external:
                continue
            if dataset.dtype.kind in "iufS" and dataset.shape is not None:
                variables[name] = _native(np.asarray(dataset[()]))
                if "elem_type" in dataset.attrs:
                    types[name] = _text(dataset.attrs["elem_type"])
    return variables, types


def _native(values: Array) -> Array:
    return values if values.dtype.kind == "S" else values.astype(values.dtype.newbyteorder("="), copy=False)


def _text(value: object) -> str:
    first = value.ravel()[0] if isinstance(value, np.ndarray) and value.size else value
    text = first.decode("utf-8", "replace") if isinstance(first, bytes) else str(first)
    return text.split("\0")[0].strip()
