"""Kill measuring processes at random moments; check that nothing committed is lost.

Usage: python scripts/kill_runs.py [kills] [seed]

Runs `trajcage measure --resume` on a small trajectory again and again and kills the
process (SIGKILL) after a random time, mostly behind its imports. After every kill the
file, if there is one, must open, hold as many frames as its counter says, each equal to
that of an uninterrupted run, and never fewer than before. When a run gets through, its file must equal the
uninterrupted one dataset by dataset; then a new one starts. Prints counts; exits with 1 at
the first deviation.
"""

import random
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


def main() -> None:
    kills = int(sys.argv[1]) if len(sys.argv) > 1 else 200
    moments = random.Random(int(sys.argv[2]) if len(sys.argv) > 2 else 1)
    counts: Counter[str] = Counter()
    with tempfile.TemporaryDirectory() as folder:
        source = crowd.write(Path(folder) / "a.gsd", N_FRAMES)
        whole, path = Path(folder) / "whole.h5", Path(folder) / "r.h5"
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
                if counts["kills"] % 20 == 0:
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
            assert process.returncode == 0, told.decode()
            scenario.assert_same(path, whole)
            counts["runs that got through, equal to the uninterrupted one"] += 1
            path.unlink()
            before = 0
        left = sorted(p.name for p in Path(folder).iterdir())
    for name, count in counts.items():
        print(f"{count:5d} {name}")
    print("files left:", *left)


if __name__ == "__main__":
    main()
