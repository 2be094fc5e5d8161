"""Comparisons of several sizes: what survives when the system grows, and which statements that supports.

A sentence such as "the generalised Gibbs ensemble describes the long-time state of blocks up to 3 sites to 0.01" is
only written from a series of sizes, never from one.  Sizes that differ by 2 modulo 4, or odd from even, form sequences
of their own.  Floor: quench.  Must not know configs.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from maxent.quench.columns import COMPLETE, Comparison
from maxent.quench.comparison import compare
from maxent.text import listing

__all__ = ["SizeSeries", "size_series"]

#: Fewest sizes from which a statement is made.
FEWEST = 3
#: Deviations may grow by this factor from one size to the next and still count as not growing.
NOISE = 1.05
#: A trace distance up to here is called a description, with its size beside it.
SMALL = 0.1


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
        """Sizes, and trace distance to the dephased state on blocks of so many sites; upper bounds of large ones."""
        found = [(c.size, self._one(c, label, sector)) for c in self.comparisons]
        rows = [(n, e.farthest(block)) for n, e in found if e is not None]
        return _columns([(n, x) for n, x in rows if np.isfinite(x)])

    def scatter(self, observable: str) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Scatter of eigenstate values about their running mean inside one sector, by size.

        Sizes whose sector of the start is tested, if there are any; otherwise those where another sector is.

        Parameters
        ----------
        observable : str

        Returns
        -------
        sizes, dimensions, scatter : (k,) ndarrays
            Numbers of sites, numbers of levels of the sector, standard deviations.
        """
        tests = [(c.size, c.eigenstate_tests) for c in self.comparisons if c.eigenstate_tests is not None]
        first = [(n, test) for n, found in tests for test in found.sectors[:1]]
        rows = [(n, test) for n, test in first if observable in test.scatter]
        if any(test.of_start for _, test in rows):
            rows = [(n, test) for n, test in rows if test.of_start]
        return (
            np.array([n for n, _ in rows], int),
            np.array([test.size for _, test in rows], int),
            np.array([test.scatter[observable].std for _, test in rows], float),
        )

    def sequences(self) -> dict[str, np.ndarray]:
        """Positions of the sizes of each sequence: odd, multiples of 4, and even others."""
        names = {0: "L = 4n", 2: "L = 4n + 2", 1: "L odd", 3: "L odd"}
        out: dict[str, list[int]] = {}
        for i, n in enumerate(self.sizes):
            out.setdefault(names[int(n) % 4], []).append(i)
        return {k: np.array(v) for k, v in out.items()}

    @property
    def statements(self) -> tuple[str, ...]:
        """What the series supports, in sentences; empty for fewer than three sizes or none that can be compared.

        Sizes can be compared inside one sequence.  An ensemble describes a block where its distance is small (at most
        0.1) at the end of every sequence, whether it still falls or already grows, and misses it where it is larger;
        the accuracy is the largest of those distances.  A size that is alone in its sequence plays no part, which each
        sentence says.  Single eigenstates get no sentence: they are one choice among many; nor does the complete
        generalised state of free particles, which is the long-time state of blocks.
        """
        if len(self.comparisons) < FEWEST or all(len(which) < 2 for which in self.sequences().values()):
            return ()
        kinds = {e.label: e.kind for c in self.comparisons for e in c.ensembles}
        out = []
        for label in self.labels:
            if kinds[label] in ("eigenstate", COMPLETE):
                continue
            whole, part = self._statement(label, False), self._statement(label, True)
            out += [f"{label}: {whole}"] if whole else []
            out += [f"{label} in the sector of the start: {part}"] if part and part != whole else []
        return tuple(out)

    def _statement(self, label: str, sector: bool) -> str:
        """What is said of an ensemble; a sector that says the same as all states is not repeated."""
        blocks = sorted(set.intersection(*(set(c.block_bounds) for c in self.comparisons)))
        found: dict[str, dict[int, float]] = {"close": {}, "closing": {}, "far": {}, "away": {}}
        seen: list[int] = []
        for block in blocks:
            sizes, values = self.distances(label, block, sector=sector)
            if len(sizes) < FEWEST or not self._told(sizes):
                continue
            grows, worst = self._trend(sizes, values)
            if worst <= SMALL:
                found["closing" if grows else "close"][block] = worst
            elif self._bounded(label, block, sector):
                continue  # an upper bound that is large says nothing
            else:
                found["away" if grows else "far"][block] = worst
            seen = [*seen, *(int(n) for n in sizes if int(n) not in seen)]
        close = dict(sorted((found["close"] | found["closing"]).items()))
        far = dict(sorted((found["far"] | found["away"]).items()))
        parts = []
        if close:
            parts.append(f"describes the long-time state of {_sites(close)} to {_sizes(close)}")
        if far:
            parts.append(f"misses that of {_sites(far)} by {_sizes(far)}")
        if not parts:
            return ""
        growing = sorted(found["closing"] | found["away"])
        last = f"; that of {_sites(growing)} still grows with the size" if growing else ""
        return f"{listing(parts, 'and')} (trace distance {self._compared(sorted(seen))}{last})."

    def _bounded(self, label: str, block: int, sector: bool) -> bool:
        """Whether some distance is only known by its bounds."""
        found = [self._one(c, label, sector) for c in self.comparisons]
        return any(e is not None and block in e.distance_bounds for e in found)

    def _told(self, sizes: Sequence[int] | np.ndarray) -> list[list[int]]:
        """Of these sizes those of each sequence that has more than one of them."""
        every = [[int(n) for n in self.sizes[which] if n in sizes] for which in self.sequences().values()]
        return [members for members in every if len(members) > 1]

    def _compared(self, sizes: Sequence[int]) -> str:
        """Where the distances stand: the sequences with their sizes, and the sizes that play no part."""
        several = self._told(sizes)
        text = f"at the end{'s' if len(several) > 1 else ''} of "
        text += listing([f"L = {', '.join(map(str, members))}" for members in several], "and")
        used = {n for members in several for n in members}
        alone = [str(n) for n in sizes if n not in used]
        if alone:
            whose = "its sequence" if len(alone) == 1 else "their sequences"
            text += f"; L = {', '.join(alone)} {'plays' if len(alone) == 1 else 'play'} no part, alone in {whose}"
        missing = [str(n) for n in self.sizes if n not in sizes]
        return text + (f"; there is none at L = {', '.join(missing)}" if missing else "")

    def _trend(self, sizes: np.ndarray, values: np.ndarray) -> tuple[bool, float]:
        """Whether some sequence grows at its end, and the largest value there; lone sizes do not count."""
        at = dict(zip(map(int, sizes), map(float, values), strict=True))
        ends = [(at[members[-2]], at[members[-1]]) for members in self._told(sizes)]
        return any(b > NOISE * a + 1e-9 for a, b in ends), max(b for _, b in ends)

    def _one(self, c: Comparison, label: str, sector: bool) -> Any:
        found = [e for e in c.ensembles if e.label == label and bool(e.sector) == sector]
        return found[0] if found else None


def size_series(
    build: Callable[[int], Mapping[str, Any]],
    sizes: Iterable[int],
    *,
    make: Callable[..., Comparison] = compare,
    progress: Callable[[str], None] | None = None,
) -> SizeSeries:
    """Compare for several sizes.

    Parameters
    ----------
    build : callable
        Size -> keyword arguments of `make`, with ``charges`` and ``start``.
    sizes : iterable of int
    make : callable, optional
        `compare`, or `maxent.quench.compare_gaussian` for free particles.
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
        out.append(make(arguments.pop("charges"), arguments.pop("start"), progress=say, **arguments))
    return SizeSeries(tuple(out))


def _columns(rows: list[tuple[int, float]]) -> tuple[np.ndarray, np.ndarray]:
    return np.array([n for n, _ in rows]), np.array([x for _, x in rows])


def _sites(blocks: Iterable[int]) -> str:
    each = listing([str(b) for b in blocks], "and")
    return "1 site" if each == "1" else f"{each} neighbouring sites"


def _sizes(found: Mapping[int, float]) -> str:
    return listing([f"{x:.2g}" if x > 1e-9 else "0" for x in found.values()], "and")
