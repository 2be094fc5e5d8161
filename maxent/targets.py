"""What is asked of each charge.  Floor: targets; knows names, not families."""

from __future__ import annotations

import difflib
import numbers
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

__all__ = ["Exact", "collect", "suggestion"]


@dataclass(frozen=True)
class Exact:
    """The charge has exactly this value.  A plain number means the same.

    Parameters
    ----------
    value : float
        In units of the charge.
    """

    value: float


def suggestion(name: str, known: Sequence[str]) -> str:
    """``"; did you mean 'x'?"`` when something known looks like `name`, else nothing."""
    close = difflib.get_close_matches(name, known, n=1)
    return f"; did you mean {close[0]!r}?" if close else ""


def collect(
    names: Sequence[str], targets: Mapping[str, Any], accuracy: float | Mapping[str, float]
) -> tuple[np.ndarray, np.ndarray]:
    """Targets and their stated accuracies in the order of `names`.

    Returns
    -------
    values, accuracy : (m,) float64

    Raises
    ------
    TypeError
        Targets that are not a mapping or not real numbers.
    ValueError
        Unknown or missing names, NaN or infinite values, a negative accuracy.
    """
    if not isinstance(targets, Mapping):
        raise TypeError(f"targets must be a dict name -> value, not {type(targets).__name__}")
    _check_names(names, targets, "target", every=True)
    values = np.array([_number(targets[n], f"target {n!r}") for n in names], float)
    if isinstance(accuracy, Mapping):
        _check_names(names, accuracy, "accuracy", every=False)
        stated = np.array([_number(accuracy.get(n, 0.0), f"accuracy {n!r}") for n in names], float)
    else:
        stated = np.full(len(names), _number(accuracy, "accuracy"))
    for n, a in zip(names, stated, strict=True):
        if a < 0:
            raise ValueError(f"accuracy {n!r} is {a}; it must not be negative")
    return values, stated


def _check_names(names: Sequence[str], given: Mapping[str, Any], what: str, *, every: bool) -> None:
    unknown = [n for n in given if n not in names]
    if unknown:
        known = ", ".join(repr(n) for n in names) or "none"
        raise ValueError(
            f"{what} {unknown[0]!r} is for no charge (charges: {known}){suggestion(str(unknown[0]), list(names))}"
        )
    missing = [n for n in names if n not in given]
    if every and missing:
        raise ValueError(f"no {what} for charge {missing[0]!r}")


def _number(value: Any, label: str) -> float:
    if isinstance(value, Exact):
        value = value.value
    if isinstance(value, np.ndarray) or hasattr(value, "__array__"):
        array = np.asarray(value)
        if array.ndim:
            raise TypeError(f"{label} must be one number, not an array of shape {array.shape}")
        value = array.item()
    if isinstance(value, numbers.Complex) and not isinstance(value, numbers.Real):
        raise TypeError(f"{label} must be real, not complex: {value}")
    if isinstance(value, bool) or not isinstance(value, numbers.Real):
        raise TypeError(f"{label} must be a number, not {type(value).__name__}")
    if not np.isfinite(float(value)):
        raise ValueError(f"{label} is {value}; it must be finite")
    return float(value)
