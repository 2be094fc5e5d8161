"""Thermodynamics of a run: computed from its result by `maxent.quench`, kept as plain data for the record.

Floor: app.  Numbers that are not finite become null, always with a reason beside them.  Must not know: sentences, HTML.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from dataclasses import replace
from typing import Any

import numpy as np

from maxent.app.job import Coupling, Job, Roles

__all__ = ["quantity", "section", "self_check"]

#: Work, in cubes of block sizes, above which self-checks go along one combination of the charges instead of along each:
#: the third power of 250 is some 20 ms of one core, and there are twenty evaluations per charge.
EVERY = 1e9
#: Evaluations along that combination: enough for nine digits.
FEW = 8
#: Largest number of states for which derivatives by parameters are compared with those that JAX takes: it works without
#: symmetries and compiles for seconds.
BY_JAX = 300


def section(job: Job, result: Any, say: Callable[[str], None]) -> dict[str, Any] | None:
    """The entry `thermodynamics` of a record.

    Parameters
    ----------
    job : Job
    result : Result
    say : callable
        Receives lines of progress.

    Returns
    -------
    dict or None
        JSON-ready; None where no energy can be told or there is no state.
    """
    roles = job.roles
    if roles is None or result.state is None:
        return None
    found: dict[str, Any] = {"energy": roles.energy, "numbers": list(roles.numbers), "fields": list(roles.fields)}
    if not result.success:
        return found | _at_the_limit(roles, result)
    from maxent.quench.selfchecks import NODES, check_result
    from maxent.quench.thermodynamics import thermodynamics

    every = _work(job) * len(result.names) * 20 <= EVERY
    errors = job.target_errors()
    thermo = thermodynamics(
        result,
        energy=roles.energy,
        numbers=roles.numbers,
        fields=roles.fields,
        family=job.family if every or errors is not None else None,
        errors=errors,
    )
    quantities = [*thermo.quantities, *roles.at_number(result)]
    nodes = NODES if every else FEW
    told = lambda text: say(f"self-checks: {text}")
    checks = list(check_result(result, job.family, nodes=nodes, every=every, progress=told))
    forces: list[Any] = []
    for coupling in roles.couplings:
        say(f"force of {coupling.name}")
        force, more = _force(job, roles, result, thermo, coupling)
        forces.append(force)
        checks += more
    if roles.couplings and job.family.size <= BY_JAX:
        say("derivatives by JAX")
        checks += _by_jax(roles, result, forces)
    return found | {
        "notes": _notes(thermo, roles),
        "quantities": [quantity(q) for q in quantities],
        "forces": [quantity(f) for f in forces],
        "self_checks": [self_check(c) for c in checks],
        "passed": all(map(bool, checks)),
    }


def quantity(found: Any) -> dict[str, Any]:
    """A `maxent.quench.thermodynamics.Quantity` as plain data."""
    numbers = {key: _finite(getattr(found, key)) for key in ("value", "error", "sigma")}
    return {"name": found.name, "formula": found.formula, **numbers, "reason": found.reason}


def self_check(found: Any) -> dict[str, Any]:
    """A `maxent.quench.selfchecks.SelfCheck` as plain data."""
    return {
        "name": found.name,
        "got": _finite(found.found),
        "expected": _finite(found.expected),
        "difference": _finite(found.difference),
        "tolerance": float(found.allowed),
        "passed": bool(found),
    }


def _at_the_limit(roles: Roles, result: Any) -> dict[str, Any]:
    """What is left of thermodynamics where the state is a limit: energy and entropy."""
    from maxent.quench.thermodynamics import Quantity

    reason = "the targets are met in a limit only, in which multipliers grow without bound"
    nothing = lambda name, formula: Quantity(name, formula, math.nan, math.nan, math.nan, reason)
    quantities = [
        Quantity("energy", f"E = <{roles.energy}>", result.values[roles.energy]),
        Quantity("entropy", "S of the limit state", result.entropy),
        nothing("inverse temperature", f"beta = lam[{roles.energy}]"),
        nothing("temperature", "T = 1/beta"),
        nothing("free energy", "F = E - T S"),
    ]
    note = f"Only energy and entropy are defined: {reason}."
    return {
        "notes": [note],
        "quantities": [quantity(q) for q in quantities],
        "forces": [],
        "self_checks": [],
        "passed": True,
    }


def _notes(thermo: Any, roles: Roles) -> list[str]:
    """What the sign of the temperature means, and that there is none."""
    first = thermo["inverse temperature"]
    if first.reason:
        return [f"There is no temperature: {first.reason}."]
    temperature = thermo["temperature"]
    if temperature.reason:
        return [
            f"{temperature.reason[0].upper()}{temperature.reason[1:]}. Free energies are not defined there; "
            "entropy and Massieu potential are."
        ]
    if first.value < 0:
        return [
            "The temperature is negative: higher levels are the more likely ones, as an upper end of the energies "
            "allows. Such a state is hotter than any of positive temperature and gives off energy to it; among all "
            "states it has the highest free energy, not the lowest."
        ]
    return []


def _work(job: Job) -> float:
    """About how much one evaluation of the family takes, in cubes of block sizes."""
    if job.unit != "state":
        return float(job.size) ** (3 if job.unit == "mode" else 1)
    return float(sum(stack.shape[-1] ** 3 for stack in job.family.blocks.dense))


# ---------------------------------------------------------------------- forces


def _force(job: Job, roles: Roles, result: Any, thermo: Any, coupling: Coupling) -> tuple[Any, list[Any]]:
    """Force of a parameter, and its checks against families built with other values of it."""
    from maxent.quench.forces import parameter_response
    from maxent.quench.selfchecks import check_response
    from maxent.quench.thermodynamics import Quantity

    name = f"force of {coupling.name}"
    formula = f"(1/beta) d ln Z/d{coupling.name}{_as_means(roles.energy, coupling)}"
    response = parameter_response(job.family, result.multipliers, coupling.derivatives, energy=roles.energy)
    reason = thermo["temperature"].reason
    if reason:
        force = Quantity(name, formula, math.nan, math.nan, math.nan, reason)
    else:
        names, beta = result.names, result.multipliers[roles.energy]
        # d (d ln Z/da)/d lam_j = -d<Q_j>/da at fixed multipliers
        slope = np.array([-response.values[n] / beta for n in names])
        slope[names.index(roles.energy)] -= response.force / beta
        error = float(np.abs(slope) @ np.array([result.multiplier_errors[n] for n in names]))
        pull = thermo.multiplier_factor
        sigma = float(np.linalg.norm(slope @ pull)) if np.any(pull) else 0.0
        force = Quantity(name, formula, response.force, error, sigma)
    at = coupling.value
    # the answer is smooth on the scale on which ln Z changes its slope, and as far as the parameter keeps its sign
    radius = 0.3 / math.sqrt(abs(response.curvature) + response.log_partition**2 / job.family.size + 1e-300)
    radius = min(radius, _reach(result, coupling), 0.3 * abs(at) if at else math.inf)
    checks = check_response(response, _family_at(job, coupling), result.multipliers, at=at, radius=radius, fits=False)
    return force, [replace(c, name=c.name.replace("/da", f"/d{coupling.name}")) for c in checks]


def _as_means(energy: str, coupling: Coupling) -> str:
    """The same as a mean, where the energy alone depends on the parameter."""
    return f" = -<d {energy}/d{coupling.name}>" if set(coupling.derivatives) == {energy} else ""


def _reach(result: Any, coupling: Coupling) -> float:
    """Change of the parameter for which levels of the exponent change by about one."""
    size = sum(abs(result.multipliers[n]) * x.norm_bound for n, x in coupling.derivatives.items())
    return 1.0 / size if size else math.inf


def _family_at(job: Job, coupling: Coupling) -> Callable[[float], Any]:
    from maxent.families.matrices import Matrices
    from maxent.lattice.sectors import blocked

    def at(value: float) -> Any:
        matrices = {n: q.matrix() for n, q in coupling.charges(value).items()}
        return Matrices(matrices if job.family.basis is None else blocked(matrices, job.family.basis))

    return at


def _by_jax(roles: Roles, result: Any, forces: Iterable[Any]) -> list[Any]:
    """Derivatives of ln Z by the parameters, from derivatives of the operators against JAX on the formulas."""
    from maxent.quench.forces import parameter_slopes
    from maxent.quench.selfchecks import FIRST, compared

    wanted = [(c, f) for c, f in zip(roles.couplings, forces, strict=True) if not f.reason]
    if not wanted:
        return []
    beta, out = result.multipliers[roles.energy], []
    charges = wanted[0][0].charges(wanted[0][0].value)
    parameters = list(dict.fromkeys(c.name.partition("[")[0] for c, _ in wanted))
    found = parameter_slopes(charges, result.multipliers, parameters=parameters)
    for coupling, force in wanted:
        slope = found.gradient[found.names.index(coupling.name)]
        name = f"d ln Z/d{coupling.name}, means of operators against JAX"
        out.append(compared(name, beta * force.value, slope, 1 + abs(slope), FIRST))
    return out


def _finite(x: float) -> float | None:
    return float(x) if math.isfinite(x) else None
