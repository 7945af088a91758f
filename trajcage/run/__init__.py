"""Runs: from trajectories to result files, frame by frame; prints nothing."""

from trajcage.run.inspection import Inspection, inspect
from trajcage.run.measuring import measure
from trajcage.run.merging import merge
from trajcage.run.settings import FAMILIES, RunSettings

__all__ = ["FAMILIES", "Inspection", "RunSettings", "inspect", "measure", "merge"]
