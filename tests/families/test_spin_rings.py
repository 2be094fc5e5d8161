"""Spin rings in parity sectors against matrices of all spins, at zero modes, at lam = 0 and at low temperatures."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.sparse as sp

import maxent
from maxent.families import Bilinears, Matrices, SpinRing
from maxent.families.majoranas import from_majoranas
from maxent.families.projected import filled
from maxent.families.ring_forms import quadratic_form

LETTERS = {"X": np.array([[0, 1], [1, 0]], complex), "Y": np.array([[0, -1j], [1j, 0]]), "Z": np.diag([1.0 + 0j, -1])}


def spread(pieces: list[tuple[float, str]], n: int, *, is_open: bool = False) -> list[tuple[float, dict[int, str]]]:
    """The same words at every place of a ring, or at those that fit into a chain."""
    out = []
    for c, word in pieces:
        for x in range(n - len(word) + 1 if is_open else n):
            out.append((c, {(x + i) % n: letter for i, letter in enumerate(word) if letter != "I"}))
    return out


def matrix(terms, n: int) -> sp.csr_array:
    total = sp.csr_array((1 << n, 1 << n), dtype=complex)
    for c, letters in terms:
        one = sp.eye_array(1, dtype=complex, format="csr")
        for j in range(n):
            one = sp.kron(one, LETTERS[letters[j]] if j in letters else sp.eye_array(2), format="csr")
        total = total + c * one
    return total


def four(n: int) -> dict:
    return {
        "energy": spread([(-1, "XX"), (-0.6, "Z")], n), "second": spread([(1, "XZX"), (1, "YY")], n),
        "current": spread([(1, "XY"), (-1, "YX")], n), "field": spread([(1, "Z")], n),
    }  # fmt: skip


def dense(terms: dict, n: int, sectors: str) -> Matrices:
    parity = matrix([(1.0, dict.fromkeys(range(n), "Z"))], n).diagonal().real
    kept = {"both": parity != 0, "even": parity > 0, "odd": parity < 0}[sectors]
    whole = Matrices({name: matrix(t, n) for name, t in terms.items()}, dims=(2,) * n)
    return whole.restrict(kept)


PROBES = [
    [(1.0, {0: "X", 3: "X"})], [(1.0, {0: "X", 2: "X", 3: "Z"})], [(0.3, {1: "Z", 4: "Z"}), (1.0, {0: "X", 1: "Y"})],
    [(1.0, {0: "X", 4: "X"})], [(2.0, {1: "Y", 3: "Y"})],
]  # fmt: skip


@pytest.mark.parametrize("sectors", ["both", "even", "odd"])
def test_everything_agrees_with_all_spins(sectors):
    n = 5
    ring, spins = SpinRing(n, four(n), sectors=sectors), dense(four(n), n, sectors)
    assert ring.size == spins.size
    np.testing.assert_allclose(ring.scale, spins.scale, rtol=1e-12)
    for lam in ([0, 0, 0, 0], [0.8, 0.15, 0.2, -0.1], [20.0, 0, 0, 0], [0, 0, 0, 40.0]):
        lam = np.array(lam, float)
        one, other = ring.evaluate(lam), spins.evaluate(lam)
        assert one.log_partition == pytest.approx(other.log_partition, rel=1e-13)
        np.testing.assert_allclose(one.values, other.values, atol=1e-12)
        np.testing.assert_allclose(one.covariance, other.covariance, atol=1e-12)
        factor = one.factor()
        np.testing.assert_allclose(factor @ factor.T, one.covariance, atol=1e-12)
        state, rho = ring.state(lam), spins.state(lam)
        assert state.entropy == pytest.approx(rho.entropy, abs=1e-12)
        for terms in PROBES:
            assert state.mean(terms) == pytest.approx(rho.mean(matrix(terms, n)), abs=1e-12)
        assert state.mean_word({2: "X"}) == 0
    np.testing.assert_allclose(state.reduced([0, 2]), rho.reduced([0, 2]), atol=1e-12)


@pytest.mark.parametrize("sectors", ["both", "even", "odd"])
def test_verdicts_and_certificates_agree(sectors):
    n = 4
    ring, spins = SpinRing(n, four(n), sectors=sectors), dense(four(n), n, sectors)
    lam = np.array([0.5, 0.1, -0.2, 0.3])
    result = maxent.solve(ring, dict(zip(ring.names, ring.evaluate(lam).values, strict=True)))
    assert result.success and result.iterations <= 15
    np.testing.assert_allclose(list(result.multipliers.values()), lam, atol=1e-12)
    v = np.array([0.5, 0.3, -0.4, 0.7])
    v /= np.linalg.norm(v)
    low = ring.lowest(v, with_values=True)
    assert low.value == pytest.approx(spins.lowest(v).value, abs=1e-12)
    for distance in (1e-1, 1e-8, 0.0, -1e-6):
        targets = dict(zip(ring.names, low.values - distance * v, strict=True))
        one, other = maxent.solve(ring, targets), maxent.solve(spins, targets)
        assert one.verdict is other.verdict
        if one.certificate is not None:
            assert one.certificate.verify(ring, targets) and one.certificate.verify(spins, targets)
        if one.face is not None:
            assert one.face.dimension == other.face.dimension


@pytest.mark.parametrize("h", [0.5, 1.0, 1.5])
def test_the_transverse_field_ring_at_all_temperatures(h):
    """beta = 0..300; at h = 1 the odd sector has a zero mode at every temperature."""
    n = 6
    terms = {"energy": spread([(-1, "XX"), (-h, "Z")], n)}
    ring, levels = SpinRing(n, terms), np.linalg.eigvalsh(matrix(terms["energy"], n).toarray())
    for beta in (0.0, 1e-8, 0.1, 1.0, 7.0, 30.0, 300.0):
        ev = ring.evaluate(np.array([beta]))
        p = np.exp(-beta * (levels - levels[0]))
        log_z = np.log(p.sum()) - beta * levels[0]
        p /= p.sum()
        assert ev.log_partition == pytest.approx(log_z, rel=1e-14, abs=1e-14)
        assert ev.values[0] == pytest.approx(p @ levels, abs=2e-12)
        assert ev.covariance[0, 0] == pytest.approx(p @ (levels - p @ levels) ** 2, abs=2e-12)
    ground = maxent.solve(ring, {"energy": float(ring.lowest(np.ones(1)).value)})
    assert ground.verdict is maxent.Verdict.BOUNDARY and ground.face.dimension == 1


@pytest.mark.parametrize("beta", [1.0, 1e5, 3e7])
def test_sectors_add_up_however_large_the_multiplier_is(beta):
    """Eight spins without a field: the classical ring with two ground states, one in each sector."""
    t = np.tanh(beta)
    energy = -8 * (t + t**7) / (1 + t**8)
    ring = SpinRing(8, {"energy": spread([(-1, "XX")], 8)})
    lam = np.array([beta])
    state = ring.state(lam)
    assert ring.evaluate(lam).values[0] == pytest.approx(energy, abs=1e-13)
    assert state.mean(spread([(-1, "XX")], 8)) == pytest.approx(energy, abs=1e-13)
    if beta > 1e4:
        assert state.entropy == pytest.approx(np.log(2), abs=1e-14)
    assert sum(s.weight for s in state.sectors) == pytest.approx(1.0, abs=4e-16)


def test_values_of_a_ring_of_eight():
    """Two routes outside the package, difference 5e-15 (own computation): projected sums and all 256 states."""
    ring = SpinRing(8, four(8))
    lam = np.array([0.8, 0.15, 0.2, -0.1])
    ev, state = ring.evaluate(lam), ring.state(lam)
    assert ev.log_partition == pytest.approx(9.051176356710743, abs=1e-12)
    values = [-6.199115366522086, -1.58639307883481, -1.4415130061998067, 3.0931168927938764]
    np.testing.assert_allclose(ev.values, values, atol=1e-12)
    covariance = [
        [4.198726840615095, -1.5574175010704376, -2.1601599073425994, -1.0417313260577181],
        [-1.5574175010704376, 12.239170667607011, -0.29480112070442743, -0.6199215414398136],
        [-2.1601599073425994, -0.2948011207044272, 7.615530176280117, 0.6957815450876361],
        [-1.0417313260577217, -0.6199215414398136, 0.6957815450876357, 5.122769284652092],
    ]
    np.testing.assert_allclose(ev.covariance, covariance, atol=1e-12)
    found = maxent.solve(ring, dict(zip(ring.names, values, strict=True)))
    assert found.success and found.iterations <= 15
    np.testing.assert_allclose(list(found.multipliers.values()), lam, atol=1e-13)
    assert SpinRing(8, four(8), sectors="unprojected").evaluate(lam).log_partition == pytest.approx(9.049438335875113)
    correlators = [state.mean_word(w) for w in ({0: "X", 1: "X"}, {0: "Y", 1: "Y"}, {0: "X", 1: "Y"}, {0: "X", 2: "X"})]
    expected = [0.5429056538557201, -0.13907666445661188, -0.09009456288748786, 0.2676881278044678]
    np.testing.assert_allclose(correlators, expected, atol=1e-12)
    critical = SpinRing(8, {"energy": spread([(-1, "XX"), (-1, "Z")], 8)}).evaluate(np.array([0.7]))
    assert critical.log_partition == pytest.approx(8.791167872351608, abs=1e-12)
    assert critical.values[0] == pytest.approx(-7.895511026272933, abs=1e-12)


#: Energy per site and ln Z of one Gaussian state minus the exact ones at beta = 1, one digit each (own computation
#: outside the package), by field and number of sites.
UNPROJECTED = {
    0.5: {8: (4e-2, 8e-2), 16: (4e-3, 7e-3), 32: (3e-5, 5e-5), 64: (1e-9, 3e-9)},
    1.0: {8: (2e-2, 4e-2), 16: (6e-4, 1e-3), 32: (7e-7, 2e-6)},
    1.5: {8: (3e-3, 1e-2), 16: (3e-5, 1e-4), 32: (3e-9, 1e-8)},
}


@pytest.mark.parametrize("h", [0.5, 1.0, 1.5])
def test_one_gaussian_state_is_off_by_an_exponential_of_the_length(h):
    """The recorded table, and its law ``exp(-L/xi)``, ``1/xi = max(0, ln h) - 1/2pi int ln tanh(beta eps_k/2) dk``.

    The parities ``<P> = +-prod tanh(beta eps_k/2)`` of the two sectors add up for h < 1; for h > 1 they cancel but for
    the difference of the two trapezoid sums, which the zero of eps_k at ``k = i ln h`` makes ``h^-L`` (own derivation).
    """
    off = {}
    for n, (energy, log_z) in UNPROJECTED[h].items():
        terms = {"energy": spread([(-1, "XX"), (-h, "Z")], n)}
        exact, one = (SpinRing(n, terms, sectors=s).evaluate(np.ones(1)) for s in ("both", "unprojected"))
        off[n] = abs(exact.log_partition - one.log_partition)
        assert off[n] == pytest.approx(log_z, rel=0.55)
        assert abs(exact.values[0] - one.values[0]) / n == pytest.approx(energy, rel=0.55)
    k = 2 * np.pi * (np.arange(4096) + 0.5) / 4096
    rate = -np.log(np.tanh(np.sqrt(1 + h * h - 2 * h * np.cos(k)))).mean() + max(0.0, np.log(h))
    assert np.log(off[16] / off[32]) / 16 == pytest.approx(rate, rel=0.02)


@pytest.mark.parametrize("cell", [1, 2, 3, 6])
def test_momentum_blocks_are_the_whole_ring(cell):
    """Couplings that repeat after so many sites, blocks of that size, against all 64 states."""
    n, rng = 6, np.random.default_rng(cell)
    bonds, fields, twist = rng.standard_normal((3, cell))
    terms = {
        "energy": [(bonds[j % cell], {j: "X", (j + 1) % n: "X"}) for j in range(n)]
        + [(fields[j % cell], {j: "Z"}) for j in range(n)],
        "current": [(twist[j % cell], {j: "X", (j + 1) % n: "Y"}) for j in range(n)],
    }  # fmt: skip
    ring, spins = SpinRing(n, terms), dense(terms, n, "both")
    assert max(a.shape[2] for s in ring.sectors for a in s.matrices) == (4 * cell if cell < 3 else 2 * n)
    for lam in (np.zeros(2), np.array([0.7, -0.4]), np.array([9.0, 4.0])):
        one, other = ring.evaluate(lam), spins.evaluate(lam)
        assert one.log_partition == pytest.approx(other.log_partition, rel=1e-13)
        np.testing.assert_allclose(one.values, other.values, atol=1e-12)
        np.testing.assert_allclose(one.covariance, other.covariance, atol=1e-11)
        for probe in PROBES:
            assert ring.state(lam).mean(probe) == pytest.approx(spins.state(lam).mean(matrix(probe, n)), abs=1e-12)


def test_an_open_chain_has_no_sectors():
    """Both sectors together, one Gaussian state, and the chain as fermions with pairing are the same."""
    n = 6
    terms = {
        "energy": spread([(-1, "XX"), (0.3, "YY")], n, is_open=True),
        "field": [(1.0 + 0.1 * j, {j: "Z"}) for j in range(n)],
    }
    lam = np.array([0.7, -0.3])
    both, one = SpinRing(n, terms), SpinRing(n, terms, sectors="unprojected")
    forms = {name: quadratic_form(t, n, 0) for name, t in terms.items()}
    pairs = {name: (from_majoranas(a), c) for name, (a, c) in forms.items()}
    fermions = Bilinears({k: (h, d, c - 0.5 * np.trace(h).real) for k, ((h, d), c) in pairs.items()})
    for family in (one, fermions):
        assert both.evaluate(lam).log_partition == pytest.approx(family.evaluate(lam).log_partition, abs=1e-12)
        np.testing.assert_allclose(both.evaluate(lam).values, family.evaluate(lam).values, atol=1e-12)
        np.testing.assert_allclose(both.evaluate(lam).covariance, family.evaluate(lam).covariance, atol=1e-12)
    word = {0: "X", 1: "Z", 2: "X", 4: "Z"}
    assert both.state(lam).mean_word(word) == pytest.approx(fermions.state(lam).mean_word(word), abs=1e-12)


def test_the_ground_state_of_an_open_chain():
    """J = 1, h = 0.6, eight sites: energy, block entropies, correlators (own computation, two routes)."""
    terms = {"energy": spread([(-1, "XX"), (-0.6, "Z")], 8, is_open=True)}
    chain = SpinRing(8, terms, sectors="even")
    energy = -7.937821225912225
    assert chain.lowest(np.ones(1)).value == pytest.approx(energy, abs=1e-12)
    state = maxent.solve(chain, {"energy": float(chain.lowest(np.ones(1)).value)}).state
    correlators = [state.mean_word({a: "X", b: "X"}) for a, b in ((0, 3), (2, 6), (0, 7))]
    np.testing.assert_allclose(correlators, [0.7429566916911023, 0.8254809653862476, 0.6196387193588456], atol=1e-11)
    for size, entropy in (
        (1, 0.5122853307697905),
        (2, 0.6244681029874434),
        (3, 0.6610691402974388),
        (4, 0.6698432201068392),
    ):
        p = np.linalg.eigvalsh(state.reduced(range(size)))
        p = p[p > 1e-15]
        assert -p @ np.log(p) == pytest.approx(entropy, abs=1e-10)


def test_rings_and_fixed_numbers_run_on_the_host():
    ring = SpinRing(4, {"field": [(1.0, {j: "Z"}) for j in range(4)]})
    fixed = Bilinears({"h": np.diag([0, 1.0, 2.0])}, number=1)
    for family, targets in ((ring, {"field": 1.0}), (fixed, {"h": 0.7})):
        assert maxent.solve(family, targets).success
        with pytest.raises(TypeError, match="host driver"):
            maxent.solve(family, targets, driver="jax")


def test_faces_keep_the_parity():
    """Two spins pinned, three free: half of their states in each sector."""
    n = 5
    plateau = [(-1.0, {0: "Z"}), (-1.0, {1: "Z"}), (2.0, {})]
    rest = four(n)
    terms = {"plateau": plateau, "energy": rest["energy"], "current": rest["current"]}
    for sectors, count in (("both", 8), ("even", 4), ("odd", 4)):
        ring, spins = SpinRing(n, terms, sectors=sectors), dense(terms, n, sectors)
        face, other = (f.face(np.eye(3)[0], 1e-13).family for f in (ring, spins))
        assert face.size == count
        lam = np.array([0.0, 0.4, -0.7])
        np.testing.assert_allclose(face.evaluate(lam).values, other.evaluate(lam).values, atol=1e-12)
        np.testing.assert_allclose(face.evaluate(lam).covariance, other.evaluate(lam).covariance, atol=1e-12)
        for probe in PROBES:
            assert face.state(lam).mean(probe) == pytest.approx(other.state(lam).mean(matrix(probe, n)), abs=1e-12)


@pytest.mark.parametrize("s", [1, -1])
def test_projected_fillings_are_sums_over_all_of_them(s):
    for e in (np.array([0.0, 0.3, 1.0, 2.5]), np.array([30.0, 31.0, 33.0]), np.array([0.0, 0.0, 500.0]), np.ones(1)):
        bits = (np.arange(1 << len(e))[:, None] >> np.arange(len(e))) & 1
        bits = bits[(-1) ** bits.sum(axis=1) == s]
        log_w = -(bits @ e)
        log_z = np.logaddexp.reduce(log_w)
        p = np.exp(log_w - log_z)
        found = filled(e, s)
        assert found.log_z == pytest.approx(log_z, rel=1e-13, abs=1e-14)
        np.testing.assert_allclose(found.mean, p @ bits, rtol=1e-12, atol=1e-30)
        one = np.einsum("s,sk,sl->kl", p, bits, 1 - bits)
        off = ~np.eye(len(e), dtype=bool)
        np.testing.assert_allclose(found.one[off], one[off], rtol=1e-11, atol=1e-25)
    cold = filled(np.array([800.0, 801.0]), -1)
    assert cold.log_z == pytest.approx(-800 + np.log1p(np.exp(-1)), rel=1e-14)
    np.testing.assert_allclose(cold.mean, np.exp([0, -1.0]) / (1 + np.exp(-1)), rtol=1e-13)


@pytest.mark.parametrize(
    ("make", "text"),
    [
        (lambda: SpinRing(0, {"a": []}), "sites must be a positive integer"),
        (lambda: SpinRing(4, {}), "at least one charge"),
        (lambda: SpinRing(4, {"a": [(1.0, {0: "X"})]}), "charge 'a': X0 is not quadratic"),
        (lambda: SpinRing(4, {"a": [(1.0, {0: "Z", 1: "Z"})]}), "charge 'a': Z0 Z1 is not quadratic"),
        (lambda: SpinRing(4, {"a": [(1j, {0: "Z"})]}), "coefficients must be finite real numbers"),
        (lambda: SpinRing(4, {"a": [(1.0, {4: "Z"})]}), "sites must lie in 0..3"),
        (lambda: SpinRing(4, {"a": [(1.0, {0: "Q"})]}), "X, Y or Z, not 'Q'"),
        (lambda: SpinRing(4, {"a": [(1.0, {0: "Z"})]}, sectors="all"), "sectors must be one of"),
        (lambda: SpinRing(4, {"a": [(1.0, {0: "Z"})]}).state([np.nan]), "finite numbers"),
        (lambda: SpinRing(7, {"a": [(1.0, {0: "Z"})]}).state([0.0]).reduced(range(6)), "up to 5 sites"),
    ],
)
def test_bad_input_is_named(make, text):
    with pytest.raises(ValueError, match=text):
        make()
