"""Cut-offs of bosons in a comparison, against traces of dense matrices."""

import numpy as np
import scipy.linalg as sl

from maxent.lattice import Bosons, Chain, PatternState, formula
from maxent.quench import compare


def gibbs(matrices, lam):
    k = sum(x * q for x, q in zip(lam, matrices, strict=True))
    rho = sl.expm(-(k - np.linalg.eigvalsh(k)[0] * np.eye(len(k))))
    return rho / np.trace(rho).real


def test_states_that_feel_the_cutoff_are_told_with_their_weight():
    chain = Chain(4, Bosons(cutoff=3))
    f = lambda text: formula(text, chain)
    charges = {
        "energy": f("-(dagger(b[i])*b[i+1] + h.c.) + 1.5*n[i]*(n[i] - 1)"),
        "number": f("n[i]"),
    }
    found = compare(charges, PatternState(chain, [1, 0]).vector(), blocks=(1,), ranking=False)
    (note,) = (n for n in found.notes if "cut-off at 3 bosons" in n)
    tops = [np.kron(np.eye(4**k), np.kron(np.diag([0, 0, 0, 1.0]), np.eye(4 ** (3 - k)))) for k in range(4)]
    for label in ("canonical", "grand canonical"):
        e = found.ensemble(label)
        rho = gibbs([charges[n].matrix().toarray() for n in e.charges], [e.multipliers[n] for n in e.charges])
        worst = max(np.trace(rho @ top).real for top in tops)
        assert worst > 1e-3 and f"{worst:.2g} ({label})" in note
    assert "the start" not in note  # it holds no more than one boson on a site
    few = Chain(2, Bosons(cutoff=7))
    energy = {"energy": formula("n[i] + 0.1*(dagger(b[i])*b[i+1] + h.c.)", few)}
    calm = compare(energy, PatternState(few, [0, 0]).vector(), blocks=(1,), ranking=False)
    assert not any("cut-off" in n for n in calm.notes)
