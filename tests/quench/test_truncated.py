"""Truncated ensembles of the infinite transverse-field chain against an independent computation."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from maxent.quench.infinite_chains import HardCoreChain, TransverseFieldChain
from maxent.quench.truncated import truncated_ensembles

#: Quench h0 = 2 -> h = 0.5, charges 2 e(k) cos(m k), m < M.  Own computation on a ring of 4096 momenta: M, entropy per
#: site, relative entropy and trace distance of 4 sites (complete state against the truncated one).
TABLE = [
    (1, 0.4573945675025043, 0.34075296729586, 0.3654642943907167),
    (2, 0.34490934990521893, 0.04411805500343391, 0.1316842145738668),
    (3, 0.3292175514588431, 0.01686961063758119, 0.08354766323331671),
    (4, 0.31251595293469037, 0.0024941725827325456, 0.03245078021046992),
    (6, 0.3048766826061118, 4.5075870533040074e-05, 0.004310028090402974),
    (8, 0.3025955504215503, 1.0442355540263293e-06, 0.0006548442493095858),
    (10, 0.30172195925719847, 2.947265276276312e-08, 0.0001099846146240333),
    (12, 0.30131841122493097, 9.564971037434589e-10, 1.981276251302409e-05),
]
#: Entropy per site of the complete ensemble, by quadrature (tests/quench/test_infinite_chains.py).
COMPLETE = 0.30071107273653447


@pytest.fixture(scope="module")
def found():
    chain = TransverseFieldChain(0.5).after_quench(2.0)
    return truncated_ensembles(chain, [row[0] for row in TABLE])


def test_both_measures(found):
    for row, (count, entropy, relative, distance) in zip(found, TABLE, strict=True):
        assert (row.count, row.verdict, row.iterations <= 15) == (count, "solved", True)
        assert_allclose([row.entropy, row.entropy_gap], [entropy, entropy - COMPLETE], atol=1e-12)
        assert_allclose(row.relative_entropy, relative, rtol=1e-9, atol=1e-14)
        assert_allclose(row.trace_distance, distance, rtol=1e-9)


def test_one_falls_algebraically_and_the_other_exponentially(found):
    """Halving the algebraic measure takes a factor of M, the exponential one a number of charges."""
    few, many = found[3], found[-1]  # 4 and 12 charges
    power = -np.log(many.entropy_gap / few.entropy_gap) / np.log(many.count / few.count)
    rate = -np.log(many.relative_entropy / few.relative_entropy) / (many.count - few.count)
    assert 2 < power < 4 and 1.5 < rate < 2.5


def test_entropy_drop_is_relative_entropy_per_site(found):
    """s_M - s = lim S(complete || truncated)/l: growth of the block measure per added site, for large blocks."""
    chain = TransverseFieldChain(0.5).after_quench(2.0)
    sizes = [truncated_ensembles(chain, [1], block=b)[0].relative_entropy for b in (5, 6)]
    assert sizes[1] - sizes[0] == pytest.approx(found[0].entropy_gap, rel=0.05)


def test_hard_core_bosons():
    """Multipliers -2 asinh(2 J cos k/A) of the complete ensemble are a quickly converging cosine series."""
    complete = HardCoreChain().after_superlattice(4.0)
    one, two, four = truncated_ensembles(complete, [1, 2, 4])
    assert one.multipliers["I0"] == pytest.approx(0.0, abs=1e-12) and one.entropy == pytest.approx(np.log(2))
    assert one.entropy_gap > two.entropy_gap > 100 * four.entropy_gap > 0
    # even cosines vanish: the occupations minus 1/2 are odd around k = pi/2
    assert four.multipliers["I2"] == pytest.approx(0.0, abs=1e-10)


def test_nothing_to_fit_in_a_ground_state():
    """The ground state is at the limit of what can be reached: no multipliers, and the verdict says so."""
    (row,) = truncated_ensembles(TransverseFieldChain(0.5).after_quench(0.5), [1])
    assert row.verdict == "boundary" and np.isnan(row.entropy_gap) and np.isnan(row.relative_entropy)


def test_input():
    complete = HardCoreChain().after_superlattice(4.0)
    with pytest.raises(ValueError, match="from 1 on"):
        truncated_ensembles(complete, [0, 1])
    with pytest.raises(ValueError, match="1 to 8 sites, not 9"):
        truncated_ensembles(complete, [1], block=9)
