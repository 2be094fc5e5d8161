"""Thermodynamics of a solved result: every quantity by its name, with its formula, and only where it is defined.

With ``lam[energy] = beta``, ``lam[number] = -beta mu`` and ``lam[field charge] = -beta h`` the state is
``exp(-beta (H - mu N - h M))/Z``; k_B = 1, all quantities are totals.  Everything of second order follows from one
linear response: along a path that changes beta while some charges keep their values, some their potentials (mu, h) and
the rest their multipliers,

    d<Q> = -chi d lam,      dE/dT = beta^2 (chi d)_E,      T dS/dT = beta lam.chi d,      d = d lam/d beta,

chi the Kubo-Mori covariance (the plain variance is wrong for charges that do not commute).  With further charges in the
exponent ``lam[energy]`` depends on how these are written and is no inverse temperature; then the quantities that need
one are not given, and the reason is.  Floor: quench.  Must not know matrices.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from functools import cached_property, partial
from typing import Any, NamedTuple

import numpy as np

from maxent.core.contract import EPS, Family
from maxent.diagnose.multipliers import user_covariance
from maxent.result import Result

__all__ = ["Quantity", "Thermodynamics", "thermodynamics"]

#: Relative step of the differences that carry standard errors over.
STEP = 1e-4


@dataclass(frozen=True)
class Quantity:
    """One thermodynamic quantity.

    Attributes
    ----------
    name, formula : str
    value : float
        NaN where it is not defined.
    error : float
        Upper bound, to first order, of what rounding and the stated accuracy of the targets leave open.
    sigma : float
        Standard error that follows from those of the targets, to first order.  It and `error` are NaN where they would
        take derivatives of the covariance and no family was given.
    reason : str
        Why it is not defined; empty when it is.
    """

    name: str
    formula: str
    value: float
    error: float = 0.0
    sigma: float = 0.0
    reason: str = ""

    @property
    def is_defined(self) -> bool:
        """Whether there is a value."""
        return not self.reason

    def __str__(self) -> str:
        if self.reason:
            return f"{self.name}: not defined, {self.reason}"
        spread = f" +- {self.sigma:.2g}" if self.sigma > 0 else ""
        return f"{self.name} = {self.value:.10g}{spread}  [{self.formula}]"


class _Point(NamedTuple):
    """A state of the family by what thermodynamics needs of it."""

    lam: np.ndarray
    values: np.ndarray
    covariance: np.ndarray
    log_partition: float

    @property
    def entropy(self) -> float:
        return self.log_partition + float(self.lam @ self.values)


class _Definition(NamedTuple):
    """How a quantity follows from a point, and what stands against it."""

    name: str
    formula: str
    of: Callable[[_Point], float]
    reason: str = ""
    second_order: bool = False


@dataclass(frozen=True, eq=False)
class Thermodynamics:
    """Thermodynamic quantities of a result; made by `thermodynamics`.

    Attributes
    ----------
    result : Result
    energy : str
    numbers, fields : tuple of str
        Charges whose potentials are chemical potentials and fields.
    family : Family or None
    errors : (m, p) ndarray or None
        ``errors @ errors.T`` is the covariance of the targets.
    """

    result: Result
    energy: str
    numbers: tuple[str, ...]
    fields: tuple[str, ...]
    family: Family | None
    errors: np.ndarray | None

    # ------------------------------------------------------------------ access

    @cached_property
    def quantities(self) -> tuple[Quantity, ...]:
        """All quantities, those that are not defined included."""
        return tuple(self._quantity(d) for d in self._definitions())

    def __getitem__(self, name: str) -> Quantity:
        for q in self.quantities:
            if q.name == name:
                return q
        raise KeyError(f"no quantity {name!r}; there are {', '.join(q.name for q in self.quantities)}")

    def __str__(self) -> str:
        return "\n".join(map(str, self.quantities))

    @property
    def further(self) -> tuple[str, ...]:
        """Charges that are neither the energy nor a number nor a field charge."""
        known = {self.energy, *self.numbers, *self.fields}
        return tuple(n for n in self.result.names if n not in known)

    def heat_capacity(
        self, *, of: str = "heat", values: Sequence[str] = (), potentials: Sequence[str] = ()
    ) -> Quantity:
        """Heat capacity along any path.

        Parameters
        ----------
        of : {"heat", "energy"}
            ``T dS/dT`` or ``dE/dT``; they differ unless the values of all other charges are held.
        values : sequence of str
            Charges whose values are held.
        potentials : sequence of str
            Numbers or field charges whose mu or h is held.  All others keep their multipliers.

        Returns
        -------
        Quantity

        Raises
        ------
        ValueError
            Unknown names, the energy among them, or a charge held in two ways.
        """
        values, potentials = tuple(values), tuple(potentials)
        if of not in ("heat", "energy"):
            raise ValueError(f"a heat capacity is 'of' heat or energy, not {of!r}")
        for n in (*values, *potentials):
            if n not in self.result.names or n == self.energy:
                raise ValueError(f"{n!r} cannot be held: it must be a charge other than the energy")
            if (*values, *potentials).count(n) > 1:
                raise ValueError(f"{n!r} is held twice")
        for n in potentials:
            if n not in (*self.numbers, *self.fields):
                raise ValueError(f"{n!r} has no potential: it is neither a number nor a field charge")
        return self._quantity(self._capacity(of, values, potentials))

    def susceptibility(self, name: str, *, values: Sequence[str] = ()) -> Quantity:
        """Response of a number or field charge to its own potential at fixed temperature, ``d<M>/dh = beta chi_MM``.

        Parameters
        ----------
        name : str
            A number or a field charge.
        values : sequence of str
            Charges whose values are held; all others keep their multipliers.

        Returns
        -------
        Quantity

        Raises
        ------
        ValueError
            Unknown names.
        """
        if name not in (*self.numbers, *self.fields):
            raise ValueError(f"{name!r} has no potential: it is neither a number nor a field charge")
        for n in values:
            if n not in self.result.names or n in (self.energy, name):
                raise ValueError(f"{n!r} cannot be held: it must be a charge other than the energy and {name!r}")
        return self._quantity(self._susceptibility(name, tuple(values)))

    # ------------------------------------------------------------------ what is defined

    @cached_property
    def _beta_obstacle(self) -> str:
        r = self.result
        live = [n for n in self.further if abs(r.multipliers[n]) > 10 * r.multiplier_errors[n]]
        if live:
            names = ", ".join(live)
            return f"lam[{self.energy}] depends on how the further charges ({names}) are written"
        return self._redundant(self.energy)

    @cached_property
    def _obstacle(self) -> str:
        if self._beta_obstacle:
            return self._beta_obstacle
        beta, error = self.result.multipliers[self.energy], self.result.multiplier_errors[self.energy]
        return f"beta is zero within its error {error:.1g}: the temperature is infinite" if abs(beta) <= error else ""

    def _redundant(self, *names: str) -> str:
        for relation in self.result.redundancies:
            for n in names:
                if n in relation.coefficients:
                    others = [o for o in relation.coefficients if o != n]
                    how = f"is redundant with {', '.join(others)}" if others else "is a number in all states"
                    return f"{n} {how}: its multiplier is not fixed"
        return ""

    def _definitions(self) -> list[_Definition]:
        E, partners = self.energy, (*self.numbers, *self.fields)
        e, at = self._at(E), self._obstacle
        beta = lambda p: p.lam[e]
        out = [
            _Definition("inverse temperature", f"beta = lam[{E}]", beta, self._beta_obstacle),
            _Definition("temperature", "T = 1/beta", lambda p: 1 / beta(p), at),
        ]
        for n in partners:
            kind = "chemical potential" if n in self.numbers else "field"
            potential = lambda p, k: -p.lam[k] / beta(p)
            formula = f"{self._label(n)} = -lam[{n}]/beta"
            what = f"{kind} ({n})" if len(self.numbers if n in self.numbers else self.fields) > 1 else kind
            out.append(_Definition(what, formula, partial(potential, k=self._at(n)), at or self._redundant(n)))
        out += [
            _Definition("energy", f"E = <{E}>", lambda p: p.values[e]),
            _Definition("entropy", "S = ln Z + lam.q", lambda p: p.entropy),
            _Definition("Massieu potential", "ln Z", lambda p: p.log_partition),
            _Definition("free energy", "F = E - T S", lambda p: p.values[e] - p.entropy / beta(p), at),
        ]
        fields, numbers = [self._at(n) for n in self.fields], [self._at(n) for n in self.numbers]
        # -beta h M = lam_M M: potentials enter through the multipliers themselves
        minus = lambda p, held: p.values[e] - (p.entropy - sum(p.lam[k] * p.values[k] for k in held)) / beta(p)
        magnetic = "".join(f" - {self._label(n)} <{n}>" for n in self.fields)
        counted = "".join(f" - {self._label(n)} <{n}>" for n in self.numbers)
        if fields:
            against = at or self._redundant(*self.fields)
            out.append(_Definition("free energy at fixed field", f"F{magnetic}", partial(minus, held=fields), against))
        if numbers:
            against = at or self._redundant(*partners)
            name = "grand potential at fixed field" if fields else "grand potential"
            out.append(
                _Definition(name, f"F{counted}{magnetic} = -T ln Z", partial(minus, held=numbers + fields), against)
            )
        return [*out, *self._second_order(partners)]

    def _second_order(self, partners: tuple[str, ...]) -> Iterable[_Definition]:
        if not partners and not self.further:
            yield self._capacity("heat", (), (), name="heat capacity")
            return
        if partners:
            yield self._capacity("heat", partners, ())
            if self.numbers and self.fields:
                yield self._capacity("heat", self.numbers, self.fields)
            yield self._capacity("energy", (), partners)
            yield self._capacity("heat", (), partners)
        if self.further:
            yield self._capacity("heat", (*partners, *self.further), ())
        yield self._capacity("energy", (), ())
        for n in partners:
            yield self._susceptibility(n, ())

    # ------------------------------------------------------------------ second order

    def _capacity(
        self, of: str, values: tuple[str, ...], potentials: tuple[str, ...], *, name: str = ""
    ) -> _Definition:
        rest = [n for n in self.result.names if n not in (self.energy, *values, *potentials)]
        E = self.energy
        held = [*values, *[self._label(n) for n in potentials]]
        if rest and not held:
            held = ["other multipliers"]
        elif rest:
            held.append(f"multipliers of {', '.join(rest)}")
        both = not potentials and not rest  # dE = T dS when all other values are held
        what = "heat capacity" if both or (of == "energy" and not potentials) else _SHORT[of]
        mixed = " + ".join(f"{self._label(n)} {n}" for n in potentials)
        right = "K" if mixed else E
        left = E if of == "energy" else ("G" if rest else right)
        inner, where = f"chi[{left},{right}]", []
        if values:
            inner = f"({inner} - chi[{left},x] chi[x,x]^-1 chi[x,{right}])"
            where.append(f"x = {', '.join(values)}")
        if mixed:
            where.append(f"K = {E} - ({mixed})")
        if left == "G":
            where.append("G = sum of lam_j Q_j/beta")
        formula = ", ".join([f"beta^2 {inner}", *where])
        against = self._obstacle or self._redundant(*potentials)
        path = partial(self._along, of=of, values=values, potentials=potentials)
        return _Definition(name or f"{what} at fixed {' and '.join(held)}", formula, path, against, second_order=True)

    def _along(self, p: _Point, *, of: str, values: tuple[str, ...], potentials: tuple[str, ...]) -> float:
        e, beta = self._at(self.energy), p.lam[self._at(self.energy)]
        direction = np.zeros(len(p.lam))
        direction[e] = 1.0
        for n in potentials:
            direction[self._at(n)] = p.lam[self._at(n)] / beta
        direction = _held(p.covariance, direction, [self._at(n) for n in values])
        slope = p.covariance @ direction
        return float(beta**2 * slope[e] if of == "energy" else beta * (p.lam @ slope))

    def _susceptibility(self, name: str, values: tuple[str, ...]) -> _Definition:
        e, k, held = self._at(self.energy), self._at(name), [self._at(n) for n in values]

        def response(p: _Point) -> float:
            direction = np.zeros(len(p.lam))
            direction[k] = 1.0
            return float(p.lam[e] * (p.covariance @ _held(p.covariance, direction, held))[k])

        fixed = f" at fixed {', '.join(values)}" if values else ""
        minus = f" - chi[{name},x] chi[x,x]^-1 chi[x,{name}], x = {', '.join(values)}" if values else ""
        formula = f"d<{name}>/d{self._label(name)} = beta (chi[{name},{name}]{minus})"
        return _Definition(f"susceptibility of {name}{fixed}", formula, response, self._obstacle, second_order=True)

    # ------------------------------------------------------------------ numbers

    def _quantity(self, d: _Definition) -> Quantity:
        if d.reason:
            return Quantity(d.name, d.formula, math.nan, math.nan, math.nan, d.reason)
        value = float(d.of(self._here))
        gradient = self._gradient(d)
        r = self.result
        error = float(sum(abs(g) * r.multiplier_errors[n] for g, n in zip(gradient, r.names, strict=True) if g))
        pull = self.multiplier_factor
        sigma = float(np.linalg.norm(gradient @ pull)) if np.any(pull) else 0.0
        return Quantity(d.name, d.formula, value, error, sigma)

    def _gradient(self, d: _Definition) -> np.ndarray:
        """Derivatives (m,) by the multipliers; NaN where these need a family and there is none."""
        here, out = self._here, np.zeros(len(self._here.lam))
        if d.second_order and self.family is None:
            return np.full(len(out), np.nan)
        for k in range(len(out)):
            spread = math.sqrt(max(here.covariance[k, k], 0.0))
            step = STEP * max(abs(here.lam[k]), STEP / spread if spread else 1.0)
            up, down = self._near(k, step), self._near(k, -step)
            out[k] = (d.of(up) - d.of(down)) / (2 * step)
        return out

    def _near(self, k: int, step: float) -> _Point:
        """The state at a neighbouring multiplier, from the family or to second order in the step."""
        here = self._here
        lam = here.lam.copy()
        lam[k] += step
        if self.family is not None:
            if (k, step) not in self._neighbours:
                found = self.family.evaluate(lam, 2)
                assert found.covariance is not None
                self._neighbours[k, step] = _Point(
                    lam, np.asarray(found.values), np.asarray(found.covariance), float(found.log_partition)
                )
            return self._neighbours[k, step]
        column = here.covariance[:, k]
        log_z = here.log_partition - here.values[k] * step + 0.5 * column[k] * step**2
        return _Point(lam, here.values - column * step, here.covariance, log_z)

    @cached_property
    def _neighbours(self) -> dict[tuple[int, float], _Point]:
        return {}

    @cached_property
    def _here(self) -> _Point:
        r = self.result
        lam = np.array([r.multipliers[n] for n in r.names])
        return _Point(lam, np.array([r.values[n] for n in r.names]), np.asarray(r.covariance), r.log_partition)

    @cached_property
    def multiplier_factor(self) -> np.ndarray:
        """Factor (m, p) of the covariance of the multipliers that follows from that of the targets, or zero."""
        r = self.result
        pull = np.array([r.sigmas.get(n, 0.0) for n in r.names])
        errors = np.diag(pull) if self.errors is None else self.errors
        out = np.zeros(errors.shape)
        kept = np.array([n not in r.not_needed for n in r.names], bool)
        if not np.any(errors) or not kept.any():
            return out
        unit = r.outcome.whitening.spread[kept, None]
        root = np.concatenate([user_covariance(r.outcome)[1][kept] / unit, np.diag(pull)[kept] / unit], axis=1)
        axes, size, _ = np.linalg.svd(root, full_matrices=False)
        rank = int(np.sum(size > EPS * max(root.shape) * size.max()))
        half = axes[:, :rank] / size[:rank]
        out[kept] = half @ (half.T @ (errors[kept] / unit)) / unit
        return out

    def _at(self, name: str) -> int:
        return self.result.names.index(name)

    def _label(self, name: str) -> str:
        """The potential: mu or h, with the name of the charge where there are several."""
        letter, group = ("mu", self.numbers) if name in self.numbers else ("h", self.fields)
        return letter if len(group) == 1 else f"{letter}[{name}]"


_SHORT = {"heat": "T dS/dT", "energy": "dE/dT"}


def thermodynamics(
    result: Result,
    *,
    energy: str = "energy",
    numbers: str | Sequence[str] = (),
    fields: str | Sequence[str] = (),
    family: Family | None = None,
    errors: Any = None,
) -> Thermodynamics:
    """Thermodynamic quantities of a solved result.

    Parameters
    ----------
    result : Result
    energy : str, optional
        The charge that is the energy H (without the terms that the other multipliers stand for).
    numbers : str or sequence of str, optional
        Charges with a chemical potential, ``lam = -beta mu``.
    fields : str or sequence of str, optional
        Charges with a field, ``lam = -beta h``.  All charges that are not named are further charges.
    family : Family, optional
        The family that was solved; needed for standard errors of heat capacities and susceptibilities.
    errors : (m, p) array_like, optional
        ``errors @ errors.T`` is the covariance of the targets, in the order of ``result.names``; by default that of the
        targets given as `maxent.Measured`.

    Returns
    -------
    Thermodynamics

    Raises
    ------
    SolveError
        The result is not solved: on a boundary there is no temperature.
    ValueError
        Unknown or repeated names, a state with a prior, a family of other charges, errors that do not fit.

    Examples
    --------
    >>> import maxent
    >>> from maxent.families import Microstates
    >>> result = maxent.solve(Microstates({"energy": [0.0, 1.0]}), {"energy": 0.2})
    >>> thermo = thermodynamics(result)
    >>> f"T = {thermo['temperature'].value:.6f}, C = {thermo['heat capacity'].value:.6f}"
    'T = 0.721348, C = 0.307490'
    """
    result.require()
    numbers = (numbers,) if isinstance(numbers, str) else tuple(numbers)
    fields = (fields,) if isinstance(fields, str) else tuple(fields)
    every = (energy, *numbers, *fields)
    for n in every:
        if n not in result.names:
            raise ValueError(f"{n!r} is no charge of the result: {', '.join(map(repr, result.names))}")
        if every.count(n) > 1:
            raise ValueError(f"{n!r} is named twice: a charge is the energy, a number or a field charge")
    if family is not None and tuple(family.names) != result.names:  # type: ignore[attr-defined]
        raise ValueError("the family has other charges than the result: give the one that was solved")
    rows = None if errors is None else np.asarray(errors, float)
    if rows is not None and (rows.ndim != 2 or len(rows) != len(result.names) or not np.all(np.isfinite(rows))):
        raise ValueError(f"errors must be finite, of shape ({len(result.names)}, p), not {rows.shape}")
    thermo = Thermodynamics(result, energy, numbers, fields, family, rows)
    here = thermo._here
    size = 1 + abs(here.entropy) + float(np.abs(here.lam) @ np.abs(here.values))
    if abs(here.entropy - result.entropy) > 1e-6 * size:
        raise ValueError(
            f"ln Z + lam.q is {here.entropy:.8g}, the entropy {result.entropy:.8g}: a state with a prior has no "
            "thermodynamics"
        )
    return thermo


def _held(covariance: np.ndarray, direction: np.ndarray, held: list[int]) -> np.ndarray:
    """The change of the multipliers completed so that the charges `held` keep their values."""
    if not held:
        return direction
    block, push = covariance[np.ix_(held, held)], covariance[held] @ direction
    unit = np.sqrt(np.diag(block))
    unit = np.where(unit > 0, unit, 1.0)  # a charge that does not fluctuate keeps its value anyway
    answer = np.linalg.lstsq(block / np.outer(unit, unit), push / unit, rcond=1e-13)[0] / unit
    completed = direction.copy()
    completed[held] -= answer
    return completed
