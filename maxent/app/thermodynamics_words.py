"""What the thermodynamics of a result says, in sentences and tables: shared by the terminal and the report.

Floor: app.  Takes entries of a record (see record.py), returns text and rows of text.
Must not know: results, HTML.  Computes nothing.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from maxent.app.study_words import Table
from maxent.text import listing, number, plural, table, with_error

__all__ = ["UNITS", "agreement", "every_failure", "failed", "failures", "summary", "tables"]

UNITS = "k_B = 1; all numbers are totals, energies in the unit of the charges."
#: Quantities the terminal shows, in this order; of those with longer names the beginning counts.
_SHOWN = ("temperature", "chemical potential", "field", "free energy", "grand potential", "heat capacity")


def failed(found: Mapping[str, Any]) -> list[Mapping[str, Any]]:
    """The self-checks that did not pass."""
    return [c for c in found["self_checks"] if not c["passed"]]


def failures(found: Mapping[str, Any]) -> list[str]:
    """A line for every self-check that failed, with its numbers."""
    return [
        f"SELF-CHECK FAILED: {c['name']}: got {number(c['got'], 12)}, expected {number(c['expected'], 12)}, "
        f"relative difference {_power(c['difference'])}, allowed {_power(c['tolerance'])}"
        for c in failed(found)
    ]


def every_failure(record: Mapping[str, Any]) -> list[str]:
    """A line for every self-check of a record that failed, those of the ensembles of a comparison included."""
    found = failures(record["thermodynamics"]) if record["thermodynamics"] else []
    for c in record["quench"]["comparisons"] if record["quench"] else ():
        for e in c["ensembles"]:
            bad = [k["name"] for k in e["self_checks"] if not k["agrees"]]
            found += [f"SELF-CHECK FAILED at {c['size']} sites, {e['label']}: {name}" for name in bad]
    return found


def agreement(found: Mapping[str, Any]) -> str:
    """One sentence on all self-checks."""
    checks, bad = found["self_checks"], failed(found)
    if not checks:
        return "No self-checks: nothing of this can be checked by another route."
    if bad:
        return f"{len(bad)} of {plural(len(checks), 'self-check')} FAILED: the numbers here are not to be relied on."
    worst = max(c["difference"] for c in checks)
    return f"{plural(len(checks), 'self-check')} passed; the two routes of each agree to {_power(worst)} or better."


def tables(found: Mapping[str, Any]) -> list[Table]:
    """Tables of quantities, of those without a value, of forces and of self-checks.

    Parameters
    ----------
    found : mapping
        The entry `thermodynamics` of a record.
    """
    defined = [q for q in (*found["quantities"], *found["forces"]) if not q["reason"]]
    missing = [q for q in (*found["quantities"], *found["forces"]) if q["reason"]]
    out = []
    rows: tuple[tuple[str, ...], ...]
    head: tuple[str, ...]
    if defined:
        rows = tuple((q["name"], _value(q), _left(q), q["formula"]) for q in defined)
        head = ("quantity", "value", "sigma" if any(q["sigma"] for q in defined) else "error", "formula")
        out.append(Table("", "", head, rows))
    if missing:
        reasons: dict[str, list[str]] = {}
        for q in missing:
            reasons.setdefault(q["reason"], []).append(q["name"])
        rows = tuple((listing(names, "and"), reason) for reason, names in reasons.items())
        out.append(Table("Not defined", "What has no value in this state, and why.", ("quantity", "reason"), rows))
    if found["self_checks"]:
        rows = tuple(
            (
                c["name"],
                number(c["got"], 10),
                number(c["expected"], 10),
                _power(c["difference"]),
                _power(c["tolerance"]),
                "passed" if c["passed"] else "FAILED",
            )
            for c in found["self_checks"]
        )
        head = ("self-check", "got", "expected", "difference", "allowed", "outcome")
        lead = "The same numbers by two routes. Each check can fail."
        note = (
            "Values and covariances are in units of the standard deviations of the charges; of arrays the two entries "
            "that differ most are shown, and the difference is relative to the size of what is compared."
        )
        out.append(Table("Self-checks", lead, head, rows, note))
    return out


def summary(found: Mapping[str, Any]) -> str:
    """A few lines for the terminal."""
    shown = []
    for start in _SHOWN:
        shown += [q for q in found["quantities"] if q["name"].startswith(start) and not q["reason"]]
    rows = [(q["name"], _value(q), q["formula"] if len(q["formula"]) < 40 else "") for q in shown[:6]]
    parts = [f"Thermodynamics ({UNITS.rstrip('.')}):", *found["notes"]]
    if rows:
        parts.append(table(rows, right=[1]))
    if found["forces"]:
        parts.append(table([(f["name"], _value(f) if not f["reason"] else f["reason"]) for f in found["forces"]]))
    parts.append(agreement(found))
    return "\n".join(parts)


def _value(found: Mapping[str, Any]) -> str:
    return with_error(found["value"], found["sigma"]) if found["sigma"] else number(found["value"], 10)


def _left(found: Mapping[str, Any]) -> str:
    """Standard error, or what rounding leaves open; nothing where neither was computed."""
    return number(found["sigma"] or found["error"], 2)


def _power(x: float | None) -> str:
    return "not a number" if x is None else f"{x:.1e}".replace("e-0", "e-").replace("e+00", "")
