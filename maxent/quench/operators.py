"""Operators as the quench floor takes them: sums of words or matrices, their norms and their lowest and highest values.

Floor: quench.  Must not know states.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy.sparse as sp
import scipy.sparse.linalg as spla

from maxent.families.operators import operator_matrix
from maxent.lattice.terms import OperatorSum

__all__ = ["as_matrix", "extremes", "frobenius", "largest_row_sum", "site_dims", "traceless_norm", "without_dirt"]

#: Up to this size all eigenvalues are computed when two of them are asked for.
SMALL = 512
#: Entries of a conjugated matrix below this fraction of its largest are rounding.
DIRT = 1e-12


def as_matrix(value: Any, label: str) -> Any:
    """Hermitian matrix, dense or CSR, of an OperatorSum or a matrix.

    Parameters
    ----------
    value : OperatorSum or (d, d) array_like or scipy.sparse
    label : str
        Name for messages, such as "the Hamiltonian".

    Raises
    ------
    TypeError, ValueError
        Not a Hermitian matrix of finite numbers; names the operator.
    """
    if isinstance(value, OperatorSum):
        word = value.non_hermitian_word
        if word is not None:
            raise ValueError(f"{label} is not Hermitian: the word {word}")
        value = value.matrix()
    return operator_matrix(value, label)


def site_dims(value: Any) -> tuple[int, ...] | None:
    """Dimensions of the sites of an OperatorSum; None for a matrix."""
    return tuple(value.sites.dims) if isinstance(value, OperatorSum) else None


def frobenius(q: Any) -> float:
    """Frobenius norm of a dense or sparse matrix."""
    return float(np.linalg.norm(q.data if sp.issparse(q) else q))


def traceless_norm(q: Any) -> float:
    """Frobenius norm of ``Q - (Tr Q/d) 1``; the mean is taken off the diagonal first, so that nothing cancels."""
    diagonal = q.diagonal()
    centred = diagonal - diagonal.mean()
    off = q - sp.diags_array(diagonal, format="csr") if sp.issparse(q) else q - np.diag(diagonal)
    return float(np.hypot(frobenius(off), np.linalg.norm(centred)))


def largest_row_sum(q: Any) -> float:
    """Largest sum of absolute values in a row: a bound on the operator norm."""
    return float(abs(q).sum(axis=1).max(initial=0.0)) if q.shape[0] else 0.0


def extremes(q: Any) -> tuple[float, float]:
    """Lowest and highest eigenvalue of a Hermitian matrix."""
    off = q - sp.diags_array(q.diagonal(), format="csr") if sp.issparse(q) else q - np.diag(q.diagonal())
    if frobenius(off) == 0.0:
        diagonal = np.real(q.diagonal())
        return float(diagonal.min()), float(diagonal.max())
    if q.shape[0] <= SMALL:
        values = np.linalg.eigvalsh(q.toarray() if sp.issparse(q) else q)
        return float(values[0]), float(values[-1])
    first = np.random.default_rng(0).standard_normal(q.shape[0])
    ends = [
        float(spla.eigsh(q, k=1, which=which, v0=first, return_eigenvectors=False, tol=1e-12)[0])
        for which in ("SA", "LA")
    ]
    return ends[0], ends[1]


def without_dirt(q: Any) -> Any:
    """CSR matrix without the entries that rounding left when it was conjugated."""
    q = sp.csr_array(q)
    q.data[np.abs(q.data) <= DIRT * np.abs(q.data).max(initial=0.0)] = 0.0
    q.eliminate_zeros()
    if np.iscomplexobj(q) and not q.data.imag.any():
        q = q.real
    return q
