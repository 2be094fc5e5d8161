"""The corpus: every kind of problem, and how many of each a run holds.

Each problem is drawn from its own generator, seeded by (seed, kind, index), so `make(kind, seed, index)`
gives back any single one.  How its truth is known stands in the docstring of the function that makes it
(`feasible`, `edges`, `points`, `around`, `dependents`, `levels`, `bilinears`); none of them calls the solver.
"""

from __future__ import annotations

import zlib

import numpy as np

from tests.corpus import around, bilinears, dependents, feasible, levels
from tests.corpus.problem import Problem, named

INSIDE = {
    "quantum-real": (feasible.quantum_real, 10),
    "quantum-complex": (feasible.quantum_complex, 10),
    "commuting": (feasible.commuting, 6),
    "blocks": (feasible.blocks, 8),
    "lattice": (feasible.lattice, 6),
    "classical": (feasible.classical, 10),
    "degenerate": (feasible.degenerate, 9),
    "prior-quantum": (feasible.prior_quantum, 8),
    "prior-classical": (feasible.prior_classical, 8),
    "weights-200": (feasible.weights_200, 10),
    "weights-299": (feasible.weights_299, 8),
    "weights-cancelling": (feasible.weights_from_multipliers, 6),
    "weights-dominant": (feasible.weights_dominant, 6),
    "units": (feasible.scales, 12),
    "ill-conditioned": (feasible.near_dependent, 14),
}

COUNTS = {"near": 9, "boundary": 6, "outside": 10}

EDGES = {
    **{
        f"{place}-{name}": (around.at(place, shape), count)
        for place, count in COUNTS.items()
        for name, shape in around.SHAPES.items()
    },
    **{f"{place}-units": (around.scaled(place), count) for place, count in COUNTS.items()},
    **{f"{place}-mixed": (around.mixed(place), count) for place, count in COUNTS.items()},
    "outside-tangent": (around.tangent, 10),
    "outside-ill-conditioned": (dependents.nearly_dependent_outside, 10),
}

DEPENDENT = {
    **{kind: (function, 10) for kind, function in dependents.REDUNDANT.items()},
    "redundant-units": (dependents.redundant_scaled, 6),
    "all-trivial": (dependents.all_trivial, 6),
    "inconsistent-duplicate": (dependents.inconsistent_duplicate, 9),
    "inconsistent-identity": (dependents.inconsistent_identity, 9),
    "inconsistent-combination": (dependents.inconsistent_combination, 9),
    "inconsistent-units": (dependents.inconsistent_scaled, 9),
    "one-state": (dependents.single, 8),
    "no-charge": (dependents.empty, 8),
}

LEVELS = {
    **{f"levels-{s}": (levels.inside(s), 8) for s in levels.SIGNS},
    "levels-condensed": (levels.inside("bosons", condensed=True), 12),
    **{f"{place}-levels-{s}": (levels.edge(s, place), 8) for place in COUNTS for s in levels.SIGNS},
    **{f"redundant-levels-{s}": (levels.redundant(levels.inside(s)), 6) for s in levels.SIGNS},
    **{f"redundant-boundary-levels-{s}": (levels.redundant(levels.edge(s, "boundary")), 4) for s in levels.SIGNS},
    **{f"inconsistent-levels-{s}": (levels.contradicted(levels.inside(s)), 6) for s in levels.SIGNS},
}

PARTICLES = ("fermions", "bosons")

QUADRATIC = {
    **{f"quadratic-{s}": (bilinears.inside(s), 8) for s in PARTICLES},
    **{f"{place}-quadratic-{s}": (bilinears.edge(s, place), 8) for place in COUNTS for s in PARTICLES},
    **{f"redundant-quadratic-{s}": (levels.redundant(bilinears.inside(s)), 4) for s in PARTICLES},
    **{f"redundant-boundary-quadratic-{s}": (levels.redundant(bilinears.edge(s, "boundary")), 4) for s in PARTICLES},
    **{f"inconsistent-quadratic-{s}": (levels.contradicted(bilinears.inside(s)), 6) for s in PARTICLES},
    **{f"ring-{s}": (bilinears.inside(s, ring=True), 4) for s in PARTICLES},
    **{f"{place}-ring-{s}": (bilinears.edge(s, place, ring=True), 8) for place in COUNTS for s in PARTICLES},
}

KINDS = INSIDE | EDGES | DEPENDENT | LEVELS | QUADRATIC


def make(kind: str, seed: int, index: int) -> Problem:
    """The problem of this kind, seed and index; the same numbers on every call."""
    function, _ = KINDS[kind]
    rng = np.random.default_rng([seed, zlib.crc32(kind.encode()), index])
    return named(function(rng, index), kind, seed, index)


def problems(kind: str, seed: int = 0, count: int | None = None) -> list[Problem]:
    """All problems of one kind, `count` of them or as many as a default run holds."""
    return [make(kind, seed, index) for index in range(KINDS[kind][1] if count is None else count)]


def corpus(seed: int = 0, count: int | None = None) -> list[Problem]:
    """Problems of every kind."""
    return [problem for kind in KINDS for problem in problems(kind, seed, count)]
