"""What a comparison says, in sentences and tables: shared by the terminal and the report.

Floor: app.  Takes the entry `quench` of a record (see record.py), returns text and rows of text.
Must not know: comparisons, HTML.  Computes nothing but differences of the numbers it shows.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from maxent.text import combination, listing, number, plural, table

__all__ = ["Table", "columns_of_numbers", "notes", "summary", "tables", "verdict"]

#: Numbers below this are rounding of what was computed.
ZERO = 1e-12
_SECTOR = "in the sector"


@dataclass(frozen=True)
class Table:
    """A table for people.

    Parameters
    ----------
    title : str
    lead : str
        What it shows, in a sentence.
    head : tuple of str
    rows : tuple of tuples of str
        A row of a single text is a heading for those below it.
    note : str
        How to read it.
    """

    title: str
    lead: str
    head: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    note: str = ""


def verdict(found: Mapping[str, Any]) -> str:
    """Say which ensemble comes closest at the largest size, what the thermal one misses, and what that supports."""
    c = found["comparisons"][-1]
    said = [_closest(c), _missed(c)]
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


def tables(found: Mapping[str, Any]) -> list[Table]:
    """Every table, in the order of the report; those of one size are of the largest."""
    c = found["comparisons"][-1]
    made = [
        _start(c), _conservation(c), _ensembles(c), _means(c), _spreads(c), _distances(c), _ranking(c), _windows(c),
        _sizes(found),
    ]  # fmt: skip
    return [t for t in made if t is not None and t.rows]


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
        row = [_label(e), _short(e["entropy"], 6)]
        if largest is not None:
            row.append(_short(e["distances"].get(largest), 3))
        rows.append(row + [_off(e, c, name) for name in names])
    yard = ["temporal fluctuation", ""]
    if largest is not None:
        yard.append(_short(c["block_bounds"][largest], 3) + " (bound)")
    rows.append(yard + [_short(c["fluctuations"].get(name), 3) for name in names])
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
    distances = {e["label"]: e["distances"].get(largest) for e in c["ensembles"] if not e["sector"] and e["distances"]}
    where = "one site" if largest == "1" else f"{largest} neighbouring sites"
    text = (
        f"At {plural(c['size'], 'site')} the ensemble closest to the long-time state is: {best}. Its trace distance on "
        f"{where} is {_short(distances.get(best), 3)}"
    )
    thermal = ("canonical", "grand canonical")
    others = [
        f"{_short(d, 3)} ({n})"
        for n, d in distances.items()
        if n in thermal and d is not None and d > distances[best] + 1e-9
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
        yards.append(f"temporal standard deviation {_short(c['fluctuations'][name], 2)}")
    if e["corrections"].get(name) is not None:
        yards.append(f"leading finite-size correction {_short(e['corrections'][name], 2)}")
    beside = f" ({', '.join(yards)})" if yards else ""
    return f"The {e['label']} ensemble misses {name} by {_short(off[name], 3)}{beside}."


# ---------------------------------------------------------------------- tables


def _start(c: Mapping[str, Any]) -> Table:
    rows = [
        ("start", c["start_label"]),
        ("Hamiltonian", c["hamiltonian"]),
        ("sites, states", f"{c['size']}, {c['dimension']}"),
        ("without spread in the start", _pairs(c["sharp"]) or "nothing"),
        ("effective dimension", _short(c["effective_dimension"], 5)),
        ("entropy", f"{_short(c['dephased_entropy'], 6)} in the long run (not comparable with those of ensembles)"),
        ("largest group velocity, sites per time", _short(c["speed"], 4)),
        ("revival time L/(2 v)", _short(c["revival"], 4)),
        ("plateau in time", "–" if c["plateau"] is None else f"{c['plateau'][0]:.4g} to {c['plateau'][1]:.4g}"),
        ("time that resolves the smallest gap", _short(c["horizon"], 3)),
    ]
    lead = "Where the dynamics begins, and the times that matter at the largest size."
    return Table("Start and dynamics", lead, (), tuple(rows))


def _conservation(c: Mapping[str, Any]) -> Table:
    rows = tuple(
        (
            n,
            "conserved" if q["conserved"] else "NOT conserved",
            _short(q["defect"], 3) + (" (exact)" if q["exact"] else ""),
            _short(q["value"], 10),
            _short(q["drift"], 3),
        )
        for n, q in c["conservation"]["charges"].items()
    )
    return Table(
        "Conservation",
        c["conservation"]["message"],
        ("charge", "verdict", "defect", "mean in the start", "drift"),
        rows,
        "Defect: size of the commutator with the Hamiltonian, from 0 to 1, the largest possible. Drift: how far "
        "the mean in the long-time state is from that in the start.",
    )


def _ensembles(c: Mapping[str, Any]) -> Table:
    rows = tuple(
        (
            _label(e),
            e["verdict"] or "–",
            _short(e["entropy"], 8),
            combination({n: x for n, x in e["multipliers"].items() if x is not None}, 6)
            if any(x is not None for x in e["multipliers"].values())
            else _pairs(e["facts"]) or "–",
        )
        for e in c["ensembles"]
    )
    return Table(
        "Ensembles",
        "Each fitted to the means of the start, over all sectors and inside the sector that the start lives in.",
        ("ensemble", "verdict", "entropy", "multipliers, or what defines it"),
        rows,
        "State = exp(−Σ multiplier · charge) / Z. A window has no multipliers; its beta is the slope of the log of the "
        "density of states near its mean energy.",
    )


def _means(c: Mapping[str, Any]) -> Table:
    inside = _has_sector(c)
    head = ["ensemble", "mean", "deviation"]
    if inside:
        head += ["mean, sector", "deviation, sector"]
    head += ["leading correction", "temporal σ"]
    rows: list[tuple[str, ...]] = []
    for name, truth in c["truth"].items():
        sigma = c["fluctuations"].get(name)
        rows.append((f"{name}: {_short(truth, 8)} in the long run, {_short(c['initial'][name], 8)} in the start",))
        for label, whole, part in _both(c):
            cells = [label]
            for e in (whole, part) if inside else (whole or part,):
                cells += ["–", "–"] if e is None else [_mean(e, name), _off(e, c, name)]
            correction = None if whole is None else whole["corrections"].get(name)
            rows.append((*cells, _short(correction, 3), _short(sigma, 3)))
    return Table(
        "Means side by side",
        "Deviations from the long-time mean, with the yardsticks by which they are to be read.",
        tuple(head),
        tuple(rows),
        "Leading correction: ½ Σ ∂²O/∂q∂q (V of the start − V of the ensemble), what the different spreads of the "
        "charges explain at this size. Temporal σ: standard deviation in time around the long-time mean. A deviation "
        "of the size of either is no failure of an ensemble. Single eigenstates: median, with the 10 % and 90 % "
        "quantiles over the window in brackets.",
    )


def _spreads(c: Mapping[str, Any]) -> Table:
    rows: list[tuple[str, ...]] = []
    for e in c["ensembles"]:
        if e["sector"]:
            continue
        for n, (start, own) in e["variances"].items():
            ratio = None if not own or start is None else start / own
            rows.append((e["label"], n, _short(start, 5), _short(own, 5), _short(ratio, 3)))
    return Table(
        "Spread of the charges",
        "An ensemble that agrees with the start in the means may still spread wider or narrower.",
        ("ensemble", "charge", "variance in the start", "in the ensemble (chi)", "ratio"),
        tuple(rows),
        "Relative to the squares of the means the difference decays as 1/L; the leading correction is made of it.",
    )


def _distances(c: Mapping[str, Any]) -> Table:
    blocks = sorted(c["block_bounds"], key=int)
    inside = _has_sector(c)
    head = ["ensemble"]
    for b in blocks:
        head += [_sites(b)] + ([f"{_sites(b)}, sector"] if inside else [])
    rows = []
    for label, whole, part in _both(c):
        cells = [label]
        for b in blocks:
            for e in (whole, part) if inside else (whole or part,):
                cells.append("–" if e is None else _short(e["distances"].get(b), 3))
        rows.append(tuple(cells))
    bound = ["bound on the fluctuation in time"]
    for b in blocks:
        bound += [_short(min(c["block_bounds"][b], 1.0), 3)] + (["–"] if inside else [])
    rows.append(tuple(bound))
    return Table(
        "States of blocks",
        "Trace distance of the reduced state from that of the long-time state; 0: the same, 1: told apart by one look.",
        tuple(head),
        tuple(rows) if blocks else (),
        "Bound: ½ √(g d²/d_eff), d the dimension of the block, d_eff the effective dimension and g the most pairs of "
        "levels that share one gap; averaged over all times the block is no farther than this from its long-time "
        "state. Written as 1 where it says nothing.",
    )


def _ranking(c: Mapping[str, Any]) -> Table | None:
    r = c["ranking"]
    if r is None:
        return None
    blocks = sorted(c["block_bounds"], key=int)
    largest = blocks[-1] if blocks else None
    rows: list[tuple[str, ...]] = []
    for k in range(max(len(r["by_entropy"]), len(r["by_distance"]))):
        cells = [str(k + 1)]
        for key in ("by_entropy", "by_distance"):
            if k >= len(r[key]):
                cells += ["–"] * (3 if key == "by_entropy" else 2)
                continue
            step = r[key][k]
            cells.append(step["charge"])
            if key == "by_entropy":
                cells += [_short(step["entropy_drop"], 4), _short(step["predicted_drop"], 4)]
            else:
                cells.append(_short(step["distances"].get(largest), 3))
        rows.append(tuple(cells))
    return Table(
        "Which charges matter",
        " ".join(x for x in (r["suggestion"], r["stuck"]) if x),
        ("", "by entropy", "entropy drop", "predicted", "by distance", f"distance on {_sites(largest or '0')}"),
        tuple(rows),
        "Two questions: which charge tells most about the whole state, and which one about a block. The entropy drop "
        "is the relative entropy of the ensemble with the charge to the one without; the prediction is r²/(2χ⊥).",
    )


def _windows(c: Mapping[str, Any]) -> Table | None:
    if not c["window_scan"]:
        return None
    keys = ("width", "centre", "mean", "beta", "entropy")
    rows = tuple(tuple(_short(w[k], 6) for k in keys) for w in c["window_scan"])
    return Table(
        "Energy windows",
        "Gaussian windows of several widths around the energy of the start.",
        ("width", "centre", "mean energy", "beta", "entropy"),
        rows,
        "beta = (mean − centre)/width² is the slope of the log of the density of states near the mean energy, not the "
        "centre.",
    )


def _sizes(found: Mapping[str, Any]) -> Table | None:
    every = found["comparisons"]
    if len(every) < 2:
        return None
    blocks = sorted(set.intersection(*(set(c["block_bounds"]) for c in every)), key=int)
    if not blocks:
        return None
    at, rows = blocks[-1], []
    for label, whole, part in _both(every[-1]):
        for sector, there in ((False, whole), (True, part)):
            if there is None:
                continue
            cells = []
            for c in every:
                e = next((e for e in c["ensembles"] if e["label"] == label and bool(e["sector"]) == sector), None)
                cells.append("–" if e is None else _short(e["distances"].get(at), 3))
            rows.append((_label(there), *cells))
    return Table(
        "Sizes",
        f"Trace distance on {_sites(at)}, the largest block that every size has.",
        ("ensemble", *(f"L = {c['size']}" for c in every)),
        tuple(rows),
    )


# ---------------------------------------------------------------------- cells


def _both(c: Mapping[str, Any]) -> Iterator[tuple[str, Any, Any]]:
    """Label, ensemble over all sectors or None, ensemble inside the sector or None."""
    for label in dict.fromkeys(e["label"] for e in c["ensembles"]):
        mine = [e for e in c["ensembles"] if e["label"] == label]
        yield (
            label,
            next((e for e in mine if not e["sector"]), None),
            next((e for e in mine if e["sector"]), None),
        )


def _has_sector(c: Mapping[str, Any]) -> bool:
    return any(e["sector"] for e in c["ensembles"])


def _label(e: Mapping[str, Any]) -> str:
    return f"{e['label']}, {_SECTOR}" if e["sector"] else e["label"]


def _mean(e: Mapping[str, Any], name: str) -> str:
    text = _short(e["means"].get(name), 7)
    if name in e["ranges"]:
        low, high = e["ranges"][name]
        text += f" ({_short(low, 3)} to {_short(high, 3)})"
    return text


def _off(e: Mapping[str, Any], c: Mapping[str, Any], name: str) -> str:
    x, truth = e["means"].get(name), c["truth"].get(name)
    if x is None or truth is None:
        return e["verdict"] if e["verdict"] not in ("", "solved") else "–"
    return _short(x - truth, 3)


def _short(x: float | None, digits: int) -> str:
    return "0" if x is not None and abs(x) < ZERO else number(x, digits)


def _pairs(values: Mapping[str, float]) -> str:
    return ", ".join(f"{n} = {_short(x, 6)}" for n, x in values.items())


def _sites(block: str) -> str:
    return "1 site" if block == "1" else f"{block} sites"


def columns_of_numbers(rows: Sequence[Sequence[str]]) -> list[int]:
    """Columns that hold numbers in most rows, to be set flush right."""
    full = [r for r in rows if len(r) > 1]
    if not full:
        return []
    looks = lambda cell: cell == "–" or cell[:1].isdigit() or cell[:2].strip("-")[:1].isdigit()
    return [k for k in range(1, len(full[0])) if all(looks(r[k]) for r in full)]
