"""Operators as users hand them in: checked, made Hermitian to the last bit, kept sparse when they came sparse.

Floor: families.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy.sparse as sp

__all__ = ["check_size", "checked_basis", "checked_dims", "operator_matrix", "to_csr"]

#: Largest relative deviation from Hermiticity that is taken for rounding.
HERMITIAN = 1e-12
#: Sizes between which products of a charge with itself and with rounding units stay in range.
SMALLEST, LARGEST = 1e-305, 1e305


def to_csr(q: Any) -> sp.csr_array:
    """CSR form of a dense or sparse matrix; sparse input is copied only when it is in another format."""
    return sp.csr_array(q)


def operator_matrix(value: Any, label: str) -> Any:
    """A square Hermitian matrix of finite numbers, dense (ndarray) or CSR.

    Parameters
    ----------
    value : (d, d) array_like or scipy.sparse
    label : str
        Name for messages, such as "charge 'energy'".

    Raises
    ------
    TypeError
        Not numeric.
    ValueError
        Not a square matrix, not finite, or not Hermitian to 1e-12 of its largest entry.
    """
    sparse = sp.issparse(value)
    q: Any = sp.csr_array(value) if sparse else np.asarray(value)
    if q.dtype == object or not (np.issubdtype(q.dtype, np.number) or q.dtype == bool):
        raise TypeError(f"{label} must be a matrix of numbers, not of {q.dtype}")
    if q.ndim != 2 or q.shape[0] != q.shape[1]:
        raise ValueError(f"{label} must be a square matrix, not of shape {q.shape}")
    q = q.astype(complex if np.issubdtype(q.dtype, np.complexfloating) else float)
    if sparse and not q.has_canonical_format:  # the user's own matrix stays as it is
        q = q.copy()
        q.sum_duplicates()
    entries: Any = q.data if sparse else q
    if not np.all(np.isfinite(entries)):
        raise ValueError(f"{label} has NaN or infinite entries")
    if np.iscomplexobj(q) and not entries.imag.any():
        q = q.real if sparse else np.ascontiguousarray(q.real)
    adjoint: Any = q.conj().T
    difference = q - adjoint
    size = np.abs(entries).max(initial=0.0)
    check_size(size, label)
    off = np.abs(difference.data).max(initial=0.0) if sparse else np.abs(difference).max(initial=0.0)
    if off > HERMITIAN * size:
        raise ValueError(f"{label} is not Hermitian: |Q - Q^H| is {off:.1e} where |Q| is {size:.1e}")
    if off == 0.0:
        return q
    return 0.5 * (q + adjoint.tocsr()) if sparse else 0.5 * (q + adjoint)


def check_size(size: float, label: str) -> None:
    """Refuse charges whose squares under- or overflow; the message says what to do.

    Raises
    ------
    ValueError
    """
    if size and not SMALLEST <= size <= LARGEST:
        raise ValueError(f"{label} is of size {size:.1e}, not in {SMALLEST:.0e}..{LARGEST:.0e}: take other units")


def checked_basis(value: Any) -> Any:
    """A (D, d) matrix with orthonormal columns, dense or CSR."""
    b = sp.csr_array(value) if sp.issparse(value) else np.asarray(value)
    if b.ndim != 2 or b.dtype == object:
        raise ValueError("basis must be a (D, d) matrix whose columns are states")
    gram = b.conj().T @ b
    off = (gram - sp.eye_array(b.shape[1])).data if sp.issparse(gram) else gram - np.eye(b.shape[1])
    error = np.abs(off).max(initial=0.0)
    if not error <= 1e-10:
        raise ValueError(f"basis has columns that are not orthonormal: |B^H B - 1| is {error:.1e}")
    return b


def checked_dims(value: Any) -> tuple[int, ...]:
    """Site dimensions as positive integers."""
    dims = tuple(value)
    if not dims or any(not isinstance(d, int | np.integer) or isinstance(d, bool) or d < 1 for d in dims):
        raise ValueError(f"dims must be positive integers, one per site, not {value!r}")
    return tuple(int(d) for d in dims)
