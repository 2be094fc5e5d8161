"""Free particles in numbers computed twice outside the package (own computation, differences below 1e-13).

Levels with and without quantum statistics, matrices that do not commute, spin rings in parity sectors, bosons with
pairing, truncated ensembles of an infinite chain.  Conventions: <c+_a c_b> = N_ab; R = (x_1.., p_1..), [x, p] = i,
Q = R^T M R/2, V = <{R, R^T}>/2.
"""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose

import maxent
from maxent.families import Bilinears, Microstates, Modes, SpinRing
from maxent.quench import TransverseFieldChain, truncated_ensembles
from tests.families.test_bilinears import from_phase_space
from tests.families.test_spin_rings import four, spread


def listed(result) -> list[float]:
    return list(result.multipliers.values())


# ------------------------------------------------------------------ levels with given number and energy

FERMI_LEVELS = ([0, 0.3, 0.7, 1.1, 1.6, 2.2, 2.9, 3.5], [1, 2, 3, 1, 2, 3, 1, 2])
OTHER_LEVELS = ([0, 0.5, 1.0, 1.7], [1, 3, 6, 10])
#: statistics: levels, number and energy; multipliers, ln Z, entropy, occupations (40-digit roots as second route)
LEVELS = {
    "fermions": (FERMI_LEVELS, (6.5, 7.25), [-0.8039689207035753, 0.7189407542838089], 9.278648749380807,
        9.265171233365182, [0.6908228309867958, 0.6429719373497323, 0.5746161690223126, 0.5032834755468318,
        0.41427114318205166, 0.3148156409424485, 0.2173869794012674, 0.15286256155362693]),
    "bosons": (OTHER_LEVELS, (12.0, 6.0), [0.16452105921246685, 1.1380504676356484], 7.059534477799351,
        15.862089994162845, [5.591953128383363, 0.9238280532862525, 0.37330921188518484, 0.1396707440446773]),
    "distinguishable": (OTHER_LEVELS, (12.0, 6.0), [-1.503406606148562, 2.3606542193458244], 12.0,
        8.123046042292202, [4.496982454359111, 1.381375160997664, 0.4243283923804567, 0.08129217083651548]),
}  # fmt: skip


@pytest.mark.parametrize("statistics", LEVELS)
def test_levels_with_number_and_energy(statistics):
    (levels, copies), (number, energy), multipliers, log_z, entropy, occupations = LEVELS[statistics]
    family = Modes({"number": np.ones(len(levels)), "energy": np.array(levels)}, statistics, copies)
    result = maxent.solve(family, {"number": number, "energy": energy})
    assert_allclose(listed(result), multipliers, rtol=0, atol=1e-12)
    assert_allclose([result.log_partition, result.entropy], [log_z, entropy], rtol=1e-12)
    assert_allclose(result.state.occupations, occupations, rtol=1e-11)
    if statistics == "fermions":
        chi = [[3.2175336621292963, 4.526023871432695], [4.526023871432695, 9.680990653477936]]
        assert_allclose(result.covariance, chi, rtol=1e-12)


def test_all_fillings_of_the_fermi_levels():
    """The same multipliers from all 2^15 fillings as listed states."""
    levels = np.repeat(*FERMI_LEVELS)
    filled = (np.arange(2**15)[:, None] >> np.arange(15)) & 1
    family = Microstates({"number": filled.sum(1), "energy": filled @ levels})
    result = maxent.solve(family, {"number": 6.5, "energy": 7.25})
    assert_allclose(listed(result), LEVELS["fermions"][2], rtol=0, atol=1e-11)
    assert result.log_partition == pytest.approx(9.278648749380807, abs=1e-11)
    # as many particles as copies: one filling, at the edge; more do not fit
    full = {"number": 15.0, "energy": float(levels.sum())}
    assert str(maxent.solve(family, full).verdict) == "boundary"
    assert str(maxent.solve(family, full | {"number": 15.001}).verdict) == "infeasible"


#: statistics: occupations as targets; multipliers ln((1 - s n)/n) with s = 1, -1, 0; entropy
OWN = {
    "fermions": ([0.9, 0.5, 0.12, 0.03], [-2.1972245773362196, 0.0, 1.992430164690206, 3.4760986898352733],
        1.5198973134038698),
    "bosons": ([6.3, 3.5, 0.84, 0.21], [0.1473247147568586, 0.2513144282809061, 0.7841189587656721,
        1.751268107873318], 7.126510106128105),
    "distinguishable": ([6.3, 3.5, 0.84, 0.21], [-1.840549633397487, -1.252762968495368, 0.1743533871447778,
        1.5606477482646683], -4.655940207800762),
}  # fmt: skip


@pytest.mark.parametrize("statistics", OWN)
def test_own_occupation_of_every_mode(statistics):
    n, multipliers, entropy = OWN[statistics]
    targets = dict(zip("abcd", n, strict=True))
    for family in (Modes.own("abcd", statistics), Modes(dict(zip("abcd", np.eye(4), strict=True)), statistics)):
        result = maxent.solve(family, targets)
        assert_allclose(listed(result), multipliers, rtol=0, atol=1e-9)
        assert result.entropy == pytest.approx(entropy, abs=1e-9)
        assert str(maxent.solve(family, targets | {"d": -1e-6}).verdict) == "infeasible"


# ------------------------------------------------------------------ six fermion modes, charges that do not commute


@pytest.fixture(scope="module")
def six():
    """Number, hopping with a phase of 0.4, staggered potential, a full complex matrix."""
    n = 6
    i, j = np.indices((n, n))
    hop = np.diag(np.full(n - 1, -np.exp(0.4j)), 1)
    full = np.cos(i * j + 1.0) + 1j * (np.sin(2 * i - j) - np.sin(2 * j - i))
    charges = [np.eye(n), hop + hop.conj().T, np.diag((-1.0) ** np.arange(n)), full]
    return Bilinears(dict(zip("abcd", charges, strict=True)))


SIX_LAM = [0.3, 0.8, -0.5, 0.35]
SIX_VALUES = [2.654628355638139, -1.4092800062576811, 0.5384021150460199, -2.998440947920753]
SIX_COVARIANCE = [
    [0.9954179055576677, -0.028222100289992585, 0.07980897445113314, -0.10776187958129371],
    [-0.0282221002899926, 1.663808304531332, 0.05566942189526689, -1.123594229247093],
    [0.07980897445113314, 0.0556694218952669, 1.2218573399463453, 0.49114612858116213],
    [-0.10776187958129378, -1.1235942292470928, 0.49114612858116224, 8.176253373990958],
]
#: G = 1/(1 + exp K), upper triangle by rows; <c+_a c_b> = G_ba
SIX_REAL = [
    0.5059755256975285, 0.1111694228489593, -0.03245098940130484, -0.03482734166174365, -0.035354616091695615,
    -0.029233545888432737, 0.3777064482325156, 0.2106550581873355, 0.0460989458613599, -0.018223284285727483,
    -0.07126826084108703, 0.5264148055435991, 0.10600162429422945, 0.0570582231286822, 0.0016896049598366936,
    0.38358662294530127, 0.09485741259675966, 0.06513603672082821, 0.5641249041009522, 0.18639330725576223,
    0.29682004911824306,
]  # fmt: skip
SIX_IMAGINARY = [
    0, 0.17702204969362315, 0.012283520743818728, -0.014348467548625796, 0.012417450502775663, -0.10683572820486124,
    0, 0.06629273342243995, -0.014775141498922999, 0.09467851464349822, 0.04309832244443024, 0, -0.06029942074979261,
    -0.021563029711465093, 0.11490685346385296, 0, -0.0816011993005941, -0.015434404716740036, 0, 0.030929365993071143,
    0,
]  # fmt: skip


def test_six_modes_forward(six):
    found, state = six.evaluate(np.array(SIX_LAM)), six.state(np.array(SIX_LAM))
    assert_allclose([found.log_partition, state.entropy], [4.689768846996205, 3.040077959386228], rtol=1e-12)
    assert_allclose(found.values, SIX_VALUES, rtol=0, atol=1e-12)
    assert_allclose(found.covariance, SIX_COVARIANCE, rtol=0, atol=1e-12)
    g = np.asarray(state.number).T[np.triu_indices(6)]
    assert_allclose(g, np.array(SIX_REAL) + 1j * np.array(SIX_IMAGINARY), rtol=0, atol=1e-12)


def test_six_modes_inverted(six):
    targets = dict(zip("abcd", SIX_VALUES, strict=True))
    result = maxent.solve(six, targets)
    assert_allclose(listed(result), SIX_LAM, rtol=0, atol=1e-12)
    assert result.entropy == pytest.approx(3.040077959386228, abs=1e-12)
    lowest = six.lowest(np.array([0, 0, 0, 1.0])).value
    assert str(maxent.solve(six, targets | {"d": lowest - 1e-6}).verdict) == "infeasible"


# ------------------------------------------------------------------ spin rings in parity sectors

RING_LAM = [0.8, 0.15, 0.2, -0.1]
RING_VALUES = [-6.199115366522086, -1.58639307883481, -1.4415130061998067, 3.0931168927938764]
RING_COVARIANCE = [
    [4.198726840615095, -1.5574175010704376, -2.1601599073425994, -1.0417313260577181],
    [-1.5574175010704376, 12.239170667607011, -0.29480112070442743, -0.6199215414398136],
    [-2.1601599073425994, -0.2948011207044272, 7.615530176280117, 0.6957815450876361],
    [-1.0417313260577217, -0.6199215414398136, 0.6957815450876357, 5.122769284652092],
]
#: XX, YY, XY at distances 1, 2, 3, 4
RING_CORRELATORS = [
    0.5429056538557201, -0.13907666445661188, -0.09009456288748786, 0.2676881278044678, 0.0007705932186860735,
    -0.04780088151354087, 0.14343942194027096, -0.006788368362337666, -0.019649430316392776, 0.10836652577793844,
    -0.0046851769737070595, 0.0,
]  # fmt: skip


def test_ring_of_eight_spins():
    """-XX - 0.6 Z, XZX + YY, XY - YX, Z: sums over both sectors and all 256 states."""
    family = SpinRing(8, four(8))
    found, state = family.evaluate(np.array(RING_LAM)), family.state(np.array(RING_LAM))
    assert_allclose(found.values, RING_VALUES, rtol=0, atol=1e-12)
    assert_allclose(found.covariance, RING_COVARIANCE, rtol=0, atol=1e-11)
    words = [{0: a, r: b} for r in (1, 2, 3, 4) for a, b in ("XX", "YY", "XY")]
    assert_allclose([state.mean_word(w) for w in words], RING_CORRELATORS, rtol=0, atol=1e-12)
    result = maxent.solve(family, dict(zip(family.names, RING_VALUES, strict=True)))
    assert_allclose(listed(result), RING_LAM, rtol=0, atol=1e-11)


def test_half_of_an_open_chain_in_its_ground_state():
    """J = 1, h = 0.6, eight sites, even ground state: entropy of the first four."""
    chain = SpinRing(8, {"energy": spread([(-1, "XX"), (-0.6, "Z")], 8, is_open=True)}, sectors="even")
    edge = maxent.solve(chain, {"energy": float(chain.lowest(np.ones(1)).value)})
    assert str(edge.verdict) == "boundary" and edge.entropy == pytest.approx(0.0, abs=1e-12)
    p = np.linalg.eigvalsh(edge.state.reduced(range(4)))
    p = p[p > 1e-15]
    assert -p @ np.log(p) == pytest.approx(0.6698432201068392, abs=1e-10)


# ------------------------------------------------------------------ bosons with pairing

PAIRED_LAM = [1.5, 0.4, 0.3]
PAIRED_VALUES = [1.617676233712568, 0.2822890323856484, -0.04883972325066965]
PAIRED_COVARIANCE = [
    [0.650366852553812, 0.08892907273654253, -0.07463349964778843],
    [0.08892907273654253, 0.10092908092825054, -0.011808372059575207],
    [-0.0746334996477884, -0.011808372059575207, 0.1511173549947445],
]
PAIRED_V = [
    [0.5645780647712968, -0.11954668997696631, -0.07298383958393519, -0.030475760727392325],
    [-0.11954668997696634, 0.9659722936167018, 0.06720368577394699, -0.04286542062439572],
    [-0.07298383958393516, 0.06720368577394692, 0.8760417389163335, 0.08864291756717126],
    [-0.030475760727392213, -0.04286542062439576, 0.08864291756717134, 0.5353832246415176],
]


def test_two_boson_modes_with_pairing():
    """Symplectic levels and 34 x 34 states of a truncated Fock space."""
    m = np.zeros((3, 4, 4))
    m[0] = [[1.3, 0.2, 0.1, 0.05], [0.2, 0.9, 0, 0.1], [0.1, 0, 1, -0.15], [0.05, 0.1, -0.15, 1.6]]
    m[1, 0, 0] = 1
    m[2] = [[0, 0, 0, 0.5], [0, 0, -0.5, 0], [0, -0.5, 0, 0], [0.5, 0, 0, 0]]
    family = Bilinears(dict(zip("abc", [from_phase_space(q) for q in m], strict=True)), statistics="bosons")
    result = maxent.solve(family, dict(zip("abc", PAIRED_VALUES, strict=True)))
    assert_allclose(listed(result), PAIRED_LAM, rtol=0, atol=1e-11)
    assert_allclose(result.covariance, PAIRED_COVARIANCE, rtol=0, atol=1e-10)
    assert_allclose(result.state.covariance, PAIRED_V, rtol=0, atol=1e-11)
    assert_allclose([result.log_partition, result.entropy], [-1.448228984937146, 1.0765490616107634], atol=1e-11)


# ------------------------------------------------------------------ truncated ensembles of the infinite chain

#: Quench h0 = 2 -> h = 0.5, charges 2 e(k) cos(m k), m < M: entropy per site; largest distance from the complete
#: covariance within two and four sites; relative entropy and trace distance of four sites (own computation on 4096
#: momenta, one route).
TRUNCATED = {
    1: (0.4573945675025043, 0.2526257672484134, 0.2660456951501962,
        0.34075296729586, 0.3654642943907167),
    2: (0.34490934990521893, 0.10419322909272333, 0.10934431752345296,
        0.04411805500343391, 0.1316842145738668),
    3: (0.3292175514588431, 0.045665413365993626, 0.09133082673212196,
        0.01686961063758119, 0.08354766323331671),
    4: (0.31251595293469037, 0.012216764314529907, 0.04886705725811988,
        0.0024941725827325456, 0.03245078021046992),
    5: (0.3085741215265232, 0.005165234327127163, 0.020660937308512598,
        0.0004528235630196775, 0.01372015368143439),
    6: (0.3048766826061118, 0.0016225988105046524, 0.006490395242018457,
        4.5075870533040074e-05, 0.004310028090402974),
    7: (0.3037471825358191, 0.0007130541045151789, 0.002852216418085373,
        8.725273604071049e-06, 0.0018940499651379171),
    8: (0.3025955504215503, 0.00024652959974014177, 0.0009861183989602826,
        1.0442355540263293e-06, 0.0006548442493095858),
    9: (0.30218271946802866, 0.00011269661703856848, 0.00045078646815396514,
        2.1829005181217553e-07, 0.0002993503890085057),
    10: (0.30172195925719847, 4.140597256406531e-05, 0.0001656238902570245,
        2.947265276276312e-08, 0.0001099846146240333),
    11: (0.30153804806615847, 1.949428051926938e-05, 7.797712207660568e-05,
        6.533299234945389e-09, 5.1781682629032006e-05),
    12: (0.30131841122493097, 7.458922357636566e-06, 2.983568943056361e-05,
        9.564971037434589e-10, 1.981276251302409e-05),
}  # fmt: skip
#: Entropy per site of the complete ensemble, quadrature with 30 digits.  Sums over 4096 momenta are 1.2e-10 above it:
#: n ln n is singular where modes are empty.
COMPLETE = 0.30071107273653443


def test_truncated_ensembles_one_charge_after_the_other():
    complete = TransverseFieldChain(0.5).after_quench(2.0)
    found = truncated_ensembles(complete, list(TRUNCATED))
    exact = {size: complete.block(size).covariance for size in (2, 4)}
    for row in found:
        entropy, near, far, relative, distance = TRUNCATED[row.count]
        assert_allclose([row.entropy, row.entropy_gap], [entropy, entropy - COMPLETE], rtol=0, atol=1e-12)
        off = [np.abs(row.state.block(size).covariance - exact[size]).max() for size in (2, 4)]
        assert_allclose(off, [near, far], rtol=0, atol=1e-12)
        assert_allclose(row.relative_entropy, relative, rtol=1e-8, atol=1e-14)
        assert_allclose(row.trace_distance, distance, rtol=1e-8)
    entropies = [row.entropy for row in found]
    assert entropies == sorted(entropies, reverse=True)
