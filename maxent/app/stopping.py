"""Signals that ask a command to stop: each becomes one exception, so that a stopped run tidies up after itself.

Floor: app.  Standard library only.  Must not know: what is to be tidied up.
"""

from __future__ import annotations

import signal
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType

__all__ = ["Stopped", "stoppable", "undisturbed"]

#: Ctrl-C, `kill` and batch systems, a terminal that closes (not known on every system).
_SIGNALS = [getattr(signal, name) for name in ("SIGINT", "SIGTERM", "SIGHUP") if hasattr(signal, name)]


class Stopped(KeyboardInterrupt):
    """A signal asked this process to stop.

    Parameters
    ----------
    number : int
        The signal.
    """

    def __init__(self, number: int):
        super().__init__(number)
        self.number = number

    @property
    def exit_code(self) -> int:
        """What a shell reports for it."""
        return 128 + self.number


_busy = 0


@contextmanager
def stoppable() -> Iterator[None]:
    """Raise `Stopped` inside when one of the signals arrives.

    A signal that the caller of the process has switched off (`nohup`) stays off.  Outside the main thread, where
    Python takes no signals, nothing is changed.
    """
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = {number: signal.getsignal(number) for number in _SIGNALS}
    for number, handler in before.items():
        if handler not in (signal.SIG_IGN, None):
            signal.signal(number, _stop)
    try:
        yield
    finally:
        for number, handler in before.items():
            if handler is not None:
                signal.signal(number, handler)


@contextmanager
def undisturbed() -> Iterator[None]:
    """Let no signal interrupt the few steps inside, which end the work anyway; those that arrive are dropped."""
    global _busy
    _busy += 1
    try:
        yield
    finally:
        _busy -= 1


def _stop(number: int, frame: FrameType | None) -> None:
    if not _busy:
        raise Stopped(number)
