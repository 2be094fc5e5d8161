"""Kind `infinite_chain`: the first local charges of a free chain of infinite length, long after a quench.

Nothing is cut off by a size: all numbers are per site, sums are averages over momenta.  Beside the fit there is a table
of how both measures of truncation fall with the number of charges.
Floor: app/kinds.  Must not know: the command line, the report.
"""

from __future__ import annotations

from dataclasses import dataclass
from dataclasses import field as key  # `field` is a key here
from pathlib import Path as File
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from maxent.app.job import STRICT, BadInput, Job, Problems, Target, says
from maxent.app.kinds._truncation import SITES, sections, word_mean
from maxent.errors import FormulaError
from maxent.text import number

if TYPE_CHECKING:
    from maxent.quench.infinite_chains import StationaryState

__all__ = ["ChainTable", "Options", "StartField", "build"]

#: Charges and block sizes up to this are resolved by the momenta of the fit.
MOST = 64
#: Momenta of the fits are 2^LEAST + 1 at least, more where occupations are steep.
LEAST = 9
#: Fields and depths beyond this many times J are not taken.
FAR = 1e6
_MODELS = {"transverse field": ("field", "after_quench"), "hard-core bosons": ("superlattice", "after_superlattice")}


@dataclass(frozen=True)
class ChainTable:
    """The chain after the quench."""

    __pydantic_config__ = STRICT

    model: Literal["transverse field", "hard-core bosons"] = key(
        metadata=says(
            "`transverse field`: -sum(J X[i] X[i+1] + h Z[i]); `hard-core bosons`: hopping J between neighbours, "
            "half full."
        )
    )
    coupling: float = key(default=1.0, metadata=says("J, positive."))
    field: float | None = key(default=None, metadata=says("h, for `transverse field`."))


@dataclass(frozen=True)
class StartField:
    """What the start is the ground state of; one key."""

    __pydantic_config__ = STRICT

    field: float | None = key(
        default=None, metadata=says("Field before the quench: the start is the ground state there.")
    )
    superlattice: float | None = key(
        default=None,
        metadata=says("Depth A of a potential A (-1)^i: the half-filled ground state in it is released."),
    )


@dataclass(frozen=True)
class Options:
    """Keys of a config of kind `infinite_chain`."""

    __pydantic_config__ = STRICT

    chain: ChainTable = key(metadata=says("The chain, with Pauli matrices; docs/gaussian-conventions.md."))
    start: StartField = key(metadata=says("The start, which fixes all targets."))
    charges: int = key(
        metadata=says("Number of local charges I0, I1, ... of the ensemble, the shortest ones first; up to 64.")
    )
    counts: list[int] = key(
        default_factory=list,
        metadata=says("Numbers of charges in the table of truncated ensembles; from 1 to `charges` by default."),
    )
    blocks: list[int] = key(
        default_factory=lambda: [2, 4, 8],
        metadata=says("Numbers of neighbouring sites whose states are compared; `[2, 4, 8]` by default."),
    )
    predictions: dict[str, str] = key(
        default_factory=dict,
        metadata=says('Name -> formula on sites by number, such as `"X[0]*X[3]"`; they may be shifted together.'),
    )


def build(options: Options, folder: File) -> Job:
    """Build the job that the options describe.

    Parameters
    ----------
    options : Options
    folder : pathlib.Path
        Not needed: no files are named.

    Returns
    -------
    Job

    Raises
    ------
    BadInput
        With all problems at once.
    """
    problems = Problems()
    _check(options, problems)
    words = {name: _read(name, text, problems) for name, text in options.predictions.items()}
    problems.raise_any()
    from maxent.families.modes import Modes
    from maxent.quench.infinite_chains import block_at_nodes
    from maxent.quench.momentum_averages import momentum_nodes

    complete = _complete(options)
    chain = complete.chain
    level = _level(options, complete)
    k, weights = momentum_nodes(level)
    rows = {f"I{m}": chain.charge(m)(k) for m in range(options.charges)}
    constants = {f"I{m}": chain.constant(m) for m in range(options.charges)}
    family = Modes(rows, degeneracy=weights, constants=constants)
    n = complete.occupations(k)
    targets = {
        name: Target(float((row * n) @ weights + constants[name]), "mean per site long after the quench")
        for name, row in rows.items()
    }

    def mean(state: Any, terms: Any) -> float:
        return word_mean(block_at_nodes(chain, state.occupations, SITES, level=level), terms)

    return Job(
        family,
        targets,
        words,
        _facts(options, complete, len(k)),
        mean=mean,
        unit="site",
        further=lambda result: sections(
            complete,
            result,
            count=options.charges,
            counts=options.counts,
            blocks=options.blocks,
            words=words,
            level=level,
        ),
    )


def _check(options: Options, problems: Problems) -> None:
    chain, start = options.chain, options.start
    if not 1 / FAR <= chain.coupling <= FAR:
        problems.add(("chain", "coupling"), f"must lie in {1 / FAR:.0e}..{FAR:.0e}, got {number(chain.coupling)}")
    elif abs(chain.field or 0.0) > FAR * chain.coupling:
        problems.add(("chain", "field"), f"lies beyond {FAR:.0e} J, got {number(chain.field)}")
    if chain.model == "transverse field" and chain.field is None:
        problems.add(("chain", "field"), "missing: the field after the quench")
    if chain.model == "hard-core bosons" and chain.field is not None:
        problems.add(("chain", "field"), 'a chain of hard-core bosons has none; it is for model = "transverse field"')
    wanted = _MODELS[chain.model][0]
    for name in ("field", "superlattice"):
        given = getattr(start, name)
        if name == wanted and given is None:
            problems.add(("start", name), f'missing: model = "{chain.model}" starts with it')
        elif name == wanted and abs(given) > FAR * chain.coupling:
            problems.add(("start", name), f"lies beyond {FAR:.0e} J, got {number(given)}")
        elif name == "superlattice" == wanted and not given > 0:
            problems.add(("start", name), f"must be positive, got {number(given)}: without a potential nothing changes")
        if name != wanted and given is not None:
            problems.add(("start", name), f'means nothing for model = "{chain.model}", which takes {wanted}')
    if not 1 <= options.charges <= MOST:
        problems.add(("charges",), f"expected 1 to {MOST} charges, got {options.charges}")
    for name, what in (("counts", "charges"), ("blocks", "sites")):
        for at, value in enumerate(getattr(options, name)):
            if not 1 <= value <= MOST:
                problems.add((name, at), f"expected 1 to {MOST} {what}, got {value}")


def _read(name: str, text: str, problems: Problems) -> Any:
    """Terms of a formula on numbered sites; None after a problem."""
    from maxent.lattice import Chain, formula

    path = ("predictions", name)
    try:
        operator, again = (formula(text, Chain(size)) for size in (SITES, SITES + 1))
    except FormulaError as bad:
        problems.add(path, str(bad))
        return None
    word = operator.non_hermitian_word
    if word is not None:
        problems.add(path, f"not Hermitian: it holds {word}")
        return None
    if operator.pauli_terms() != again.pauli_terms():
        problems.add(path, "sums over sites, of which an infinite chain has no end; name them by number, as in Z[0]")
        return None
    return operator.pauli_terms()


def _complete(options: Options) -> StationaryState:
    from maxent.quench.infinite_chains import HardCoreChain, TransverseFieldChain

    chain = options.chain
    made: Any = HardCoreChain(chain.coupling)
    if chain.field is not None:
        made = TransverseFieldChain(chain.field, chain.coupling)
    start, way = _MODELS[chain.model]
    return getattr(made, way)(getattr(options.start, start))


def _level(options: Options, complete: StationaryState) -> int:
    """Level of the quadrature at which entropy, charges and blocks of the stationary state are exact to rounding."""
    from maxent.families.gaussian_states import binary_entropy
    from maxent.quench.momentum_averages import resolving_level

    chain, most = complete.chain, max([options.charges, *options.counts])
    size = max([SITES, *options.blocks])

    def every(k: np.ndarray) -> np.ndarray:
        n = complete.occupations(k)
        unit = np.abs(chain.level(k)).max()
        rows = [chain.charge(m)(k) * n / unit for m in range(most)]
        return np.concatenate([[binary_entropy(n)], rows, chain.correlations(size, k, n)])

    try:
        return max(LEAST, resolving_level(every, accuracy=1e-12))
    except ValueError as bad:
        text = f"the occupations are too steep in momentum: {bad}"
        raise BadInput([(("start", _MODELS[options.chain.model][0]), text)]) from bad


def _facts(options: Options, complete: StationaryState, momenta: int) -> dict[str, str]:
    chain, name = options.chain, _MODELS[options.chain.model][0]
    facts = {
        "chain": f"{chain.model}, infinitely long; all numbers are per site",
        "parameter J": number(chain.coupling),
    }
    if chain.field is not None:
        facts["parameter h"] = number(chain.field)
    return facts | {
        "start": f"ground state at {name} {number(getattr(options.start, name))}",
        "momenta": str(momenta),
        "entropy per site with all charges": number(complete.entropy, 12),
    }
