"""Comparisons of several sizes: what survives when the system grows, and which statements that supports.

A sentence such as "the generalised Gibbs ensemble describes the long-time state of blocks up to 3 sites to 0.01" is
only written from a series of sizes, never from one.  Sizes that differ by 2 modulo 4, or odd from even, form sequences
of their own.  Floor: quench.  Must not know configs.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from maxent.quench.comparison import Comparison, compare
from maxent.text import listing

__all__ = ["SizeSeries", "size_series"]

#: Fewest sizes from which a statement is made.
FEWEST = 3
#: Deviations may grow by this factor from one size to the next and still count as not growing.
NOISE = 1.05


@dataclass(frozen=True)
class SizeSeries:
    """Comparisons of one study, ascending in size."""

    comparisons: tuple[Comparison, ...]

    @property
    def sizes(self) -> np.ndarray:
        """Numbers of sites."""
        return np.array([c.size for c in self.comparisons])

    @property
    def labels(self) -> tuple[str, ...]:
        """Labels of the ensembles that every size has."""
        common = [set(c.labels) for c in self.comparisons]
        return tuple(x for x in self.comparisons[0].labels if all(x in s for s in common)) if common else ()

    @property
    def observables(self) -> tuple[str, ...]:
        """Names of the observables."""
        return tuple(self.comparisons[0].truth) if self.comparisons else ()

    def deviations(self, label: str, observable: str, *, sector: bool = False) -> tuple[np.ndarray, np.ndarray]:
        """Sizes, and ensemble minus dephased state at each; sizes without a fit are left out."""
        found = [(c.size, self._one(c, label, sector)) for c in self.comparisons]
        rows = [
            (n, e.means[observable] - c.truth[observable])
            for (n, e), c in zip(found, self.comparisons, strict=True)
            if e is not None and observable in e.means
        ]
        return _columns(rows)

    def distances(self, label: str, block: int, *, sector: bool = False) -> tuple[np.ndarray, np.ndarray]:
        """Sizes, and trace distance to the dephased state on blocks of so many sites."""
        found = [(c.size, self._one(c, label, sector)) for c in self.comparisons]
        return _columns([(n, e.distances[block]) for n, e in found if e is not None and block in e.distances])

    def sequences(self) -> dict[str, np.ndarray]:
        """Positions of the sizes of each sequence: odd, multiples of 4, and even others."""
        names = {0: "L = 4n", 2: "L = 4n + 2", 1: "L odd", 3: "L odd"}
        out: dict[str, list[int]] = {}
        for i, n in enumerate(self.sizes):
            out.setdefault(names[int(n) % 4], []).append(i)
        return {k: np.array(v) for k, v in out.items()}

    @property
    def statements(self) -> tuple[str, ...]:
        """What the series supports, in sentences; empty for fewer than three sizes.

        For each ensemble and column: the largest block on which the distance at the largest sizes of every sequence
        is not growing, and the accuracy there, the largest of those distances.
        """
        if len(self.comparisons) < FEWEST:
            return ()
        said = []
        blocks = sorted(set.intersection(*(set(c.block_bounds) for c in self.comparisons)))
        for label in self.labels:
            for sector in (False, True):
                accuracy: dict[int, float] = {}
                grows: list[int] = []
                for block in blocks:
                    sizes, values = self.distances(label, block, sector=sector)
                    if len(sizes) < FEWEST:
                        continue
                    steady, worst = self._steady(sizes, values)
                    if steady and len(accuracy) == block - blocks[0]:
                        accuracy[block] = worst
                    elif not steady:
                        grows.append(block)
                if not accuracy and not grows:
                    continue
                where = f"{label}{' in the sector of the start' if sector else ''}"
                if accuracy:
                    each = ", ".join(f"{x:.2g}" for x in accuracy.values())
                    text = (
                        f"{where}: describes the long-time state of {listing([str(b) for b in accuracy], 'and')} "
                        f"neighbouring sites to {each} (largest trace distance at the ends of the sequences of "
                        f"{len(self.comparisons)} sizes, none of which grows)"
                    )
                    text += f"; on {listing([str(b) for b in grows], 'and')} it grows." if grows else "."
                else:
                    text = f"{where}: the distance grows with size; nothing can be said about the long-time state."
                said.append(text)
        return tuple(said)

    def _steady(self, sizes: np.ndarray, values: np.ndarray) -> tuple[bool, float]:
        """Whether no sequence grows at its end, and the largest value there."""
        steady, worst = True, 0.0
        for _, which in self.sequences().items():
            here = np.flatnonzero(np.isin(sizes, self.sizes[which]))
            if not len(here):
                continue
            tail = values[here]
            worst = max(worst, float(tail[-1]))
            if len(tail) > 1 and tail[-1] > NOISE * tail[-2] + 1e-9:
                steady = False
        return steady, worst

    def _one(self, c: Comparison, label: str, sector: bool) -> Any:
        found = [e for e in c.ensembles if e.label == label and bool(e.sector) == sector]
        return found[0] if found else None


def size_series(
    build: Callable[[int], Mapping[str, Any]],
    sizes: Iterable[int],
    *,
    progress: Callable[[str], None] | None = None,
) -> SizeSeries:
    """Compare for several sizes.

    Parameters
    ----------
    build : callable
        Size -> keyword arguments of `compare`, with ``charges`` and ``start``.
    sizes : iterable of int
    progress : callable, optional

    Raises
    ------
    ValueError
        No sizes, or one twice.
    """
    wanted = sorted(sizes)
    if not wanted or len(set(wanted)) < len(wanted):
        raise ValueError(f"sizes must be different numbers, at least one, not {wanted}")
    out = []
    for n in wanted:
        arguments = dict(build(n))
        say = None if progress is None else (lambda text, n=n: progress(f"size {n}: {text}"))
        out.append(compare(arguments.pop("charges"), arguments.pop("start"), progress=say, **arguments))
    return SizeSeries(tuple(out))


def _columns(rows: list[tuple[int, float]]) -> tuple[np.ndarray, np.ndarray]:
    return np.array([n for n, _ in rows]), np.array([x for _, x in rows])
