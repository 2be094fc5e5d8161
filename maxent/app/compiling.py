"""What the command does about JAX's compilation: keep its products between runs, and count its time apart.

Floor: app.  Imports JAX, so it is only imported where the JAX driver was asked for.
"""

from __future__ import annotations

import os
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import jax

__all__ = ["Clock", "cache_folder", "counted"]


class Clock:
    """Seconds spent compiling (tracing, lowering, back end), and in all."""

    def __init__(self) -> None:
        self.compile = 0.0
        self.total = 0.0

    def hear(self, event: str, duration_secs: float, **_: str | int) -> None:
        """Listen to JAX's own account of what it does."""
        if event.startswith("/jax/core/compile/"):
            self.compile += duration_secs


def cache_folder() -> Path:
    """Where compiled code is kept: ``maxent/compiled`` in the user's cache folder (XDG Base Directory)."""
    base = os.environ.get("XDG_CACHE_HOME", "")
    return (Path(base) if os.path.isabs(base) else Path.home() / ".cache") / "maxent" / "compiled"


@contextmanager
def counted() -> Iterator[Clock]:
    """Keep what is compiled inside for the next run, and tell how long it took.

    JAX would only keep what took a second to compile; fits are smaller than that.  A cache that cannot be written is
    no trouble: JAX then compiles again.
    """
    jax.config.update("jax_compilation_cache_dir", str(cache_folder()))
    jax.config.update("jax_persistent_cache_min_compile_time_secs", 0)
    jax.config.update("jax_persistent_cache_min_entry_size_bytes", -1)
    clock = Clock()
    jax.monitoring.register_event_duration_secs_listener(clock.hear)
    start = time.perf_counter()
    try:
        yield clock
    finally:
        clock.total = time.perf_counter() - start
        jax.monitoring.unregister_event_duration_listener(clock.hear)
