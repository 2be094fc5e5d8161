"""Truth for the proofs: rational elimination on the float64 numbers themselves, and eigenvalues to 60 digits."""

from fractions import Fraction

import mpmath
import numpy as np


def rational(matrix):
    """A Hermitian float64 matrix as fractions; complex ones as the real symmetric matrix of twice the size."""
    a = np.asarray(matrix)
    if np.iscomplexobj(a):
        a = np.block([[a.real, -a.imag], [a.imag, a.real]])
    return [[Fraction(x) for x in row] for row in a.tolist()]


def combination(v, matrices):
    """``sum_j v_j Q_j`` in fractions."""
    kind = np.result_type(*matrices)
    exact = [rational(np.asarray(q, kind)) for q in matrices]
    weights = [Fraction(float(x)) for x in v]
    d = len(exact[0])
    return [
        [sum((w * q[i][j] for w, q in zip(weights, exact, strict=True)), Fraction(0)) for j in range(d)]
        for i in range(d)
    ]


def is_positive_semidefinite(a, shift):
    """Whether ``a - shift 1 >= 0``, by symmetric elimination without a rounding."""
    rows = [list(row) for row in a]
    for i in range(len(rows)):
        rows[i][i] -= shift
    for k in range(len(rows)):
        pivot = rows[k][k]
        if pivot < 0 or (pivot == 0 and any(rows[i][k] != 0 for i in range(k + 1, len(rows)))):
            return False
        for i in range(k + 1, len(rows) if pivot else k):
            if rows[i][k]:
                factor = rows[i][k] / pivot
                rows[i][k:] = [x - factor * y for x, y in zip(rows[i][k:], rows[k][k:], strict=True)]
    return True


def smallest_eigenvalue(a):
    """Smallest eigenvalue of a symmetric matrix of fractions, to 60 digits."""
    with mpmath.workdps(60):
        exact = mpmath.matrix([[mpmath.mpf(x.numerator) / x.denominator for x in row] for row in a])
        return min(mpmath.eigsy(exact, eigvals_only=True))


def dot(v, q):
    """``v.q`` in fractions."""
    return sum((Fraction(float(x)) * Fraction(float(y)) for x, y in zip(v, q, strict=True)), Fraction(0))
