"""An open input: checked frames, whatever the format."""

from collections import Counter
from types import TracebackType

import numpy as np

from trajcage.errors import FrameError, InputError
from trajcage.model import Frame
from trajcage.readers.description import InputDescription
from trajcage.readers.options import InputOptions, parse_diameter
from trajcage.readers.radii import Radii
from trajcage.readers.region import Region
from trajcage.readers.source import RawFrame, Source

__all__ = ["Trajectory"]


class Trajectory:
    """Frames of one input; made by `open_trajectory`.

    Parameters
    ----------
    options : InputOptions
        What the user says about the input.
    source : Source
        The open input.

    Raises
    ------
    InputError
        If diameters or box are unknown, or the first frame cannot be read.
    """

    def __init__(self, options: InputOptions, source: Source) -> None:
        self.options = options
        self._source = source
        self._first = source.read(0)
        self._check_ids(self._first)
        self._region = Region(options, source, self._first)
        self._radii = Radii(
            parse_diameter(options.diameter),
            self._first,
            source.type_names,
            source.radii_source,
        )

    def __enter__(self) -> "Trajectory":
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def close(self) -> None:
        """Close the files; frames read before stay valid."""
        self._source.close()

    @property
    def n_frames(self) -> int:
        """Number of frames found; the last of a damaged file may be unreadable."""
        return self._source.n_frames

    @property
    def n_particles(self) -> int:
        """Number of particles, the same in every frame."""
        return len(self._first.positions)

    @property
    def dimensions(self) -> int:
        """Number of dimensions, 2 or 3."""
        return self._region.dimensions

    @property
    def type_names(self) -> tuple[str, ...]:
        """Names of the particle types, in the order of `Frame.species`."""
        return self._source.type_names

    @property
    def time_unit(self) -> str:
        """Name of the time unit; ``"step"`` where times are step numbers."""
        if self.options.time_unit is not None:
            return self.options.time_unit
        timed = self.options.dt is not None or self._first.time is not None
        return "time" if timed else "step"

    def frame(self, index: int) -> Frame:
        """Read and check one frame.

        Parameters
        ----------
        index : int
            Frame number, counted from 0.

        Returns
        -------
        Frame
            Arrays of its own in float64, particles in the order of their ids.

        Raises
        ------
        InputError
            If there is no such frame.
        FrameError
            If the frame cannot be read or used.
        """
        if not 0 <= index < self.n_frames:
            raise InputError(
                f"there is no frame {index}: the trajectory has frames 0 to "
                f"{self.n_frames - 1}"
            )
        raw = self._source.read(index)
        step, time = self._clock(raw, index)
        self._check_particles(raw, index)
        d = self.dimensions
        return Frame(
            positions=self._region.positions(raw, index),
            radii=self._radii.of(raw, index),
            box=self._region.box(raw, index),
            index=index,
            step=step,
            time=time,
            ids=raw.ids.copy(),
            species=raw.types.copy(),
            images=None if raw.images is None else raw.images[:, :d].copy(),
            resolution=self._source.spacing(raw),
        )

    def describe(self) -> InputDescription:
        """Tell what was understood of the input, and from where."""
        first, source, region = self._first, self._source, self._region
        box, radii = region.box(first, 0), self._radii.of(first, 0)
        first_step, first_time = self._clock(first, 0)
        notes = list(source.notes)
        last_step: int | None = None
        last_time: float | None = None
        try:
            last = source.read(self.n_frames - 1)
            last_step, last_time = self._clock(last, self.n_frames - 1)
        except FrameError as error:
            notes.append(f"the last frame cannot be read: {error}")
        files = (self.options.topology, self.options.trajectory)
        counts = Counter(first.types.tolist())
        return InputDescription(
            files=tuple(str(path) for path in files if path is not None),
            format=source.format,
            n_particles=self.n_particles,
            n_frames=self.n_frames,
            dimensions=self.dimensions,
            dimensions_source=region.dimensions_source,
            box_vectors=tuple(tuple(row) for row in box.vectors.tolist()),
            box_lengths=tuple(box.lengths.tolist()),
            box_origin=tuple(box.origin.tolist()),
            box_source=region.box_source,
            periodic=box.periodic,
            periodic_source=region.periodic_source,
            radius_min=float(radii.min()),
            radius_max=float(radii.max()),
            radius_mean=float(radii.mean()),
            radii_source=self._radii.source,
            species={name: counts[k] for k, name in enumerate(self.type_names)},
            first_step=first_step,
            first_time=first_time,
            last_step=last_step,
            last_time=last_time,
            dt=self.options.dt,
            time_unit=self.time_unit,
            time_source=self._time_source(),
            resolution=source.spacing(first),
            notes=tuple(notes),
        )

    def _clock(self, raw: RawFrame, index: int) -> tuple[int, float]:
        step = index if raw.step is None else raw.step
        if self.options.dt is not None:
            return step, step * self.options.dt
        return step, float(step) if raw.time is None else raw.time

    def _time_source(self) -> str:
        steps = "frame number" if self._first.step is None else "step in the file"
        if self.options.dt is not None:
            return f"Time is the {steps} times the given dt."
        if self._first.time is not None:
            return "Time as stored in the file, in whatever unit its writer used."
        return f"Time is the {steps}."

    def _check_particles(self, raw: RawFrame, index: int) -> None:
        n, expected = len(raw.positions), self.n_particles
        if n != expected:
            raise FrameError(
                f"expected the {expected} particles of the first frame, found {n}; "
                "the particle number must not change: split the trajectory there, or "
                "keep only particles present in all frames",
                frame=index,
                step=raw.step,
            )
        differ = raw.ids != self._first.ids
        if differ.any():
            raise FrameError(
                "expected the particle ids of the first frame, found id "
                f"{raw.ids[differ][0]} in place of {self._first.ids[differ][0]}; keep "
                "only particles present in all frames",
                frame=index,
                step=raw.step,
            )

    @staticmethod
    def _check_ids(raw: RawFrame) -> None:
        ids, counts = np.unique(raw.ids, return_counts=True)
        if (counts > 1).any():
            raise FrameError(
                f"expected each particle id once, found {ids[counts > 1][0]} "
                f"{counts.max()} times",
                frame=0,
                step=raw.step,
            )
