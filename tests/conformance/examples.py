"""The families that the conformance suite asks, each beside its own dense matrices.  A new family is one more row.

Charge 0 of every example has a degenerate lowest level (2 or more states, not all of them), so that faces, degenerate
spectra and limit states are met without luck; charges 1 and 2 are generic.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse as sp

from maxent.families import Bilinears, Matrices, Microstates, Modes
from maxent.families.gaussian_states import majorana_operators
from tests.conformance.dense import Dense, random_hermitian, random_unitary

NAMES = ("plateau", "second", "third")


@dataclass(frozen=True)
class Example:
    """A family, its dense picture, the dimension of the lowest level of charge 0, and how users write operators.

    `observable(rng)` gives an operator as the user writes it and the same operator on the space of the charges;
    `restrict(keep)` gives the rows of the dense picture that belong to listed states `keep`.
    """

    name: str
    family: Any
    dense: Dense
    degeneracy: int
    observable: Callable[[np.random.Generator], tuple[Any, np.ndarray]]
    degenerate_weights: np.ndarray | None = None

    @property
    def has_weights(self) -> bool:
        return bool(np.any(self.dense.log_prior))


def _diagonal(rows: np.ndarray) -> np.ndarray:
    return np.array([np.diag(r) for r in rows])


def _microstates(name: str) -> Example:
    rng = np.random.default_rng(11)
    n = 9
    rows = np.array([[0, 0, 0, 1, 1, 2, 3, 3, 4.0], rng.standard_normal(n), rng.standard_normal(n)])
    weights = np.linspace(-2, 1, n)
    kept = np.arange(n)
    degenerate = None
    charges = dict(zip(NAMES, rows, strict=True))
    if name == "plain":
        family, log_prior = Microstates(charges), np.zeros(n)
    elif name == "log_weights":
        weights[4] = -np.inf  # a state that does not exist
        kept = np.delete(kept, 4)
        family, log_prior, degenerate = Microstates(charges, log_weights=weights), weights[kept], weights[kept]
    else:
        family, log_prior = Microstates(charges, log_prior=weights), weights
    dense = Dense(_diagonal(rows[:, kept]), np.diag(log_prior[: len(kept)]))

    def observable(rng: np.random.Generator) -> tuple[Any, np.ndarray]:
        x = rng.standard_normal(n)
        return x, np.diag(x[kept])

    return Example(f"microstates-{name}", family, dense, 3, observable, degenerate)


def _plain_observable(d: int, *, is_complex: bool) -> Callable:
    def observable(rng: np.random.Generator) -> tuple[Any, np.ndarray]:
        x = random_hermitian(rng, d, is_complex=is_complex)
        return x, x

    return observable


def _plateau(rng: np.random.Generator, levels: list[float], *, is_complex: bool) -> np.ndarray:
    u = random_unitary(rng, len(levels), is_complex=is_complex)
    a = (u * np.array(levels)) @ u.conj().T
    return (a + a.conj().T) / 2


def _matrices(name: str) -> Example:
    rng = np.random.default_rng(12)
    d, is_complex = 6, name in ("complex", "basis")
    levels = [0, 0, 1, 2, 3, 3.5]
    stack = np.array(
        [_plateau(rng, levels, is_complex=is_complex), *(random_hermitian(rng, d, is_complex=is_complex) for _ in "ab")]
    )
    charges = dict(zip(NAMES, stack, strict=True))
    log_prior = random_hermitian(rng, d) if name == "log_prior" else np.zeros((d, d))
    observable = _plain_observable(d, is_complex=True)
    if name == "log_prior":
        family = Matrices(charges, log_prior=log_prior)
    elif name == "basis":
        basis = random_unitary(rng, 8, is_complex=True)[:, :d]
        family = Matrices(charges, basis=basis, dims=(2, 4))

        def observable(rng: np.random.Generator) -> tuple[Any, np.ndarray]:
            x = random_hermitian(rng, 8, is_complex=True)
            return x, basis.conj().T @ x @ basis

    else:
        family = Matrices(charges, dims=(2, 3))
    return Example(f"matrices-{name}", family, Dense(stack, log_prior), 2, observable)


def _commuting() -> Example:
    rng = np.random.default_rng(13)
    d = 6
    u = random_unitary(rng, d, is_complex=True)
    rows = np.array([[0, 0, 1, 2, 3, 3.5], rng.standard_normal(d), rng.standard_normal(d)])
    stack = np.array([(u * r) @ u.conj().T for r in rows])
    stack = (stack + stack.conj().transpose(0, 2, 1)) / 2
    family = Matrices(dict(zip(NAMES, stack, strict=True)), dims=(2, 3))
    return Example(
        "matrices-commuting", family, Dense(stack, np.zeros((d, d))), 2, _plain_observable(d, is_complex=True)
    )


def _blocks(*, has_prior: bool) -> Example:
    """A loose state, a commuting block, a real block and a complex one, shuffled; sparse input."""
    rng = np.random.default_rng(14)
    u = random_unitary(rng, 2)
    commuting = [(u * np.array(r)) @ u.T for r in ([0, 1.0], [1.0, -1.0], [0.3, 0.8])]
    real = [_plateau(rng, [0, 1.5, 2], is_complex=False), random_hermitian(rng, 3), random_hermitian(rng, 3)]
    other = [_plateau(rng, [0, 0.5, 2], is_complex=True), *(random_hermitian(rng, 3, is_complex=True) for _ in "ab")]
    loose = [0.7, -1.1, 0.4]
    pieces = [[np.array([[x]]), a, b, c] for x, a, b, c in zip(loose, commuting, real, other, strict=True)]
    stack = np.array([sp.block_diag(p).toarray() for p in pieces])
    order = rng.permutation(9)
    stack = stack[:, order][:, :, order]
    stack = (stack + stack.conj().transpose(0, 2, 1)) / 2
    charges = {n: sp.csr_array(q) for n, q in zip(NAMES, stack, strict=True)}
    log_prior = np.zeros((9, 9))
    if has_prior:  # couples nothing new
        parts = [[[0.4]], np.array([[0.5, 0.2], [0.2, -0.3]]), random_hermitian(rng, 3), random_hermitian(rng, 3)]
        log_prior = sp.block_diag(parts).toarray()[order][:, order]
    family = Matrices(charges, dims=(3, 3), log_prior=sp.csr_array(log_prior) if has_prior else None)
    name = "matrices-blocks-prior" if has_prior else "matrices-blocks"
    return Example(name, family, Dense(stack, log_prior), 3, _plain_observable(9, is_complex=True))


def _modes(name: str) -> Example:
    """Five copies of levels as the 32 states of their occupations; charge 0 does not see two of them."""
    rng = np.random.default_rng(15)
    copies = [1, 1, 1, 2] if name == "degenerate" else [1, 1, 1, 1, 1]
    plateau = [0, 0, 1.0, 1.5] if name == "degenerate" else [0, 0, 1.0, 1.5, 2.0]
    rows = np.array([plateau, rng.standard_normal(len(copies)), rng.standard_normal(len(copies))])
    constant = np.array([0.0, 0.4, -1.3]) if name == "degenerate" else np.zeros(3)
    counts = (np.arange(32)[None, :] >> np.arange(5)[:, None]) & 1
    one = np.repeat(rows, copies, axis=1)
    dense = Dense(_diagonal(one @ counts + constant[:, None]), np.zeros((32, 32)))
    constants = dict(zip(NAMES, constant, strict=True))
    family = Modes(dict(zip(NAMES, rows, strict=True)), degeneracy=copies, constants=constants)

    def observable(rng: np.random.Generator) -> tuple[Any, np.ndarray]:
        x = rng.standard_normal(len(copies))
        return x, np.diag(np.repeat(x, copies) @ counts)

    return Example(f"modes-{name}", family, dense, 4, observable)


def many_body(h: np.ndarray, pairing: np.ndarray | None = None, constant: float = 0.0) -> np.ndarray:
    """A quadratic operator of n modes as a (2^n, 2^n) matrix, mode 0 the slowest index, 1 = occupied."""
    n = len(h)
    g = majorana_operators(n)
    c = [(0.5 * (g[2 * j] + 1j * g[2 * j + 1])).toarray() for j in range(n)]
    total = constant * np.eye(1 << n, dtype=complex)
    for a in range(n):
        for b in range(n):
            total += h[a, b] * c[a].conj().T @ c[b]
            if pairing is not None:
                pair = 0.5 * pairing[a, b] * c[a].conj().T @ c[b].conj().T
                total += pair + pair.conj().T
    return total


def random_pairing(rng: np.random.Generator, n: int) -> np.ndarray:
    """A complex antisymmetric matrix."""
    d = rng.standard_normal((n, n)) + 1j * rng.standard_normal((n, n))
    return (d - d.T) / 2


def _bilinears(name: str) -> Example:
    """Four modes as their 16 states; charge 0 has two levels at zero, in a frame of its own."""
    rng = np.random.default_rng(16)
    n, is_paired = 4, name == "paired"
    matrices = [
        _plateau(rng, [0, 0, 1, 1.5], is_complex=True),
        *(0.4 * random_hermitian(rng, n, is_complex=True) for _ in "ab"),
    ]
    pairings = [None, 0.4 * random_pairing(rng, n), 0.4 * random_pairing(rng, n)] if is_paired else [None] * 3
    given = [(h, d, c) for h, d, c in zip(matrices, pairings, [0.0, 0.4, -1.3], strict=True)]
    dense = Dense(np.array([many_body(*q) for q in given]), np.zeros((16, 16)))

    def observable(rng: np.random.Generator) -> tuple[Any, np.ndarray]:
        x = random_hermitian(rng, n, is_complex=True), random_pairing(rng, n), 0.0
        return x, many_body(*x)

    return Example(f"bilinears-{name}", Bilinears(dict(zip(NAMES, given, strict=True))), dense, 4, observable)


#: Families of levels rather than of states.
LEVELS = (Modes, Bilinears)


def states_of(family: Any) -> int:
    """Number of states of a family; the size of families of levels is the number of places for one fermion."""
    return 2**family.size if isinstance(family, LEVELS) else family.size


def examples() -> list[Example]:
    """Every family in every form it can take."""
    return [
        *(_microstates(n) for n in ("plain", "log_weights", "log_prior")),
        _commuting(),
        *(_matrices(n) for n in ("real", "complex", "log_prior", "basis")),
        _blocks(has_prior=False),
        _blocks(has_prior=True),
        *(_modes(n) for n in ("plain", "degenerate")),
        *(_bilinears(n) for n in ("plain", "paired")),
    ]
