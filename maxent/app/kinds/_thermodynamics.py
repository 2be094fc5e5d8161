"""Table `[thermodynamics]` of every kind: which charge is the energy, which have a chemical potential or a field.

Floor: app/kinds.  Lattice kinds recognise numbers and field charges, differentiate formulas by their parameters, and
know whether the start has a sharp number.  Must not know: the command line, the report.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from maxent.app.job import STRICT, Coupling, Problems, Roles, says
from maxent.errors import FormulaError, ResourceError
from maxent.text import listing, plural, suggestion

__all__ = ["THERMODYNAMICS", "LatticeThermodynamics", "Thermodynamics", "check_roles", "lattice_roles", "roles"]

THERMODYNAMICS = (
    "What the charges are for the thermodynamics of the result: docs/thermodynamics.md. Without the table a charge "
    "called energy is the energy."
)
#: Largest sector of fixed number whose levels are computed for the chemical potential at fixed number.
SECTOR = 2000


@dataclass(frozen=True)
class Thermodynamics:
    """Roles of the charges."""

    __pydantic_config__ = STRICT

    energy: str | None = field(
        default=None,
        metadata=says("Charge that is the energy; `energy` by default, for lattice kinds the `hamiltonian`."),
    )
    numbers: list[str] | None = field(
        default=None,
        metadata=says(
            "Charges with a chemical potential; lattice kinds recognise conserved diagonal one-site ones of particles."
        ),
    )
    fields: list[str] | None = field(
        default=None,
        metadata=says("Charges with a field; lattice kinds recognise conserved diagonal one-site ones of spins."),
    )


@dataclass(frozen=True)
class LatticeThermodynamics(Thermodynamics):
    """Roles of the charges, and parameters of their formulas."""

    __pydantic_config__ = STRICT

    parameters: list[str] = field(
        default_factory=list,
        metadata=says("Parameters whose generalised force is wanted; an entry of a list is written `g[0]`."),
    )


def check_roles(
    asked: Thermodynamics | None,
    charges: Iterable[str],
    problems: Problems,
    *,
    usual: str = "energy",
    prior: bool = False,
) -> None:
    """Note what is wrong with the names.

    Parameters
    ----------
    asked : Thermodynamics or None
    charges : iterable of str
    problems : Problems
    usual : str, optional
        The energy where none is named.
    prior : bool, optional
        Whether the states have a prior.
    """
    if asked is None:
        return
    known = list(charges)
    if prior:
        problems.add(("thermodynamics",), "a state with a prior (log_prior) has no thermodynamics")
    energy = usual if asked.energy is None else asked.energy
    if energy not in known:
        if asked.energy is None:
            text = f"no charge is called {usual!r}: name the one that is the energy, energy = ..."
            problems.add(("thermodynamics",), text)
        else:
            problems.add(("thermodynamics", "energy"), f"no charge is called {energy!r}{suggestion(energy, known)}")
    taken: dict[str, str] = {}
    for key in ("numbers", "fields"):
        for k, name in enumerate(getattr(asked, key) or ()):
            path = ("thermodynamics", key, k)
            if name not in known:
                problems.add(path, f"no charge is called {name!r}{suggestion(name, known)}")
            elif name == energy:
                problems.add(path, f"{name!r} is the energy")
            elif name in taken:
                where = "twice" if taken[name] == key else f"in {taken[name]}, too: a charge has one potential"
                problems.add(path, f"{name!r} is named {where}")
            taken.setdefault(name, key)


def roles(asked: Thermodynamics | None, charges: Iterable[str], *, numbers: Iterable[str] = ()) -> Roles | None:
    """Roles of the charges of a kind without lattice; None where no energy can be told.

    Parameters
    ----------
    asked : Thermodynamics or None
        Checked.
    charges : iterable of str
    numbers : iterable of str, optional
        Those that are recognised as numbers.
    """
    energy = "energy" if asked is None or asked.energy is None else asked.energy
    if energy not in charges:
        return None
    named = {energy, *((asked.numbers or ()) if asked else ()), *((asked.fields or ()) if asked else ())}
    given = None if asked is None else asked.numbers
    counted = [n for n in numbers if n not in named] if given is None else given
    return Roles(energy, tuple(counted), tuple((asked.fields or ()) if asked else ()))


def lattice_roles(options: Any, part: Any, problems: Problems) -> Roles | None:
    """Roles of the charges of a lattice kind; None where no energy can be told.

    Parameters
    ----------
    options : LatticeOptions
        Checked.
    part : _Part
        Charges and start of one size.
    problems : Problems
        Receives what is wrong with the parameters.
    """
    from maxent.quench.potentials import potential_of

    asked: LatticeThermodynamics = options.thermodynamics or LatticeThermodynamics()
    energy = asked.energy or options.hamiltonian
    if energy not in part.charges:
        return None
    named = {*(asked.numbers or ()), *(asked.fields or ())}
    found: dict[str, list[str]] = {"numbers": [], "fields": []}
    for name, operator in part.charges.items():
        sort = "" if name == energy or name in named else potential_of(operator)
        if sort and not part.charges[energy].commutator(operator).words:
            found[sort].append(name)
    numbers = found["numbers"] if asked.numbers is None else asked.numbers
    fields = found["fields"] if asked.fields is None else asked.fields
    at_number: Callable[[Any], Sequence[Any]] = lambda result: ()
    if options.method == "matrices" and options.start is not None:
        at_number = lambda result: _at_number(part, energy, numbers, result)
    return Roles(energy, tuple(numbers), tuple(fields), _couplings(options, part, energy, problems), at_number)


# ---------------------------------------------------------------------- parameters


def _couplings(options: Any, part: Any, energy: str, problems: Problems) -> tuple[Coupling, ...]:
    """The parameters asked for, with the derivatives of the charges."""
    asked = options.thermodynamics
    out: list[Coupling] = []
    for k, text in enumerate(asked.parameters if asked is not None else ()):
        path = ("thermodynamics", "parameters", k)
        if options.method != "matrices":
            problems.add(path, 'forces of parameters need method = "matrices"')
            continue
        parts = re.fullmatch(r"(\w+)(?:\[(\d+)\])?", text)
        name = parts[1] if parts else text
        if name not in options.parameters:
            problems.add(path, f"no parameter is called {name!r}{suggestion(name, options.parameters)}")
            continue
        if any(c.name == text for c in out):
            problems.add(path, f"{text!r} is named twice")
            continue
        position = int(parts[2]) if parts and parts[2] else None
        try:
            slopes = {n: q.derivative(name, position) for n, q in part.charges.items() if name in q.parameters}
        except ValueError as bad:
            problems.add(path, str(bad).removeprefix("derivative: "))
            continue
        slopes = {n: slope for n, slope in slopes.items() if slope.words}
        if not slopes:
            held = [p for p in options.parameters if _holds(part.charges[energy], p)]
            has = f"it holds {listing(held, 'and')}" if held else "it holds none"
            problems.add(path, f"{energy!r} does not hold the parameter {name!r}, nor does any other charge; {has}")
            continue
        value = options.parameters[name]
        at = float(value if position is None else value[position])
        out.append(Coupling(text, at, slopes, _rebuilt(part.charges, tuple(slopes), name, position)))
    return tuple(out)


def _holds(operator: Any, parameter: str) -> bool:
    return any(s.name == parameter for c in operator.words.values() for s in c.symbols())


def _rebuilt(
    charges: Mapping[str, Any], concerned: Sequence[str], name: str, position: int | None
) -> Callable[[float], dict[str, Any]]:
    def at(value: float) -> dict[str, Any]:
        given: Any = value
        out = dict(charges)
        for n in concerned:
            if position is not None:
                old = charges[n].parameters[name]
                given = (*old[:position], value, *old[position + 1 :])
            out[n] = charges[n].with_parameters(**{name: given})
        return out

    return at


# ---------------------------------------------------------------------- fixed number


def _at_number(part: Any, energy: str, numbers: Sequence[str], result: Any) -> list[Any]:
    """Temperature and chemical potential at fixed number, of every number that is sharp in the start."""
    import numpy as np

    from maxent.app.kinds._starts import as_start
    from maxent.quench.fixed_number import at_fixed_number
    from maxent.quench.thermodynamics import Quantity

    hamiltonian = part.charges[energy]
    counted = {n: part.charges[n] for n in numbers} or _total(part.sites, hamiltonian)
    if not counted:
        return []
    try:
        start = as_start(part.start, "start")
        matrix = hamiltonian.matrix().tocsr()
        lines = {n: np.real(q.matrix().diagonal()) for n, q in counted.items()}
    except ResourceError:
        return []
    out: list[Any] = []
    for name, line in lines.items():
        count, sharp = _sharp(start, line)
        if not sharp:
            continue
        sizes = [int(np.sum(np.abs(line - n) < 0.5)) for n in (count, count + 1)]
        if max(sizes) > SECTOR:
            what = f"chemical potential at {name} = {count}"
            reason = f"{plural(max(sizes), 'state')} in a sector are more than the {plural(SECTOR, 'state')} taken here"
            formula = f"mu = (ln Z_N - ln Z_{{N+1}})/beta, N = {count}"
            out.append(Quantity(what, formula, np.nan, np.nan, np.nan, reason))
            continue

        def energies(n: int, line: np.ndarray = line) -> np.ndarray | None:
            index = np.flatnonzero(np.abs(line - n) < 0.5)
            return np.linalg.eigvalsh(matrix[index][:, index].toarray()) if len(index) else None

        accuracy = abs(result.residuals[energy]) + 1e-12 * (1 + abs(result.values[energy]))
        out += at_fixed_number(energies, count, result.values[energy], accuracy=accuracy, name=name)
    return out


def _total(sites: Any, hamiltonian: Any) -> dict[str, Any]:
    """The total number of particles, where there are any and the Hamiltonian conserves it."""
    from maxent.lattice import formula
    from maxent.quench.potentials import potential_of

    try:
        number = formula("n[i]", sites)
    except FormulaError:
        return {}
    return {} if potential_of(number) != "numbers" or hamiltonian.commutator(number).words else {"number": number}


def _sharp(start: Any, line: Any) -> tuple[int, bool]:
    """Whole number that a diagonal operator has in the start, and whether it has no spread there."""
    import numpy as np

    weights = np.abs(start.vectors) ** 2 @ start.weights
    mean = float(line @ weights)
    count = round(mean)
    whole = np.abs(line - np.rint(line)).max() < 1e-9
    return count, bool(whole and float((line - count) ** 2 @ weights) < 1e-16 * max(1.0, float(np.ptp(line)) ** 2))
