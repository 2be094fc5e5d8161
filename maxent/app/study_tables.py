"""The tables of a comparison, shared by the terminal and the report.

Floor: app.  Takes the entry `quench` of a record (see record.py), returns rows of text.
Must not know: comparisons, HTML.  Computes nothing but differences of the numbers it shows.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from maxent.app.study_cells import (
    block_label,
    both,
    column_label,
    deviation_cell,
    distance_rows,
    has_sector,
    left_out,
    mean_cell,
    members,
    pairs,
    ratio_cell,
    rounded,
    tested,
    windows_inside,
)
from maxent.text import combination, listing, number, plural

__all__ = ["Table", "tables"]


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


def tables(found: Mapping[str, Any]) -> list[Table]:
    """Every table, in the order of the report; those of one size are of the largest."""
    c = found["comparisons"][-1]
    made = [
        _start(c), _conservation(c), _ensembles(c), _thermodynamics(c), _means(c), _spreads(c), _distances(c),
        _entropies(c), _ranking(c), _windows(c), _inside(c), _sizes(found), _scatter(found),
    ]  # fmt: skip
    return [t for t in made if t is not None and t.rows]


def _start(c: Mapping[str, Any]) -> Table:
    free = c["statistics"]
    entropy = f"{rounded(c['dephased_entropy'], 6)} in the long run (not comparable with those of ensembles)"
    rows = [
        ("start", c["start_label"]),
        ("Hamiltonian", c["hamiltonian"]),
        ("sites", f"{c['size']}, free {free}") if free else ("sites, states", f"{c['size']}, {c['dimension']}"),
        ("without spread in the start", pairs(c["sharp"]) or "nothing"),
        *([] if free else [("effective dimension", rounded(c["effective_dimension"], 5)), ("entropy", entropy)]),
        *_speeds(c),
        ("time that resolves the smallest gap", rounded(c["horizon"], 3)),
    ]
    lead = "Where the dynamics begins, and the times that matter at the largest size."
    return Table("Start and dynamics", lead, (), tuple(rows))


def _speeds(c: Mapping[str, Any]) -> list[tuple[str, str]]:
    """The largest group velocity and the times it gives, or why they are not known."""
    velocity = "largest group velocity, sites per time"
    if not c["speed"]:
        why = "not known: it is estimated only where momenta label the levels; give `speed` in [quench]"
        return [(velocity, why.replace("`", "")), ("revival and plateau in time", "not known without it")]
    span = "no blocks to look at" if c["plateau"] is None else f"{c['plateau'][0]:.4g} to {c['plateau'][1]:.4g}"
    return [
        (velocity, rounded(c["speed"], 4)),
        ("revival time L/(2 v)", rounded(c["revival"], 4)),
        ("plateau in time", span),
    ]


def _conservation(c: Mapping[str, Any]) -> Table:
    rows = tuple(
        (
            n,
            "conserved" if q["conserved"] else "NOT conserved",
            rounded(q["defect"], 3) + (" (exact)" if q["exact"] else ""),
            rounded(q["value"], 10),
            rounded(q["drift"], 3),
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
            column_label(e),
            e["verdict"] or "–",
            rounded(e["entropy"], 8),
            combination({n: x for n, x in e["multipliers"].items() if x is not None}, 6)
            if any(x is not None for x in e["multipliers"].values())
            else pairs(e["facts"]) or "–",
        )
        for e in c["ensembles"]
    )
    windows = (
        " A window has no multipliers; beta of a Gaussian one is the slope of the log of the density of states at its "
        "mean energy, not at its centre; that of a sharp one is the slope of the entropy ln(number of states), which "
        "depends on the width, after smoothing, at the energy given."
    )
    complete = (
        " The complete generalised state has the occupation of every single-particle level as a charge, each with a "
        "multiplier ln((1 ∓ n)/n)."
    )
    inside = has_sector(c)
    return Table(
        "Ensembles",
        f"Each fitted to the means of the start{', over all sectors and inside that of the start' if inside else ''}.",
        ("ensemble", "verdict", "entropy", "multipliers, or what defines it"),
        rows,
        f"State = exp(−Σ multiplier · charge) / Z.{complete if c['statistics'] else windows}",
    )


def _thermodynamics(c: Mapping[str, Any]) -> Table | None:
    rows: list[tuple[str, ...]] = []
    for e in c["ensembles"]:
        if not e["quantities"] or e["kind"] == "generalised":
            continue  # with further charges the multiplier of the energy is no inverse temperature
        rows.append((column_label(e),))
        for q in e["quantities"]:
            value = f"not defined: {q['reason']}" if q["reason"] else rounded(q["value"], 8)
            rows.append((q["name"], value, q["formula"]))
        checks = e["self_checks"]
        if checks:
            failed = [k["name"] for k in checks if not k["agrees"]]
            worst = max((k["difference"] for k in checks if k["difference"] is not None), default=None)
            text = f"FAILED: {listing(failed, 'and')}" if failed else f"all {len(checks)} agree"
            rows.append(("self-checks", text, f"largest relative difference {number(worst, 2)}"))
    return Table(
        "Thermodynamics",
        "What the canonical and the grand canonical fit mean; chi is the covariance of the charges.",
        ("quantity", "value", "formula"),
        tuple(rows),
        "Self-checks: the entropy from the spectrum against ln Z + Σ multiplier · mean, means and covariances against "
        "finite differences of ln Z.",
    )


def _means(c: Mapping[str, Any]) -> Table:
    rows: list[tuple[str, ...]] = []
    for name, truth in c["truth"].items():
        sigma = rounded(c["fluctuations"].get(name), 3)
        rows.append((f"{name}: {rounded(truth, 8)} in the long run, {rounded(c['initial'][name], 8)} in the start",))
        for e in c["ensembles"]:
            cells = (mean_cell(e, name), deviation_cell(e, c, name), rounded(e["corrections"].get(name), 3))
            rows.append((column_label(e), *cells, sigma))
    only = any(e["corrections"] for e in c["ensembles"]) and not any(
        e["corrections"] for e in c["ensembles"] if e["sector"]
    )
    return Table(
        "Means side by side",
        "Deviations from the long-time mean, with the yardsticks by which they are to be read.",
        ("ensemble", "mean", "deviation", "leading correction", "temporal σ"),
        tuple(rows),
        "Leading correction: ½ Σ ∂²O/∂q∂q (V of the start − V of the ensemble), what the different spreads of the "
        f"charges explain at this size, for fits{' over all sectors' if only and has_sector(c) else ''}. Temporal σ: "
        "standard deviation in time around the long-time mean. A deviation of the size of either is no failure of an "
        f"ensemble.{'' if c['statistics'] else _EIGENSTATES}",
    )


_EIGENSTATES = " Single eigenstates: median, with the 10 % and 90 % quantiles over the window in brackets."


def _spreads(c: Mapping[str, Any]) -> Table:
    rows: list[tuple[str, ...]] = []
    for e in c["ensembles"]:
        if e["sector"]:
            continue
        for n, (start, own) in e["variances"].items():
            ratio = None if not own or start is None else start / own
            rows.append((e["label"], n, rounded(start, 5), rounded(own, 5), rounded(ratio, 3)))
    return Table(
        "Spread of the charges",
        "An ensemble that agrees with the start in the means may still spread wider or narrower.",
        ("ensemble", "charge", "variance in the start", "in the ensemble (chi)", "ratio"),
        tuple(rows),
        "Relative to the squares of the means the difference decays as 1/L; the leading correction is made of it.",
    )


def _distances(c: Mapping[str, Any]) -> Table:
    blocks = sorted(c["block_bounds"], key=int)
    head = ("ensemble", *map(block_label, blocks))
    rows: list[tuple[str, ...]] = []
    for e in c["ensembles"]:
        rows += distance_rows(column_label(e), [(e, b) for b in blocks])
    where = f"Sites of the blocks, counted from 0: {members(c['block_sites'])}."
    lead = (
        "Trace distance of the reduced state from that of the long-time state; 0: the same, 1: told apart by one look."
    )
    if c["statistics"]:
        said = "Two numbers: proved bounds, where the distance itself would take too long. "
        bounded = any(e["distance_bounds"] for e in c["ensembles"])
        return Table("States of blocks", lead, head, tuple(rows) if blocks else (), said * bounded + where)
    rows.append(("bound on the fluctuation in time", *(rounded(min(c["block_bounds"][b], 1.0), 3) for b in blocks)))
    return Table(
        "States of blocks",
        lead,
        head,
        tuple(rows) if blocks else (),
        "Bound: ½ √(g d²/d_eff), d the dimension of the block, d_eff the effective dimension and g the most pairs of "
        "levels that share one gap; averaged over all times the block is no farther than this from its long-time "
        f"state. Written as 1 where it says nothing. Single eigenstates: median, with quantiles below it. {where}",
    )


def _entropies(c: Mapping[str, Any]) -> Table | None:
    """Relative entropies of blocks, which free particles have at any size of a block."""
    blocks = sorted(c["block_bounds"], key=int)
    rows = tuple(
        (column_label(e), *(rounded(e["relative_entropies"].get(b), 3) for b in blocks))
        for e in c["ensembles"]
        if e["relative_entropies"]
    )
    if not rows:
        return None
    return Table(
        "Relative entropy of blocks",
        "S(long-time state || ensemble) in nats: how much an ensemble misses of what a block can tell.",
        ("ensemble", *map(block_label, blocks)),
        rows,
        "Twice the square of the trace distance at least.",
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
                cells += [rounded(step["entropy_drop"], 4), rounded(step["predicted_drop"], 4)]
            else:
                cells.append(rounded(step["distances"].get(largest), 3))
        rows.append(tuple(cells))
    return Table(
        "Which charges matter",
        " ".join(x for x in (r["suggestion"], r["stuck"]) if x),
        ("", "by entropy", "entropy drop", "predicted", "by distance", f"distance on {block_label(largest or '0')}"),
        tuple(rows),
        "Two questions: which charge tells most about the whole state, and which one about a block. The entropy drop "
        "is the relative entropy of the ensemble with the charge to the one without; the prediction is r²/(2χ⊥).",
    )


def _windows(c: Mapping[str, Any]) -> Table | None:
    if not c["window_scan"]:
        return None
    keys = ("centre", "mean", "beta", "entropy")
    rows = tuple((f"width {rounded(w['width'], 6)}", *(rounded(w[k], 6) for k in keys)) for w in c["window_scan"])
    inside = windows_inside(c)
    sector = f", inside the sector of the start ({pairs(c['sharp'])})" if inside else ", over all sectors"
    return Table(
        "Energy windows",
        f"Gaussian windows of several widths around the energy of the start{sector if c['sharp'] else ''}.",
        ("", "centre", "mean energy", "beta", "entropy"),
        rows,
        "beta = (mean − centre)/width² is the slope of the log of the density of states near the mean energy, not the "
        f"centre.{' Compare it with that of the canonical ensemble in the sector.' if inside else ''}",
    )


def _inside(c: Mapping[str, Any]) -> Table | None:
    if c["eigenstate_tests"] is None:
        return None
    rows: list[tuple[str, ...]] = []
    for t in tested(c):
        whose = "sector of the start" if t["of_start"] else "the start has no weight there"
        rows.append((f"{pairs(t['sector']) or 'all states'}: {plural(t['size'], 'level')}, {whose}",))
        if t["ratio"] is not None:
            of = f"{plural(t['ratio']['number'], 'ratio')}, {t['ratio']['degenerate']} exact degeneracies"
            rows.append(("mean spacing ratio", ratio_cell(t["ratio"]), f"{of} among {t['ratio']['gaps']} spacings"))
        if t["refusal"]:
            rows.append(("not tested", "–", t["refusal"]))
        for name, x in t["scatter"].items():
            width = rounded(t["smoothing"][name], 3)
            rows.append((f"scatter of {name}", rounded(x, 3), f"about a mean smoothed over {width}"))
        for block, (median, low, high) in t["distances"].items():
            spread = f"10 % to 90 %: {rounded(low, 3)} to {rounded(high, 3)}"
            rows.append((f"distance of {block_label(block)} from the window", rounded(median, 3), spread))
    references = c["eigenstate_tests"]["references"].items()
    sources = "; ".join(f"{n}: {rounded(r['value'], 4)}, {r['source']}" for n, r in references)
    return Table(
        "Eigenstates inside one sector",
        "Whether single eigenstates at the same energy are alike: spacings of their levels, and in the middle fifth of "
        "the levels the scatter of their values and the distance of their blocks from the window around them.",
        ("", "value", ""),
        tuple(rows),
        f"Spacing ratios to compare with: {sources}.",
    )


def _scatter(found: Mapping[str, Any]) -> Table | None:
    """Scatter by size, where several sizes were tested."""
    first = [(c["size"], tested(c)[0]) for c in found["comparisons"] if tested(c) and tested(c)[0]["scatter"]]
    if any(t["of_start"] for _, t in first):
        first = [(n, t) for n, t in first if t["of_start"]]
    names = [n for n in (first[0][1]["scatter"] if first else ()) if all(n in t["scatter"] for _, t in first)]
    if len(first) < 2 or not names:
        return None
    left = [n for n in found["sizes"] if n not in [size for size, _ in first]]
    without = f" Not tested: {left_out(found['comparisons'], left)}." if left else ""
    return Table(
        "Scatter of eigenstates by size",
        "Standard deviation of the values of eigenstates about their running mean, inside one sector.",
        ("observable", *(f"L = {n}, {plural(t['size'], 'level')}" for n, t in first)),
        tuple((name, *(rounded(t["scatter"][name], 3) for _, t in first)) for name in names),
        f"Where eigenstates thermalise it falls as the inverse root of the number of levels.{without}",
    )


def _sizes(found: Mapping[str, Any]) -> Table | None:
    every = found["comparisons"]
    if len(every) < 2:
        return None
    blocks = sorted(set.intersection(*(set(c["block_bounds"]) for c in every)), key=int)
    if not blocks:
        return None
    at, rows = blocks[-1], list[tuple[str, ...]]()
    for label, whole, part in both(every[-1]):
        for sector, there in ((False, whole), (True, part)):
            if there is None:
                continue
            same = lambda e, label=label, sector=sector: e["label"] == label and bool(e["sector"]) == sector
            rows += distance_rows(column_label(there), [(next(filter(same, c["ensembles"]), None), at) for c in every])
    return Table(
        "Sizes",
        f"Trace distance on {block_label(at)}, the largest block that every size has.",
        ("ensemble", *(f"L = {c['size']}" for c in every)),
        tuple(rows),
    )
