"""Stopping: Ctrl-C, a request to end and a closed terminal end a command in order, with a message and a status."""

from __future__ import annotations

import signal
import threading
from types import FrameType

__all__ = ["StoppedError", "stop_in_order"]

WORDS = {
    signal.SIGINT: "interrupted",
    signal.SIGTERM: "ended by a request to terminate",
    signal.SIGHUP: "ended, since its terminal was closed",
}


class StoppedError(BaseException):
    """The command was asked to stop. No `Exception`, so that nothing takes it for a failure and goes on.

    Parameters
    ----------
    number : int
        The signal.
    """

    def __init__(self, number: int) -> None:
        super().__init__(number)
        self.status = 128 + number

    def __str__(self) -> str:
        kept = getattr(self, "__notes__", ["nothing was written"])
        return "; ".join([WORDS[signal.Signals(self.args[0])], *kept])


def stop_in_order() -> None:
    """Turn the signals that ask a command to stop into `StoppedError`, once; those that are ignored stay so."""
    if threading.current_thread() is not threading.main_thread():
        return
    heard = [number for number in WORDS if signal.getsignal(number) is not signal.SIG_IGN]

    def stop(number: int, frame: FrameType | None) -> None:
        # Whoever presses Ctrl-C twice must not interrupt the tidying up, which is short.
        for other in heard:
            signal.signal(other, signal.SIG_IGN)
        raise StoppedError(number)

    for number in heard:
        signal.signal(number, stop)
