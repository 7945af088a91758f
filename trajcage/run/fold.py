"""Everything that needs more than one frame, in order, resumable bit for bit."""

import dataclasses
import math
from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from trajcage.analysis.absence import why_absent
from trajcage.analysis.comparison import (
    compare_equations,
    compare_lattices,
    phase_table,
)
from trajcage.analysis.conclusion import SUMMARY as TIME_SCALARS
from trajcage.analysis.conclusion import Conclusion
from trajcage.analysis.distributions import FreeVolumeDistribution
from trajcage.analysis.fold import TimeFold
from trajcage.analysis.regions import find_regions, measure_regions
from trajcage.analysis.state import State, prefixed, under
from trajcage.analysis.statistics import BlockMoments, MeanEstimate
from trajcage.analysis.thermodynamics import CompressibilityStatus
from trajcage.analysis.tracking import RegionTracker
from trajcage.model import CageStatus, Field, Frame, FrameRecord
from trajcage.run.frames import MeasuredFrame
from trajcage.run.growth import Trail
from trajcage.run.settings import RunSettings

__all__ = ["RunFold"]

_Rows = dict[str, dict[str, NDArray[np.generic]]]


#: Shares that are biased while the record is shorter than the mobility window; those
#: frames are left out of their means and counted as missing.
_NEED_MOBILITY = {"broken_fraction", "fluid_fraction", "glass_fraction"}


class RunFold:
    """Consume measured frames in order; yield records, curves and the summary.

    Parameters
    ----------
    settings : RunSettings
        What the run measures.
    first : Frame
        The first frame of the run, which sets the number of particles and the
        scales of length.
    inputs : sequence of dict
        Size and sha256 of the input files as they are now, for the summary.
    """

    def __init__(
        self,
        settings: RunSettings,
        first: Frame,
        inputs: Sequence[Mapping[str, str | int]],
    ) -> None:
        n, d = first.positions.shape
        self._settings = settings
        self._first = first
        self._inputs = [{k: file[k] for k in ("size", "sha256")} for file in inputs]
        scalars = [
            f for f in settings.fields(d) if not (f.per_particle or f.shape or f.codes)
        ]
        self._names = tuple(f.name for f in scalars)
        self._scales = [_scale(f, first.mean_diameter) for f in scalars]
        self._series = BlockMoments(len(self._names), 1)
        self._missing = np.zeros(len(self._names), dtype=np.int64)
        self._statuses = np.zeros(len(CageStatus), dtype=np.int64)
        self._factors = np.zeros(len(CompressibilityStatus), dtype=np.int64)
        self._distribution = FreeVolumeDistribution(d, first.mean_diameter)
        self._tracker = RegionTracker()
        self.trail = Trail()
        self._time = TimeFold(settings.time, n, d, first.mean_diameter)
        self._n_frames = 0

    @property
    def n_frames(self) -> int:
        """Frames consumed so far."""
        return self._n_frames

    def update(self, measured: MeasuredFrame) -> tuple[FrameRecord, _Rows]:
        """Take the next frame; return what to store.

        Raises
        ------
        FrameError
            If the frame does not follow the one before; nothing has changed then.
        """
        frame, values = measured.frame, dict(measured.values)
        self._check_radii(frame)
        rows: _Rows = {}
        regions: dict[str, NDArray[np.generic] | float | int] = {}

        def classify(broken: NDArray[np.bool_] | None) -> NDArray[np.integer]:
            assert measured.bonds is not None
            regions.update(
                measure_regions(
                    np.asarray(values["structure"], np.uint8),
                    measured.cages.status,
                    broken,
                    measured.bonds,
                )
            )
            return np.asarray(regions["region"], np.uint8)

        has_regions = self._settings.has("regions")
        if self._settings.has("time"):
            arrays = {name: np.asarray(value) for name, value in values.items()}
            output = self._time.update(frame, arrays, classify if has_regions else None)
            values |= output.values
            rows |= output.rows
        elif has_regions:
            classify(None)
        if has_regions:
            values |= regions
            values["region_id"], rows["regions"] = self._follow(measured, values)
        if self._settings.store_walls:
            rows["walls"] = _wall_rows(measured)
        self._distribution.update(measured.cages)
        self._statuses += np.bincount(
            measured.cages.status, minlength=len(self._statuses)
        )
        self._factors[int(values["compressibility_status"])] += 1
        early = not values.get("mobility_known", True)
        for row, name in enumerate(self._names):
            value = np.array([values[name]], dtype=np.float64)
            if np.isfinite(value[0]) and not (early and name in _NEED_MOBILITY):
                self._series.add(row, value)
            else:
                self._missing[row] += 1
        self.trail.add(frame)
        self._n_frames += 1
        record = FrameRecord(frame.index, frame.step, frame.time, frame.box, values)
        return record, rows

    def _check_radii(self, frame: Frame) -> None:
        same = frame.radii == self._first.radii
        if not (self._settings.varying_radii or same.all()):
            raise frame.error(
                "expected the radii of the first frame, as the last frame has them; "
                f"found others for {frame.name_particles(~same)}; give the diameters "
                "with --diameter (or diameter=)"
            )

    def _follow(
        self,
        measured: MeasuredFrame,
        values: Mapping[str, NDArray[np.generic] | float | int],
    ) -> tuple[NDArray[np.int64], dict[str, NDArray[np.generic]]]:
        """Lasting region of each particle, and the rows of the region table."""
        assert measured.bonds is not None
        frame, cages = measured.frame, measured.cages
        table = find_regions(
            frame,
            np.asarray(values["region"], np.uint8),
            measured.bonds,
            cages.free_volume,
            np.asarray(values["local_packing_fraction"], np.float64),
            cages.weakest_window,
            self._settings.regions,
        )
        ids = self._tracker.update(frame.ids, table)
        k = len(ids)
        member = table.label >= 0
        region_id = np.full(len(member), -1, dtype=np.int64)
        region_id[member] = ids[table.label[member]]
        return region_id, {
            "frame": np.full(k, frame.index),
            "step": np.full(k, frame.step),
            "time": np.full(k, frame.time),
            "region_id": ids,
            "kind": table.kind,
            "size": table.size,
            "center": table.center,
            "free_volume_mean": table.free_volume,
            "free_volume_count": table.n_free_volume,
            "local_packing_fraction_mean": table.packing_fraction,
            "local_packing_fraction_count": table.n_packing_fraction,
            "weakest_window_mean": table.weakest_window,
            "weakest_window_count": table.n_weakest_window,
        }

    def conclude(self) -> tuple[dict[str, NDArray[np.generic]], dict[str, object]]:
        """Arrays and summary of the frames so far; changes nothing."""
        arrays = self._distribution.arrays()
        time: Conclusion | None = None
        if self._settings.has("time"):
            time = self._time.conclude()
            arrays |= time.arrays
        summary = self._summary(time)
        return arrays, {name: _jsonable(value) for name, value in summary.items()}

    def _summary(self, time: Conclusion | None) -> dict[str, object]:
        first = self._first
        d = first.dimensions
        factors = dict(
            zip(
                (code.name.lower() for code in CompressibilityStatus),
                self._factors.tolist(),
                strict=True,
            )
        )
        estimates = {name: self._estimate(row) for row, name in enumerate(self._names)}
        for name, estimate in estimates.items():
            if estimate.n_missing and not estimate.n_values:
                why = why_absent(
                    name, equal_radii=first.equal_radii, compressibility=factors
                )
                estimates[name] = dataclasses.replace(estimate, reason=why)
        phi = estimates["packing_fraction"].mean
        factor = estimates["compressibility_factor"]
        summary: dict[str, object] = {
            "n_frames": self._n_frames,
            "n_particles": first.n_particles,
            "dimensions": d,
            "inputs": self._inputs,
            "lengths_in": "mean_diameter",
            "mean_diameter": first.mean_diameter,
            "equal_radii": first.equal_radii,
            "cages": dict(
                zip(
                    (code.name.lower() for code in CageStatus),
                    self._statuses.tolist(),
                    strict=True,
                )
            ),
            "compressibility_status": factors,
            "observables": {
                name: dataclasses.asdict(estimate)
                for name, estimate in estimates.items()
            },
            "free_volume": self._distribution.summary(),
        }
        if self._n_frames:
            summary |= {
                "equations_of_state": compare_equations(d, first.radii, phi, factor),
                "lattices": compare_lattices(d, phi, estimates),
                "phase_marks": phase_table(d),
            }
        if time is not None:
            summary["time"] = {
                f.name: time.summary[f.name] / _scale(f, first.mean_diameter)
                for f in TIME_SCALARS
            }
            summary["time_reasons"] = time.reasons
        return summary

    def _estimate(self, row: int) -> MeanEstimate:
        """Mean and error of an observable, lengths in mean diameters."""
        scale = self._scales[row]
        mean = float(self._series.mean(row)[0]) / scale
        estimate = self._series.estimate(row, mean, np.ones(1) / scale)
        return dataclasses.replace(estimate, n_missing=int(self._missing[row]))

    def state(self) -> State:
        """All that is needed to continue, as arrays."""
        own = {
            "missing": self._missing.copy(),
            "statuses": self._statuses.copy(),
            "factors": self._factors.copy(),
            "n_frames": np.array(self._n_frames),
        }
        state: State = prefixed("own", own)
        for name, part in self._parts().items():
            state |= prefixed(name, part.state())
        return state

    def restore(self, state: Mapping[str, NDArray[np.generic]]) -> None:
        """Continue from what :meth:`state` returned."""
        own = under("own", state)
        self._missing = np.array(own["missing"], dtype=np.int64)
        self._statuses = np.array(own["statuses"], dtype=np.int64)
        self._factors = np.array(own["factors"], dtype=np.int64)
        self._n_frames = int(own["n_frames"])
        for name, part in self._parts().items():
            part.restore(under(name, state))

    def _parts(
        self,
    ) -> dict[
        str, BlockMoments | FreeVolumeDistribution | RegionTracker | TimeFold | Trail
    ]:
        return {
            "series": self._series,
            "distribution": self._distribution,
            "tracker": self._tracker,
            "trail": self.trail,
            "time": self._time,
        }


def _wall_rows(measured: MeasuredFrame) -> dict[str, NDArray[np.generic]]:
    walls = measured.cages.walls
    assert walls is not None
    n = measured.frame.n_particles
    return {
        "frame": np.full(n, measured.frame.index),
        "particle": np.arange(n),
        "neighbors": walls.neighbors,
        "neighbors_offsets": walls.offsets,
        "areas": walls.areas,
        "areas_offsets": walls.offsets,
    }


def _scale(field: Field, mean_diameter: float) -> float:
    """Return the unit of a field, with lengths in mean diameters, in the run's units."""
    power = 0
    for factor in field.unit.split():
        if factor.startswith("length"):
            power = int(factor.removeprefix("length") or 1)
    return float(mean_diameter**power)


def _jsonable(value: object) -> object:
    """Replace what JSON cannot hold: NaN and infinity become null."""
    if isinstance(value, dict):
        return {name: _jsonable(item) for name, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [_jsonable(item) for item in value]
    if isinstance(value, np.generic):
        return _jsonable(value.item())
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value
