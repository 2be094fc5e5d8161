"""A fixed number of particles: against all states, closed forms and exact sums; edges; what the ensemble changes."""

from __future__ import annotations

from itertools import combinations_with_replacement, permutations, product
from math import comb, sqrt

import mpmath as mp
import numpy as np
import pytest

import maxent
from maxent.families import Bilinears, Matrices, Microstates
from maxent.families.fixed_levels import canonical


def hermitian(rng, n: int) -> np.ndarray:
    a = rng.standard_normal((n, n)) + 1j * rng.standard_normal((n, n))
    return 0.5 * (a + a.conj().T)


def fillings(modes: int, number: int) -> np.ndarray:
    """Occupations of all states of `number` bosons, one row each."""
    rows = [np.bincount(s, minlength=modes) for s in combinations_with_replacement(range(modes), number)]
    return np.array(rows, int).reshape(-1, modes)


def many_bosons(h: np.ndarray, number: int) -> np.ndarray:
    """``sum h_ab b+_a b_b`` over the states of `fillings`."""
    states = fillings(len(h), number)
    at = {tuple(s): i for i, s in enumerate(states)}
    out = np.zeros((len(states), len(states)), complex)
    for i, s in enumerate(states):
        for a in range(len(h)):
            for b in np.flatnonzero(s):
                t = s.copy()
                t[b] -= 1
                factor = sqrt(s[b] * (t[a] + 1))
                t[a] += 1
                out[at[tuple(t)], i] += h[a, b] * factor
    return out


@pytest.mark.parametrize("number", [0, 1, 3, 6])
def test_bosons_are_all_states_with_their_number(number):
    rng = np.random.default_rng(number)
    given = {"first": hermitian(rng, 4), "second": hermitian(rng, 4), "third": np.diag([0.0, 1, 1, 2])}
    for h in given.values():
        h[:1, 1:] = h[1:, :1] = 0  # a mode of its own, and a block of three
    family = Bilinears(given, statistics="bosons", number=number)
    states = Matrices({name: many_bosons(h, number) for name, h in given.items()})
    assert states.size == comb(number + 3, 3)
    for size in (0.0, 1.0, 30.0):
        lam = size * rng.standard_normal(3)
        one, other = family.evaluate(lam), states.evaluate(lam)
        assert one.log_partition == pytest.approx(other.log_partition, rel=1e-13, abs=1e-12)
        np.testing.assert_allclose(one.values, other.values, atol=1e-12)
        np.testing.assert_allclose(one.covariance, other.covariance, atol=1e-11)
        state = family.state(lam)
        assert state.entropy == pytest.approx(states.state(lam).entropy, abs=1e-11)
        assert state.occupations.sum() == pytest.approx(number, abs=1e-12)
        probe = hermitian(rng, 4)
        assert state.mean(probe) == pytest.approx(states.state(lam).mean(many_bosons(probe, number)), abs=1e-11)
    if not number:
        return
    v = np.array([0.36, 0.48, -0.8])
    low, other = family.lowest(v, with_values=True), states.lowest(v)
    assert (low.value, low.highest) == (pytest.approx(other.value), pytest.approx(other.highest))
    for distance in (1e-1, 1e-8, 0.0, -1e-3):
        targets = dict(zip(given, low.values - distance * v, strict=True))
        found = maxent.solve(family, targets)
        assert found.verdict is maxent.solve(states, targets).verdict
        if found.certificate is not None:
            assert found.certificate.verify(states, targets)


def test_levels_by_enumeration():
    """Five levels, seven bosons: fluctuations of every level, and ln Z_7 - ln Z_8."""
    x, number, beta = np.array([0.0, 0.3, 0.3, 1.1, 2.0]), 7, 0.8
    state = Bilinears({"energy": np.diag(x)}, statistics="bosons", number=number).state(np.array([beta]))
    s, more = fillings(5, number), fillings(5, number + 1)
    p = np.exp(-beta * s @ x)
    z, p = p.sum(), p / p.sum()
    np.testing.assert_allclose(state.filling, p @ s, rtol=1e-13)
    np.testing.assert_allclose(state.variances, p @ s**2 - (p @ s) ** 2, rtol=1e-11)
    assert state.log_partition == pytest.approx(np.log(z), rel=1e-14)
    assert state.insertion == pytest.approx(np.log(z / np.exp(-beta * more @ x).sum()), abs=1e-13)


def test_a_condensate_does_not_fluctuate_as_with_a_free_number():
    """1000 bosons in 400 equidistant levels, three quarters of them in the lowest one.

    With the number free the lowest level has the variance n0 (1 + n0); with 1000 particles exactly it has that of all
    the others together, ``sum n (1 + n)`` over the excited levels, which know of the number by exp(-beta n0) ~ 2e-7.
    """
    number, levels = 1000, np.arange(400.0)
    beta = 0.02
    fixed = Bilinears({"energy": np.diag(levels)}, statistics="bosons", number=number).state(np.array([beta]))
    assert fixed.occupations.sum() == pytest.approx(number, rel=1e-12)
    n0, excited = fixed.filling[0], 1 / np.expm1(beta * levels[1:])
    assert n0 == pytest.approx(number - excited.sum(), rel=1e-6)
    assert fixed.variances[0] == pytest.approx((excited * (1 + excited)).sum(), rel=1e-4)
    assert fixed.variances[0] < 0.02 * n0 * (1 + n0)
    assert fixed.insertion == pytest.approx(0.0, abs=1e-5)


def equal_spacing(levels: int, number: int, statistics: str, lam: float) -> tuple[float, float, float]:
    """Energy above the ground state, its variance and the entropy in levels 0, 1, 2...

    Z is a Gaussian binomial coefficient, a ratio of products of 1 - q^k with q = exp(-lam).
    """
    i = np.arange(1.0, number + 1)
    k = np.concatenate([i, i + (levels - number if statistics == "fermions" else levels - 1)])
    sign, fall = np.repeat([1, -1], number), -np.expm1(-k * lam)
    energy = float(np.sum(sign * k * np.exp(-k * lam) / fall))
    variance = float(np.sum(sign * k**2 * np.exp(-k * lam) / fall**2))
    return energy, variance, lam * energy - float(np.sum(sign * np.log(fall)))


@pytest.mark.parametrize("statistics", ["fermions", "bosons"])
@pytest.mark.parametrize(("levels", "number"), [(100, 50), (300, 120), (60, 1), (60, 59)])
def test_equal_spacing_at_all_temperatures(statistics, levels, number):
    family = Bilinears({"energy": np.diag(np.arange(float(levels)))}, statistics=statistics, number=number)
    ground = number * (number - 1) / 2 if statistics == "fermions" else 0.0
    for lam in (0.01, 0.3, 1.0, 10.0, 20.0, 300.0):
        found = family.evaluate(np.array([lam]))
        energy, variance, entropy = equal_spacing(levels, number, statistics, lam)
        assert found.values[0] == pytest.approx(ground + energy, rel=1e-13)
        assert found.covariance[0, 0] == pytest.approx(variance, rel=1e-11)
        assert family.state(np.array([lam])).entropy == pytest.approx(entropy, rel=1e-12)
    for lam in (1e3, 1e5):
        assert family.evaluate(np.array([lam])).covariance[0, 0] == 0.0  # exp(-1000)


def test_a_sharp_edge_of_many_levels():
    """800 levels, 400 fermions: the variance at low temperature is the sum of k^2 q^k/(1 - q^k)^2."""
    family = Bilinears({"energy": np.diag(np.arange(800.0))}, number=400)
    energy, variance, _ = equal_spacing(800, 400, "fermions", 1.0)
    found = family.evaluate(np.ones(1))
    assert found.covariance[0, 0] == pytest.approx(variance, rel=1e-13)
    assert variance == pytest.approx(2.7898681336964634, rel=1e-14)
    assert found.values[0] == pytest.approx(79800 + energy, rel=1e-15)


def symmetric_sums(weights: list, number: int, sign: int) -> list:
    """``Z_0 .. Z_number`` of fermions (elementary symmetric sums) or bosons (complete homogeneous ones)."""
    z = [mp.mpf(1)] + [mp.mpf(0)] * number
    for w in weights:
        for k in range(number, 0, -1) if sign > 0 else range(1, number + 1):
            z[k] += w * z[k - 1]
    return z


LEVELS = {
    "equal": np.zeros(8),
    "two shells": np.array([0, 0, 0, 0, 1, 1, 1, 1.0]) + 1e-7 * np.arange(8),
    "any": np.array([0.3, -1.7, 2.2, 0.1, 0.9, -0.4, 5.0, 0.12]),
    "ladder": np.arange(8.0),
}


@pytest.mark.parametrize("kind", LEVELS)
@pytest.mark.parametrize("sign", [1, -1])
def test_every_pair_of_levels_keeps_its_digits(kind, sign):
    """Means, pair probabilities and correlations of any size, relative, against sums with 400 digits."""
    with mp.workdps(400):
        for lam, number in ((1.0, 4), (1.0, 7), (30.0, 1), (30.0, 4), (90.0, 3), (90.0, 6)):
            x = lam * LEVELS[kind]
            w = [mp.exp(-mp.mpf(v)) for v in x.tolist()]
            found, z = canonical(x, number, sign), symmetric_sums(w, number + 1, sign)
            at_most = lambda k, z=z, n=number: z[n - k] / z[n] if k <= n else mp.mpf(0)
            assert found.insertion == pytest.approx(float(mp.log(z[number] / z[number + 1])), abs=1e-12)
            without = lambda *gone, w=w, n=number: symmetric_sums([v for i, v in enumerate(w) if i not in gone], n, 1)
            if sign > 0:
                mean = [w[a] * without(a)[number - 1] / z[number] for a in range(8)]
            else:
                mean = [sum(v**k * at_most(k) for k in range(1, number + 1)) for v in w]
            np.testing.assert_allclose(found.mean, [float(v) for v in mean], rtol=2e-13)
            for a, b in permutations(range(8), 2):
                if sign < 0:
                    both = sum(w[a] ** k * w[b] ** m * at_most(k + m) for k, m in product(range(1, number), repeat=2))
                else:
                    both = w[a] * w[b] * without(a, b)[number - 2] / z[number] if number > 1 else 0
                assert found.one[a, b] == pytest.approx(float(mean[a] - sign * both), rel=2e-13)
                assert found.pull[a, b] == pytest.approx(float(mean[a] * mean[b] - both), rel=1e-12)


@pytest.mark.parametrize("statistics", ["fermions", "bosons"])
def test_edges_of_a_fixed_number(statistics):
    """Four levels with two of equal energy: all ends of the energy, with a second charge, against listed states."""
    levels, other, number = np.array([0.0, 1, 1, 3]), np.array([1.0, -1, 2, 0]), 2
    s = fillings(4, number)
    s = s[s.max(axis=1) < 2] if statistics == "fermions" else s
    family = Bilinears({"energy": np.diag(levels), "other": np.diag(other)}, statistics=statistics, number=number)
    listed = Microstates({"energy": s @ levels, "other": s @ other})
    points = [s[i] for i in range(len(s))] + [s.mean(axis=0), 0.5 * (s[0] + s[1]), 0.5 * (s[0] + s[2])]
    points += [0.5 * (s[a] + s[b]) for a in range(len(s)) for b in range(a)]
    verdicts = set()
    for f in points:
        q = {"energy": float(f @ levels), "other": float(f @ other)}
        for shift in (0.0, 1e-3, -1e-3):
            asked = q | {"other": q["other"] + shift}
            one, truth = maxent.solve(family, asked), maxent.solve(listed, asked)
            assert one.verdict is truth.verdict, asked
            verdicts.add(str(one.verdict))
            if one.success or one.state is not None:
                assert one.entropy == pytest.approx(truth.entropy, abs=1e-9)
    assert verdicts == {"solved", "boundary", "infeasible"}
    twice = Bilinears(
        {"energy": np.diag(levels), "more": np.diag(2 * levels + 1)}, statistics=statistics, number=number
    )
    good = maxent.solve(twice, {"energy": 2.0, "more": 6.0})
    assert good.success and len(good.redundancies) == 1
    assert maxent.solve(twice, {"energy": 2.0, "more": 6.1}).verdict is maxent.Verdict.INCONSISTENT


def test_bad_numbers_are_named():
    h = np.eye(3)
    with pytest.raises(ValueError, match=r"number must be an integer in 0\.\.3, the number of modes, not 4"):
        Bilinears({"h": h}, number=4)
    with pytest.raises(ValueError, match="number must be an integer from 0 on, not -1"):
        Bilinears({"h": h}, statistics="bosons", number=-1)
    with pytest.raises(ValueError, match="'h' does not conserve"):
        Bilinears({"h": (h, np.eye(3))}, statistics="bosons", number=2)
    with pytest.raises(ValueError, match="'h' does not conserve"):
        Bilinears({"h": (h, None, 0.0, np.ones(3))}, statistics="bosons", number=2)
