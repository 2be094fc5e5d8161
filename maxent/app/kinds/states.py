"""Kind `states`: a finite list of classical states, each charge a list with one number per state.

Floor: app/kinds.  Targets are given, or are the sample means of measured counts.
Must not know: the command line, the report.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from pathlib import Path as File
from typing import Any, Literal

import numpy as np

from maxent.app.data import Files
from maxent.app.job import ACCURACY, STRICT, TARGET, Job, Problems, Room, Target, check_target, given_target, says
from maxent.app.kinds._building import build_family
from maxent.app.kinds._thermodynamics import THERMODYNAMICS, Thermodynamics, check_roles, roles
from maxent.text import plural

__all__ = ["Counts", "Options", "build"]


@dataclass(frozen=True)
class Counts:
    """How often each state was seen."""

    __pydantic_config__ = STRICT

    per_state: list[float] | str = field(metadata=says("Counts, one per state: a list, or a file."))
    source: str = field(default="", metadata=says("Where the counts come from."))


@dataclass(frozen=True)
class Options:
    """Keys of a config of kind `states`."""

    __pydantic_config__ = STRICT

    charges: dict[str, list[float] | str] = field(
        metadata=says("Name of a charge -> its value in each state: a list, or a file.")
    )
    targets: dict[str, float | Literal["from counts"] | Room] = field(
        metadata=says(f"Name of a charge -> the mean asked for, or the sample mean of `[counts]`. {TARGET}")
    )
    accuracy: dict[str, float] = field(
        default_factory=dict,
        metadata=says(ACCURACY),
    )
    counts: Counts | None = field(
        default=None,
        metadata=says("Measured counts; they give targets, each with its sampling standard error beside it."),
    )
    labels: list[str] | None = field(default=None, metadata=says("Names of the states, in order."))
    log_weights: list[float] | str | None = field(
        default=None,
        metadata=says(
            "Log of how many microstates each state stands for (degeneracy): a list, or a file; "
            "counted in the entropy. -inf drops a state."
        ),
    )
    log_prior: list[float] | str | None = field(
        default=None,
        metadata=says(
            "Log of the prior probability of each state, up to a constant: a list, or a file; "
            "changes the state but not how entropy is counted. -inf drops a state."
        ),
    )
    predictions: dict[str, list[float] | str] = field(
        default_factory=dict,
        metadata=says("Name -> a further quantity whose mean is wanted: a list, or a file."),
    )
    thermodynamics: Thermodynamics | None = field(default=None, metadata=says(THERMODYNAMICS))


def build(options: Options, folder: File) -> Job:
    """Build the job that the options describe.

    Parameters
    ----------
    options : Options
    folder : pathlib.Path
        Where relative file names start.

    Returns
    -------
    Job

    Raises
    ------
    BadInput
        With all problems at once.
    """
    problems = Problems()
    files = Files(folder)
    charges = {name: _array(files, problems, ("charges", name), value) for name, value in options.charges.items()}
    predictions = {
        name: _array(files, problems, ("predictions", name), value) for name, value in options.predictions.items()
    }
    weights = _array(files, problems, ("log_weights",), options.log_weights, drop=True)
    prior = _array(files, problems, ("log_prior",), options.log_prior, drop=True)
    counts = None
    if options.counts is not None:
        counts = _array(files, problems, ("counts", "per_state"), options.counts.per_state)
    size = _check_lengths(problems, charges, predictions, weights, prior, counts, options.labels)
    for key, value in (("log_weights", weights), ("log_prior", prior)):
        if value is not None and len(value) and not np.isfinite(value).any():
            problems.add((key,), "drops every state")
    if counts is not None:
        _check_counts(problems, counts)
    check_roles(options.thermodynamics, charges, problems, prior=prior is not None)
    for name, given in options.targets.items():
        check_target(("targets", name), given, problems)
        if given == "from counts" and options.counts is None:
            problems.add(("targets", name), "asks for a mean 'from counts', but there is no [counts]")
    problems.raise_any()
    targets = {
        name: _target(options.targets[name], values, counts, options.accuracy.get(name, 0.0))
        for name, values in charges.items()
    }
    facts = {"states": str(size)}
    if counts is not None and options.counts is not None:
        facts["counts"] = plural(int(counts.sum()), "observation")
        if options.counts.source:
            facts["source of the counts"] = options.counts.source
    if weights is not None:
        facts["weights"] = "log degeneracies given; counted in the entropy"
    if prior is not None:
        facts["prior"] = "given; the state is pulled towards it"
    from maxent.families.microstates import Microstates

    family = build_family(lambda: Microstates(charges, log_weights=weights, log_prior=prior), charges)
    return Job(
        family,
        targets,
        predictions,
        facts,
        labels=tuple(options.labels or ()),
        digests=files.digests,
        errors=_sampling(targets, options, charges, counts),
        roles=None if prior is not None else roles(options.thermodynamics, charges),
    )


def _array(
    files: Files,
    problems: Problems,
    path: tuple[str, ...],
    value: list[float] | str | None,
    *,
    drop: bool = False,
) -> Any:
    """Read one list of numbers; None where there is none or where it is bad."""
    if value is None:
        return None
    if isinstance(value, str):
        try:
            raw = files.read(value)
        except ValueError as bad:
            problems.add(path, str(bad))
            return None
        if not isinstance(raw, np.ndarray) or raw.ndim != 1:
            problems.add(path, f"{value!r} is no plain list of numbers (shape {raw.shape})")
            return None
        if raw.dtype.kind not in "iuf":
            problems.add(path, f"{value!r} holds {raw.dtype} entries; real numbers are needed")
            return None
        array = raw.astype(np.float64)
        bad_places = np.flatnonzero(~np.isfinite(array) & ~((array == -np.inf) & drop))
        if len(bad_places):
            k = int(bad_places[0])
            problems.add(path, f"{value!r} entry {k} is {array[k]}; finite numbers are needed")
            return None
        return array
    return np.array(value, dtype=np.float64)


def _check_lengths(
    problems: Problems,
    charges: dict[str, Any],
    predictions: dict[str, Any],
    weights: Any,
    prior: Any,
    counts: Any,
    labels: list[str] | None,
) -> int:
    """Check that every list has one number per state; the first charge sets the number of states."""
    every: dict[tuple[str, ...], Any] = {("charges", name): values for name, values in charges.items()}
    every |= {("predictions", name): values for name, values in predictions.items()}
    every |= {
        ("log_weights",): weights, ("log_prior",): prior, ("counts", "per_state"): counts,
        ("labels",): labels,
    }  # fmt: skip
    size, first = 0, ""
    for path, values in every.items():
        if values is None:
            continue
        if not size:
            size, first = len(values), ".".join(path)
            if not size:
                problems.add(path, "an empty list; at least one state is needed")
                return 0
        elif len(values) != size:
            problems.add(
                path,
                f"has length {len(values)}, but {first} has length {size}; one entry per state is needed",
            )
    return size


def _check_counts(problems: Problems, counts: np.ndarray) -> None:
    path = ("counts", "per_state")
    if (counts < 0).any() or (counts != np.round(counts)).any():
        problems.add(path, "counts must be whole numbers, none of them negative")
    elif counts.sum() < 2:
        problems.add(path, "at least two observations are needed")
    elif counts.sum() > 2**53:
        problems.add(path, "more observations than can be counted exactly (2^53)")


def _sampling(
    targets: dict[str, Target], options: Options, charges: dict[str, Any], counts: np.ndarray | None
) -> np.ndarray | None:
    """Factor (m, p) of the covariance of the targets: that of the sample means, and independent standard errors beside.

    Means over the same N observations are correlated: ``cov = sum_i n_i (f_i - mean)(f_i - mean)^T / (N (N - 1))``.
    """
    if counts is None:
        return None
    sampled = [options.targets[name] == "from counts" for name in targets]
    alone = np.diag([0.0 if s else t.sigma or 0.0 for s, t in zip(sampled, targets.values(), strict=True)])
    total = float(counts.sum())
    weights = np.sqrt(counts / total / (total - 1))
    rows = [
        weights * charges[name] - weights * t.value if s else np.zeros(len(counts))
        for s, (name, t) in zip(sampled, targets.items(), strict=True)
    ]
    return np.concatenate([np.array(rows), alone], axis=1)


def _target(given: float | str | Room, values: np.ndarray, counts: np.ndarray | None, accuracy: float) -> Target:
    """Take a target as given, or as the mean over the counts with its standard error.

    The standard error of a mean of N independent observations is s/sqrt(N) with
    s^2 = sum_i n_i (f_i - mean)^2 / (N - 1).
    """
    if not isinstance(given, str):
        return given_target(given, accuracy)
    assert counts is not None
    total = float(counts.sum())
    exponent = math.frexp(np.abs(values).max())[1]
    scaled = np.ldexp(values, -exponent)  # exact, and no square can overflow
    mean = math.fsum(counts * scaled) / total
    variance = math.fsum(counts * (scaled - mean) ** 2) / (total - 1)
    sigma = math.ldexp(math.sqrt(variance / total), exponent)
    return Target(math.ldexp(mean, exponent), f"mean of {plural(int(total), 'observation')}", sigma, accuracy)
