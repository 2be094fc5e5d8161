"""The solver as a building block of JAX code: inside jit, vmap and grad, for one set of targets or for thousands.

Charges without a target are *observed*: their multiplier is zero and their value is part of the answer, so that means
of any operator come with their derivatives.  Nothing is raised inside compiled code; a solution carries whether it has
converged.  Why it has not, `maxent.solve` tells: verdicts are decided on the host.  Floor: solve.
"""

from __future__ import annotations

from collections.abc import Mapping
from functools import partial
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np

from maxent.core.autodiff import fit, values_at
from maxent.core.blocks import Blocks
from maxent.core.contract import Family
from maxent.core.many import Many, fit_many
from maxent.families.finite import Finite
from maxent.targets import Exact, suggestion

__all__ = ["Solution", "combine", "solve", "solve_many", "with_arrays"]

class Solution(NamedTuple):
    """What `solve` returns: a pytree, differentiable in targets and in the arrays of the family.

    Attributes
    ----------
    multipliers : dict of str to float64
        Zero for observed charges.
    values : dict of str to float64
        ``<Q_j>`` of all charges, observed ones included.
    log_partition : float64
    entropy : float64
        ``ln Z + lam.q`` in nats: the entropy for a counting measure (degeneracies count), minus the relative entropy
        (up to the normalisation of the prior) with a prior.
    converged : bool
        Whether the residual is what rounding explains.
    steps : int
    """

    multipliers: dict[str, Any]
    values: dict[str, Any]
    log_partition: Any
    entropy: Any
    converged: Any
    steps: Any


def solve(family: Family, targets: Mapping[str, Any], *, iterations: int = 100) -> Solution:
    """Multipliers of the maximum-entropy state, traceable and differentiable.

    Parameters
    ----------
    family : Family
        Such as `maxent.families.Matrices`; its arrays may be traced (`combine`, `with_arrays`).
    targets : dict of str to float64
        Values of some of the charges; may be traced.
    iterations : int
        Largest number of Newton steps.

    Returns
    -------
    Solution

    Raises
    ------
    ValueError
        Unknown names, or JAX in single precision.

    Examples
    --------
    >>> import jax, numpy as np
    >>> from maxent import compiled
    >>> from maxent.families import Microstates
    >>> die = Microstates({"pips": np.arange(1, 7), "even": [0, 1, 0, 1, 0, 1]})
    >>> with jax.enable_x64(True):
    ...     even = jax.jit(lambda mean: compiled.solve(die, {"pips": mean}).values["even"])
    ...     print(f"{even(4.5):.6f} {jax.grad(even)(4.5):.6f}")
    0.591712 0.105122
    """
    names, free = _names(family, targets, iterations)
    q = jnp.stack([_scalar(targets[names[j]], names[j]) for j in free])
    return _one(family.traced(), q, names, free, iterations)


@partial(jax.jit, static_argnums=(2, 3, 4))
def _one(family: Family, q: Any, names: tuple[str, ...], free: tuple[int, ...], iterations: int) -> Solution:
    found = fit(family, q, free, len(names), iterations)
    return _named(names, free, q, Many(found, family.log_partition(found.lam), values_at(family, found.lam)))


@partial(jax.jit, static_argnums=(2, 3, 4, 5))
def _many(
    family: Family, q: Any, names: tuple[str, ...], free: tuple[int, ...], iterations: int, batch: int | None
) -> Solution:
    return _named(names, free, q, fit_many(family, q, free, len(names), iterations, batch))


def _named(names: tuple[str, ...], free: tuple[int, ...], q: Any, known: Many) -> Solution:
    found = known.fit
    entropy = known.log_partition + jnp.sum(found.lam[..., jnp.array(free, int)] * q, axis=-1)
    named = lambda x: {n: x[..., j] for j, n in enumerate(names)}
    return Solution(
        named(found.lam), named(known.values), known.log_partition, entropy, found.converged, found.steps
    )


def solve_many(
    family: Family, targets: Mapping[str, Any], *, batch: int | None = None, iterations: int = 100
) -> Solution:
    """Multipliers for many sets of targets at once, in batches that stay in the cache.

    Parameters
    ----------
    family : Family
    targets : dict of str to (n,) float64
    batch : int, optional
        Sets solved side by side; by default chosen so that a batch fits the cache.
    iterations : int
        Largest number of Newton steps.

    Returns
    -------
    Solution
        Every array has a leading axis n.  Equal to a loop over `solve` to 1e-12 where converged.

    Raises
    ------
    ValueError
        Unknown names, targets of different lengths, or JAX in single precision.
    """
    names, free = _names(family, targets, iterations)
    if batch is not None and (not isinstance(batch, int) or batch < 1):
        raise ValueError(f"batch must be a positive integer, not {batch!r}")
    columns = [jnp.asarray(targets[names[j]], float) for j in free]
    shapes = {names[j]: c.shape for j, c in zip(free, columns, strict=True)}
    if not columns or any(len(s) != 1 for s in shapes.values()) or len(set(shapes.values())) > 1:
        raise ValueError(f"targets must be arrays of one common length, not of shapes {shapes}")
    q = jnp.stack(columns, axis=1)
    return _many(family.traced(), q, names, free, iterations, batch)


def combine(family: Family, charges: Mapping[str, Mapping[str, Any]]) -> Family:
    """Family of new charges that are combinations of those of `family`, with coefficients that may be traced.

    Parameters
    ----------
    family : Family
        With named charges.
    charges : dict of str to dict of str to float
        New name -> coefficients by old name; what is missing is zero.

    Raises
    ------
    ValueError
        Unknown names.

    Examples
    --------
    >>> import jax
    >>> from maxent.families import Microstates
    >>> spins = Microstates({"bonds": [1.0, -1, -1, 1], "up": [2.0, 0, 0, -2]})
    >>> with jax.enable_x64(True):
    ...     model = combine(spins, {"energy": {"bonds": -1.0, "up": -0.3}})
    """
    old = tuple(family.names)  # type: ignore[attr-defined]
    rows = []
    if not charges or any(not isinstance(parts, Mapping) for parts in charges.values()):
        raise ValueError("combine takes new charges as a dict name -> coefficients by old name, at least one")
    for name, parts in charges.items():
        for part in parts:
            if part not in old:
                raise ValueError(f"charge {name!r} uses {part!r}, which is no charge{suggestion(part, old)}")
        rows.append(jnp.stack([jnp.asarray(parts.get(n, 0.0), float) for n in old]))
    matrix: Any = jnp.stack(rows)
    mixed = family.combine(matrix, jnp.zeros(len(rows)))  # type: ignore[arg-type]
    object.__setattr__(mixed, "names", tuple(charges))
    return mixed


def with_arrays(family: Family, arrays: Any) -> Family:
    """The same family with other arrays of the same shapes, which may be traced.

    The way to derivatives by the charges themselves: ``arrays`` is what ``family.traced()`` gives, with other numbers.

    Parameters
    ----------
    family : Family
        `maxent.families.Matrices` or `maxent.families.Microstates`.
    arrays : maxent.core.blocks.Blocks
        Diagonal charges (m, n) and dense blocks (m, d, d).

    Raises
    ------
    TypeError
        Arrays that are not of this kind.

    Examples
    --------
    >>> import jax
    >>> from maxent.families import Microstates
    >>> die = Microstates({"pips": [1.0, 2, 3, 4, 5, 6]})
    >>> with jax.enable_x64(True):
    ...     entropy = lambda arrays: solve(with_arrays(die, arrays), {"pips": 4.5}).entropy
    ...     slope = jax.grad(entropy)(die.traced())
    >>> slope.diagonal.shape
    (1, 6)
    """
    if not isinstance(arrays, Blocks) or not isinstance(family, Finite):
        raise TypeError("with_arrays takes a family with blocks, and what its traced() gives with other numbers")
    return family._with(arrays, None)


def _scalar(value: Any, name: str) -> Any:
    """One target as a float64 scalar; Exact is unwrapped."""
    value = value.value if isinstance(value, Exact) else value
    try:
        array = jnp.asarray(value, float)
    except (TypeError, ValueError):
        array = None
    if array is None or isinstance(value, str) or array.shape != ():
        raise TypeError(f"target {name!r} must be one number, not {type(value).__name__}")
    return array


def _names(
    family: Family, targets: Mapping[str, Any], iterations: int
) -> tuple[tuple[str, ...], tuple[int, ...]]:
    if not isinstance(iterations, int) or iterations < 1:
        raise ValueError(f"iterations must be a positive integer, not {iterations!r}")
    if not targets:
        raise ValueError("no targets given: at least one charge needs one")
    if jnp.zeros(0).dtype != np.float64:
        raise ValueError("compiled solves need double precision: call them inside `with jax.enable_x64(True):`")
    names = tuple(family.names)  # type: ignore[attr-defined]
    for n in targets:
        if n not in names:
            raise ValueError(f"target {n!r} is for no charge{suggestion(str(n), names)}")
    return names, tuple(j for j, n in enumerate(names) if n in targets)
