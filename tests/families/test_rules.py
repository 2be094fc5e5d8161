"""Infinite lists given by a rule: closed forms, the edge of the domain, and rules that break their word."""

import numpy as np
import pytest
from scipy.special import gammaincc

import maxent
from maxent.families import Microstates
from maxent.families.rules import ratio_tail


class Oscillator:
    """Levels n + 1/2; ln Z = -ln(2 sinh(lam/2)), <E> = coth(lam/2)/2."""

    names = ("energy",)
    start = (1.0,)

    def states(self, first, stop):
        return (np.arange(first, stop) + 0.5)[None], None

    def log_tail(self, lam, first, moment):
        x = first + 0.5
        return ratio_tail(-lam[0] * x + moment * np.log(x), -lam[0] + moment * np.log1p(1 / x))

    def lowest(self, v, first):
        return v[0] * (first + 0.5) if v[0] >= 0 else -np.inf

    def domain(self):
        return None


class Poisson(Oscillator):
    """Counts n with weights 1/n!: ln Z = exp(-lam), <n> = exp(-lam), every lam allowed."""

    names = ("number",)
    start = (0.0,)

    def states(self, first, stop):
        from scipy.special import gammaln

        n = np.arange(first, stop)
        return n[None].astype(float), -gammaln(n + 1)

    def log_tail(self, lam, first, moment):
        from scipy.special import gammaln

        ratio = -lam[0] - np.log(first + 1) + moment * np.log1p(1 / first)
        return ratio_tail(-lam[0] * first - gammaln(first + 1) + moment * np.log(first), ratio)

    def lowest(self, v, first):
        return v[0] * first if v[0] >= 0 else -np.inf


class Stretched(Poisson):
    """Weights exp(-2 sqrt n): ln Z is finite exactly for lam >= 0, with finite slope at lam = 0."""

    start = (0.5,)

    def states(self, first, stop):
        n = np.arange(first, stop)
        return n[None].astype(float), -2 * np.sqrt(n)

    def log_tail(self, lam, first, moment):
        # sum_{n >= N} n^k exp(-2 sqrt n) <= int_{N-1}^inf x^k exp(-2 sqrt x) dx = 2 Gamma(2k+2, 2 sqrt(N-1))/2^(2k+2)
        if lam[0] < 0 or first < 64:
            return np.inf
        p = 2 * moment + 2
        upper = max(gammaincc(p, 2 * np.sqrt(first - 1.0)), 1e-300)
        return float(np.log(2 * {2: 1, 4: 6, 6: 120}[p] / 2.0**p) + np.log(upper)) - lam[0] * first

    def domain(self):
        return np.array([[1.0]])


class TwoModes:
    """Two oscillators listed by shells n1 + n2 = s; total energy and difference of the occupations."""

    names = ("total", "difference")
    start = (1.0, 0.0)

    def states(self, first, stop):
        x = np.arange(first, stop)
        shell = ((np.sqrt(8.0 * x + 1) - 1) / 2).astype(int)
        n1 = x - shell * (shell + 1) // 2
        return np.array([shell, 2 * n1 - shell], float), None

    def log_tail(self, lam, first, moment):
        # shell s has s + 1 states of weight at most exp(-(lam_0 - |lam_1|) s) and |f| <= s
        s = int((np.sqrt(8.0 * first + 1) - 1) / 2)
        if s < 2:
            return np.inf
        decay = lam[0] - abs(lam[1])
        return ratio_tail(
            np.log(s + 1) + moment * np.log(s) - decay * s, -decay + np.log1p(1 / (s + 1)) + moment * np.log1p(1 / s)
        )

    def lowest(self, v, first):
        s = int((np.sqrt(8.0 * first + 1) - 1) / 2)
        return (v[0] - abs(v[1])) * s if v[0] >= abs(v[1]) else -np.inf

    def domain(self):
        return None


@pytest.mark.parametrize("energy", [0.6, 1.0, 37.0, 1e4])
def test_oscillator_closed_form(energy):
    result = maxent.solve(Microstates.from_rule(Oscillator()), {"energy": energy})
    lam = 2 * np.arctanh(1 / (2 * energy))  # closed form
    n = 1 / np.expm1(lam)
    assert result.verdict is maxent.Verdict.SOLVED
    assert result.multipliers["energy"] == pytest.approx(lam, rel=1e-11)
    assert result.log_partition == pytest.approx(-np.log(2 * np.sinh(lam / 2)), rel=1e-11)
    assert result.entropy == pytest.approx((n + 1) * np.log(n + 1) - n * np.log(n), rel=1e-11)
    square = result.mean(lambda first, stop: (np.arange(first, stop) + 0.5) ** 2)
    assert square == pytest.approx(energy**2 + n * (n + 1), rel=1e-11)


def test_poisson_grows_with_the_mean():
    for mean in (0.3, 12.0, 2e4):
        result = maxent.solve(Microstates.from_rule(Poisson()), {"number": mean})
        assert result.success
        assert result.multipliers["number"] == pytest.approx(-np.log(mean), rel=1e-9, abs=1e-12)


def test_two_modes_are_independent_oscillators():
    n1, n2 = 0.7, 2.5
    family = Microstates.from_rule(TwoModes())
    result = maxent.solve(family, {"total": n1 + n2, "difference": n1 - n2})
    lam1, lam2 = np.log1p(1 / n1), np.log1p(1 / n2)  # n = 1/(exp(lam) - 1)
    assert result.success
    assert result.multipliers["total"] == pytest.approx((lam1 + lam2) / 2, rel=1e-11)
    assert result.multipliers["difference"] == pytest.approx((lam1 - lam2) / 2, rel=1e-11)


def test_outside_boundary_and_unreachable_twins():
    two = Microstates.from_rule(TwoModes())
    outside = maxent.solve(two, {"total": 1.0, "difference": 1.5})
    assert outside.verdict is maxent.Verdict.INFEASIBLE
    assert outside.certificate.verify(two, outside.targets)
    assert not outside.certificate.verify(two, {"total": 1.0, "difference": 0.5})
    oscillator = Microstates.from_rule(Oscillator())
    assert maxent.solve(oscillator, {"energy": 0.4}).certificate.margin == pytest.approx(0.1, rel=1e-12)
    edge = maxent.solve(oscillator, {"energy": 0.5})
    assert edge.verdict is maxent.Verdict.BOUNDARY
    assert edge.face.dimension == 1
    assert edge.entropy == pytest.approx(0, abs=1e-12)


def test_a_list_that_would_be_too_long_is_the_reason(monkeypatch):
    """With energy E the exact multiplier is about 1/E: rounding is reached after 36 E states."""
    monkeypatch.setattr("maxent.families.rules.LONGEST", 1 << 12)
    solved = maxent.solve(Microstates.from_rule(Oscillator()), {"energy": 90.0})
    assert solved.success and solved.multipliers["energy"] == pytest.approx(2 * np.arctanh(0.5 / 90.0), rel=1e-9)
    result = maxent.solve(Microstates.from_rule(Oscillator()), {"energy": 1e4})
    assert result.verdict is maxent.Verdict.UNFINISHED
    assert "the infinite list would need more than the 4 096 states it may hold" in result.message.lower()


def test_redundant_twin():
    class Doubled(Oscillator):
        names = ("energy", "twice")
        start = (1.0, 0.0)

        def states(self, first, stop):
            e = np.arange(first, stop) + 0.5
            return np.array([e, 2 * e + 1]), None

        def log_tail(self, lam, first, moment):
            # charges up to 2e + 1 <= 3e' with e' = e + 1/2
            decay, x = lam[0] + 2 * lam[1], first + 1.0
            return ratio_tail(
                -decay * (first + 0.5) - lam[1] + moment * np.log(3 * x), -decay + moment * np.log1p(1 / x)
            )

        def lowest(self, v, first):
            slope = v[0] + 2 * v[1]
            return slope * (first + 0.5) + v[1] if slope >= 0 else -np.inf

    family = Microstates.from_rule(Doubled())
    result = maxent.solve(family, {"energy": 1.0, "twice": 3.0})
    assert result.success
    assert len(result.redundancies) == 1
    total = result.multipliers["energy"] + 2 * result.multipliers["twice"]
    assert total == pytest.approx(2 * np.arctanh(0.5), rel=1e-11)
    assert maxent.solve(family, {"energy": 1.0, "twice": 3.1}).verdict is maxent.Verdict.INCONSISTENT


def test_unattained_beyond_the_edge_of_the_domain():
    family = Microstates.from_rule(Stretched())
    n = np.arange(4000)
    weight = np.exp(-2 * np.sqrt(n))
    edge = (n * weight).sum() / weight.sum()  # <n> at lam = 0, summed directly
    below = maxent.solve(family, {"number": 0.9 * edge})
    assert below.success
    assert below.multipliers["number"] > 0
    above = maxent.solve(family, {"number": edge + 2})
    assert above.verdict is maxent.Verdict.UNATTAINED
    assert above.excess["number"] == pytest.approx(2, rel=1e-9)
    assert np.isnan(above.multipliers["number"])
    assert above.state is None


def test_list_is_long_enough_for_its_bound():
    family = Microstates.from_rule(Oscillator())
    lam = np.array([1e-3])
    ev = family.evaluate(lam)
    assert ev.log_partition == pytest.approx(-np.log(2 * np.sinh(5e-4)), rel=1e-14)
    assert np.all(ev.error < 1e-12 * np.abs(ev.values))


def test_outside_the_domain_is_infinite():
    assert Microstates.from_rule(Oscillator()).evaluate(np.array([-0.1])).log_partition == np.inf


def test_bad_rules_are_named():
    class Shape(Oscillator):
        def states(self, first, stop):
            return np.zeros((2, stop - first)), None

    class Nan(Oscillator):
        def states(self, first, stop):
            return np.full((1, stop - first), np.nan), None

    class Start(Oscillator):
        start = (-1.0,)

    class TwoStarts(Oscillator):
        start = (1.0, 2.0)

    with pytest.raises(ValueError, match="charges of shape"):
        Microstates.from_rule(Shape())
    with pytest.raises(ValueError, match="not finite"):
        Microstates.from_rule(Nan())
    with pytest.raises(ValueError, match="does not converge at its start"):
        Microstates.from_rule(Start())
    with pytest.raises(ValueError, match="1 charges and a start of shape"):
        Microstates.from_rule(TwoStarts())
    with pytest.raises(TypeError, match="function \\(first, stop\\)"):
        maxent.solve(Microstates.from_rule(Oscillator()), {"energy": 1.0}).mean([1.0, 2.0])


def test_ratio_tail_is_the_geometric_series():
    assert ratio_tail(np.log(3.0), np.log(0.25)) == pytest.approx(np.log(4.0), rel=1e-15)
    assert ratio_tail(0.0, 0.0) == np.inf
