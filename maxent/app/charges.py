"""The command `multipliers charges`: config in, the local operators that its Hamiltonian conserves out.

Floor: app. Format `maxent.charges/1`: one entry per momentum. Must not know: how the operators are found.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path as File
from typing import Any, Literal

from maxent.app.config import load
from maxent.app.job import BadInput
from maxent.errors import ResourceError
from maxent.text import number, plural, table

__all__ = ["SCHEMA", "search", "summary"]

SCHEMA = "maxent.charges/1"
_SHOWN = 40
_KINDS = ("spins", "fermions")
_REFUSED = {
    "bosons": "no search for bosons: a mode has no end of local operators, and a cut-off changes their commutators",
}
_SUBSCRIPTS = ("i", "j", "k", "n", "site")


def search(
    file: File, up_to: int, momenta: Sequence[Literal["0", "pi"]], *, say: Callable[[str], None]
) -> dict[str, Any]:
    """Find the local operators that the Hamiltonian of a config conserves.

    Parameters
    ----------
    file : pathlib.Path
        Config of kind `spins` or `fermions`.
    up_to : int
        Largest range.
    momenta : sequence of "0" and "pi"
    say : callable
        Receives lines of progress.

    Returns
    -------
    dict
        JSON-ready.

    Raises
    ------
    ConfigError
        Bad config, no translation-invariant Hamiltonian of spins 1/2 or fermions on a line, or a range that needs more
        memory than there is.
    """
    config = load(file)
    kind = config.header.kind
    if kind not in _KINDS:
        raise config.error(
            [(("kind",), _REFUSED.get(kind, "the search for conserved operators is for spins 1/2 and fermions"))]
        )
    from maxent.app.kinds import fermions, spins

    options = config.options
    try:
        operator = (spins if kind == "spins" else fermions).hamiltonian(options)
    except BadInput as bad:
        raise config.error(bad.problems) from bad
    from maxent.quench.search import search as find

    name = options.hamiltonian
    try:
        found = [find(operator, up_to, momentum=momentum, progress=say) for momentum in momenta]
    except ResourceError as bad:
        raise config.error([((), str(bad))]) from bad
    except TypeError as bad:  # the sites are none that can be searched
        key = "geometry" if options.sites.geometry == "bonds" else "spin"
        raise config.error([(("sites", key), str(bad))]) from bad
    except ValueError as bad:
        raise config.error([(("charges", name), str(bad))]) from bad
    texts = " ".join([options.charges[name], *options.densities.values()])
    letters = "spin" if re.search(r"\bS(?:x|y|z|plus|minus)\b", texts) else "pauli"
    taken = {*options.parameters, *options.densities, *operator.sites.cell, *found[0].hamiltonian.species}
    subscript = next(s for s in (*_SUBSCRIPTS, *(f"i{k}" for k in range(len(taken)))) if s not in taken)
    h = found[0].hamiltonian
    return {
        "schema": SCHEMA,
        "config": config.file.name,
        "hamiltonian": name,
        "formula": options.charges[name],
        "hamiltonian_range": h.range,
        "cell": h.sites,
        "sites": operator.sites.size,
        "searches": [_search(result, options, operator, letters, subscript) for result in found],
    }


def _search(result: Any, options: Any, operator: Any, letters: str, subscript: str) -> dict[str, Any]:
    names = _names(result, options.hamiltonian)
    charges = []
    for name, charge, normed in zip(names, result.charges, result.orthonormal, strict=True):
        text = options.charges[name] if charge.hamiltonian else charge.formula(letters, subscript=subscript)
        charges.append(
            {
                "name": name,
                "range": charge.range,
                "formula": text,
                "hamiltonian": charge.hamiltonian,
                "kept_by_ends": _kept_by_ends(operator, charge, text, options),
                "exact": charge.exact,
                "defect": charge.defect,
                "words": _words(charge),
                "orthonormal": _words(normed),
            }
        )
    nearly = [
        None
        if n is None
        else {
            "value": n.value,
            "multiplicity": n.multiplicity,
            "formula": n.charge.formula(letters, subscript=subscript, digits=6),
            "words": _words(n.charge),
        }
        for n in result.nearly
    ]
    remarks = list(result.remarks)
    size, cells = operator.sites.size, result.hamiltonian.sites * (2 if result.momentum == "pi" else 1)
    if operator.sites.is_ring and (size < result.shortest_ring or size % cells):
        of = f", a multiple of {cells}" if cells > 1 else ""
        remarks.insert(0, f"They are conserved on rings of at least {result.shortest_ring} sites{of}; this has {size}.")
    return {
        "momentum": result.momentum,
        "range": result.range,
        "counts": list(result.counts),
        "charges": charges,
        "nearly": nearly,
        "commutators": None if result.commutators is None else result.commutators.tolist(),
        "fragmented": result.fragmented,
        "diagonal": result.diagonal,
        "shortest_ring": result.shortest_ring,
        "remarks": remarks,
    }


def _kept_by_ends(operator: Any, charge: Any, text: str, options: Any) -> bool | None:
    """Whether the Hamiltonian of an open chain, ends included, commutes with a charge of its bulk; None on a ring."""
    if operator.sites.is_ring:
        return None
    if charge.hamiltonian:
        return True
    from maxent.lattice import formula

    left = operator.commutator(formula(text, operator.sites, options.parameters, options.densities)).coefficients
    sizes = abs(operator.coefficients).max() * max(abs(float(c)) for c, _, _ in charge.words)
    return not len(left) or bool(abs(left).max() <= 1e-9 * sizes)


def _names(result: Any, hamiltonian: str) -> list[str]:
    """Name of each charge: that of the Hamiltonian, or its range with a number where there are several."""
    kind = "staggered" if result.momentum == "pi" else "charge"
    ranges = [None if q.hamiltonian else q.range for q in result.charges]
    names = []
    for j, k in enumerate(ranges):
        several = f"_{ranges[: j + 1].count(k)}" if ranges.count(k) > 1 else ""
        names.append(hamiltonian if k is None else f"{kind}_{k}{several}")
    return names


def _words(charge: Any) -> list[dict[str, Any]]:
    return [{"coefficient": float(c), "letters": text, "place": place} for c, text, place in charge.words]


def summary(found: Mapping[str, Any]) -> str:
    """Write what was found for the terminal.

    Parameters
    ----------
    found : mapping
        As `search` returns it.

    Returns
    -------
    str
        Several lines, without a final newline.
    """
    head = (
        f"{found['config']}: operators that commute with '{found['hamiltonian']}' "
        f"(range {found['hamiltonian_range']}, {plural(found['cell'], 'site')} per cell), at infinite volume"
    )
    return "\n\n".join([head, *(_part(entry) for entry in found["searches"])])


def _part(entry: Mapping[str, Any]) -> str:
    counts = entry["counts"]
    rows = []
    for k, (total, near) in enumerate(zip(counts, entry["nearly"], strict=True), start=1):
        value, times = ("–", "–") if near is None else (number(near["value"], 4), str(near["multiplicity"]))
        rows.append((str(k), str(total), str(total - (counts[k - 2] if k > 1 else 0)), value, times))
    titles = ("range", "conserved", "new", "smallest non-zero |[H,Q]|/(2|Q|)", "times")
    parts = [f"momentum {entry['momentum']}\n" + table(rows, titles, right=range(5))]
    charges = entry["charges"]
    if charges:
        lines = [f'{q["name"]} = "{q["formula"]}"  # {_comment(q)}' for q in charges[:_SHOWN]]
        if len(charges) > _SHOWN:
            lines.append(f"# and {len(charges) - _SHOWN} more: --json lists all")
        parts.append("\n".join(["[charges]", *lines]))
    near = entry["nearly"][-1]
    if near is not None:
        parts.append(f"Most nearly conserved of range {entry['range']}: {_shortened(near['formula'])}")
    if charges and entry["commutators"] is not None:
        parts.append(_commutators(entry))
    parts.append("\n".join(entry["remarks"]))
    return "\n\n".join(parts)


def _comment(charge: Mapping[str, Any]) -> str:
    if charge["hamiltonian"]:
        return f"range {charge['range']}; the Hamiltonian"
    how = "exact" if charge["exact"] else "defect " + number(charge["defect"], 2)
    ends = "" if charge["kept_by_ends"] is not False else " in the bulk, broken by the ends"
    return f"range {charge['range']}; {how}{ends}"


def _shortened(text: str, most: int = 160) -> str:
    if len(text) <= most:
        return text
    kept = text[:most].rsplit(" ", 2)[0]
    return f"{kept} ... ({text.count(' + ') + text.count(' - ') + 1} words)"


def _commutators(entry: Mapping[str, Any]) -> str:
    """Pairs that do not commute, one by one while they are few."""
    sizes, names = entry["commutators"], [q["name"] for q in entry["charges"]]
    pairs = [(sizes[j][k], j, k) for j in range(len(names)) for k in range(j) if sizes[j][k] > 0.0]
    if not pairs:
        return "All of them commute with one another." if len(names) > 1 else "It is the only one."
    rows = [(f"{names[k]}, {names[j]}", number(size, 4)) for size, j, k in pairs[:_SHOWN]]
    if len(pairs) > _SHOWN:
        rows.append((f"and {len(pairs) - _SHOWN} more", ""))
    return table(rows, ("do not commute", "|[Q,R]|/(2|Q||R|)"), right=[1])
