"""The version, from the installed package."""

from importlib.metadata import PackageNotFoundError, version

try:
    __version__ = version("unturn")
except PackageNotFoundError:  # a checkout that was never installed
    __version__ = "0+unknown"
