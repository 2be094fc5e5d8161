"""What a config kind hands over: a `Job`, ready to be solved, or the list of what is wrong with the config.

Floor: app.  Kinds build jobs; the runner solves them; neither needs to know the other.
Must not know: TOML, the command line.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from maxent.app.locate import Path
from maxent.errors import ConfigError
from maxent.text import number, suggestion

if TYPE_CHECKING:
    from maxent.app.sections import Section

__all__ = [
    "ACCURACY", "STRICT", "TARGET", "BadInput", "Coupling", "Job", "Problems", "Roles", "Room", "Study", "Target",
    "check_target", "given_target", "says",
]  # fmt: skip

#: Of every table of a config: unknown keys and wrong types are refused (`__pydantic_config__`).
STRICT: Any = {"extra": "forbid", "strict": True}

ACCURACY = (
    "Name of a charge -> how far its target may be off because of rounding when it was computed; "
    "0 where nothing is said. This is no measurement error."
)

TARGET = "A table leaves room around a number: docs/relaxed-targets.md."


def says(text: str) -> dict[str, str]:
    """Document a key of a config: metadata of the dataclass field that stands for it."""
    return {"help": text}


class BadInput(ConfigError):
    """The problems found in a config, each with the path of the key it concerns.

    Parameters
    ----------
    problems : list of (path, text)
        At least one.
    """

    def __init__(self, problems: list[tuple[Path, str]]):
        super().__init__("\n".join(f"{'.'.join(map(str, path))}: {text}" for path, text in problems))
        self.problems = problems


class Problems:
    """Collector, so that a user sees all problems at once and not the first one only."""

    def __init__(self) -> None:
        self.found: list[tuple[Path, str]] = []

    def add(self, path: Path, text: str) -> None:
        """Note a problem with the value at a path; further lines of the text are folded into one."""
        self.found.append((path, " ".join(text.split())))

    def raise_any(self) -> None:
        """Stop here if anything was found.

        Raises
        ------
        BadInput
        """
        if self.found:
            raise BadInput(self.found)

    def unknown(self, path: Path, what: str, known: Iterable[str]) -> None:
        """Note a name that is not known, with the nearest known one."""
        self.add(path, f"{what}{suggestion(str(path[-1]), known)}")


@dataclass(frozen=True)
class Room:
    """What a target leaves open, as an inline table of the config; exactly one key is given."""

    __pydantic_config__ = STRICT

    within: list[float] | None = None
    at_most: float | None = None
    at_least: float | None = None
    measured: list[float] | None = None

    @property
    def given(self) -> dict[str, Any]:
        """The keys that are there."""
        return {k: v for k, v in vars(self).items() if v is not None}


@dataclass(frozen=True)
class Target:
    """One target and where it comes from.

    Parameters
    ----------
    value : float
        The number asked for.
    source : str
        "given", or what it was computed from.
    sigma : float or None
        Standard error of the number, if it was measured; used by the fit only when `asked` says so.
    accuracy : float
        How far the target may be off because of the way it was computed; 0 takes it as exact.
    asked : float, Within, AtMost, AtLeast, Measured or None
        What the fit is given; None gives it the value.
    """

    value: float
    source: str = "given"
    sigma: float | None = None
    accuracy: float = 0.0
    asked: Any = None


@dataclass(frozen=True)
class Study:
    """A comparison of ensembles with the dynamics, beside the fit.

    Parameters
    ----------
    sizes : tuple of int
        Ascending.
    build : callable
        Size -> keyword arguments of `maxent.quench.compare`, or of `compare_gaussian`; errors as `BadInput`.
    gaussian : bool
        Whether free particles are compared, by `compare_gaussian`.
    """

    sizes: tuple[int, ...]
    build: Callable[[int], Mapping[str, Any]]
    gaussian: bool = False


@dataclass(frozen=True)
class Coupling:
    """A parameter of the charges whose generalised force is wanted.

    Parameters
    ----------
    name : str
    value : float
    derivatives : mapping of str to OperatorSum
        Derivative of every charge that depends on it.
    charges : callable
        Value of the parameter -> all charges by name, `OperatorSum` each.
    """

    name: str
    value: float
    derivatives: Mapping[str, Any]
    charges: Callable[[float], Mapping[str, Any]]


@dataclass(frozen=True)
class Roles:
    """What the charges are for the thermodynamics of the result.

    Parameters
    ----------
    energy : str
    numbers, fields : tuple of str
        Charges with a chemical potential, or a field.
    couplings : tuple of Coupling
    at_number : callable
        Result -> further quantities (`maxent.quench.thermodynamics.Quantity`) at fixed particle number.
    """

    energy: str
    numbers: tuple[str, ...] = ()
    fields: tuple[str, ...] = ()
    couplings: tuple[Coupling, ...] = ()
    at_number: Callable[[Any], Sequence[Any]] = lambda result: ()


@dataclass(frozen=True)
class Job:
    """A problem ready to be solved.

    Parameters
    ----------
    family : Microstates or Matrices
        The family with its charges.
    targets : mapping of name to Target
        In the order of the charges.
    predictions : mapping of name to operator
        Operators whose means are wanted, of the kind the family understands.
    facts : mapping of str to str
        What was built, for people: sites, size, start, sources of the data.
    labels : tuple of str
        Names of the single states, where the user gave some.
    digests : mapping of str to str
        SHA-256 of every file that was read, by name.
    errors : (m, p) ndarray or None
        ``errors @ errors.T`` is the covariance of the targets, where it was sampled; None takes the standard errors of
        the targets as independent.
    remarks : callable
        Result -> what its reader must know beyond it, one sentence each.
    study : Study or None
        What is done besides the fit.
    mean : callable
        State and operator -> mean of a prediction.
    unit : str
        What `size` counts.
    count : int or None
        How many of them; None: `family.size`.
    further : callable
        Result -> further tables and curves, computed after the fit (sections.py).
    roles : Roles or None
        What the charges are for thermodynamics; None where no energy can be told.
    prepare : callable or None
        Makes the job that can be solved, with its family, where that takes long: `family` is None until then.
    expected : mapping of str to str
        What that will take, for people.
    """

    family: Any
    targets: Mapping[str, Target]
    predictions: Mapping[str, Any] = field(default_factory=dict)
    facts: Mapping[str, str] = field(default_factory=dict)
    labels: tuple[str, ...] = ()
    digests: Mapping[str, str] = field(default_factory=dict)
    errors: Any = None
    remarks: Callable[[Any], list[str]] = lambda result: []
    study: Study | None = None
    mean: Callable[[Any, Any], float] = lambda state, operator: state.mean(operator)
    unit: str = "state"
    count: int | None = None
    further: Callable[[Any], Sequence[Section]] = lambda result: ()
    roles: Roles | None = None
    prepare: Callable[[], Job] | None = None
    expected: Mapping[str, str] = field(default_factory=dict)

    @property
    def size(self) -> int:
        """How large the problem is, in the unit."""
        return int(self.family.size) if self.count is None else self.count

    def target_errors(self) -> Any:
        """Give a factor (m, p) of the covariance of the targets; None when no target has a standard error."""
        import numpy as np

        sigmas = [t.sigma for t in self.targets.values()]
        if all(s is None for s in sigmas):
            return None
        return np.diag([s or 0.0 for s in sigmas]) if self.errors is None else self.errors

    def asked(self) -> dict[str, Any]:
        """What the fit is given, by name."""
        return {name: t.value if t.asked is None else t.asked for name, t in self.targets.items()}


def check_target(path: Path, given: Any, problems: Problems) -> None:
    """Note what is wrong with a target that is a table.

    Parameters
    ----------
    path : Path
        Of the target.
    given : number, text or Room
    problems : Problems
    """
    if not isinstance(given, Room):
        return
    keys = list(given.given)
    if len(keys) != 1:
        got = " and ".join(keys) or "none"
        problems.add(path, f"one of within, at_most, at_least and measured is needed, got {got}")
        return
    (key,) = keys
    what = {"within": "tolerance", "measured": "sigma"}.get(key)
    numbers = given.given[key]
    from maxent.targets import LARGEST, SMALLEST  # only here: bad configs are told without loading the core

    value = numbers if what is None else next(iter(numbers), 0.0)
    if abs(value) > LARGEST:
        problems.add((*path, key), f"a value beyond {LARGEST:.0e} is not taken: choose another unit")
        return
    if what is None:
        return
    if len(numbers) != 2:
        problems.add((*path, key), f"expected [value, {what}], got {len(numbers)} numbers")
    elif not numbers[1] > 0:
        problems.add((*path, key), f"the {what} must be positive, got {numbers[1]}")
    elif not SMALLEST <= numbers[1] <= LARGEST:
        problems.add((*path, key), f"the {what} must lie in {SMALLEST:.0e}..{LARGEST:.0e}, got {numbers[1]}")


def given_target(given: float | Room, accuracy: float) -> Target:
    """Make the target of a number or of a table that was checked.

    Parameters
    ----------
    given : float or Room
    accuracy : float

    Returns
    -------
    Target
    """
    if not isinstance(given, Room):
        return Target(float(given), accuracy=accuracy)
    from maxent.targets import AtLeast, AtMost, Measured, Within

    ((key, numbers),) = given.given.items()
    if key == "at_most":
        return Target(numbers, "given, at most", accuracy=accuracy, asked=AtMost(numbers))
    if key == "at_least":
        return Target(numbers, "given, at least", accuracy=accuracy, asked=AtLeast(numbers))
    value, width = map(float, numbers)
    if key == "within":
        return Target(value, f"given, within {number(width)}", accuracy=accuracy, asked=Within(value, width))
    return Target(value, "given, measured", width, accuracy, Measured(value, width))
