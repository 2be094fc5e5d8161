"""Tests of eigenstates in a comparison: against dense matrices whose symmetries are resolved by hand."""

from __future__ import annotations

import json

import numpy as np
import pytest

from maxent.lattice import Bosons, Chain, ProductState, Ring, formula
from maxent.quench.comparison import compare
from maxent.quench.distances import trace_distance
from maxent.quench.sizes import SizeSeries
from maxent.quench.spacings import REFERENCES
from maxent.quench.starts import Start

TILTED = "4*Sz[i]*Sz[i+1] + 1.8*Sx[i] + 1.6*Sz[i]"


def tilted(size, **options):
    ring = Ring(size)
    observables = {"x": formula("2*Sx[i]/L", ring), "zz": formula("4*Sz[0]*Sz[1]", ring)}
    start = ProductState(ring, 2.0, 0.5).vector()
    return compare({"energy": formula(TILTED, ring)}, start, observables=observables, ranking=False, **options)


def moved(size, where):
    """Permutation of the product states that takes site i to where(i), site 0 the highest bit."""
    n = np.arange(2**size)
    out = np.zeros_like(n)
    for i in range(size):
        out |= (n >> (size - 1 - i) & 1) << (size - 1 - where(i))
    return out


@pytest.fixture(scope="module")
def ten():
    """A ring of ten in a tilted field, and its sectors of momentum zero from dense matrices."""
    found = tilted(10)
    ring = Ring(10)
    shift, mirror = moved(10, lambda i: (i + 1) % 10), moved(10, lambda i: 9 - i)
    average = np.zeros((1024, 1024))
    images = np.arange(1024)
    for _ in range(10):
        average[images, np.arange(1024)] += 0.1
        images = shift[images]
    sectors = {}
    for sign in (1, -1):
        projector = 0.5 * (average + sign * average[mirror])
        w, v = np.linalg.eigh(0.5 * (projector + projector.T))
        v = v[:, w > 0.5]
        h = formula(TILTED, ring).matrix().toarray().real
        e, u = np.linalg.eigh(v.T @ h @ v)
        sectors[sign] = e, v @ u
    return found, sectors


def block(vector, sites):
    m = vector.reshape(2**sites, -1)
    return m @ m.T


def test_spacing_ratio_of_the_resolved_sector(ten):
    found, sectors = ten
    (test,) = found.eigenstate_tests.sectors
    assert test.sector == {"translation": 0.0, "reflection": 1.0} and test.of_start
    e = sectors[1][0]
    assert test.size == len(e) == 78  # bracelets of ten beads in two colours
    inner = e[7:-7]  # the middle 80 %
    gaps = np.diff(inner)
    ratios = np.minimum(gaps[1:], gaps[:-1]) / np.maximum(gaps[1:], gaps[:-1])
    assert test.ratio.mean == pytest.approx(ratios.mean(), abs=1e-9)
    assert test.ratio.degenerate == 0 and test.refusal == ""
    assert found.eigenstate_tests.references is REFERENCES


def test_scatter_and_block_distances_by_hand(ten):
    found, sectors = ten
    (test,) = found.eigenstate_tests.sectors
    e, v = sectors[1]
    x = formula("2*Sx[i]/L", Ring(10)).matrix().toarray().real
    values = np.einsum("ik,ik->k", v, x @ v)
    picked = slice(31, 47)  # the middle fifth of 78
    weights = np.exp(-0.5 * ((e[None] - e[picked, None]) / test.scatter["x"].width) ** 2)
    weights /= weights.sum(axis=1, keepdims=True)
    off = values[picked] - weights @ values
    assert test.scatter["x"].deviations == pytest.approx(off, abs=1e-9)
    assert test.scatter["x"].std == pytest.approx(off.std(), abs=1e-9)
    for sites in (1, 3):
        rho = np.array([block(v[:, k], sites) for k in range(78)])
        mean = np.tensordot(weights, rho, axes=(1, 0))
        far = [trace_distance(a, b) for a, b in zip(rho[picked], mean, strict=True)]
        assert test.distance(sites) == pytest.approx(np.quantile(far, [0.5, 0.1, 0.9]), abs=1e-9)


def test_distances_of_single_eigenstates_are_medians_over_the_window(ten):
    found, sectors = ten
    single, window = (found.ensemble(n, sector=True) for n in ("single eigenstate", "Gaussian window"))
    e, v = sectors[1]
    weight = np.exp(-0.5 * ((e - window.facts["centre"]) / window.facts["width"]) ** 2)
    h = formula(TILTED, Ring(10)).matrix().toarray().real
    energies, u = np.linalg.eigh(h)
    c = u.T @ ProductState(Ring(10), 2.0, 0.5).vector()
    same = np.abs(energies[:, None] - energies) < 1e-9
    rho = u @ (np.outer(c, c.conj()) * same) @ u.T
    for sites in (1, 2):
        reference = np.trace(rho.reshape(2**sites, 2 ** (10 - sites), 2**sites, -1), axis1=1, axis2=3)
        far = np.array([trace_distance(block(v[:, k], sites), reference) for k in range(len(e))])
        order = np.argsort(far)
        reached = np.cumsum(weight[order]) / weight.sum()
        low, median, high = (far[order][np.searchsorted(reached, part)] for part in (0.1, 0.5, 0.9))
        assert single.distances[sites] == pytest.approx(median, abs=2e-3)  # levels without weight are left out
        assert single.distance_ranges[sites] == pytest.approx((low, high), abs=4e-3)


def test_symmetries_inside_a_block_are_resolved():
    # the start fixes magnetisation and the square of the translation; at momentum zero, magnetisation zero the
    # flip of all spins and a reflection leave the sector as it is
    ring = Ring(12)
    f = lambda text: formula(text, ring)
    h = "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 0.6*Sz[i]*Sz[i+1] + 0.4*Sz[i]*Sz[i+2]"
    start = ProductState(ring, ["0", "pi"], 0.0).vector()
    found = compare({"energy": f(h), "magnetisation": f("Sz[i]")}, start, blocks=(1,), ranking=False)
    (test,) = found.eigenstate_tests.sectors
    assert {"magnetisation": 0.0, "spin_flip": 1.0, "reflection": 1.0}.items() <= test.sector.items()
    # number of states by Burnside's lemma: fixed product states of magnetisation zero, averaged over the group
    n = np.arange(4096)
    n = n[[bin(k).count("1") == 6 for k in n]]
    fixed = []
    for mirror in (False, True):
        for steps in range(12):
            images = moved(12, lambda i, s=steps, m=mirror: ((11 - i if m else i) + s) % 12)
            for flip in (0, 4095):
                sign = -1.0 if test.sector["translation"] and steps % 2 else 1.0
                fixed.append(sign * np.sum((images ^ flip)[n] == n))
    assert test.size == np.mean(fixed)


def test_exact_degeneracies_are_told_with_their_number():
    ring = Ring(12)
    f = lambda text: formula(text, ring)
    start = ProductState(ring, ["0", "0", "pi", "0", "pi", "pi", "0", "0", "pi", "pi", "0", "pi"], 0.0).vector()
    charges = {"energy": f("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1]"), "magnetisation": f("Sz[i]")}
    (test,) = compare(charges, start, blocks=(1,), ranking=False).eigenstate_tests.sectors
    assert test.ratio is None and "exact degeneracies" in test.refusal


def test_small_sectors_are_told_and_others_tested_instead():
    few = tilted(4)
    assert few.eigenstate_tests.sectors == ()
    assert any("fewer than 30 levels" in n and n.endswith("nothing is tested.") for n in few.notes)
    chain = Chain(6, Bosons(cutoff=2))
    f = lambda text: formula(text, chain)
    charges = {"energy": f("-dagger(b[i])*b[i+1] - dagger(b[i+1])*b[i] + 1.5*n[i]*(n[i] - 1)"), "number": f("n[i]")}
    one = np.zeros(3**6)
    one[3**2] = 1.0  # a single particle: six levels
    found = compare(charges, one, blocks=(1,), ranking=False)
    tests = found.eigenstate_tests.sectors
    assert len(tests) == 2 and not any(t.of_start for t in tests)
    # 141 ways to place six particles, two at most on a site, of which a reflection leaves seven as they are
    assert {(t.sector["number"], t.size) for t in tests} == {(6.0, 74), (6.0, 67)}
    note = next(n for n in found.notes if n.startswith("Eigenstate tests"))
    assert "(at most 3)" in note and "number = 6" in note


def test_scatter_of_a_series(ten):
    found, _ = ten
    series = SizeSeries((tilted(4), tilted(9), found))
    sizes, dimensions, scatter = series.scatter("x")
    assert sizes.tolist() == [9, 10] and dimensions.tolist() == [46, 78]
    assert scatter[1] == found.eigenstate_tests.sectors[0].scatter["x"].std
    plain = json.loads(json.dumps(found.to_dict(), allow_nan=False))["eigenstate_tests"]
    assert plain["sectors"][0]["scatter"]["x"] == scatter[1]
    assert plain["references"]["uncorrelated levels"]["value"] == pytest.approx(2 * np.log(2) - 1)


def test_a_mixture_and_no_observables():
    ring = Ring(9)
    a, b = ProductState(ring, 0.4, 0.0).vector(), ProductState(ring, 1.4, 0.0).vector()
    start = Start(np.linalg.qr(np.stack([a, b], axis=1))[0], np.array([0.5, 0.5]), "mixture", 0.0)
    found = compare({"energy": formula(TILTED, ring)}, start, blocks=(1, 2), ranking=False)
    (test,) = found.eigenstate_tests.sectors
    assert test.scatter == {} and set(test.distances) == {1, 2} and test.of_start
