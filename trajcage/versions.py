"""Versions of the program and of what it stands on, without loading any of it."""

import platform
from importlib import metadata

import trajcage

__all__ = ["versions"]

_LIBRARIES = ("numpy", "numba", "scipy", "MDAnalysis", "freud-analysis", "gsd", "h5py")


def versions() -> dict[str, str]:
    """Return the versions of trajcage, Python and the libraries, by name."""
    found = {"trajcage": trajcage.__version__, "python": platform.python_version()}
    return found | {name: metadata.version(name) for name in _LIBRARIES}
