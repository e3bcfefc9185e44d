"""The XDMF adapter: an index in XML, the numbers in HDF5, XML or binary files beside it.

Small and strict: every layout is read right or refused by name; see the tests for the layouts.
Reading: `open_file`. Writing: `write` and `open_series`.
"""

from __future__ import annotations

from unturn.io.xdmf_read import XdmfCarrier, XdmfFile, open_file
from unturn.io.xdmf_write import XdmfSeriesWriter, open_series, write

__all__ = ["XdmfCarrier", "XdmfFile", "XdmfSeriesWriter", "open_file", "open_series", "write"]
