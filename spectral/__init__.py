"""Areal densities of basis materials from multi-threshold photon counts."""

from importlib.metadata import PackageNotFoundError, version

try:
    __version__ = version("wedgewright")
except PackageNotFoundError:  # a checkout that was never installed
    __version__ = "0+unknown"

__all__ = ["__version__"]
