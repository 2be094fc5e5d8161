"""Sectors of a start against dense projectors: reflections, products, charges that are not diagonal, broken charges."""

import numpy as np
import pytest
import scipy.optimize as so

from maxent.lattice import Chain, ProductState, Ring, formula
from maxent.quench import compare
from maxent.quench.distances import trace_distance
from maxent.quench.ensembles import Charges, find_sector
from maxent.quench.starts import Start, ground_start

TILTED = "4*Sz[i]*Sz[i+1] + 1.8*Sx[i] + 1.6*Sz[i]"


def moved(size, to):
    """Matrix that moves the content of site i of a row of spins to site ``to(i)``."""
    out = np.zeros((2**size, 2**size))
    for n in range(2**size):
        m = sum(1 << (size - 1 - to(i)) for i in range(size) if n >> (size - 1 - i) & 1)
        out[m, n] = 1.0
    return out


def shared(psi, *operators):
    """Isometry onto the states that have the values of `psi` of Hermitian operators, one after the other."""
    v = np.eye(len(psi))
    for q in operators:
        value = np.vdot(psi, q @ psi).real
        assert np.linalg.norm(q @ psi - value * psi) < 1e-10
        w, u = np.linalg.eigh(v.conj().T @ q @ v)
        v = v @ u[:, np.abs(w - value) < 1e-9]
    return v


def canonical(h, v, energy):
    """Multiplier, entropy and state of the canonical ensemble of this mean energy on the span of `v`."""
    e, u = np.linalg.eigh(v.conj().T @ h @ v)
    p = lambda beta: (x := np.exp(-beta * (e - e.mean()))) / x.sum()
    beta = so.brentq(lambda b: p(b) @ e - energy, -3, 3, xtol=1e-14)
    states, weights = v @ u, p(beta)
    return beta, -weights @ np.log(weights), (states * weights) @ states.conj().T


def on_first(rho, size, block):
    parts = rho.reshape(2**block, 2 ** (size - block), 2**block, -1)
    return np.trace(parts, axis1=1, axis2=3)


def test_reflection_has_a_label_at_momentum_zero():
    size, ring = 8, Ring(8)
    psi = ProductState(ring, 1.2, 2.0).vector()
    h = formula(TILTED, ring)
    observables = {"z": formula("2*Sz[0]", ring)}
    found = compare({"energy": h}, psi, observables=observables, blocks=(1, 2, 3), ranking=False)
    assert found.sharp == {"translation": 0.0, "reflection": 1.0}
    shift, mirror = moved(size, lambda i: (i + 1) % size), moved(size, lambda i: size - 1 - i)
    average = sum(np.linalg.matrix_power(shift, k) for k in range(size)) / size
    v = shared(psi, average, mirror)
    inside = found.ensemble("canonical", sector=True)
    dense = h.matrix().toarray()
    beta, entropy, rho = canonical(dense, v, found.targets["energy"])
    assert inside.multipliers["energy"] == pytest.approx(beta, abs=1e-10) and beta == pytest.approx(-0.0057, abs=5e-5)
    assert inside.entropy == pytest.approx(entropy, abs=1e-10)
    # the dephased state, energy by energy
    e, u = np.linalg.eigh(dense)
    c = u.conj().T @ psi
    long = u @ (np.outer(c, c.conj()) * (np.abs(e[:, None] - e) < 1e-9)) @ u.conj().T
    for block in (1, 2, 3):
        far = trace_distance(on_first(rho, size, block), on_first(long, size, block))
        assert inside.distances[block] == pytest.approx(far, abs=1e-10)
    # what windows, eigenstates and tests speak of is the same sector
    levels = np.linalg.eigvalsh(v.conj().T @ dense @ v)
    np.testing.assert_allclose(found.levels["energy"], levels, atol=1e-10)
    assert found.levels["weight"].sum() == pytest.approx(1.0) and len(levels) == 30
    (test,) = found.eigenstate_tests.sectors
    assert test.sector == found.sharp and test.size == 30 and test.of_start
    assert found.ensemble("sharp window", sector=True).facts["states"] <= 30


def test_leading_correction_in_a_sector():
    size, ring = 8, Ring(8)
    h, z = formula(TILTED, ring), formula("2*Sz[i]/L", ring)
    psi = ProductState(ring, 1.2, 2.0).vector()
    found = compare({"energy": h}, psi, observables={"z": z}, blocks=(1,), ranking=False)
    inside = found.ensemble("canonical", sector=True)
    shift, mirror = moved(size, lambda i: (i + 1) % size), moved(size, lambda i: size - 1 - i)
    v = shared(psi, sum(np.linalg.matrix_power(shift, k) for k in range(size)) / size, mirror)
    dense, q = h.matrix().toarray(), z.matrix().toarray()
    at = lambda energy: np.trace(canonical(dense, v, energy)[2] @ q).real
    energy, step = found.targets["energy"], 0.05
    curvature = (at(energy + step) - 2 * at(energy) + at(energy - step)) / step**2
    rho = canonical(dense, v, energy)[2]
    chi = np.trace(rho @ dense @ dense).real - energy**2
    spread = np.vdot(dense @ psi, dense @ psi).real - energy**2
    assert inside.corrections["z"] == pytest.approx(0.5 * curvature * (spread - chi), rel=1e-2)


@pytest.mark.parametrize("turned", [False, True])
def test_sector_does_not_depend_on_the_axis(turned):
    size, ring = 8, Ring(8)
    x, z = ("z", "x") if turned else ("x", "z")
    h = formula(f"S{x}[i]*S{x}[i+1] + Sy[i]*Sy[i+1] + 1.5*S{z}[i]*S{z}[i+1]", ring)
    m = formula(f"S{z}[i]", ring)
    start = ProductState(ring, np.pi / 2, ["0", "pi"]) if turned else ProductState(ring, ["0", "pi"], 0.0)
    psi = start.vector()
    found = compare({"energy": h, "m": m}, psi, blocks=(1, 2), ranking=False)
    assert found.sharp["m"] == 0.0 and found.sharp["translation^2"] == 0.0
    two = moved(size, lambda i: (i + 2) % size)
    average = sum(np.linalg.matrix_power(two, k) for k in range(4)) / 4
    known = [average, m.matrix().toarray()]
    assert canonical(h.matrix().toarray(), shared(psi, *known), found.targets["energy"])[0] == pytest.approx(
        0.7409, abs=5e-5
    )  # without the reflection about a site
    v = shared(psi, *known, moved(size, lambda i: -i % size))
    beta, entropy, _ = canonical(h.matrix().toarray(), v, found.targets["energy"])
    inside = found.ensemble("canonical", sector=True)
    assert inside.multipliers["energy"] == pytest.approx(beta, abs=1e-9)
    assert inside.entropy == pytest.approx(entropy, abs=1e-9)
    assert any("m is fixed" in note for note in found.notes)


def transverse(size):
    ring = Ring(size)
    f = lambda text: formula(text, ring)
    charges = {
        "energy": f("-4*Sx[i]*Sx[i+1] - 3*Sz[i]"),
        "odd_2": f("Sx[i]*Sy[i+1] - Sy[i]*Sx[i+1]"),
        "even_3": f("5*Sz[i] - 12*Sy[i]*Sy[i+1] + 16*Sx[i]*Sz[i+1]*Sx[i+2]"),
        "odd_3": f("Sx[i]*Sz[i+1]*Sy[i+2] - Sy[i]*Sz[i+1]*Sx[i+2]"),
    }
    return charges, ground_start(f("-4*Sx[i]*Sx[i+1] - 6*Sz[i]")), f


def test_charges_without_spread_that_are_not_diagonal():
    size = 8
    charges, start, f = transverse(size)
    found = compare(charges, start, blocks=(1, 2), ranking=False, observables={"z": f("2*Sz[i]/L")})
    assert found.sharp == {"odd_2": 0.0, "odd_3": 0.0, "translation": 0.0, "parity": 1.0}
    psi, shift = start.vectors[:, 0], moved(size, lambda i: (i + 1) % size)
    parity = np.diag([(-1.0) ** bin(n).count("1") for n in range(2**size)])
    average = sum(np.linalg.matrix_power(shift, k) for k in range(size)) / size
    q = {n: op.matrix().toarray() for n, op in charges.items()}
    v = shared(psi, average, parity, q["odd_2"], q["odd_3"])
    beta, entropy, _ = canonical(q["energy"], v, found.targets["energy"])
    inside = found.ensemble("canonical", sector=True)
    assert inside.multipliers["energy"] == pytest.approx(beta, abs=1e-9)
    assert inside.entropy == pytest.approx(entropy, abs=1e-9)
    np.testing.assert_allclose(found.levels["energy"], np.linalg.eigvalsh(v.conj().T @ q["energy"] @ v), atol=1e-9)
    z = f("2*Sz[i]/L").matrix().toarray()
    e, u = np.linalg.eigh(v.conj().T @ (q["energy"] + 0.01 * q["even_3"]) @ v)  # no two joint levels are equal
    assert found.levels["z"].sum() == pytest.approx(np.trace(v.conj().T @ z @ v).real, abs=1e-9)
    assert inside.variances["energy"][1] > 0 and len(e) == len(found.levels["energy"])


def test_the_transverse_ring_of_ten_sites_has_32_states():
    charges, start, _ = transverse(10)
    found = compare(charges, start, blocks=(1,), ranking=False)
    assert len(found.levels["energy"]) == 32
    assert found.ensemble("canonical", sector=True).multipliers["energy"] == pytest.approx(0.7778, abs=5e-5)
    (test,) = found.eigenstate_tests.sectors  # all labels are told
    assert test.size == 32 and test.sector == {**found.sharp, "reflection": 1.0}


def test_a_charge_that_is_not_conserved_makes_no_sector():
    ring = Ring(8)
    charges = {"energy": formula(TILTED, ring), "mag": formula("Sz[i]", ring)}
    found = compare(charges, ProductState(ring, ["0", "pi"], 0.0).vector(), insist=["mag"], ranking=False)
    assert "mag" not in found.sharp and found.sharp["translation^2"] == 0.0
    assert found.ensemble("canonical", sector=True).verdict == "solved"
    assert found.ensemble("generalised: energy, mag", sector=True).verdict == "solved"
    said = " ".join(found.notes)
    assert "mag has no spread in the start, but is not conserved" in said
    assert "mag is fixed" not in said and "sector of the start'" not in said


def test_values_that_do_not_commute_are_told():
    # two neighbouring spins in a singlet, all pairs: every component of the total spin is zero, one is used
    chain = Chain(6)
    f = lambda text: formula(text, chain)
    pair = np.array([0, 1, -1, 0]) / 2**0.5
    psi = np.kron(np.kron(pair, pair), pair)
    h = f("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Sz[i]*Sz[i+1] + 0.3*(Sx[i]*Sx[i+2] + Sy[i]*Sy[i+2] + Sz[i]*Sz[i+2])")
    charges = Charges({"energy": h, "along": f("Sz[i]"), "across": f("Sx[i]")}, "energy")
    sector = find_sector(charges, Start.from_vector(psi))
    assert sector.charges == {"along": 0.0}
    (note,) = sector.notes
    assert note.startswith("across has no spread in the start, but does not commute with along")
    alone = find_sector(Charges({"energy": h, "across": f("Sx[i]")}, "energy"), Start.from_vector(psi))
    assert alone.charges == {"across": 0.0} and not alone.notes


def test_a_start_with_spread_in_everything_has_no_sector():
    chain = Chain(5)
    h = formula("Sx[i]*Sx[i+1] + 0.3*i*Sz[i] + 0.2*Sx[i]", chain)
    psi = np.random.default_rng(1).normal(size=32)
    assert find_sector(Charges({"energy": h}, "energy"), Start.from_vector(psi / np.linalg.norm(psi))) is None


def test_fewer_levels_than_are_tested_are_counted_after_all_symmetries():
    ring = Ring(10)
    density = {"h": "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 0.6*Sz[i]*Sz[i+1]"}
    texts = {"energy": "h[i]", "magnetisation": "Sz[i]", "current": "1j*commutator(h[i], h[i+1])"}
    charges = {name: formula(text, ring, {}, density) for name, text in texts.items()}
    found = compare(charges, ProductState(ring, [0.3, 1.9], 0.0).vector(), blocks=(1,), ranking=False)
    note = next(n for n in found.notes if n.startswith("Eigenstate tests"))
    assert int(note.split("(at most ")[1].split(")")[0]) < 30
