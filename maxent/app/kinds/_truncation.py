"""What an infinite chain has to show: truncated ensembles by number of charges, occupations, local means.

Floor: app/kinds.  Must not know: configs, figures.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from maxent.app.sections import Column, Section
from maxent.text import number, plural

if TYPE_CHECKING:
    from maxent.families.gaussian_states import FermionState
    from maxent.quench.infinite_chains import StationaryState
    from maxent.quench.truncated import TruncatedEnsemble

__all__ = ["SITES", "sections", "word_mean"]

#: Sites that a prediction may name.
SITES = 24
#: Momenta of the table of occupations.
POINTS = 65
#: Measures below this are rounding.
ROUNDING = 1e-13


def sections(
    complete: StationaryState,
    result: Any,
    *,
    count: int,
    counts: Sequence[int],
    blocks: Sequence[int],
    words: Mapping[str, Any],
    level: int,
) -> list[Section]:
    """Everything beside the fit.

    Parameters
    ----------
    complete : StationaryState
        The state with all charges.
    result : Result
        Of the ensemble of the first `count` charges, I0, I1, ...
    count : int
    counts : sequence of int
        Numbers of charges of the truncated ensembles; empty for 1 to `count`.
    blocks : sequence of int
        Sites of the blocks.
    words : mapping of str to terms
        Predictions, as pairs of a coefficient and a product of Pauli matrices.
    level : int
        Numbers of momenta in the fits, ``2^level + 1``.

    Returns
    -------
    list of Section
    """
    every = sorted(set(counts)) or list(range(1, count + 1))
    found = [_truncation(complete, every, sorted(set(blocks)), level), _occupations(complete, result, count)]
    return [*found, _means(complete, result, count, words, level)] if words else found


def word_mean(block: FermionState, terms: Any) -> float:
    """Mean of a sum of products of Pauli matrices on numbered sites, the same wherever the block lies.

    Parameters
    ----------
    block : FermionState
        Long enough for every product.
    terms : iterable of (float, dict of int to str)
    """
    total = 0.0
    for coefficient, letters in terms:
        first = min(letters, default=0)
        moved = {site - first: letter for site, letter in letters.items()}
        total += coefficient * (block.mean_word(moved) if moved else 1.0)
    return float(total)



def _truncation(complete: StationaryState, counts: list[int], blocks: list[int], level: int) -> Section:
    from maxent.quench.truncated import block_relative_entropies, truncated_ensembles

    ensembles = truncated_ensembles(complete, counts, block=1, level=level)
    relative = block_relative_entropies(complete, ensembles, blocks)
    columns = [
        Column("charges", counts, "number of charges of the ensemble"),
        Column(
            "entropy gap per site",
            _seen([e.entropy_gap for e in ensembles]),
            "entropy per site above that of the ensemble of all charges",
        ),
    ]
    for at, size in enumerate(blocks):
        text = f"relative entropy of {plural(size, 'site')}: the state with all charges against the truncated one"
        columns.append(Column(plural(size, "site"), _seen(relative[:, at]), text))
    curves = tuple(c.name for c in columns[1:])
    if any(e.verdict != "solved" for e in ensembles):
        columns.append(Column("verdict", [e.verdict for e in ensembles], "verdict of the fit"))
    return Section(
        "truncation",
        "Truncated ensembles by number of charges",
        "Both measures in nats: what the entropy per site is above that of the ensemble of all charges, and the "
        "relative entropy of neighbouring sites, the state with all charges against the truncated one. "
        "0 stands for what is rounding, below 1e-13.",
        tuple(columns),
        _falling(ensembles, blocks, relative),
        curves,
        "nats",
        "log",
    )


def _seen(values: Any) -> list[float]:
    return [0.0 if x < ROUNDING else float(x) for x in values]  # NaN stays


def _falling(ensembles: Sequence[TruncatedEnsemble], blocks: Sequence[int], relative: np.ndarray) -> str:
    """How much smaller both measures have become from half of the charges to all of them."""
    gaps = np.array([e.entropy_gap for e in ensembles])
    near = relative[:, 0] if blocks else np.full(len(gaps), np.nan)
    clear = [k for k in range(len(gaps)) if min(gaps[k], near[k]) > ROUNDING]  # NaN, no fit, is not
    many = clear[-1] if clear else 0
    few = max((k for k in clear if 2 * ensembles[k].count <= ensembles[many].count), default=None)
    if few is None:
        return ""
    numbers = f"{ensembles[few].count} to {plural(ensembles[many].count, 'charge')}"
    falls = f"{number(gaps[few] / gaps[many], 3)}, the relative entropy of {plural(blocks[0], 'site')}"
    return f"From {numbers} the entropy gap falls by a factor of {falls} by one of {number(near[few] / near[many], 3)}."


def _occupations(complete: StationaryState, result: Any, count: int) -> Section:
    from maxent.quench.infinite_chains import TransverseFieldChain, ensemble_occupations

    k = np.linspace(0.0, np.pi, POINTS)
    names = ("all charges", plural(count, "charge"))
    ours = np.full(POINTS, np.nan)
    if result.success:
        charges = {f"I{m}": complete.chain.charge(m) for m in range(count)}
        ours = ensemble_occupations(result.multipliers, charges)(k)
    what = "excitations" if isinstance(complete.chain, TransverseFieldChain) else "bosons, as free fermions,"
    return Section(
        "occupations",
        "Occupations by momentum",
        f"Mean number of {what} in each mode: conserved by the chain, and what the ensemble says of it.",
        (
            Column("momentum", k.tolist(), "momentum in units of the inverse distance of sites"),
            Column(names[0], complete.occupations(k).tolist(), "occupation, the same before and long after the quench"),
            Column(names[1], ours.tolist(), "occupation in the ensemble that was fitted"),
        ),
        curves=names,
        ordinate="occupation",
    )


def _means(complete: StationaryState, result: Any, count: int, words: Mapping[str, Any], level: int) -> Section:
    from maxent.quench.infinite_chains import block_at_nodes

    whole = complete.block(SITES)
    every = [word_mean(whole, terms) for terms in words.values()]
    found = [np.nan] * len(every)
    if result.state is not None:
        ours = block_at_nodes(complete.chain, result.state.occupations, SITES, level=level)
        found = [word_mean(ours, terms) for terms in words.values()]
    return Section(
        "means",
        "Predictions beside the ensemble of all charges",
        "What the charges that were left out would have changed.",
        (
            Column("prediction", list(words), "name"),
            Column(plural(count, "charge"), found, "mean in the ensemble that was fitted"),
            Column("all charges", every, "mean in the ensemble of all charges"),
            Column("difference", [a - b for a, b in zip(found, every, strict=True)], "the first minus the second"),
        ),
    )
