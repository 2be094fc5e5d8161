"""Cells of the tables and sentences of a comparison: numbers, labels, ranges as text.

Floor: app.  Takes parts of the entry `quench` of a record.  Must not know: comparisons, HTML.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from maxent.text import number

__all__ = [
    "ZERO", "block_label", "both", "column_label", "columns_of_numbers", "deviation_cell", "distance",
    "distance_cell", "distance_rows", "has_sector", "left_out", "mean_cell", "members", "pairs", "ratio_cell",
    "references", "rounded", "tested", "windows_inside",
]  # fmt: skip

#: Numbers below this are rounding of what was computed.
ZERO = 1e-12
_SECTOR = "in the sector"


def both(c: Mapping[str, Any]) -> Iterator[tuple[str, Any, Any]]:
    """Label, ensemble over all sectors or None, ensemble inside the sector or None."""
    for label in dict.fromkeys(e["label"] for e in c["ensembles"]):
        mine = [e for e in c["ensembles"] if e["label"] == label]
        yield (
            label,
            next((e for e in mine if not e["sector"]), None),
            next((e for e in mine if e["sector"]), None),
        )


def has_sector(c: Mapping[str, Any]) -> bool:
    """Whether some column is inside the sector of the start."""
    return any(e["sector"] for e in c["ensembles"])


def column_label(e: Mapping[str, Any]) -> str:
    """Label of a column, with its sector."""
    return f"{e['label']}, {_SECTOR}" if e["sector"] else e["label"]


def mean_cell(e: Mapping[str, Any], name: str) -> str:
    """Mean of an observable, with the range over single eigenstates."""
    text = rounded(e["means"].get(name), 7)
    if name in e["ranges"]:
        low, high = e["ranges"][name]
        text += f" ({rounded(low, 3)} to {rounded(high, 3)})"
    return text


def distance_cell(e: Mapping[str, Any], block: str, *, ranges: bool = True) -> str:
    """Distance of a block, or its bounds, with the range over single eigenstates if it is asked for."""
    if block in e["distance_bounds"]:
        low, high = e["distance_bounds"][block]
        return f"{rounded(low, 3)} to {rounded(high, 3)}"
    text = rounded(e["distances"].get(block), 3)
    if ranges and block in e["distance_ranges"]:
        low, high = e["distance_ranges"][block]
        text += f" ({rounded(low, 3)} to {rounded(high, 3)})"
    return text


def distance_rows(label: str, cells: Sequence[tuple[Any, str]]) -> list[tuple[str, ...]]:
    """Row of the distances of an ensemble, and of single eigenstates two more with their quantiles.

    Parameters
    ----------
    label : str
    cells : sequence of (ensemble or None, block)
        One for each column.
    """
    rows = [(label, *("–" if e is None else distance_cell(e, b, ranges=False) for e, b in cells))]
    if any(e is not None and b in e["distance_ranges"] for e, b in cells):
        ends = [(None, None) if e is None else e["distance_ranges"].get(b, (None, None)) for e, b in cells]
        for k, part in enumerate(("10 %", "90 %")):
            rows.append((f"{part} of them are below", *(rounded(x[k], 3) for x in ends)))
    return rows


def windows_inside(c: Mapping[str, Any]) -> bool:
    """Whether windows of several widths are inside the sector of the start."""
    return bool(c["sharp"]) and bool(c["window"])


def distance(e: Mapping[str, Any], block: str) -> float | None:
    """Distance of a block, or its upper bound."""
    return e["distances"].get(block, e["distance_bounds"].get(block, (None, None))[1])


def tested(c: Mapping[str, Any]) -> list[Any]:
    """Sectors whose eigenstates were tested; none of free particles."""
    return [] if c["eigenstate_tests"] is None else c["eigenstate_tests"]["sectors"]


def left_out(comparisons: Sequence[Mapping[str, Any]], sizes: Sequence[int]) -> str:
    """Sizes whose eigenstates have no scatter, each with the reason."""
    found = []
    for c in comparisons:
        if c["size"] in sizes:
            tests = tested(c)
            why = tests[0]["refusal"] if tests else "no sector has enough levels"
            found.append(f"L = {c['size']}, {why or 'the sector is not that of the start'}")
    return "; ".join(found)


def ratio_cell(ratio: Mapping[str, Any]) -> str:
    """Mean spacing ratio with its error."""
    return f"{rounded(ratio['mean'], 3)} ± {rounded(ratio['error'], 1)}"


def references(c: Mapping[str, Any]) -> str:
    """Spacing ratios to compare with, in a few words."""
    values = c["eigenstate_tests"]["references"]
    shown = ("uncorrelated levels", "orthogonal ensemble")
    return ", ".join(f"{n} {rounded(values[n]['value'], 3)}" for n in shown if n in values)


def members(blocks: Mapping[str, Sequence[int]]) -> str:
    """Sites of the blocks."""
    return "; ".join(", ".join(map(str, sites)) for sites in blocks.values()) or "none"


def deviation_cell(e: Mapping[str, Any], c: Mapping[str, Any], name: str) -> str:
    """Mean minus long-time mean; what is rounding of the two is zero."""
    x, truth = e["means"].get(name), c["truth"].get(name)
    if x is None or truth is None:
        return e["verdict"] if e["verdict"] not in ("", "solved") else "–"
    off = x - truth
    return rounded(off if abs(off) > ZERO * max(1.0, abs(truth)) else 0.0, 3)


def rounded(x: float | None, digits: int) -> str:
    """A number; what is rounding of numbers of order one is zero."""
    return "0" if x is not None and abs(x) < ZERO else number(x, digits)


def pairs(values: Mapping[str, float]) -> str:
    """Names with their values."""
    return ", ".join(f"{n} = {rounded(x, 6)}" for n, x in values.items())


def block_label(block: str) -> str:
    """Number of sites of a block."""
    return "1 site" if block == "1" else f"{block} sites"


def columns_of_numbers(rows: Sequence[Sequence[str]]) -> list[int]:
    """Columns that hold numbers in most rows, to be set flush right."""
    full = [r for r in rows if len(r) > 1]
    if not full:
        return []
    looks = lambda cell: cell == "–" or cell[:1].isdigit() or cell[:2].strip("-")[:1].isdigit()
    return [k for k in range(1, len(full[0])) if all(looks(r[k]) for r in full)]
