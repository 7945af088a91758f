"""Exact cages, free volumes and cage breaking of hard spheres and colloids."""

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from trajcage.analysis.cages import cages
    from trajcage.lattices import lattice
    from trajcage.run import inspect, measure, merge
    from trajcage.run.cage_analysis import CageAnalysis, ClusterBackend
    from trajcage.store import open_result
    from trajcage.store.salvage import salvage

__all__ = [
    "CageAnalysis",
    "ClusterBackend",
    "cages",
    "inspect",
    "lattice",
    "measure",
    "merge",
    "open_result",
    "salvage",
]

__version__ = "0.1.0"

# Loaded when first used, so that the command line answers at once.
_HOMES = {
    "CageAnalysis": "trajcage.run.cage_analysis",
    "ClusterBackend": "trajcage.run.cage_analysis",
    "cages": "trajcage.analysis.cages",
    "inspect": "trajcage.run",
    "lattice": "trajcage.lattices",
    "measure": "trajcage.run",
    "merge": "trajcage.run",
    "open_result": "trajcage.store",
    "salvage": "trajcage.store",
}


def __getattr__(name: str) -> object:
    if name in _HOMES:
        return getattr(import_module(_HOMES[name]), name)
    raise AttributeError(f"module 'trajcage' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted({*globals(), *_HOMES})
