"""Kind `operators`: a finite Hilbert space, each charge a Hermitian matrix from a file or from the config.

Floor: app/kinds.
Must not know: lattices, the command line, the report.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from math import prod
from pathlib import Path as File
from typing import Any, cast

import numpy as np

from maxent.app.data import Files
from maxent.app.job import ACCURACY, STRICT, TARGET, Job, Problems, Room, check_target, given_target, says
from maxent.app.kinds._building import build_family
from maxent.app.kinds._thermodynamics import THERMODYNAMICS, Thermodynamics, check_roles, roles
from maxent.text import number, plural

__all__ = ["Options", "build"]


@dataclass(frozen=True)
class Options:
    """Keys of a config of kind `operators`."""

    __pydantic_config__ = STRICT

    charges: dict[str, list[list[float | str]] | str] = field(
        metadata=says(
            "Name of a charge -> a Hermitian matrix: rows of numbers, or a file. "
            'Complex numbers are written as text, `"1+2j"`.'
        )
    )
    targets: dict[str, float | Room] = field(metadata=says(f"Name of a charge -> the mean asked for. {TARGET}"))
    accuracy: dict[str, float] = field(
        default_factory=dict,
        metadata=says(ACCURACY),
    )
    dims: list[int] | None = field(
        default=None,
        metadata=says("Dimensions of the parts of the space, first one slowest; their product is the dimension."),
    )
    log_prior: list[list[float | str]] | str | None = field(
        default=None,
        metadata=says("A Hermitian matrix, the log of the prior state up to a constant; rows, or a file."),
    )
    predictions: dict[str, list[list[float | str]] | str] = field(
        default_factory=dict,
        metadata=says("Name -> a further Hermitian matrix whose mean is wanted: rows, or a file."),
    )
    thermodynamics: Thermodynamics | None = field(default=None, metadata=says(THERMODYNAMICS))


def build(options: Options, folder: File) -> Job:
    """Build the job that the options describe.

    Parameters
    ----------
    options : Options
    folder : pathlib.Path
        Where relative file names start.

    Returns
    -------
    Job

    Raises
    ------
    BadInput
        With all problems at once.
    """
    problems = Problems()
    files = Files(folder)

    def read(path: tuple[str, ...], value: Any) -> Any:
        try:
            matrix = files.read(value) if isinstance(value, str) else _inline(value)
            return _checked(matrix)
        except ValueError as bad:
            problems.add(path, str(bad))
            return None

    charges = {name: read(("charges", name), value) for name, value in options.charges.items()}
    predictions = {name: read(("predictions", name), value) for name, value in options.predictions.items()}
    prior = None if options.log_prior is None else read(("log_prior",), options.log_prior)
    every: dict[tuple[str, ...], Any] = {("charges", name): matrix for name, matrix in charges.items()}
    every |= {("predictions", name): matrix for name, matrix in predictions.items()}
    every |= {("log_prior",): prior}
    size, first = 0, ""
    for path, matrix in every.items():
        if matrix is None:
            continue
        if not size:
            size, first = matrix.shape[0], ".".join(path)
        elif matrix.shape[0] != size:
            problems.add(path, f"is {matrix.shape[0]} x {matrix.shape[0]}, but {first} is {size} x {size}")
    if options.dims is not None:
        if any(d < 1 for d in options.dims):
            problems.add(("dims",), "dimensions must be positive")
        elif size and prod(options.dims) != size:
            problems.add(
                ("dims",),
                f"the product of the dimensions is {prod(options.dims)}, but {first} is {size} x {size}",
            )
    check_roles(options.thermodynamics, charges, problems, prior=prior is not None)
    for name, given in options.targets.items():
        check_target(("targets", name), given, problems)
    problems.raise_any()
    facts = {"space": f"dimension {size}" + (f" = {' x '.join(map(str, options.dims))}" if options.dims else "")}
    if prior is not None:
        facts["prior"] = "given; the state is pulled towards it"
    if files.digests:
        facts["files"] = plural(len(files.digests), "file") + " read: " + ", ".join(files.digests)
    from maxent.families.matrices import Matrices

    dims = None if options.dims is None else tuple(options.dims)
    family = build_family(lambda: Matrices(charges, dims=dims, log_prior=prior), charges)
    targets = {name: given_target(options.targets[name], options.accuracy.get(name, 0.0)) for name in charges}
    known = None if prior is not None else roles(options.thermodynamics, charges)
    return Job(family, targets, predictions, facts, digests=files.digests, roles=known)


def _inline(rows: list[list[float | str]]) -> np.ndarray:
    """Turn rows of numbers and complex numbers written as text into a matrix."""
    if not rows or any(len(row) != len(rows) for row in rows):
        raise ValueError(f"not square: {plural(len(rows), 'row')} of lengths {sorted({len(r) for r in rows})}")
    out = np.zeros((len(rows), len(rows)), dtype=complex)
    for i, row in enumerate(rows):
        for k, entry in enumerate(row):
            try:
                out[i, k] = complex(entry.replace(" ", "")) if isinstance(entry, str) else entry
            except ValueError:
                raise ValueError(
                    f"row {i + 1}, column {k + 1}: {entry!r} is no number; complex ones look like '1+2j'"
                ) from None
    return out if out.imag.any() else out.real.copy()


def _checked(matrix: Any) -> Any:
    """Refuse what is no finite, square, Hermitian matrix of numbers; sparse matrices stay sparse."""
    from scipy import sparse

    if sparse.issparse(matrix):
        matrix = sparse.csr_array(cast(Any, matrix))
        entries = matrix.data
    else:
        matrix = np.asarray(matrix)
        entries = matrix
    if matrix.dtype.kind not in "iufc":
        raise ValueError(f"holds {matrix.dtype} entries; numbers are needed")
    if matrix.ndim != 2 or matrix.shape[0] != matrix.shape[1] or not matrix.shape[0]:
        raise ValueError(f"not a square matrix: shape {' x '.join(map(str, matrix.shape))}")
    if not np.isfinite(entries).all():
        raise ValueError("has entries that are not finite")
    if matrix.dtype.kind in "iu":
        matrix = matrix.astype(np.float64)
    size = float(abs(entries).max()) if entries.size else 0.0
    skew = float(abs(matrix - matrix.conj().T).max())
    if skew > 1e-12 * size:
        raise ValueError(f"not Hermitian: an entry differs from its mirror image by {number(skew, 3)}")
    return matrix
