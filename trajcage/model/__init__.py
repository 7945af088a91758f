"""Validated, immutable data that cross the floors of the package."""

from trajcage.model.box import Box
from trajcage.model.cage_table import CageTable, CageWalls, CageWindows
from trajcage.model.field import Field
from trajcage.model.frame import Frame
from trajcage.model.record import CageStatus, FrameRecord, NeighborList

__all__ = [
    "Box",
    "CageStatus",
    "CageTable",
    "CageWalls",
    "CageWindows",
    "Field",
    "Frame",
    "FrameRecord",
    "NeighborList",
]
