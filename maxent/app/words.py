"""What a record says, in sentences: shared by the terminal and the report, so that both say the same.

Floor: app.  Takes records (see record.py), returns text.
Must not know: results, HTML.  Computes nothing.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from maxent.text import combination, number, plural

__all__ = ["certificate", "charge_rows", "face", "redundancy", "summary", "verdict"]

_SHORT = {
    "solved": "The targets are met",
    "boundary": "The targets are met in a limit only",
    "unattained": "No state of largest entropy",
    "infeasible": "No state meets the targets",
    "inconsistent": "The targets contradict one another",
    "unfinished": "Not decided",
}


def verdict(record: Mapping[str, Any]) -> str:
    """Give the short form of the verdict for the banner."""
    return _SHORT[record["verdict"]]


def certificate(found: Mapping[str, Any]) -> str:
    """Say what a certificate proves.

    Parameters
    ----------
    found : mapping
        The `certificate` of a record.
    """
    what = combination(found["direction"])
    lowest, asked = number(found["lowest"], 12), number(found["asked"], 12)
    margin, tolerance = number(found["margin"], 3), number(found["tolerance"], 3)
    if found["kind"] == "contradiction":
        return (
            f"The combination {what} has the same value {lowest} in every state, but the targets ask for "
            f"{asked}; they are off by {margin} (resolved to {tolerance})."
        )
    if found["kind"] == "face":
        return (
            f"In every state the combination {what} is at least {lowest}, and the targets ask for {asked}: "
            f"the lowest value itself (margin {margin}, resolved to {tolerance}). "
            "No finite multipliers give that."
        )
    return (
        f"In every state the combination {what} is at least {lowest}, but the targets ask for {asked}; "
        f"they are out of reach by {margin} (resolved to {tolerance})."
    )


def face(found: Mapping[str, Any]) -> str:
    """Say where the limit state of a boundary verdict lives."""
    dimension, depth = found["dimension"], found["depth"]
    states = "a single state" if dimension == 1 else f"{dimension} dimensions"
    steps = "in one step" if depth == 1 else f"in {depth} steps, each inside the face before"
    return (
        f"The limit state lives on a face of {states}, found {steps}; the next level lies "
        f"{number(found['gap'], 3)} of the range above it."
    )


def redundancy(found: Mapping[str, Any]) -> str:
    """Say which combination of charges is a constant."""
    return f"{combination(found['coefficients'])} = {number(found['constant'], 12)} in every state"


def charge_rows(record: Mapping[str, Any]) -> list[tuple[str, ...]]:
    """Make the rows of the table of charges: name, target, value, residual, multiplier, error, digits."""
    return [
        (
            c["name"],
            number(c["target"], 12),
            number(c["value"], 12),
            number(c["residual"], 2),
            number(c["multiplier"], 12),
            number(c["multiplier_error"], 2),
            "–" if c["multiplier_digits"] is None else str(c["multiplier_digits"]),
        )
        for c in record["charges"]
    ]


def summary(record: Mapping[str, Any]) -> str:
    """Write a record for the terminal.

    Parameters
    ----------
    record : mapping

    Returns
    -------
    str
        Several lines, without a final newline.
    """
    from maxent.text import table

    head = ("charge", "target", "value", "residual", "multiplier", "error", "digits")
    parts = [
        f"{record['verdict']} ({record['evidence']}): {record['message']}",
        table(charge_rows(record), head, right=range(1, 7)),
    ]
    if record["certificate"]:
        parts.append(certificate(record["certificate"]))
    if record["face"]:
        parts.append(face(record["face"]))
    if record["redundancies"]:
        parts.append("\n".join(["Redundant:", *("  " + redundancy(r) for r in record["redundancies"])]))
    reached = [p for p in record["predictions"] if p["value"] is not None]
    if reached:
        rows = [(p["name"], number(p["value"], 12)) for p in reached]
        parts.append(table(rows, ("prediction", "mean"), right=[1]))
    numbers = [
        (name, number(record[key], 12))
        for name, key in (
            ("entropy", "entropy"),
            ("log-partition", "log_partition"),
            ("relative entropy", "relative_entropy"),
        )
        if record[key] is not None
    ]
    if numbers:
        parts.append(table(numbers, right=[1]))
    parts.append(f"{plural(record['iterations'], 'iteration')}, driver {record['driver']}")
    return "\n\n".join(parts)
