"""Which charges the dynamics conserves: commutators, drifts, and how stationary a state is.

    defect of Q = |[H, Q]|_F / ((E_max - E_min) |Q_0|_F),       Q_0 = Q without its trace,

a number from 0 (conserved) to 1.  Where H and Q are sums of words with exact coefficients, the commutator is formed
exactly and an empty one is a proof.  A cut-off of bosons truncates products of words: there the matrices decide, which
dynamics and ensembles use.  Charges may commute with H and not with one another: their states are stationary all the
same.  Floor: quench.  Must not know how a state was fitted.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from itertools import combinations
from typing import Any

import numpy as np
import scipy.sparse as sp

from maxent.families.density import MatricesState
from maxent.lattice.particles import BosonOperators
from maxent.lattice.terms import OperatorSum
from maxent.quench.dephasing import Dephased
from maxent.quench.operators import as_matrix, extremes, frobenius, traceless_norm, without_dirt
from maxent.text import listing

__all__ = ["Conservation", "Conserved", "check_conservation", "require_conserved", "state_defect"]

#: A relative commutator below this is rounding.
TOLERANCE = 1e-10
_COLUMNS = 256


@dataclass(frozen=True)
class Conserved:
    """What the dynamics does to one charge.

    Attributes
    ----------
    name : str
    defect : float
        ``|[H, Q]|_F / ((E_max - E_min) |Q_0|_F)``, from 0 to 1.
    exact : bool
        The commutator was formed with exact coefficients: a defect of 0 is then proved.  Never with a cut-off.
    conserved : bool
        Whether the defect is no more than rounding; coefficients given as decimals leave some, too.
    value, accuracy : float or None
        Mean in the start and its accuracy; None without a start.
    dephased : float or None
        Mean in the dephased state.
    """

    name: str
    defect: float
    exact: bool
    conserved: bool
    value: float | None = None
    accuracy: float | None = None
    dephased: float | None = None

    @property
    def drift(self) -> float | None:
        """``|<Q>_dephased - <Q>_start|``; None without a start."""
        return None if self.dephased is None or self.value is None else abs(self.dephased - self.value)

    @property
    def verdict(self) -> str:
        """`conserved` or `not conserved`."""
        return "conserved" if self.conserved else "not conserved"


@dataclass(frozen=True)
class Conservation:
    """Charges against the Hamiltonian and against one another.

    Attributes
    ----------
    charges : dict of str to Conserved
    mutual : (m, m) ndarray
        ``|[A, B]|_F`` over the smaller of ``width(A) |B_0|_F`` and ``width(B) |A_0|_F``, from 0 to 1, in the order of
        `charges`.
    tolerance : float
        Relative commutators up to here count as rounding.
    """

    charges: dict[str, Conserved]
    mutual: np.ndarray
    tolerance: float

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the charges."""
        return tuple(self.charges)

    @property
    def broken(self) -> tuple[str, ...]:
        """Charges that are not conserved."""
        return tuple(name for name, c in self.charges.items() if not c.conserved)

    @property
    def clashes(self) -> tuple[tuple[str, str], ...]:
        """Pairs of charges that do not commute with one another."""
        pairs = combinations(range(len(self.charges)), 2)
        return tuple((self.names[i], self.names[j]) for i, j in pairs if self.mutual[i, j] > self.tolerance)

    @property
    def message(self) -> str:
        """What was found, in one or two sentences."""
        kept = [f"{name!r}" for name in self.names if name not in self.broken]
        said = []
        if kept:
            said.append(f"Conserved: {', '.join(kept)}.")
        if self.broken:
            each = (f"{name!r} (defect {self.charges[name].defect:.3g})" for name in self.broken)
            said.append(f"Not conserved: {', '.join(each)}.")
        clashes = [f"{a!r} with {b!r}" for a, b in self.clashes if not {a, b} & set(self.broken)]
        if clashes:
            said.append(
                f"Not commuting with one another: {listing(clashes, 'and')}; their states are stationary all the same."
            )
        return " ".join(said)


def check_conservation(
    hamiltonian: Any,
    charges: Mapping[str, Any],
    *,
    dephased: Dephased | None = None,
    width: float | None = None,
    tolerance: float = TOLERANCE,
    progress: Callable[[str], None] | None = None,
) -> Conservation:
    """Test charges against a Hamiltonian.

    Parameters
    ----------
    hamiltonian : OperatorSum or (d, d) array_like or scipy.sparse
    charges : dict of str to OperatorSum or matrix
        All on the same space.
    dephased : Dephased, optional
        A start and its dephased state, for values and drifts.
    width : float, optional
        E_max - E_min where it is known; taken from `dephased`, or computed.
    tolerance : float, optional
        Largest relative commutator that counts as rounding.
    progress : callable, optional
        Told in one line what is being done.

    Returns
    -------
    Conservation

    Raises
    ------
    TypeError, ValueError
        An operator that is not Hermitian, or charges of mixed sizes.

    Examples
    --------
    >>> from maxent.lattice import Ring, formula
    >>> ring = Ring(4)
    >>> field = {name: formula(f"{name}[i]", ring) for name in ("Sx", "Sz")}
    >>> check_conservation(formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 2*Sz[i]*Sz[i+1]", ring), field).message
    "Conserved: 'Sz'. Not conserved: 'Sx' (defect 0.149)."
    """
    h = as_matrix(hamiltonian, "the Hamiltonian")
    matrices = {name: as_matrix(q, f"charge {name!r}") for name, q in charges.items()}
    sizes = {"the Hamiltonian": h.shape[0]} | {f"charge {name!r}": q.shape[0] for name, q in matrices.items()}
    if len(set(sizes.values())) > 1:
        raise ValueError("operators have different dimensions: " + ", ".join(f"{n} {d}" for n, d in sizes.items()))
    if width is None and dephased is not None:
        width = dephased.spectrum.width
    if width is None:
        low, high = extremes(h)
        width = high - low
    names, norms = list(charges), {name: traceless_norm(q) for name, q in matrices.items()}
    found = {}
    for name in names:
        if progress is not None and h.shape[0] > 4096:
            progress(f"commutator of {name} with the Hamiltonian")
        size, exact = _commutator(hamiltonian, charges[name], h, matrices[name])
        defect = _ratio(size, width * norms[name])
        value = accuracy = later = None
        if dephased is not None:
            value, accuracy = dephased.start.mean(matrices[name])
            later = dephased.state.mean(matrices[name])
        found[name] = Conserved(name, defect, exact, defect <= tolerance, value, accuracy, later)
    mutual = np.zeros((len(names), len(names)))
    widths = {}
    for i, j in combinations(range(len(names)), 2):
        a, b = names[i], names[j]
        size, _ = _commutator(charges[a], charges[b], matrices[a], matrices[b])
        if size > 0.0:
            for name in (a, b):
                if name not in widths:
                    low, high = extremes(matrices[name])
                    widths[name] = high - low
            ratio = _ratio(size, min(widths[a] * norms[b], widths[b] * norms[a]))
            mutual[i, j] = mutual[j, i] = ratio if ratio > tolerance else 0.0
    return Conservation(found, mutual, tolerance)


def require_conserved(conservation: Conservation, names: Iterable[str], *, insist: Iterable[str] = ()) -> str:
    """Refuse charges that are not conserved as charges of a stationary state.

    Parameters
    ----------
    conservation : Conservation
    names : iterable of str
        Charges of the state.
    insist : iterable of str, optional
        Those to be kept all the same.

    Returns
    -------
    str
        Empty when all are conserved; otherwise what the state is, since it is not stationary.

    Raises
    ------
    ValueError
        A charge that is not conserved, with its defect and drift, or a name that was not tested.
    """
    names, kept = list(names), set(insist)
    unknown = [n for n in [*names, *kept] if n not in conservation.charges]
    if unknown:
        raise ValueError(f"charge {unknown[0]!r} was not tested against the Hamiltonian")
    broken = [conservation.charges[n] for n in names if not conservation.charges[n].conserved]
    refused = [c for c in broken if c.name not in kept]
    if refused:
        raise ValueError(
            f"{listing((_told(c) for c in refused), 'and')}; a state fitted to "
            f"{'it' if len(refused) == 1 else 'them'} is not stationary: leave {'it' if len(refused) == 1 else 'them'} "
            "out, or insist on it and get the least biased state at one instant"
        )
    if not broken:
        return ""
    return (
        f"Not stationary: {listing((_told(c) for c in broken), 'and')}. This is the least biased state at one instant, "
        "not a state that lasts."
    )


def state_defect(hamiltonian: Any, state: MatricesState, *, width: float | None = None) -> float:
    """How far a state is from being stationary: ``|[H, rho]|_F / ((E_max - E_min) |rho|_F)``, from 0 to 1.

    Parameters
    ----------
    hamiltonian : OperatorSum or (D, D) array_like or scipy.sparse
    state : MatricesState
    width : float, optional
        E_max - E_min where it is known.

    Raises
    ------
    TypeError, ValueError
        Not Hermitian, or of another dimension than the state.

    Notes
    -----
    Summed in the eigenvectors of rho as ``(p_a - p_b)^2 |H_ab|^2``, so that nothing cancels and no (D, D) matrix is
    needed; what H leads out of their span counts with probability 0 on the other side.
    """
    h = as_matrix(hamiltonian, "the Hamiltonian")
    whole = state.dimension if state.basis is None else state.basis.shape[0]
    if h.shape[0] != whole:
        raise ValueError(f"the Hamiltonian has dimension {h.shape[0]}, the state {whole}")
    if width is None:
        low, high = extremes(h)
        width = high - low
    h = sp.csr_array(h)
    leak = None
    if state.basis is not None:
        basis = sp.csr_array(state.basis)
        image = h @ basis
        h = without_dirt(basis.conj().T @ image)
        if basis.shape[1] < basis.shape[0]:
            leak = image - basis @ h
    h, leak = sp.csc_array(h), None if leak is None else sp.csc_array(leak)
    flat = sp.eye_array(len(state.flat), format="csr")
    parts = [(state.flat, flat, state.flat_weights), *[(g.index, g.vectors, g.weights) for g in state.groups]]
    parts = [part for part in parts if len(part[0])]
    total = 0.0
    for index, vectors, p in parts:
        columns, lost = h[:, index], None if leak is None else leak[:, index]
        reached = np.zeros(h.shape[0], bool)
        reached[columns.indices] = True
        near = [part for part in parts if reached[part[0]].any()]
        for at in range(0, len(p), _COLUMNS):
            piece, ours = vectors[:, at : at + _COLUMNS], p[at : at + _COLUMNS]
            image = columns @ piece
            image = image.toarray() if sp.issparse(image) else np.asarray(image)
            rest = image.copy()
            for others, them, q in near:
                overlap = them.conj().T @ image[others]
                total += float(np.sum((q[:, None] - ours[None, :]) ** 2 * np.abs(overlap) ** 2))
                rest[others] -= them @ overlap
            outside = np.sum(np.abs(rest) ** 2, axis=0)
            if lost is not None:
                beyond = lost @ piece
                outside = outside + np.sum(np.abs(beyond.toarray() if sp.issparse(beyond) else beyond) ** 2, axis=0)
            total += 2.0 * float(ours**2 @ outside)
    return _ratio(total**0.5, width * float(np.linalg.norm(state.populations)))


def _commutator(a: Any, b: Any, first: Any, second: Any) -> tuple[float, bool]:
    """Frobenius norm of a commutator, and whether it was formed exactly; `first`, `second` are the matrices."""
    words = isinstance(a, OperatorSum) and isinstance(b, OperatorSum) and a.sites == b.sites
    if words and not any(isinstance(slot, BosonOperators) for slot in a.sites.slots):
        found = a.commutator(b)
        return (frobenius(found.matrix()) if found.words else 0.0), True
    first, second = sp.csr_array(first), sp.csr_array(second)
    return frobenius(first @ second - second @ first), False


def _ratio(size: float, scale: float) -> float:
    """Relative size; a multiple of the identity commutes with everything."""
    return min(size / scale, 1.0) if scale > 0.0 else 0.0


def _told(charge: Conserved) -> str:
    drift = "" if charge.drift is None else f", and its value drifts by {charge.drift:.3g} from {charge.value:.6g}"
    size = f"{charge.defect:.3g} of the largest possible{drift}"
    return f"{charge.name!r} is not conserved: its commutator with the Hamiltonian is {size}"
