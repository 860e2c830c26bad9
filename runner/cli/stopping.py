"""Stopping: Ctrl-C, a request to end and a closed terminal end a command in order, with a message and a status."""

from __future__ import annotations

import signal
import sys
import threading
import weakref
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType

__all__ = ["StoppedError", "stopping_in_order"]

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


AGAIN_S = 0.01
"""Seconds until a `StoppedError` that was lost is raised again."""


class _Listener:
    """Turns the signals that ask a command to stop into `StoppedError`, once; those that are ignored stay so.

    Python raises it between any two steps, so also where nothing can be raised: in what is called as an object goes, or
    as an import ends. It is lost there, so it is raised again until it has come to where it is answered.
    """

    def __init__(self) -> None:
        self.answered = False
        self.asked = 0
        self._raised: weakref.ref[StoppedError] | None = None
        self._heard = [number for number in WORDS if signal.getsignal(number) is not signal.SIG_IGN]
        for number in self._heard:
            signal.signal(number, self._stop)
        signal.signal(signal.SIGALRM, self._again)
        sys.unraisablehook = self._lost

    @staticmethod
    def _lost(unraisable: sys.UnraisableHookArgs) -> None:
        if not issubclass(unraisable.exc_type, StoppedError):
            sys.__unraisablehook__(unraisable)

    def answer(self) -> None:
        """Say that it has come to where it is answered."""
        self.answered = True
        signal.signal(signal.SIGALRM, signal.SIG_IGN)
        signal.setitimer(signal.ITIMER_REAL, 0.0)

    def _stop(self, number: int, frame: FrameType | None) -> None:
        # Whoever presses Ctrl-C twice must not interrupt the tidying up, which is short.
        for other in self._heard:
            signal.signal(other, signal.SIG_IGN)
        self.asked = number
        raise self._error()

    def _again(self, number: int, frame: FrameType | None) -> None:
        if not self.asked or self.answered:
            return
        if sys.exc_info()[1] is not None:
            # Lost in another error, which may be on its way through the tidying up.
            signal.setitimer(signal.ITIMER_REAL, AGAIN_S)
            return
        raise self._error()

    def _error(self) -> StoppedError:
        # No frame of its traceback may hold it, or it would live on where it is lost.
        error = StoppedError(self.asked)
        self._raised = weakref.ref(error, self._gone)
        return error

    def _gone(self, raised: weakref.ref[StoppedError]) -> None:
        if not self.answered:
            signal.setitimer(signal.ITIMER_REAL, AGAIN_S)


@contextmanager
def stopping_in_order() -> Iterator[None]:
    """End the program with a message and a status where it is asked to stop within.

    Raises
    ------
    SystemExit
        With 128 and the signal's number, once all within has been left.
    """
    listener = _Listener() if threading.current_thread() is threading.main_thread() else None
    try:
        yield
    except BaseException as error:
        if listener is None or not listener.asked:
            raise
        listener.answer()
        # Some of Python's own steps turn the error that stops them into another.
        stopped = StoppedError(listener.asked)
        for note in getattr(error, "__notes__", ()):
            stopped.add_note(note)
        print(f"modepair: {stopped}", file=sys.stderr)
        sys.exit(stopped.status)
