"""A ball of targets that can be reached, proved from any approximate state.

Theorem.  Let F be any matrix, T any real (m, m) matrix, G_1 .. G_m any Hermitian matrices, and

    A_a = sum_l T_al (Q_l - q_l 1),   B_ab = Tr F^H A_a F G_b,   k_a = Tr F^H A_a F,
    t = Tr F^H F,   g_b = Tr F^H F G_b,   R^2 = |sum_b G_b^2| .

Then every q' with ``|T (q' - q)| < r = (1 - |B - 1| - R |k|)/(R t + |g|)`` is the vector of values of a state, if
r > 0.  (Norms are operator and Euclidean norms.)

Proof.  Put delta = T (q' - q).  The matrix ``B - delta g^T`` is within ``eta = |B - 1| + |delta| |g| < 1`` of the
identity, so ``(B - delta g^T) y = delta t - k`` has a solution with ``|y| <= (|delta| t + |k|)/(1 - eta)``, and
``|sum_b y_b G_b| <= |y| R < 1``.  Hence ``sigma = F (1 + sum_b y_b G_b) F^H`` is positive and not zero, and by the
choice of y ``Tr sigma (A_a - delta_a) = 0``, that is ``T Tr sigma (Q - q') = 0``.  T is invertible since B is T times a
square matrix and ``|B - 1| < 1``; so ``sigma/Tr sigma`` has the values q'.

With a ball around q reachable, q is an interior point, the dual has a minimiser, and the multipliers exist.  F is taken
from the eigenvectors and probabilities of the state found, G from the charges in its eigenbasis, T such that B is close
to 1; how well they were computed decides how large r is, never whether the statement holds.  Floor: diagnose.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np
import scipy.linalg as sla

from maxent.diagnose.proofs.bounds import TINY, UNIT, above, below, gamma, matrix_norm
from maxent.diagnose.proofs.combine import dense

__all__ = ["Part", "Sums", "ball", "reachable_ball"]


@dataclass(frozen=True)
class Part:
    """Charges on one part of the space and an approximate state there.

    Attributes
    ----------
    charges : (m, n) ndarray, or sequence of m Hermitian (d, d) ndarrays or CSR
        Numbers on n states, or a block.
    weights : (n,) ndarray
        Probabilities.
    vectors : (d, n) ndarray or None
        Eigenvectors of a block; None for numbers.
    """

    charges: Any
    weights: np.ndarray
    vectors: np.ndarray | None = None


@dataclass
class Sums:
    """B, k, t, g of a theorem in float64, what rounding may add to B and k, and R^2."""

    overlap: np.ndarray
    overlap_error: np.ndarray
    residual: np.ndarray
    residual_error: np.ndarray
    trace: float = 0.0
    means: Any = 0.0
    square: Fraction = Fraction(0)


def reachable_ball(parts: Sequence[Part], targets: np.ndarray, accuracy: np.ndarray) -> tuple[Fraction, bool] | None:
    """Radius of a ball of reachable targets around `targets`, Euclidean in the user's charges.

    Parameters
    ----------
    parts : sequence of Part
        Together they hold the state.
    targets, accuracy : (m,) ndarrays

    Returns
    -------
    radius : Fraction
    covers : bool
        Whether all targets within the stated accuracy are proved, too.

    None when nothing can be proved.
    """
    return ball(lambda transform: _evaluate(parts, targets, transform), accuracy)


def ball(evaluate: Callable[[np.ndarray], Sums], accuracy: np.ndarray) -> tuple[Fraction, bool] | None:
    """The ball that the sums of a transform T prove, with a T that makes B close to 1; as `reachable_ball`."""
    m = len(accuracy)
    transform = np.eye(m)
    with np.errstate(all="ignore"):
        for attempt in range(3):
            # again: the first whitening of nearly dependent charges is only as good as their covariance
            sums = evaluate(transform)
            symmetric = 0.5 * (sums.overlap + sums.overlap.T)
            if not np.isfinite(symmetric).all():
                return None
            if attempt == 2 or np.abs(symmetric - np.eye(m)).max(initial=0.0) < 1e-3:
                break
            size = np.sqrt(np.abs(np.diag(symmetric)))
            if not np.all(size > 0):
                return None
            try:
                factor = np.linalg.cholesky(symmetric / np.outer(size, size))
            except np.linalg.LinAlgError:
                return None
            transform = sla.solve_triangular(factor, transform / size[:, None], lower=True, check_finite=False)
        reach = _reach(sums, m)
    if reach is None or reach <= 0:
        return None
    stretched = _length(np.abs(transform) @ accuracy) * (1 + gamma(m + 4)) + m * m * TINY
    return reach / _stretch(transform), stretched < reach


def _length(x: np.ndarray) -> Fraction:
    """Upper bound of the Euclidean norm of all entries."""
    top = float(np.abs(x).max(initial=0.0))
    if top == 0.0:
        return Fraction(0)
    scaled = np.abs(x) / top
    root = Fraction(float(np.sqrt(np.sum(scaled * scaled)))) * (1 + gamma(x.size + 8))
    return root * Fraction(top)


def _stretch(transform: np.ndarray) -> Fraction:
    """Upper bound of the operator norm: Frobenius, or ``sqrt(|T|_1 |T|_inf)``."""
    size, m = np.abs(transform), len(transform)
    sums = Fraction(float(size.sum(axis=0).max())) * Fraction(float(size.sum(axis=1).max())) * (1 + gamma(2 * m + 4))
    root = Fraction(float(np.sqrt(above(sums)))) * (1 + gamma(4))
    return min(_length(transform), root)


def _reach(sums: Sums, m: int) -> Fraction | None:
    """The radius r of the theorem."""
    numbers = (sums.overlap, sums.overlap_error, sums.residual, sums.residual_error, sums.means, sums.trace)
    if not all(np.isfinite(x).all() for x in numbers):
        return None
    off = _length(np.abs(sums.overlap - np.eye(m)) + sums.overlap_error) * (1 + 4 * UNIT)
    rest = _length(np.abs(sums.residual) + sums.residual_error) * (1 + 4 * UNIT)
    spread = Fraction(above(Fraction(float(np.sqrt(above(sums.square)))) * (1 + 2 * UNIT)))
    below_line = spread * Fraction(sums.trace) + _length(np.asarray(sums.means))
    if not below_line:
        return None
    return Fraction(below((1 - off - spread * rest) / below_line))


def _evaluate(parts: Sequence[Part], targets: np.ndarray, transform: np.ndarray) -> Sums:
    m = len(targets)
    sums = Sums(np.zeros((m, m)), np.zeros((m, m)), np.zeros(m), np.zeros(m), 0.0, np.zeros(m))
    for part in parts:
        if part.vectors is None:
            _add_numbers(sums, part, targets, transform, len(parts))
        else:
            _add_block(sums, part, targets, transform, len(parts))
    lost = 1 + float(gamma(4 * len(parts) + 16))
    sums.overlap_error, sums.residual_error = lost * sums.overlap_error, lost * sums.residual_error
    sums.means = lost * sums.means
    return sums


def _add_numbers(sums: Sums, part: Part, targets: np.ndarray, transform: np.ndarray, count: int) -> None:
    """States that carry numbers: F, A and G are diagonal, and F^H F = p."""
    p, f = part.weights, part.charges
    if not len(p):
        return
    m, n = f.shape
    a = transform @ (f - targets[:, None])
    size = np.abs(transform) @ (np.abs(f) + np.abs(targets)[:, None])
    rate, tiny = float(gamma(4 * n + 4 * m + 4 * count + 32)), float(2 * n * (m + 8) * TINY)
    heavy = size * p
    sums.overlap += (a * p) @ a.T
    sums.overlap_error += rate * (heavy @ np.abs(a).T) + tiny
    sums.residual += a @ p
    sums.residual_error += rate * heavy.sum(axis=1) + tiny
    sums.trace = _more(sums.trace, float(p.sum()), n)
    sums.means = sums.means + (np.abs(a @ p) + rate * (np.abs(a) @ p) + tiny)
    heights = (a * a).sum(axis=0)
    sums.square = max(sums.square, Fraction(float(heights.max())) * (1 + gamma(m + 8)) + m * TINY)


def _add_block(sums: Sums, part: Part, targets: np.ndarray, transform: np.ndarray, count: int) -> None:
    """A block: F = V sqrt(w), G = V^H A V as it comes out, made Hermitian to the last bit."""
    vectors = part.vectors
    assert vectors is not None
    m, (d, n) = len(targets), vectors.shape
    charges = [dense(q) for q in part.charges]
    half = vectors * np.sqrt(part.weights)
    sizes = np.abs(half)
    i = np.arange(d)
    turned, weighted, moduli = [], [], []
    for row in transform:
        a, size = np.zeros((d, d), charges[0].dtype), np.zeros((d, d))
        for x, q, target in zip(row, charges, targets, strict=True):
            if x:
                a = a + x * q
                a[i, i] -= x * target
                size += abs(x) * np.abs(q)
                size[i, i] += abs(x * target)
        g = vectors.conj().T @ (a @ vectors)
        turned.append(0.5 * (g + g.conj().T))
        weighted.append(half.conj().T @ (a @ half))
        moduli.append(sizes.T @ (size @ sizes))
    # forming A (2 m roundings), two complex products (each sqrt 2 gamma_2d), the final sum over n^2 complex
    # entries and that over the parts
    rate = float(gamma(8 * (d + m + 16) + 8 * n * n + 4 * count))
    tiny = float(16 * n * n * (d + m + 8) * TINY)
    gram, gram_size = half.conj().T @ half, sizes.T @ sizes
    square, square_size = np.zeros((n, n), turned[0].dtype), np.zeros((n, n))
    for b, g in enumerate(turned):
        modulus = np.abs(g)
        for j in range(m):
            sums.overlap[j, b] += float(np.real(np.vdot(g, weighted[j])))
            sums.overlap_error[j, b] += rate * float(np.sum(moduli[j] * modulus)) + tiny
        mean = abs(float(np.real(np.vdot(g, gram)))) + rate * float(np.sum(gram_size * modulus)) + tiny
        sums.means[b] = sums.means[b] + mean
        square, square_size = square + g @ g, square_size + modulus @ modulus
    for j in range(m):
        sums.residual[j] += float(np.real(np.trace(weighted[j])))
        sums.residual_error[j] += rate * float(np.trace(moduli[j])) + tiny
    sums.trace = _more(sums.trace, float(np.sum(sizes * sizes)), n * d)
    bound = np.abs(square) + rate * square_size + tiny
    bound = np.maximum(bound, bound.T)
    sums.square = max(sums.square, matrix_norm(bound.__matmul__, n, n + 16))


def _more(total: float, added: float, roundings: int) -> float:
    """Upper bound of a sum of positive numbers."""
    return float(np.nextafter(total + added * (1 + float(gamma(2 * roundings + 16))), np.inf))
