"""Tables `[start]` of the lattice kinds: exactly one way to make a start state.

Floor: app/kinds.  Products of angles and of sharp occupations stay products, whose means need no vector; everything
else becomes a `Start` of vectors.
Must not know: charges, targets, families.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from maxent.app.job import STRICT, BadInput, Problems, says
from maxent.app.locate import Path
from maxent.errors import FormulaError, ResourceError
from maxent.text import listing, plural

if TYPE_CHECKING:
    from maxent.app.data import Files

__all__ = ["AngleStart", "OccupationStart", "StartMaker", "StartTable", "as_start"]

Entry = int | float | str | list[int]
_ANGLE = "a number, a pattern that repeats, or a formula in `i`, `L` and the parameters"


@dataclass(frozen=True)
class Wall:
    """One pattern on the left and another on the right."""

    __pydantic_config__ = STRICT

    left: list[Entry] = field(metadata=says("Pattern on the sites before `at`."))
    right: list[Entry] = field(metadata=says("Pattern from there on."))
    at: int | None = field(default=None, metadata=says("First site of the right part; half of the sites by default."))


@dataclass(frozen=True)
class StartTable:
    """One start; exactly one of its ways is given."""

    __pydantic_config__ = STRICT

    pattern: list[Entry] | None = field(
        default=None,
        metadata=says(
            'Pattern of sharp states that repeats along the sites: `"up"`, `"down"` or a value of Sz for spins; '
            "occupations for fermions and bosons, with several species a name or one occupation per species."
        ),
    )
    domain_wall: Wall | None = field(default=None, metadata=says("Two patterns side by side."))
    ground_of: str | None = field(
        default=None,
        metadata=says("Formula of a Hamiltonian whose ground state it is; of a degenerate one the equal mixture."),
    )
    thermal_of: str | None = field(default=None, metadata=says("Formula of a Hamiltonian whose thermal state it is."))
    beta: float | None = field(default=None, metadata=says("Inverse temperature of `thermal_of`."))
    file: str | None = field(
        default=None,
        metadata=says(
            "File with a vector or a density matrix, or, with the gaussian method, a covariance: `name.npy` or "
            "`name.npz:array`."
        ),
    )

    @property
    def ways(self) -> dict[str, Any]:
        """The ways that are given."""
        known = ("theta", "pattern", "domain_wall", "ground_of", "thermal_of", "file", "mixture")
        return {k: getattr(self, k) for k in known if getattr(self, k, None) is not None}

    def known_ways(self) -> list[str]:
        """The ways there are."""
        return [k for k in self.__dataclass_fields__ if k not in ("phi", "beta", "weight")]

    def describe(self) -> str:
        """Say what the start is, for tables."""
        way, value = next(iter(self.ways.items()))
        if way == "theta":
            return f"product state, theta = {value}, phi = {getattr(self, 'phi', None) or 0.0}"
        if way == "domain_wall":
            at = "" if value.at is None else f" from site {value.at} on"
            return f"domain wall, {_said(value.left)} | {_said(value.right)}{at}"
        if way == "mixture":
            return "mixture: " + "; ".join(f"{part.weight:g} of {part.describe()}" for part in value)
        return {
            "pattern": lambda: f"pattern {_said(value)}",
            "ground_of": lambda: f"ground state of {value}",
            "thermal_of": lambda: f"thermal state of {value} at beta = {self.beta:g}",
            "file": lambda: f"from the file {value}",
        }[way]()

    def check(self, path: Path, problems: Problems) -> bool:
        """Note what is wrong with the choice of keys; whether it is one that can be made."""
        before, ways = len(problems.found), list(self.ways)
        if not ways:
            problems.add(path, f"no state; give one of {listing(self.known_ways())}")
        elif len(ways) > 1:
            problems.add(path, f"one way to make a state is needed, got {listing(ways, 'and')}")
        if getattr(self, "phi", None) is not None and "theta" not in ways:
            problems.add((*path, "phi"), "goes with theta, which is not given")
        if (self.beta is None) != (self.thermal_of is None):
            given, missing = ("beta", "thermal_of") if self.thermal_of is None else ("thermal_of", "beta")
            problems.add((*path, given), f"goes with {missing}, which is not given")
        return len(problems.found) == before


@dataclass(frozen=True)
class OccupationPart(StartTable):
    """One part of a mixture."""

    __pydantic_config__ = STRICT

    weight: float = field(kw_only=True, metadata=says("Probability of this part."))


@dataclass(frozen=True)
class OccupationStart(StartTable):
    """Start of fermions or bosons."""

    __pydantic_config__ = STRICT

    mixture: list[OccupationPart] | None = field(
        default=None,
        metadata=says("Tables `[[start.mixture]]`, each with a `weight` and one of the ways above."),
    )


@dataclass(frozen=True)
class AnglePart(StartTable):
    """One part of a mixture of spins."""

    __pydantic_config__ = STRICT

    weight: float = field(kw_only=True, metadata=says("Probability of this part."))
    theta: float | list[float] | str | None = field(default=None, metadata=says(f"Polar angle: {_ANGLE}."))
    phi: float | list[float] | str | None = field(default=None, metadata=says("Azimuth, written in the same ways."))


@dataclass(frozen=True)
class AngleStart(StartTable):
    """Start of spins."""

    __pydantic_config__ = STRICT

    theta: float | list[float] | str | None = field(
        default=None,
        metadata=says(f"Polar angle of the spins of a product state: {_ANGLE}."),
    )
    phi: float | list[float] | str | None = field(
        default=None, metadata=says('Azimuth, written in the same three ways, e.g. `"2*pi*i/L"`; 0 by default.')
    )
    mixture: list[AnglePart] | None = field(
        default=None,
        metadata=says("Tables `[[start.mixture]]`, each with a `weight` and one of the ways above."),
    )


class StartMaker:
    """Makes the start of one size.

    Parameters
    ----------
    sites : Sites
    parameters : mapping
        Of the config.
    read : callable
        Path and formula -> Hermitian operator, or None after a problem.
    files : Files
    problems : Problems
    gaussian : bool
        Whether ground states, thermal states and files become covariance matrices instead of vectors.
    """

    def __init__(
        self,
        sites: Any,
        parameters: Any,
        read: Callable[[Path, str], Any],
        files: Files,
        problems: Problems,
        *,
        gaussian: bool = False,
    ):
        self.sites, self.parameters, self.read, self.files, self.problems = sites, parameters, read, files, problems
        self.gaussian = gaussian

    def prepare(self, table: StartTable, path: Path = ("start",)) -> Callable[[], Any] | None:
        """Check everything that is quick; what is left to do makes a `LocalProduct` or a `Start`.

        Returns
        -------
        callable or None
            None after a problem.
        """
        if not table.check(path, self.problems):
            return None
        (way,) = table.ways
        return getattr(self, f"_{way}")(table, path)

    def _theta(self, table: Any, path: Path) -> Callable[[], Any] | None:
        from maxent.lattice import ProductState

        phi = 0.0 if table.phi is None else table.phi
        before = len(self.problems.found)
        for key, a, b in (("theta", table.theta, 0.0), ("phi", 0.0, phi)):  # alone, so that each error has its line
            try:
                ProductState(self.sites, a, b, parameters=self.parameters)
            except ValueError as bad:
                self.problems.add((*path, key), str(bad).removeprefix(f"{key}: "))
        if len(self.problems.found) > before:
            return None
        return lambda: ProductState(self.sites, table.theta, phi, parameters=self.parameters)

    def _pattern(self, table: Any, path: Path) -> Callable[[], Any] | None:
        from maxent.lattice import PatternState

        return self._sharp((*path, "pattern"), lambda: PatternState(self.sites, table.pattern))

    def _domain_wall(self, table: Any, path: Path) -> Callable[[], Any] | None:
        from maxent.lattice import domain_wall

        wall = table.domain_wall
        make = lambda: domain_wall(self.sites, wall.left, wall.right, at=wall.at)
        return self._sharp((*path, "domain_wall"), make)

    def _sharp(self, path: Path, make: Callable[[], Any]) -> Callable[[], Any] | None:
        try:
            made = make()
        except (TypeError, ValueError) as bad:
            self.problems.add(path, str(bad))
            return None
        return lambda: made

    def _ground_of(self, table: Any, path: Path) -> Callable[[], Any] | None:
        operator = self.read((*path, "ground_of"), table.ground_of)
        if operator is None:
            return None

        def make() -> Any:
            if self.gaussian:
                from maxent.quench.gaussian_starts import gaussian_ground

                return gaussian_ground(operator)
            from maxent.quench.starts import ground_start

            return ground_start(operator)

        return self._guarded((*path, "ground_of"), make)

    def _thermal_of(self, table: Any, path: Path) -> Callable[[], Any] | None:
        operator = self.read((*path, "thermal_of"), table.thermal_of)
        if operator is None:
            return None

        def make() -> Any:
            if self.gaussian:
                from maxent.quench.gaussian_starts import gaussian_thermal

                return gaussian_thermal(operator, table.beta)
            from maxent.lattice.symmetries import adapted_basis
            from maxent.quench.starts import thermal_start

            basis = adapted_basis([operator], self.sites)
            return thermal_start(operator, table.beta, basis=None if basis is None else basis.matrix)

        return self._guarded((*path, "thermal_of"), make)

    def _file(self, table: Any, path: Path) -> Callable[[], Any] | None:
        where = (*path, "file")
        if table.file.endswith(".npz"):
            self.problems.add(where, f"{table.file!r} may hold several arrays; say which one, name.npz:array")
            return None
        if not table.file.endswith(".npy") and ".npz:" not in table.file:
            self.problems.add(where, f"{table.file!r} is no file of arrays; expected name.npy or name.npz:array")
            return None
        try:
            value = self.files.read(table.file)
        except ValueError as bad:
            self.problems.add(where, str(bad))
            return None
        if self.gaussian:
            return self._covariance(where, table.file, value)
        states = self.sites.states
        if value.ndim not in (1, 2) or set(value.shape) != {states}:
            shape = " x ".join(map(str, value.shape))
            self.problems.add(
                where,
                f"{table.file!r} has shape {shape}; {plural(self.sites.size, 'site')} need a vector of {states} "
                f"amplitudes or a density matrix of {states} x {states}",
            )
            return None
        from maxent.quench.starts import Start

        build = Start.from_vector if value.ndim == 1 else Start.from_density
        make = self._guarded(where, lambda: build(value, label=table.file))
        try:
            made = make()
        except BadInput as bad:
            self.problems.found += bad.problems
            return None
        return lambda: made

    def _covariance(self, where: Path, name: str, value: Any) -> Callable[[], Any] | None:
        from maxent.lattice import Bosons
        from maxent.quench.gaussian_starts import gaussian_state

        modes = len(self.sites.slots)
        if value.shape != (2 * modes, 2 * modes):
            shape = " x ".join(map(str, value.shape))
            text = f"{name!r} has shape {shape}; {plural(modes, 'mode')} need a covariance of {2 * modes} x {2 * modes}"
            self.problems.add(where, text)
            return None
        statistics = "bosons" if isinstance(self.sites.kind(0), Bosons) else "fermions"
        try:
            made = gaussian_state(value, statistics=statistics, label=name)
        except ValueError as bad:
            self.problems.add(where, str(bad))
            return None
        return lambda: made

    def _mixture(self, table: Any, path: Path) -> Callable[[], Any] | None:
        parts = [self.prepare(part, (*path, "mixture", k)) for k, part in enumerate(table.mixture)]
        weights = [part.weight for part in table.mixture]
        if not weights or min(weights) < 0 or abs(math.fsum(weights) - 1) > 1e-8:
            self.problems.add(
                (*path, "mixture"),
                f"weights must be probabilities that add up to 1, got {listing(map(str, weights), 'and')}",
            )
            return None
        if any(part is None for part in parts):
            return None

        def make() -> Any:
            from maxent.quench.starts import Start

            made = [as_start(part(), p.describe()) for part, p in zip(parts, table.mixture, strict=True) if part]
            return Start.mixture(made, weights)

        return self._guarded((*path, "mixture"), make)

    def _guarded(self, path: Path, make: Callable[[], Any]) -> Callable[[], Any]:
        """Errors of the calculation land on the line of the key."""

        def guarded() -> Any:
            try:
                return make()
            except FormulaError:
                raise
            except (TypeError, ValueError, ResourceError) as bad:
                raise BadInput([(path, str(bad))]) from bad

        return guarded


def as_start(made: Any, label: str) -> Any:
    """A `Start` of vectors, from whatever a maker made."""
    from maxent.quench.starts import Start

    if isinstance(made, Start):
        return made
    return Start.from_vector(made, label=label)


def _said(pattern: list[Entry]) -> str:
    return " ".join(str(entry).replace(" ", "") for entry in pattern)
