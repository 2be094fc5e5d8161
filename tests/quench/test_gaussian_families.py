"""The same charges as matrices and as free particles, on every small size: one answer."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

import maxent
from maxent.families import Matrices
from maxent.families.bilinears import Bilinears
from maxent.families.spin_rings import SpinRing
from maxent.lattice import Bosons, Chain, Fermions, Ring, formula
from maxent.quench.gaussian_forms import gaussian_family

SPINS = {
    "energy": "-X[i]*X[i+1] - 0.6*Z[i] + 0.25",
    "second": "-X[i]*Z[i+1]*X[i+2] + 0.4*Y[i]*Z[i+1]*Y[i+2]",
    "field": "Sz[i] + 0.1*(X[i]*Y[i+1] - Y[i]*X[i+1])",
}
FERMIONS = {
    "energy": "-(exp(0.3j)*dagger(c[i])*c[i+1] + h.c.) + (0.4*dagger(c[i])*dagger(c[i+1]) + h.c.) + 0.5",
    "number": "n[i]",
    "far": "exp(0.7j)*dagger(c[i])*c[i+2] + h.c.",
}
LAM = [0.5, -0.3, 0.8]
PLACES = [
    *[(Ring, n, "spins") for n in range(3, 9)],
    *[(Chain, n, "spins") for n in range(3, 9)],
    *[(Ring, n, "fermions") for n in range(3, 8)],
    *[(Chain, n, "fermions") for n in range(3, 8)],
]


def both(place, size, what):
    """The charges as operators, as free particles, and as matrices."""
    texts = SPINS if what == "spins" else FERMIONS
    sites = place(size) if what == "spins" else place(size, Fermions())
    operators = {name: formula(text, sites) for name, text in texts.items()}
    free = gaussian_family(operators)
    assert isinstance(free, SpinRing if (place, what) == (Ring, "spins") else Bilinears)
    return operators, free, Matrices({name: q.matrix() for name, q in operators.items()}, dims=sites.dims)


@pytest.mark.parametrize(("place", "size", "what"), PLACES)
@pytest.mark.parametrize("scale", [0.0, 1.0, 12.0])
def test_evaluation(place, size, what, scale):
    _, free, many = both(place, size, what)
    a, b = (family.evaluate(scale * np.array(LAM)) for family in (free, many))
    size_of = max(1.0, abs(b.log_partition))
    assert_allclose(a.log_partition, b.log_partition, rtol=1e-12, atol=1e-12)
    assert_allclose(a.values, b.values, atol=1e-12 * size_of)
    assert_allclose(a.covariance, b.covariance, atol=2e-12 * size_of)
    assert free.state(scale * np.array(LAM)).entropy == pytest.approx(
        many.state(scale * np.array(LAM)).entropy, abs=1e-11 * size_of
    )


@pytest.mark.parametrize(("place", "size", "what"), [p for p in PLACES if p[1] in (3, 4, 5)])
def test_fits(place, size, what):
    _, free, many = both(place, size, what)
    targets = dict(zip(many.names, many.evaluate(np.array(LAM)).values, strict=True))
    found, exact = maxent.solve(free, targets), maxent.solve(many, targets)
    assert str(found.verdict) == str(exact.verdict) == "solved" and found.iterations <= 15
    assert_allclose(list(found.multipliers.values()), LAM, atol=1e-10)
    assert_allclose([found.entropy, found.log_partition], [exact.entropy, exact.log_partition], atol=1e-11)
    assert_allclose(found.covariance, exact.covariance, atol=1e-10)


@pytest.mark.parametrize(("place", "size", "what"), [(Ring, 4, "spins"), (Chain, 5, "spins"), (Ring, 4, "fermions")])
def test_targets_at_and_beyond_the_limit(place, size, what):
    """The lowest energy alone is a boundary case, a little lower is infeasible, a little higher is solved."""
    operators, free, many = both(place, size, what)
    lowest = np.linalg.eigvalsh(operators["energy"].matrix().toarray())[0]
    free = gaussian_family({"energy": operators["energy"]})
    many = Matrices({"energy": operators["energy"].matrix()})
    for shift, verdict in ((-1e-3, "infeasible"), (0.0, "boundary"), (1e-3, "solved")):
        targets = {"energy": lowest + shift}
        found, exact = maxent.solve(free, targets), maxent.solve(many, targets)
        assert str(found.verdict) == str(exact.verdict) == verdict
        if verdict == "infeasible":
            for family, result in ((free, found), (many, exact)):
                assert result.certificate.verify(family, targets)
            assert found.certificate.margin == pytest.approx(exact.certificate.margin, rel=1e-8)
        if verdict == "boundary":
            assert found.entropy == pytest.approx(exact.entropy, abs=1e-10)


@pytest.mark.parametrize(("place", "size", "what"), [(Ring, 4, "spins"), (Chain, 4, "fermions")])
def test_redundant_and_contradicting_charges(place, size, what):
    operators, _, _ = both(place, size, what)
    operators = {"energy": operators["energy"], "twice": 2.0 * operators["energy"] + 1.0}
    free = gaussian_family(operators)
    many = Matrices({name: q.matrix() for name, q in operators.items()})
    value = many.evaluate(np.array([0.3, 0.0])).values[0]
    for twice, verdict in ((2 * value + 1.0, "solved"), (2 * value + 1.5, "inconsistent")):
        targets = {"energy": value, "twice": twice}
        found, exact = maxent.solve(free, targets), maxent.solve(many, targets)
        assert str(found.verdict) == str(exact.verdict) == verdict
        assert len(found.redundancies) == len(exact.redundancies) == 1
    assert "twice" in found.redundancies[0].coefficients


@pytest.mark.parametrize("sectors", ["even", "odd"])
@pytest.mark.parametrize("place", [Ring, Chain])
def test_one_parity(place, sectors):
    operators, _, many = both(place, 5, "spins")
    parity = np.array([(-1) ** bin(k).count("1") for k in range(32)])
    kept = np.flatnonzero(parity == (1 if sectors == "even" else -1))
    part = Matrices({n: q.matrix().toarray()[np.ix_(kept, kept)] for n, q in operators.items()})
    a, b = (family.evaluate(np.array(LAM)) for family in (gaussian_family(operators, sectors=sectors), part))
    assert_allclose(a.log_partition, b.log_partition, atol=1e-12)
    assert_allclose(a.values, b.values, atol=1e-12)
    assert_allclose(a.covariance, b.covariance, atol=1e-11)


def test_bosons_against_a_large_cutoff():
    sites = lambda cutoff: Chain(2, Bosons(cutoff=cutoff))
    texts = {"energy": "1.2*n[i] - 0.3*(dagger(b[i])*b[i+1] + h.c.)", "number": "n[i]"}
    free = gaussian_family({n: formula(t, sites(None)) for n, t in texts.items()})
    many = Matrices({n: formula(t, sites(30)).matrix() for n, t in texts.items()})
    lam = np.array([1.1, 0.3])
    a, b = free.evaluate(lam), many.evaluate(lam)
    assert_allclose(a.log_partition, b.log_partition, atol=1e-12)
    assert_allclose(a.values, b.values, atol=1e-12)
    assert_allclose(a.covariance, b.covariance, atol=1e-11)


def test_what_has_no_gaussian_family():
    with pytest.raises(ValueError, match=r"'exchange' is not quadratic: it holds Sz\[0\]\*Sz\[1\]"):
        gaussian_family({"field": formula("Z[i]", Ring(6)), "exchange": formula("Sz[i]*Sz[i+1]", Ring(6))})
    with pytest.raises(ValueError, match="parity sectors are for spins 1/2"):
        gaussian_family({"n": formula("n[i]", Chain(3, Fermions()))}, sectors="even")
