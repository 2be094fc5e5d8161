"""Products of Pauli matrices in states given by second moments: means, traces in time, averages over all times.

A sum of spins 1/2 becomes a sum of words of Majorana operators with the mean ``phase (-i)^m Pf(G_word)``.  Where start
and dynamics are the same in every cell of a ring, words that are translates of one another are one word.  In time the
second moments move, ``G_ab(t) = sum_kl W_ak M_kl W*_bl exp(-i (x_k - x_l) t)``; the average of a product of two of them
keeps pairs of opposite gaps, so that words of four operators have a closed form.  Longer ones have none that is cheap.
Floor: quench.  Must not know charges or multipliers.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from typing import NamedTuple

import numpy as np

from maxent.families.pfaffians import complement, log_pfaffian, pauli_word
from maxent.lattice import OperatorSum
from maxent.quench.gaussian_evolution import GaussianEvolution, Motion
from maxent.quench.gaussian_starts import EQUAL, GaussianStart, Part

__all__ = ["WordSum", "long_time_words", "spin_period", "word_mean", "word_sum", "word_traces"]


class WordSum(NamedTuple):
    """A sum of words of Majorana operators, ``sum_w coefficient_w <g_word>``.

    Attributes
    ----------
    coefficients : tuple of complex
    words : tuple of tuple of int
        Each of an even number of operators.
    """

    coefficients: tuple[complex, ...]
    words: tuple[tuple[int, ...], ...]

    @property
    def longest(self) -> int:
        """Operators of the longest word."""
        return max(map(len, self.words), default=0)

    @property
    def letters(self) -> list[int]:
        """Every Majorana operator that occurs, ascending."""
        return sorted({g for word in self.words for g in word})

    def mean(self, g: np.ndarray, at: Mapping[int, int] | None = None) -> float:
        """Mean in the Gaussian state of a covariance; `at` says where it holds each operator, itself by default."""
        total = 0.0
        for coefficient, word in zip(self.coefficients, self.words, strict=True):
            index = list(word) if at is None else [at[x] for x in word]
            total += float((coefficient * (-1j) ** (len(word) // 2) * _pfaffian(g[np.ix_(index, index)])).real)
        return total


def _pfaffian(a: np.ndarray) -> float:
    if len(a) == 2:
        return float(a[0, 1])
    if len(a) == 4:
        return float(a[0, 1] * a[2, 3] - a[0, 2] * a[1, 3] + a[0, 3] * a[1, 2])
    sign, size = log_pfaffian(a)
    return float(sign * np.exp(size))


def word_sum(operator: OperatorSum, *, parity: int = 0, period: int | None = None) -> WordSum:
    """The words of a sum of spins 1/2.

    Parameters
    ----------
    operator : OperatorSum
    parity : {1, -1, 0}, optional
        Value of the product of all Z, by which words longer than half are shortened; 0: none are.
    period : int, optional
        Sites after which a ring and its state repeat: translates by so many sites count as one word.

    Raises
    ------
    ValueError
        Not a Hermitian sum of spins 1/2.
    """
    sites = operator.sites.size
    found: dict[tuple[int, ...], complex] = {}
    for coefficient, letters in operator.pauli_terms():
        phase, word = pauli_word(_moved(letters, sites, period or sites))
        if len(word) % 2:
            continue  # changes the parity, and has no mean
        if parity and len(word) > sites:
            phase, word = complement((phase * parity, word), sites)
        found[word] = found.get(word, 0.0) + coefficient * phase
    return WordSum(tuple(found.values()), tuple(found))


def _moved(letters: Mapping[int, str], sites: int, period: int) -> dict[int, str]:
    """A word moved around the ring by whole periods so that it begins early and ends as early as possible."""
    if not letters:
        return {}
    at = sorted(letters)
    gaps = [(b - a) % sites or sites for a, b in zip(at, at[1:] + at[:1], strict=True)]
    first = at[(int(np.argmax(gaps)) + 1) % len(at)]
    shift = first - first % period
    return {(site - shift) % sites: letter for site, letter in letters.items()}


def spin_period(matrices: Iterable[tuple[np.ndarray, int]], sites: int) -> int:
    """Sites after which a ring of spins repeats; all of them where nothing does.

    Parameters
    ----------
    matrices : iterable of ((2 sites, 2 sites) ndarray, {1, -1, 0})
        Forms and covariances over Majorana operators, each with its parity: it decides how the ring is closed.
    sites : int
    """
    given = list(matrices)
    if any(not parity for _, parity in given):
        return sites
    for period in range(1, sites // 2 + 1):
        if sites % period == 0 and all(_repeats(a, 2 * period, -parity) for a, parity in given):
            return period
    return sites


def _repeats(a: np.ndarray, step: int, closing: int) -> bool:
    place = np.arange(len(a)) + step
    sign = np.where(place >= len(a), closing, 1)
    moved = a[np.ix_(place % len(a), place % len(a))] * np.outer(sign, sign)
    return bool(np.abs(moved - a).max(initial=0.0) <= 1e-12 * max(float(np.abs(a).max(initial=0.0)), 1e-300))


def word_mean(state: GaussianStart, sums: Sequence[WordSum]) -> float:
    """Mean in a mixture of Gaussian states; `sums` has the words of each part."""
    return sum(p.weight * s.mean(p.covariance) for p, s in zip(state.parts, sums, strict=True))


def word_traces(
    evolution: GaussianEvolution,
    sums: Mapping[str, Sequence[WordSum]],
    times: np.ndarray,
    *,
    progress: Callable[[str], None] | None = None,
) -> dict[str, np.ndarray]:
    """Means in time of sums of words.

    Parameters
    ----------
    evolution : GaussianEvolution
        Of fermions.
    sums : dict of str to sequence of WordSum
        One per part of the start.
    times : (t,) ndarray
    progress : callable, optional

    Returns
    -------
    dict of str to (t,) ndarray
    """
    out = {name: np.zeros(len(times)) for name in sums}
    if not sums:
        return out
    for k, (part, motion) in enumerate(zip(evolution.start.parts, evolution.motions, strict=True)):
        letters = sorted({x for each in sums.values() for x in each[k].letters})
        at = {x: i for i, x in enumerate(letters)}
        rows, moments = motion.frame[letters], _moments(part, motion)
        for i, t in enumerate(times):
            turned = rows * np.exp(-1j * motion.levels * t)
            g = np.real(turned @ moments @ turned.conj().T)
            for name, each in sums.items():
                out[name][i] += part.weight * each[k].mean(g, at)
            if progress is not None and i % 50 == 49:
                progress(f"second moments at {i + 1} of {len(times)} times")
    return out


def long_time_words(evolution: GaussianEvolution, sums: Sequence[WordSum]) -> float | None:
    """Average over all times of a sum of words, of fermions; None where a word has more than four operators."""
    if max(s.longest for s in sums) > 4:
        return None
    total = 0.0
    for part, motion, each in zip(evolution.start.parts, evolution.motions, sums, strict=True):
        total += part.weight * _averaged(part, motion, each)
    return total


def _averaged(part: Part, motion: Motion, words: WordSum) -> float:
    moments, x = _moments(part, motion), motion.levels
    gaps = (x[:, None] - x[None, :]).ravel()
    order = np.argsort(gaps)
    steps = np.concatenate([[0], np.cumsum(np.diff(gaps[order]) > EQUAL * float(np.abs(x).max(initial=0.0)))])
    group = np.empty(len(gaps), int)
    group[order] = steps
    zero = group[0]  # of a level with itself

    def by_gap(a: int, b: int) -> np.ndarray:
        elements = (motion.frame[a][:, None] * moments * motion.frame[b].conj()[None, :]).ravel()
        return np.bincount(group, elements.real) + 1j * np.bincount(group, elements.imag)

    def both(a: int, b: int, c: int, d: int) -> float:
        # second moments are real: the element of a gap is the conjugate of that of the opposite gap
        return float(np.vdot(by_gap(a, b), by_gap(c, d)).real)

    total = 0.0
    for coefficient, word in zip(words.coefficients, words.words, strict=True):
        if not word:
            total += float(coefficient.real)
        elif len(word) == 2:
            total += float((coefficient * -1j).real) * float(by_gap(*word)[zero].real)
        else:
            a, b, c, d = word
            pfaffian = both(a, b, c, d) - both(a, c, b, d) + both(a, d, b, c)
            total += float(-coefficient.real) * pfaffian
    return total


def _moments(part: Part, motion: Motion) -> np.ndarray:
    """Second moments over pairs of levels."""
    return np.asarray(motion.inverse @ part.covariance @ motion.inverse.conj().T)
