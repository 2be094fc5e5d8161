"""Lagrange multipliers of constrained maximum-entropy states, with certified verdicts.

``solve(family, targets)`` finds the multipliers ``lam_j`` of ``exp(-sum_j lam_j Q_j)/Z`` that give the charges ``Q_j``
their target values, or proves that no state can.  Names are loaded on first use, so that importing the package costs
nothing (PEP 562).
"""

from importlib import import_module
from typing import TYPE_CHECKING, Any

from maxent.version import __version__ as __version__

if TYPE_CHECKING:
    from maxent.errors import ConfigError, FormulaError, MaxentError, ResourceError, SolveError
    from maxent.result import Certificate, Result, Verdict
    from maxent.solver import solve
    from maxent.targets import AtLeast, AtMost, Exact, Measured, Within

_HOME = {
    "solve": "maxent.solver",
    "Result": "maxent.result",
    "Certificate": "maxent.result",
    "Verdict": "maxent.result",
    "AtLeast": "maxent.targets",
    "AtMost": "maxent.targets",
    "Exact": "maxent.targets",
    "Measured": "maxent.targets",
    "Within": "maxent.targets",
    "MaxentError": "maxent.errors",
    "ConfigError": "maxent.errors",
    "FormulaError": "maxent.errors",
    "ResourceError": "maxent.errors",
    "SolveError": "maxent.errors",
}

__all__ = [
    "AtLeast", "AtMost", "Certificate", "ConfigError", "Exact", "FormulaError", "MaxentError", "Measured",
    "ResourceError", "Result", "SolveError", "Verdict", "Within", "__version__", "solve",
]  # fmt: skip


def __getattr__(name: str) -> Any:
    if name not in _HOME:
        raise AttributeError(f"module 'maxent' has no attribute {name!r}")
    value = getattr(import_module(_HOME[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted([*globals(), *_HOME])
