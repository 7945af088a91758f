"""Kill measuring processes at random moments; check that nothing committed is lost.

Usage: python scripts/kill_runs.py [kills] [seed]

Runs `trajcage measure --resume` on a small trajectory again and again and kills the
process (SIGKILL) after a random time, mostly behind its imports. After every kill the
file, if there is one, must open, hold as many frames as its counter says, each equal to
that of an uninterrupted run, and never fewer than before. When a run gets through, its
file must equal the uninterrupted one dataset by dataset; then a new one starts. Exits with
1 at the first deviation. However it ends, it prints its counts and how it ended (only a
SIGKILL of its own leaves no more than the last line of progress).
"""

import random
import signal
import subprocess
import sys
import tempfile
import time
from collections import Counter
from pathlib import Path

import numpy as np

import trajcage

sys.path.insert(0, str(Path(__file__).parents[1] / "tests"))
import crowd
import run_scenario as scenario

N_FRAMES = 150


def measure(source: Path, output: Path) -> list[str]:
    command = [sys.executable, "-m", "trajcage", "measure", "-q", "--resume"]
    return [*command, str(source), "-o", str(output)]


def check_frames(path: Path, whole: Path) -> int:
    """Compare all frames of a killed file with the uninterrupted run."""
    with trajcage.open_result(path) as found, trajcage.open_result(whole) as expected:
        n = found.frames_complete
        for name in found.fields:
            one, other = np.asarray(found[name]), np.asarray(expected[name][:n])
            assert one.tobytes() == other.tobytes(), name
        if found.summary:
            assert found.summary["n_frames"] == found.arrays_frames <= n
        return n


def kill_runs(kills: int, seed: int, counts: Counter[str], folder: Path) -> None:
    """Kill and check until a number of runs was killed."""
    moments = random.Random(seed)
    source = crowd.write(folder / "a.gsd", N_FRAMES)
    whole, path = folder / "whole.h5", folder / "r.h5"
    subprocess.run(measure(source, path), check=True)  # compiles, if need be
    path.unlink()
    start = time.monotonic()
    subprocess.run(measure(source, whole), check=True)
    longest = 1.2 * (time.monotonic() - start)
    before = 0
    while counts["kills"] < kills:
        process = subprocess.Popen(measure(source, path), stderr=subprocess.PIPE)
        try:
            _, told = process.communicate(
                timeout=moments.uniform(0.2 * longest, longest)
            )
        except subprocess.TimeoutExpired:
            process.kill()
            process.communicate()
            counts["kills"] += 1
            if counts["kills"] % 10 == 0:
                print(f"{counts['kills']} kills", file=sys.stderr, flush=True)
            if not path.exists():
                counts["killed before there was a file"] += 1
                continue
            n = check_frames(path, whole)
            assert n >= before, (n, before)
            counts["opened, frames intact"] += 1
            counts["with frames added since the last kill"] += n > before
            before = n
            continue
        assert process.returncode == 0, (process.returncode, told.decode())
        scenario.assert_same(path, whole)
        counts["runs that got through, equal to the uninterrupted one"] += 1
        path.unlink()
        before = 0
    subprocess.run(measure(source, path), check=True)
    scenario.assert_same(path, whole)
    left = {p.name for p in folder.iterdir()} - {p.name for p in (source, whole, path)}
    assert not left, f"files left over: {sorted(left)}"


def stop(number: int, _: object) -> None:
    sys.exit(f"stopped by {signal.Signals(number).name}")


def main() -> None:
    kills = int(sys.argv[1]) if len(sys.argv) > 1 else 200
    seed = int(sys.argv[2]) if len(sys.argv) > 2 else 1
    for number in (signal.SIGTERM, signal.SIGHUP, signal.SIGINT):
        signal.signal(number, stop)
    counts: Counter[str] = Counter()
    ending = "all checks passed"
    try:
        with tempfile.TemporaryDirectory() as folder:
            kill_runs(kills, seed, counts, Path(folder))
    except BaseException as error:
        ending = f"NOT FINISHED: {type(error).__name__}: {error}"
        raise
    finally:
        for name, count in counts.items():
            print(f"{count:5d} {name}")
        print(f"seed {seed}, {kills} kills asked for: {ending}", flush=True)


if __name__ == "__main__":
    main()
