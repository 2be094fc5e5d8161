"""Products of Pauli matrices in time: means by Wick's theorem at every time, and averages over all times.

Second moments move as ``G_ab(t) = sum_kl W_ak M_kl W*_bl exp(-i (x_k - x_l) t)``.  The average of a product of two of
them keeps pairs of opposite gaps, so that words of four operators have a closed form; longer ones have none that is
cheap.  Floor: quench.  Must not know charges or multipliers.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence

import numpy as np

from maxent.quench.gaussian_evolution import GaussianEvolution, Motion
from maxent.quench.gaussian_starts import EQUAL, GaussianStart, Part
from maxent.quench.gaussian_words import WordSum

__all__ = ["long_time_words", "word_mean", "word_traces"]


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
