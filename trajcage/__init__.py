"""Exact cages, free volumes and cage breaking of hard spheres and colloids."""

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from trajcage.analysis.cages import cages
    from trajcage.lattices import lattice
    from trajcage.run import inspect, measure
    from trajcage.store import open_result

__all__ = ["cages", "inspect", "lattice", "measure", "open_result"]

__version__ = "0.1.0"

# Loaded when first used, so that the command line answers at once.
_HOMES = {
    "cages": "trajcage.analysis.cages",
    "inspect": "trajcage.run",
    "lattice": "trajcage.lattices",
    "measure": "trajcage.run",
    "open_result": "trajcage.store",
}


def __getattr__(name: str) -> object:
    if name in _HOMES:
        return getattr(import_module(_HOMES[name]), name)
    raise AttributeError(f"module 'trajcage' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted({*globals(), *_HOMES})
