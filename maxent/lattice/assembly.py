"""Sparse matrices from generalised diagonals, row block by row block, with the memory asked for first.

Floor: lattice (NumPy and SciPy). Must not know what the diagonals mean.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from maxent.memory import require_memory


def assemble(
    rule: Callable[[np.ndarray], tuple[np.ndarray, np.ndarray]],
    *,
    dim: int,
    most: int,
    dtype: np.dtype,
    count: int,
    chunk: int,
    scratch: int,
    what: str,
    limit: int | None,
) -> Any:
    """Put a matrix together.

    Parameters
    ----------
    rule : callable
        Gives, for rows (n,), the columns and values (count, n) of all generalised diagonals there.
    dim, most : int
        Number of rows, and an upper bound of the stored entries.
    dtype : numpy.dtype
        Of the values.
    count, chunk, scratch : int
        Number of diagonals, rows at a time, and further bytes per row while at work.
    what : str
        Subject of the message when it does not fit, with `{need}`.
    limit : int or None
        Bytes that may be used; None: what is available.

    Returns
    -------
    scipy.sparse.csr_array, shape (dim, dim)
        Without explicit zeros, indices sorted.

    Raises
    ------
    ResourceError
        When it would not fit; nothing has been allocated then.
    """
    wide = max(dim, most) >= 2**31
    index = np.dtype(np.int64 if wide else np.int32)
    rows_at_once = min(dim, chunk)
    entry = dtype.itemsize + index.itemsize
    need = most * entry + (dim + 1) * index.itemsize + rows_at_once * (count * (entry + 1) * 2 + scratch)
    require_memory(need, what, limit=limit)

    import scipy.sparse  # a config with a wrong formula should not wait for it

    data, columns = np.empty(most, dtype), np.empty(most, index)
    starts = np.zeros(dim + 1, index)
    filled = 0
    for first in range(0, dim, rows_at_once):
        rows = np.arange(first, min(first + rows_at_once, dim))
        sources, values = rule(rows)
        kept = np.ascontiguousarray((values != 0).T)
        found = int(np.count_nonzero(kept))
        data[filled : filled + found] = values.T[kept]
        columns[filled : filled + found] = sources.T[kept]
        starts[first + 1 : first + 1 + len(rows)] = filled + np.cumsum(kept.sum(axis=1))
        filled += found
    matrix = scipy.sparse.csr_array((data[:filled], columns[:filled], starts), shape=(dim, dim))
    matrix.sort_indices()
    return matrix
