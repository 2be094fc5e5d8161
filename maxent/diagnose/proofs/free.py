"""Free particles: which combination of the charges has which lowest value, from the numbers given.

At most one fermion per level: ``v.Q`` is lowest with all negative levels filled, a sum that is bounded from below.
Any number of particles per level: ``v.Q`` has a lowest value, the one without particles, only if no level lies below
zero.  Directions come out of float64, so that levels meant to be at zero lie below it by a rounding; with a combination
u that is positive on all levels, ``v + rho u`` with a tiny rho is a direction without that flaw, and the theorem is
about it.  Floor: diagnose.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Any, Protocol

import numpy as np
import scipy.sparse as sp

from maxent.core.contract import EPS
from maxent.diagnose.proofs.bounds import Bound, scaled
from maxent.diagnose.proofs.levels import deepest_level, lowest_filled
from maxent.diagnose.proofs.listed import lowest_listed
from maxent.diagnose.proofs.momenta import at_momenta, combined_amplitudes
from maxent.diagnose.proofs.one_body import (
    Blocks,
    block_filled,
    block_lowest,
    components,
    stack_filled,
    stack_lowest,
    stack_of,
)
from maxent.diagnose.proofs.sums import dot, exact_sum
from maxent.families.bilinears import Bilinears
from maxent.families.modes import LOOSE, Modes
from maxent.families.quadratic import Quadratic

__all__ = ["bound_of_bilinears", "bound_of_modes"]

FILLED, CONE = "exact sum over levels", "no level below zero, in exact arithmetic"
PARTS = "computed eigenvectors with a bounded remainder"

#: Stacks of this many blocks and more are worked on with bounds in advance; fewer blocks one by one, more sharply.
MANY = 200

NONE = Fraction(0)

#: An error bound of at least 8 u |x| is so much wider that the rounding of ``x - error`` is inside.
WIDER = 1.2


def bound_of_modes(family: Modes, v: np.ndarray, targets: np.ndarray) -> Bound | None:
    """Lower bound of ``v.(Q - q)`` over all occupations of independent levels; None where the numbers overflow."""
    charges = family.charges if family.edges is None else np.concatenate([family.charges, family.edges], axis=1)
    pair = scaled(v, np.abs(charges).max(axis=1, initial=0.0))
    if pair is None:
        return None
    (w, exponent), direction = pair, [Fraction(x) for x in v.tolist()]
    if family.statistics == "fermions":
        low, exact = lowest_filled(w, charges, family.degeneracy)
        lowest = low * Fraction(2) ** exponent + _empty(direction, family.constant, targets)
        return Bound(lowest, exact, FILLED if exact else PARTS, tuple(direction))
    if charges.shape[1] and lowest_listed(w, charges)[0] < 0:
        found = None if family.anchor is None else deepest_level(w, charges, family.anchor)
        if found is None or found[1] > LOOSE * EPS * Fraction(float(np.abs(w) @ np.abs(charges).max(axis=1))):
            return Bound(None, False, CONE, tuple(direction))
        direction = _moved(direction, found[0] * Fraction(2) ** exponent, family.anchor)
    return Bound(_empty(direction, family.constant, targets), True, CONE, tuple(direction))


def bound_of_bilinears(family: Bilinears, v: np.ndarray, targets: np.ndarray) -> Bound | None:
    """Lower bound of ``v.(Q - q)`` over all states of fermions, or of bosons without pairing; charges as given."""
    operators = list(family.operators().values())
    body: OneBody = Ring.of(operators) if operators[0].is_periodic else Matrices.of(operators)
    pair = scaled(v, body.sizes)
    if pair is None:
        return None
    (w, exponent), direction = pair, [Fraction(x) for x in v.tolist()]
    back, constant = Fraction(2) ** exponent, np.array([q.constant for q in operators])
    if family.number is not None:  # of bosons all in the lowest level
        assert isinstance(body, Matrices)  # as the family asks for
        fermions = family.statistics == "fermions"
        low = body.filled_with(w, family.number) if fermions else family.number * body.lowest_level(w)
    elif family.statistics == "fermions":
        low = body.filled(w)
    else:
        depth = min(body.lowest_level(w), Fraction(0))
        size = Fraction(float(np.abs(w) @ body.sizes)) * body.width
        if depth < -LOOSE * EPS * size:
            return Bound(None, False, PARTS, tuple(direction))
        if depth < 0:
            anchor, shift = scaled(np.asarray(family.particles.confining, float), body.sizes) or (None, 0)
            height = Fraction(0) if anchor is None else body.lowest_level(anchor) * Fraction(2) ** shift
            if not height > 0:
                return Bound(None, False, PARTS, tuple(direction))
            direction = _moved(direction, -depth * back / height, family.particles.confining)
        low = Fraction(0)
    return Bound(low * back + _empty(direction, constant, targets), False, PARTS, tuple(direction))


def _moved(direction: Sequence[Fraction], rho: Fraction, anchor: Any) -> list[Fraction]:
    """``v + rho u``."""
    return [x + rho * Fraction(float(u)) for x, u in zip(direction, anchor, strict=True)]


def _empty(direction: list[Fraction], constant: np.ndarray, targets: np.ndarray) -> Fraction:
    """Value of ``x.(Q - q)`` without any particle."""
    return dot(direction, constant) - dot(direction, targets)


# ---------------------------------------------------------------- one-body matrices


class OneBody(Protocol):
    """Charges as one-body matrices; `sizes` (m,) are largest entries, `width` bounds the length of a row."""

    @property
    def sizes(self) -> np.ndarray: ...
    @property
    def width(self) -> int: ...
    def filled(self, w: np.ndarray) -> Fraction: ...
    def lowest_level(self, w: np.ndarray) -> Fraction: ...


@dataclass(frozen=True)
class Matrices:
    """Charges given by matrices, cut into blocks; with pairing every level comes with its hole and counts half.

    Attributes
    ----------
    blocks : Blocks
    traces : (m,) list of Fraction
        With pairing: traces of the one-body matrices, half of which is counted; otherwise zeros.
    share : Fraction
        1, or 1/2 with pairing.
    sizes : (m,) ndarray
    width : int
    """

    blocks: Blocks
    traces: list[Fraction]
    share: Fraction
    sizes: np.ndarray
    width: int

    @classmethod
    def of(cls, operators: Sequence[Quadratic]) -> Matrices:
        """The one-body matrices of checked operators."""
        paired = any(q.pairing is not None for q in operators)
        charges = [_with_holes(q) if paired else sp.csr_array(q.hopping) for q in operators]
        traces = [exact_sum(np.real(sp.csr_array(q.hopping).diagonal())) if paired else Fraction(0) for q in operators]
        sizes = np.array([np.abs(q.data).max(initial=0.0) for q in charges])
        return cls(components(charges), traces, Fraction(1, 1 + paired), sizes, charges[0].shape[0])

    def filled(self, w: np.ndarray) -> Fraction:
        """Lower bound of the value with all negative levels filled."""
        total, blocks = Fraction(0), self.blocks
        if blocks.listed.shape[1]:
            total += lowest_filled(w, blocks.listed, np.ones(blocks.listed.shape[1]))[0]
        for stack in blocks.stacks:
            if stack.shape[1] >= MANY:
                total += stack_filled(*stack_of(w, stack))
            else:
                total += sum((block_filled(w, list(stack[:, b])) for b in range(stack.shape[1])), Fraction(0))
        for block in blocks.large:
            total += block_filled(w, block)
        return self.share * (total + sum((Fraction(x) * t for x, t in zip(w.tolist(), self.traces, strict=True)), NONE))

    def filled_with(self, w: np.ndarray, number: int) -> Fraction:
        """The same with `number` particles: ``Tr min(K - mu, 0) + mu N`` bounds it for every mu."""
        levels = np.sort(self._levels(w))
        ends = np.concatenate([levels[:1], levels, levels[-1:]])
        mu = float(0.5 * (ends[number] + ends[number + 1]))
        n = np.ones(self.blocks.listed.shape[1])
        unit = lambda a: np.broadcast_to(np.eye(a.shape[-1]), a.shape[-3:])
        raised = Matrices(
            Blocks(
                np.vstack([self.blocks.listed, n]),
                [np.concatenate([a, unit(a)[None]]) for a in self.blocks.stacks],
                [(*block, np.eye(len(block[0]))) for block in self.blocks.large],
            ),
            [*self.traces, Fraction(0)], self.share, np.append(self.sizes, 1.0), self.width,
        )  # fmt: skip
        return raised.filled(np.append(w, -mu)) + number * Fraction(mu)

    def _levels(self, w: np.ndarray) -> np.ndarray:
        parts = [w @ self.blocks.listed]
        parts += [np.linalg.eigvalsh(stack_of(w, a)[0]).ravel() for a in self.blocks.stacks]
        parts += [np.linalg.eigvalsh(sum(x * q for x, q in zip(w, b, strict=True))) for b in self.blocks.large]
        return np.concatenate(parts)

    def lowest_level(self, w: np.ndarray) -> Fraction:
        """A number that no level lies below."""
        found, blocks = [], self.blocks
        if blocks.listed.shape[1]:
            found.append(lowest_listed(w, blocks.listed)[0])
        for stack in blocks.stacks:
            if stack.shape[1] >= MANY:
                found.append(stack_lowest(*stack_of(w, stack)))
            else:
                found += [block_lowest(w, list(stack[:, b])) for b in range(stack.shape[1])]
        return min(found + [block_lowest(w, block) for block in blocks.large])


def _with_holes(q: Quadratic) -> sp.csr_array:
    """``[[h, D], [-D*, -h*]]``."""
    h = sp.csr_array(q.hopping)
    d = sp.csr_array(h.shape) if q.pairing is None else sp.csr_array(q.pairing)
    return sp.csr_array(sp.block_array([[h, d], [-d.conj(), -h.conj()]]))


@dataclass(frozen=True)
class Ring:
    """Charges given by distance, at all momenta of the ring."""

    operators: tuple[Any, ...]
    sizes: np.ndarray
    width: int

    @classmethod
    def of(cls, operators: Sequence[Quadratic]) -> Ring:
        """Of checked periodic operators."""
        given = tuple(q.hopping for q in operators)
        entries = [[*q.hopping.values(), *q.pairing.values()] for q in given]
        sizes = np.array([max((float(np.abs(a).max()) for a in e), default=0.0) for e in entries])
        return cls(given, sizes, given[0].modes_per_cell * max(len(e) for e in entries))

    def _blocks(self, w: np.ndarray) -> tuple[np.ndarray, np.ndarray, bool, Fraction]:
        """Blocks of all momenta, the error of their entries, whether holes are among them, trace of a cell."""
        like = self.operators[0]
        p, where = like.modes_per_cell, {"antiperiodic": like.antiperiodic, "p": like.modes_per_cell}
        hopping = combined_amplitudes(w, [q.hopping for q in self.operators], back=1, p=p)
        pairing = combined_amplitudes(w, [q.pairing for q in self.operators], back=-1, p=p)
        trace = sum((hopping[0].real[a, a] for a in range(p)), Fraction(0)) if 0 in hopping else Fraction(0)
        h, error = at_momenta(hopping, like.cells, **where)
        if not any(q.pairing for q in self.operators):
            return h, np.broadcast_to(error, h.shape), False, trace
        d, off = at_momenta(pairing, like.cells, **where)
        back = (-np.arange(like.cells) - int(like.antiperiodic)) % like.cells
        whole = np.block([[h, d], [d.conj().transpose(0, 2, 1), -h[back].transpose(0, 2, 1)]])
        bound = np.block([[error, off], [off.T, error.T]])
        return whole, np.broadcast_to(bound, whole.shape), True, trace

    def filled(self, w: np.ndarray) -> Fraction:
        """Lower bound of the value with all negative levels filled."""
        blocks, error, paired, trace = self._blocks(w)
        if blocks.shape[1] == 1:
            return exact_sum(np.minimum(blocks.real - WIDER * error, 0.0).ravel())
        low = stack_filled(blocks, error)
        return (low + len(blocks) * trace) / 2 if paired else low

    def lowest_level(self, w: np.ndarray) -> Fraction:
        """A number that no level lies below."""
        blocks, error, _, _ = self._blocks(w)
        if blocks.shape[1] == 1:
            return Fraction(float((blocks.real - WIDER * error).min()))
        return stack_lowest(blocks, error)
