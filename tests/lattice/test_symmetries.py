"""Symmetries: maps against operators written by hand, sectors against counting formulas and dense spectra."""

from __future__ import annotations

from itertools import product
from math import comb, gcd

import numpy as np
import pytest
import scipy.sparse as sp

from maxent.lattice import Bosons, Chain, Fermions, Lattice, ProductState, Ring, Spin, formula
from maxent.lattice.symmetries import (
    IndexMap,
    SiteMap,
    adapted_basis,
    blocked,
    conjugated,
    find_symmetries,
    is_invariant,
    reflection,
    sector,
    sharp_sector,
    sharp_value,
    site_permutation,
    species_exchange,
    spin_flip,
    symmetry_basis,
    translation,
)

XXZ = "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 1.5*Sz[i]*Sz[i+1]"
CURRENT = f"1j*commutator({XXZ}, {XXZ.replace('[i+1]', '[i+2]').replace('[i]', '[i+1]')})"
LADDER = Ring(3, cell=("a", "b"), bonds={"rungs": [("a", "b")], "legs": [("a", "a", 1), ("b", "b", 1)]})
ELECTRONS = Ring(3, Fermions("up", "down"))


def modes(size):
    """Annihilators of fermion modes by Kronecker products, signs of all earlier modes first."""
    lower, sign = np.array([[0.0, 1.0], [0.0, 0.0]]), np.diag([1.0, -1.0])
    out = []
    for k in range(size):
        matrix = np.eye(1)
        for j in range(size):
            matrix = np.kron(matrix, sign if j < k else lower if j == k else np.eye(2))
        out.append(matrix)
    return out


# --------------------------------------------------------------------- maps


def test_moved_spins_are_the_operators_of_their_new_sites():
    ring = Ring(4)
    shift, mirror, flip = (
        m.index_map.matrix().toarray() for m in (translation(ring), reflection(ring), spin_flip(ring))
    )
    for a, i in product(("Sx", "Sy", "Sz"), range(4)):
        there = lambda k, a=a: formula(f"{a}[{k % 4}]", ring).matrix().toarray()
        np.testing.assert_array_equal(shift @ there(i) @ shift.T, there(i + 1))
        np.testing.assert_array_equal(mirror @ there(i) @ mirror.T, there(3 - i))
        np.testing.assert_array_equal(flip @ there(i) @ flip.T, (1 if a == "Sx" else -1) * there(i))


@pytest.mark.parametrize("permutation", [(1, 2, 3, 0), (3, 2, 1, 0), (2, 0, 3, 1), (1, 0, 2, 3)])
def test_moved_fermions_take_their_signs_along(permutation):
    c = modes(4)
    u = site_permutation(Chain(4, Fermions()), permutation).index_map.matrix().toarray()
    for k, target in enumerate(permutation):
        np.testing.assert_array_equal(u @ c[k] @ u.T, c[target])
    assert u[0, 0] == 1  # the vacuum stays


def test_two_species_move_together_and_can_be_exchanged():
    c = modes(6)
    u = translation(ELECTRONS).index_map.matrix().toarray()
    x = species_exchange(ELECTRONS).index_map.matrix().toarray()
    for k in range(6):
        np.testing.assert_array_equal(u @ c[k] @ u.T, c[(k + 2) % 6])
        np.testing.assert_array_equal(x @ c[k] @ x.T, c[k ^ 1])


def test_the_flip_of_a_larger_spin_turns_it_by_pi_about_x():
    one = Chain(1, Spin("3/2"))
    u = spin_flip(one).index_map.matrix().toarray()
    for a, sign in (("Sx", 1), ("Sy", -1), ("Sz", -1)):
        matrix = formula(f"{a}[0]", one).matrix().toarray()
        np.testing.assert_allclose(u @ matrix @ u.T, sign * matrix, atol=1e-15)


def test_permutations_are_represented_faithfully():
    chain = Chain(4, Fermions())
    p, q = (2, 0, 3, 1), (1, 0, 3, 2)
    both = site_permutation(chain, [q[s] for s in p]).index_map.matrix()
    one, two = site_permutation(chain, p).index_map.matrix(), site_permutation(chain, q).index_map.matrix()
    assert abs(two @ one - both).max() == 0


# Hermitian operators with some symmetries and without others, on sites of every kind
CASES = [
    (Ring(6), XXZ),
    (Ring(6), CURRENT),
    (Ring(6), "Sz[i]"),
    (Ring(6), "(-1)**i*Sz[i]"),
    (Ring(5), "Sx[i]*Sy[i+1] + h.c."),
    (Ring(6), "Sx[i]*Sy[i+1]*Sz[i+2]"),
    (Chain(5), "Z[i]*Z[i+1] + 0.5*X[i] + 0.1*Y[i]"),
    (Chain(4), "cos(i)*Sz[i]"),
    (Ring(4, Spin(1)), "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Sz[i]*Sz[i+1] + 0.3*Sz[i]**2"),
    (Ring(3, Spin(1)), "Sx[i]*Sy[i] + h.c."),
    (Ring(4, Fermions()), "-dagger(c[i])*c[i+1] + h.c."),
    (Ring(5, Fermions()), "1j*dagger(c[i])*c[i+1] + n[i]*n[i+1] + h.c."),
    (Chain(4, Fermions()), "c[i]*c[i+1] + h.c."),
    (ELECTRONS, "n[i, up]*n[i, down] + (dagger(c[i, up])*c[i+1, up] + dagger(c[i, down])*c[i+1, down] + h.c.)"),
    (ELECTRONS, "n[i, up] + (dagger(c[i, up])*c[i+1, down] + h.c.)"),
    (Ring(3, Bosons(cutoff=2)), "dagger(b[i])*b[i+1] + n[i]**2 + h.c."),
    (LADDER, "Sz[i, a]*Sz[i, b] + Sx[i, a]*Sx[i+1, a] + Sx[i, b]*Sx[i+1, b]"),
    (LADDER, "Sz[i, a] - Sz[i, b]"),
    (LADDER, "Sx[i, a]*Sx[i+1, b]"),
    (Lattice.grid(3, 2), "Sx[a]*Sx[b] for <a, b> in along"),
]


def maps_on(sites):
    found = [reflection(sites), conjugated(reflection(sites))]
    found.append(conjugated(site_permutation(sites, range(sites.size)), name="conjugation"))
    if len(sites.cell) > 1:
        found.append(reflection(sites, within_cells=False))
    if sites.is_ring:
        found += [translation(sites), translation(sites, 2), reflection(sites, 0)]
    if "Sz" in sites.symbols:
        found += [spin_flip(sites), conjugated(spin_flip(sites))]
    if sites is ELECTRONS:
        found.append(species_exchange(sites))
    return found


@pytest.mark.parametrize(("sites", "text"), CASES, ids=[t[:40] for _, t in CASES])
def test_words_and_matrices_agree_on_invariance(sites, text):
    op = formula(text, sites)
    dense = op.matrix().toarray()
    for m in maps_on(sites):
        u = m.index_map.matrix().toarray()
        inner = dense.conj() if m.conjugating else dense
        truth = bool(np.abs(u @ inner @ u.conj().T - dense).max() <= 1e-12)
        assert is_invariant(op, m) is truth, m.name
        assert is_invariant(op.matrix(), m) is truth, m.name
        assert is_invariant(dense, m.index_map) is truth, m.name


def test_values_of_list_parameters_decide():
    ring = Ring(4)
    op = formula("h[i]*Sz[i]", ring, {"h": [0.5, 0.5, 0.5, 0.5]})
    assert is_invariant(op, translation(ring))
    other = op.with_parameters(h=[0.5, 0.7, 0.5, 0.7])
    assert not is_invariant(other, translation(ring))
    assert is_invariant(other, translation(ring, 2))


@pytest.mark.parametrize(
    ("sites", "texts", "names"),
    [
        (Ring(6), [XXZ, CURRENT, "Sz[i]"], ["translation", "reflection_conjugated"]),
        (Ring(6), [XXZ], ["translation", "spin_flip", "reflection", "conjugation", "reflection_conjugated"]),
        (Ring(6), ["(-1)**i*Sz[i]"], ["translation_by_2", "reflection", "conjugation", "reflection_conjugated"]),
        (Chain(5), ["Z[i]*Z[i+1] + X[i] + i*Z[i]"], ["conjugation"]),
        (Chain(5), ["Sy[i]"], ["reflection"]),
        (Ring(4), ["i*Sz[i] + i**2*Sy[i]"], []),
        (
            ELECTRONS,
            ["n[i, up]*n[i, down] + (dagger(c[i, up])*c[i+1, up] + dagger(c[i, down])*c[i+1, down] + h.c.)"],
            ["translation", "species_exchange", "reflection", "conjugation", "reflection_conjugated"],
        ),
        (
            Ring(3, cell=("a", "b")),
            ["Sx[i, a]*Sx[i+1, a] + 2*Sx[i, b]*Sx[i+1, b] + Sz[i, a]*Sz[i, b]"],
            ["translation", "spin_flip", "reflection", "conjugation", "reflection_conjugated"],
        ),
    ],
)
def test_find_symmetries(sites, texts, names):
    operators = {t: formula(t, sites) for t in texts}
    assert [m.name for m in find_symmetries(operators, sites)] == names
    assert [m.name for m in find_symmetries([op.matrix() for op in operators.values()], sites)] == names


# --------------------------------------------------------------------- bases


@pytest.mark.parametrize("size", [1, 2, 6, 9, 12])
def test_momentum_sectors_have_the_sizes_that_burnside_counts(size):
    labels = symmetry_basis([translation(Ring(size))]).labels["translation"]
    necklaces = sum(2 ** gcd(n, size) for n in range(size)) // size
    assert np.count_nonzero(labels == 0) == necklaces
    counted = [
        round(sum(np.cos(2 * np.pi * k * n / size) * 2 ** gcd(n, size) for n in range(size)) / size)
        for k in range(size)
    ]
    assert np.bincount(labels, minlength=size).tolist() == counted


@pytest.mark.parametrize(
    "maps",
    [
        [translation(Ring(6))],
        [translation(Ring(6)), spin_flip(Ring(6))],
        [spin_flip(Chain(4)), reflection(Chain(4))],
        [translation(Ring(4, Fermions()))],
        [translation(Ring(5, Fermions()))],
        [translation(ELECTRONS), species_exchange(ELECTRONS)],
        [translation(Ring(3, Spin(1)))],
        [translation(Ring(6)), conjugated(reflection(Ring(6)))],
        [translation(Ring(4, Fermions())), conjugated(reflection(Ring(4, Fermions())))],
        [IndexMap("turn", np.array([1, 0, 2]), np.array([1.0, -1.0, 1j]))],
        [IndexMap("turn", np.array([1, 2, 0, 3]), np.array([1.0, 1.0, -1.0, -1.0]))],
    ],
)
def test_columns_are_orthonormal_eigenstates_with_the_labels_they_carry(maps):
    basis = symmetry_basis(maps)
    w = basis.matrix.toarray()
    np.testing.assert_allclose(w.conj().T @ w, np.eye(len(w)), atol=1e-14)
    for m in basis.maps:
        order, constant = m.powers()
        k = basis.labels[m.name]
        k = (1 - k) // 2 if order == 2 and not m.momentum else k
        eigenvalues = np.exp(1j * (np.angle(constant) - 2 * np.pi * k) / order)
        np.testing.assert_allclose(m.matrix() @ w, w * eigenvalues, atol=1e-13)
    for m in maps:
        if m.conjugating:
            np.testing.assert_allclose(m.index_map.apply(w), w, atol=1e-13)


def test_sectors_of_momentum_and_reflection_have_the_published_sizes():
    # k = 0 and R = + of 2-colour bracelets: 78 for 10 beads, 224 for 12 (OEIS A000029)
    for size, count in ((10, 78), (12, 224)):
        ring = Ring(size)
        part = symmetry_basis([translation(ring), reflection(ring)], values={"translation": 0, "reflection": 1})
        assert part.size == count
        assert part.matrix.dtype == float


def test_all_sectors_of_a_dihedral_group_together_are_the_space():
    ring = Ring(6)
    op = formula(f"{XXZ} + 0.3*Sx[i] + 0.2*Sz[i]", ring)
    levels = []
    for k in (0, 3):
        for r in (1, -1):
            part = sector([translation(ring), reflection(ring)], {"translation": k, "reflection": r})
            levels.append(np.linalg.eigvalsh(blocked({"h": op}, part)["h"].toarray()))
    for k in (1, 2, 4, 5):
        part = sector([translation(ring)], {"translation": k})
        levels.append(np.linalg.eigvalsh(blocked({"h": op}, part)["h"].toarray()))
    np.testing.assert_allclose(np.sort(np.concatenate(levels)), np.linalg.eigvalsh(op.matrix().toarray()), atol=1e-12)


def test_sector_sizes_of_momentum_and_magnetisation():
    ring, magnetisation = Ring(8), formula("Sz[i]", Ring(8))
    sizes = {
        (k, m): sector([translation(ring)], {"translation": k}, {"M": (magnetisation, m)}).size
        for k in range(8)
        for m in range(-3, 4)
    }
    for m in range(-3, 4):
        assert sum(sizes[k, m] for k in range(8)) == comb(8, 4 + m)
    assert sizes[0, 0] == 10  # necklaces of 4 white and 4 black beads
    whole = symmetry_basis([translation(ring)])
    for (k, m), size in sizes.items():
        assert len(whole.columns({"translation": k}, {"M": (magnetisation, m)})) == size


def test_a_charge_alone_selects_product_states():
    ring = Ring(4, Fermions())
    part = sector([], {}, {"number": (formula("n[i]", ring), 1)})
    assert part.size == 4
    np.testing.assert_array_equal(np.flatnonzero(part.matrix.toarray().any(axis=1)), [1, 2, 4, 8])


def test_momenta_lie_around_zero():
    basis = symmetry_basis([translation(Ring(4))])
    np.testing.assert_allclose(np.unique(basis.momenta("translation")), np.array([-1, 0, 1, 2]) * np.pi / 2)


@pytest.mark.parametrize(
    ("sites", "texts"),
    [
        (Ring(8), [XXZ, CURRENT, "Sz[i]"]),
        (Ring(6), ["Z[i]*Z[i+1] + 0.9*X[i] + 0.4*Z[i]"]),
        (Chain(6), ["Z[i]*Z[i+1] + 0.9*X[i]"]),
        (Ring(6, Fermions()), ["-dagger(c[i])*c[i+1] + n[i]*n[i+1] + h.c.", "n[i]"]),
        (Ring(4, Spin(1)), ["Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 0.5*Sz[i]*Sz[i+1]", "Sz[i]"]),
    ],
)
def test_adapted_bases_make_real_blocks_with_the_same_spectra(sites, texts):
    operators = {str(k): formula(t, sites) for k, t in enumerate(texts)}
    basis = adapted_basis(operators, sites)
    assert basis.is_real
    inside = blocked(operators, basis)
    for name, op in operators.items():
        assert inside[name].dtype == float
        exact = np.linalg.eigvalsh(op.matrix().toarray())
        np.testing.assert_allclose(np.linalg.eigvalsh(inside[name].toarray()), exact, atol=1e-12)
        for label in basis.labels.values():
            row, column = inside[name].tocoo().coords
            np.testing.assert_array_equal(label[row], label[column])


def test_without_symmetries_there_is_no_adapted_basis():
    chain = Chain(4)
    assert adapted_basis([formula("i*Sz[i] + i**2*Sy[i] + Sx[i]*Sx[i+1]", chain)], chain) is None
    ring = Ring(4)
    assert adapted_basis([formula("Sz[i]", ring)], ring, more=[formula("i*Sy[i] + i**2*Sz[i]", ring)]) is None


# --------------------------------------------------------------------- starts


def test_sharp_values_of_starts():
    ring = Ring(8)
    alternating = ProductState(ring, [0.0, np.pi], 0.0).vector()
    up = ProductState(ring, 0.0, 0.0).vector()
    tilted = ProductState(ring, np.pi / 3, 0.0).vector()
    magnetisation = formula("Sz[i]", ring)
    assert sharp_value(translation(ring), alternating) is None
    assert sharp_value(translation(ring, 2), alternating) == 0
    assert sharp_value(magnetisation, alternating) == pytest.approx(0.0, abs=1e-14)
    assert sharp_value(magnetisation.matrix(), up) == 4.0
    assert sharp_value(magnetisation.matrix().diagonal(), up) == 4.0
    assert sharp_value(magnetisation, tilted) is None
    assert sharp_value(translation(ring), tilted) == 0
    assert sharp_value(spin_flip(ring), alternating) is None
    cats = [alternating + s * translation(ring).index_map.apply(alternating) for s in (1, -1)]
    assert [sharp_value(translation(ring), v) for v in cats] == [0, 4]
    assert [sharp_value(spin_flip(ring), v) for v in cats] == [1, -1]
    assert sharp_value(translation(ring), np.stack(cats, axis=1)) is None
    assert sharp_value(magnetisation, np.stack(cats, axis=1)) == pytest.approx(0.0, abs=1e-14)


def test_the_sector_of_a_start_holds_all_of_it():
    ring = Ring(6)
    charges = {"M": formula("Sz[i]", ring), "staggered": formula("(-1)**i*Sz[i]", ring)}
    basis = symmetry_basis([translation(ring, 2), spin_flip(ring)])
    three = ProductState(ring, [0.0, np.pi, np.pi], 0.0).vector()
    two = ProductState(ring, [0.0, np.pi], 0.0).vector()
    cat = two - translation(ring).index_map.apply(two)
    for vector, labels, names in (
        (three, {}, ["M", "staggered"]),
        (two, {"translation_by_2": 0}, ["M", "staggered"]),
        (cat, {"translation_by_2": 0, "spin_flip": -1}, ["M"]),
    ):
        values, sharp = sharp_sector(basis, vector, charges)
        assert (values, list(sharp)) == (labels, names)
    uniform = ProductState(ring, np.pi / 2, 0.0).vector()
    values, sharp = sharp_sector(basis, uniform, charges)
    assert (values, sharp) == ({"translation_by_2": 0, "spin_flip": 1}, {})
    part = basis.only(basis.columns(values))
    assert np.linalg.norm(part.matrix.conj().T @ uniform) == pytest.approx(1.0, abs=1e-14)


def test_an_antiunitary_symmetry_alone_makes_operators_real():
    chain = Chain(4)
    other = formula("Sx[0]*Sy[1] + Sx[3]*Sy[2] + Sz[0] + 2*Sz[3]", chain)
    assert find_symmetries([other], chain) == ()
    op = formula("Sx[0]*Sy[1] - Sx[3]*Sy[2] + Sz[0] + Sz[3]", chain)
    basis = adapted_basis([op], chain)
    inside = blocked({"h": op}, basis)["h"]
    assert op.matrix().dtype == complex
    assert inside.dtype == float
    np.testing.assert_allclose(
        np.linalg.eigvalsh(inside.toarray()), np.linalg.eigvalsh(op.matrix().toarray()), atol=1e-14
    )


def test_sharp_momentum_of_a_fermion_wave():
    ring = Ring(5, Fermions())
    for k in range(5):
        wave = np.zeros(32, complex)
        wave[[16, 8, 4, 2, 1]] = np.exp(2j * np.pi * k * np.arange(5) / 5)
        assert sharp_value(translation(ring), wave) == k
        part = sector([translation(ring)], {"translation": k}, {"number": (formula("n[i]", ring), 1)})
        assert abs(part.matrix.conj().T @ wave) == pytest.approx(np.sqrt(5), abs=1e-14)


# --------------------------------------------------------------------- refusals


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: IndexMap("a", np.array([0, 0])), r"a: images are no permutation of 0\.\.1"),
        (lambda: IndexMap("a", np.array([0.0, 1.0])), "a: images must be a list of integers"),
        (lambda: IndexMap("a", np.array([0, 1]), np.ones(3)), r"a: 2 images but phases of shape \(3,\)"),
        (
            lambda: IndexMap("a", np.array([0, 1]), np.array([1, 0.5])),
            "a: phases must have modulus 1; one is off by 5.0e-01",
        ),
        (
            lambda: IndexMap("a", np.array([0, 1]), np.exp([0, 1j])).order,
            "a is not the identity after 4096 repetitions",
        ),
        (lambda: IndexMap("a", np.array([0, 1])).apply(np.ones(3)), r"a acts on 2 amplitudes, not on shape \(3,\)"),
        (lambda: site_permutation(Ring(3), [0, 1, 1]), r"\[0, 1, 1\] is no permutation of the sites 0\.\.2"),
        (
            lambda: site_permutation(Ring(2, {"a": Spin(), "b": Spin(1)}), [1, 0, 2, 3]),
            r"site 0 \(spin-1/2\) would take the place of site 1 \(spin-1\)",
        ),
        (lambda: SiteMap("a", Ring(3), (0, 1)), r"a: \[0, 1\] is no permutation of 0\.\.2"),
        (lambda: translation(Chain(3)), r"translation needs a ring: Chain\(3\) has ends"),
        (lambda: spin_flip(Ring(3, Fermions())), "spin_flip needs spins, not fermion sites"),
        (lambda: species_exchange(Ring(3)), "species_exchange needs sites with two species, not spin-1/2 sites"),
        (lambda: translation(Ring(3, Bosons())).index_map, "bosons without a cut-off have no basis states"),
        (lambda: is_invariant(formula("Sz[i]", Ring(3)), translation(Ring(4))), "the operator lives on"),
        (
            lambda: is_invariant(np.eye(3), translation(Ring(2))),
            r"translation acts on 4 states, the operator has shape",
        ),
        (lambda: symmetry_basis([]), "symmetry_basis needs at least one map"),
        (
            lambda: symmetry_basis([translation(Ring(4)), reflection(Ring(4))]),
            "translation and reflection do not commute: leave one out, or fix the label of translation",
        ),
        (
            lambda: symmetry_basis([translation(Ring(4)), reflection(Ring(4))], values={"translation": 1}),
            "reflection does not keep the labels of translation that were asked for",
        ),
        (
            lambda: symmetry_basis([translation(Ring(4)), conjugated(spin_flip(Ring(4)))]),
            "spin_flip_conjugated does not keep the labels of translation",
        ),
        (lambda: symmetry_basis([translation(Ring(4))] * 2), "two maps have the name 'translation'"),
        (
            lambda: symmetry_basis([translation(Ring(4)), spin_flip(Ring(3))]),
            "translation acts on 16 states, spin_flip on 8",
        ),
        (
            lambda: symmetry_basis([translation(Ring(3))], values={"momentum": 0}),
            "a label is given for 'momentum', which is none of the unitary maps",
        ),
        (
            lambda: symmetry_basis([conjugated(reflection(Ring(3))), conjugated(spin_flip(Ring(3)))]),
            "one antiunitary map at most, not reflection_conjugated, spin_flip_conjugated",
        ),
        (
            lambda: symmetry_basis([IndexMap("turn", np.array([1, 0]), np.array([1, -1]), conjugating=True)]),
            "the square of turn is not 1: it makes no sector real",
        ),
        (lambda: sector([spin_flip(Ring(3))], {"spin_flip": 0}), "the label of spin_flip must be 1 or -1, not 0"),
        (
            lambda: sector([translation(Ring(3))], {"translation": 0.5}),
            "the label of translation must be an integer, not 0.5",
        ),
        (
            lambda: symmetry_basis([translation(Ring(3))], states=np.array([1, 2])),
            "translation leads out of the given states",
        ),
        (
            lambda: sector([translation(Ring(4))], {}, {"M": (formula("Sz[i]", Ring(4)), 0.5)}),
            "no state has M = 0.5; the nearest value is",
        ),
        (
            lambda: sector([spin_flip(Ring(4))], {}, {"M": (formula("Sz[i]", Ring(4)), 1)}),
            "no sector M = 1: spin_flip changes M",
        ),
        (
            lambda: sector([translation(Ring(4))], {"translation": 1}, {"M": (formula("Sz[i]", Ring(4)), 2)}),
            "no state in the sector translation = 1",
        ),
        (
            lambda: sector([], {}, {"X": (formula("Sx[i]", Ring(2)), 0)}),
            "charge 'X' is not diagonal in the product basis: an entry of 5.0e-01 is not",
        ),
        (lambda: sector([], {}, {"X": (np.array([1j, 0]), 0)}), "charge 'X' must have real values"),
        (
            lambda: symmetry_basis([translation(Ring(3))]).columns({"k": 0}),
            "the basis has no map 'k'; it has translation",
        ),
        (
            lambda: symmetry_basis([spin_flip(Ring(2))]).columns({}, {"M": (formula("Sz[i]", Ring(2)), 1)}),
            "no sector M = 1: 2 states of the basis mix values of M",
        ),
        (
            lambda: symmetry_basis([translation(Ring(3))]).columns(
                {"translation": 1}, {"M": (formula("Sz[i]", Ring(3)), 1.5)}
            ),
            "no state in the sector translation = 1, M = 1.5",
        ),
        (
            lambda: blocked({"h": formula("i*Sz[i]", Ring(3))}, symmetry_basis([translation(Ring(3))])),
            "charge 'h' is not invariant under translation: its entries differ by",
        ),
        (
            lambda: blocked({"h": sp.eye_array(3)}, symmetry_basis([translation(Ring(3))])),
            r"charge 'h' has shape \(3, 3\), the basis 8 rows",
        ),
        (lambda: sharp_value(translation(Ring(2)), np.zeros(4)), "a start vector vanishes"),
        (lambda: sharp_value(np.eye(3), np.ones(4)), "the charge has dimension 3, the start 4 amplitudes"),
        (
            lambda: sharp_value(conjugated(reflection(Ring(2))), np.ones(4)),
            "reflection_conjugated is antiunitary and has no label",
        ),
    ],
)
def test_bad_input(call, message):
    with pytest.raises(ValueError, match=message):
        call()
