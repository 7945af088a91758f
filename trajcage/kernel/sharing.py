"""Share work among threads."""

from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from typing import TypeVar

__all__ = ["in_threads"]

Part = TypeVar("Part")
Result = TypeVar("Result")


def in_threads(
    work: Callable[[Part], Result], parts: Sequence[Part], threads: int
) -> list[Result]:
    """Do the work on each part, in the thread of the caller if it is one."""
    if threads <= 1 or len(parts) <= 1:
        return [work(part) for part in parts]
    with ThreadPoolExecutor(min(threads, len(parts))) as pool:
        return list(pool.map(work, parts))
