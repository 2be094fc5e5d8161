"""The search for conserved operators of fermions: counts, published charges, dense commutators on small rings."""

from itertools import product

import numpy as np
import pytest
import scipy.sparse as sp

from maxent.errors import ResourceError
from maxent.lattice import Fermions, Ring, formula
from maxent.quench.densities import density
from maxent.quench.fermion_words import fermion_words, strings_of, words_of
from maxent.quench.ladder_basis import ladder_basis
from maxent.quench.search import search
from maxent.quench.strings import brackets, count, ranges, strings

PLAIN, SPINFUL = Fermions(), Fermions("up", "down")
HOP = "-dagger(c[i])*c[i+1] + h.c."
HOPS = "-dagger(c[i, up])*c[i+1, up] - dagger(c[i, down])*c[i+1, down] + h.c."
HUBBARD = f"4*n[i, up]*n[i, down] + ({HOPS})"

# Free fermions: dagger(c[i])*c[i+r] and its conjugate for every r. The Hubbard chain: two numbers and two more
# components of the spin, H, and one charge from range three on, B. S. Shastry, Phys. Rev. Lett. 56, 1529 (1986), quoted
# from memory; in a magnetic field the two components go. With a repulsion of neighbours the range-three charge goes.
# One species with a repulsion of neighbours is the XXZ chain: one charge per range. Pairing leaves no number.
MODELS = {
    "free": (PLAIN, HOP, (1, 3, 5, 7)),
    "repelling neighbours": (PLAIN, f"0.5*n[i]*n[i+1] + ({HOP})", (1, 2, 3, 4)),
    "further neighbours": (PLAIN, f"0.5*n[i]*n[i+1] + 0.25*n[i]*n[i+2] + ({HOP})", (1, 1, 2, 2)),
    "paired": (PLAIN, "0.25*n[i] + (-dagger(c[i])*c[i+1] + 0.5*c[i]*c[i+1] + h.c.)", (0, 2, 4, 6)),
    "free with spin": (SPINFUL, HOPS, None),
    "Hubbard": (SPINFUL, HUBBARD, (4, 5, 6)),
    "Hubbard in a field": (SPINFUL, f"0.5*n[i, up] + {HUBBARD}", (2, 3, 4)),
    "extended Hubbard": (SPINFUL, f"n[i, up]*n[i+1, up] + n[i, down]*n[i+1, up] + n[i, up]*n[i+1, down] + "
                                  f"n[i, down]*n[i+1, down] + {HUBBARD}", (4, 5, 5)),
}  # fmt: skip


def modes(size):
    """Matrices c_j by Kronecker products, c_j = Z .. Z a."""
    z, a = sp.diags_array([1.0, -1.0]), sp.csr_array([[0.0, 1.0], [0.0, 0.0]])
    out = []
    for j in range(size):
        matrix = sp.csr_array([[1.0]])
        for k in range(size):
            matrix = sp.kron(matrix, z if k < j else a if k == j else sp.eye_array(2), format="csr")
        out.append(sp.csr_matrix(matrix))
    return out


def evaluated(text, length, species=("",)):
    """Sum over a ring of what a formula says, by Python and dense-as-can-be matrices: no parser of ours."""
    c = modes(length * len(species))

    class Ladder:
        def __getitem__(self, place):
            site, name = place if isinstance(place, tuple) else (place, "")
            return c[site % length * len(species) + species.index(name)]

    class Number:
        def __getitem__(self, place):
            return Ladder()[place].getH() * Ladder()[place]

    if text.endswith("+ h.c."):
        text = f"hermitian({text.removesuffix(' + h.c.')})"
    elif "h.c." in text:
        end = text.index(" + h.c.)")
        depth, start = 1, end
        while depth:
            start -= 1
            depth += (text[start] == ")") - (text[start] == "(")
        text = f"{text[:start]}hermitian({text[start + 1 : end]}){text[end + len(' + h.c.)') :]}"
    names = {
        "c": Ladder(), "n": Number(), "dagger": lambda m: m.getH(), "hermitian": lambda m: m + m.getH(),
        **{name: name for name in species},
    }  # fmt: skip
    return sum(eval(text, names | {"i": i}) for i in range(length))


@pytest.fixture(scope="module")
def found():
    return {
        name: search(formula(text, Ring(7, kind)), 4 if kind is PLAIN else 3)
        for name, (kind, text, _) in MODELS.items()
    }


@pytest.mark.parametrize("name", [name for name, model in MODELS.items() if model[2]])
def test_counts(found, name):
    assert found[name].counts == MODELS[name][2]
    assert len(found[name].orthonormal) == found[name].counts[-1] and found[name].largest_zero < 1e-13


def test_free_fermions_with_spin_conserve_more_than_bilinears(found):
    # four Hermitian bilinears per range, and 4 of range 1; products of occupations of modes are not local
    f = found["free with spin"]
    assert f.counts == (4, 12, 20) and not f.fragmented
    assert all(len(q.formula().split("*")) >= 1 and q.exact for q in f.charges)


@pytest.mark.parametrize("name", MODELS)
def test_printed_formulas_commute_on_a_ring(found, name):
    """Exact algebra of parsed formulas, and matrices made without the parser, signs at the end of the ring included."""
    kind, text, _ = MODELS[name]
    f = found[name]
    size = f.shortest_ring
    assert size == f.range + f.hamiltonian.range - 1
    ring = Ring(size, kind)
    h = formula(text, ring)
    length, species = (size, ("",)) if kind is PLAIN else (5, ("up", "down"))
    dense = evaluated(text, length, species)
    for q in f.charges:
        read = formula(q.formula(subscript="k"), ring, hermitian=True)
        assert q.exact and q.defect < 1e-13 and formula(q.formula(), Ring(9, kind)).range == q.range
        assert h.commutator(read).terms == ()
        other = evaluated(q.formula(), length, species)
        assert abs(dense @ other - other @ dense).max() < 1e-12 * abs(other).max()
        if kind is PLAIN:
            assert abs(read.matrix() - other).max() < 1e-12  # the same operator


def test_the_known_charge_of_the_hubbard_chain(found):
    """i sum (dagger(c[j+2])*c[j] - h.c.) - i U sum (dagger(c[j+1])*c[j] - h.c.)(n_j + n_j+1 - 1) of the other spin.

    B. S. Shastry, Phys. Rev. Lett. 56, 1529 (1986), from memory; that it commutes with H is checked here as well.
    """
    parts = []
    for one, other in (("up", "down"), ("down", "up")):
        parts.append(f"1j*dagger(c[i, {one}])*c[i+2, {one}]")
        parts.append(f"-4*1j*dagger(c[i, {one}])*c[i+1, {one}]*(n[i, {other}] + n[i+1, {other}] - 1)")
    ring = Ring(5, SPINFUL)
    known = formula(" + ".join([*parts, "h.c."]), ring)
    assert formula(HUBBARD, ring).commutator(known).terms == ()
    (charge,) = [q for q in found["Hubbard"].charges if q.range == 3]
    assert formula(charge.formula(), ring) == known


def test_names_of_what_is_conserved(found):
    assert [q.formula() for q in found["Hubbard"].charges[:5]] == [
        HUBBARD, "n[i, up]", "n[i, down]", "dagger(c[i, up])*c[i, down] + h.c.",
        "1j*dagger(c[i, up])*c[i, down] + h.c.",
    ]  # fmt: skip
    assert [q.formula() for q in found["free"].charges[:4]] == [
        HOP, "n[i]", "1j*dagger(c[i])*c[i+1] + h.c.", "dagger(c[i])*c[i+2] + h.c.",
    ]  # fmt: skip


def test_pairs_of_momentum_pi():
    """At half filling there is a second spin, made of pairs: C. N. Yang, Phys. Rev. Lett. 63, 2144 (1989)."""
    text = f"-2*n[i, up] - 2*n[i, down] + {HUBBARD}"
    f = search(formula(text, Ring(4, SPINFUL)), 2, momentum="pi")
    assert f.counts == (2, 2)
    assert [q.formula() for q in f.charges] == [
        "(-1)**i*(dagger(c[i, up])*dagger(c[i, down]) + h.c.)",
        "(-1)**i*(1j*dagger(c[i, up])*dagger(c[i, down]) + h.c.)",
    ]  # fmt: skip
    dense = evaluated(text, 4, ("up", "down"))
    for q in f.charges:
        other = evaluated(q.formula(), 4, ("up", "down"))
        assert abs(other).max() > 0.5 and abs(dense @ other - other @ dense).max() < 1e-12
    assert search(formula(HUBBARD, Ring(4, SPINFUL)), 2, momentum="pi").counts == (0, 0)


@pytest.mark.parametrize("momentum", ["0", "pi"])
def test_cells_of_two_sites(momentum):
    ring = Ring(8, PLAIN, cell=("a", "b"))
    text = "-dagger(c[i, a])*c[i, b] - 0.5*dagger(c[i, b])*c[i+1, a] + h.c."
    h = formula(text, ring)
    f = search(h, 3, momentum=momentum)
    assert f.hamiltonian.sites == 2 and f.counts == {"0": (1, 4, 8), "pi": (0, 0, 0)}[momentum]
    assert all(h.commutator(formula(q.formula(), ring)).terms == () for q in f.charges)
    plain = formula("-(1 - 0.5*(i%2))*dagger(c[i])*c[i+1] + h.c.", Ring(8, PLAIN))
    again = search(plain, 3, momentum=momentum)
    assert again.hamiltonian.cell == 2 and again.counts == f.counts
    assert all(plain.commutator(formula(q.formula(), plain.sites)).terms == () for q in again.charges)


def test_the_most_nearly_conserved_operator(found):
    """|[H, Q]|/(2|Q|) at infinite volume is that of a ring without words that wind around it."""
    near = found["extended Hubbard"].nearly[1]
    text = near.charge.formula()
    h, q = evaluated(MODELS["extended Hubbard"][1], 5, ("up", "down")), evaluated(text, 5, ("up", "down"))
    q = q - sp.eye_array(1024) * q.trace() / 1024
    assert sp.linalg.norm(h @ q - q @ h) / (2 * sp.linalg.norm(q)) == pytest.approx(near.value, rel=1e-10)


# ---- strings and words


def test_strings_are_the_words_they_stand_for():
    """Both expansions against Kronecker products, for all even strings on four modes."""
    c = [m.toarray() for m in modes(4)]
    pauli = {"I": np.eye(2), "X": np.array([[0, 1], [1, 0]]), "Y": np.array([[0, -1j], [1j, 0]]), "Z": np.diag([1, -1])}
    letters = lambda j: (c[j].conj().T, c[j], c[j].conj().T @ c[j])
    for x, z in product(range(16), repeat=2):
        if bin(x).count("1") % 2:
            continue
        expected = np.eye(1)
        for s in range(4):
            expected = np.kron(expected, pauli["IXZY"[(x >> s & 1) + 2 * (z >> s & 1)]])
        total, back = np.zeros((16, 16), complex), {}
        for word, factor in words_of(x, z).items():
            matrix = np.eye(16)
            for mode, letter in word:
                matrix = matrix @ letters(mode)[letter]
            total += factor * matrix
            for string, a in (strings_of(word) if word else {(0, 0): 1}).items():
                back[string] = back.get(string, 0) + factor * a
        assert np.abs(total - expected).max() < 1e-14
        assert {string for string, a in back.items() if a} == {(x, z)} and back[x, z] == 1


@pytest.mark.parametrize("length", [4, 5, 6])
def test_words_across_the_end_of_the_ring(length):
    """The sign of bringing operators over the end, for two and for four of them: the density of a long ring."""
    for text in ("dagger(c[i])*c[i+1] + h.c.", "1j*c[i]*c[i+1] + h.c.", "1j*dagger(c[i])*n[i+1]*c[i+2] + h.c."):
        assert density(formula(text, Ring(max(length, 5), PLAIN))).terms == density(formula(text, Ring(9, PLAIN))).terms
    text = "dagger(c[i, up])*dagger(c[i+1, down])*c[i, down]*c[i+1, up] + h.c."
    assert density(formula(text, Ring(length, SPINFUL))).terms == density(formula(text, Ring(9, SPINFUL))).terms


def test_hermitian_words_are_unique():
    # a current and a hopping from both of their strings
    assert fermion_words([(0.5, 0b11, 0b00), (0.5, 0b11, 0b11)], cell=1) == {(((0, 0), (1, 1)), False): 1.0}
    assert fermion_words([(0.5, 0b11, 0b01), (-0.5, 0b11, 0b10)], cell=1) == {(((0, 0), (1, 1)), True): 1.0}


@pytest.mark.parametrize(("up_to", "cell", "per_site", "even"), [(3, 1, 1, False), (3, 2, 2, True), (2, 4, 2, True)])
def test_all_strings_are_there_once(up_to, cell, per_site, even):
    x, z = strings(up_to, cell, per_site, even=even)
    expected = {
        (a, b) for a, b in product(range(2 ** (cell + up_to * per_site)), repeat=2)
        if 0 < ((a | b) & -(a | b)) < 2**cell and not (even and bin(a).count("1") % 2)
        and ((a | b).bit_length() - 1) // per_site - (((a | b) & -(a | b)).bit_length() - 1) // per_site < up_to
    }  # fmt: skip
    assert len(x) == len(expected) == count(up_to, cell, per_site, even=even)
    assert set(zip(x.tolist(), z.tolist(), strict=True)) == expected
    assert np.all(np.diff(ranges(x, z, per_site)) >= 0)


def test_the_ladder_basis_is_orthonormal_and_keeps_the_number():
    x, z = strings(3, 2, 2, even=True)
    turn = ladder_basis(x, z)
    assert abs(turn @ turn.T - sp.eye_array(len(x))).max() < 1e-14
    # [N, .] twice is the square of the change, on every row
    n_x, n_z = np.zeros(2, np.int64), np.array([1, 2])
    once = brackets(n_x, n_z, x, z, 2)
    keys = {key: n for n, key in enumerate((x << 31 | z).tolist())}
    matrix = sp.coo_array((once.sign * 1.0, ([keys[k] for k in once.keys().tolist()], once.right)), shape=[len(x)] * 2)
    square = (turn @ (matrix @ matrix.T).tocsr() @ turn.T).toarray()
    assert np.abs(square - np.diag(np.diag(square))).max() < 1e-12
    assert set(np.round(np.diag(square), 9)) <= {0.0, 4.0, 16.0, 36.0}
    part = ladder_basis(x[::3], z[::3])
    assert abs(part.T @ part - sp.eye_array(len(x[::3]))).max() < 1e-14


# ---- what is refused


@pytest.mark.parametrize(
    ("text", "kind", "said"),
    [
        ("c[i] + h.c.", PLAIN, "odd number of fermion operators: "),
        ("dagger(c[i])*c[i+1]", PLAIN, "not Hermitian: it holds dagger"),
        ("n[i]*n[i+3]", PLAIN, "covers 4 of 6 sites"),
        ("n[i] + 0.5*n[0]", PLAIN, "not translation-invariant: no shift by fewer than 6 sites"),
        ("n[i] - n[i]", PLAIN, "is zero"),
    ],
)
def test_bad_input(text, kind, said):
    with pytest.raises(ValueError, match=said):
        search(formula(text, Ring(6, kind)), 2)


def test_a_range_that_does_not_fit():
    h = formula(HUBBARD, Ring(6, SPINFUL))
    with pytest.raises(ResourceError, match=r"up to range 3 has 1920 unknowns and needs [\d.]+ MiB .* available 1 MiB"):
        search(h, 3, limit=2**20)
    with pytest.raises(
        ResourceError, match=r"range 5 couples about 46576 unknowns and needs 48.5 GiB .* available 8 GiB"
    ):
        search(h, 5, limit=2**33)
    with pytest.raises(ValueError, match=r"range 12 of the search and 2 of the Hamiltonian .* may be 15 at most"):
        search(h, 12)
