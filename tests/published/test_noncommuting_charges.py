"""Non-commuting charges: the nearest reachable point of a qubit, next to tests/outside/test_published_models.py."""

from __future__ import annotations

import pytest

import maxent
from maxent.families import Matrices
from tests.corpus.pieces import PAULI

ASKED = {"x": 0.8, "y": 0.6, "z": 0.3}


@pytest.fixture(scope="module")
def qubit():
    return Matrices({name: PAULI[name] for name in "xyz"})


def test_distance_and_nearest_point_of_an_unreachable_qubit(qubit):
    """Closed form (Bloch ball): |r|^2 = 1.09, distance sqrt(1.09) - 1, nearest r/|r|, support 1 in that direction."""
    result = maxent.solve(qubit, ASKED, explain=True, metric=dict.fromkeys("xyz", 1.0))
    assert str(result.verdict) == "infeasible"
    assert result.nearest.distance == pytest.approx(0.04403065089105507, abs=1e-10)
    assert list(result.nearest.targets.values()) == pytest.approx([0.766261, 0.574696, 0.287348], abs=6e-7)
    direction = result.certificate.direction
    length = sum(c**2 for c in direction.values()) ** 0.5
    assert result.certificate.lowest / length == pytest.approx(-1.0, abs=1e-10)
    # the nearest point itself is a pure state; a shade inside it is solved
    edge = maxent.solve(qubit, result.nearest.targets)
    assert (str(edge.verdict), edge.face.dimension) == ("boundary", 1)
    inside = maxent.solve(qubit, {name: 0.999 * v for name, v in result.nearest.targets.items()})
    assert str(inside.verdict) == "solved"
