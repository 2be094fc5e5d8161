"""One trust-region Newton step on the dual ``F(lam) = ln Z``, the same for NumPy and under ``lax.while_loop``.

Charges are counted from their targets, so the gradient is ``-values`` and the Hessian the covariance.  Every function
takes its array namespace from its arguments; nothing here branches on a value that may be traced.  Floor: core.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any, NamedTuple

import numpy as np

from maxent.core.contract import EPS, Evaluation, namespace

__all__ = ["Iterate", "at_floor", "begin", "curvatures", "newton_step", "settle", "trust_step"]

#: Rejected steps in a row after which no further progress is expected: the radius has shrunk by 4^30.
PATIENCE = 30


class Iterate(NamedTuple):
    """State of the iteration: point, trust radius, evaluation, curvatures h and their axes, rejections in a row."""

    lam: Any
    radius: Any
    evaluation: Evaluation
    curvature: Any
    axes: Any
    rejected: Any

    @property
    def residual(self) -> Any:
        """Norm of the whitened residual."""
        return norm(self.evaluation.values)


def norm(x: Any) -> Any:
    """Euclidean norm, traceable."""
    return namespace(x).sqrt(namespace(x).sum(x * x))


def trust_step(gradient: Any, curvature: Any, axes: Any, radius: Any) -> tuple[Any, Any]:
    """Minimiser of ``g.s + s.H.s/2`` in the ball ``|s| <= radius``, and the predicted decrease.

    Newton's iteration on ``1/|s(mu)|`` converges monotonically from the left (Conn, Gould, Toint, Trust-Region Methods,
    2000, section 7.3, from memory), so a fixed number of passes serves both drivers.
    """
    xp = namespace(gradient)
    g = axes.T @ gradient
    mu = xp.maximum(norm(g) / radius - xp.max(curvature), 0.0)
    for _ in range(8):
        size = norm(g / (curvature + mu))
        slope = xp.sum(g**2 / (curvature + mu) ** 3) / xp.maximum(size, 1e-300)
        mu = xp.where(size > radius, mu + (size / radius - 1) * size / xp.maximum(slope, 1e-300), mu)
    s = g / (curvature + mu)
    return -(axes @ s), s @ g - 0.5 * xp.sum(curvature * s**2)


def curvatures(evaluation: Evaluation) -> tuple[Any, Any]:
    """Eigenvalues (ascending) and axes of the covariance.

    On the host, when the Gram matrix can no longer resolve the small ones, squared singular values of the factor are
    taken instead: they reach 1e-30 of the largest where the product ends at 1e-16.
    """
    xp = namespace(evaluation.values)
    h, axes = xp.linalg.eigh(evaluation.covariance)
    if xp is np and evaluation.factor is not None and len(h) and h[0] < 1e-7 * h[-1]:
        from maxent.core.whiten import tall_triangle

        triangle = tall_triangle(evaluation.factor())
        if triangle.shape[0] >= triangle.shape[1]:
            _, singular, right = np.linalg.svd(triangle)
            return singular[::-1] ** 2, right[::-1].T
    return xp.maximum(h, 0.0), axes


def begin(evaluate: Callable[[Any], Evaluation], lam: Any) -> Iterate:
    """Iterate at a starting point."""
    xp = namespace(lam)
    evaluation = evaluate(lam)
    return Iterate(lam, 1.0 + norm(lam), evaluation, *curvatures(evaluation), xp.asarray(0))


def newton_step(
    evaluate: Callable[[Any], Evaluation], at: Iterate, inside: Callable[[Any, Any, Evaluation], Any] | None = None
) -> Iterate:
    """One trial step; `inside` is `Family.inside`, which keeps it in the domain.

    While the predicted decrease can be seen in F, F decides; below that (F is blind for residuals under 1e-8) the
    residual and the slope at the far end decide.  A non-finite trial is a rejected step.
    """
    lam, radius, ev, h, axes, rejected = at
    xp = namespace(lam)
    g, size = -ev.values, norm(ev.values)
    floored = xp.maximum(h, 1e-32 * h[-1] + 1e-300)
    s, predicted = trust_step(g, floored, axes, radius)
    if inside is not None and (kept := inside(lam, s, ev)) is not s:
        s = kept
        predicted = xp.maximum(-(g @ s) - 0.5 * xp.sum(floored * (axes.T @ s) ** 2), -0.5 * (g @ s))
    new = evaluate(lam + s)
    blind = 8 * EPS * (xp.abs(ev.log_partition) + xp.maximum(ev.level, new.level) + 1)
    new_size, length = norm(new.values), norm(s)
    better = (new_size <= 0.9 * size) | ((new_size <= 1.5 * size) & (xp.abs(new.values @ s) <= xp.abs(g @ s)))
    ratio = xp.where(
        predicted > 20 * blind,
        (ev.log_partition - new.log_partition) / xp.maximum(predicted, 1e-300),
        xp.where(better, 1.0, -1.0),
    )
    ok = (ratio > 1e-3) & xp.isfinite(new.log_partition) & xp.isfinite(new_size)
    widened = xp.where((ratio > 0.7) & (length > 0.9 * radius), 3 * radius, xp.maximum(radius, 1e-3))
    kept = xp.where(ratio < 0.25, xp.maximum(0.3 * length, 1e-3), widened)
    radius = xp.where(ok, kept, 0.25 * length)
    if xp is np:  # host: one decision, nothing is merged element by element
        if not ok:
            return Iterate(lam, radius, ev, h, axes, rejected + 1)
        return Iterate(lam + s, radius, new, *curvatures(new), np.asarray(0))
    pick = lambda a, b: xp.where(ok, a, b)
    fields = ("log_partition", "values", "covariance", "rounding", "level", "error")
    merged = {k: pick(getattr(new, k), getattr(ev, k)) for k in fields}
    lowest = None if new.lowest is None else pick(new.lowest, ev.lowest)
    new_h, new_axes = curvatures(new)
    return Iterate(
        pick(lam + s, lam), radius, replace(new, **merged, lowest=lowest, factor=None),
        pick(new_h, h), pick(new_axes, axes), xp.where(ok, 0, rejected + 1),
    )  # fmt: skip


def at_floor(at: Iterate) -> Any:
    """Whether the residual is what rounding alone explains."""
    return at.residual <= at.evaluation.rounding


def settle(evaluate: Callable[..., Evaluation], at: Iterate, *, anyway: bool = False) -> Iterate:
    """The best of a few more steps at the rounding floor, where the exponent is so large that the floor is high.

    With `anyway` they are tried wherever the floor is: what a family states as its rounding may be too much.

    Host only.  Near a boundary ``eps |lam.A|`` exceeds 1e-12 and single residuals scatter by a decade.  Values alone
    tell whether a step is worth its second derivatives.
    """
    best = at
    failed = 0
    while (anyway or best.evaluation.level > 1e3) and failed < 6:
        trust, (h, axes) = best.radius, (best.curvature, best.axes)
        floored = np.maximum(h, 1e-32 * h[-1] + 1e-300)
        # a shortened step leaves the same rounding error elsewhere: 1, 1/2, 1/4, ... of the Newton step
        s, _ = trust_step(-best.evaluation.values, floored, axes, trust)
        lam = best.lam + s * 0.5**failed
        better = norm(evaluate(lam, 1).values) < 0.9 * best.residual
        if better and norm((new := evaluate(lam)).values) < 0.9 * best.residual:
            best, failed = Iterate(lam, trust, new, *curvatures(new), np.asarray(0)), 0
        else:
            failed += 1
    return best
