"""Progress of a run: the newest line every two seconds, and nothing from runs that take less.

A step that goes on is told again with its seconds, after twice as long each time.

Floor: app.  Must not know: what is being done, where lines go.
"""

from __future__ import annotations

import threading
from collections.abc import Callable
from types import TracebackType

__all__ = ["EVERY", "Progress"]

#: Seconds between two lines.
EVERY = 2.0


class Progress:
    """Receiver of lines, a context manager; a thread shows what was told last, so that long steps are seen, too.

    Parameters
    ----------
    show : callable
        Takes the line that is to be seen.
    every : float, optional
        Seconds between two lines, and before the first.

    Examples
    --------
    >>> shown = []
    >>> with Progress(shown.append, every=60.0) as progress:
    ...     progress("a short step")
    >>> shown
    []
    """

    def __init__(self, show: Callable[[str], None], *, every: float = EVERY):
        self._show, self._every = show, every
        self._newest: str | None = None
        self._over = threading.Event()
        self._thread = threading.Thread(target=self._watch, daemon=True)

    def __call__(self, line: str) -> None:
        """Take note of what is being done now."""
        self._newest = line

    def __enter__(self) -> Progress:
        self._thread.start()
        return self

    def __exit__(self, kind: type[BaseException] | None, value: BaseException | None, at: TracebackType | None) -> None:
        self._over.set()
        self._thread.join()

    def _watch(self) -> None:
        told, waited, pause = "", 0.0, self._every
        while not self._over.wait(self._every):
            line, self._newest = self._newest, None
            if line is not None:
                told, waited, pause = line, 0.0, self._every
                self._show(line)
                continue
            waited += self._every
            if told and waited >= 2 * pause:
                pause = waited
                self._show(f"{told} ({waited:.0f} s so far)")
