"""The same family as given, recombined, and on a face: every form in which core meets it."""

from __future__ import annotations

import functools
from dataclasses import dataclass
from typing import Any

import numpy as np

from tests.conformance.dense import Dense
from tests.conformance.examples import Example, examples

#: A recombination that mixes and has large and small entries; on faces it also drops a charge.
MATRIX = np.array([[2.0, -0.5, 0.3], [0.1, 1.0, -4.0], [0.6, 0.02, 0.7]])
OFFSET = np.array([0.3, -2.0, 0.1])


@dataclass(frozen=True)
class View:
    name: str
    family: Any
    dense: Dense

    @property
    def m(self) -> int:
        return len(self.dense.charges)

    def multipliers(self) -> list[np.ndarray]:
        """Zero, one charge alone (a degenerate exponent), and two generic points."""
        rng = np.random.default_rng(5)
        return [np.zeros(self.m), np.eye(self.m)[0], rng.standard_normal(self.m), 3 * rng.standard_normal(self.m)]


def plateau_face(example: Example) -> tuple[Any, Dense]:
    """Face of charge 0, whose lowest level is 0, and its dense picture."""
    v = np.eye(3)[0]
    face = example.family.face(v, 1e-13)
    isometry = example.dense.ground(v, example.degeneracy)
    return face, example.dense.compressed(isometry)


@functools.cache
def views() -> tuple[View, ...]:
    out = []
    for e in examples():
        out.append(View(f"{e.name}-given", e.family, e.dense))
        out.append(View(f"{e.name}-combined", e.family.combine(MATRIX, OFFSET), e.dense.combined(MATRIX, OFFSET)))
        face, dense = plateau_face(e)
        out.append(View(f"{e.name}-face", face.family, dense))
        mixed = face.family.combine(MATRIX[:2], OFFSET[:2])
        out.append(View(f"{e.name}-face-combined", mixed, dense.combined(MATRIX[:2], OFFSET[:2])))
    return tuple(out)


def compiled_views() -> tuple[View, ...]:
    """The views that are also asked under JAX: all but faces of most kinds, for each shape is a compilation."""
    some = ("microstates-log_weights-face", "matrices-real-face")
    return tuple(
        v for v in views() if v.name in some or v.name.endswith(("-given", "-combined")) and "face" not in v.name
    )
