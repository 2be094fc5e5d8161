"""Random ingredients of the corpus: charges, states, spins.  Plain NumPy, every draw from the generator
handed in."""

from __future__ import annotations

import functools

import numpy as np
from scipy.special import logsumexp

PAULI = {
    "1": np.eye(2),
    "x": np.array([[0, 1], [1, 0]], float),
    "y": np.array([[0, -1j], [1j, 0]]),
    "z": np.diag([1.0, -1.0]),
}


def unitary(rng, n: int, *, is_complex: bool = False) -> np.ndarray:
    """Random orthogonal (or unitary) matrix."""
    raw = rng.standard_normal((n, n))
    if is_complex:
        raw = raw + 1j * rng.standard_normal((n, n))
    q, r = np.linalg.qr(raw)
    phase = np.diag(r) / np.abs(np.diag(r))
    return q * phase


def hermitian(rng, d: int, *, is_complex: bool = False) -> np.ndarray:
    """Random traceless Hermitian matrix, standard deviation 1 of the eigenvalues (zero for d = 1)."""
    raw = rng.standard_normal((d, d))
    if is_complex:
        raw = raw + 1j * rng.standard_normal((d, d))
    h = (raw + raw.conj().T) / 2
    h = h - np.trace(h).real / d * np.eye(d)
    norm = np.linalg.norm(h)
    return h * (np.sqrt(d) / norm) if d > 1 else h


def tidy(matrix) -> np.ndarray:
    """Exactly Hermitian copy."""
    return (matrix + np.swapaxes(np.conj(matrix), -1, -2)) / 2


def rotate(matrices, u) -> np.ndarray:
    """u Q u^dagger for a stack (m, d, d)."""
    return tidy(np.array([u @ a @ u.conj().T for a in matrices]))


def values_in(charges, state) -> np.ndarray:
    """<Q_j> of a stack (m, d, d) in a density matrix, or (m, n) under probabilities."""
    if charges.ndim == 2:
        return charges @ state
    return np.einsum("aij,ji->a", charges, state).real


def gibbs(exponent) -> tuple[np.ndarray, float]:
    """State exp(-exponent)/Z and its entropy; a (d, d) Hermitian exponent or a (n,) real one."""
    if exponent.ndim == 1:
        logp = -exponent - logsumexp(-exponent)
        p = np.exp(logp)
        return p, float(-p @ logp)
    e, u = np.linalg.eigh(exponent)
    p, entropy = gibbs(e)
    return tidy((u * p) @ u.conj().T), entropy


def multipliers(rng, charges, width: float) -> np.ndarray:
    """Random multipliers for which lam.Q has spectral width `width`."""
    lam = rng.standard_normal(len(charges))
    h = np.tensordot(lam, charges, axes=1)
    e = h if h.ndim == 1 else np.linalg.eigvalsh(h)
    return lam * (width / np.ptp(e))


def probabilities(rng, k: int, floor: float = 0.3) -> np.ndarray:
    """Random distribution on k states, each at least floor/k."""
    p = rng.dirichlet(np.ones(k)) if k > 1 else np.ones(1)
    return floor / k + (1 - floor) * p


def spin(j: float) -> np.ndarray:
    """The three spin matrices of spin j, stack (3, 2j+1, 2j+1)."""
    m = np.arange(j, -j - 1, -1)
    plus = np.diag(np.sqrt(j * (j + 1) - m[1:] * (m[1:] + 1)), 1)
    return np.array([(plus + plus.T) / 2, (plus - plus.T) / 2j, np.diag(m)])


def pauli(word: str) -> np.ndarray:
    """Tensor product of Pauli matrices, for example pauli("xz1")."""
    return functools.reduce(np.kron, [PAULI[letter] for letter in word])


def on_site(letter: str, site: int, length: int) -> np.ndarray:
    """Spin-1/2 operator sigma/2 on one site of a chain."""
    word = ["1"] * length
    word[site] = letter
    return pauli("".join(word)) / 2


def coupling(letters: str, length: int) -> np.ndarray:
    """Sum over a ring of products of neighbouring spins: "xx", or three-site products such as "xyz"."""
    total = np.zeros((2**length, 2**length), complex)
    for i in range(length):
        term = np.eye(2**length)
        for offset, letter in enumerate(letters):
            term = term @ on_site(letter, (i + offset) % length, length)
        total = total + term
    return tidy(total)


def field_of(letter: str, length: int) -> np.ndarray:
    """Total spin component of a chain."""
    return sum(on_site(letter, i, length) for i in range(length))
