"""How a state answers to a parameter of its charges: generalised forces and Maxwell relations.

Charges ``Q_j(a)`` with a parameter a (a coupling, a field inside the Hamiltonian, a length) and ``X_j = dQ_j/da``:

    d ln Z/da|_lam = -sum_j lam_j <X_j> = dS/da|_q,               force = (1/beta) d ln Z/da|_lam,
    d<Q_i>/da|_lam = <X_i> - sum_j lam_j chi(Q_i, X_j),           d lam/da|_q = chi^-1 d<Q>/da|_lam,
    d2 ln Z/da2|_lam = sum_ij lam_i lam_j chi(X_i, X_j) - sum_j lam_j <d2Q_j/da2>,

chi the Kubo-Mori covariance, also between charges and X_j.  The second line is the Maxwell relation
``d lam_i/da|_q = -d/dq_i (sum_j lam_j <X_j>)``.  Derivatives by the parameters of formulas come symbolically
(`OperatorSum.derivative`) or, all at once and to second order, by JAX.  Floor: quench.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse as sp

from maxent.core.contract import Family
from maxent.families.matrices import Matrices
from maxent.families.microstates import Microstates
from maxent.families.operators import operator_matrix
from maxent.lattice.coefficients import Coefficient, Symbol
from maxent.lattice.exact import ONE, to_complex
from maxent.lattice.sectors import blocked
from maxent.lattice.terms import OperatorSum
from maxent.result import Result

__all__ = ["ParameterSlopes", "Response", "generalised_force", "parameter_response", "parameter_slopes"]


@dataclass(frozen=True)
class Response:
    """Answer of a state to a parameter a of its charges.

    Attributes
    ----------
    log_partition : float
        ``d ln Z/da`` at fixed multipliers; the same number is ``dS/da`` at fixed values.
    curvature : float
        ``d2 ln Z/da2`` at fixed multipliers.
    values : dict of str to float
        ``d<Q_i>/da`` at fixed multipliers.
    multipliers : dict of str to float
        ``d lam_i/da`` at fixed values.
    force : float
        ``(1/beta) d ln Z/da`` at fixed multipliers; NaN where beta is zero.
    """

    log_partition: float
    curvature: float
    values: dict[str, float]
    multipliers: dict[str, float]
    force: float


@dataclass(frozen=True)
class ParameterSlopes:
    """``ln Z`` as a function of the parameters of formulas, at fixed multipliers.

    Attributes
    ----------
    log_partition : float
    names : tuple of str
        Parameters; an entry of a list parameter is written ``name[k]``.
    gradient : (n,) ndarray
    hessian : (n, n) ndarray
    """

    log_partition: float
    names: tuple[str, ...]
    gradient: np.ndarray
    hessian: np.ndarray


def generalised_force(result: Result, derivatives: Mapping[str, Any], *, energy: str = "energy") -> float:
    """Force of a parameter, ``(1/beta) d ln Z/da`` at fixed multipliers: a pressure, a magnetisation.

    Parameters
    ----------
    result : Result
        Solved.
    derivatives : dict of str to operator
        ``dQ_j/da`` by charge, of the same kind as the charges, or as `OperatorSum`; charges that do not depend on a are
        left out.
    energy : str, optional
        The charge whose multiplier is beta.

    Returns
    -------
    float
        For a Hamiltonian alone it is ``-<dH/da>``.

    Raises
    ------
    SolveError
        Not solved.
    ValueError
        Unknown names, or beta = 0.

    Examples
    --------
    >>> import numpy as np, maxent
    >>> from maxent.families import Microstates
    >>> width = 2.0                                                     # particle in a box: E = n^2/width^2
    >>> energy = np.arange(1, 60) ** 2 / width**2
    >>> result = maxent.solve(Microstates({"energy": energy}), {"energy": 3.0})
    >>> round(generalised_force(result, {"energy": -2 * energy / width}), 12)  # 2 E/width
    3.0
    """
    result.require()
    _named(derivatives, result.names)
    if energy not in result.names:
        raise ValueError(f"no charge {energy!r} to be the energy; the charges are {', '.join(result.names)}")
    beta = result.multipliers[energy]
    if beta == 0:
        raise ValueError("at beta = 0 only beta times the force is defined")
    return -sum(result.multipliers[n] * result.mean(_operator(x)) for n, x in derivatives.items()) / beta


def parameter_response(
    family: Family,
    multipliers: Mapping[str, float],
    derivatives: Mapping[str, Any],
    *,
    second: Mapping[str, Any] | None = None,
    energy: str = "energy",
) -> Response:
    """First and second order answer of a state to a parameter of its charges.

    Parameters
    ----------
    family : Matrices or Microstates
        Without a prior.
    multipliers : dict of str to float
        Of all charges, such as ``result.multipliers``.
    derivatives : dict of str to operator
        ``dQ_j/da`` by charge; charges that do not depend on a are left out.
    second : dict of str to operator, optional
        ``d2Q_j/da2`` by charge, where it is not zero.
    energy : str, optional
        The charge whose multiplier is beta, for the force.

    Returns
    -------
    Response

    Raises
    ------
    TypeError, ValueError
        A family of another kind or with a prior, unknown or missing names, operators that do not fit.
    """
    if not isinstance(family, Matrices | Microstates):
        raise TypeError(f"parameter_response takes Matrices or Microstates, not {type(family).__name__}")
    names, second = family.names, dict(second or {})
    _named(derivatives, names)
    _named(second, names)
    missing = [n for n in names if n not in multipliers]
    if missing or len(multipliers) > len(names):
        raise ValueError(f"multipliers must be given for {', '.join(names)}, not for {', '.join(multipliers)}")
    lam = np.array([float(multipliers[n]) for n in names])
    if not np.all(np.isfinite(lam)):
        raise ValueError("multipliers must be finite: there are none without a solution")
    extra = {f"d {n}": x for n, x in derivatives.items()} | {f"d2 {n}": x for n, x in second.items()}
    at = _extended(family, extra).evaluate(np.concatenate([lam, np.zeros(len(extra))]), 2)
    assert at.covariance is not None
    m, k = len(names), len(derivatives)
    weights = np.array([multipliers[n] for n in derivatives], float)
    values, chi = np.asarray(at.values), np.asarray(at.covariance)
    means = dict(zip(derivatives, values[m : m + k], strict=True))
    slope = -float(weights @ values[m : m + k])
    push = np.array([means.get(n, 0.0) for n in names]) - chi[:m, m : m + k] @ weights
    bend = float(weights @ chi[m : m + k, m : m + k] @ weights)
    bend -= float(sum(multipliers[n] * v for n, v in zip(second, values[m + k :], strict=True)))
    unit = np.sqrt(np.diag(chi)[:m])
    unit = np.where(unit > 0, unit, 1.0)
    answer = np.linalg.lstsq(chi[:m, :m] / np.outer(unit, unit), push / unit, rcond=1e-13)[0] / unit
    beta = multipliers.get(energy, 0.0)
    return Response(
        slope,
        bend,
        dict(zip(names, map(float, push), strict=True)),
        dict(zip(names, map(float, answer), strict=True)),
        slope / beta if beta else float("nan"),
    )


def parameter_slopes(
    charges: Mapping[str, OperatorSum], multipliers: Mapping[str, float], *, parameters: Sequence[str] | None = None
) -> ParameterSlopes:
    """Gradient and Hessian of ``ln Z`` by the parameters of formulas at fixed multipliers, by JAX.

    The formulas are split into pieces with one coefficient each; the coefficients become functions that JAX
    differentiates, and `maxent.compiled.combine` puts the charges together inside.

    Parameters
    ----------
    charges : dict of str to OperatorSum
        Hermitian, on the same sites.
    multipliers : dict of str to float
        Of all charges.
    parameters : sequence of str, optional
        Parameters to differentiate by; by default all real ones that occur.

    Returns
    -------
    ParameterSlopes

    Raises
    ------
    TypeError, ValueError
        A charge that is no `OperatorSum` or not Hermitian, missing multipliers, parameters that are unknown, complex,
        or have two values.
    """
    import jax
    import jax.numpy as jnp

    from maxent import compiled

    known: dict[str, Any] = {}
    symbols: set[Symbol] = set()
    for name, charge in charges.items():
        if not isinstance(charge, OperatorSum):
            raise TypeError(f"charge {name!r} must be an OperatorSum, not {type(charge).__name__}")
        if not charge.is_hermitian:
            raise ValueError(f"charge {name!r} is not Hermitian: {charge.non_hermitian_word}")
        if name not in multipliers:
            raise ValueError(f"no multiplier for charge {name!r}")
        for parameter, value in charge.parameters.items():
            if known.setdefault(parameter, value) != value:
                raise ValueError(f"parameter {parameter!r} has two values: {known[parameter]} and {value}")
        symbols |= {s for c in charge.words.values() for s in c.symbols()}
    real = sorted({s.name for s in symbols if s.phase == 0})
    wanted = real if parameters is None else list(parameters)
    for parameter in wanted:
        if parameter not in real:
            raise ValueError(f"{parameter!r} is no real parameter of these formulas: {', '.join(real) or 'none'}")
    free = [(p, k) for p in wanted for k in (range(len(known[p])) if isinstance(known[p], tuple) else (None,))]
    labels = tuple(p if k is None else f"{p}[{k}]" for p, k in free)
    start = np.array([known[p] if k is None else known[p][k] for p, k in free], float)

    pieces: dict[str, Any] = {}
    parts: dict[str, dict[str, tuple[Coefficient, str]]] = {}
    for name, charge in charges.items():
        grouped: dict[Coefficient, dict[Any, Coefficient]] = {}
        for word, coefficient in charge.words.items():
            grouped.setdefault(coefficient, {})[word] = Coefficient.constant(ONE)
        parts[name] = {}
        for number, (coefficient, words) in enumerate(grouped.items()):
            matrix = OperatorSum(charge.sites, words).matrix()
            adjoint = matrix.conj().T
            # c W + h.c. = Re c (W + W^H) + Im c i (W - W^H), halved since the adjoint words are listed, too
            for side, piece in (("real", 0.5 * (matrix + adjoint)), ("imag", 0.5j * (matrix - adjoint))):
                if abs(piece).max() > 0:
                    key = f"{name} {number} {side}"
                    pieces[key], parts[name][key] = piece, (coefficient, side)

    with jax.enable_x64(True):
        family = Matrices(pieces)
        lam = jnp.array([multipliers[n] for n in charges], float)

        def log_partition(x: Any) -> Any:
            given = dict(known)
            for (p, k), value in zip(free, x, strict=True):
                given[p] = value if k is None else (*given[p][:k], value, *given[p][k + 1 :])
            mix = {}
            for name, own in parts.items():
                mix[name] = {
                    key: getattr(jnp, side)(_traced(coefficient, given)) for key, (coefficient, side) in own.items()
                }
            return compiled.combine(family, mix).log_partition(lam)

        both = jax.value_and_grad(log_partition)
        value, gradient, hessian = jax.jit(lambda x: (*both(x), jax.jacfwd(jax.grad(log_partition))(x)))(start)
        return ParameterSlopes(float(value), labels, np.asarray(gradient), np.asarray(hessian))


def _traced(coefficient: Coefficient, parameters: Mapping[str, Any]) -> Any:
    """Value of a coefficient as something that JAX can differentiate."""
    import jax.numpy as jnp

    total: Any = 0.0
    for monomial, number in coefficient.terms.items():
        plain = to_complex(number)
        part: Any = plain if plain.imag else plain.real
        for atom, exponent in monomial:
            if isinstance(atom, Symbol):
                value = parameters[atom.name]
                if isinstance(value, tuple):
                    assert isinstance(atom.position, int)
                    value = value[atom.position]
                value = jnp.conj(value) if atom.phase < 0 else value
            else:
                value = _traced(atom.argument, parameters)
                value = value if atom.function == "group" else getattr(jnp, atom.function)(value)
            part = part * value**exponent
        total = total + part
    return total


def _extended(family: Matrices | Microstates, operators: Mapping[str, Any]) -> Family:
    """The family with further charges."""
    if isinstance(family, Microstates):
        if family.blocks.prior is not None and (
            family.degeneracy is None or np.any(family.blocks.prior != family.degeneracy)
        ):
            raise ValueError("a family with a prior has no thermodynamics")
        charges = dict(zip(family.names, family.blocks.diagonal, strict=True))
        for name, x in operators.items():
            array = np.asarray(x, float)
            if array.shape != (family.listed,):
                raise ValueError(f"{name!r} must list {family.listed} states, not {array.shape}")
            charges[name] = array[family.index]
        return Microstates(charges, log_weights=family.degeneracy)
    if family.blocks.has_prior:
        raise ValueError("a family with a prior has no thermodynamics")
    matrices: dict[str, Any] = dict(family.operators())
    for name, x in operators.items():
        matrix = operator_matrix(_operator(x), name)
        if family.basis is not None:
            if matrix.shape[0] != family.basis.shape[0]:
                raise ValueError(f"{name!r} has dimension {matrix.shape[0]}, the family {family.basis.shape[0]}")
            matrix = blocked({name: matrix}, family.basis)[name]  # rounding would join blocks
        matrices[name] = sp.csr_array(matrix)
    return Matrices(matrices)


def _operator(x: Any) -> Any:
    return x.matrix() if isinstance(x, OperatorSum) else x


def _named(derivatives: Mapping[str, Any], names: Sequence[str]) -> None:
    for n in derivatives:
        if n not in names:
            raise ValueError(f"derivative of {n!r}, which is no charge: {', '.join(names)}")
