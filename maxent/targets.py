"""What is asked of each charge.  Floor: targets; knows names, not families."""

from __future__ import annotations

import difflib
import numbers
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from maxent.core.slack import Slack

__all__ = [
    "AtLeast", "AtMost", "Exact", "Measured", "Within", "collect", "collect_slack", "collect_units", "suggestion",
]  # fmt: skip


@dataclass(frozen=True)
class Exact:
    """The charge has exactly this value.  A plain number means the same.

    Parameters
    ----------
    value : float
        In units of the charge.
    """

    value: float


@dataclass(frozen=True)
class Within:
    """The charge lies within a tolerance of a value: ``|<Q> - value| <= tolerance``, a hard limit.

    Parameters
    ----------
    value, tolerance : float
        In units of the charge; the tolerance is positive.
    """

    value: float
    tolerance: float


@dataclass(frozen=True)
class AtMost:
    """The charge has at most this value: ``<Q> <= value``; its multiplier is never negative.

    Parameters
    ----------
    value : float
        In units of the charge.
    """

    value: float


@dataclass(frozen=True)
class AtLeast:
    """The charge has at least this value: ``<Q> >= value``; its multiplier is never positive.

    Parameters
    ----------
    value : float
        In units of the charge.
    """

    value: float


@dataclass(frozen=True)
class Measured:
    """The charge was measured with a standard error: a miss costs entropy and is never forbidden.

    The state has the largest ``S - sum_j (<Q_j> - value_j)^2 / (2 sigma_j^2)``; the minimum of the penalised dual
    ``F(lam) + sum_j (sigma_j lam_j)^2 / 2`` gives ``<Q_j> = value_j + sigma_j^2 lam_j``.

    Parameters
    ----------
    value, sigma : float
        In units of the charge; the standard error is positive.
    """

    value: float
    sigma: float


_KINDS = (Exact, Within, AtMost, AtLeast, Measured)

#: Widths and units outside, and limits beyond, have squares that overflow or vanish.
SMALLEST, LARGEST = 1e-150, 1e150


def suggestion(name: str, known: Sequence[str]) -> str:
    """``"; did you mean 'x'?"`` when something known looks like `name`, else nothing."""
    close = difflib.get_close_matches(name, known, n=1)
    return f"; did you mean {close[0]!r}?" if close else ""


def collect(
    names: Sequence[str], targets: Mapping[str, Any], accuracy: float | Mapping[str, float]
) -> tuple[np.ndarray, np.ndarray]:
    """Targets (the values they are centred on) and their stated accuracies in the order of `names`.

    Returns
    -------
    values, accuracy : (m,) float64

    Raises
    ------
    TypeError
        Targets that are not a mapping or not real numbers.
    ValueError
        Unknown or missing names, NaN or infinite values, a tolerance or sigma that is not positive or not between
        1e-150 and 1e150, a negative accuracy.
    """
    if not isinstance(targets, Mapping):
        raise TypeError(f"targets must be a dict name -> value, not {type(targets).__name__}")
    _check_names(names, targets, "target", every=True)
    values = np.array([_number(targets[n], f"target {n!r}") for n in names], float)
    for n, value in zip(names, values, strict=True):
        _width(n, targets[n])
        if isinstance(targets[n], Within | AtMost | AtLeast | Measured) and abs(value) > LARGEST:
            raise ValueError(f"target {n!r} is {value}; it must lie within {LARGEST}: choose another unit")
    if isinstance(accuracy, Mapping):
        _check_names(names, accuracy, "accuracy", every=False)
        stated = np.array([_number(accuracy.get(n, 0.0), f"accuracy {n!r}") for n in names], float)
    else:
        stated = np.full(len(names), _number(accuracy, "accuracy"))
    for n, a in zip(names, stated, strict=True):
        if a < 0:
            raise ValueError(f"accuracy {n!r} is {a}; it must not be negative")
    return values, stated


def collect_slack(names: Sequence[str], targets: Mapping[str, Any]) -> Slack:
    """What the targets leave open, in the order of `names`; call `collect` first, which checks the names.

    Raises
    ------
    TypeError, ValueError
        A tolerance or sigma that is not a positive number between 1e-150 and 1e150.
    """
    m = len(names)
    lower, upper, penalty = np.zeros(m), np.zeros(m), np.zeros((m, m))
    for j, name in enumerate(names):
        target, width = targets[name], _width(name, targets[name])
        if isinstance(target, Within):
            lower[j], upper[j] = -width, width
        if isinstance(target, AtMost | Measured):
            lower[j] = -np.inf
        if isinstance(target, AtLeast | Measured):
            upper[j] = np.inf
        if isinstance(target, Measured):
            penalty[j, j] = width**2
    return Slack(lower, upper, penalty)


def collect_units(names: Sequence[str], metric: Mapping[str, float]) -> np.ndarray:
    """The unit of each charge in the order of `names`, NaN where none is stated.

    Raises
    ------
    TypeError, ValueError
        A metric that is no mapping, unknown names, units that are not positive numbers between 1e-150 and 1e150.
    """
    if not isinstance(metric, Mapping):
        raise TypeError(f"metric must be a dict name -> unit, not {type(metric).__name__}")
    _check_names(names, metric, "metric", every=False)
    units = np.full(len(names), np.nan)
    for j, name in enumerate(names):
        if name in metric:
            units[j] = _number(metric[name], f"metric {name!r}")
            if not units[j] > 0:
                raise ValueError(f"metric {name!r} is {units[j]}; it must be positive")
            _check_size(units[j], f"metric {name!r}")
    return units


def _width(name: str, target: Any) -> float:
    """Tolerance or sigma of a target, 0 for the kinds that have none."""
    if not isinstance(target, Within | Measured):
        return 0.0
    what = "tolerance" if isinstance(target, Within) else "sigma"
    width = _number(target.tolerance if isinstance(target, Within) else target.sigma, f"{what} of target {name!r}")
    if not width > 0:
        hint = "; for none give the number alone" if width == 0 else ""
        raise ValueError(f"{what} of target {name!r} is {width}; it must be positive{hint}")
    _check_size(width, f"{what} of target {name!r}")
    return width


def _check_size(width: float, label: str) -> None:
    if not SMALLEST <= width <= LARGEST:
        raise ValueError(f"{label} is {width}; it must lie between {SMALLEST} and {LARGEST}: choose another unit")


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
    if isinstance(value, _KINDS):
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
