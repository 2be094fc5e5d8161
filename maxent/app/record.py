"""A result as plain data: the content of `result.json`, from which report and terminal are made.

Floor: app.  Format `maxent.result/1`, described in `maxent/app/schema/result.schema.json` and docs/result.md.
Numbers that are not finite become null. Must not know: files, HTML, the clock.
"""

from __future__ import annotations

import json
import math
from collections.abc import Mapping, Sequence
from typing import Any

from maxent.app.config import Config
from maxent.app.job import Job
from maxent.app.sections import Section, entry
from maxent.diagnose.explanation import left_by_sigmas
from maxent.version import __version__

__all__ = ["SCHEMA", "dump", "record"]

SCHEMA = "maxent.result/1"


def record(
    config: Config,
    job: Job,
    result: Any,
    *,
    asked_driver: str,
    facts: Mapping[str, str],
    versions: Mapping[str, str],
    notes: Sequence[str] = (),
    quench: Mapping[str, Any] | None = None,
    sections: Sequence[Section] = (),
    thermodynamics: Mapping[str, Any] | None = None,
) -> dict[str, Any]:
    """Collect everything a result says, with the names of the charges.

    Parameters
    ----------
    config : Config
        What was asked.
    job : Job
        What was built from it.
    result : Result
        What came out.
    asked_driver : str
        The driver asked for ("auto", "host", "jax"); the one that ran is in the result.
    facts : mapping of str to str
        What was built, for people.
    versions : mapping of str to str
        Versions of the programs that took part.
    notes : sequence of str, optional
        What a reader must know beyond the result.
    quench : mapping, optional
        Comparison of the ensembles with the dynamics (study.py).
    sections : sequence of Section, optional
        Further tables and curves.
    thermodynamics : mapping, optional
        Thermodynamics of the result (thermodynamics.py).

    Returns
    -------
    dict
        JSON-ready.
    """
    errors = job.target_errors()
    sigmas = {} if errors is None else result.multiplier_sigmas(errors)
    explanation = list(result.explanation)
    if sigmas and result.success:
        explanation.append(left_by_sigmas(result.multipliers, sigmas))
    return {
        "schema": SCHEMA,
        "title": config.header.title or config.file.stem,
        "config": config.file.name,
        "kind": config.header.kind,
        "verdict": str(result.verdict),
        "evidence": result.evidence,
        "success": bool(result.success),
        "loose": bool(result.loose),
        "message": result.message,
        "charges": [_charge(name, job, result, sigmas.get(name)) for name in result.names],
        "log_partition": _finite(result.log_partition),
        "entropy": _finite(result.entropy),
        "relative_entropy": _finite(result.relative_entropy),
        "covariance": [[_finite(x) for x in row] for row in result.covariance],
        "certificate": _certificate(job, result),
        "face": _face(result),
        "conflict": None if result.conflict is None else list(result.conflict),
        "nearest": _nearest(result.nearest),
        "explanation": explanation,
        "excess": None if result.excess is None else _combination(result.excess),
        "redundancies": [
            {"coefficients": _combination(r.coefficients), "constant": _finite(r.constant)} for r in result.redundancies
        ],
        "conditioning": _conditioning(result.conditioning),
        "predictions": _predictions(job, result),
        "replay": _finite(result.replay),
        "iterations": int(result.iterations),
        "driver": result.driver,
        "asked_driver": asked_driver,
        "size": int(job.family.size),
        "notes": list(notes),
        "thermodynamics": thermodynamics,
        "quench": quench,
        "sections": [entry(s) for s in sections],
        "facts": dict(facts),
        "versions": {"maxent": __version__, **versions},
    }


def dump(data: Mapping[str, Any]) -> str:
    """Write a record as JSON text, the same text for the same record."""
    return json.dumps(data, indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def _charge(name: str, job: Job, result: Any, sigma: float | None) -> dict[str, Any]:
    target = job.targets[name]
    digits = result.digits[name]
    return {
        "name": name,
        "target": target.value,
        "target_source": target.source,
        "sigma": target.sigma,
        "accuracy": target.accuracy,
        "value": _finite(result.values[name]),
        "residual": _finite(result.residuals[name]),
        "place": result.slack[name],
        "multiplier": _finite(result.multipliers[name]),
        "multiplier_sigma": _finite(sigma),
        "multiplier_error": _finite(result.multiplier_errors[name]),
        "multiplier_digits": math.floor(digits) if math.isfinite(digits) else None,
        "last_multiplier": _finite(result.last_multipliers[name]),
    }


def _certificate(job: Job, result: Any) -> dict[str, Any] | None:
    found = result.certificate
    if found is None:
        return None
    check = found.verify(job.family, job.asked())
    return {
        "kind": found.kind,
        "direction": _combination(found.direction),
        "lowest": _finite(found.lowest),
        "asked": _finite(found.asked + found.slack),
        "margin": _finite(found.margin),
        "tolerance": _finite(found.tolerance),
        "verified": bool(check),
    }


def _face(result: Any) -> dict[str, Any] | None:
    face = result.face
    if face is None:
        return None
    return {
        "dimension": round(face.dimension) if math.isfinite(face.dimension) else None,
        "depth": face.depth,
        "directions": [_combination(d) for d in face.directions],
        "gaps": [_finite(gap) for gap in face.gaps],
    }


def _nearest(found: Any) -> dict[str, Any] | None:
    if found is None:
        return None
    return {
        "targets": _combination(found.targets),
        "moves": _combination(found.moves),
        "distance": _finite(found.distance),
        "lower": _finite(found.lower),
        "upper": _finite(found.upper),
        "unit": _combination(found.unit),
    }


def _conditioning(found: Any) -> dict[str, Any] | None:
    if found is None:
        return None
    return {
        "condition_number": _finite(found.condition_number),
        "stiffest": _combination(found.stiffest.coefficients),
        "sloppiest": _combination(found.sloppiest.coefficients),
        "spectrum": [_finite(x) for x in found.spectrum],
    }


def _predictions(job: Job, result: Any) -> list[dict[str, Any]]:
    reached = result.state is not None
    return [
        {"name": name, "value": _finite(job.mean(result.state, operator)) if reached else None}
        for name, operator in job.predictions.items()
    ]


def _combination(coefficients: Mapping[str, float]) -> dict[str, float | None]:
    return {name: _finite(c) for name, c in coefficients.items()}


def _finite(x: float | None) -> float | None:
    return None if x is None or not math.isfinite(x) else float(x)
