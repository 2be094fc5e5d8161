"""Spin rings at the limit of what they can reach: faces of odd sectors, meeting sectors, next to a face; small rings.

The truth is the verdict for matrices over all spins of a small ring, or a closed form.
"""

from __future__ import annotations

import numpy as np
import pytest

import maxent
from maxent.families import SpinRing
from tests.families.test_spin_rings import PROBES, dense, four, matrix, spread


def charges(n: int, names: str) -> dict:
    known = {
        "ising": [(-1, "XX")], "field": [(1, "Z")], "hop": [(1, "XX"), (1, "YY")], "current": [(1, "XY"), (-1, "YX")],
        "critical": [(-1, "XX"), (-1, "Z")], "second": [(1, "XZX"), (1, "YY")], "long": [(1, "XZX")],
    }  # fmt: skip
    return {name: spread(known[name], n) for name in names.split()}


#: Sites, charges, sector, exposing direction, and the dimension of its face: all of them unfinished or undecided when
#: only unique lowest levels were known.
FACES = [
    (5, "ising field", "odd", [-1, 0], 5),
    (4, "ising field", "odd", [0, 1], 4),
    (4, "ising field", "odd", [0, -1], 4),
    (4, "critical second", "odd", [1, 1], 4),
    (4, "long", "odd", [1], 4),
    (5, "hop field", "odd", [1, 0], 2),
    (4, "hop current", "odd", [1, -1], 4),
    (5, "ising field", "both", [1, 0], 2),
]


@pytest.mark.parametrize(("n", "names", "sectors", "direction", "dimension"), FACES)
def test_faces_agree_with_matrices(n, names, sectors, direction, dimension):
    """On the face, its centre and a corner of it; inside; outside; and with a charge that repeats others."""
    terms = charges(n, names)
    ring, spins = SpinRing(n, terms, sectors=sectors), dense(terms, n, sectors)
    v = np.array(direction, float) / np.linalg.norm(direction)
    corner = spins.lowest(v, with_values=True).values
    face = spins.combine(np.eye(len(v)), corner).face(v, 1e-12)
    assert round(np.exp(face.log_dimension)) == dimension
    centre = corner + face.family.reference()[0]
    named = lambda q: dict(zip(ring.names, q, strict=True))
    for q in (corner, centre):
        one, other = maxent.solve(ring, named(q)), maxent.solve(spins, named(q))
        assert one.verdict is other.verdict is maxent.Verdict.BOUNDARY
        assert one.face.dimension == other.face.dimension
        assert one.certificate.verify(spins, named(q)) and other.certificate.verify(ring, named(q))
        assert one.entropy == pytest.approx(other.entropy, abs=1e-9)
        np.testing.assert_allclose(list(one.values.values()), q, atol=1e-10)
        for probe in PROBES[:2]:
            assert one.state.mean(probe) == pytest.approx(other.mean(matrix(probe, n)), abs=1e-8)
    outside = maxent.solve(ring, named(centre - 1e-3 * v))
    assert outside.verdict is maxent.Verdict.INFEASIBLE and outside.certificate.verify(spins, named(centre - 1e-3 * v))
    assert maxent.solve(ring, named(centre + 1e-3 * v)).verdict is maxent.solve(spins, named(centre + 1e-3 * v)).verdict
    twice = terms | {"again": [(3.0 * c, letters) for c, letters in terms[ring.names[0]]]}
    repeated = maxent.solve(
        SpinRing(n, twice, sectors=sectors), named(centre) | {"again": 3.0 * float(centre[0])}
    )  # fmt: skip
    assert repeated.verdict is maxent.Verdict.BOUNDARY and len(repeated.redundancies) == 1
    wrong = maxent.solve(SpinRing(n, twice, sectors=sectors), named(centre) | {"again": 3.0 * float(centre[0]) + 0.1})
    assert wrong.verdict is maxent.Verdict.INCONSISTENT


def test_just_inside_a_corner():
    """0.001 above the ground state the odd charge is next to impossible to move: interior all the same."""
    n = 4
    ring, spins = SpinRing(n, four(n)), dense(four(n), n, "both")
    low = spins.lowest(np.eye(4)[0], with_values=True).values
    targets = dict(zip(ring.names, low + 1e-3 * np.eye(4)[0], strict=True))
    one, other = maxent.solve(ring, targets), maxent.solve(spins, targets)
    assert one.verdict is other.verdict is maxent.Verdict.SOLVED
    assert one.entropy == pytest.approx(other.entropy, abs=1e-9)


@pytest.mark.parametrize("sign", [1, -1])
def test_the_end_of_the_field_in_an_odd_ring(sign):
    """sum Z = +-(L - 2) with L even is the largest an odd ring can have: one spin against all others, entropy ln L."""
    n = 40
    ring = SpinRing(n, {"field": spread([(1, "Z")], n), "ising": spread([(-1, "XX")], n)}, sectors="odd")
    result = maxent.solve(ring, {"field": sign * (n - 2.0), "ising": 0.0})
    assert result.verdict is maxent.Verdict.BOUNDARY
    assert result.face.dimension == n and result.entropy == pytest.approx(np.log(n), abs=1e-12)
    assert result.state.mean_word({0: "Z"}) == pytest.approx(sign * (1 - 2 / n), abs=1e-12)
    assert result.state.mean_word({0: "Z", 7: "Z"}) == pytest.approx(1 - 4 / n, abs=1e-12)
    assert result.state.mean_word({3: "X", 9: "X"}) == pytest.approx(0.0, abs=1e-12)
    # a magnon with amplitude 1/sqrt(L) everywhere: sum X X = 2 at most
    assert maxent.solve(ring, {"field": sign * (n - 2.0), "ising": -2.0}).face.dimension == 1
    assert maxent.solve(ring, {"field": sign * (n - 2.0), "ising": -1.0}).verdict is maxent.Verdict.BOUNDARY
    assert maxent.solve(ring, {"field": sign * (n - 2.0), "ising": -2.1}).verdict is maxent.Verdict.INFEASIBLE
