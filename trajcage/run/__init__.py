"""Runs: from trajectories to result files, frame by frame; prints nothing."""

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from trajcage.run.inspection import Inspection, inspect
    from trajcage.run.measuring import measure
    from trajcage.run.merging import merge
    from trajcage.run.settings import FAMILIES, RunSettings

__all__ = ["FAMILIES", "Inspection", "RunSettings", "inspect", "measure", "merge"]

# Loaded when first used: an export needs no geometry.
_HOMES = {
    "FAMILIES": "trajcage.run.settings",
    "Inspection": "trajcage.run.inspection",
    "RunSettings": "trajcage.run.settings",
    "inspect": "trajcage.run.inspection",
    "measure": "trajcage.run.measuring",
    "merge": "trajcage.run.merging",
}


def __getattr__(name: str) -> object:
    if name in _HOMES:
        return getattr(import_module(_HOMES[name]), name)
    raise AttributeError(f"module 'trajcage.run' has no attribute {name!r}")
