"""Quadratic charges of free fermions and bosons: ``ln Z`` from one-body matrices instead of many-body ones.

    Q_j = sum h_ab c+_a c_b + 1/2 sum (D_ab c+_a c+_b + h.c.) + constant

The n-mode state ``exp(-sum_j lam_j Q_j)/Z`` is Gaussian whether or not the one-body matrices commute, and everything
about it follows from their combination ``sum_j lam_j h_j``: hundreds of modes are as cheap as ten spins.  Matrices that
are the same in every cell of a ring are given by distance and diagonalised by momentum.  Cost of one evaluation: one
eigendecomposition and m rotations per block.  Floor: families; must not know formulas and lattices.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import scipy.sparse as sp

from maxent.core.contract import Barrier, Evaluation, Face, Family, Lowest
from maxent.core.pytrees import register
from maxent.families.finite import checked_charges
from maxent.families.periodic import Periodic
from maxent.families.places import Momenta, Places, from_modes, from_momenta
from maxent.families.quadratic import STATISTICS, Quadratic, quadratic
from maxent.families.stacks import Stacks

__all__ = ["Bilinears", "Periodic"]


@register("names", "statistics", held=("places",))
@dataclass(frozen=True, init=False)
class Bilinears(Family):
    """Charges that are quadratic in fermion or boson operators.

    Parameters
    ----------
    charges : dict of str to one-body operator
        A Hermitian matrix h (n, n), dense or sparse, real or complex: ``sum h_ab c+_a c_b``.  Or a tuple ``(h, D)``
        with the pairing ``1/2 sum (D_ab c+_a c+_b + h.c.)``, D antisymmetric for fermions and symmetric for bosons; or
        ``(h, D, constant)``; for bosons also ``(h, D, constant, l)`` with ``sum (l_a b+_a + h.c.)``.  D may be None.
        Or a `Periodic`, for all charges or none.
    statistics : {"fermions", "bosons"}
    number : int, optional
        Fix the number of particles.  That is another ensemble: the number gets no multiplier and does not fluctuate,
        ``beta mu = ln Z_N - ln Z_{N+1}`` (`insertion` of the state) takes its place, and the state is not Gaussian, so
        that it answers means of quadratic operators only.  Charges given by matrices, without pairing or linear
        terms; host driver.  Bosons need no confining charge then.

    Raises
    ------
    TypeError, ValueError
        A matrix that is not Hermitian, a pairing of the wrong symmetry, different numbers of modes; names the charge.
        Bosons that no combination of the charges confines: ``ln Z`` is infinite for all multipliers.
    ResourceError
        Blocks that would not fit into memory.

    Notes
    -----
    The correlation matrix of a state is ``N_ab = <c+_a c_b>``, so that ``<Q> = sum h_ab N_ab = Tr h N^T``: for complex
    h the transpose matters.  Without the particle number among the charges the state is the one at ``mu = 0``, not one
    with a fixed number of particles.

    Examples
    --------
    >>> import numpy as np, maxent
    >>> hop = np.diag(np.ones(199), 1)
    >>> chain = Bilinears({"energy": -(hop + hop.T), "number": np.eye(200)})
    >>> result = maxent.solve(chain, {"energy": -90.0, "number": 70.0})
    >>> print(result.verdict, result.state.reduced(range(4)).covariance.shape)
    solved (8, 8)
    """

    particles: Any
    names: tuple[str, ...]
    statistics: str
    places: Any
    #: The charges as they were given; no field: a family that was combined or compressed has lost them.
    _given: ClassVar[tuple[Quadratic, ...] | None] = None

    def __init__(self, charges: Any, *, statistics: str = "fermions", number: int | None = None):
        charges = checked_charges(charges, "Bilinears")
        if statistics not in STATISTICS:
            raise ValueError(f"statistics must be one of {', '.join(map(repr, STATISTICS))}, not {statistics!r}")
        if not charges:
            raise ValueError("no charges given: Bilinears needs at least one charge")
        operators = {n: quadratic(q, f"charge {n!r}", statistics) for n, q in charges.items()}
        sizes = {n: q.modes for n, q in operators.items()}
        if len(set(sizes.values())) > 1:
            listed = ", ".join(f"{n!r} {d}" for n, d in sizes.items())
            raise ValueError(f"charges have different numbers of modes: {listed}")
        _same_ring(operators)
        if number is not None:
            _fixable(operators, statistics, number)
        self._build(tuple(operators.values()), tuple(operators), statistics, number)

    def _build(
        self, operators: tuple[Quadratic, ...], names: tuple[str, ...], statistics: str, number: int | None
    ) -> None:
        if statistics == "bosons" and any(not q.conserves_number for q in operators):
            from maxent.families.phase_space import PhaseSpace, Whereabouts

            particles: Any = PhaseSpace.of(operators)
            places: Any = Whereabouts.of(particles)
        else:
            build = from_momenta if operators[0].is_periodic else from_modes
            layout, constant, flat, flat_weights, dense, weights = build(list(operators), statistics)
            sign = 1 if statistics == "fermions" else -1
            particles = Stacks(constant, flat, flat_weights, dense, weights, sign)
            places = Places.of(layout)
        if statistics == "bosons" and number is None:
            from maxent.families.confinement import confined

            particles = confined(particles)
        if number is not None:
            from maxent.families.fixed_number import Canonical

            particles = Canonical(particles, int(number))
        self._set(particles, names, statistics, places)
        object.__setattr__(self, "_given", operators)

    def _set(self, *values: Any) -> Bilinears:
        for key, value in zip(("particles", "names", "statistics", "places"), values, strict=True):
            object.__setattr__(self, key, value)
        return self

    def _with(self, particles: Any, places: Any) -> Bilinears:
        names = self.names if len(self.names) == len(particles.constant) else ()
        return object.__new__(Bilinears)._set(particles, names, self.statistics, places)

    # ------------------------------------------------------------------ about the modes

    @property
    def size(self) -> int:
        """Number of levels that are not pinned, 2^size states for fermions; values are totals, not per mode."""
        return round(self.particles.levels)

    @property
    def modes(self) -> int:
        """Number of modes of the operators."""
        layout = self.places.layout
        return layout.like.modes if isinstance(layout, Momenta) else layout.modes

    @property
    def number(self) -> int | None:
        """The fixed number of particles on the levels that are free; None where the number is not fixed."""
        return getattr(self.particles, "number", None)

    @property
    def block_sizes(self) -> tuple[int, ...]:
        """Sizes of the blocks that stay matrices, largest first; everything else is numbers."""
        return tuple(sorted((d for a in self.particles.dense for d in [a.shape[2]] * a.shape[1]), reverse=True))

    @property
    def is_given(self) -> bool:
        """Whether the charges are those that were given, not results of arithmetic."""
        return self._given is not None

    def operators(self) -> dict[str, Quadratic]:
        """The charges as they were given.

        Raises
        ------
        ValueError
            A family of combined charges, or on a face.
        """
        if self._given is None:
            raise ValueError("these charges are results of arithmetic: nothing was given")
        return dict(zip(self.names, self._given, strict=True))

    def select(self, names: Sequence[str]) -> Bilinears:
        """The family of some of its charges, in the order asked for.

        Raises
        ------
        ValueError
            No names, a name that is not there, or twice the same; bosons that the remaining charges do not confine.
        """
        names, given = tuple(names), self.operators()
        if not names or len(set(names)) < len(names) or not set(names) <= set(given):
            raise ValueError(f"select takes different names out of {', '.join(given)}, not {', '.join(names)}")
        new = object.__new__(Bilinears)
        new._build(tuple(given[n] for n in names), names, self.statistics, self.number)
        return new

    def restrict(self, modes: Sequence[int]) -> Bilinears:
        """The family on some of the modes, all others empty.

        Raises
        ------
        ValueError
            A mode that does not exist or repeats; periodic charges, of which nothing can be cut out.
        """
        from maxent.families.gaussian_states import checked_modes

        given = self.operators()
        if any(q.is_periodic for q in given.values()):
            raise ValueError("periodic charges cannot be restricted to some modes: give them as matrices")
        kept = np.array(checked_modes(modes, self.modes), int)
        if not len(kept):
            raise ValueError("no mode left after the restriction")
        inside = []
        for q in given.values():
            h = sp.csr_array(q.hopping)[kept][:, kept] if sp.issparse(q.hopping) else q.hopping[np.ix_(kept, kept)]
            pairing = None if q.pairing is None else q.pairing[np.ix_(kept, kept)]
            linear = None if q.linear is None else q.linear[kept]
            inside.append(Quadratic(h, pairing if pairing is not None and pairing.any() else None, q.constant, linear))
        new = object.__new__(Bilinears)
        new._build(tuple(inside), self.names, self.statistics, self.number)
        return new

    # ------------------------------------------------------------------ the contract

    @property
    def entropy_floor(self) -> float:  # type: ignore[override]
        """0: these are states of particles."""
        return 0.0

    @property
    def scale(self) -> np.ndarray:
        """Operator norm of each charge, shape (m,); for bosons its size with one particle in every level."""
        return self.particles.scale

    def log_partition(self, lam: Any) -> Any:
        """``ln Z(lam)``, traceable by JAX, twice differentiable at any degeneracy; +inf outside the domain."""
        return self.particles.log_partition(lam)

    def evaluate(self, lam: Any, order: int = 2) -> Evaluation:
        """``ln Z``, values and covariance from one decomposition; NumPy or JAX by the type of `lam`."""
        return self.particles.evaluate(lam, order)

    def reference(self) -> tuple[np.ndarray, np.ndarray]:
        """Means (m,) and charges minus mean as rows (m, p), in the state of half filling (one boson per level)."""
        return self.particles.reference()

    def traced(self) -> Family:
        """The blocks alone.

        Raises
        ------
        TypeError
            With a fixed number, which only the host knows.
        """
        return self.particles.traced()

    def start(self) -> np.ndarray:
        """Infinite temperature; for bosons a point where every level is confined."""
        return self.particles.start()

    def combine(self, matrix: np.ndarray, offset: np.ndarray) -> Bilinears:
        """Family of the charges ``matrix @ Q - offset``."""
        return self._with(self.particles.combine(matrix, offset), self.places)

    def lowest(self, v: np.ndarray, *, with_values: bool = False) -> Lowest:
        """Lowest value of ``<v.Q>``: all negative levels filled."""
        return self.particles.lowest(v, with_values=with_values)

    def glance(self, v: np.ndarray) -> float:
        """Cheap upper bound of ``lowest(v).value``."""
        return self.particles.glance(v)

    def face(self, v: np.ndarray, tol: float) -> Face | None:
        """The states in which all negative levels are filled and all positive ones empty: levels at zero are free."""
        away = abs(self.lowest(v).value) > max(100 * tol, 1e-9 * float(np.abs(v) @ self.scale))
        ground = None if away else self.particles.ground(v, tol)
        if ground is None:
            return None
        family = self._with(self.particles.compress(ground), self.places.on_face(ground))
        return Face(family, ground.gap, ground.log_dimension, exact=not self.particles.dense, width=ground.width)

    def sharpen(self, v: np.ndarray) -> Iterable[np.ndarray]:
        """Candidates for exposing directions near `v`."""
        return self.particles.sharpen(v)

    def barrier(self, lam: np.ndarray) -> Barrier | None:
        """Self-concordant test of interiority."""
        return self.particles.barrier(lam)

    def reach(self) -> Any:
        """Bounds of the stiffness of each charge."""
        return self.particles.reach()

    def stiffness(self, lam: np.ndarray, u: np.ndarray, *, exact: bool = True) -> float | None:
        """How fast curvature can fall along `u`; see `maxent.families.stacks.Stacks.stiffness`."""
        return self.particles.stiffness(lam, u, exact=exact)

    @property
    def stiffness_is_proved(self) -> bool:  # type: ignore[override]
        """Whether `stiffness` is a theorem: for levels that are numbers."""
        return not self.particles.dense

    def norm_needed(self, lam: np.ndarray, off: np.ndarray, unit: np.ndarray) -> float | None:
        """Proof that targets are interior, see `maxent.families.leeway`."""
        return self.particles.norm_needed(lam, off, unit)

    def inside(self, lam: Any, step: Any, evaluation: Evaluation) -> Any:
        """The part of `step` that keeps bosons inside their domain; of fermions all of it."""
        return self.particles.inside(lam, step, evaluation)

    def state(self, lam: Any) -> Any:
        """Gaussian state at multipliers `lam`, shape (m,): a FermionState, BosonState or PeriodicState.

        Raises
        ------
        ValueError
            Not m finite numbers; bosons outside their domain.
        """
        lam = np.asarray(lam, float)
        m = len(self.particles.constant)
        if lam.shape != (m,) or not np.all(np.isfinite(lam)):
            raise ValueError(f"multipliers must be {m} finite numbers, not {lam.tolist()}")
        if self.statistics == "bosons" and self.number is None:
            smallest = self.particles.smallest_level(lam)
            if smallest <= 0:
                raise ValueError(f"bosons outside their domain: a level of lam.Q lies at {smallest:.6g}, not above 0")
        if self.number is not None:
            return self.particles.state_in(lam, self.places)
        return self.places.state(self.particles, lam)


def _fixable(operators: dict[str, Quadratic], statistics: str, number: Any) -> None:
    """Whether the number of particles can be fixed.

    Raises
    ------
    ValueError
    """
    n = next(iter(operators.values())).modes
    most = n if statistics == "fermions" else np.inf
    if isinstance(number, bool) or not isinstance(number, int | np.integer) or not 0 <= number <= most:
        allowed = f"in 0..{n}, the number of modes" if statistics == "fermions" else "from 0 on"
        raise ValueError(f"number must be an integer {allowed}, not {number!r}")
    for name, q in operators.items():
        if q.is_periodic or not q.conserves_number:
            what = "is periodic: give it as a matrix" if q.is_periodic else "does not conserve the number of particles"
            raise ValueError(f"charge {name!r} {what}")


def _same_ring(operators: dict[str, Quadratic]) -> None:
    """Periodic charges must live on one ring.

    Raises
    ------
    ValueError
    """
    rings = {n: q.hopping for n, q in operators.items() if q.is_periodic}
    if rings and len(rings) < len(operators):
        others = [n for n in operators if n not in rings]
        raise ValueError(f"charge {others[0]!r} is not periodic, but {next(iter(rings))!r} is: all or none")
    kinds = {n: (r.cells, r.modes_per_cell, r.antiperiodic) for n, r in rings.items()}
    if len(set(kinds.values())) > 1:
        listed = ", ".join(f"{n!r} {c} x {p}{', antiperiodic' if a else ''}" for n, (c, p, a) in kinds.items())
        raise ValueError(f"periodic charges live on different rings: {listed}")
