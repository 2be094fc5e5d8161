"""Kind `spins`: spin-1/2 sites on a ring or a chain, operators as formulas, targets from a product state.

Floor: app/kinds, the only place besides the quench and lab floors that knows lattice and families together.
Must not know: the command line, the report.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, field
from pathlib import Path as File
from typing import Any, Literal

from maxent.app.job import (
    ACCURACY,
    TARGET,
    BadInput,
    Job,
    Problems,
    Room,
    Target,
    check_target,
    given_target,
    says,
)  # fmt: skip
from maxent.errors import FormulaError, ResourceError
from maxent.memory import require_memory
from maxent.text import plural, suggestion

__all__ = ["Options", "Sites", "Start", "build", "hamiltonian"]

_STRICT = {"extra": "forbid", "strict": True}


@dataclass(frozen=True)
class Sites:
    """Where the spins sit."""

    __pydantic_config__ = _STRICT

    geometry: Literal["ring", "chain"] = field(
        metadata=says("`ring`: subscripts wrap around; `chain`: only terms that fit are kept.")
    )
    size: int = field(metadata=says("Number of sites."))


@dataclass(frozen=True)
class Start:
    """Product state in which the targets 'from start' are computed.

    The spin at position i points along (sin theta cos phi, sin theta sin phi, cos theta).
    """

    __pydantic_config__ = _STRICT

    theta: float | list[float] | str = field(
        metadata=says("Polar angle: a number, a pattern that repeats, or a formula in `i`, `L` and the parameters.")
    )
    phi: float | list[float] | str = field(
        default=0.0, metadata=says('Azimuth, written in the same three ways, e.g. `"2*pi*i/L"`.')
    )


@dataclass(frozen=True)
class Options:
    """Keys of a config of kind `spins`."""

    __pydantic_config__ = _STRICT

    sites: Sites = field(metadata=says("Where the spins sit."))
    charges: dict[str, str] = field(metadata=says("Name of a charge -> formula of a Hermitian operator."))
    targets: dict[str, float | Literal["from start"] | Room] = field(
        metadata=says(f"Name of a charge -> the mean asked for, or its mean in the state `[start]`. {TARGET}")
    )
    parameters: dict[str, float | list[float]] = field(
        default_factory=dict,
        metadata=says("Name -> number, or a list with one number per position; used in formulas."),
    )
    densities: dict[str, str] = field(
        default_factory=dict,
        metadata=says("Name -> formula with one free subscript; other formulas may use it shifted, `h[i+1]`."),
    )
    start: Start | None = field(default=None, metadata=says("Product state that gives targets."))
    accuracy: dict[str, float] = field(
        default_factory=dict,
        metadata=says(ACCURACY),
    )
    predictions: dict[str, str] = field(
        default_factory=dict, metadata=says("Name -> formula of a further operator whose mean is wanted.")
    )
    hamiltonian: str = field(
        default="energy", metadata=says("Name of the charge that is the Hamiltonian, for `multipliers charges`.")
    )


def build(options: Options, folder: File) -> Job:
    """Build the job that the options describe.

    Parameters
    ----------
    options : Options
    folder : pathlib.Path
        Unused: this kind reads no further files.

    Returns
    -------
    Job

    Raises
    ------
    BadInput
        With all problems at once.
    """
    del folder
    from maxent import lattice

    problems = Problems()
    if options.sites.size > 100:
        problems.add(("sites", "size"), f"2^{options.sites.size} states fit into no machine")
        problems.raise_any()
    geometry: Any = {"ring": lattice.Ring, "chain": lattice.Chain}[options.sites.geometry]
    try:
        sites = geometry(options.sites.size)
    except ValueError as bad:
        problems.add(("sites", "size"), str(bad))
        problems.raise_any()
    _refuse_too_large(options, problems)
    operators = _Formulas(options, sites, problems)
    charges = {name: operators.read(("charges", name), text) for name, text in options.charges.items()}
    predictions = {name: operators.read(("predictions", name), text) for name, text in options.predictions.items()}
    start = None
    if options.start is not None:
        start = _start(options, sites, problems)
    if options.hamiltonian not in (*options.charges, "energy"):
        name = options.hamiltonian
        problems.add(("hamiltonian",), f"no charge is called {name!r}{suggestion(name, options.charges)}")
    for name, given in options.targets.items():
        check_target(("targets", name), given, problems)
        if given == "from start" and options.start is None:
            problems.add(("targets", name), "asks for the mean 'from start', but there is no [start]")
    problems.raise_any()
    targets = {}
    for name, operator in charges.items():
        given = options.targets[name]
        accuracy = options.accuracy.get(name, 0.0)
        if isinstance(given, str):
            assert start is not None
            targets[name] = Target(start.mean(operator), "mean in the start state", accuracy=accuracy)
        else:
            targets[name] = given_target(given, accuracy)
    matrices = {name: _matrix(("charges", name), op) for name, op in charges.items()}
    observed = {name: _matrix(("predictions", name), op) for name, op in predictions.items()}
    facts = {
        "sites": f"{options.sites.geometry} of {plural(options.sites.size, 'spin-1/2 site')}",
        "states": str(2**options.sites.size),
    }
    if options.start is not None:
        facts["start"] = f"product state, theta = {options.start.theta}, phi = {options.start.phi}"
    facts |= {f"parameter {name}": str(value) for name, value in options.parameters.items()}
    facts |= {f"density {name}": text for name, text in options.densities.items()}
    facts |= {f"charge {name}": text for name, text in options.charges.items()}
    from maxent.families.matrices import Matrices

    family = Matrices(matrices, dims=sites.dims)
    return Job(family, targets, observed, facts)


def hamiltonian(options: Options) -> Any:
    """Read the charge that is the Hamiltonian, without any matrix.

    Parameters
    ----------
    options : Options

    Returns
    -------
    OperatorSum

    Raises
    ------
    BadInput
        With all problems of this formula and of the densities.
    """
    from maxent import lattice

    problems = Problems()
    geometry: Any = {"ring": lattice.Ring, "chain": lattice.Chain}[options.sites.geometry]
    try:
        sites = geometry(options.sites.size)
    except ValueError as bad:
        raise BadInput([(("sites", "size"), str(bad))]) from bad
    name = options.hamiltonian
    if name not in options.charges:
        raise BadInput([(("hamiltonian",), f"no charge is called {name!r}{suggestion(name, options.charges)}")])
    operator = _Formulas(options, sites, problems).read(("charges", name), options.charges[name])
    problems.raise_any()
    return operator


class _Formulas:
    """Reader of the formulas of one config.

    A bad density is reported once, at its own line, and not again for every formula that uses it.
    """

    def __init__(self, options: Options, sites: Any, problems: Problems):
        from maxent.lattice import formula

        self.options, self.sites, self.problems = options, sites, problems
        self.bad: set[str] = set()
        for name, text in options.densities.items():
            try:
                formula(text, sites, options.parameters, options.densities)
            except FormulaError as bad:
                problems.add(("densities", name), str(bad))
                self.bad.add(name)

    def read(self, path: tuple[str, str], text: str) -> Any:
        """Read a Hermitian operator; None after a problem."""
        from maxent.lattice import formula

        if any(re.search(rf"\b{re.escape(name)}\b", text) for name in self.bad):
            return None
        try:
            operator = formula(text, self.sites, self.options.parameters, self.options.densities)
        except FormulaError as bad:
            self.problems.add(path, str(bad))
            return None
        word = operator.non_hermitian_word
        if word is not None:
            self.problems.add(path, f"not Hermitian: it holds {word}")
            return None
        return operator


def _start(options: Options, sites: Any, problems: Problems) -> Any:
    """Build the product state; each angle is tried alone, so that an error lands on its own line."""
    from maxent.lattice import ProductState

    start, before = options.start or Start(0.0), len(problems.found)
    for key, theta, phi in (("theta", start.theta, 0.0), ("phi", 0.0, start.phi)):
        try:
            ProductState(sites, theta, phi, parameters=options.parameters)
        except ValueError as bad:
            problems.add(("start", key), str(bad).removeprefix(f"{key}: "))
    if len(problems.found) > before:
        return None
    return ProductState(sites, start.theta, start.phi, parameters=options.parameters)


def _refuse_too_large(options: Options, problems: Problems) -> None:
    """Refuse sizes for which not even the diagonals of the charges fit: given, shifted and whitened."""
    size, count = options.sites.size, len(options.charges)
    try:
        require_memory(3 * 8 * count * 2**size, f"2^{size} states need at least {{need}} for {plural(count, 'charge')}")
    except ResourceError as bad:
        problems.add(("sites", "size"), str(bad))
        problems.raise_any()


def _matrix(path: tuple[str, str], operator: Any) -> Any:
    try:
        return operator.matrix()
    except ResourceError as bad:
        raise BadInput([(path, str(bad))]) from bad  # at once: trying the other operators would take long
