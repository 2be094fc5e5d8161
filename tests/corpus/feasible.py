"""Problems with a solution well inside the reachable set.

Truth: the targets are the means of a state that is written down, with every probability (eigenvalue)
positive; a full-rank state lies in the interior of the reachable set, so a maximum-entropy state with
finite multipliers exists. Where the state is itself exp(-lam.Q)/Z of independent charges, lam is the only
answer and its entropy is known.
"""

from __future__ import annotations

import itertools

import numpy as np
import scipy.sparse

from tests.corpus import pieces
from tests.corpus.problem import Draft

SIZES = (2, 3, 4, 6, 8, 12, 16, 24)


def from_multipliers(charges, lam, note: str, **fields) -> Draft:
    """Draft whose targets are the means of exp(-lam.Q)/Z; truth by the choice of lam."""
    charges = np.asarray(charges)
    state, entropy = pieces.gibbs(np.tensordot(lam, charges, axes=1))
    fields = {"multipliers": lam, "entropy": entropy, "rank": len(charges)} | fields
    return Draft(
        charges=tuple(charges),
        targets=pieces.values_in(charges, state),
        verdict="solved",
        family="Microstates" if charges.ndim == 2 else "Matrices",
        size=charges.shape[-1],
        note=note,
        **fields,
    )


def random_charges(rng, index: int, *, is_complex: bool, widest: int = 24) -> np.ndarray:
    """Independent Hermitian charges of unit spread with offsets of order 1; sizes 2..24 by index."""
    d = min(SIZES[index % len(SIZES)], widest)
    most = d * d - 1 if is_complex else d * (d + 1) // 2 - 1
    m = int(rng.integers(1, min(6, most) + 1))
    stack = np.array([pieces.hermitian(rng, d, is_complex=is_complex) for _ in range(m)])
    return stack + 0.5 * rng.standard_normal(m)[:, None, None] * np.eye(d)


def quantum_real(rng, index: int) -> Draft:
    """Random real symmetric charges; lam known by construction."""
    charges = random_charges(rng, index, is_complex=False)
    lam = pieces.multipliers(rng, charges, rng.uniform(0.5, 8))
    return from_multipliers(charges, lam, f"d={charges.shape[1]} m={len(lam)}")


def quantum_complex(rng, index: int) -> Draft:
    """Random complex Hermitian charges; lam known by construction."""
    charges = random_charges(rng, index, is_complex=True)
    lam = pieces.multipliers(rng, charges, rng.uniform(0.5, 8))
    return from_multipliers(charges, lam, f"d={charges.shape[1]} m={len(lam)}")


def random_points(rng, index: int) -> np.ndarray:
    """Charges of microstates, n = 4..200 points in general position."""
    n = (4, 6, 10, 20, 50, 100, 200)[index % 7]
    m = int(rng.integers(1, min(6, n - 2) + 1))
    return rng.standard_normal((m, n)) + 0.5 * rng.standard_normal((m, 1))


def classical(rng, index: int) -> Draft:
    """Random microstates; lam known by construction."""
    charges = random_points(rng, index)
    lam = pieces.multipliers(rng, charges, rng.uniform(0.5, 10))
    return from_multipliers(charges, lam, f"n={charges.shape[1]} m={len(lam)}")


def commuting(rng, index: int) -> Draft:
    """Commuting matrices: microstates written in a random basis; lam known by construction."""
    points = random_points(rng, index % 4)
    u = pieces.unitary(rng, points.shape[1], is_complex=bool(index % 2))
    charges = pieces.rotate([np.diag(row) for row in points], u)
    lam = pieces.multipliers(rng, charges, rng.uniform(0.5, 8))
    return from_multipliers(charges, lam, f"d={charges.shape[1]} m={len(lam)}")


def blocks(rng, index: int) -> Draft:
    """Block-diagonal charges in shuffled order, handed over as sparse matrices; lam known by construction."""
    is_complex = bool(index % 2)
    sizes = rng.integers(1, 6, size=3 + index % 4)
    d, m = int(sizes.sum()), int(rng.integers(1, len(sizes)))  # levels of the blocks alone tell m charges apart
    order = rng.permutation(d)

    def charge() -> np.ndarray:
        parts = [pieces.hermitian(rng, k, is_complex=is_complex) + rng.standard_normal() * np.eye(k) for k in sizes]
        return scipy.sparse.block_diag(parts).toarray()[np.ix_(order, order)]

    dense = np.array([charge() for _ in range(m)])
    lam = pieces.multipliers(rng, dense, rng.uniform(0.5, 6))
    draft = from_multipliers(dense, lam, f"blocks {sizes.tolist()}")
    kinds = (scipy.sparse.csr_matrix, scipy.sparse.csc_array, scipy.sparse.coo_matrix)
    return draft.change(charges=tuple(kinds[index % 3](a) for a in dense))


def lattice(rng, index: int) -> Draft:
    """Spin-1/2 ring: XXZ energy, magnetisation, scalar chirality (complex, does not commute); lam known."""
    length = (3, 4, 4, 5)[index % 4]
    delta = rng.uniform(-0.8, 1.8)
    energy = pieces.coupling("xx", length) + pieces.coupling("yy", length) + delta * pieces.coupling("zz", length)
    chirality = sum(
        pieces.coupling("".join(w), length) * sign
        for w, sign in (("xyz", 1), ("yzx", 1), ("zxy", 1), ("xzy", -1), ("zyx", -1), ("yxz", -1))
    )
    transverse = pieces.field_of("x", length)
    charges = np.array([energy, pieces.field_of("z", length), chirality, transverse][: 2 + index % 3])
    lam = pieces.multipliers(rng, charges, rng.uniform(1, 6))
    return from_multipliers(charges, lam, f"ring of {length}, Delta={delta:.2f}")


def degenerate(rng, index: int) -> Draft:
    """Degenerate spectra: Pauli strings, projectors, repeated levels; every third one at lam = 0."""
    style = index % 3
    if style == 0:
        words = ["".join(w) for w in itertools.product("1xyz", repeat=3)][1:]
        picked = rng.choice(len(words), size=int(rng.integers(2, 7)), replace=False)
        charges = np.array([pieces.pauli(words[i]) for i in picked]).astype(complex)
    elif style == 1:
        frames = [pieces.unitary(rng, 6, is_complex=True)[:, : 1 + j] for j in range(3)]
        charges = np.array([pieces.tidy(f @ f.conj().T) for f in frames])
    else:
        charges = rng.integers(0, 3, size=(2, 12)).astype(float)
        charges[:, :3] = [[0, 1, 0], [0, 0, 1]]
    lam = pieces.multipliers(rng, charges, rng.uniform(0.5, 6)) * (index // 3 % 3 > 0)
    return from_multipliers(charges, lam, ("pauli", "projectors", "repeated levels")[style])


def prior_quantum(rng, index: int) -> Draft:
    """State exp(K - lam.Q)/Z with a random log-prior K; lam known, entropy is the von Neumann entropy."""
    charges = random_charges(rng, index, is_complex=bool(index % 2), widest=8)
    d = charges.shape[1]
    prior = rng.uniform(0.3, 4) * pieces.hermitian(rng, d, is_complex=bool(index % 2))
    lam = pieces.multipliers(rng, charges, rng.uniform(0.5, 5))
    state, entropy = pieces.gibbs(np.tensordot(lam, charges, axes=1) - prior)
    draft = from_multipliers(charges, lam, f"d={d} m={len(lam)}", log_prior=prior, entropy=entropy)
    return draft.change(targets=pieces.values_in(charges, state))


def prior_classical(rng, index: int) -> Draft:
    """Probabilities prior exp(-lam.a)/Z, every other one with states that the prior drops; lam known."""
    charges = random_points(rng, 1 + index)
    prior = rng.uniform(-4, 4, charges.shape[1])
    if index % 2:
        prior[-2:] = -np.inf
    live = np.isfinite(prior)
    lam = pieces.multipliers(rng, charges[:, live], rng.uniform(0.5, 6))
    p, entropy = pieces.gibbs(lam @ charges[:, live] - prior[live])
    rank = int(np.linalg.matrix_rank(charges[:, live] - charges[:, live].mean(1, keepdims=True)))
    if rank < len(lam):
        charges, lam, prior = charges[:1], lam[:1], prior
        p, entropy = pieces.gibbs(lam @ charges[:, live] - prior[live])
    draft = from_multipliers(charges, lam, f"n={charges.shape[1]} m={len(lam)}", log_prior=prior, entropy=entropy)
    return draft.change(targets=charges[:, live] @ p)


def _weighted(rng, index: int, decades: float) -> Draft:
    """Targets of a distribution with every probability at least 0.3/n, under weights over +-decades.

    Which microstates exist does not depend on their weights, so the strictly positive distribution proves the
    targets to be inside whatever the weights are.
    """
    n = (6, 10, 20, 40)[index % 4]
    m = int(rng.integers(1, min(5, n - 2) + 1))
    charges = rng.standard_normal((m, n))
    logs = rng.uniform(-1, 1, n) * decades * np.log(10)
    logs[:2] = np.array([1, -1]) * decades * np.log(10)
    return Draft(
        charges=tuple(charges),
        targets=charges @ pieces.probabilities(rng, n),
        verdict="solved",
        rank=m,
        family="Microstates",
        size=n,
        log_weights=logs,
        note=f"n={n} m={m} weights 1e+-{decades:.0f}",
    )


def weights_200(rng, index: int) -> Draft:
    return _weighted(rng, index, 200)


def weights_299(rng, index: int) -> Draft:
    return _weighted(rng, index, 299)


def weights_from_multipliers(rng, index: int) -> Draft:
    """Weights w and lam such that w exp(-lam.a) stays within a few decades: the two large numbers cancel;
    lam known.

    The entropy counts the weights: S = -sum p ln(p/w).
    """
    n, m = (8, 16, 30)[index % 3], 1 + index % 3
    charges = rng.standard_normal((m, n))
    lam = pieces.multipliers(rng, charges, 400.0)
    logp = rng.uniform(-3, 3, n)
    logs = lam @ charges + logp
    p, _ = pieces.gibbs(-logp)
    return Draft(
        charges=tuple(charges),
        targets=charges @ p,
        verdict="solved",
        rank=m,
        family="Microstates",
        size=n,
        log_weights=logs,
        multipliers=lam,
        entropy=float(-p @ (np.log(p) - logs)),
        note=f"n={n} m={m} lam.a over 400",
    )


def weights_dominant(rng, index: int) -> Draft:
    """Target exactly on the microstate that carries 1e200 times the weight of all others, inside their hull.

    The dominant point is a strictly positive combination of the others, hence interior: solved, although a
    wide range of multipliers reproduces the target.
    """
    n, m = 8 + 4 * (index % 3), 1 + index % 3
    others = rng.standard_normal((m, n - 1))
    p = pieces.probabilities(rng, n - 1)
    charges = np.column_stack([others @ p, others])
    logs = np.zeros(n)
    logs[0] = 200 * np.log(10)
    return Draft(
        charges=tuple(charges),
        targets=charges[:, 0].copy(),
        verdict="solved",
        rank=m,
        family="Microstates",
        size=n,
        log_weights=logs,
        note=f"n={n} m={m} dominant state",
    )


def scales(rng, index: int) -> Draft:
    """Charges in units from 1e-8 to 1e8; lam known."""
    base = (quantum_real, classical, quantum_complex, commuting)[index % 4](rng, index)
    factors = 10 ** rng.uniform(-8, 8, len(base.charges))
    factors[0] = (1e-8, 1e8)[index // 4 % 2]
    return base.transformed(np.diag(factors), note="units 1e+-8")


def _ill_conditioned(rng, base: Draft, condition: float) -> Draft:
    m = len(base.charges)
    singular = np.logspace(0, -np.log10(condition), m)
    matrix = (pieces.unitary(rng, m) * singular) @ pieces.unitary(rng, m)
    draft = base.transformed(matrix, note=f"condition {condition:.0e}")
    # rounding of the inputs alone moves both by 1e-16 times the condition number
    return draft.change(multipliers=None, entropy=None)


def near_dependent(rng, index: int) -> Draft:
    """Charges mixed by a matrix of condition 1e6..1e12, targets deep inside.

    Rounding of the targets moves them by 1e-16 times the condition number in units of the spreads, far less
    than the depth.  The multipliers are of the order of the condition number and are not compared.
    """
    m = 2 + index % 4
    if index % 2:
        charges = rng.standard_normal((m, 30))
    else:
        charges = np.array([pieces.hermitian(rng, 6, is_complex=bool(index % 4)) for _ in range(m)])
    lam = pieces.multipliers(rng, charges, rng.uniform(0.5, 2))
    base = from_multipliers(charges, lam, f"size {charges.shape[-1]} m={m}")
    return _ill_conditioned(rng, base, 10.0 ** (6 + index % 7))
