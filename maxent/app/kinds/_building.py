"""The step from charges to a family, whose refusals are told at the charge they concern.

Floor: app.
Must not know: which family it is.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import Any

from maxent.app.job import BadInput
from maxent.errors import ResourceError

__all__ = ["build_family"]


def build_family(make: Callable[[], Any], charges: Iterable[str]) -> Any:
    """Call `make`.

    Raises
    ------
    BadInput
        When it refuses its charges, or they need more memory than there is: at the charge that the message names, or
        else at the first one.
    """
    try:
        return make()
    except (ValueError, ResourceError) as bad:
        text, names = str(bad), list(charges)
        name = next((n for n in names if f"charge {n!r}" in text), names[0])
        raise BadInput([(("charges", name), text)]) from None
