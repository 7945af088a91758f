"""Memory of whole runs: one huge frame after the other, and many frames.

Usage: python scripts/bench_memory.py [n_particles] [n_frames] [workers]

Frames of an FCC lattice with thermal noise at packing fraction 0.5 (about as many particles
as asked for; 1,000,000 in 3 frames unless given) are written as GSD and measured by
`trajcage measure` with two workers. Printed are the largest memory of all its processes
together (shared pages counted once: the sum of their proportional set sizes, sampled
20 times a second), and how it grows from the middle to the end of the run. Linux only.
"""

import subprocess
import sys
import tempfile
import time
from contextlib import suppress
from pathlib import Path

import gsd.hoomd
import numpy as np
from packings import fcc


def write_sample(path: Path, n_particles: int, n_frames: int) -> int:
    packing = fcc(max(2, round((n_particles / 4) ** (1 / 3))), 0.5)
    rng = np.random.default_rng(1)
    n, lengths = len(packing.positions), packing.lengths
    with gsd.hoomd.open(path, "w") as file:
        for k in range(n_frames):
            # little enough that no spheres overlap: the gaps are 14 % of a diameter
            noise = rng.uniform(-0.035, 0.035, (n, 3))
            frame = gsd.hoomd.Frame()
            frame.configuration.step = k
            frame.configuration.box = [*lengths, 0, 0, 0]
            frame.particles.N = n
            frame.particles.position = (packing.positions + noise) % lengths
            frame.particles.position -= 0.5 * np.asarray(lengths)
            file.append(frame)
    return n


def family(pid: int) -> list[int]:
    """Return a process and all its descendants."""
    found = [pid]
    for parent in found:
        with suppress(OSError):
            for task in Path(f"/proc/{parent}/task").iterdir():
                found += map(int, (task / "children").read_text().split())
    return found


def memory(pids: list[int]) -> int:
    """Sum of the proportional set sizes, bytes."""
    total = 0
    for pid in pids:
        with suppress(OSError):
            for line in Path(f"/proc/{pid}/smaps_rollup").read_text().splitlines():
                if line.startswith("Pss:"):
                    total += int(line.split()[1]) * 1024
    return total


def watch(command: list[str]) -> list[tuple[float, int]]:
    """Run a command; return times and memory."""
    process = subprocess.Popen(command)
    samples: list[tuple[float, int]] = []
    start = time.monotonic()
    while process.poll() is None:
        samples.append((time.monotonic() - start, memory(family(process.pid))))
        time.sleep(0.05)
    if process.returncode:
        sys.exit(f"{' '.join(command)} ended with {process.returncode}")
    return samples


def main() -> None:
    given = [int(word) for word in sys.argv[1:]]
    n_particles, n_frames, workers = (*given, *(1_000_000, 3, 2)[len(given) :])
    with tempfile.TemporaryDirectory() as folder:
        source, output = Path(folder) / "large.gsd", Path(folder) / "large.h5"
        n = write_sample(source, n_particles, n_frames)
        command = [sys.executable, "-m", "trajcage", "measure", "-q", str(source)]
        command += ["--diameter", "1", "-o", str(output), "--workers", str(workers)]
        samples = watch(command)
        size = output.stat().st_size
    mib = 2.0**20
    end = samples[-1][0]
    print(f"{n} particles, {n_frames} frames, {workers} workers: {end:.0f} s")
    print(
        f"most memory of all processes together: {max(m for _, m in samples) / mib:.0f} MiB"
    )
    for low, high in ((0.25, 0.5), (0.5, 0.75), (0.75, 1.0)):
        part = [m for t, m in samples if low * end <= t <= high * end]
        print(
            f"  in the {low:.0%} to {high:.0%} of the time: mean "
            f"{np.mean(part) / mib:.0f}, most {max(part) / mib:.0f} MiB"
        )
    print(f"result file: {size / mib:.0f} MiB")


if __name__ == "__main__":
    main()
