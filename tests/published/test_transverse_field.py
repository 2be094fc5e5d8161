"""Transverse-field chains after a quench: values that tests/quench leaves open.

Energy -sum (X X + h Z).  P. Calabrese, F. H. L. Essler, M. Fagotti, Phys. Rev. Lett. 106, 227203 (2011) and J. Stat.
Mech. (2012) P07016, P07022: one-particle values 2 sqrt(1 + h^2 - 2 h cos k) and occupations (1 - cos Delta_k)/2; digits
by quadrature and by finite sums.
"""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose

import maxent
from maxent.families import Bilinears, Modes, Periodic
from maxent.quench import TransverseFieldChain
from tests.outside.test_published_quadratic import ground_state, moment

INF = float("inf")


def test_neighbours_on_the_infinite_chain():
    """<sx sx> = 0.8476334108045404 after h0 = 1/3 -> 2/3, from the correlations and from the energy (identity)."""
    found = TransverseFieldChain(2 / 3).after_quench(1 / 3)
    assert found.mean_word({0: "X", 1: "X"}) == pytest.approx(0.8476334108045404, abs=1e-11)
    assert -found.energy - 2 / 3 * found.magnetisation == pytest.approx(0.8476334108045404, abs=1e-11)


@pytest.mark.parametrize("before", [INF, 0.0])
def test_quenches_to_the_critical_point(before):
    """h0 = infinity or 0 -> h = 1: <sz> = <sx sx> = 1/2, e = -1, s = 2 ln 2 - 1 = 0.3862943611198908 (closed form)."""
    found = TransverseFieldChain(1.0).after_quench(before)
    numbers = [found.magnetisation, found.mean_word({0: "X", 1: "X"}), found.energy, found.entropy]
    assert_allclose(numbers, [0.5, 0.5, -1.0, 0.3862943611198908], atol=1e-11)


def test_critical_ground_state():
    """e = -4/pi = -1.2732395447351628, <sz> = 2/pi = 0.6366197723675814 (P. Pfeuty, Ann. Phys. 57, 79 (1970), from
    memory); at this edge the energy has no multiplier."""
    chain = TransverseFieldChain(1.0)
    ground = chain.after_quench(1.0)
    assert_allclose([ground.energy, ground.magnetisation], [-1.2732395447351628, 0.6366197723675814], atol=1e-11)
    result, state = ground.ensemble({"energy": chain.charge(0)})
    assert str(result.verdict) == "boundary" and state is None


MULTIPLIERS = [-1.0325572550099713, 1.3908251390131965, 3.003624015659242, 5.427006409682405]


def test_multipliers_of_a_ring_of_eight():
    """h0 = 0.5 -> h = 2, k = pi/8, 3 pi/8, 5 pi/8, 7 pi/8: ln(1/n - 1) (closed form)."""
    k = np.pi * np.array([1, 3, 5, 7]) / 8
    complete = TransverseFieldChain(2.0).after_quench(0.5)
    assert_allclose(complete.multipliers(k), MULTIPLIERS, atol=1e-12)
    n = complete.occupations(k)
    assert n[0] > 0.5, "an inverted mode: its multiplier is negative"
    result = maxent.solve(Modes.own("abcd"), dict(zip("abcd", n, strict=True)))
    assert_allclose(list(result.multipliers.values()), MULTIPLIERS, atol=1e-12)
    # diagonal entropy is half of that of k and -k: V. Gurarie, J. Stat. Mech. (2013) P02014; M. Kormos, L. Bucciantini,
    # P. Calabrese, EPL 107, 40002 (2014)
    assert result.entropy == pytest.approx(1.293659249410484, abs=1e-12)
    over = dict(zip("abcd", n, strict=True)) | {"a": 1.001}
    assert str(maxent.solve(Modes.own("abcd"), over).verdict) == "infeasible"
    assert str(maxent.solve(Modes.own("abcd"), over | {"a": 1.0}).verdict) == "boundary"


@pytest.mark.parametrize(
    ("size", "magnetisation", "energy"),
    [
        (8, 0.5027462337846147, -0.7268640746651728),
        (12, 0.5161532883171293, -0.725820197411427),
        (24, 0.5173153941393388, -0.7257656426044572),
    ],
)
def test_complete_ensemble_of_a_ring(size, magnetisation, energy):
    """h0 = 2 -> 0.5 on rings: size/2 moments fix every occupation; finite sums, infinite chain 0.517315809223."""
    before, after = 2.0, 0.5
    start = ground_state(size, before)
    charges = {f"I{m}": moment(size, after, m) for m in range(size // 2)}
    asked = {name: start.mean(q) for name, q in charges.items()}
    result = maxent.solve(Bilinears(charges), asked)
    assert str(result.verdict) == "solved"
    assert result.values["I0"] / size - after == pytest.approx(energy, abs=1e-12)
    count = result.mean(Periodic(size, {0: 1.0}, antiperiodic=True))
    assert 1 - 2 * count / size == pytest.approx(magnetisation, abs=1e-10)
    # one moment more is a combination of the others
    further = Bilinears(charges | {"more": moment(size, after, size // 2 + 1)})
    twin = maxent.solve(further, asked | {"more": start.mean(moment(size, after, size // 2 + 1))})
    assert len(twin.redundancies) == 1 and twin.entropy == pytest.approx(result.entropy, abs=1e-10)


@pytest.mark.parametrize("before", [INF, 0.0])
def test_temperature_of_a_quench_to_the_critical_point(before):
    """beta, thermal <sz> and thermal entropy at the energy after h0 = infinity or 0 -> h = 1: own quadrature.

    Definition as in D. Rossini, A. Silva, G. Mussardo, G. E. Santoro, Phys. Rev. Lett. 102, 127204 (2009).
    """
    chain = TransverseFieldChain(1.0)
    result, state = chain.after_quench(before).ensemble({"energy": chain.charge(0)})
    assert_allclose(
        [result.multipliers["energy"], state.magnetisation, state.entropy],
        [0.7316165802876614, 0.500000000000006, 0.3976038487391282],
        atol=1e-9,
    )
