"""What a record says, in sentences: shared by the terminal and the report, so that both say the same.

Floor: app.  Takes records (see record.py), returns text.
Must not know: results, HTML.  Computes nothing.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from maxent.app import sections, thermodynamics_words
from maxent.text import combination, listing, number, plural, table, with_error

__all__ = ["certificate", "charge_table", "face", "redundancy", "summary", "verdict"]

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
    states = "a single state" if dimension == 1 else f"{dimension or 'unboundedly many'} dimensions"
    steps = "in one step" if depth == 1 else f"in {depth} steps, each inside the face before"
    gaps = listing((number(gap, 3) for gap in found["gaps"]), last="and")
    return (
        f"The limit state lives on a face of {states}, found {steps}. Gap to the next level, "
        f"as a share of the whole range: {gaps}."
    )


def redundancy(found: Mapping[str, Any]) -> str:
    """Say which combination of charges is a constant."""
    return f"{combination(found['coefficients'])} = {number(found['constant'], 12)} in every state"


def charge_table(record: Mapping[str, Any]) -> tuple[list[str], list[list[str]]]:
    """Make the table of charges.

    Parameters
    ----------
    record : mapping

    Returns
    -------
    tuple of head and rows
        If a target has a sigma, it stands beside it, and that of each multiplier beside the multiplier, which is
        then written with its sigma in brackets; what rounding leaves open says nothing more then and is left out.
    """
    measured = any(c["sigma"] is not None for c in record["charges"])
    columns = {
        "charge": lambda c: c["name"],
        "target": lambda c: number(c["target"], 12),
        "sigma": lambda c: number(c["sigma"], 2),
        "value": lambda c: number(c["value"], 12),
        "residual": lambda c: number(c["residual"], 2),
        "multiplier": lambda c: with_error(c["multiplier"], c["multiplier_sigma" if measured else "multiplier_error"]),
        "multiplier sigma": lambda c: number(c["multiplier_sigma"], 2),
        "error": lambda c: number(c["multiplier_error"], 2),
        "digits": lambda c: number(c["multiplier_digits"]),
    }
    for name in ("error", "digits") if measured else ("sigma", "multiplier sigma"):
        del columns[name]
    return list(columns), [[write(c) for write in columns.values()] for c in record["charges"]]


def _nearest_table(record: Mapping[str, Any]) -> str:
    """Nearest reachable targets beside those asked for."""
    near = record["nearest"]
    rows = [
        (
            c["name"],
            number(c["target"], 12),
            number(near["targets"][c["name"]], 12),
            number(near["moves"][c["name"]], 3),
            number(near["unit"][c["name"]], 4),
        )
        for c in record["charges"]
    ]
    return table(rows, ("charge", "asked", "nearest", "move", "unit"), right=range(1, 5))


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
    head, rows = charge_table(record)
    parts = [
        f"{record['verdict']} ({record['evidence']}): {record['message']}",
        table(rows, head, right=range(1, len(head))),
    ]
    if record["certificate"]:
        parts.append(certificate(record["certificate"]))
    if record["face"]:
        parts.append(face(record["face"]))
    if record["conflict"]:
        parts.append("\n".join(record["explanation"]))
    if record["nearest"]:
        parts.append(_nearest_table(record))
    if record["redundancies"]:
        parts.append("\n".join(["Redundant:", *("  " + redundancy(r) for r in record["redundancies"])]))
    reached = [p for p in record["predictions"] if p["value"] is not None]
    if reached:
        means = [(p["name"], number(p["value"], 12)) for p in reached]
        parts.append(table(means, ("prediction", "mean"), right=[1]))
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
    if record["explanation"] and not record["conflict"]:
        parts.append("\n".join(record["explanation"]))
    if record["thermodynamics"]:
        parts.append(thermodynamics_words.summary(record["thermodynamics"]))
    parts += sections.summary(record["sections"])
    parts += record["notes"]
    if record["quench"]:
        from maxent.app.study_words import summary as study_summary

        parts.append(study_summary(record["quench"]))
    parts.append(f"{plural(record['iterations'], 'iteration')}, driver {record['driver']}")
    return "\n\n".join(parts)
