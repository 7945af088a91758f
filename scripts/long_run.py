"""A long run of a dense fluid: cages break, and interruptions leave no trace.

Usage: python scripts/long_run.py [n_frames] [n_interruptions] [folder]

Makes a trajectory of 1,000 polydisperse hard spheres (10 %) at packing fraction 0.56 by
Monte Carlo, 150 sweeps from frame to frame, and measures everything on every frame. Prints
how correlations decay, how far particles move when their cage breaks beside how far they
vibrate, and Kaplan-Meier curves. Then measures again, stopped by SIGTERM after each of a
sampled set of frames and resumed, and compares the two files dataset by dataset. Exits with
1 at the first deviation. Takes ten minutes on an idle core.

The vibration amplitude is the root of the mean squared displacement relative to the
neighbors at the lag at which its log-log curve is flattest.
"""

import os
import signal
import sys
import tempfile
import time
from collections.abc import Callable
from contextlib import suppress
from pathlib import Path

import gsd.hoomd
import numpy as np
from monte_carlo import polydisperse, random_fluid

import trajcage
from trajcage.analysis.path_splits import msd_crossover
from trajcage.errors import InterruptedRunError
from trajcage.store import Result

sys.path.insert(0, str(Path(__file__).parents[1] / "tests"))
import run_scenario as scenario

N_PARTICLES = 1000
SWEEPS = 150  # from frame to frame


def write_trajectory(path: Path, n_frames: int) -> None:
    radii = polydisperse(N_PARTICLES, 0.10)
    # exchanges of radii equilibrate it; only moves make the trajectory
    chain = random_fluid(
        N_PARTICLES, 0.56, radii, seed=41, sweeps=3000, swap_fraction=0.2
    )
    chain.equilibrate(200, acceptance=0.4)
    chain.start_clock()
    with gsd.hoomd.open(path, "w") as file:
        for _ in range(n_frames):
            frame = gsd.hoomd.Frame()
            frame.configuration.step = chain.sweeps
            frame.configuration.box = [*chain.lengths, 0, 0, 0]
            frame.particles.N = N_PARTICLES
            frame.particles.position = chain.positions - 0.5 * chain.lengths
            frame.particles.diameter = 2.0 * chain.radii
            file.append(frame)
            chain.run(SWEEPS)


def tell(result: Result) -> None:
    """Print and check what such a fluid has to show."""
    lag, msd, relative, neighbors, cages, overlap, origins = (
        np.asarray(result.array(f"correlations/{name}"), dtype=np.float64)
        for name in (
            "lag",
            "msd",
            "cage_relative_msd",
            "neighbor_correlation",
            "cage_correlation",
            "overlap",
            "n_origins",
        )
    )
    print(
        "lag [frames]   origins       msd  relative to cage    overlap  C neighbors  cages"
    )
    for k in range(0, len(lag), 2):
        print(
            f"{lag[k] / SWEEPS:12.0f} {origins[k]:9.0f} {msd[k]:9.4f} {relative[k]:17.4f} "
            f"{overlap[k]:10.3f} {neighbors[k]:12.4f} {cages[k]:6.3f}"
        )
    assert neighbors[-1] < 0.9 * neighbors[0]
    assert np.all(np.diff(neighbors) < 0.01)
    plateau, reason = msd_crossover(lag, relative)
    assert not reason, reason
    events = result.table("events")
    moved = np.linalg.norm(events["displacement"], axis=1)
    amplitude = float(np.sqrt(plateau))
    print(f"vibration amplitude {amplitude:.3f} mean diameters")
    print(
        f"{len(moved)} cages broke; displacement: median {np.median(moved):.3f}, "
        f"5 % below {np.quantile(moved, 0.05):.3f}"
    )
    assert len(moved) > 100
    assert np.quantile(moved, 0.05) > amplitude
    for name in ("persistence", "survival"):
        time, survival, lower, upper, ended, censored = (
            np.asarray(result.array(f"{name}/{column}"), dtype=np.float64)
            for column in (
                "time",
                "survival",
                "survival_lower",
                "survival_upper",
                "ended",
                "censored",
            )
        )
        assert np.all(np.diff(survival) <= 0.0)
        banded = np.isfinite(lower)  # no band before anything ended
        assert np.all((lower <= survival)[banded] & (survival <= upper)[banded])
        print(
            f"Kaplan-Meier {name}: {ended.sum():.0f} ended, {censored.sum():.0f} censored; "
            + ", ".join(
                f"S({time[k] / SWEEPS:.0f}) = {survival[k]:.3f} "
                f"[{lower[k]:.3f}, {upper[k]:.3f}]"
                for k in np.linspace(0, len(time) - 1, 4).astype(int)
            )
        )
    known = result.summary["time"]
    for name in ("persistence_median", "lifetime_median", "relaxation_time"):
        why = result.summary["time_reasons"].get(name)
        print(f"{name}: {why or f'{known[name] / SWEEPS:.1f} frames'}")


def stop_after(frames: set[int]) -> Callable[[int, int], None]:
    """Tell this process to stop after each of some frames."""

    def progress(done: int, _: int) -> None:
        if done in frames:
            frames.remove(done)
            os.kill(os.getpid(), signal.SIGTERM)

    return progress


def run(folder: Path, n_frames: int, n_interruptions: int) -> None:
    source = folder / "dense.gsd"
    if not source.exists():
        start = time.process_time()
        write_trajectory(source, n_frames)
        print(f"{n_frames} frames made in {time.process_time() - start:.0f} s")
    whole = folder / "whole.h5"
    start = time.process_time()
    with trajcage.measure(source, output=whole, overwrite=True) as result:
        spent = time.process_time() - start
        print(f"measured in {spent:.0f} s of processor time")
        tell(result)
    compare_interrupted(source, whole, folder / "interrupted.h5", n_interruptions)


def compare_interrupted(
    source: Path, whole: Path, interrupted: Path, n_interruptions: int
) -> None:
    """Measure once more, stopped and resumed many times, and compare the files."""
    with trajcage.open_result(whole) as result:
        n_frames = result.frames_complete
    interrupted.unlink(missing_ok=True)
    rng = np.random.default_rng(5)
    frames = set(rng.choice(np.arange(1, n_frames), n_interruptions, replace=False))
    print("stopped after frames", *sorted(int(k) for k in frames))
    stop, stops, complete = stop_after(frames), 0, False
    while not complete:
        with suppress(InterruptedRunError):
            trajcage.measure(
                source, output=interrupted, resume=True, progress=stop
            ).close()
        with trajcage.open_result(interrupted) as result:
            complete = result.complete
            stops += not complete
    assert stops == n_interruptions, stops
    scenario.assert_same(whole, interrupted)
    n_datasets = len(scenario.contents(whole))
    print(f"{stops} interruptions: all {n_datasets} datasets equal bit for bit")


def main() -> None:
    n_frames = int(sys.argv[1]) if len(sys.argv) > 1 else 1000
    n_interruptions = int(sys.argv[2]) if len(sys.argv) > 2 else 12
    if len(sys.argv) > 3:
        run(Path(sys.argv[3]), n_frames, n_interruptions)
        return
    with tempfile.TemporaryDirectory() as folder:
        run(Path(folder), n_frames, n_interruptions)


if __name__ == "__main__":
    main()
