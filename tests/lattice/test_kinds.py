"""Spins of any size, fermions and bosons against matrices by hand, their algebra, and known spectra."""

from fractions import Fraction
from itertools import product

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from maxent.errors import FormulaError, ResourceError
from maxent.lattice import Bosons, Chain, Fermions, OperatorSum, Ring, Spin, formula
from tests.lattice.dense import boson, comm, embedded, fermion, spin

SPINS = [Fraction(k, 2) for k in (1, 2, 3, 4, 5)]


def dense(text, sites, parameters=None):
    return formula(text, sites, parameters).matrix().toarray()


def levels(text, sites, parameters=None):
    return np.linalg.eigvalsh(dense(text, sites, parameters))


def anti(a, b):
    return a @ b + b @ a


# --- spins


@pytest.mark.parametrize("s", SPINS)
def test_letters_of_a_spin_are_its_matrices(s):
    one = Chain(1, Spin(s))
    hand = spin(float(s))
    for name, matrix in hand.items():
        np.testing.assert_allclose(dense(f"{name}[0]", one), matrix, atol=1e-14)
    for a, b in product("xyz", repeat=2):
        np.testing.assert_allclose(dense(f"S{a}[0]*S{b}[0]", one), hand[f"S{a}"] @ hand[f"S{b}"], atol=2e-14)
    top = int(2 * s)
    # as many independent words as matrix entries, no more
    powers = ("1", "Sy[0]", "Sy[0]**2", f"Sx[0]**{top}", f"Sz[0]**{top + 1}", f"Sx[0]**{top}*Sy[0]")
    words = {word for a in powers for b in powers for word in formula(f"{a}*{b}", one).words}
    words |= {((0, letter),) for a in words for _, letter in a} | {()}
    assert len(words) <= (top + 1) ** 2
    matrices = [one.slots[0].matrix(k).ravel() for k in range((top + 1) ** 2 - 1)]
    assert np.linalg.matrix_rank(np.array([np.eye(top + 1).ravel(), *matrices]), tol=1e-9) == (top + 1) ** 2


@pytest.mark.parametrize("s", SPINS)
def test_spin_algebra_holds_exactly(s):
    one = Chain(1, Spin(s))
    x, y, z = (formula(f"S{a}[0]", one) for a in "xyz")
    for a, b, c in ((x, y, z), (y, z, x), (z, x, y)):
        assert a.commutator(b) == 1j * c
    assert x * x + y * y + z * z == formula("1", one) * (s * (s + 1))
    up, down = formula("Splus[0]", one), formula("Sminus[0]", one)
    assert up.adjoint() == down
    power = up
    for _ in range(int(2 * s) - 1):
        assert power.terms
        power = power * up
    assert power.terms and (power * up).terms == ()
    # (Sz - s)(Sz - s + 1)...(Sz + s) = 0
    characteristic = formula("1", one)
    for k in range(int(2 * s) + 1):
        characteristic = characteristic * (z - (s - k))
    assert characteristic.terms == ()


def test_spin_half_is_what_it_was():
    ring = Ring(3)
    assert ring == Ring(3, Spin("1/2")) == Ring(3, kind=Spin(0.5))
    assert str(formula("X[i]*Y[i]", ring)) == "2j*Sz[i]"
    assert str(formula("Sz[i]**2", Ring(2, Spin(1)))) == "Sz[i]**2"
    assert str(formula("Sy[i]**2", Ring(2, Spin(1)))) == "4 - Sx[i]**2 - Sz[i]**2"


S1 = "J*(Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Sz[i]*Sz[i+1])"


@pytest.mark.parametrize("s", [Fraction(1), Fraction(3, 2), Fraction(2)])
def test_heisenberg_dimer_by_total_spin(s):
    # S1.S2 = (S(S+1) - 2 s(s+1)) / 2 for S = 0..2s, each 2S+1 times
    expected = sorted((S * (S + 1) - 2 * s * (s + 1)) / 2 for S in range(int(2 * s) + 1) for _ in range(2 * S + 1))
    np.testing.assert_allclose(levels(S1, Chain(2, Spin(s)), {"J": 1}), np.array(expected, float), atol=1e-12)


def test_bilinear_biquadratic_dimer():
    # with x = S1.S2 in {-2, -1, 1} for total spin 0, 1, 2: cos x + sin x^2
    bond = "Sx[0]*Sx[1] + Sy[0]*Sy[1] + Sz[0]*Sz[1]"
    x = np.array([-2.0] + [-1.0] * 3 + [1.0] * 5)
    found = levels(f"J*({bond}) + K*({bond})**2", Chain(2, Spin(1)), {"J": 0.8, "K": 0.6})
    np.testing.assert_allclose(found, np.sort(0.8 * x + 0.6 * x**2), atol=1e-12)


def test_valence_bond_point_of_the_spin_one_chain():
    # I. Affleck, T. Kennedy, E. H. Lieb, H. Tasaki, Phys. Rev. Lett. 59, 799 (1987): x + x^2/3 = 2 P_2 - 2/3 per
    # bond; the open chain has 4 ground states with every bond at -2/3
    bond = "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Sz[i]*Sz[i+1]"
    op = formula(f"({bond}) + ({bond})**2/3", Chain(4, Spin(1)), hermitian=True)
    found = np.linalg.eigvalsh(op.matrix().toarray())
    np.testing.assert_allclose(found[:4], -2, atol=1e-12)
    assert found[4] > -1.9


def test_spin_one_ring_of_four():
    # H = (S^2 - S_even^2 - S_odd^2)/2 with S_even, S_odd in 0..2: lowest for both 2 and S = 0
    assert levels(S1, Ring(4, Spin(1)), {"J": 1})[0] == pytest.approx(-6, abs=1e-12)


def test_a_ring_of_spins_by_hand():
    dims, hand = (4, 4, 4), spin(1.5)
    sites = Ring(3, Spin("3/2"))
    by_hand = sum(
        0.3 * embedded(hand["Splus"] @ hand["Sz"], i, dims) @ embedded(hand["Sminus"], (i + 1) % 3, dims)
        + 1j * embedded(hand["Sy"], i, dims) @ embedded(hand["Sz"] @ hand["Sz"], (i + 2) % 3, dims)
        for i in range(3)
    )
    op = formula("0.3*Splus[i]*Sz[i]*Sminus[i+1] + 1j*Sy[i]*Sz[i+2]**2", sites)
    np.testing.assert_allclose(op.matrix().toarray(), by_hand, atol=1e-13)
    np.testing.assert_allclose((op + op.adjoint()).matrix().toarray(), by_hand + by_hand.conj().T, atol=1e-13)
    assert not op.is_hermitian and (op + op.adjoint()).is_hermitian and (1j * (op - op.adjoint())).is_hermitian
    assert op.norm_bound >= np.linalg.norm(by_hand, 2)


def test_spin_one_anisotropy_and_hermiticity():
    ring = Ring(3, Spin(1))
    assert formula("Sx[i]*Sz[i] + Sz[i]*Sx[i]", ring).is_hermitian
    assert not formula("commutator(Sx[i]**2, Sz[i+1]*Sy[i])", ring).is_hermitian
    assert formula("1j*commutator(Sx[i]**2, Sz[i])", ring).is_hermitian
    with pytest.raises(FormulaError, match=r"^formula column 1: not Hermitian: the word .* with the coefficient"):
        formula("Sx[i]*Sz[i]", ring, hermitian=True)


# --- fermions


def test_anticommutation_relations():
    sites = Chain(3, Fermions("up", "down"))
    names = [f"c[{i}, {s}]" for i in range(3) for s in ("up", "down")]
    ops = [formula(name, sites) for name in names]
    for k, (a, op) in enumerate(zip(names, ops, strict=True)):
        # mode 0 is the most significant factor; modes of a site in the order of the species
        np.testing.assert_array_equal(dense(a, sites), fermion(k, 6))
        for m, other in enumerate(ops):
            assert (op * other + other * op).terms == ()
            assert op * other.adjoint() + other.adjoint() * op == formula("1", sites) * int(k == m)
            np.testing.assert_array_equal(anti(fermion(k, 6), fermion(m, 6).T), np.eye(64) * (k == m))
            # products of words by sign rules are products of matrices
            np.testing.assert_array_equal((op.adjoint() * other).matrix().toarray(), fermion(k, 6).T @ fermion(m, 6))


def test_occupied_is_one_and_creators_stand_in_order():
    sites = Chain(3, Fermions())
    empty = np.eye(8)[0]
    made = (
        formula("dagger(c[0])", sites).matrix()
        @ formula("dagger(c[1])", sites).matrix()
        @ formula("dagger(c[2])", sites).matrix()
        @ empty
    )
    np.testing.assert_array_equal(made, np.eye(8)[0b111])
    assert (formula("n[2]", sites).matrix() @ np.eye(8)[0b001])[0b001] == 1


FERMIONS = {
    "J*(dagger(c[i])*c[i+1] + h.c.) + V*n[i]*n[i+1]": lambda c, d, n: (
        0.7 * (d(0) @ c(1) + d(1) @ c(2) + d(2) @ c(3) + d(3) @ c(0)),
        0.3 * sum(n(i) @ n(i + 1) for i in range(4)) / 2,
    ),
    "(z*c[i]*c[i+1] + h.c.)": lambda c, d, n: (sum((0.2 - 0.5j) * c(i) @ c(i + 1) for i in range(4)),),
    "(1j*dagger(c[i])*n[i+1]*c[i+2] + h.c.)": lambda c, d, n: (sum(1j * d(i) @ n(i + 1) @ c(i + 2) for i in range(4)),),
    "c[0]*c[2]*dagger(c[1])*dagger(c[3]) + h.c.": lambda c, d, n: (c(0) @ c(2) @ d(1) @ d(3),),
    "(c[0]*n[1]*c[3]*dagger(c[2]) + h.c.)": lambda c, d, n: (c(0) @ n(1) @ c(3) @ d(2),),
    "c[2] + h.c.": lambda c, d, n: (c(2),),
}


@pytest.mark.parametrize("text", FERMIONS)
def test_fermions_on_a_ring_by_hand(text):
    sites = Ring(4, Fermions())
    parameters = {"J": 0.7, "V": 0.3, "z": 0.2 - 0.5j}
    half = sum(FERMIONS[text](lambda i: fermion(i % 4, 4), lambda i: fermion(i % 4, 4).T,
                              lambda i: fermion(i % 4, 4).T @ fermion(i % 4, 4)))  # fmt: skip
    op = formula(text, sites, parameters, hermitian=True)
    np.testing.assert_allclose(op.matrix().toarray(), half + half.conj().T, atol=1e-14)
    assert formula(str(op), sites, parameters) == op


def test_commutators_of_odd_words_are_not_forgotten():
    sites = Chain(4, Fermions())
    a, b = formula("c[0] + h.c.", sites), formula("c[2]*n[1] + c[3]", sites)
    found = a.commutator(b)
    np.testing.assert_array_equal(found.matrix().toarray(), comm(a.matrix().toarray(), b.matrix().toarray()))
    assert found == a * b - b * a and found.terms


def test_two_site_hubbard_model():
    # E. H. Lieb, F. Y. Wu, Physica A 321, 1 (2003) and any textbook: E0 = (U - sqrt(U^2 + 16 t^2)) / 2 at half filling
    bond = "dagger(c[i, up])*c[i+1, up] + dagger(c[i, down])*c[i+1, down]"
    sites = Chain(2, Fermions("up", "down"))
    t, U = 1.0, 3.0
    op = formula(f"-t*({bond} + h.c.) + U*n[i, up]*n[i, down]", sites, {"t": t, "U": U}, hermitian=True)
    number = formula("n[i, up] + n[i, down]", sites)
    assert op.commutator(number).terms == ()
    two = np.flatnonzero(number.matrix().diagonal() == 2)
    found = np.linalg.eigvalsh(op.matrix().toarray()[np.ix_(two, two)])
    s = np.sqrt(U**2 + 16 * t**2)
    np.testing.assert_allclose(found, sorted([(U - s) / 2, 0, 0, 0, U, (U + s) / 2]), atol=1e-12)


@pytest.mark.parametrize("size", [5, 6])
def test_free_fermion_ring(size):
    # all many-body levels are sums of -2 cos(2 pi k / L): the sign of the bond around the ring is right in every sector
    k = -2 * np.cos(2 * np.pi * np.arange(size) / size)
    expected = sorted(sum(k[i] for i in range(size) if n >> i & 1) for n in range(2**size))
    found = levels("-(dagger(c[i])*c[i+1] + h.c.)", Ring(size, Fermions()))
    np.testing.assert_allclose(found, expected, atol=1e-12)


def test_pairing_chain_has_two_end_modes():
    # A. Yu. Kitaev, Phys.-Usp. 44, 131 (2001): for t = D, mu = 0 every level of the open chain is twofold,
    # the gap is 2 t
    found = levels("-t*(dagger(c[i])*c[i+1] + h.c.) + D*(c[i]*c[i+1] + h.c.)", Chain(5, Fermions()), {"t": 1, "D": 1})
    np.testing.assert_allclose(found[:4], [-4, -4, -2, -2], atol=1e-12)


# --- bosons


def test_bosons_follow_the_exact_algebra():
    sites = Chain(2, Bosons(cutoff=4))
    b = formula("b[0]", sites)
    assert b.commutator(b.adjoint()) == formula("1", sites)
    assert b.commutator(formula("b[1] + dagger(b[1])", sites)).terms == ()
    assert formula("n[0]**2", sites) == formula("dagger(b[0])**2*b[0]**2 + n[0]", sites)
    assert str(formula("b[i]*dagger(b[i+1]) + h.c.", sites)) == "dagger(b[1])*b[0] + dagger(b[0])*b[1]"


def test_boson_matrices_are_compressions_of_the_exact_operator():
    # the same word with a much larger cut-off, cut back to the states that are kept
    for text in ("b[0]*dagger(b[0])", "(b[0] + dagger(b[0]))**4", "b[0]**2*dagger(b[0]) + n[0]**3", "1j*b[0]**3"):
        small, large = dense(text, Chain(1, Bosons(cutoff=3))), dense(text, Chain(1, Bosons(cutoff=40)))
        np.testing.assert_allclose(small, large[:4, :4], atol=1e-12)
    b = boson(40)["b"]
    np.testing.assert_allclose(dense("(b[0] + dagger(b[0]))**4", Chain(1, Bosons(cutoff=20))),
                               np.linalg.matrix_power(b + b.T, 4)[:21, :21], atol=1e-9)  # fmt: skip


def test_bosons_on_a_chain_by_hand():
    dims, hand = (4, 4, 4), boson(3)
    b = [embedded(hand["b"], i, dims) for i in range(3)]
    n = [embedded(hand["n"], i, dims) for i in range(3)]
    hop = sum(b[i].T @ b[i + 1] for i in range(2))
    expected = -0.5 * (hop + hop.T) + sum(2.0 / 2 * n[i] @ (n[i] - np.eye(64)) for i in range(3))
    op = formula("-J*(dagger(b[i])*b[i+1] + h.c.) + U/2*n[i]*(n[i] - 1)", Chain(3, Bosons(cutoff=3)),
                 {"J": 0.5, "U": 2.0}, hermitian=True)  # fmt: skip
    np.testing.assert_allclose(op.matrix().toarray(), expected, atol=1e-14)
    assert op.commutator(formula("n[i]", op.sites)).terms == ()


def test_displaced_oscillator():
    # w b+b + g (b + b+) has the levels w n - g^2 / w
    found = levels("w*n[0] + g*(b[0] + h.c.)", Chain(1, Bosons(cutoff=40)), {"w": 1.0, "g": 0.5})
    np.testing.assert_allclose(found[:5], np.arange(5) - 0.25, atol=1e-10)


def test_species_of_bosons():
    sites = Chain(2, Bosons("x", "y", cutoff=2))
    assert sites.dims == (9, 9)
    dims = (3, 3, 3, 3)
    hand = embedded(boson(2)["b"].T, 1, dims) @ embedded(boson(2)["b"], 2, dims)
    np.testing.assert_array_equal(dense("dagger(b[0, y])*b[1, x]", sites), hand)


# --- every kind


KINDS = {
    "spin 1": (Spin(1), ["Sx[{}]", "Sy[{}]", "Sz[{}]", "Splus[{}]", "Sminus[{}]**2"]),
    "spin 3/2": (Spin("3/2"), ["Sx[{}]", "Sz[{}]**2", "Splus[{}]"]),
    "fermions": (Fermions(), ["c[{}]", "dagger(c[{}])", "n[{}]"]),
    "species": (Fermions("a", "b"), ["c[{}, a]", "dagger(c[{}, b])", "n[{}, a]", "c[{}, b]"]),
    "bosons": (Bosons(cutoff=2), ["b[{}]", "dagger(b[{}])", "n[{}]"]),
}
numbers = st.sampled_from(
    [
        "2",
        "0.1",
        "1/3",
        "0.7j",
        "J",
        "z",
        "w[k]",
        "w[k+1]",
        "(-1)**k",
        "exp(1j*J*k)",
        "sqrt(2)",
        "cos(k)",
        "exp(0.3j*k)",
    ]
)


@st.composite
def sums(draw, kinds=tuple(KINDS)):
    kind, letters = KINDS[draw(st.sampled_from(kinds))]
    sites = draw(st.sampled_from([Ring(3, kind), Chain(3, kind)]))
    summands = []
    for _ in range(draw(st.integers(1, 3))):
        places = st.sampled_from(["k", "k+1", "k-1", "0", "2"])
        factors = draw(st.lists(st.builds(str.format, st.sampled_from(letters), places), min_size=0, max_size=3))
        factors = [draw(st.sampled_from(letters)).format("k"), *factors, draw(numbers)]
        form = draw(st.sampled_from(["{}", "-({})", "dagger({})", "({} + h.c.)", "1j*commutator({}, %s)"]))
        summands.append(form.format("*".join(factors)).replace("%s", letters[0].format("k")))
    return sites, " + ".join(summands)


PARAMETERS = {"J": 0.75, "z": 0.5 + 0.25j, "w": [0.5, -1.0, 0.25]}


@settings(max_examples=70, deadline=None)
@given(sums())
def test_printing_and_reading_again_gives_the_same_sum(made):
    sites, text = made
    op = formula(text, sites, PARAMETERS)
    again = formula(str(op), sites, PARAMETERS)
    assert again == op
    assert str(again) == str(op)
    matrix = op.matrix().toarray()
    scale = 1e-13 * (1 + op.norm_bound)
    np.testing.assert_allclose(op.adjoint().matrix().toarray(), matrix.conj().T, atol=scale)
    vector = np.arange(len(matrix)) - 3.0
    np.testing.assert_allclose(op.action(vector), matrix @ vector, atol=scale * len(matrix) ** 2)
    if "b" in sites.symbols:
        assert not op.is_hermitian or np.abs(matrix - matrix.conj().T).max() < scale
    else:
        assert op.is_hermitian == (np.abs(matrix - matrix.conj().T).max() < scale)
    assert (op + op.adjoint()).is_hermitian and (1j * (op - op.adjoint())).is_hermitian


@settings(max_examples=35, deadline=None)
@given(sums(("spin 1", "spin 3/2", "fermions", "species")), st.data())
def test_products_are_products_of_matrices(made, data):
    sites, text = made
    letters = next(letters for kind, letters in KINDS.values() if kind == sites.kinds[0])
    a = formula(text, sites, PARAMETERS)
    b = formula(data.draw(st.sampled_from(letters)).format("k") + "+" + letters[-1].format(0), sites)
    left, right = a.matrix().toarray(), b.matrix().toarray()
    scale = 1e-13 * (1 + a.norm_bound) * (1 + b.norm_bound)
    np.testing.assert_allclose((a * b).matrix().toarray(), left @ right, atol=scale)
    np.testing.assert_allclose(a.commutator(b).matrix().toarray(), comm(left, right), atol=2 * scale)


def test_arrays_are_clean_and_come_in_chunks(monkeypatch):
    from maxent.lattice import tables

    parameters = {"a": [0.1, 0.2, 0.3, 0.7], "b": [0.3, 1 / 3, 0.9, 2.1]}
    text = "a[i]*Sx[i]*Sx[i+1] + (b[i]*Sx[i]*Sx[i+1] + 0.7*Sx[i]*Sx[i+1])"
    text += " + 0.7*Sy[i]*Sy[i+1] + (a[i] + b[i])*Sy[i]*Sy[i+1]"
    op = formula(text, Ring(4, Spin(1)), parameters)
    whole = op.matrix()
    assert whole.dtype == np.float64 and whole.has_canonical_format and np.all(whole.data != 0)
    m = formula("Sz[i]", op.sites).matrix().diagonal()
    rows, columns = whole.nonzero()
    np.testing.assert_array_equal(m[rows], m[columns])
    vector = np.random.default_rng(3).normal(size=(81, 2))
    monkeypatch.setattr(tables, "_CHUNK", 7)
    monkeypatch.setattr(tables, "_ACTION_CHUNK", 7)
    monkeypatch.setattr(tables, "_LARGEST_TABLE", 8)  # products slot by slot instead of tables
    again = formula(text, op.sites, parameters)
    assert abs(again.matrix() - whole).max() < 1e-14
    assert again.matrix().nnz == whole.nnz
    np.testing.assert_allclose(again.action(vector), whole @ vector, atol=1e-13)


def test_terms_name_site_operator_and_species():
    op = formula("2*dagger(c[1, down])*c[0, up]", Chain(2, Fermions("up", "down")))
    (term,) = op.terms
    assert (term.positions, term.operators, term.species) == ((0, 1), ("c", "dagger(c)"), ("up", "down"))
    assert str(term.coefficient) == "-2"
    assert isinstance(op, OperatorSum) and op.range == 2


# --- refusals


@pytest.mark.parametrize(
    ("make", "error", "message"),
    [
        (lambda: Spin(0), ValueError, "^Spin: s must be a multiple of 1/2 from 1/2 to 9/2, not 0$"),
        (lambda: Spin(0.3), ValueError, "^Spin: s must be a multiple of 1/2 from 1/2 to 9/2, not 0.3$"),
        (lambda: Spin(5), ValueError, "from 1/2 to 9/2, not 5$"),
        (lambda: Spin("one"), ValueError, "^Spin: s must be a number such as 1/2 or 1, not 'one'$"),
        (lambda: Spin("1/0"), ValueError, "^Spin: s must be a number"),
        (lambda: Spin(None), TypeError, "^Spin: s must be a number such as 1/2 or 1, not None$"),
        (lambda: Fermions("up", "up"), ValueError, "^Fermions: two species names are equal: up, up$"),
        (lambda: Fermions("a b"), ValueError, "^Fermions: the name of a species must be a plain word, not 'a b'$"),
        (lambda: Fermions(2), ValueError, "^Fermions: the name of a species must be a plain word, not 2$"),
        (lambda: Bosons(cutoff=0), ValueError, "^Bosons: the cut-off must be from 1 to 255, not 0$"),
        (lambda: Bosons(cutoff=2.0), TypeError, "^Bosons: the cut-off must be a whole number, not 2.0$"),
        (lambda: Ring(3, Fermions), TypeError, r"^Ring: expected Spin\(...\), Fermions\(...\) or Bosons\(...\), not"),
    ],
)  # fmt: skip
def test_unusable_kinds(make, error, message):
    with pytest.raises(error, match=message):
        make()


@pytest.mark.parametrize(
    ("kind", "text", "column", "message"),
    [
        (Spin(1), "X[i]", 1, "unknown symbol 'X'; .* Pauli matrices are for spin-1/2 sites"),
        (Spin(1), "c[i]", 1, "fermion operators need sites with fermions"),
        (Fermions(), "Sz[i]", 1, "spin operators need sites with a spin"),
        (Fermions(), "b[i]", 1, "boson operators need sites with bosons"),
        (Spin(1), "Sz[i]*n[i]", 7, "number operators need sites with fermions or bosons"),
        (Fermions(), "c[i, up]", 6, "fermion operators have one subscript"),
        (Fermions("up", "down"), "c[i]", 3, r"'c' needs a species: write 'c\[..., up\]' or 'c\[..., down\]'"),
        (Fermions("up", "down"), "c[i, u]", 6, "unknown species; expected up or down"),
        (Fermions("up", "down"), "c[i, 2]", 6, "unknown species; expected up or down"),
        (Fermions("up", "down"), "c[i, up, down]", 10, "'c' has too many subscripts"),
        (Fermions(), "dagger(c)[i]", 10, "expected an operator between"),
        (Bosons(cutoff=2), "(b[i]**16)**5", 1, "a power of b above 63 is out of range"),
        (Fermions(), "c*2", 2, "missing subscript: operator 'c'"),
    ],
)
def test_operators_that_do_not_exist(kind, text, column, message):
    with pytest.raises(FormulaError, match=message) as caught:
        formula(text, Ring(3, kind))
    assert caught.value.column == column and "\n" not in str(caught.value)


def test_bosons_without_a_cut_off_have_no_arrays():
    op = formula("dagger(b[i])*b[i+1] + h.c.", Ring(4, Bosons()))
    assert op.is_hermitian and op.range == 2
    for use in (op.matrix, lambda: op.action(np.ones(4)), lambda: op.sites.dims):
        with pytest.raises(ValueError, match=r"^bosons without a cut-off .* give Bosons\(cutoff=...\)$"):
            use()


def test_too_large_a_matrix_is_refused():
    with pytest.raises(ResourceError, match=r"^3\^20 states need .* for this operator; available 1 GiB$"):
        formula("Sz[i]*Sz[i+1]", Ring(20, Spin(1))).matrix(limit=2**30)
    with pytest.raises(ResourceError, match=r"^2\^400 states need .* for this operator"):
        formula("n[i, up]", Ring(200, Fermions("up", "down"))).matrix(limit=2**30)


def test_parameters_may_have_the_names_of_absent_operators():
    assert str(formula("b*c*n*Sz[i]", Ring(3), {"b": 1, "c": 2, "n": 3})) == "b*c*n*Sz[i]"
    with pytest.raises(ValueError, match="parameter name 'n' already has a meaning"):
        formula("n[i]", Ring(3, Fermions()), {"n": 1})
