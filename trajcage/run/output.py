"""The result file of a run: created, or continued."""

from collections.abc import Mapping
from pathlib import Path

from trajcage.model import Frame
from trajcage.run.settings import RunSettings
from trajcage.store import ResultWriter

__all__ = ["create_writer", "resume_writer"]


def create_writer(
    target: Path,
    settings: RunSettings,
    first: Frame,
    type_names: tuple[str, ...],
    time_unit: str,
    record: Mapping[str, object],
    *,
    overwrite: bool,
) -> ResultWriter:
    """Start a result file.

    Parameters
    ----------
    target : Path
        The file.
    settings : RunSettings
        What will be stored.
    first : Frame
        The first frame of the run.
    type_names : tuple of str
        Names of the particle types.
    time_unit : str
        Name of the time unit.
    record : mapping
        Everything recorded about the run.
    overwrite : bool
        Whether to replace an existing file.
    """
    d = first.dimensions
    return ResultWriter.create(
        target,
        fields=settings.fields(d),
        tables=settings.tables(d),
        arrays=settings.arrays(d, first.mean_diameter),
        n_particles=first.n_particles,
        dimensions=d,
        periodic=first.box.periodic,
        ids=first.ids,
        species=first.species,
        type_names=type_names,
        radii=first.radii,
        parameters=record,
        length_unit="length",
        time_unit=time_unit,
        overwrite=overwrite,
        store_positions=settings.store_positions,
        flush_every=0,
    )


def resume_writer(
    target: Path, settings: RunSettings, first: Frame, options: Mapping[str, object]
) -> ResultWriter:
    """Continue a result file that was made with the same options.

    Parameters
    ----------
    target, settings, first
        As in :func:`create_writer`.
    options : mapping
        What must agree.
    """
    d = first.dimensions
    return ResultWriter.resume(
        target,
        options=options,
        fields=settings.fields(d),
        tables=settings.tables(d),
        arrays=settings.arrays(d, first.mean_diameter),
        store_positions=settings.store_positions,
        flush_every=0,
    )
