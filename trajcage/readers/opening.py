"""The one door: picks the reader that fits the files."""

import logging
from pathlib import Path

from trajcage.errors import InputError
from trajcage.readers.gsd_file import GsdSource
from trajcage.readers.lammps_data import LammpsDataSource
from trajcage.readers.lammps_dump import LammpsDumpSource
from trajcage.readers.options import InputOptions
from trajcage.readers.source import Particles, Source, check_file
from trajcage.readers.trajectory import Trajectory
from trajcage.readers.xyz import XyzSource

__all__ = ["open_trajectory"]

_LOGGER = logging.getLogger(__name__)

# Formats that hold frames and nothing about the particles.
_ONLY_FRAMES = {".dcd", ".trr", ".xtc"}

# First bytes that settle the format whatever the file is called (dump.melt).
_FIRST_BYTES = {
    b"ITEM: ": ".dump",
    (0x65DF65DF65DF65DF).to_bytes(8, "little"): ".gsd",
}


def open_trajectory(options: InputOptions) -> Trajectory:
    """Open an input.

    GSD, LAMMPS, XYZ and H5MD files are read here, since MDAnalysis loses boxes,
    boundaries, diameters or columns of theirs; all others by MDAnalysis. The
    suffix of a file names its format, except that LAMMPS dumps and GSD files
    are known by their first bytes under any name.

    Parameters
    ----------
    options : InputOptions
        The files, and what they do not say themselves.

    Returns
    -------
    Trajectory
        To be closed, or used in a ``with`` statement.

    Raises
    ------
    InputError
        If a file is missing, empty or unreadable, or if diameters or box are
        unknown.
    """
    check_file(options.topology)
    if options.trajectory is not None:
        check_file(options.trajectory)
    source = _open_source(options.topology, options.trajectory)
    try:
        trajectory = Trajectory(options, source)
    except Exception:
        source.close()
        raise
    _LOGGER.info(
        "read %s as %s: %d frames of %d particles",
        options.trajectory or options.topology,
        source.format,
        trajectory.n_frames,
        trajectory.n_particles,
    )
    return trajectory


def _open_source(topology: Path, trajectory: Path | None) -> Source:
    path = topology if trajectory is None else trajectory
    companion = None if trajectory is None else _companion(topology)
    source = _open_own(path, companion)
    if source is not None:
        return source
    from trajcage.readers.universe import UniverseSource  # MDAnalysis loads slowly

    return UniverseSource(path, companion)


def _open_own(path: Path, companion: Particles | None = None) -> Source | None:
    """Open a file of a format that is read here, None if it is another."""
    match _kind(path):
        case ".gsd":
            return GsdSource(path, companion)
        case ".dump" | ".lammpsdump" | ".lammpstrj":
            return LammpsDumpSource(path, companion)
        case ".xyz" | ".extxyz":
            return XyzSource(path, companion)
        case ".h5md" | ".h5":
            from trajcage.readers.h5md import H5mdSource  # as MDAnalysis above

            return H5mdSource(path, companion)
        case ".data" | ".lammpsdata":
            if companion is not None:
                raise InputError(f"a LAMMPS data file holds no trajectory: {path}")
            return LammpsDataSource(path)
    return None


def _kind(path: Path) -> str:
    """Suffix that names the format."""
    with path.open("rb") as file:
        head = file.read(8)
    named = (suffix for first, suffix in _FIRST_BYTES.items() if head.startswith(first))
    return next(named, path.suffix.lower())


def _companion(topology: Path) -> Particles:
    """Read the particles from a topology beside a trajectory."""
    if topology.suffix.lower() in _ONLY_FRAMES:
        raise InputError(
            f"{topology} names no particles: expected the topology first, then the "
            "trajectory"
        )
    source = _open_own(topology)
    if source is None:
        from trajcage.readers.universe import read_topology  # as MDAnalysis above

        return read_topology(topology)
    try:
        raw = source.read(0)
    finally:
        source.close()
    return Particles(
        type_names=source.type_names,
        types=raw.types,
        radii=raw.radii,
        radii_source=source.radii_source,
        ids=raw.ids if source.has_ids else None,
    )
