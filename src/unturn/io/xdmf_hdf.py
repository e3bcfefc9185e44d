"""XDMF DataItems in HDF5: the file beside the index, opened read-only, and the dataset in it."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import h5py
import numpy as np

from unturn.errors import InputError
from unturn.io.xdmf_xml import Node, fault
from unturn.result import Array

_MAX_RATIO = 100_000


def beside(node: Node, name: str, what: str) -> Path:
    """Return the path of a file named in the index, relative to the index's own folder."""
    if not name or "\0" in name or "\n" in name:
        raise fault(node, f"the text {name[:60]!r} does not name a {what}.")
    path = node.file.parent / name
    try:
        present = path.is_file()
    except OSError as error:
        raise fault(node, f"the {what} {name[:60]!r} cannot be reached: {error.strerror}.") from error
    if not present:
        raise fault(
            node,
            f"the {what} {name!r} is missing; it was looked for at {path}. "
            "The numbers of this result are stored there: copy it beside the .xdmf file.",
        )
    return path


def hdf_dataset(node: Node) -> _OpenDataset:
    """Return a context manager that opens the HDF5 dataset named by a DataItem, read-only."""
    return _OpenDataset(node)


class _OpenDataset:
    def __init__(self, node: Node) -> None:
        self.node = node
        text = (node.text or "").strip()
        name, colon, inner = text.rpartition(":")
        if not colon or not inner or "|" in text:
            raise fault(node, f"the text {text[:80]!r} is not of the form file.h5:/path/of/dataset.")
        self.path, self.inner = beside(node, name.strip(), "HDF5 file"), inner.strip()

    def __enter__(self) -> Any:
        try:
            self.file = h5py.File(self.path, "r")
        except BlockingIOError as error:
            raise fault(
                self.node, f"{self.path} is being written by another program; wait until it has finished."
            ) from error
        except PermissionError as error:
            raise fault(self.node, f"{self.path} may not be read. Check its permissions.") from error
        except (OSError, ValueError, RuntimeError) as error:
            raise fault(
                self.node,
                f"{self.path} cannot be opened as HDF5 ({error}). It is damaged or still being written.",
            ) from error
        try:
            return self._walk()
        except BaseException:
            self.file.close()
            raise

    def __exit__(self, *_: object) -> None:
        self.file.close()

    def _walk(self) -> Any:
        at: Any = self.file
        try:
            for key in [k for k in self.inner.split("/") if k]:
                if not isinstance(at, h5py.Group) or key not in at:
                    raise fault(self.node, f"{self.path} has no dataset {self.inner!r} ({key!r} is missing).")
                if isinstance(at.get(key, getlink=True), h5py.ExternalLink):
                    raise fault(
                        self.node, f"{self.inner!r} in {self.path} is a link to another file; not followed."
                    )
                at = at[key]
            if not isinstance(at, h5py.Dataset):
                raise fault(self.node, f"{self.inner!r} in {self.path} is a group, not a dataset.")
            if at.is_virtual or at.external:
                raise fault(
                    self.node, f"{self.inner!r} in {self.path} keeps its numbers in another file; not read."
                )
            if at.dtype.kind not in "iuf" or at.dtype.itemsize > 8 or at.shape is None:
                raise fault(
                    self.node, f"{self.inner!r} in {self.path} holds {at.dtype}, not numbers of 1 to 8 bytes."
                )
            stored = at.id.get_storage_size()
            if at.size and (stored == 0 or at.nbytes > _MAX_RATIO * stored):
                raise fault(
                    self.node, f"{self.inner!r} in {self.path} was never written: the writer was stopped."
                )
        except (OSError, RuntimeError, KeyError, ValueError, TypeError, UnicodeError) as error:
            raise self._damaged(error) from error
        return at

    def _damaged(self, error: Exception) -> InputError:
        return fault(
            self.node, f"{self.inner!r} in {self.path} cannot be read: {error}. The file is damaged."
        )


def load(dataset: Any, cut: tuple[slice, ...], node: Node) -> Array:
    """Return the numbers of a dataset (or a part of it) in the machine's byte order."""
    try:
        data = np.asarray(dataset[cut])
    except (OSError, RuntimeError, ValueError, KeyError, MemoryError) as error:
        raise fault(node, f"the HDF5 data cannot be read: {error}. The file is damaged.") from error
    return data.astype(data.dtype.newbyteorder("="), copy=False)
