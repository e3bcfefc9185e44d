"""Strain, rotation and equivalent strain from the nodal displacements of a finished finite-element result."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from unturn import kinematics
    from unturn._api import read, strain, write
    from unturn._api_meshes import convergence
    from unturn._api_states import envelope
    from unturn._version import __version__
    from unturn.errors import (
        DisplacementError,
        InputError,
        MissingExtraError,
        UnturnError,
        UsageError,
    )
    from unturn.gradient import displacement_gradient
    from unturn.result import CellBlock, Result
    from unturn.verdicts.comparison import compare

__all__ = [
    "CellBlock",
    "DisplacementError",
    "InputError",
    "MissingExtraError",
    "Result",
    "UnturnError",
    "UsageError",
    "__version__",
    "compare",
    "convergence",
    "displacement_gradient",
    "envelope",
    "kinematics",
    "read",
    "strain",
    "write",
]

_HOME = {
    "CellBlock": "unturn.result",
    "Result": "unturn.result",
    "__version__": "unturn._version",
    "compare": "unturn.verdicts.comparison",
    "convergence": "unturn._api_meshes",
    "displacement_gradient": "unturn.gradient",
    "envelope": "unturn._api_states",
    "read": "unturn._api",
    "strain": "unturn._api",
    "write": "unturn._api",
}


def __getattr__(name: str) -> Any:
    # loaded when first used: `unturn --help` and `import unturn` answer at once
    import importlib

    if name not in __all__:
        raise AttributeError(f"module 'unturn' has no attribute {name!r}")
    if name == "kinematics":
        return importlib.import_module("unturn.kinematics")
    return getattr(importlib.import_module(_HOME.get(name, "unturn.errors")), name)


def __dir__() -> list[str]:
    return __all__
