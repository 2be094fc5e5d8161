"""Start states: vectors and mixtures of vectors, ground and thermal states of another Hamiltonian, files.

A start is ``rho = sum_i w_i |psi_i><psi_i|`` with orthonormal or any normalised vectors in the product basis of the
sites.  Its means become targets, each with the accuracy that the calculation has.  Floor: quench.  Must not know which
Hamiltonian drives the dynamics.
"""

from __future__ import annotations

import math
import zipfile
import zlib
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import scipy.sparse as sp
import scipy.sparse.linalg as spla

from maxent.families.operators import HERMITIAN
from maxent.memory import require_memory
from maxent.quench.operators import as_matrix, extremes, largest_row_sum
from maxent.quench.spectrum import Spectrum
from maxent.text import plural

__all__ = ["Start", "ground_start", "read_array", "read_start", "thermal_start"]

EPS = float(np.finfo(float).eps)
#: Norms, traces and probabilities may be off by this much; within it they are set right and count as inaccuracy.
OFF = 1e-8
#: Levels closer than this fraction of the spectral width are one level.
EQUAL = 1e-10
#: A next level closer than this fraction of the spectral width is told to be close.
NEAR = 1e-7
#: Ground spaces up to this dimension are found one vector at a time.
MOST = 64


@dataclass(frozen=True, eq=False)
class Start:
    """Start state: vectors and their probabilities.

    Attributes
    ----------
    vectors : (d, k) ndarray
        Normalised, in the product basis of the sites.
    weights : (k,) ndarray
        Probabilities; they sum to 1.
    label : str
        What the state is, for tables.
    accuracy : float
        Estimated error of each vector, in norm.
    note : str
        What the reader must know about it, such as a degenerate ground space; empty otherwise.

    Examples
    --------
    >>> up = Start.from_vector([1, 0], label="up")
    >>> value, accuracy = up.mean([[1, 0], [0, -1]])
    >>> value, accuracy < 1e-14
    (1.0, True)
    """

    vectors: np.ndarray
    weights: np.ndarray
    label: str
    accuracy: float
    note: str = ""

    # ------------------------------------------------------------------ making

    @classmethod
    def from_vector(cls, vector: Any, *, label: str = "vector", accuracy: float = 0.0) -> Start:
        """Pure state.

        Parameters
        ----------
        vector : (d,) array_like or ProductState
        label : str, optional
        accuracy : float, optional
            Known error of the vector, in norm; rounding is added.

        Raises
        ------
        TypeError, ValueError
            Not a list of finite numbers, or a norm that differs from 1 by more than 1e-8.
        """
        size = 0
        if hasattr(vector, "vector"):  # a product state of whatever sites
            size, vector = vector.sites.size, vector.vector()
        v = _numbers(vector, f"start {label!r}")
        if v.ndim != 1 or not len(v):
            raise ValueError(f"start {label!r} must be a vector of amplitudes, not an array of shape {v.shape}")
        norm = float(np.linalg.norm(v))
        if abs(norm - 1.0) > OFF:
            raise ValueError(f"start {label!r} has norm {norm:.10g}, not 1: divide the amplitudes by their norm")
        error = accuracy + abs(norm - 1.0) + (2 + size) * EPS
        return cls((v / norm)[:, None], np.ones(1), label, error)

    @classmethod
    def mixture(cls, parts: Sequence[Start], weights: Any, *, label: str = "mixture") -> Start:
        """Starts mixed with probabilities.

        Parameters
        ----------
        parts : sequence of Start
        weights : (n,) array_like
            Probabilities of the parts.
        label : str, optional

        Raises
        ------
        TypeError, ValueError
            No parts, parts of different dimensions, or weights that are no probabilities.
        """
        w = _numbers(weights, "the weights of a mixture")
        if not len(parts) or w.shape != (len(parts),):
            raise ValueError(f"a mixture of {plural(len(parts), 'start')} needs as many weights, not shape {w.shape}")
        if np.iscomplexobj(w) or w.min() < 0 or abs(w.sum() - 1) > OFF:
            raise ValueError(f"the weights of a mixture must be probabilities: they sum to {w.sum():.10g}, "
                             f"the lowest is {np.real(w).min():.3g}")  # fmt: skip
        sizes = {p.label: p.dimension for p in parts}
        if len(set(sizes.values())) > 1:
            raise ValueError(
                "starts of a mixture have different dimensions: " + ", ".join(f"{k!r} {n}" for k, n in sizes.items())
            )
        share = w / w.sum()
        return cls(
            np.concatenate([p.vectors for p in parts], axis=1),
            np.concatenate([s * p.weights for s, p in zip(share, parts, strict=True)]),
            label,
            max(p.accuracy for p in parts) + abs(float(w.sum()) - 1.0),
            " ".join(p.note for p in parts if p.note),
        )

    @classmethod
    def from_density(cls, density: Any, *, label: str = "density matrix") -> Start:
        """Eigenvectors and probabilities of a density matrix.

        Parameters
        ----------
        density : (d, d) array_like or scipy.sparse
            Hermitian, not negative, of trace 1, each to 1e-8.
        label : str, optional

        Raises
        ------
        TypeError, ValueError
            Not a density matrix; says what it misses and by how much.
        ResourceError
            Its eigenvectors would not fit into memory.
        """
        if sp.issparse(density):
            _room(density.shape[0], f"start {label!r}")
            density = density.toarray()
        rho = _numbers(density, f"start {label!r}")
        if rho.ndim != 2 or rho.shape[0] != rho.shape[1] or not rho.size:
            raise ValueError(f"start {label!r} must be a square density matrix, not of shape {rho.shape}")
        _room(len(rho), f"start {label!r}")
        skew, size = float(np.abs(rho - rho.conj().T).max()), float(np.abs(rho).max())
        if skew > max(OFF * size, HERMITIAN):
            raise ValueError(f"start {label!r} is not Hermitian: |rho - rho^H| is {skew:.1e} where |rho| is {size:.1e}")
        trace = float(np.real(np.trace(rho)))
        if abs(trace - 1) > OFF:
            raise ValueError(f"start {label!r} has trace {trace:.10g}, not 1")
        p, v = np.linalg.eigh(0.5 * (rho + rho.conj().T))
        if p[0] < -OFF:
            raise ValueError(f"start {label!r} is no density matrix: its lowest eigenvalue is {p[0]:.3g}, below 0")
        keep = p > EPS * len(p) ** 0.5
        return cls(
            np.ascontiguousarray(v[:, keep]),
            p[keep] / p[keep].sum(),
            label,
            abs(trace - 1.0) + skew + max(-float(p[0]), 0.0) + EPS * len(p) ** 0.5,
        )

    # ------------------------------------------------------------------ asking

    @property
    def dimension(self) -> int:
        """Dimension d of the space."""
        return self.vectors.shape[0]

    @property
    def is_pure(self) -> bool:
        """Whether it is one vector."""
        return self.vectors.shape[1] == 1

    def mean(self, operator: Any) -> tuple[float, float]:
        """Expectation value and how accurate the calculation is.

        Parameters
        ----------
        operator : OperatorSum or (d, d) array_like or scipy.sparse
            Hermitian.

        Returns
        -------
        value, accuracy : float
            The accuracy adds what rounding does to the sums, and what the error of the vectors does to the mean: twice
            that error times the spread, plus its square times a bound on the norm.

        Raises
        ------
        TypeError, ValueError
            Not Hermitian, or of another dimension.
        """
        q = self._operator(operator)
        image = q @ self.vectors
        each = np.real(np.einsum("ik,ik->k", self.vectors.conj(), image))
        value = float(self.weights @ each)
        longest = int(np.diff(q.indptr).max(initial=0)) if sp.issparse(q) else q.shape[1]
        size = np.einsum("ik,ik->k", np.abs(self.vectors), abs(q) @ np.abs(self.vectors))
        rounding = EPS * (longest + math.log2(self.dimension + 1) + 2) * float(self.weights @ size)
        spread = math.sqrt(self._variance(image, value))
        return value, rounding + 2 * self.accuracy * spread + self.accuracy**2 * largest_row_sum(q)

    def variance(self, operator: Any) -> float:
        """Variance ``<Q^2> - <Q>^2``, summed as the mean of ``|(Q - <Q>) psi|^2``: never negative, nothing cancels."""
        q = self._operator(operator)
        image = q @ self.vectors
        mean = float(self.weights @ np.real(np.einsum("ik,ik->k", self.vectors.conj(), image)))
        return self._variance(image, mean)

    def spread(self, operator: Any) -> float:
        """Standard deviation of an operator in the start state."""
        return math.sqrt(self.variance(operator))

    def _variance(self, image: np.ndarray, mean: float) -> float:
        return float(self.weights @ np.sum(np.abs(image - mean * self.vectors) ** 2, axis=0))

    def _operator(self, operator: Any) -> Any:
        q = as_matrix(operator, "operator")
        if q.shape[0] != self.dimension:
            raise ValueError(f"the operator has dimension {q.shape[0]}, the start {self.label!r} {self.dimension}")
        return q


def ground_start(
    hamiltonian: Any, *, label: str = "ground state", rtol: float = EQUAL, most: int = MOST
) -> Start:
    """Ground state of a Hamiltonian, in general another one than that of the dynamics.

    Levels within `rtol` of the spectral width above the lowest are one degenerate level; the start is then the equal
    mixture of the whole ground space, since no vector in it is distinguished, and its note says so, with the distance
    of the levels where it is more than rounding. Levels further apart are told apart, and the lowest is taken alone.

    Parameters
    ----------
    hamiltonian : OperatorSum or (d, d) array_like or scipy.sparse
    label : str, optional
    rtol : float, optional
    most : int, optional
        Largest ground space looked for in spaces of more than 512 dimensions.

    Returns
    -------
    Start
        With the energy, the degeneracy and the distance to the next level in its note.

    Raises
    ------
    TypeError, ValueError
        Not Hermitian, or a ground space of more than `most` states.

    Notes
    -----
    A Krylov space of one vector holds one vector of a degenerate level, so the vectors are found one after the other:
    those found are shifted above the spectrum, until the lowest level left lies higher.
    """
    q = as_matrix(hamiltonian, "the Hamiltonian of the start")
    low, high = extremes(q)
    width = high - low
    tolerance = max(rtol * width, 4 * EPS * max(abs(low), abs(high)))
    if q.shape[0] <= 512:
        energies, every = np.linalg.eigh(q.toarray() if sp.issparse(q) else q)
        n = int(np.sum(energies <= energies[0] + tolerance))
        vectors, rest = every[:, :n], float(energies[n]) if n < len(energies) else None
    else:
        vectors, rest = _lowest_space(q, width, tolerance, most)
    image = q @ vectors
    levels = np.real(np.einsum("ik,ik->k", vectors.conj(), image))
    low = float(levels.min())
    n = vectors.shape[1]
    error = np.linalg.norm(image - low * vectors, axis=0).max()
    gap = None if rest is None else rest - low
    text = f"energy {low:.10g}"
    apart = float(levels.max()) - low
    if apart > 64 * EPS * max(abs(low), width):
        text = (
            f"the {n} lowest levels lie {apart:.2g} apart, {apart / width:.1g} of the width of the spectrum, and count "
            f"as one: taken as their equal mixture; {text}"
        )
    elif n > 1:
        text = f"{n}-fold degenerate ground space, taken as the equal mixture of all of it; {text}"
    if gap is not None:
        text += f", next level {gap:.3g} higher"
        if gap < NEAR * width:
            taken = "the lowest vector alone was taken" if n == 1 else "it is not part of the mixture"
            text += f", only {gap / width:.1g} of the width of the spectrum: nearly degenerate, but {taken}"
    accuracy = EPS if gap is None else min(float(error) / gap + 2 * EPS, 1.0)
    return Start(np.ascontiguousarray(vectors), np.full(n, 1.0 / n), label, accuracy, f"{label}: {text}.")


def thermal_start(
    hamiltonian: Any, beta: float, *, basis: Any = None, label: str | None = None
) -> Start:
    """Thermal state ``exp(-beta H)/Z`` of a Hamiltonian, in general another one than that of the dynamics.

    Parameters
    ----------
    hamiltonian : OperatorSum or (d, d) array_like or scipy.sparse
    beta : float
        Inverse temperature, any sign.
    basis : (d, d) scipy.sparse, optional
        Symmetry basis in which the Hamiltonian falls into blocks.
    label : str, optional

    Raises
    ------
    TypeError, ValueError
        Not Hermitian, or beta not finite.
    ResourceError
        The eigenvectors would not fit into memory.

    Notes
    -----
    States whose probabilities sum to less than the rounding unit are left out.
    """
    if not isinstance(beta, int | float | np.number) or not math.isfinite(beta):
        raise ValueError(f"beta must be a finite number, not {beta!r}")
    q = as_matrix(hamiltonian, "the Hamiltonian of the start")
    spectrum = Spectrum(q, basis=basis)
    log_p = -float(beta) * spectrum.energies
    p = np.exp(log_p - log_p.max())
    p /= p.sum()
    order = np.argsort(p)
    keep = np.sort(order[np.cumsum(p[order]) > EPS])
    _room(spectrum.dimension, "the thermal start", len(keep), np.iscomplexobj(spectrum.basis))
    vectors = spectrum.vectors(keep)
    accuracy = EPS * (2 + abs(float(beta)) * max(abs(spectrum.energies.min()), abs(spectrum.energies.max())))
    name = f"thermal state at beta = {beta:g}" if label is None else label
    return Start(vectors, p[keep] / p[keep].sum(), name, accuracy)


def read_start(file: str | Path, *, label: str | None = None) -> Start:
    """Start from a file: `name.npy` or `name.npz:array`, a vector of amplitudes or a density matrix.

    Pickled objects are never loaded.

    Parameters
    ----------
    file : str or pathlib.Path
    label : str, optional
        Default the name of the file.

    Raises
    ------
    OSError
        The file cannot be opened.
    TypeError, ValueError
        Not such a file, no such array in it, not a vector or a density matrix.
    """
    value, title = read_array(file)
    title = label or title
    return Start.from_density(value, label=title) if value.ndim == 2 else Start.from_vector(value, label=title)


def read_array(file: str | Path) -> tuple[np.ndarray, str]:
    """Array of a file `name.npy` or `name.npz:array`, and a short name for it; pickled objects are never loaded.

    Parameters
    ----------
    file : str or pathlib.Path

    Raises
    ------
    OSError
        The file cannot be opened.
    ValueError
        Not such a file, or no such array in it.
    """
    text = str(file)
    path, _, name = text.rpartition(":") if ".npz:" in text else (text, "", "")
    if not path.endswith((".npy", ".npz")):
        raise ValueError(f"{text!r} is no file of arrays; expected name.npy or name.npz:array")
    zipped = path.endswith(".npz")
    with open(path, "rb") as stream:
        head = stream.read(6)
        if not head.startswith(b"PK" if zipped else b"\x93NUMPY"):
            raise ValueError(f"{path!r} is not what its ending says")
        stream.seek(0)
        try:
            loaded = np.load(stream, allow_pickle=False)
            held = loaded.files if zipped else []
            if zipped and not name and len(held) == 1:
                name = held[0]
            if zipped and name not in held:
                asked = f"no array {name!r}" if name else "more than one array, say which after a colon"
                raise KeyError(f"{path!r} has {asked}; it holds {', '.join(map(repr, held)) or 'none'}")
            value = loaded[name] if zipped else loaded
        except KeyError as error:
            raise ValueError(error.args[0]) from None
        except (ValueError, EOFError, zipfile.BadZipFile, zlib.error) as error:
            pickled = "allow_pickle" in str(error)
            reason = "holds Python objects, which are not loaded" if pickled else "is damaged"
            raise ValueError(f"{path!r} {reason}") from None
    return value, Path(path).name + (f":{name}" if name else "")


def _lowest_space(q: Any, width: float, tolerance: float, most: int) -> tuple[np.ndarray, float | None]:
    """Orthonormal basis of the lowest level of a large matrix, and the next level."""
    d = q.shape[0]
    random = np.random.default_rng(0)
    found = np.empty((d, 0), q.dtype)
    lowest = math.inf
    while True:
        shifted = spla.LinearOperator(
            q.shape, lambda x, f=found: q @ x + 2 * width * (f @ (f.conj().T @ x)), dtype=q.dtype
        )
        first = random.standard_normal(d)
        energies, vectors = spla.eigsh(shifted, k=1, which="SA", v0=first, tol=0, maxiter=100 * d)
        lowest = min(lowest, float(energies[0]))
        if energies[0] > lowest + tolerance:
            return found, float(energies[0])
        if found.shape[1] == most:
            raise ValueError(f"the ground space of the start holds more than {most} states: name one of them")
        new = vectors - found @ (found.conj().T @ vectors)
        found = np.concatenate([found, new / np.linalg.norm(new)], axis=1)


def _numbers(value: Any, label: str) -> np.ndarray:
    """Array of finite real or complex double-precision numbers."""
    array = np.asarray(value)
    if array.dtype == object or not (np.issubdtype(array.dtype, np.number) or array.dtype == bool):
        raise TypeError(f"{label} must be made of numbers, not of {array.dtype}")
    array = array.astype(complex if np.iscomplexobj(array) else float)
    if not np.all(np.isfinite(array)):
        raise ValueError(f"{label} has NaN or infinite entries")
    return np.ascontiguousarray(array.real) if np.iscomplexobj(array) and not array.imag.any() else array


def _room(d: int, what: str, columns: int | None = None, complex_numbers: bool = True) -> None:
    need = (16 if complex_numbers else 8) * d * (d if columns is None else columns) * (3 if columns is None else 1)
    require_memory(need, f"the eigenvectors of {what} over {d} states need {{need}}")
