"""All that can be measured on one frame alone: a pure function for any process."""

from collections.abc import Generator, Mapping
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from trajcage.analysis.cages import (
    check_packing,
    frame_cages,
    stored_values,
)
from trajcage.analysis.cells import measure_cells
from trajcage.analysis.contacts import measure_contacts, possible_contacts
from trajcage.analysis.order import measure_order, order_neighbors
from trajcage.analysis.thermodynamics import measure_thermodynamics
from trajcage.model import CageTable, Frame, NeighborList
from trajcage.neighborhood import tessellate
from trajcage.run.settings import RunSettings
from trajcage.run.timing import Stages

__all__ = ["MeasuredFrame", "MeasuredFrames", "bare", "measure_frame"]


@dataclass(frozen=True, eq=False)
class MeasuredFrame:
    """A frame and what was measured on it.

    Parameters
    ----------
    frame : Frame
        The configuration.
    cages : CageTable
        Its cages.
    values : dict
        Values of all fields that need this frame only.
    bonds : NeighborList or None
        Neighbors of the bond order, without vectors and weights, if regions
        are wanted.
    seconds : dict of str to float
        How long each stage took.
    """

    frame: Frame
    cages: CageTable
    values: dict[str, NDArray[np.generic] | float | int]
    bonds: NeighborList | None
    seconds: Mapping[str, float] = field(default_factory=dict)


#: Measured frames in order; to be closed, which ends the processes behind it.
MeasuredFrames = Generator[MeasuredFrame, None, None]


def measure_frame(frame: Frame, settings: RunSettings) -> MeasuredFrame:
    """Measure a frame.

    Parameters
    ----------
    frame : Frame
        The configuration.
    settings : RunSettings
        What to measure and how.

    Raises
    ------
    FrameError
        If the frame cannot be measured; the message says why.
    """
    tolerance = settings.cages.tolerance(frame)
    check_packing(frame)  # before a wrong unit makes everybody a neighbor
    stages = Stages()
    with stages.timed("pairs"):  # found once for all that asks for touching ones
        near = possible_contacts(frame, settings.contacts)
    with stages.timed("cages"):
        table, overlaps = frame_cages(
            frame, settings.cages, windows=settings.store_walls, near=near
        )
        values: dict[str, NDArray[np.generic] | float | int] = {**stored_values(table)}
        values |= measure_thermodynamics(frame, table, overlaps, tolerance)
    if settings.varying_radii:
        values["radius"] = frame.radii
    if settings.store_positions:
        values["position"] = frame.positions
    bonds = None
    if settings.has("cells"):
        with stages.timed("cells"):
            cells = tessellate(frame, near)
            values |= measure_cells(frame, cells[0])
        with stages.timed("order"):
            if settings.has("order"):
                values |= measure_order(frame, cells, settings.order)
            if settings.has("regions"):
                bonds = bare(order_neighbors(frame, cells, settings.order)[0])
    if settings.has("rattlers"):
        with stages.timed("rattlers"):
            values |= measure_contacts(frame, settings.contacts, near)
    # the windows take more room than all the rest, and nothing stores them
    table = replace(table, windows=None)
    return MeasuredFrame(frame, table, values, bonds, stages.seconds)


def bare(neighbors: NeighborList) -> NeighborList:
    """Drop the geometry, which would make up most of what a worker sends home.

    Parameters
    ----------
    neighbors : NeighborList
        Neighbors with vectors and weights.
    """
    d = neighbors.vectors.shape[1]
    return NeighborList(
        neighbors.offsets, neighbors.neighbors, np.zeros((0, d)), np.zeros(0)
    )
