"""What a config kind hands over: a `Job`, ready to be solved, or the list of what is wrong with the config.

Floor: app.  Kinds build jobs; the runner solves them; neither needs to know the other.
Must not know: TOML, the command line.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any

from maxent.app.locate import Path
from maxent.errors import ConfigError
from maxent.text import suggestion

__all__ = ["ACCURACY", "BadInput", "Job", "Problems", "Target", "says"]

ACCURACY = (
    "Name of a charge -> how far its target may be off because of rounding when it was computed; "
    "0 where nothing is said. This is no measurement error."
)


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
class Target:
    """One target and where it comes from.

    Parameters
    ----------
    value : float
        The number asked for.
    source : str
        "given", or what it was computed from.
    sigma : float or None
        Standard error of the number, if it was measured; shown beside the target, never used to loosen it.
    accuracy : float
        How far the target may be off because of the way it was computed; 0 takes it as exact.
    """

    value: float
    source: str = "given"
    sigma: float | None = None
    accuracy: float = 0.0


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
    """

    family: Any
    targets: Mapping[str, Target]
    predictions: Mapping[str, Any] = field(default_factory=dict)
    facts: Mapping[str, str] = field(default_factory=dict)
    labels: tuple[str, ...] = ()
    digests: Mapping[str, str] = field(default_factory=dict)
