"""Infinite chains after a quench against published formulas, closed forms, the lattice, and finite rings.

State = exp(-sum lam_j Q_j)/Z, Pauli matrices, numbers per site.
"""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.integrate import quad

import maxent
from maxent.lattice import Ring, formula
from maxent.quench.infinite_chains import HardCoreChain, TransverseFieldChain
from maxent.quench.momentum_averages import average, momentum_nodes

INF = float("inf")

#: P. Calabrese, F. H. L. Essler, M. Fagotti, Phys. Rev. Lett. 106, 227203 (2011) and J. Stat. Mech. (2012) P07016,
#: P07022: formulas for <sigma_z>, <sigma_x sigma_x> of neighbours; values by quadrature, for h0 = 0 and infinity also
#: closed forms (contour integrals).  Fields before and after, <sigma_x sigma_x>, energy and entropy per site:
STATIONARY = [
    (2.0, 0.5, 0.467107728833847, -0.7257656334451887, 0.30071107273653447),
    (0.5, 2.0, 0.5173158092226832, -1.4515312668903775, 0.30071107273653447),
    (0.2, 0.8, 0.7294956513479085, -1.0703298500953118, 0.19980066712468716),
    (INF, 1.0, 0.5, -1.0, 2 * np.log(2) - 1),
    (0.0, 1.0, 0.5, -1.0, 2 * np.log(2) - 1),
]

#: Own quadrature, two routes; the definition is that of D. Rossini, A. Silva, G. Mussardo, G. E. Santoro, Phys. Rev.
#: Lett. 102, 127204 (2009): beta of the energy alone, <sigma_z> and entropy per site at that beta.
THERMAL = [
    (2.0, 0.5, 0.7402391794706977, 0.26469004197427043, 0.45739456750250446),
    (1 / 3, 2 / 3, 2.3355419443178733, 0.39055020898201326, 0.10303805520014588),
    (0.2, 0.8, 1.3606197663834985, 0.48278286301918405, 0.23023369822377027),
    (INF, 1.0, 0.7316165802876614, 0.5, 0.3976038487391282),
]


@pytest.mark.parametrize(("before", "after", "xx", "energy", "entropy"), STATIONARY)
def test_published_stationary_values(before, after, xx, energy, entropy):
    found = TransverseFieldChain(after).after_quench(before)
    assert_allclose([found.mean_word({0: "X", 1: "X"}), found.energy, found.entropy], [xx, energy, entropy], atol=1e-11)
    assert_allclose(found.energy, -found.mean_word({0: "X", 1: "X"}) - after * found.magnetisation, atol=1e-12)


@pytest.mark.parametrize(
    ("before", "after", "expected"),
    [
        (2.0, 0.5, 0.5173158092226835),  # the formula of Calabrese, Essler and Fagotti by quadrature
        *[(0.0, h, h / 2 if h <= 1 else 1 / (2 * h)) for h in (0.5, 1.0, 2.0)],  # closed form
        *[(INF, h, 0.5 if h <= 1 else 1 - 1 / (2 * h * h)) for h in (0.5, 1.0, 2.0)],  # closed form
    ],
)
def test_published_magnetisations(before, after, expected):
    assert TransverseFieldChain(after).after_quench(before).magnetisation == pytest.approx(expected, abs=1e-12)


@pytest.mark.parametrize(("before", "after", "beta", "z", "entropy"), THERMAL)
def test_effective_temperatures(before, after, beta, z, entropy):
    chain = TransverseFieldChain(after)
    complete = chain.after_quench(before)
    result, thermal = complete.ensemble({"energy": chain.charge(0)})
    assert str(result.verdict) == "solved" and result.iterations <= 15
    assert_allclose([result.multipliers["energy"], thermal.magnetisation, thermal.entropy], [beta, z, entropy],
                    atol=1e-9)  # fmt: skip
    assert_allclose([thermal.energy, result.entropy], [complete.energy, thermal.entropy], atol=1e-12)
    assert thermal.entropy > complete.entropy


def test_published_mode_multipliers():
    """2 artanh of the cosine, Calabrese, Essler and Fagotti (2011), at k = pi/2 and 3 pi/4."""
    complete = TransverseFieldChain(0.5).after_quench(2.0)
    assert_allclose(complete.multipliers([np.pi / 2, 0.75 * np.pi]), [np.log(9.0), 3.9599717513753068], atol=1e-11)


@pytest.mark.parametrize(("before", "after", "length"), [(0.2, 0.8, 7.421427639768325), (3.0, 1.5, 1 / np.log(2))])
def test_published_correlation_lengths(before, after, length):
    """Of <sigma_x sigma_x>: Calabrese, Essler, Fagotti, J. Stat. Mech. (2012) P07022, from memory."""
    g = TransverseFieldChain(after).after_quench(before).block(23).covariance
    # X_0 X_l is the determinant of <i g_{2a} g_{2b+1}>, a = 1..l, b = 0..l-1
    part = lambda l: np.linalg.slogdet(g[2 : 2 * l + 2 : 2, 1 : 2 * l : 2])[1]
    assert 1 / (part(20) - part(21)) == pytest.approx(length, rel=1e-5)


def test_critical_ground_state():
    """P. Pfeuty, Ann. Phys. 57, 79 (1970), from memory: -4/pi and 2/pi at h = J = 1."""
    found = TransverseFieldChain(1.0).after_quench(1.0)
    assert_allclose([found.energy, found.magnetisation, found.entropy], [-4 / np.pi, 2 / np.pi, 0.0], atol=1e-12)


#: Superlattice of amplitude A (J = 1, half filling) released: closed form (two Bloch bands) for the multipliers
#: -2 asinh(2 J cos k/A) at k = 2 pi (j + 1/2)/400, j = 3, 40, 77; protocol of M. Rigol, A. Muramatsu, M. Olshanii,
#: Phys. Rev. A 74, 053616 (2006), A. C. Cassidy, C. W. Clark, M. Rigol, Phys. Rev. Lett. 106, 140405 (2011).  Energy
#: per site, beta of the energy alone, entropy of the complete and of the thermal ensemble: own quadrature.
RELEASED = [
    (1.0, [-2.884566531101078, -2.507224779842924, -1.292585799123302],
     [-0.5174861450445362, 1.588137554545466, 0.3696400494024992, 0.3709541273136448]),
    (4.0, [-0.9610720536549862, -0.7841317807817983, -0.3444122762446409],
     [-0.22966609851578054, 0.4859343501293521, 0.6389165189617602, 0.6389211983766678]),
    (8.0, [-0.4941999951509997, -0.39952532637600363, -0.1728432956901841],
     [-0.12217978213929624, 0.2481007983935224, 0.6781058752329933, 0.6781059711957065]),
]  # fmt: skip


@pytest.mark.parametrize(("amplitude", "multipliers", "numbers"), RELEASED)
def test_hard_core_bosons_released_from_a_superlattice(amplitude, multipliers, numbers):
    chain = HardCoreChain()
    complete = chain.after_superlattice(amplitude)
    k = 2 * np.pi * (np.array([3, 40, 77]) + 0.5) / 400
    assert_allclose(complete.multipliers(k), multipliers, atol=1e-11)
    result, thermal = complete.ensemble({"energy": chain.level, "number": chain.charge(0)})
    assert_allclose(
        [complete.energy, result.multipliers["energy"], complete.entropy, thermal.entropy], numbers, atol=1e-9
    )
    assert_allclose([result.multipliers["number"], complete.density], [0.0, 0.5], atol=1e-12)
    # fermions: all of the energy is in neighbouring sites, E = -J <XX + YY>/2
    words = [complete.mean_word({0: p, 1: p}) for p in "XY"]
    assert -0.5 * sum(words) == pytest.approx(complete.energy, abs=1e-12)


def test_alternating_occupation_released_is_infinitely_hot():
    """M. Rigol, V. Dunjko, V. Yurovsky, M. Olshanii, Phys. Rev. Lett. 98, 050405 (2007); closed form."""
    found = HardCoreChain().after_superlattice(INF)
    assert_allclose(found.multipliers(np.linspace(0.1, 3.0, 7)), 0.0, atol=1e-14)
    assert_allclose([found.entropy, found.mean_word({0: "Z", 1: "Z"})], [np.log(2), 0.0], atol=1e-13)


# ------------------------------------------------------------------ conventions

TRANSVERSE = {
    0: "-J*X[i]*X[i+1] - h*Z[i]",
    1: "-J*(X[i]*Z[i+1]*X[i+2] - Z[i]) + h*(X[i]*X[i+1] + Y[i]*Y[i+1])",
    2: "-J*(X[i]*Z[i+1]*Z[i+2]*X[i+3] + Y[i]*Y[i+1]) + h*(X[i]*Z[i+1]*X[i+2] + Y[i]*Z[i+1]*Y[i+2])",
}
HARD_CORE = {
    0: "6 - Z[i]/2",  # 1/2 for each of 12 sites
    1: "(X[i]*X[i+1] + Y[i]*Y[i+1])/2",
    2: "(X[i]*Z[i+1]*X[i+2] + Y[i]*Z[i+1]*Y[i+2])/2",
    3: "(X[i]*Z[i+1]*Z[i+2]*X[i+3] + Y[i]*Z[i+1]*Z[i+2]*Y[i+3])/2",
}


def mean_per_site(state, text, parameters):
    """Mean of a density on the infinite chain: the words of a long ring that begin at site 4, and the number."""
    total = 0.0
    operator = formula(text, Ring(12), parameters)
    for term, coefficient in zip(operator.terms, operator.coefficients, strict=True):
        if not term.positions:
            total += coefficient.real / 12
        elif term.positions[0] == 4:
            letters = {p: o[-1].upper() for p, o in zip(term.positions, term.operators, strict=True)}
            total += coefficient.real * 2 ** -len(letters) * state.mean_word(letters)
    return total


@pytest.mark.parametrize("m", TRANSVERSE)
def test_charges_of_the_transverse_field_chain_by_momentum(m):
    """I_m has the one-particle values 2 e(k) cos(m k), counted from half filling: conserved, and the right means."""
    chain = TransverseFieldChain(0.7, 1.3)
    numbers = {"J": 1.3, "h": 0.7}
    energy, charge = (formula(TRANSVERSE[i], Ring(9), numbers) for i in (0, m))
    assert not energy.commutator(charge).words or max(abs(energy.commutator(charge).coefficients)) < 1e-12
    state = chain.after_quench(-0.4)
    vacuum = -0.5 * average(chain.charge(m))
    found = mean_per_site(state, TRANSVERSE[m], numbers)
    assert found == pytest.approx(state.mean(chain.charge(m)) + vacuum, abs=1e-12)
    if m == 0:
        assert state.energy == pytest.approx(state.mean(chain.charge(0)) + vacuum, abs=1e-12)


@pytest.mark.parametrize("m", HARD_CORE)
def test_charges_of_hard_core_bosons_by_momentum(m):
    chain = HardCoreChain(0.8)
    state = chain.after_superlattice(1.7)
    _, warm = state.ensemble({"energy": chain.level, "number": chain.charge(0), "far": chain.charge(3)})
    for s in (state, warm):
        assert mean_per_site(s, HARD_CORE[m], {}) == pytest.approx(s.mean(chain.charge(m)), abs=1e-12)


@pytest.mark.parametrize(("before", "after"), [(2.0, 0.5), (0.3, -1.4), (-INF, 0.2), (1.0, 1.0)])
def test_occupations_do_not_cancel(before, after):
    """Small occupations against the cosine of the Bogoliubov angle evaluated with 50 digits."""
    mp = pytest.importorskip("mpmath")
    chain = TransverseFieldChain(after)
    k = np.array([1e-9, 1e-4, 0.3, 1.5, 3.0, 3.1415])
    found = chain.after_quench(before).occupations(k)
    with mp.workdps(60):
        for x, n in zip(k, found, strict=True):
            c = mp.cos(mp.mpf(float(x)))
            e = mp.sqrt(1 + mp.mpf(after) ** 2 - 2 * after * c)
            if np.isinf(before):
                cosine = np.sign(before) * (after - c) / e
            else:
                e0 = mp.sqrt(1 + mp.mpf(before) ** 2 - 2 * before * c)
                cosine = (mp.mpf(after) * before - (mp.mpf(after) + before) * c + 1) / (e * e0)
            assert n == pytest.approx(float((1 - cosine) / 2), rel=1e-6, abs=1e-25)


def test_averages_against_other_quadrature():
    k, weights = momentum_nodes(7)
    assert weights.sum() == pytest.approx(1.0) and np.all(np.diff(k) >= 0) and 0 < k[0]
    f = lambda x: np.log(2 + np.cos(x)) * np.cos(3 * x)
    assert average(f) == pytest.approx(quad(f, 0, np.pi, epsabs=1e-14)[0] / np.pi, abs=1e-13)
    assert average(lambda x: np.cos(40 * x)) == pytest.approx(0.0, abs=1e-13)
    with pytest.raises(ValueError, match="still changes by"):
        average(lambda x: (x < 1).astype(float))


def test_what_cannot_be():
    with pytest.raises(ValueError, match="coupling > 0, not 0.5 and -1"):
        TransverseFieldChain(0.5, -1.0)
    with pytest.raises(ValueError, match="coupling > 0"):
        HardCoreChain(0.0)
    with pytest.raises(ValueError, match="must be a number"):
        TransverseFieldChain(0.5).after_quench(float("nan"))
    with pytest.raises(ValueError, match="at least one site"):
        HardCoreChain().after_superlattice(1.0).block(0)


@pytest.mark.parametrize("field", [0.0, 0.5, 1.0, 2.0])
def test_without_a_quench_every_mode_is_empty(field):
    """Everything on the edge: no entropy, infinite multipliers, the ground state, and an ensemble on the boundary."""
    chain = TransverseFieldChain(field)
    state = chain.after_quench(field)
    k = np.linspace(0.1, 3.0, 7)
    assert state.entropy == 0 and np.all(state.multipliers(k) == np.inf)
    assert state.energy == pytest.approx(-float(average(lambda k: chain.level(k) / 2)), rel=1e-12)
    result, fitted = state.ensemble({"energy": chain.charge(0), "second": chain.charge(1)})
    assert result.verdict is maxent.Verdict.BOUNDARY and fitted is None
    assert abs(result.entropy) <= 1e-11
