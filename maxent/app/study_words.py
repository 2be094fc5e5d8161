"""What a comparison says, in sentences and tables: shared by the terminal and the report.

Floor: app.  Takes the entry `quench` of a record (see record.py), returns text and rows of text.
Must not know: comparisons, HTML.  Computes nothing but differences of the numbers it shows.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
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

#: Kinds of ensembles that are fitted to few charges, the thermal ones first.
FITS = ("canonical", "grand canonical", "generalised")
#: Distances that differ by less are equal.
EQUAL = 1e-9


def verdict(found: Mapping[str, Any]) -> str:
    """Say which ensemble comes closest at the largest size, what the thermal one misses, and what that supports."""
    c = found["comparisons"][-1]
    said = [_closest(c), _missed(c), _alike(c)]
    if c["ranking"] is not None:
        said.append(c["ranking"]["suggestion"])
    count = len(found["sizes"])
    if found["statements"]:
        said.append(f"What the {count} sizes support is listed below, each sentence with those that it rests on.")
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
        yard.append("" if bound is None else f"{rounded(min(bound, 1.0), 3)} (bound)")
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
    """The closest fits over all sectors and inside that of the start, then what is told apart from them."""
    largest = max(c["block_bounds"], key=int, default=None)
    if not c["best"]:
        return "No ensemble could be fitted and compared."
    if largest is None:
        return ""  # no blocks: ensembles are compared in the means alone
    known = [e for e in c["ensembles"] if distance(e, largest) is not None]
    fits = [e for e in known if e["kind"] in FITS]
    where = "one site" if largest == "1" else f"{largest} neighbouring sites"
    said: list[str] = []
    for inside in (False, True):
        among = [e for e in fits if bool(e["sector"]) == inside]
        if among:
            e = _nearest(among, largest)
            text = f"{e['label']} ({'' if said else f'trace distance on {where} '}{_far(e, largest)}"
            least = _farthest(e, largest) + EQUAL
            farther = [x for x in among if x["kind"] in FITS[:2] and _farthest(x, largest) > least]
            said.append("; ".join([text, *(f"{x['label']} {_far(x, largest)}" for x in farther)]) + ")")
    head = f"At {plural(c['size'], 'site')} the ensemble closest to the long-time state is"
    if len(said) == 2:
        text = f"{head}, over all sectors: {said[0]}; inside the sector of the start, {pairs(c['sharp'])}: {said[1]}."
    else:
        text = f"{head}: {said[0]}."
    windows = [e for e in known if e["kind"] == "microcanonical"]
    if windows:
        e = _nearest(windows, largest)
        text += (
            " These are the fits; of the windows, whose widths are a choice, the closest is: "
            f"{column_label(e)} ({_far(e, largest)})."
        )
    whole = [e for e in known if e["kind"] == "complete generalised"]
    if whole:
        text += (
            " The complete generalised state, with as many charges as levels, is not among them: it has "
            f"{_far(whole[0], largest)}."
        )
    return text


def _nearest(among: Sequence[Any], block: str) -> Any:
    """Of those that lie equally close the one with fewest charges."""
    least = min(_farthest(e, block) for e in among)
    return min((e for e in among if _farthest(e, block) <= least + EQUAL), key=lambda e: len(e["charges"]))


def _farthest(e: Mapping[str, Any], block: str) -> float:
    """Distance of a block or its upper bound; infinite where neither is known."""
    found = distance(e, block)
    return math.inf if found is None else found


def _far(e: Mapping[str, Any], block: str) -> str:
    """Distance of a block in a sentence."""
    return f"{'at most ' if block in e['distance_bounds'] else ''}{rounded(distance(e, block), 3)}"


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
