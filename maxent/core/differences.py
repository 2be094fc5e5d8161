"""Divided differences of the exponential: the weights of the Kubo-Mori inner product.  Floor: core."""

from __future__ import annotations

from typing import Any

from maxent.core.contract import namespace

__all__ = ["divided_differences"]


def divided_differences(levels: Any, weights: Any) -> Any:
    """Divided differences of ``exp(-E)`` over pairs of levels, normalised as the weights are.

    ``K_ab = integral_0^1 p_a^(1-s) p_b^s ds = max(p_a, p_b) (1 - exp(-|d|))/|d|`` with ``d = E_a - E_b``; the
    weights of the Kubo-Mori inner product (D. Petz, J. Math. Phys. 35, 780 (1994),
    from memory).

    Parameters
    ----------
    levels : (d,) array
        Eigenvalues of the exponent.
    weights : (d,) array
        ``exp(-levels)`` up to a common factor.

    Returns
    -------
    (d, d) array
    """
    xp = namespace(levels)
    gap = xp.abs(levels[:, None] - levels[None, :])
    # below 1e-8 the series 1 - gap/2 is right to the last digit; the inner where keeps the division finite
    ratio = xp.where(gap > 1e-8, -xp.expm1(-gap) / xp.where(gap > 1e-8, gap, 1.0), 1.0 - 0.5 * gap)
    return ratio * xp.maximum(weights[:, None], weights[None, :])
