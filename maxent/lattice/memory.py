"""How much memory there is, and refusing what does not fit before it is asked for.

Floor: lattice (standard library only). Must not know operators.
"""

from __future__ import annotations

import os
from pathlib import Path

from maxent.errors import ResourceError

_UNITS = ("bytes", "KiB", "MiB", "GiB", "TiB", "PiB", "EiB")


def available_memory() -> int | None:
    """Bytes this process can still get, or None where the system does not tell.

    The smaller of what the machine has free and what a control group leaves.
    """
    found = []
    try:
        for line in Path("/proc/meminfo").read_text().splitlines():
            if line.startswith("MemAvailable:"):
                found.append(int(line.split()[1]) * 1024)
    except OSError:
        try:
            found.append(os.sysconf("SC_PHYS_PAGES") * os.sysconf("SC_PAGE_SIZE"))
        except (AttributeError, OSError, ValueError):
            return None
    try:
        group = Path("/sys/fs/cgroup")
        limit = (group / "memory.max").read_text().strip()
        if limit != "max":
            found.append(max(int(limit) - int((group / "memory.current").read_text()), 0))
    except (OSError, ValueError):
        pass
    return min(found) if found else None


def size_text(n_bytes: int) -> str:
    """Write a number of bytes for people, e.g. '48 GiB'."""
    unit = 0
    while unit < len(_UNITS) - 1 and n_bytes >= 1024 ** (unit + 1):
        unit += 1
    return f"{n_bytes / 1024**unit:.3g} {_UNITS[unit]}"


def require_memory(n_bytes: int, what: str, *, limit: int | None = None) -> None:
    """Refuse a request that does not fit.

    Parameters
    ----------
    n_bytes : int
        What is needed.
    what : str
        Template of the subject of the message, with `{need}` where the size stands.
    limit : int, optional
        Bytes that may be used; default `available_memory`.

    Raises
    ------
    ResourceError
        When `n_bytes` exceeds the limit.
    """
    if limit is None:
        limit = available_memory()
    if limit is not None and n_bytes > limit:
        raise ResourceError(f"{what.format(need=size_text(n_bytes))}; available {size_text(limit)}")
