"""What a lattice problem costs, estimated from a few states, against counting every state; refusals at once."""

import math

import numpy as np
import pytest
from scipy.sparse.csgraph import connected_components

from maxent.app.cli import main
from maxent.app.kinds import _workload
from maxent.app.kinds._workload import estimate
from maxent.errors import ResourceError
from maxent.lattice import Bosons, Chain, Fermions, Ring, formula
from maxent.lattice.reach import column_lengths, reached
from maxent.lattice.symmetries import adapted_basis, blocked

XXZ = "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 1.5*Sz[i]*Sz[i+1]"
CONFIG = """kind = "spins"
[sites]
geometry = "ring"
size = {size}
[charges]
energy = "{energy}"
magnetisation = "Sz[i]"
[targets]
energy = -1.0
magnetisation = 0.2
"""


def operators(sites, **texts):
    return {name: formula(text, sites) for name, text in texts.items()}


CASES = {
    "two charges": (Ring(10), {"energy": XXZ, "magnetisation": "Sz[i]"}),
    "flip": (Ring(10), {"energy": XXZ}),
    "parity": (Ring(10), {"energy": "Sz[i]*Sz[i+1] + 0.7*Sx[i]"}),
    "open": (Chain(10), {"energy": "Sz[i]*Sz[i+1] + 0.7*Sx[i] + 0.3*Sz[i]"}),
    "fermions": (Ring(10, Fermions()), {"energy": "n[i]*n[i+1] + (dagger(c[i])*c[i+1] + h.c.)", "number": "n[i]"}),
    "bosons": (Ring(6, Bosons(cutoff=2)), {"energy": "n[i]*n[i] + (dagger(b[i])*b[i+1] + h.c.)", "number": "n[i]"}),
}


@pytest.mark.parametrize("case", CASES)
def test_estimates_are_those_of_the_blocks_that_are_built(monkeypatch, case):
    sites, texts = CASES[case]
    charges = operators(sites, **texts)
    basis = adapted_basis(charges, sites)
    pattern = sum(abs(q) for q in blocked(charges, basis).values())
    counts = np.bincount(connected_components(pattern, directed=False)[1]).astype(float)
    monkeypatch.setattr(_workload, "DRAWN", 400)
    found = estimate(charges, sites, study=False)
    width = 8 if basis.is_real else 16
    assert found.eigenvectors / width == pytest.approx(np.sum(counts**2), rel=0.15)
    assert found.largest == pytest.approx(counts.max(), rel=0.1)


def test_diagonal_charges_have_no_blocks_and_small_problems_no_estimate():
    found = estimate(operators(Ring(20), energy="Sz[i]*Sz[i+1]"), Ring(20), study=False)
    assert found.largest == 1 and found.eigenvectors == 0 and found.seconds == 0
    assert estimate(operators(Ring(8), energy=XXZ), Ring(8), study=True) is None


def test_a_charge_that_hides_its_blocks_is_not_refused():
    """One spin turns, the others do not: blocks of two states, though no symmetry tells."""
    ring = Ring(20)
    found = estimate(operators(ring, energy="Sx[0] + 0.5*Sz[i]*Sz[i+1]"), ring, study=False)
    assert found.largest == 2


def test_states_that_are_reached_are_counted_by_the_binomial_and_the_search_ends_when_told():
    hops = formula(XXZ, Ring(12))
    assert len(reached([hops], 0b111111, most=1 << 12)) == math.comb(12, 6)
    assert 100 < len(reached([hops], 0b111111, most=100)) < math.comb(12, 6)


def test_images_of_states_bound_the_energies_from_below():
    ring = Ring(6)
    h = formula(XXZ + " + 0.3*Sx[i]", ring)
    lengths = column_lengths(h, np.arange(64))
    np.testing.assert_allclose(lengths, np.linalg.norm(h.matrix().toarray(), axis=0), atol=1e-13)
    assert lengths.max() <= np.abs(np.linalg.eigvalsh(h.matrix().toarray())).max()


@pytest.mark.parametrize("size", [18, 22, 28])
def test_sizes_that_cannot_work_are_refused_in_one_line(tmp_path, capsys, monkeypatch, size):
    monkeypatch.setattr("maxent.memory.available_memory", lambda: 16 << 30)
    monkeypatch.setattr("maxent.lattice.terms.OperatorSum.matrix", lambda *_, **__: pytest.fail("built a matrix"))
    file = tmp_path / "c.toml"
    file.write_text(CONFIG.format(size=size, energy=XXZ))
    assert main(["check", str(file)]) == 2
    (line,) = [x for x in capsys.readouterr().err.splitlines() if "reading" not in x]
    assert line.startswith(f"{file}:4: sites.size: ") and "need at least" in line and "available 16 GiB" in line


def test_a_long_problem_is_checked_without_its_blocks_and_says_what_it_takes(tmp_path, capsys, monkeypatch):
    monkeypatch.setattr("maxent.memory.available_memory", lambda: 1 << 40)
    monkeypatch.setattr(_workload, "require_memory", lambda *_: None)
    monkeypatch.setattr("maxent.lattice.terms.OperatorSum.matrix", lambda *_, **__: pytest.fail("built a matrix"))
    file = tmp_path / "c.toml"
    file.write_text(CONFIG.format(size=15, energy=XXZ))
    assert main(["check", str(file)]) == 0
    out = capsys.readouterr().out
    assert "estimated" in out and "for eigenvectors" in out and "s for the blocks" in out


def test_what_does_not_fit_beside_the_spectrum_is_refused(monkeypatch):
    ring = Ring(12)
    charges = operators(ring, energy=XXZ)
    plain, study = (estimate(charges, ring, study=s) for s in (False, True))
    assert study.at_once > plain.at_once and study.study > 0 == plain.study
    monkeypatch.setattr("maxent.memory.available_memory", lambda: plain.at_once)
    assert estimate(charges, ring, study=False) == plain
    with pytest.raises(ResourceError, match=r"^4 096 states in blocks of up to \d+ states need "):
        estimate(charges, ring, study=True)
