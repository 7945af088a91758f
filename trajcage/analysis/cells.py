"""Voronoi or radical cells: local packing fraction, law of the cell volumes."""

import numpy as np
from numpy.typing import NDArray

from trajcage.lattices import SMALLEST_VORONOI_CELL
from trajcage.model import Field, Frame

__all__ = ["fields", "measure_cells"]


def fields(dimensions: int) -> tuple[Field, ...]:
    """Declare what :func:`measure_cells` returns."""
    return (
        Field(
            "cell_volume",
            "Volume (area in 2D) of the Voronoi cell of the center, for unequal radii "
            "of the radical cell; NaN where particles beyond an open edge could cut it",
            f"length+{dimensions}",
        ),
        Field(
            "local_packing_fraction",
            "Volume (area in 2D) of the particle over that of its cell",
        ),
        Field(
            "cell_volume_shape",
            "Shape k of the gamma law of the cell volumes above the smallest possible "
            "cell, (mean - smallest)^2 / variance; NaN for unequal particles, which "
            "have no smallest cell, and for equal cells",
            per_particle=False,
        ),
        Field(
            "cells_unknown",
            "Particles left out of cell_volume_shape, next to an open edge",
            dtype="i8",
            per_particle=False,
        ),
    )


def measure_cells(
    frame: Frame, volumes: NDArray[np.float64]
) -> dict[str, NDArray[np.generic] | float | int]:
    """Measure what follows from the cell volumes.

    Parameters
    ----------
    frame : Frame
        The configuration.
    volumes : (n,) float64, length^d
        Cell volumes of :func:`trajcage.neighborhood.tessellate`.

    Returns
    -------
    dict
        One entry for each of :func:`fields`.

    Notes
    -----
    Gamma law of cell volumes with the smallest cell as its origin: Aste & Di Matteo,
    Phys. Rev. E 77, 021309 (2008), from memory; k is 11 to 15 in granular packings.
    """
    d = frame.dimensions
    body = (np.pi if d == 2 else 4.0 / 3.0 * np.pi) * frame.radii**d
    known = volumes[np.isfinite(volumes)]
    shape = np.nan
    if frame.equal_radii and len(known) > 1:
        smallest = SMALLEST_VORONOI_CELL[d].value * frame.mean_diameter**d
        mean, variance = float(known.mean()), float(known.var())
        if variance > (1e-5 * mean) ** 2:  # the single precision of the cells
            shape = (mean - smallest) ** 2 / variance
    return {
        "cell_volume": volumes,
        "local_packing_fraction": np.divide(
            body, volumes, out=np.full(len(body), np.nan), where=volumes > 0.0
        ),
        "cell_volume_shape": shape,
        "cells_unknown": len(volumes) - len(known),
    }
