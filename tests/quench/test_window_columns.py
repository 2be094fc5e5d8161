"""Windows and thermodynamics as columns of a comparison, against dense matrices; blocks of neighbouring sites."""

from __future__ import annotations

import json

import numpy as np
import pytest
from scipy.special import erf

from maxent.lattice import Bosons, Chain, Lattice, ProductState, Ring, formula
from maxent.quench.blocks import block_sites
from maxent.quench.comparison import compare
from maxent.quench.distances import trace_distance
from maxent.quench.ensembles import Charges
from maxent.quench.potentials import find_potentials
from maxent.quench.starts import ground_start

H = "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 0.6*Sz[i]*Sz[i+1] + 0.3*Sz[i]*Sz[i+2]"


def study(size, theta, **options):
    ring = Ring(size)
    f = lambda text: formula(text, ring)
    charges = {"energy": f(H), "magnetisation": f("Sz[i]")}
    observables = {"zz": f("Sz[i]*Sz[i+1]/L"), "x": f("Sx[0]")}
    return charges, ProductState(ring, theta, 0.0).vector(), {"observables": observables, "ranking": False, **options}


@pytest.fixture(scope="module")
def leaning():
    """Energy and magnetisation both have spread."""
    charges, start, options = study(8, [0.3, 1.9])
    return charges, compare(charges, start, **options)


def joint_levels(charges):
    """Energies, magnetisations and vectors from dense matrices, magnetisation by magnetisation."""
    h = charges["energy"].matrix().toarray().real
    m = charges["magnetisation"].matrix().diagonal().real
    energies, values, vectors = [], [], []
    for value in np.unique(m):
        keep = np.flatnonzero(m == value)
        e, u = np.linalg.eigh(h[np.ix_(keep, keep)])
        full = np.zeros((len(m), len(keep)))
        full[keep] = u
        energies.append(e)
        values.append(np.full(len(keep), value))
        vectors.append(full)
    return np.concatenate(energies), np.concatenate(values), np.concatenate(vectors, axis=1)


def mixture(vectors):
    return vectors @ vectors.T / vectors.shape[1]


def test_sharp_windows_count_states_of_dense_matrices(leaning):
    charges, found = leaning
    e, m, v = joint_levels(charges)
    for label, joint in (("sharp window", False), ("sharp window: energy, magnetisation", True)):
        window = found.ensemble(label)
        facts = window.facts
        kept = (e >= facts["lowest"] - 1e-9) & (e <= facts["highest"] + 1e-9)
        if joint:
            ends = facts["lowest of magnetisation"], facts["highest of magnetisation"]
            kept &= (m >= ends[0] - 1e-9) & (m <= ends[1] + 1e-9)
            assert ends[1] - ends[0] <= facts["width of magnetisation"]
        assert facts["states"] == kept.sum() and window.entropy == pytest.approx(np.log(kept.sum()))
        assert facts["highest"] - facts["lowest"] <= facts["width"]
        rho = mixture(v[:, kept])
        assert facts["mean"] == pytest.approx(e[kept].mean(), abs=1e-12)
        assert facts["mean"] == pytest.approx(found.targets["energy"], abs=0.1)
        zz = formula("Sz[i]*Sz[i+1]/L", Ring(8)).matrix().diagonal().real
        assert window.means["zz"] == pytest.approx(np.diagonal(rho) @ zz, abs=1e-12)
        assert window.means["x"] == pytest.approx(0.0, abs=1e-12)
    assert found.ensemble(label).charges == ("energy", "magnetisation")


def test_width_of_a_sharp_window_is_that_of_a_flat_distribution(leaning):
    charges, found = leaning
    start = ProductState(Ring(8), [0.3, 1.9], 0.0).vector()
    h = charges["energy"].matrix().toarray()
    spread = np.sqrt(np.linalg.norm(h @ start) ** 2 - (start.conj() @ h @ start).real ** 2)
    assert found.ensemble("sharp window").facts["width"] == pytest.approx(np.sqrt(12) * spread)


def test_beta_of_a_sharp_window_is_the_slope_of_the_smoothed_entropy(leaning):
    charges, found = leaning
    e = joint_levels(charges)[0]
    window = found.ensemble("sharp window").facts
    s, width = window["smoothed over"], window["width"]
    assert s == pytest.approx(width / 4)
    count = lambda c: np.sum(erf((c + width / 2 - e) / s / 2**0.5) - erf((c - width / 2 - e) / s / 2**0.5)) / 2
    # the middle is not printed: the one whose mean energy is that at which the slope is said to be taken
    share = lambda c: erf((c + width / 2 - e) / s / 2**0.5) - erf((c - width / 2 - e) / s / 2**0.5)
    middles = np.linspace(-3, 3, 6001)
    means = np.array([share(c) @ e / share(c).sum() for c in middles])
    middle = np.interp(window["beta at"], means, middles)
    slope = (np.log(count(middle + 1e-4)) - np.log(count(middle - 1e-4))) / 2e-4
    assert window["beta"] == pytest.approx(slope, abs=1e-4)


def test_beta_of_a_gaussian_window_is_the_slope_at_its_mean(leaning):
    charges, found = leaning
    e = joint_levels(charges)[0]
    facts = found.ensemble("Gaussian window").facts
    log_sum = lambda c: np.log(np.sum(np.exp(-((e - c) ** 2) / (2 * facts["width"] ** 2))))
    slope = (log_sum(facts["centre"] + 1e-5) - log_sum(facts["centre"] - 1e-5)) / 2e-5
    assert facts["beta"] == pytest.approx(slope, abs=1e-8)
    assert facts["mean"] == pytest.approx(found.targets["energy"], abs=1e-9) and facts["mean"] != facts["centre"]


def test_a_sharp_number_is_held_and_shown_once():
    charges, start, options = study(8, ["0", "pi"])
    found = compare(charges, start, **options)
    held = found.ensemble("sharp window: energy, magnetisation")
    e, m, _ = joint_levels(charges)
    kept = (e >= held.facts["lowest"] - 1e-9) & (e <= held.facts["highest"] + 1e-9) & (m == 0)
    assert held.facts["states"] == kept.sum() and "width of magnetisation" not in held.facts
    # in the sector of magnetisation alone the joint window selects nothing that the plain one does not
    alone = compare(charges, start, **options, by_symmetry=False)
    assert alone.ensemble("sharp window", sector=True).facts["states"] == kept.sum()
    assert "sharp window: energy, magnetisation" not in alone.labels


def test_where_symmetries_leave_too_few_levels_the_window_is_at_the_number():
    charges, start, options = study(8, ["pi", "pi", "0", "0"])
    found = compare(charges, start, **options)
    assert found.sharp == {"magnetisation": 0.0, "translation^4": 0.0, "translation^2 reflection": 1.0}
    assert any(n.startswith("No Gaussian window in the sector of the start") for n in found.notes)
    window = found.ensemble("Gaussian window at magnetisation = 0", sector=True)
    assert window.sector == {"magnetisation": 0.0}
    e, m, _ = joint_levels(charges)
    weight = np.exp(-0.5 * ((e - window.facts["centre"]) / window.facts["width"]) ** 2) * (m == 0)
    p = weight[weight > 0] / weight.sum()
    assert window.entropy == pytest.approx(-np.sum(p * np.log(p)))
    assert weight @ e / weight.sum() == pytest.approx(found.targets["energy"], abs=1e-9)
    few, start, options = study(8, ["pi", "0", "0", "0"])  # and there are too few at magnetisation 2
    notes = compare(few, start, **options).notes
    assert any(n.startswith("No Gaussian window at magnetisation = 2: window of width") for n in notes)


def test_charges_that_do_not_commute_have_no_joint_window():
    ring = Ring(6)
    f = lambda text: formula(text, ring)
    charges = {"energy": f("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Sz[i]*Sz[i+1]"), "x": f("Sx[i]"), "z": f("Sz[i]")}
    start = ProductState(ring, ["0.3", "1.1", "0.2", "1.5", "0.7", "1.3"], 0.0).vector()
    found = compare(charges, start, ranking=False)
    note = next(n for n in found.notes if n.startswith("No joint window"))
    assert note == (
        "No joint window in x and z: they do not commute and have no common levels; windows are in energy and z."
    )
    assert found.ensemble("sharp window: energy, z").charges == ("energy", "z")


# ---------------------------------------------------------------- thermodynamics


def quantity(ensemble, name):
    return next(q for q in ensemble.quantities if q.name == name)


def test_quantities_of_the_grand_canonical_fit(leaning):
    charges, found = leaning
    e, m, _ = joint_levels(charges)
    fit = found.ensemble("grand canonical")
    beta, field = fit.multipliers["energy"], -fit.multipliers["magnetisation"] / fit.multipliers["energy"]
    p = np.exp(-beta * (e - field * m - e.min()))
    p /= p.sum()
    chi = np.cov(np.stack([e, m]), aweights=p, ddof=0)
    assert quantity(fit, "temperature").value == pytest.approx(1 / beta)
    assert quantity(fit, "field").value == pytest.approx(field)
    held = beta**2 * (chi[0, 0] - chi[0, 1] ** 2 / chi[1, 1])
    assert quantity(fit, "heat capacity at fixed magnetisation").value == pytest.approx(held, rel=1e-9)
    assert quantity(fit, "susceptibility of magnetisation").value == pytest.approx(beta * chi[1, 1], rel=1e-9)
    assert len(fit.self_checks) == 5 and all(fit.self_checks)
    plain = json.loads(json.dumps(found.to_dict(), allow_nan=False))["ensembles"]
    data = next(x for x in plain if x["label"] == "grand canonical" and not x["sector"])
    assert data["self_checks"][0]["agrees"] is True
    assert set(data["quantities"][0]) == {"name", "formula", "value", "error", "sigma", "reason"}


def test_quantities_that_are_not_defined_say_why():
    charges, start, options = study(8, ["0", "pi", "pi", "pi"])
    ring = Ring(8)
    density = {"h": "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 0.6*Sz[i]*Sz[i+1]"}
    charges = {"energy": formula("h[i]", ring, {}, density), "magnetisation": charges["magnetisation"],
               "current": formula("1j*commutator(h[i], h[i+1])", ring, {}, density)}  # fmt: skip
    found = compare(charges, start, **options)
    inside = found.ensemble("generalised: energy, magnetisation, current", sector=True)
    field = quantity(inside, "field")
    assert field.value != field.value
    assert field.reason == "magnetisation is a number in all states: its multiplier is not fixed"
    assert quantity(inside, "temperature").value == pytest.approx(1 / inside.multipliers["energy"])
    # on the boundary, the ground state of the Hamiltonian itself, there is no temperature at all
    cold = compare({"energy": charges["energy"]}, ground_start(charges["energy"]), ranking=False)
    assert cold.ensemble("canonical").verdict == "boundary"
    assert cold.ensemble("canonical").quantities == cold.ensemble("canonical").self_checks == ()


def test_numbers_and_fields_are_recognised_or_given():
    chain = Chain(3, Bosons(cutoff=2))
    f = lambda text: formula(text, chain)
    bosons = Charges({"energy": f("-dagger(b[i])*b[i+1] - dagger(b[i+1])*b[i]"), "count": f("n[i]")}, "energy")
    assert find_potentials(bosons) == (("count",), ())
    ring = Ring(4)
    g = lambda text: formula(text, ring)
    names = {"energy": g("Sz[i]*Sz[i+1]"), "along": g("Sz[i]"), "pair": g("Sz[i]*Sz[i+2]")}
    spins = Charges(names, "energy")
    assert find_potentials(spins) == ((), ("along",))
    assert find_potentials(spins, ["along"]) == ((), ())
    assert find_potentials(spins, numbers=["along"]) == (("along",), ())
    assert find_potentials(spins, fields=()) == ((), ())
    start = ProductState(ring, [0.4, 1.1], 0.0).vector()
    found = compare(names, start, fields=["pair"], numbers="along", ranking=False)
    assert found.ensemble("grand canonical").charges == ("energy", "along", "pair")
    for wrong, said in (
        ({"numbers": ["energy"]}, "numbers: 'energy' is none of the charges beside the Hamiltonian: 'along', 'pair'"),
        ({"fields": ["across"]}, "fields: 'across' is none of the charges"),
        ({"fields": ["along"], "numbers": ["along"]}, "fields: 'along' is named twice"),
    ):
        with pytest.raises(ValueError, match=said):
            compare(names, start, **wrong)


# ---------------------------------------------------------------- blocks


def test_blocks_are_connected():
    grid = Lattice.grid(4, 3)
    joined = {frozenset(b) for pairs in grid.bonds.values() for b in pairs}
    found = block_sites(grid, [1, 2, 3, 4, 6])
    for size, sites in found.items():
        assert len(set(sites)) == size
        reached, fresh = {sites[0]}, [sites[0]]
        while fresh:
            here = fresh.pop()
            new = [s for s in sites if s not in reached and frozenset((s, here)) in joined]
            reached |= set(new)
            fresh += new
        assert reached == set(sites)
    assert all(found[6][:k] == found[k] for k in (1, 2, 3, 4))
    row = Lattice(6, {"neighbours": [(i, i + 1) for i in range(5)]})
    assert block_sites(row, [2, 3]) == block_sites(Chain(6), [2, 3]) == {2: (2, 3), 3: (1, 2, 3)}
    legs = Chain(3, cell=("a", "b"), bonds={"legs": [("a", "a", 1), ("b", "b", 1)]})  # two chains without rungs
    assert block_sites(legs, [1, 2, 3, 4]) == {1: (2,), 2: (2, 0), 3: (2, 0, 4)}


def test_blocks_of_a_lattice_in_a_comparison():
    pairs = [(0, 3), (3, 1), (1, 4), (4, 2), (2, 5), (5, 0)]  # a ring of six whose numbers jump
    lattice = Lattice(6, {"bonds": pairs})
    h = formula("Sx[a]*Sx[b] + Sy[a]*Sy[b] + 0.5*Sz[a]*Sz[b] for <a, b>", lattice)
    order = [0, 3, 1, 4, 2, 5]
    theta = np.array([0.3, 1.9] * 3)
    start = np.ones(1)
    for site in range(6):
        angle = theta[order.index(site)]
        start = np.kron(start, [np.cos(angle / 2), np.sin(angle / 2)])
    found = compare({"energy": h}, start, blocks=(1, 2, 3), ranking=False)
    assert found.block_sites == {1: (0,), 2: (0, 3), 3: (0, 3, 5)}
    # the canonical state of the block by hand
    fit = found.ensemble("canonical")
    w, v = np.linalg.eigh(h.matrix().toarray())
    p = np.exp(-fit.multipliers["energy"] * (w - w[0]))
    thermal = (v * (p / p.sum())) @ v.conj().T
    c = v.conj().T @ start
    dephased = v @ (np.outer(c, c.conj()) * (np.abs(w[:, None] - w) < 1e-9)) @ v.conj().T
    parts = []
    for rho in (thermal, dephased):
        t = rho.reshape((2,) * 12)
        t = np.moveaxis(t, [0, 3, 6, 9], [0, 1, 2, 3]).reshape(4, 4, 16, 16)
        parts.append(np.trace(t, axis1=2, axis2=3))
    assert fit.distances[2] == pytest.approx(trace_distance(*parts), abs=1e-10)
    apart = Lattice(6, {"bonds": [(0, 1), (2, 3), (4, 5)]})
    two = formula(" + ".join(f"Sz[{a}]*Sz[{b}] + Sx[{a}]" for a, b in apart.bonds["bonds"]), apart)
    notes = compare({"energy": two}, start, blocks=(1, 2, 3), ranking=False).notes
    assert "Blocks of more than 2 sites are left out: bonds connect no more." in notes
