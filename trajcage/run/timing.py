"""Where the time of a run goes, told in its log."""

import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager

__all__ = ["Stages"]


class Stages:
    """Seconds spent in each stage of a run, in the order of their first appearance."""

    def __init__(self) -> None:
        self.seconds: dict[str, float] = {}

    @contextmanager
    def timed(self, stage: str) -> Iterator[None]:
        """Add the time spent in a ``with`` block to a stage."""
        start = time.perf_counter()
        try:
            yield
        finally:
            self.add({stage: time.perf_counter() - start})

    def add(self, seconds: Mapping[str, float]) -> None:
        """Add times that were taken elsewhere."""
        for stage, more in seconds.items():
            self.seconds[stage] = self.seconds.get(stage, 0.0) + more

    def __str__(self) -> str:
        return ", ".join(f"{stage} {t:.3g} s" for stage, t in self.seconds.items())
