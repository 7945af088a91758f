"""Dimension and box of an input: the user before the file, never a guess."""

import numpy as np
from numpy.typing import NDArray

from trajcage.errors import FrameError, InputError
from trajcage.model import Box
from trajcage.readers.options import InputOptions, parse_box
from trajcage.readers.source import RawFrame, Source

__all__ = ["Region"]

# Three points always lie in a plane; four with equal z are no accident.
_MIN_PLANAR_PARTICLES = 4
# Allowed spread of z in a plane and tilt out of it, over the longest edge.
_FLATNESS = 1e-6


class Region:
    """Decides dimension, box and boundaries, once, from the first frame.

    Parameters
    ----------
    options : InputOptions
        What the user says.
    source : Source
        The open input.
    first : RawFrame
        Its first frame.

    Attributes
    ----------
    dimensions : int
        Number of dimensions.
    dimensions_source, box_source, periodic_source : str
        Where each comes from, as sentences.

    Raises
    ------
    InputError
        If there is no box, or it cannot hold the particles.
    """

    def __init__(self, options: InputOptions, source: Source, first: RawFrame) -> None:
        self._given = parse_box(options.box)
        self._periodic = options.periodic
        self.dimensions, self.dimensions_source = _dimensions(
            options, source, first, self._given
        )
        if self._given is not None:
            self.box_source = "Box given by the user."
        elif first.vectors is not None:
            self.box_source = f"Box from {source.box_source}."
        elif _open_everywhere(options.periodic, first):
            self.box_source = (
                "No box: the region is the bounding box of the particle centers, "
                "frame by frame."
            )
        else:
            raise InputError(
                "the input has no box; give it with --box (or box=) as lengths "
                "(10,10,10), as lengths and angles (10,10,10,90,90,60) or as row "
                "vectors, or say --periodic none for particles in the open"
            )
        if options.periodic is not None:
            self.periodic_source = "Boundaries given by the user."
        elif first.periodic is not None:
            self.periodic_source = "Boundaries from the file."
        else:
            self.periodic_source = (
                "The file does not say which edges are periodic: all are taken to be."
            )
        self._anchor = source.box_anchor
        if self._anchor is None and first.origin is None:
            self._anchor = self._find_anchor(first)
        self._box(first, self._anchor)  # refuse an impossible box at once

    def positions(self, raw: RawFrame, index: int) -> NDArray[np.float64]:
        """Positions in the dimensions of the input, (n, d) float64, checked flat.

        Raises
        ------
        FrameError
            If a two-dimensional frame has a spread in z.
        """
        if self.dimensions == 3:
            return raw.positions
        z = raw.positions[:, 2]
        z = z[np.isfinite(z)]
        vectors = self._vectors(raw)
        extent = (
            vectors if vectors is not None else np.ptp(raw.positions[:, :2], axis=0)
        )
        spread = float(np.ptp(z)) if z.size else 0.0
        if spread > _FLATNESS * float(np.abs(extent).max()):
            raise FrameError(
                f"expected particles in a plane, found z from {z.min():g} to "
                f"{z.max():g}; use --dimensions 3 or flatten the input",
                frame=index,
                step=raw.step,
            )
        return np.ascontiguousarray(raw.positions[:, :2])

    def box(self, raw: RawFrame, index: int) -> Box:
        """Box of one frame.

        Raises
        ------
        FrameError
            If the frame has no box or an impossible one.
        """
        try:
            return self._box(raw, self._anchor)
        except FrameError:
            raise
        except InputError as error:
            raise FrameError(str(error), frame=index, step=raw.step) from error

    def _box(self, raw: RawFrame, anchor: str | None) -> Box:
        vectors = self._vectors(raw)
        if vectors is None:
            return self._bounding_box(raw)
        if self.dimensions == 2 and len(vectors) == 3:
            tilt = float(np.abs(vectors[:2, 2]).max())
            if tilt > _FLATNESS * float(np.abs(vectors).max()):
                raise InputError(
                    f"box edges {vectors.tolist()} leave the xy plane, in which "
                    "two-dimensional particles must lie"
                )
        origin = raw.origin
        if anchor == "center":
            origin = -0.5 * vectors.sum(axis=0)
        elif origin is None:
            origin = np.zeros(len(vectors))
        return Box.from_any(
            vectors,
            dimensions=self.dimensions,
            periodic=self._periodic if self._periodic is not None else raw.periodic,
            origin=origin,
        )

    def _vectors(self, raw: RawFrame) -> NDArray[np.float64] | None:
        if self._given is None:
            return raw.vectors
        if self._given.ndim == 2:
            return self._given
        if self._given.size == 6:
            return Box.from_any(self._given).vectors
        return np.diag(self._given)

    def _bounding_box(self, raw: RawFrame) -> Box:
        if not _open_everywhere(self._periodic, raw):
            raise InputError("the frame has no box, unlike the first frame")
        points = raw.positions[:, : self.dimensions]
        points = points[np.isfinite(points).all(axis=1)]
        if len(points) < 2:
            raise InputError("expected at least two particles to span a region")
        low, high = points.min(axis=0), points.max(axis=0)
        return Box(np.diag(high - low), low, (False,) * self.dimensions)

    def _find_anchor(self, first: RawFrame) -> str:
        """Tell a box that starts at the origin from one centered on it."""
        if self._vectors(first) is None:
            return "corner"
        outside = {}
        for anchor in ("corner", "center"):
            box = self._box(first, anchor)
            if box.fully_periodic:
                return "corner"  # any origin means the same
            points = first.positions[:, : self.dimensions]
            along = box.fractional(points)[:, np.logical_not(box.periodic)]
            beyond = (along < -_FLATNESS) | (along > 1.0 + _FLATNESS)
            outside[anchor] = int(np.count_nonzero(beyond.any(axis=1)))
            if not outside[anchor]:
                return anchor
        raise InputError(
            "along open edges the box must hold all particles, but "
            f"{outside['corner']} of {len(first.positions)} lie outside if it starts "
            f"at the origin and {outside['center']} if it is centered there; give a "
            "box that holds them, or move the particles"
        )


def _open_everywhere(periodic: str | None, raw: RawFrame) -> bool:
    if periodic is not None:
        return periodic == "none"
    return raw.periodic is not None and not any(raw.periodic)


def _dimensions(
    options: InputOptions,
    source: Source,
    first: RawFrame,
    given: NDArray[np.float64] | None,
) -> tuple[int, str]:
    if options.dimensions is not None:
        return options.dimensions, f"{options.dimensions} dimensions, as given."
    if source.planar is not None:
        d = 2 if source.planar else 3
        return d, f"{d} dimensions, as the file says."
    if given is not None and given.shape in {(2,), (2, 2)}:
        return 2, "2 dimensions, as the given box has two edges."
    z = first.positions[:, 2]
    if not np.all(z == z[0]):
        return 3, "3 dimensions, since z differs between particles."
    if len(z) < _MIN_PLANAR_PARTICLES:
        return 3, "3 dimensions: too few particles to tell a plane from a chance."
    return 2, f"2 dimensions, since all particles have z = {z[0]:g}."
