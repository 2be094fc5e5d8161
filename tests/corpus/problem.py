"""What one problem of the corpus is: charges, targets, and the truth about them.

A `Draft` is the bare mathematics (arrays without names); `Problem` adds the names, the place in the corpus
(kind, seed, index) and how to hand it to the solver.  The truth is put in by the generator that made the
draft; nothing here or in the generators calls the solver.

Distances are Euclidean in the space of the targets.  With a unit vector v and v.Q - v.q >= margin, the
margin is a lower bound of the distance between q and the set of reachable values; generators state the
distance itself or an upper bound of it.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
import scipy.sparse


@dataclass(frozen=True)
class Draft:
    """Charges, targets and truth, without names.

    Attributes
    ----------
    charges : tuple of arrays
        (n,) real for microstates, (d, d) Hermitian (dense or scipy.sparse) for matrices.
    targets : (m,) array
    verdict : str
        "solved", "boundary", "infeasible" or "inconsistent".
    rank : int
        Number of independent charges, multiples of the identity not counted.
    family : str
        "Microstates", "Matrices", "Modes", "Bilinears" or "Periodic".
    size : int
        Number of states (also with no charges at all), of levels, or of modes.
    log_weights, log_prior : arrays or None
    distance : float or None
        Outside only: an upper bound of the distance to the reachable set, exact if `distance_is_exact`.
    displacement : (m,) array or None
        Outside only: target minus a reachable point; its length is an upper bound of the distance.
    depth : float or None
        Inside only: an upper bound of the distance to the edge.
    face_dimension : int or None
        Boundary only: states spanned by the largest support a state with these values can have.
    directions : int
        Boundary only: at least so many exposing directions are needed one after the other.
    multipliers : (m,) array or None
        The multipliers, where they are known and unique.
    entropy : float or None
        Entropy of the state, or of the limit state on the face, where it is known.
    note : str
    statistics, degeneracy, particles : str, (n,) array, float
        Levels and modes: which particles, copies of each level, how many particles the target stands for.
    """

    charges: tuple
    targets: np.ndarray
    verdict: str
    rank: int
    family: str
    size: int
    log_weights: np.ndarray | None = None
    log_prior: np.ndarray | None = None
    distance: float | None = None
    distance_is_exact: bool = False
    displacement: np.ndarray | None = None
    depth: float | None = None
    face_dimension: int | None = None
    directions: int = 1
    multipliers: np.ndarray | None = None
    entropy: float | None = None
    note: str = ""
    statistics: str | None = None
    degeneracy: np.ndarray | None = None
    particles: float = 1.0

    def change(self, **fields) -> Draft:
        """Copy with some fields replaced."""
        return replace(self, **fields)

    def transformed(self, matrix, offset=None, note: str = "") -> Draft:
        """The same problem asked with the charges matrix @ Q + offset.

        An invertible or injective map of the charges changes neither the states nor the verdict, rank, face
        and entropy; multipliers go over to matrix^-T lam when the matrix is square.  Outside, the point
        that was `displacement` away from the target goes over too, so the image of the displacement bounds
        the distance.
        """
        matrix = np.asarray(matrix, float)
        offset = np.zeros(len(matrix)) if offset is None else np.asarray(offset, float)
        unit = np.eye(self.size) if self.family == "Matrices" else np.ones(self.size)
        dense = np.array([to_dense(a) for a in self.charges])
        charges = [np.tensordot(row, dense, axes=1) + c * unit for row, c in zip(matrix, offset, strict=True)]
        square = matrix.shape[0] == matrix.shape[1]
        known = self.multipliers is not None and square
        moved = None if self.displacement is None else matrix @ self.displacement
        return replace(
            self,
            charges=tuple(charges),
            targets=matrix @ self.targets + offset,
            displacement=moved,
            distance=None if moved is None else float(np.linalg.norm(moved)),
            distance_is_exact=False,
            depth=None,
            multipliers=np.linalg.solve(matrix.T, self.multipliers) if known else None,
            note=f"{self.note}; {note}" if note else self.note,
        )


@dataclass(frozen=True)
class Problem:
    """One named problem; `identity` names it in failures and finds it again through `problems.make`."""

    kind: str
    seed: int
    index: int
    family: str
    charges: dict
    targets: dict
    verdict: str
    rank: int
    size: int
    log_weights: np.ndarray | None = field(repr=False)
    log_prior: np.ndarray | None = field(repr=False)
    distance: float | None
    distance_is_exact: bool
    depth: float | None
    face_dimension: int | None
    directions: int
    multipliers: dict | None
    entropy: float | None
    note: str
    statistics: str | None = None
    degeneracy: np.ndarray | None = field(default=None, repr=False)
    particles: float = 1.0

    @property
    def identity(self) -> str:
        return f"{self.kind} --seed {self.seed} --index {self.index} ({self.note})"

    def build(self):
        """The family of the public interface that holds these charges."""
        from maxent.families import Bilinears, Matrices, Microstates, Modes, Periodic

        if self.family == "Bilinears":
            return Bilinears(dict(self.charges), statistics=self.statistics)
        if self.family == "Periodic":
            hops = {n: self.own.distances(q) for n, q in self.charges.items()}
            return Bilinears({n: Periodic(self.size, t) for n, t in hops.items()}, statistics=self.statistics)
        if self.family == "Modes":
            return Modes(dict(self.charges), self.statistics, self.degeneracy)
        if self.family == "Microstates":
            weights = self.log_weights
            if not self.charges and weights is None:
                weights = np.zeros(self.size)
            return Microstates(dict(self.charges), log_weights=weights, log_prior=self.log_prior)
        dims = None if self.charges else (2,) * int(np.log2(self.size))
        return Matrices(dict(self.charges), dims=dims, log_prior=self.log_prior)

    @property
    def own(self):
        """The module that answers questions about particles; None for states."""
        from tests.corpus import bilinears, levels  # which make drafts of this module

        return {"Modes": levels, "Bilinears": bilinears, "Periodic": bilinears}.get(self.family)

    def live(self, charge) -> np.ndarray:
        """A microstate charge on the states that have a weight at all."""
        keep = np.ones(self.size, bool)
        for logs in (self.log_weights, self.log_prior):
            if logs is not None and self.family == "Microstates":
                keep &= np.isfinite(logs)
        return np.asarray(charge, float)[keep]

    def scale(self, name) -> float:
        """|Q_j| + |q_j|: the unit of a relative residual."""
        if self.own:
            return self.own.size(self, name) + abs(self.targets[name])
        return size_of(self.charges[name], self) + abs(self.targets[name])

    def spread(self, name) -> float:
        """Standard deviation of the charge when every state counts the same."""
        charge = self.charges[name]
        if self.own:
            return self.own.spread(self, name)
        if self.family == "Microstates":
            return float(np.std(self.live(charge)))
        dense = to_dense(charge)
        trace = np.trace(dense).real / self.size
        return float(np.linalg.norm(dense - trace * np.eye(self.size)) / np.sqrt(self.size))


def to_dense(charge) -> np.ndarray:
    return charge.toarray() if scipy.sparse.issparse(charge) else np.asarray(charge)


def size_of(charge, problem: Problem) -> float:
    """Largest |value| of a charge."""
    if problem.family == "Microstates":
        return float(np.max(np.abs(problem.live(charge)), initial=0.0))
    return float(np.max(np.abs(np.linalg.eigvalsh(to_dense(charge)))))


def named(draft: Draft, kind: str, seed: int, index: int) -> Problem:
    """Give the charges of a draft the names c0, c1, ... and the draft its place in the corpus."""
    names = [f"c{j}" for j in range(len(draft.charges))]
    lam = draft.multipliers
    return Problem(
        kind=kind,
        seed=seed,
        index=index,
        family=draft.family,
        charges=dict(zip(names, draft.charges, strict=True)),
        targets={name: float(q) for name, q in zip(names, draft.targets, strict=True)},
        verdict=draft.verdict,
        rank=draft.rank,
        size=draft.size,
        log_weights=draft.log_weights,
        log_prior=draft.log_prior,
        distance=draft.distance,
        distance_is_exact=draft.distance_is_exact,
        depth=draft.depth,
        face_dimension=draft.face_dimension,
        directions=draft.directions,
        multipliers=None if lam is None else {n: float(x) for n, x in zip(names, lam, strict=True)},
        entropy=draft.entropy,
        note=draft.note,
        statistics=draft.statistics,
        degeneracy=draft.degeneracy,
        particles=draft.particles,
    )
