"""Ratio of neighbouring level spacings of one symmetry sector, and what to compare it with.

Levels of different sectors do not know of each other: merged sectors look uncorrelated whatever the system, and exact
degeneracies show a symmetry that was not resolved.  Floor: quench.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np

from maxent.quench.levels import EQUAL, number_list

__all__ = ["REFERENCES", "Reference", "SpacingRatio", "middle", "spacing_ratio"]


class Reference(NamedTuple):
    """A mean spacing ratio to compare with, and where it comes from."""

    value: float
    source: str


#: Mean spacing ratios of reference ensembles.
REFERENCES = {
    "uncorrelated levels": Reference(2 * math.log(2) - 1, "closed form"),
    "orthogonal ensemble": Reference(
        0.5307, "numerics for large matrices, from memory: Y. Y. Atas et al., Phys. Rev. Lett. 110, 084101 (2013)"
    ),
    "orthogonal ensemble, 3x3 surmise": Reference(4 - 2 * math.sqrt(3), "closed form"),
    "unitary ensemble": Reference(
        0.5996, "numerics for large matrices, from memory: Y. Y. Atas et al., Phys. Rev. Lett. 110, 084101 (2013)"
    ),
    "unitary ensemble, 3x3 surmise": Reference(2 * math.sqrt(3) / math.pi - 0.5, "closed form"),
}


@dataclass(frozen=True)
class SpacingRatio:
    """Mean ratio of neighbouring level spacings, the smaller over the larger.

    Attributes
    ----------
    mean, error : float
        Mean and its standard error, the ratios taken as independent.
    number : int
        How many ratios.
    gaps, degenerate : int
        Spacings in the part of the spectrum used, and how many of them are zero to rounding; ratios with such a spacing
        are left out.
    """

    mean: float
    error: float
    number: int
    gaps: int
    degenerate: int

    def __str__(self) -> str:
        return (
            f"mean spacing ratio {self.mean:.4f} +- {self.error:.4f} from {self.number} ratios, "
            f"{self.degenerate} exact degeneracies among {self.gaps} spacings"
        )


def spacing_ratio(energies: Any, *, part: float = 0.8, most: float = 0.02, rtol: float = EQUAL) -> SpacingRatio:
    """Mean ratio of neighbouring spacings of the levels of one symmetry sector.

    Parameters
    ----------
    energies : (n,) array_like
        Levels of one sector; merged sectors look uncorrelated whatever the system.
    part : float, optional
        Middle part of the levels that is used.
    most : float, optional
        Largest fraction of spacings that may be zero to rounding: many exact degeneracies mean an unresolved
        symmetry, and a ratio without meaning.
    rtol : float, optional
        Spacings below this fraction of the spectral width are zero.

    Returns
    -------
    SpacingRatio

    Raises
    ------
    ValueError
        Too many exact degeneracies (with their number), fewer than ten levels in the middle part, or a part that is
        not between 0 and 1.

    References
    ----------
    V. Oganesyan and D. A. Huse, Phys. Rev. B 75, 155111 (2007); from memory.
    """
    levels = np.sort(number_list("energies", energies))
    inner = levels[middle(len(levels), part)]
    if len(inner) < 10:
        raise ValueError(f"a spacing ratio needs ten levels at least, the middle part has {len(inner)}")
    gaps = np.diff(inner)
    zero = gaps <= rtol * (levels[-1] - levels[0])
    degenerate = int(zero.sum())
    if degenerate > most * len(gaps):
        raise ValueError(
            f"{degenerate} of {len(gaps)} spacings are exact degeneracies: a symmetry is not resolved, or the point is "
            "special; the spacing ratio says nothing here"
        )
    fine = ~(zero[1:] | zero[:-1])
    first, second = gaps[:-1][fine], gaps[1:][fine]
    ratios = np.minimum(first, second) / np.maximum(first, second)
    error = float(np.std(ratios, ddof=1) / math.sqrt(len(ratios)))
    return SpacingRatio(float(ratios.mean()), error, len(ratios), len(gaps), degenerate)


def middle(n: int, part: float) -> slice:
    """Middle part of n sorted levels."""
    if not 0 < part <= 1:
        raise ValueError(f"part must be a fraction in (0, 1], not {part!r}")
    cut = int(0.5 * (1 - part) * n)
    return slice(cut, n - cut)
