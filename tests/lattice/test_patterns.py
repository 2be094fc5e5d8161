"""Patterns, domain walls, coherent states of any spin and cut-offs: words against vectors, refusals."""

import numpy as np
import pytest

from maxent.errors import ResourceError
from maxent.lattice import (
    Bosons,
    Chain,
    CutoffLoss,
    Fermions,
    Lattice,
    PatternState,
    ProductState,
    Ring,
    Spin,
    cutoff_loss,
    domain_wall,
    formula,
)
from tests.lattice.dense import spin

HUBBARD = "-(dagger(c[i, up])*c[i+1, up] + 1j*dagger(c[i, down])*c[i+1, down] + h.c.) + 2*n[i, up]*n[i, down]"


def agrees(state, op, tolerance=1e-12):
    """Mean and variance from words against the vector."""
    vector = state.vector()
    applied = op.matrix() @ vector
    mean = np.vdot(vector, applied).real
    assert np.linalg.norm(vector) == pytest.approx(1, abs=1e-14)
    assert state.mean(op) == pytest.approx(mean, abs=tolerance)
    assert state.variance(op) == pytest.approx(np.vdot(applied, applied).real - mean**2, abs=10 * tolerance)
    return mean


STATES = {
    "spin 1": (Ring(4, Spin(1)), [1, 0, -1, "down"], "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Sz[i]**2*Sz[i+1] + Sx[i]"),
    "spin 3/2": (Chain(3, Spin("3/2")), ["up", "-1/2", 0.5], "Sx[i]*Sz[i+1]*Sx[i] + (Splus[i]**2 + h.c.)"),
    "spin 1/2": (Ring(4), ["up", "down"], "Sx[i]*Sx[i+1] + 0.3*Sz[i]*Sz[i+2] + Sz[0]"),
    "fermions": (Ring(4, Fermions()), [1, 0], "dagger(c[i])*c[i+1] + c[i]*c[i+1] + h.c."),
    "species": (Ring(3, Fermions("up", "down")), ["up", [1, 1], 0], HUBBARD),
    "bosons": (Chain(3, Bosons(cutoff=4)), [2, 0, 1], "(dagger(b[i])*b[i+1] + b[i] + h.c.) + n[i]*(n[i] - 1)"),
    "two bosons": (Chain(2, Bosons("x", "y", cutoff=3)), [[1, 2], "y"], "n[0, x] + dagger(b[i, x])*b[i+1, y] + h.c."),
    "cells": (Chain(2, {"e": Fermions(), "s": Spin(1)}), [1, "up", 0, 0], "c[i, e]*Sx[i, s] + h.c."),
}


@pytest.mark.parametrize("name", STATES)
def test_patterns_agree_with_their_vectors(name):
    sites, pattern, text = STATES[name]
    agrees(PatternState(sites, pattern), formula(text, sites, hermitian=True))


def test_a_pattern_is_one_basis_state():
    state = PatternState(Ring(4, Fermions()), [1, 0])
    assert np.flatnonzero(state.vector()).tolist() == [0b1010]
    assert PatternState(Ring(4), ["up", "down"]).levels == (0, 1, 0, 1)
    assert np.flatnonzero(PatternState(Chain(3, Spin(1)), [1, 0, -1]).vector()).tolist() == [0 * 9 + 1 * 3 + 2]
    assert PatternState(Chain(2, Fermions("a", "b")), np.array([[1, 0], [0, 1]])).levels == (1, 0, 0, 1)
    assert repr(state) == "<PatternState on Ring(4, Fermions())>"
    alternating = ProductState(Ring(4), [0, "pi"], 0.0).vector()
    np.testing.assert_allclose(PatternState(Ring(4), ["up", "down"]).vector(), alternating, atol=1e-15)


def test_sharp_numbers_have_no_variance():
    state = PatternState(Ring(6, Fermions("up", "down")), ["up", "down", 0])
    number = formula("n[i, up] + n[i, down]", state.sites)
    assert (state.mean(number), state.variance(number)) == (4.0, 0.0)
    # in a state of sharp occupation <H^2> - <H>^2 counts the bonds over which one particle can hop
    hop = formula("dagger(c[i])*c[i+1] + h.c.", Chain(6, Fermions()))
    assert PatternState(hop.sites, [1, 1, 0, 0, 1, 0]).variance(hop) == 3.0


def test_domain_walls():
    chain = Chain(6)
    wall = domain_wall(chain, ["up"], ["down"])
    assert wall.levels == (0, 0, 0, 1, 1, 1)
    assert wall.mean(formula("Sz[i]*Sz[i+1]", chain)) == pytest.approx((5 - 2) / 4)
    assert domain_wall(chain, ["up", "down"], ["down"], at=2).levels == (0, 1, 1, 1, 1, 1)
    assert domain_wall(Ring(5, Fermions()), [1, 0], [0], at=3).levels == (1, 0, 1, 0, 0)
    assert domain_wall(Chain(3, Bosons(cutoff=3)), [3], [[0]], at=1).levels == (3, 0, 0)


def test_means_need_no_vector():
    ring = Ring(400, Fermions())
    state = PatternState(ring, [1, 0])
    hop = formula("dagger(c[i])*c[i+1] + h.c.", ring)
    assert (state.mean(hop), state.variance(hop)) == (0.0, 400.0)


def test_bosons_may_fill_any_level_without_a_cut_off():
    state = PatternState(Chain(2, Bosons()), [7, 0])
    assert state.mean(formula("n[i]**2", state.sites)) == 49.0
    assert state.variance(formula("b[i] + h.c.", state.sites)) == 2 * 7 + 2


# --- coherent states


@pytest.mark.parametrize("s", [1, "3/2", 2])
def test_coherent_states_point_along_the_angles(s):
    sites = Chain(2, Spin(s))
    state = ProductState(sites, [0.7, 2.1], [0.4, -1.3])
    hand, vector = spin(float(sites.kinds[0].s)), state.vector()
    d = sites.dims[0]
    for k, (theta, phi) in enumerate([(0.7, 0.4), (2.1, -1.3)]):
        n = np.array([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)])
        along = sum(x * hand[f"S{a}"] for a, x in zip("xyz", n, strict=True))
        full = np.kron(along, np.eye(d)) if k == 0 else np.kron(np.eye(d), along)
        # the largest eigenvalue of the spin along n
        np.testing.assert_allclose(full @ vector, float(sites.kinds[0].s) * vector, atol=1e-13)
    for text in ("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1]", "Sz[i]**2 + Sx[0]*Sz[0]*Sx[0]", "Splus[i]**2*Sminus[i+1] + h.c."):
        agrees(state, formula(text, sites, hermitian=True))


def test_coherent_states_at_the_poles_are_exact():
    state = ProductState(Ring(4, Spin(1)), [0, "pi"], 0.0)
    assert state.mean(formula("Sz[i]*Sz[i+1]", state.sites)) == -4.0
    assert state.variance(formula("Sz[i]", state.sites)) == 0.0
    np.testing.assert_allclose(state.vector(), PatternState(state.sites, [1, -1]).vector(), atol=1e-15)


def test_angles_on_cells_are_those_of_the_cell():
    sites = Ring(2, cell=("a", "b"))
    np.testing.assert_allclose(ProductState(sites, "pi*i/L", 0.0).theta, [0, 0, np.pi / 2, np.pi / 2])
    np.testing.assert_allclose(ProductState(sites, [0, "pi"], 0.0).theta, [0, np.pi, 0, np.pi])


# --- cut-offs


def test_the_weight_in_the_highest_level_is_measured():
    chain = Chain(2, Bosons(cutoff=3))
    vector = np.zeros((4, 4))
    vector[0, 3], vector[1, 2], vector[3, 0] = np.sqrt([0.2, 0.5, 0.3])
    loss = cutoff_loss(chain, vector.ravel())
    assert isinstance(loss, CutoffLoss) and loss.modes == ((0, ""), (1, ""))
    np.testing.assert_allclose(loss.weights, [0.3, 0.2])
    # the commutator of the cut-off matrices, as the text book has it
    b = np.kron(np.diag(np.sqrt([1, 2, 3]), 1), np.eye(4))
    flat = vector.ravel()
    assert 1 - flat @ (b @ b.T - b.T @ b) @ flat == pytest.approx(loss.commutators[0])
    assert loss.warning(0.31) is None
    assert loss.warning() == (
        "the cut-off at 3 bosons is felt: b[0] has the weight 0.3 in its highest level (tolerance 0.001) "
        "and [b, dagger(b)] misses 1 by 1.2; raise the cut-off"
    )


def test_a_coherent_state_feels_the_cut_off_as_poisson_says():
    # |<n|alpha>|^2 = exp(-a^2) a^(2n) / n!
    n = np.arange(9)
    amplitudes = 1.2**n / np.sqrt([float(np.prod(np.arange(1, k + 1))) for k in n])
    amplitudes /= np.linalg.norm(amplitudes)
    chain = Chain(1, Bosons("x", cutoff=8))
    loss = cutoff_loss(chain, amplitudes)
    assert loss.worst == pytest.approx(np.exp(-1.44) * 1.44**8 / 40320, rel=1e-3)
    assert loss.modes == ((0, "x"),) and "b[0, x]" in loss.warning(1e-9)


def test_mixtures_and_states_with_means():
    chain = Chain(2, {"x": Bosons(cutoff=1), "s": Spin()})
    columns = np.eye(16)[:, [0b1000, 0b0010, 0b0000]]
    np.testing.assert_allclose(cutoff_loss(chain, columns).weights, [1 / 3, 1 / 3])
    np.testing.assert_allclose(cutoff_loss(chain, columns, weights=[0.2, 0.5, 0.3]).weights, [0.2, 0.5])

    class Thermal:
        def mean(self, matrix):
            return matrix.trace() / 16

    np.testing.assert_allclose(cutoff_loss(chain, Thermal()).weights, [0.5, 0.5])
    np.testing.assert_allclose(cutoff_loss(chain, PatternState(chain, [1, "up", 0, "up"])).weights, [1, 0])


# --- refusals

SPIN, ONE = Ring(4), Ring(4, Spin(1))
ELECTRONS, BOSE = Ring(4, Fermions("up", "down")), Ring(4, Bosons(cutoff=2))


@pytest.mark.parametrize(
    ("make", "error", "message"),
    [
        (lambda: PatternState(SPIN, ["up", "left"]), ValueError, r"^pattern\[1\]: expected 'up', 'down' or a value"),
        (lambda: PatternState(SPIN, [1]), ValueError, r"^pattern\[0\]: .* from -1/2 to 1/2, not 1$"),
        (lambda: PatternState(ONE, [0.5]), ValueError, r"^pattern\[0\]: .* from -1 to 1, not 0.5$"),
        (lambda: PatternState(ONE, [2]), ValueError, r"not 2$"),
        (lambda: PatternState(ONE, [float("nan")]), ValueError, r"not nan$"),
        (lambda: PatternState(ONE, [None]), TypeError, r"not None$"),
        (lambda: PatternState(ONE, [True]), TypeError, r"not True$"),
        (lambda: PatternState(SPIN, ["up"] * 3), ValueError, r"^the pattern of 3 entries does not fit a ring"),
        (lambda: PatternState(SPIN, ["up"] * 5), ValueError, r"^the pattern of 5 entries is longer than a ring"),
        (lambda: PatternState(SPIN, []), ValueError, r"^the pattern is empty$"),
        (lambda: PatternState(SPIN, "up"), TypeError, r"^pattern: expected a list with one entry per site, not 'up'$"),
        (lambda: PatternState(ELECTRONS, ["left"]), ValueError, r"'left' is no species .*; expected 'up', 'down'$"),
        (lambda: PatternState(ELECTRONS, [1]), ValueError, r"^pattern\[0\]: 1 does not tell the species"),
        (lambda: PatternState(ELECTRONS, [[1, 0, 0]]), ValueError, r"expected 2 occupations of fermion"),
        (lambda: PatternState(ELECTRONS, [[2, 0]]), ValueError, r"expected an occupation from 0 to 1, not 2$"),
        (lambda: PatternState(BOSE, [3]), ValueError, r"^pattern\[0\]: expected an occupation from 0 to 2, not 3$"),
        (lambda: PatternState(BOSE, [0.5]), ValueError, r"not 0.5$"),
        (lambda: PatternState(BOSE, [float("inf")]), ValueError, r"not inf$"),
        (lambda: PatternState(BOSE, ["up"]), ValueError, r"'up' is no species of a boson site"),
        (lambda: PatternState(BOSE, [[None]]), TypeError, r"expected an occupation from 0 to 2, not None$"),
        (lambda: PatternState(Ring(2, Bosons()), [-1]), ValueError, r"expected an occupation from 0 on, not -1$"),
        (lambda: domain_wall(SPIN, ["up"], ["down"], at=4), ValueError, r"^domain wall: at must be a site from 1 to 3"),
        (lambda: domain_wall(SPIN, [], ["down"]), ValueError, r"^domain wall: the pattern 'left' is empty$"),
        (lambda: domain_wall(SPIN, ["up"], "down"), TypeError, r"^right: expected a list"),
        (lambda: ProductState(BOSE, 0.0, 0.0), ValueError, r"^angles are for spins, not for boson sites"),
        (lambda: cutoff_loss(SPIN, np.ones(16)), ValueError, r"^Ring\(4\) holds no bosons: there is no cut-off$"),
        (lambda: cutoff_loss(BOSE, np.ones(16)), ValueError, r"^the state needs 81 amplitudes, its shape is \(16,\)$"),
        (lambda: cutoff_loss(BOSE, np.ones(81)), ValueError, r"^the state is not normalised: .* add up to 81$"),
        (lambda: cutoff_loss(BOSE, np.eye(81)[:, :2], weights=[1]), ValueError, r"^2 states need 2 weights"),
        (lambda: PatternState(Lattice(2, {"x": [(0, 1)]}), ["up"] * 3), ValueError, "is longer than a lattice"),
    ],
)  # fmt: skip
def test_refusals(make, error, message):
    with pytest.raises(error, match=message) as caught:
        make()
    assert "\n" not in str(caught.value)


def test_vectors_that_cannot_be_are_refused():
    with pytest.raises(ValueError, match="^bosons without a cut-off have no matrices and vectors"):
        PatternState(Ring(2, Bosons()), [5]).vector()
    with pytest.raises(ResourceError, match=r"^.* amplitudes of the start state need .*; available 1 GiB$"):
        PatternState(Ring(30, Spin(1)), [0]).vector(limit=2**30)
    with pytest.raises(ValueError, match=r"lives on Ring\(4\), the start state on"):
        PatternState(ONE, [0]).mean(formula("Sz[i]", SPIN))
