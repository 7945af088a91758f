"""Stopping between two frames when a signal asks for it."""

import signal
import threading
from types import FrameType, TracebackType
from typing import Any, Self

__all__ = ["StopRequest"]

_SIGNALS = (signal.SIGINT, signal.SIGTERM)


class StopRequest:
    """Turn the first interrupt into a request that the run looks at by itself.

    A second one acts as usual, for those who cannot wait for the frame to end.
    Signals that the process was told to ignore (as in background jobs of a shell
    script), and all of them outside the main thread, are left alone.
    """

    def __init__(self) -> None:
        self.signal: str | None = None  #: name of the signal that came
        self._before: dict[signal.Signals, Any] = {}

    def __enter__(self) -> Self:
        if threading.current_thread() is threading.main_thread():
            heard = [s for s in _SIGNALS if signal.getsignal(s) != signal.SIG_IGN]
            self._before = {s: signal.signal(s, self._note) for s in heard}
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._give_back()

    def _note(self, number: int, _: FrameType | None) -> None:
        self.signal = signal.Signals(number).name
        self._give_back()

    def _give_back(self) -> None:
        for number, handler in self._before.items():
            signal.signal(number, handler)
        self._before = {}
