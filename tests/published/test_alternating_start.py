"""Thermal states with the energy of the alternating (Neel) state of XXZ chains: rings towards the infinite chain.

Energy sum SxSx + SySy + Delta SzSz, -Delta/4 per site in the alternating state.  Values of the infinite chain: own
solution of the integral equations of M. Gaudin 1971, M. Takahashi 1971.

Rings reach the infinite chain at Delta = 1.5 and 2.  At Delta = 4 and 10 the correlation length at this energy exceeds
them, and the complete and the strictly local ensembles of the infinite chain need all string charges: B. Wouters,
J. De Nardis, M. Brockmann, D. Fioretto, M. Rigol, J.-S. Caux, Phys. Rev. Lett. 113, 117202 (2014); B. Pozsgay et al.,
Phys. Rev. Lett. 113, 117203 (2014).  Rings with the first two charges stand in tests/quench/test_published.py.
"""

from __future__ import annotations

import numpy as np
import pytest

import maxent
from maxent.lattice import Ring, formula
from maxent.quench.ensembles import Charges
from tests.published.test_chains_in_equilibrium import exchange, limit

#: Delta: beta, <sz sz>, <sx sx> of neighbours in Pauli matrices, entropy per site; how far the limit of rings of 8, 10,
#: 12 sites may be off.
THERMAL = {
    1.5: ([1.494514214447071, -0.4910349631594646, -0.3817237776303235, 0.43885293052272645], [2e-5, 2e-5, 2e-5, 2e-6]),
    2.0: ([1.646583441599564, -0.6129325740592892, -0.38706742594120147, 0.3513004880296675], [1e-3, 4e-4, 4e-4, 3e-5]),
}


@pytest.mark.parametrize("delta", THERMAL)
def test_thermal_state_at_the_energy_of_the_alternating_state(delta):
    expected, within = (np.array(x) for x in THERMAL[delta])
    found = []
    for n in (8, 10, 12):
        ring = Ring(n)
        family = Charges({"energy": formula(exchange(delta), ring)}, "energy").family
        result = maxent.solve(family, {"energy": -delta / 4 * n})
        along, across = (result.mean(formula(f"4*S{a}[i]*S{a}[i+1]", ring).matrix()) / n for a in "zx")
        # what is targeted: the energy
        assert 2 * across + delta * along == pytest.approx(-delta, abs=1e-10)
        found.append([result.multipliers["energy"], along, across, result.entropy / n])
    found = np.array(found)
    off = np.abs(found - expected)
    assert np.all(off[2] < off[1]) and np.all(off[1] < off[0])
    assert np.all(np.abs(limit(*found) - expected) <= within)
