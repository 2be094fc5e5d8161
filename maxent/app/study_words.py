"""What a comparison says, in sentences and tables: shared by the terminal and the report.

Floor: app.  Takes the entry `quench` of a record (see record.py), returns text and rows of text.
Must not know: comparisons, HTML.  Computes nothing but differences of the numbers it shows.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from maxent.app.study_cells import (
    ZERO,
    column_label,
    columns_of_numbers,
    deviation_cell,
    distance,
    distance_cell,
    pairs,
    ratio_cell,
    references,
    rounded,
    tested,
)
from maxent.app.study_tables import Table, tables
from maxent.text import listing, plural, table

__all__ = ["Table", "columns_of_numbers", "notes", "summary", "tables", "verdict"]


def verdict(found: Mapping[str, Any]) -> str:
    """Say which ensemble comes closest at the largest size, what the thermal one misses, and what that supports."""
    c = found["comparisons"][-1]
    said = [_closest(c), _missed(c), _alike(c)]
    if c["ranking"] is not None:
        said.append(c["ranking"]["suggestion"])
    count = len(found["sizes"])
    if found["statements"]:
        said.append(f"What {count} sizes support is listed below.")
    else:
        said.append(
            f"{'One size supports' if count == 1 else f'{count} sizes support'} no statement about larger systems: "
            "at least three are needed."
        )
    return " ".join(s for s in said if s)


def notes(found: Mapping[str, Any]) -> list[str]:
    """Notes of all sizes, each once, with the sizes where it does not hold for all."""
    every = found["comparisons"]
    out: dict[str, list[int]] = {}
    for c in every:
        for note in (c["start_note"], *c["notes"]):
            if note:
                out.setdefault(note, []).append(c["size"])
    which = lambda sizes: "" if len(sizes) == len(every) else f"{listing(map(str, sizes), 'and')} sites: "
    return [(which(sizes) + note).replace("`", "") for note, sizes in out.items()]


def summary(found: Mapping[str, Any]) -> str:
    """Write the comparison for the terminal.

    Returns
    -------
    str
        Several lines, without a final newline.
    """
    c = found["comparisons"][-1]
    largest = max(c["block_bounds"], key=int, default=None)
    names = list(c["truth"])
    head = ["ensemble", "entropy"]
    if largest is not None:
        head.append(f"distance on {largest}")
    head += [f"{name} - long-time" for name in names]
    rows = []
    for e in c["ensembles"]:
        row = [column_label(e), rounded(e["entropy"], 6)]
        if largest is not None:
            row.append(distance_cell(e, largest))
        rows.append(row + [deviation_cell(e, c, name) for name in names])
    yard = ["temporal fluctuation", ""]
    if largest is not None:
        bound = c["block_bounds"][largest]
        yard.append("" if bound is None else rounded(bound, 3) + " (bound)")
    rows.append(yard + [rounded(c["fluctuations"].get(name), 3) for name in names])
    parts = [f"quench: {found['verdict']}", table(rows, head, right=range(1, len(head)))]
    if found["statements"]:
        parts.append("\n".join(["Statements:", *("  " + s for s in found["statements"])]))
    said = notes(found)
    if said:
        parts.append("\n".join(["Notes:", *("  " + s for s in said)]))
    return "\n\n".join(parts)


# ---------------------------------------------------------------------- sentences


def _closest(c: Mapping[str, Any]) -> str:
    best, largest = c["best"], max(c["block_bounds"], key=int, default=None)
    if not best:
        return "No ensemble could be fitted and compared."
    if largest is None:
        return ""  # no blocks: ensembles are compared in the means alone
    whole = [e for e in c["ensembles"] if not e["sector"]]
    known = {e["label"]: distance(e, largest) for e in whole}
    distances = {name: d for name, d in known.items() if d is not None}
    most = "at most " if any(largest in e["distance_bounds"] for e in whole) else ""
    where = "one site" if largest == "1" else f"{largest} neighbouring sites"
    text = (
        f"At {plural(c['size'], 'site')} the ensemble closest to the long-time state is: {best}. Its trace distance on "
        f"{where} is {most}{rounded(distances.get(best), 3)}"
    )
    thermal = ("canonical", "grand canonical")
    others = [
        f"{rounded(d, 3)} ({n})"
        for n, d in distances.items()
        if n in thermal and d > distances[best] + 1e-9
    ]
    return text + (f", against {listing(others, 'and')}." if others else ".")


def _missed(c: Mapping[str, Any]) -> str:
    """Observable that the thermal ensemble misses most, with the yardsticks."""
    thermal = ("canonical", "grand canonical")
    plain = [e for e in c["ensembles"] if e["kind"] in thermal and not e["sector"] and e["means"]]
    if not plain:
        return ""
    e = plain[-1]
    off = {n: x - c["truth"][n] for n, x in e["means"].items() if x is not None and c["truth"].get(n) is not None}
    if not off:
        return ""
    name = max(off, key=lambda n: abs(off[n]))
    if abs(off[name]) < ZERO:
        return f"The {e['label']} ensemble gives every observable."
    yards = []
    if c["fluctuations"].get(name) is not None:
        yards.append(f"temporal standard deviation {rounded(c['fluctuations'][name], 2)}")
    if e["corrections"].get(name) is not None:
        yards.append(f"leading finite-size correction {rounded(e['corrections'][name], 2)}")
    beside = f" ({', '.join(yards)})" if yards else ""
    return f"The {e['label']} ensemble misses {name} by {rounded(off[name], 3)}{beside}."


def _alike(c: Mapping[str, Any]) -> str:
    """What the level spacings of the sector of the start say."""
    tests = [t for t in tested(c) if t["of_start"] and t["ratio"] is not None]
    if not tests:
        return ""
    t = tests[0]
    return (
        f"Inside the sector {pairs(t['sector']) or 'of all states'} of the start, {plural(t['size'], 'level')}, the "
        f"mean spacing ratio is {ratio_cell(t['ratio'])} ({references(c)})."
    )
