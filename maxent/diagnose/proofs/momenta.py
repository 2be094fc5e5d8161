"""Matrices of given momentum of a ring: roots of unity with a proved last digit, and what they are multiplied with.

``h(k) = sum_r t_r e^{ikr}`` with ``k = 2 pi m/L`` needs nothing but the L-th roots of unity.  They are powers of the
first one, computed in integers of 192 bits, where L multiplications lose some 20 of them.  Floor: diagnose.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from fractions import Fraction
from functools import lru_cache
from typing import NamedTuple

import numpy as np

from maxent.diagnose.proofs.bounds import TINY, gamma

__all__ = ["at_momenta", "combined_amplitudes", "roots_of_unity"]

#: Bits behind the point.
BITS = 192

#: The numbers of an array as fractions.
_fractions = np.vectorize(Fraction, otypes=[object])


class Amplitude(NamedTuple):
    """Real and imaginary parts (p, p) in fractions."""

    real: np.ndarray
    imag: np.ndarray


#: By distance.
Amplitudes = dict[int, Amplitude]


@lru_cache(maxsize=4)
def roots_of_unity(n: int) -> np.ndarray:
    """``exp(2 pi i j/n)`` for j = 0..n-1; real and imaginary parts off by less than 2^-53."""
    one = 1 << BITS
    step = _turn(n)
    out, (x, y) = np.empty(n, complex), (one, 0)
    for j in range(n):
        out[j] = complex(x / one, y / one)  # quotients of integers are rounded correctly
        x, y = (x * step[0] - y * step[1]) >> BITS, (x * step[1] + y * step[0]) >> BITS
    return out


def _turn(n: int) -> tuple[int, int]:
    """Cosine and sine of ``2 pi/n`` in units of 2^-BITS, off by a few of them."""
    angle = (2 * _pi() << 16) // n  # 16 more bits on the way
    if n < 8:  # the series wants a small angle: halve it three times, and square the root as often
        angle >>= 3
    one = 1 << (BITS + 16)
    cosine, sine, term, k = 0, 0, one, 0
    while term:
        which, sign = k % 2, 1 if k % 4 < 2 else -1
        cosine, sine = (cosine, sine + sign * term) if which else (cosine + sign * term, sine)
        k += 1
        term = ((term * angle) >> (BITS + 16)) // k
    for _ in range(3 if n < 8 else 0):
        cosine, sine = (cosine * cosine - sine * sine) >> (BITS + 16), (2 * cosine * sine) >> (BITS + 16)
    return cosine >> 16, sine >> 16


def _pi() -> int:
    """Pi in units of 2^-BITS by J. Machin's formula, ``16 arctan(1/5) - 4 arctan(1/239)``."""
    one, guard = 1 << (BITS + 16), 16

    def arctan(x: int) -> int:
        total, power, k = 0, one // x, 0
        while power:
            total += (power if k % 2 == 0 else -power) // (2 * k + 1)
            power, k = power // (x * x), k + 1
        return total

    return (16 * arctan(5) - 4 * arctan(239)) >> guard


def combined_amplitudes(w: np.ndarray, charges: Sequence[Mapping[int, np.ndarray]], *, back: int, p: int) -> Amplitudes:
    """``sum_j w_j t_jr`` of every distance r, exactly, with the rule of the opposite direction enforced.

    Parameters
    ----------
    w : (m,) ndarray
    charges : sequence of m dicts of int to (p, p) arrays
    back : {1, -1}
        1: ``t_{-r} = t_r^H`` (hopping); -1: ``t_{-r} = -t_r^T`` (pairing).
    p : int
    """
    none = np.full((p, p), Fraction(0))
    total: Amplitudes = {}
    for weight, amplitudes in zip(w.tolist(), charges, strict=True):
        for r, t in amplitudes.items() if weight else ():
            a = np.asarray(t, complex)
            if not np.isfinite(a).all():
                raise OverflowError("amplitudes that are not finite")
            here, weighted = total.get(r, Amplitude(none, none)), Fraction(weight)
            total[r] = Amplitude(here.real + weighted * _fractions(a.real), here.imag + weighted * _fractions(a.imag))
    out: Amplitudes = {}
    for r in {*total, *(-r for r in total)}:
        here, there = total.get(r, Amplitude(none, none)), total.get(-r, Amplitude(none, none))
        out[r] = Amplitude((here.real + back * there.real.T) / 2, (here.imag - there.imag.T) / 2)
    return out


def at_momenta(amplitudes: Amplitudes, cells: int, *, antiperiodic: bool, p: int) -> tuple[np.ndarray, np.ndarray]:
    """``sum_r t_r e^{ikr}`` of all momenta (L, p, p), and bounds (p, p) of the error of each entry."""
    turns = 1 + antiperiodic
    roots, m = roots_of_unity(turns * cells), turns * np.arange(cells) + antiperiodic
    total, size = np.zeros((cells, p, p), complex), np.zeros((p, p))
    for r, t in amplitudes.items():
        a = t.real.astype(float) + 1j * t.imag.astype(float)
        total += roots[(m * r) % (turns * cells)][:, None, None] * a
        size += np.abs(a)
    # sqrt 2 u for the root and for the amplitude, sqrt 2 gamma_2 for the product, and the sum
    return total, float(gamma(len(amplitudes) + 7)) * size + 16 * (len(amplitudes) + 1) * float(TINY)
