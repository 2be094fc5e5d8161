"""Kind `levels`: independent levels of fermions, bosons or distinguishable particles, charges as numbers per level.

Levels are listed, read from a file, or given by formulas in the number of the level or at the nodes of a quadrature.
Floor: app/kinds.  Must not know: lattices (but for reading formulas), the command line, the report.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path as File
from typing import Any, Literal

import numpy as np

from maxent.app.data import Files
from maxent.app.job import (
    ACCURACY,
    STRICT,
    TARGET,
    BadInput,
    Job,
    Problems,
    Room,
    Target,
    check_target,
    given_target,
    says,
)
from maxent.app.kinds._fillings import condensate_remarks, occupation_section
from maxent.app.kinds._thermodynamics import THERMODYNAMICS, Thermodynamics, check_roles, roles
from maxent.app.locate import Path
from maxent.errors import FormulaError
from maxent.text import listing, number, plural

__all__ = ["Grid", "Options", "build"]

#: Levels of a formula, which is read once per level.
MOST = 20000
#: Levels whose own occupations may be the charges.
MOST_OWN = 200
_FILES = (".npy", ".csv")


@dataclass(frozen=True)
class Grid:
    """Nodes `x[i]` of a quadrature that stand for a continuous density of states; weights become degeneracies."""

    __pydantic_config__ = STRICT

    to: float = field(metadata=says("Upper end of x."))
    nodes: int = field(metadata=says("Number of Gauss-Legendre nodes."))
    start: float = field(default=0.0, metadata=says("Lower end of x."))


@dataclass(frozen=True)
class Options:
    """Keys of a config of kind `levels`."""

    __pydantic_config__ = STRICT

    statistics: Literal["fermions", "bosons", "distinguishable"] = field(
        metadata=says("What fills the levels; distinguishable particles are those of Maxwell and Boltzmann.")
    )
    charges: dict[str, list[float] | str] = field(
        default_factory=dict,
        metadata=says(
            "Name of a charge -> its value for one particle in each level: a list, a file, or a formula in the number "
            "`i` of the level (from 0) and the parameters. Without charges every level's own occupation is one."
        ),
    )
    targets: dict[str, float | Literal["from occupations"] | Room] = field(
        default_factory=dict,
        metadata=says(f"Name of a charge -> the total asked for, or its value at `occupations`. {TARGET}"),
    )
    count: int | None = field(default=None, metadata=says("Number of levels, where formulas give them."))
    grid: Grid | None = field(
        default=None,
        metadata=says("Instead of `count`: a continuous density of states, formulas in `x[i]`."),
    )
    degeneracy: list[float] | str | None = field(
        default=None,
        metadata=says("Copies of each level: a list, a file or a formula; with `[grid]` the density of states per x."),
    )
    constants: dict[str, float] = field(
        default_factory=dict, metadata=says("Name of a charge -> its value without any particle.")
    )
    continuum: dict[str, float | list[float]] = field(
        default_factory=dict,
        metadata=says(
            "Bosons: name of a charge -> its value for one particle at the end of the continuous spectrum, where no "
            "level can hold a condensate: docs/modes.md."
        ),
    )
    occupations: list[float] | str | None = field(
        default=None, metadata=says("Known mean occupation of a copy of each level: a list, a file or a formula.")
    )
    parameters: dict[str, float | list[float]] = field(
        default_factory=dict, metadata=says("Name -> number, or a list with one number per level, `e[i]` in formulas.")
    )
    accuracy: dict[str, float] = field(default_factory=dict, metadata=says(ACCURACY))
    predictions: dict[str, list[float] | str] = field(
        default_factory=dict,
        metadata=says("Name -> a further sum over the particles, written like a charge."),
    )
    thermodynamics: Thermodynamics | None = field(default=None, metadata=says(THERMODYNAMICS))


def build(options: Options, folder: File) -> Job:
    """Build the job that the options describe.

    Parameters
    ----------
    options : Options
    folder : pathlib.Path
        Relative names of files start here.

    Returns
    -------
    Job

    Raises
    ------
    BadInput
        With all problems at once.
    """
    problems = Problems()
    _check(options, problems)
    problems.raise_any()
    read = _Values(options, Files(folder), problems)
    charges = {name: read.values(("charges", name), value) for name, value in options.charges.items()}
    predictions = {name: read.values(("predictions", name), value) for name, value in options.predictions.items()}
    degeneracy = read.values(("degeneracy",), options.degeneracy)
    occupations = read.values(("occupations",), options.occupations)
    problems.raise_any()
    size = _lengths(problems, charges, predictions, degeneracy, occupations, read)
    problems.raise_any()
    copies = np.ones(size) if degeneracy is None else degeneracy
    if (copies < 0).any() or not copies.any():
        k = int(np.argmin(copies))
        text = f"is {number(copies[k])} at level {k}; copies cannot be negative or all zero"
        raise BadInput([(("degeneracy",), text)])
    copies = copies if read.weights is None else copies * read.weights
    there = copies > 0  # a density of states may vanish at a node
    charges, predictions = ({n: v[there] for n, v in part.items()} for part in (charges, predictions))
    copies, index = copies[there], np.flatnonzero(there)
    occupations = None if occupations is None else occupations[there]
    _check_occupations(options, occupations, index)
    if not charges:
        charges, targets = _own(occupations, copies, index)
    else:
        targets = _targets(options, charges, copies, occupations)
    from maxent.families.modes import Modes

    try:
        family = Modes(
            charges,
            options.statistics,
            copies,
            constants=options.constants or None,
            continuum=options.continuum or None,
        )
    except (TypeError, ValueError) as bad:
        key = "continuum" if str(bad).startswith("continuum") else "charges"
        raise BadInput([((key,), str(bad))]) from bad
    where = None if read.grid is None else read.grid[there]
    open_end = read.grid is None and (options.count is not None)
    return Job(
        family,
        targets,
        predictions,
        _facts(options, size, copies),
        digests=read.files.digests,
        remarks=lambda result: condensate_remarks(result.state, index, open_end=open_end),
        unit="level",
        roles=roles(options.thermodynamics, charges, numbers=[n for n, q in charges.items() if np.all(q == 1)]),
        further=lambda result: occupation_section(result.state, index, charges, where),
    )


def _check(options: Options, problems: Problems) -> None:
    check_roles(options.thermodynamics, options.charges, problems)
    for name, given in options.targets.items():
        check_target(("targets", name), given, problems)
        if given == "from occupations" and options.occupations is None:
            problems.add(("targets", name), "asks for 'from occupations', but there are no occupations")
    if not options.targets:  # of some charges the reader of configs tells the others
        for name in options.charges:
            problems.add(("charges", name), "no target for this charge; add it to [targets]")
    if not options.charges:
        if options.occupations is None:
            problems.add(("charges",), "missing; or give the occupations of all levels")
        for key in ("targets", "continuum", "constants"):
            if getattr(options, key):
                problems.add((key,), "there are no charges, so that every level's own occupation is one")
    if options.count is not None and options.grid is not None:
        problems.add(("grid",), "stands instead of count; give one of them")
    if options.count is not None and not 1 <= options.count <= MOST:
        problems.add(("count",), f"expected 1 to {MOST} levels, got {options.count}; more come from files")
    if options.grid is not None:
        if not options.grid.to > options.grid.start:
            problems.add(("grid", "to"), f"must lie above start, {number(options.grid.start)}")
        if not 2 <= options.grid.nodes <= MOST:
            problems.add(("grid", "nodes"), f"expected 2 to {MOST} nodes, got {options.grid.nodes}")
        if "x" in options.parameters:
            problems.add(("parameters", "x"), "is the name of the nodes of [grid]")
    if options.continuum and options.statistics != "bosons":
        problems.add(("continuum",), f"states where bosons condense; {options.statistics} do not")
    for key in ("constants", "continuum"):
        for name in getattr(options, key):
            if options.charges and name not in options.charges:
                problems.unknown((key, name), "no charge has this name", options.charges)
    if options.continuum and len(options.continuum) < len(options.charges):
        missing = [name for name in options.charges if name not in options.continuum]
        problems.add(("continuum",), f"the value of {listing(map(repr, missing), 'and')} there is missing")


class _Values:
    """Reader of lists, files and formulas, one number per level."""

    def __init__(self, options: Options, files: Files, problems: Problems):
        self.options, self.files, self.problems = options, files, problems
        self.grid: Any = None
        self.weights: Any = None
        if options.grid is not None:
            x, w = np.polynomial.legendre.leggauss(options.grid.nodes)
            half = 0.5 * (options.grid.to - options.grid.start)
            self.grid, self.weights = options.grid.start + half * (x + 1), half * w

    @property
    def count(self) -> int | None:
        """Number of levels where the config states it."""
        return self.options.count if self.grid is None else len(self.grid)

    def values(self, path: Path, value: Any) -> Any:
        """Values of one entry; None where there is none or after a problem."""
        if value is None:
            return None
        if isinstance(value, list):
            return np.array(value, float)
        try:
            if value.endswith(_FILES) or ".npz:" in value or ".csv:" in value:
                return self._file(value)
            return self._formula(value)
        except (FormulaError, ValueError) as bad:
            self.problems.add(path, str(bad))
            return None

    def _file(self, name: str) -> np.ndarray:
        array = self.files.read(name)
        if not isinstance(array, np.ndarray) or array.ndim != 1 or array.dtype.kind not in "iuf":
            raise ValueError(f"{name!r} is no plain list of real numbers")
        if not np.isfinite(array).all():
            raise ValueError(f"{name!r} holds numbers that are not finite")
        return array.astype(float)

    def _formula(self, text: str) -> np.ndarray:
        from maxent.lattice import Chain
        from maxent.lattice.evaluate import position_values

        if self.count is None:
            raise ValueError(f"{text!r} is no file; a formula needs the number of levels, count = ... or [grid]")
        given: dict[str, Any] = dict(self.options.parameters)
        if self.grid is not None:
            given["x"] = self.grid.tolist()
        return position_values(text, Chain(self.count), given)


def _lengths(
    problems: Problems, charges: Mapping[str, Any], predictions: Mapping[str, Any], degeneracy: Any, occupations: Any,
    read: _Values,
) -> int:  # fmt: skip
    """Number of levels, the same for every list."""
    every: dict[Path, Any] = {("charges", name): v for name, v in charges.items()}
    every |= {("predictions", name): v for name, v in predictions.items()}
    every |= {("degeneracy",): degeneracy, ("occupations",): occupations}
    size, first = read.count, "the config"
    for path, values in every.items():
        if values is None:
            continue
        if size is None:
            size, first = len(values), ".".join(map(str, path))
        if len(values) != size:
            problems.add(path, f"has {plural(len(values), 'level')}, but {first} has {size}")
    if not size:
        problems.add(("charges",), "no levels; at least one is needed")
    return size or 0


def _check_occupations(options: Options, occupations: Any, index: np.ndarray) -> None:
    if occupations is None:
        return
    most = 1.0 if options.statistics == "fermions" else np.inf
    bad = np.flatnonzero((occupations < 0) | (occupations > most))
    if len(bad):
        allowed = "0..1" if options.statistics == "fermions" else "0 or more"
        text = f"{number(occupations[bad[0]])} at level {index[bad[0]]}: {options.statistics} have {allowed} per copy"
        raise BadInput([(("occupations",), text)])
    if not options.charges and len(occupations) > MOST_OWN:
        text = f"as charges of their own up to {MOST_OWN} levels are taken, got {len(occupations)}; give [charges]"
        raise BadInput([(("occupations",), text)])


def _own(occupations: Any, copies: np.ndarray, index: np.ndarray) -> tuple[dict[str, Any], dict[str, Target]]:
    """Every level's own occupation, all copies counted, as a charge and its target."""
    names = [f"level {k}" for k in index]
    targets = {n: Target(float(x), "given as occupation") for n, x in zip(names, copies * occupations, strict=True)}
    return dict(zip(names, np.eye(len(names)), strict=True)), targets


def _targets(options: Options, charges: Mapping[str, Any], copies: np.ndarray, occupations: Any) -> dict[str, Target]:
    out = {}
    for name, values in charges.items():
        given, accuracy = options.targets[name], options.accuracy.get(name, 0.0)
        if isinstance(given, str):
            total = float(values @ (copies * occupations)) + options.constants.get(name, 0.0)
            out[name] = Target(total, "value at the given occupations", accuracy=accuracy)
        else:
            out[name] = given_target(given, accuracy)
    return out


def _facts(options: Options, size: int, copies: np.ndarray) -> dict[str, str]:
    facts = {"levels": f"{plural(size, 'level')} of {options.statistics}, {number(copies.sum(), 6)} copies in all"}
    if options.grid is not None:
        g = options.grid
        ends = f"{number(g.start)} to {number(g.to)}"
        facts["levels"] = f"continuous, {g.nodes} nodes x from {ends}: {options.statistics}"
    facts |= {f"parameter {name}": str(value) for name, value in options.parameters.items()}
    for name, value in options.charges.items():
        facts[f"charge {name}"] = value if isinstance(value, str) else "given as a list"
    if options.degeneracy is not None:
        facts["degeneracy"] = options.degeneracy if isinstance(options.degeneracy, str) else "given as a list"
    if options.continuum:
        facts["continuum"] = "ends at " + ", ".join(f"{n} {v}" for n, v in options.continuum.items())
    return facts
