"""Trajectories in, checked frames out: the door for MDAnalysis and gsd."""

from trajcage.readers.description import InputDescription
from trajcage.readers.opening import open_trajectory
from trajcage.readers.options import DIAMETER_FORMS, InputOptions
from trajcage.readers.trajectory import Trajectory

__all__ = [
    "DIAMETER_FORMS",
    "InputDescription",
    "InputOptions",
    "Trajectory",
    "open_trajectory",
]
