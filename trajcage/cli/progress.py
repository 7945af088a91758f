"""One progress bar on standard error, if that is a terminal."""

import sys
import time
from collections.abc import Callable
from contextlib import ExitStack
from typing import Any

import click

from trajcage.cli.verbosity import is_quiet, is_verbose

__all__ = ["progress_bar"]


def progress_bar(stack: ExitStack) -> Callable[[int, int], None] | None:
    """Return a function of frames done and of all frames, if there is a bar.

    There is none without a terminal, and none if the user wants no messages or a log.

    The rate and the time left are those of this run, also when it goes on with a file
    that holds most of the frames already.

    Parameters
    ----------
    stack : ExitStack
        Ends the bar.
    """
    if is_quiet() or is_verbose() or not sys.stderr.isatty():
        return None
    bars: list[Any] = []
    since: list[tuple[int, float]] = []  # frames done and time at the first call

    def advance(done: int, total: int) -> None:
        now = time.monotonic()
        if not bars:
            since.append((done, now))
            bar = click.progressbar(
                length=total,
                label="frames",
                show_pos=True,
                show_eta=False,
                item_show_func=lambda told: told or "",
                file=sys.stderr,
            )
            bars.append(stack.enter_context(bar))
        first, start = since[0]
        told = _pace(done - first, now - start, total - done)
        bars[0].update(done - bars[0].pos, told)

    return advance


def _pace(done: int, seconds: float, left: int) -> str:
    """Tell the rate and the time left, as soon as there is a rate."""
    if done == 0 or seconds <= 0.0:
        return ""
    rate = done / seconds
    minutes, rest = divmod(round(left / rate), 60)
    hours, minutes = divmod(minutes, 60)
    pace = f"{rate:.3g} frames/s" if rate >= 1.0 else f"{1.0 / rate:.3g} s/frame"
    return f"{pace}, {hours}:{minutes:02d}:{rest:02d} left"
