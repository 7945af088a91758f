"""The same measurement as an analysis of MDAnalysis, on any of its backends."""

import multiprocessing
import pickle
from collections.abc import Callable, Collection, Sequence
from typing import Any

import numpy as np
from MDAnalysis.analysis.backends import BackendBase
from MDAnalysis.analysis.base import AnalysisBase
from MDAnalysis.analysis.results import ResultsGroup
from MDAnalysis.core.groups import UpdatingAtomGroup

from trajcage.analysis.cages import CageOptions
from trajcage.analysis.contacts import ContactOptions
from trajcage.analysis.order import OrderOptions
from trajcage.analysis.regions import RegionOptions
from trajcage.analysis.time_options import TimeOptions
from trajcage.errors import UsageError
from trajcage.model import FrameRecord
from trajcage.neighborhood import set_threads
from trajcage.readers.atoms import open_atoms
from trajcage.run.fold import RunFold
from trajcage.run.frames import MeasuredFrame, measure_frame
from trajcage.run.inputs import Diameter, input_options
from trajcage.run.settings import RunSettings

__all__ = ["CageAnalysis", "ClusterBackend"]


class CageAnalysis(AnalysisBase):  # type: ignore[misc]  # MDAnalysis is untyped
    """Measure the cages of an atom group; results stay in memory.

    For long trajectories use :func:`trajcage.measure`, which keeps a result file, can be
    stopped and resumed, and survives workers that die (with MDAnalysis 2.11 the backend
    ``"multiprocessing"`` waits for those for ever).

    Parameters
    ----------
    atomgroup : MDAnalysis.AtomGroup
        All particles, fixed. MDAnalysis turns nanometers into angstroms: load files in
        other units with ``convert_units=False``.
    diameter : float, mapping of type name to float, or str, optional
        Hard-sphere diameters; from the radii of the atom group unless given. Those of
        GSD files must be given, since MDAnalysis makes up what they do not store.
    box, dimensions, periodic, dt, reach, overlap_tolerance, strict, skip
        As in :func:`trajcage.measure`.
    order, contacts, regions, time_analysis
        As there.
    **kwargs
        Passed to :class:`MDAnalysis.analysis.base.AnalysisBase`.

    Attributes
    ----------
    results : MDAnalysis.analysis.results.Results
        After :meth:`run`: one array for each quantity of the result file, by name,
        (n_frames, n_particles, ...) or (n_frames, ...), such as `free_volume`,
        `cage_status`, `packing_fraction`; `events`, `jumps` and `regions`, dicts of columns; `curves`, a dict of the arrays beside the frames; `summary`, a dict.

    Raises
    ------
    InputError
        If diameters or box are unknown.
    UsageError
        If an option makes no sense.

    Examples
    --------
    >>> universe = MDAnalysis.Universe("melt.gsd")  # doctest: +SKIP
    >>> cages = trajcage.CageAnalysis(universe.atoms, diameter=1.0)  # doctest: +SKIP
    >>> cages.run(backend="dask", n_workers=4)  # doctest: +SKIP
    >>> cages.results.free_volume.mean(axis=1)  # doctest: +SKIP
    """

    _analysis_algorithm_is_parallelizable = True

    def __init__(
        self,
        atomgroup: Any,
        *,
        diameter: Diameter | None = None,
        box: str | Sequence[float] | Sequence[Sequence[float]] | None = None,
        dimensions: int | None = None,
        periodic: str | None = None,
        dt: float | None = None,
        reach: float | None = None,
        overlap_tolerance: float | None = None,
        strict: bool = False,
        skip: Collection[str] = (),
        order: OrderOptions | None = None,
        contacts: ContactOptions | None = None,
        regions: RegionOptions | None = None,
        time_analysis: TimeOptions | None = None,
        **kwargs: Any,
    ) -> None:
        if isinstance(atomgroup, UpdatingAtomGroup):
            raise UsageError(
                "expected the same particles in all frames, got an updating atom group"
            )
        trajectory = atomgroup.universe.trajectory
        super().__init__(trajectory, **kwargs)
        options = input_options(
            str(trajectory.filename),
            diameter=diameter,
            box=box,
            dimensions=dimensions,
            periodic=periodic,
            dt=dt,
        )
        self._settings = RunSettings(
            skip=skip,
            cages=CageOptions(reach, overlap_tolerance, strict),
            order=order or OrderOptions(),
            contacts=contacts or ContactOptions(),
            regions=regions or RegionOptions(),
            time=time_analysis or TimeOptions(),
        )
        before = trajectory.ts.frame
        self._input = open_atoms(atomgroup, options)
        trajectory[before]

    @classmethod
    def get_supported_backends(cls) -> tuple[str, ...]:
        """Names of the backends for :meth:`run`; see also :class:`ClusterBackend`."""
        return ("serial", "multiprocessing", "dask")

    def _prepare(self) -> None:
        if multiprocessing.parent_process() is not None:
            set_threads(1)  # the other cores are for the other workers
        self.results.measured = []

    def _single_frame(self) -> None:
        frame = self._input.frame(self._ts.frame)
        self.results.measured.append(measure_frame(frame, self._settings))

    def _get_aggregator(self) -> ResultsGroup:
        return ResultsGroup({"measured": ResultsGroup.flatten_sequence})

    def _conclude(self) -> None:
        measured: list[MeasuredFrame] = self.results.pop("measured")
        if not measured:
            raise UsageError("expected frames to analyze, none are selected")
        fold = RunFold(self._settings, measured[0].frame, ())
        records: list[FrameRecord] = []
        rows: dict[str, list[Any]] = {}
        for one in measured:
            record, added = fold.update(one)
            records.append(record)
            for name, columns in added.items():
                rows.setdefault(name, []).append(columns)
        d = measured[0].frame.dimensions
        for field in self._settings.fields(d):
            values = [record.values[field.name] for record in records]
            self.results[field.name] = np.array(values, dtype=field.dtype)
        for name, parts in rows.items():
            self.results[name] = _joined(parts)
        self.results.curves, self.results.summary = fold.conclude()


class ClusterBackend(BackendBase):  # type: ignore[misc]  # as above
    """Run an analysis of MDAnalysis on the workers of a dask.distributed cluster.

    The backend named ``"dask"`` starts processes on this machine; this one uses a
    cluster that is already there: ``analysis.run(backend=ClusterBackend(client),
    unsupported_backend=True)``. Workers must see the input under the same paths.

    Parameters
    ----------
    client : distributed.Client
        Connected to the scheduler.
    n_workers : int, optional
        Parts into which the frames are cut; one for each thread of the cluster unless
        given.
    """

    def __init__(self, client: Any, n_workers: int | None = None) -> None:
        self._client = client
        super().__init__(n_workers or sum(client.nthreads().values()))

    def apply(
        self, func: Callable[[Any], Any], computations: Sequence[Any]
    ) -> list[Any]:
        """Call a function with each of several arguments, on the cluster.

        Parameters
        ----------
        func : callable
            Of one argument.
        computations : list
            The arguments.
        """
        # Packed here, so that threads of one worker do not share a universe.
        packed = [pickle.dumps((func, argument)) for argument in computations]
        found: list[Any] = self._client.gather(
            self._client.map(_call, packed, pure=False)
        )
        return found


def _call(packed: bytes) -> Any:
    func, argument = pickle.loads(packed)
    return func(argument)


def _joined(parts: Sequence[dict[str, Any]]) -> dict[str, Any]:
    """Put the rows of all frames together, offsets of ragged columns counted on."""
    joined: dict[str, Any] = {}
    for name in parts[0]:
        columns = [np.asarray(part[name]) for part in parts]
        if name.endswith("_offsets"):
            steps = [np.diff(column) for column in columns]
            joined[name] = np.concatenate([[0], np.cumsum(np.concatenate(steps))])
        else:
            joined[name] = np.concatenate(columns)
    return joined
