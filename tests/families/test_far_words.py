"""Products of Pauli matrices by sign and logarithm: against matrices, and far beyond what a number can hold."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad

from maxent.families import Bilinears, Periodic, SpinRing
from maxent.families.gaussian_states import FermionState

LETTERS = {"X": np.array([[0, 1], [1, 0]], complex), "Y": np.array([[0, -1j], [1j, 0]]), "Z": np.diag([1.0 + 0j, -1])}
WORDS = [
    {0: "X", 3: "X"},
    {1: "Y", 4: "Y"},
    {0: "X", 2: "Y"},
    {1: "Z"},
    {0: "Z", 5: "Z"},
    {0: "X", 1: "X", 4: "Y", 5: "Y"},
]


def matrix(letters: dict[int, str], n: int) -> np.ndarray:
    out = np.eye(1)
    for j in range(n):
        out = np.kron(out, LETTERS[letters[j]] if j in letters else np.eye(2))
    return out


def ising(sites: int, field: float, *, is_open: bool = False) -> list[tuple[float, dict[int, str]]]:
    bonds = [(-1.0, {j: "X", (j + 1) % sites: "X"}) for j in range(sites - is_open)]
    return bonds + [(-field, {j: "Z"}) for j in range(sites) if field]


@pytest.mark.parametrize("sectors", ["both", "even", "odd"])
@pytest.mark.parametrize("beta", [0.2, 3.0, 40.0])
def test_words_of_rings_against_matrices(sectors, beta):
    n = 6
    terms = ising(n, 0.7) + [(0.3, {j: "X", (j + 1) % n: "Y"}) for j in range(n)]
    h = sum(c * matrix(w, n) for c, w in terms)
    parity = np.real(np.diag(matrix(dict.fromkeys(range(n), "Z"), n)))
    kept = np.flatnonzero({"both": parity != 0, "even": parity > 0, "odd": parity < 0}[sectors])
    e, u = np.linalg.eigh(h[np.ix_(kept, kept)])
    p = np.exp(-beta * (e - e[0]))
    rho = (u * (p / p.sum())) @ u.conj().T
    state = SpinRing(n, {"energy": terms}, sectors=sectors).state(np.array([beta]))
    for word in WORDS:
        sign, size = state.log_word(word)
        truth = float(np.trace(rho @ matrix(word, n)[np.ix_(kept, kept)]).real)
        assert sign * np.exp(size) == pytest.approx(truth, abs=1e-12)
        assert state.mean_word(word) == sign * np.exp(size)
    assert state.log_word({0: "X"}) == (0.0, -np.inf)
    assert state.log_word({}) == (1.0, pytest.approx(0.0, abs=1e-13))


def test_words_of_fermions_against_matrices(rng):
    a = rng.standard_normal((12, 12))
    state = FermionState.of(0.2 * (a - a.T) / np.abs(np.linalg.eigvalsh(1j * (a - a.T))).max())
    rho = state.density()
    for word in WORDS:
        sign, size = state.log_word(word)
        assert sign * np.exp(size) == pytest.approx(float(np.trace(rho @ matrix(word, 6)).real), rel=1e-10)
    assert state.log_word({2: "Y"}) == (0.0, -np.inf)
    with pytest.raises(ValueError, match=r"sites must lie in 0\.\.5"):
        state.log_word({6: "X"})


def test_the_classical_ring_at_any_distance():
    """Without a field ``<X_0 X_r> = (t^r + t^(L-r))/(1 + t^L)`` with t = tanh(beta), of the sign of the coupling."""
    sites, distance, beta = 260, 121, 1e-3
    for coupling in (1.0, -1.0):
        terms = [(coupling * c, w) for c, w in ising(sites, 0.0)]
        state = SpinRing(sites, {"energy": terms}).state(np.array([beta]))
        sign, size = state.log_word({0: "X", distance: "X"})
        t = np.log(np.tanh(beta))
        assert sign == coupling  # an odd distance
        assert size == pytest.approx(distance * t, rel=1e-13) and size < -830
        assert state.mean_word({0: "X", distance: "X"}) == 0.0


def test_the_classical_chain_of_400_sites():
    terms = ising(400, 0.0, is_open=True)
    state = SpinRing(400, {"energy": terms}, sectors="unprojected").state(np.array([0.01]))
    sign, size = state.log_word({0: "X", 399: "X"})
    assert (sign, size) == (1.0, pytest.approx(399 * np.log(np.tanh(0.01)), rel=1e-12))


@pytest.mark.parametrize(("field", "beta"), [(0.5, 0.01), (0.5, 1.0), (0.9, 0.05)])
def test_correlations_of_the_transverse_field_fall_with_their_length(field, beta):
    """For h < J, ``1/xi = -int dk/(2 pi) ln tanh(beta e(k)/2)`` (B. M. McCoy, Phys. Rev. 173, 531 (1968))."""
    energy = lambda k: np.sqrt(1 + field**2 - 2 * field * np.cos(k))
    rate = -quad(lambda k: np.log(np.tanh(beta * energy(k))), 0, np.pi, epsabs=1e-13)[0] / np.pi
    state = SpinRing(240, {"energy": ising(240, field)}).state(np.array([beta]))
    sizes = [state.log_word({0: "X", r: "X"})[1] for r in (20, 90)]
    # the other way around the ring is smaller by exp(-60 rate), below 1e-8
    assert sizes[0] - sizes[1] == pytest.approx(70 * rate, rel=1e-9)


def test_words_of_periodic_states():
    """Hopping of 40 cells: the same block as in the matrix of all modes, and far away as well."""
    ring = Periodic(40, {0: -0.3, 1: -1.0}, pairing={1: 0.6}, antiperiodic=True)
    state = Bilinears({"energy": ring}).state(np.array([0.02]))
    block = state.reduced(range(40))
    for word in ({3: "X", 9: "X"}, {0: "Z"}, {2: "X", 4: "Y", 5: "Z"}, {}, {7: "Y"}, {1: "X", 30: "X"}):
        sign, size = state.log_word(word)
        assert (sign, size) == (block.log_word(word)[0], pytest.approx(block.log_word(word)[1], rel=1e-9))
        assert state.mean_word(word) == sign * np.exp(size)
    bosons = Bilinears({"number": Periodic(4, {0: 1.0})}, statistics="bosons").state(np.ones(1))
    with pytest.raises(ValueError, match="of fermions, not of bosons"):
        bosons.log_word({0: "Z"})
