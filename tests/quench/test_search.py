"""The search for local conserved operators: counts, known charges, exact second routes, what it prints and refuses."""

from itertools import product
from math import sqrt

import numpy as np
import pytest
import scipy.sparse as sp

from maxent.errors import ResourceError
from maxent.lattice import Bosons, Chain, Fermions, Lattice, Ring, Spin, formula
from maxent.quench import null_spaces
from maxent.quench import search as module
from maxent.quench.densities import density
from maxent.quench.search import search

MODELS = {
    "XXX": [(1, "XX"), (1, "YY"), (1, "ZZ")],
    "XXX+hz": [(1, "XX"), (1, "YY"), (1, "ZZ"), (0.5, "Z")],
    "XXZ": [(1, "XX"), (1, "YY"), (0.5, "ZZ")],
    "XXZ+hz": [(1, "XX"), (1, "YY"), (0.5, "ZZ"), (0.25, "Z")],
    "XYZ": [(1, "XX"), (0.5, "YY"), (0.25, "ZZ")],
    "TFI": [(-1, "XX"), (-0.5, "Z")],
    "critical TFI": [(-1, "XX"), (-1, "Z")],
    "XY+hz": [(1, "XX"), (0.5, "YY"), (0.25, "Z")],
    "XX": [(1, "XX"), (1, "YY")],
    "XX+hz": [(1, "XX"), (1, "YY"), (0.25, "Z")],
    "mixed-field Ising": [(1, "ZZ"), (0.75, "X"), (0.5, "Z")],
    "XYZ+hz": [(1, "XX"), (0.5, "YY"), (0.25, "ZZ"), (0.75, "Z")],
    "XXZ+NNN": [(1, "XX"), (1, "YY"), (0.5, "ZZ"), (0.25, "XIX"), (0.25, "YIY"), (0.125, "ZIZ")],
    "XXX+NNN": [(1, "XX"), (1, "YY"), (1, "ZZ"), (0.25, "XIX"), (0.25, "YIY"), (0.25, "ZIZ")],
    "classical Ising": [(1, "ZZ"), (0.5, "Z")],
    "dimerised XX": [(1, "XX", 0), (1, "YY", 0), (0.5, "XX", 1), (0.5, "YY", 1)],
    "dimerised XXZ": [
        (1, "XX", 0), (1, "YY", 0), (0.5, "ZZ", 0), (0.5, "XX", 1), (0.5, "YY", 1), (0.25, "ZZ", 1),
    ],
}  # fmt: skip
PERIOD = {"dimerised XX": 2, "dimerised XXZ": 2}

# XXX and XYZ: one charge per range beyond the symmetries and H, M. P. Grabowski and P. Mathieu, Ann. Phys. 243, 299
# (1995). XX, XY, Ising in a field: bilinears of free fermions, two per range (the same place). XYZ in a field along z:
# none but H, N. Shiraishi, EPL 128, 17002 (2019); mixed-field Ising: Y. Chiba, Phys. Rev. B 109, 035123 (2024);
# both quoted from memory. The rest was counted here by elimination modulo a prime (below).
COUNTS = {
    "XXX": (3, 4, 5, 6, 7),
    "XXX+hz": (1, 2, 3, 4, 5),
    "XXZ": (1, 2, 3, 4, 5),
    "XXZ+hz": (1, 2, 3, 4, 5),
    "XYZ": (0, 1, 2, 3, 4),
    "TFI": (0, 2, 4, 6, 8),
    "critical TFI": (0, 2, 4, 6, 8),
    "XY+hz": (0, 2, 4, 6, 8),
    "XX": (1, 3, 5, 7, 9),
    "XX+hz": (1, 3, 5, 7, 9),
    "mixed-field Ising": (0, 1, 1, 1, 1),
    "XYZ+hz": (0, 1, 1, 1, 1),
    "XXZ+NNN": (1, 1, 2, 2, 2),
    "XXX+NNN": (3, 3, 4, 4, 4),
    "classical Ising": (1, 2, 6, 16, 46),
    "dimerised XX": (1, 4, 8, 12, 16),
    "dimerised XXZ": (1, 2, 2, 2, 2),
}

# ---- a second way to calculate with Pauli strings: text and a product table, nothing in common with the bits

PRODUCTS = {("X", "Y"): "Z", ("Y", "Z"): "X", ("Z", "X"): "Y"}
MATRICES = {
    "I": np.eye(2), "X": np.array([[0, 1], [1, 0]]), "Y": np.array([[0, -1j], [1j, 0]]), "Z": np.diag([1.0, -1.0]),
}  # fmt: skip
MATRICES = {name: sp.csr_array(matrix) for name, matrix in MATRICES.items()}


def letter_product(a, b):
    """Phase exponent k of i^k and letter of a product."""
    if a == b or "I" in (a, b):
        return 0, ("I" if a == b else a if b == "I" else b)
    return (1, PRODUCTS[a, b]) if (a, b) in PRODUCTS else (3, PRODUCTS[b, a])


def bracket(a, at, b):
    """[A at a site, B at 0] / 2i as (sign, text, first site) or None."""
    low, high = min(at, 0), max(at + len(a), len(b))
    phase, text = 0, ""
    for s in range(low, high):
        left = a[s - at] if 0 <= s - at < len(a) else "I"
        right = b[s] if 0 <= s < len(b) else "I"
        k, letter = letter_product(left, right)
        phase, text = phase + k, text + letter
    if phase % 2 == 0:
        return None
    first = len(text) - len(text.lstrip("I"))
    return 2 - phase % 4, text.strip("I"), low + first


def equations(words, up_to, cell=1, sign=1):
    """Integer matrix of [H, .]/2i times a whole number, as dictionaries column -> row -> value; and the strings."""
    columns = [
        (text.rstrip("I"), place)
        for place in range(cell)
        for text in map("".join, product("IXYZ", repeat=up_to))
        if text[0] != "I"
    ]
    out = []
    for text, place in columns:
        column = {}
        for c, word, *rest in words:
            home = rest[0] if rest else 0
            for at in range(-len(word), len(text) + 1):
                if (place + at - home) % cell:
                    continue
                found = bracket(word, at, text)
                if found:
                    s, result, first = found
                    cells, start = divmod(place + first, cell)
                    key = (result, start)
                    column[key] = column.get(key, 0) + s * round(8 * c) * sign ** (cells % 2)
        out.append({k: v for k, v in column.items() if v})
    return columns, out


def nullity_modulo(columns, prime=2147483629):
    """Dimension of the null space over the integers modulo a prime, by sparse elimination."""
    pivots, rank = {}, 0
    for column in columns:
        left = {k: v % prime for k, v in column.items() if v % prime}
        while left:
            lead = min(left)
            if lead not in pivots:
                inverse = pow(left[lead], prime - 2, prime)
                pivots[lead] = {k: v * inverse % prime for k, v in left.items()}
                rank += 1
                break
            factor = left[lead]
            for k, v in pivots[lead].items():
                value = (left.get(k, 0) - factor * v) % prime
                if value:
                    left[k] = value
                else:
                    left.pop(k, None)
    return len(columns) - rank


def ring_matrix(words, size, cell=1, sign=1):
    """Sum of all translates on a ring, by Kronecker products; sparse beyond 9 sites."""
    total = sp.csr_array((2**size, 2**size), dtype=complex)
    for c, text, *rest in words:
        for n in range(size // cell):
            letters = ["I"] * size
            for s, a in enumerate(text):
                letters[((rest[0] if rest else 0) + n * cell + s) % size] = a
            matrix = sp.csr_array(np.eye(1))
            for a in letters:
                matrix = sp.kron(matrix, MATRICES[a], format="csr")
            total = total + float(c) * sign**n * matrix
    return total if size > 9 else total.toarray()


def row(found, words, place=0):
    """Coefficients of an operator, on the strings that the search knows."""
    d = density([(c, text, place) for c, text in words], cell=found.hamiltonian.cell)
    return {(text, at): c for c, text, at in d.terms}


def projection(found, words):
    """Share of the squared norm of an operator that lies in the space found."""
    wanted = row(found, words)
    norm = sum(c * c for c in wanted.values())
    overlaps = [sum(c * wanted.get((text, at), 0.0) for c, text, at in q.words) for q in found.orthonormal]
    return sum(o * o for o in overlaps) / norm


@pytest.fixture(scope="module")
def found():
    return {name: search(words, 5, cell=PERIOD.get(name)) for name, words in MODELS.items()}


@pytest.mark.parametrize("name", MODELS)
def test_counts(found, name):
    assert found[name].counts == COUNTS[name]
    assert len(found[name].charges) == len(found[name].orthonormal) == COUNTS[name][-1]
    assert found[name].largest_zero < 1e-13


@pytest.mark.parametrize(("momentum", "counts"), [("0", (1, 3, 5, 7)), ("pi", (0, 2, 4, 6))])
def test_momenta_of_the_xx_chain(momentum, counts):
    both = search(MODELS["XX"], 4, momentum=momentum)
    assert both.counts == counts


def test_a_cell_of_two_sites_sees_both_momenta_of_one_site():
    # momentum pi of one site is momentum 0 of two
    twice = {name: [(c, text, place) for c, text in MODELS[name] for place in (0, 1)] for name in ("XX", "XYZ+hz")}
    assert search(twice["XX"], 4, cell=2).counts == (1, 5, 9, 13)
    assert search(twice["XYZ+hz"], 3, cell=2).counts == (0, 1, 1)


@pytest.mark.parametrize("name", ["XXX", "XYZ", "TFI", "XXZ+NNN", "classical Ising", "mixed-field Ising"])
def test_counts_by_elimination_modulo_a_prime(name):
    assert nullity_modulo(equations(MODELS[name], 4)[1]) == COUNTS[name][3]


@pytest.mark.parametrize(
    ("name", "cell", "sign", "count"),
    [("dimerised XX", 2, 1, 8), ("dimerised XXZ", 2, 1, 2), ("XX", 1, -1, 4), ("dimerised XX", 2, -1, 0)],
)
def test_cells_and_staggering_by_elimination_modulo_a_prime(name, cell, sign, count):
    momentum = "0" if sign == 1 else "pi"
    assert nullity_modulo(equations(MODELS[name], 3, cell, sign)[1]) == count
    assert search(MODELS[name], 3, cell=cell, momentum=momentum).counts[-1] == count


@pytest.mark.parametrize("name", ["XXX", "TFI", "XYZ+hz", "classical Ising"])
def test_counts_and_gap_on_a_ring(found, name):
    size = 7  # enough to tell the words of the commutator apart, which cover 4 sites
    h = ring_matrix(MODELS[name], size)
    columns = []
    for text in map("".join, product("IXYZ", repeat=3)):
        if text[0] != "I":
            q = ring_matrix([(1, text)], size)
            columns.append(((h @ q - q @ h) / np.linalg.norm(q)).ravel() / 2)
    sizes = np.linalg.svd(np.linalg.qr(np.array(columns).T, mode="r"), compute_uv=False)
    assert np.sum(sizes < 1e-10) == COUNTS[name][2]
    near = found[name].nearly[2]
    assert sizes[sizes > 1e-10].min() == pytest.approx(near.value, rel=1e-12)
    assert np.sum(np.abs(sizes - near.value) < 1e-9) == near.multiplicity


# ---- known charges

J, H = 1.0, 0.5
Q3 = {name: [(-a * b, f"{p}{r}{q}") for (a, p), (b, q), r in (
    ((x, "X"), (y, "Y"), "Z"), ((y, "Y"), (z, "Z"), "X"), ((z, "Z"), (x, "X"), "Y"))]
    + [(a * b, f"{q}{r}{p}") for (a, p), (b, q), r in (
    ((x, "X"), (y, "Y"), "Z"), ((y, "Y"), (z, "Z"), "X"), ((z, "Z"), (x, "X"), "Y"))]
    for name, (x, y, z) in {"XXX": (1, 1, 1), "XXZ": (1, 1, 0.5), "XYZ": (1, 0.5, 0.25)}.items()}  # fmt: skip


@pytest.mark.parametrize("name", Q3)
def test_the_energy_current_is_found(found, name):
    # [h(1,2), h(2,3)] of bond energies, by the product table
    assert projection(found[name], Q3[name]) == pytest.approx(1.0, abs=1e-12)
    by_hand = {}
    for a, p, b, q in ((a, p, b, q) for a, p in MODELS[name] for b, q in MODELS[name]):
        done = bracket(p, -1, q)
        if done:
            by_hand[done[1]] = by_hand.get(done[1], 0.0) + done[0] * a * b
    assert projection(found[name], [(c, t) for t, c in by_hand.items()]) == pytest.approx(1.0, abs=1e-12)


@pytest.mark.parametrize(
    "words",
    [
        [(-J, "XZX"), (J, "Z"), (H, "XX"), (H, "YY")],
        [(-J, "XZZX"), (-J, "YY"), (H, "XZX"), (H, "YZY")],
        [(1, "XY"), (-1, "YX")],
        [(1, "XZY"), (-1, "YZX")],
        MODELS["TFI"],
    ],
)
def test_charges_of_the_ising_chain_in_a_transverse_field(found, words):
    # of free fermions, e.g. M. Fagotti and F. H. L. Essler, Phys. Rev. B 87, 245107 (2013), from memory; checked on a
    # ring here
    h, q = ring_matrix(MODELS["TFI"], 7), ring_matrix(words, 7)
    assert np.abs(h @ q - q @ h).max() < 1e-12
    assert projection(found["TFI"], words) == pytest.approx(1.0, abs=1e-12)


def test_an_operator_that_is_not_conserved_is_not_found(found):
    assert projection(found["TFI"], [(1, "XZX"), (1, "Z"), (H, "XX"), (H, "YY")]) < 0.9


# ---- bases, orthonormal and readable


@pytest.mark.parametrize("name", MODELS)
def test_orthonormal_by_range(found, name):
    f = found[name]
    used = sorted({(t, at) for q in f.orthonormal for _, t, at in q.words})
    at = {key: n for n, key in enumerate(used)}
    rows = np.zeros((len(f.orthonormal), len(used)))
    for j, q in enumerate(f.orthonormal):
        for c, text, place in q.words:
            rows[j, at[text, place]] = c
    assert np.abs(rows @ rows.T - np.eye(len(rows))).max(initial=0.0) < 1e-12
    for plain, normed in zip(f.charges, f.orthonormal, strict=True):
        assert normed.range == plain.range  # nothing wider was mixed in
        assert normed.defect < 1e-12


@pytest.mark.parametrize("name", MODELS)
def test_the_hamiltonian_comes_first_then_the_ranges(found, name):
    first, *rest = found[name].charges
    assert first.hamiltonian and not any(q.hamiltonian for q in rest)
    assert {(t, at): c for c, t, at in first.words} == {(t, *(at or [0])): float(c) for c, t, *at in MODELS[name]}
    assert [q.range for q in rest] == sorted(q.range for q in rest)


@pytest.mark.parametrize(
    "name", ["XXX", "XXZ+hz", "XYZ", "TFI", "XY+hz", "XX", "XXZ+NNN", "dimerised XX", "dimerised XXZ"]
)
def test_printed_formulas_commute_exactly_on_a_ring(found, name):
    f = found[name]
    ring = Ring(10 if name in PERIOD else 9)
    assert f.shortest_ring <= ring.size
    h = formula(f.charges[0].formula(), ring)
    for q in f.charges:
        assert q.exact and q.defect < 1e-13
        for letters in ("spin", "pauli"):
            read = formula(q.formula(letters, subscript="k"), ring, hermitian=True)
            assert read.range == q.range
            assert h.commutator(read).terms == ()


def test_printed_staggered_formulas_commute_exactly_on_a_ring():
    f = search(MODELS["XX"], 4, momentum="pi")
    h = formula("X[i]*X[i+1] + Y[i]*Y[i+1]", Ring(8))
    assert [q.formula("pauli") for q in f.charges[:2]] == [
        "(-1)**i*(X[i]*X[i+1] - Y[i]*Y[i+1])", "(-1)**i*(X[i]*Y[i+1] + Y[i]*X[i+1])",
    ]  # fmt: skip
    assert f.shortest_ring == 6
    for q in f.charges:
        assert q.exact and h.commutator(formula(q.formula(), Ring(8))).terms == ()
    single = search([(1, "XX")], 1, momentum="pi")
    assert [q.formula() for q in single.charges] == ["(-1)**i*Sx[i]"]


@pytest.mark.parametrize(("cell", "momentum", "size"), [(3, "0", 9), (3, "pi", 12), (2, "pi", 8)])
def test_printed_formulas_of_larger_cells(cell, momentum, size):
    words = [(1, "XX", s) for s in range(cell)] + [(1, "YY", s) for s in range(cell)] + [(0.5, "Z", 0)]
    if momentum == "pi":
        words = [(1, "ZZ", s) for s in range(cell)] + [(0.5, "Z", 0)]
    f = search(words, 3, cell=cell, momentum=momentum)
    assert f.counts[-1] > 1
    sign = -1 if momentum == "pi" else 1
    h = sp.csr_array(ring_matrix(words, size, cell))
    for q in f.charges:
        read = formula(q.formula(), Ring(size)).matrix()
        same = sp.csr_array(ring_matrix(q.words, size, cell, sign))
        ratio = same.conj().multiply(read).sum().real / (abs(same) ** 2).sum()
        assert abs(read - ratio * same).max() < 1e-12 * abs(ratio)
        assert abs(h @ read - read @ h).max() < 1e-10 * abs(read).max()


def test_few_words_and_short_coefficients(found):
    assert [q.formula("pauli") for q in found["XXX"].charges[1:5]] == [
        "X[i]", "Y[i]", "Z[i]",
        "X[i]*Y[i+1]*Z[i+2] - X[i]*Z[i+1]*Y[i+2] - Y[i]*X[i+1]*Z[i+2] + Y[i]*Z[i+1]*X[i+2] + Z[i]*X[i+1]*Y[i+2]"
        " - Z[i]*Y[i+1]*X[i+2]",
    ]  # fmt: skip
    assert [q.formula("pauli") for q in found["XX+hz"].charges[:5]] == [
        "0.25*Z[i] + X[i]*X[i+1] + Y[i]*Y[i+1]", "Z[i]", "X[i]*Y[i+1] - Y[i]*X[i+1]",
        "X[i]*Z[i+1]*X[i+2] + Y[i]*Z[i+1]*Y[i+2]", "X[i]*Z[i+1]*Y[i+2] - Y[i]*Z[i+1]*X[i+2]",
    ]  # fmt: skip
    assert [q.formula() for q in found["TFI"].charges[1:4]] == [
        "Sx[i]*Sy[i+1] - Sy[i]*Sx[i+1]", "Sx[i]*Sz[i+1]*Sy[i+2] - Sy[i]*Sz[i+1]*Sx[i+2]",
        "3*Sz[i] + 4*Sy[i]*Sy[i+1] - 16*Sx[i]*Sz[i+1]*Sx[i+2]",
    ]  # fmt: skip


def test_the_same_whatever_the_order_of_the_words_and_the_unit(found):
    turned = search([(3 * c, text) for c, text in reversed(MODELS["XY+hz"])], 5)
    assert [q.words for q in turned.charges[1:]] == [q.words for q in found["XY+hz"].charges[1:]]
    values = [n.value for n in found["XY+hz"].nearly]
    assert [n.value for n in turned.nearly] == pytest.approx([3 * v for v in values], rel=1e-12)


def test_irrational_couplings_are_said_to_hold_to_rounding():
    f = search([(sqrt(2), "XX"), (1, "YY"), (1 / sqrt(3), "ZZ")], 4)
    assert f.counts == (0, 1, 2, 3)
    assert [q.exact for q in f.charges] == [True, False, False]
    assert all(q.defect < 1e-14 for q in f.charges)
    assert any("2 operators with coefficients that are no short fractions" in r for r in f.remarks)
    h, q = (formula(q.formula("pauli"), Ring(8)).matrix().toarray() for q in (f.charges[0], f.charges[1]))
    assert np.abs(h @ q - q @ h).max() < 1e-13
    # a common irrational factor spoils nothing
    assert all(q.exact for q in search([(sqrt(2), "XX"), (sqrt(2), "YY"), (sqrt(2) / 2, "ZZ")], 4).charges)


def test_decimal_couplings_are_read_as_the_fractions_they_stand_for():
    f = search([(0.1 * 3, "XX"), (0.3, "YY"), (0.7 * 0.3, "ZZ")], 4)
    assert f.counts == (1, 2, 3, 4) and all(q.exact for q in f.charges)


# ---- how nearly conserved the next one is


def test_the_most_nearly_conserved_operator(found):
    # measured once with another program of ours, two digits kept
    assert [round(n.value, 2) for n in found["mixed-field Ising"].nearly[1:]] == [0.44, 0.36, 0.20, 0.13]
    near = found["mixed-field Ising"].nearly[2]
    h, q = ring_matrix(MODELS["mixed-field Ising"], 7), ring_matrix(near.charge.words, 7)
    size = np.linalg.norm(h @ q - q @ h) / (2 * np.linalg.norm(q))
    assert size == pytest.approx(near.value, rel=1e-12)
    assert sum(c * c for c, _, _ in near.charge.words) == pytest.approx(1.0, rel=1e-12)


def test_no_next_one_where_everything_is_conserved(found):
    assert found["XXX"].nearly[0] is None
    assert search([(1, "Z")], 1, momentum="0").nearly[0].value == pytest.approx(1.0)


@pytest.mark.parametrize(("strength", "counts"), [(0.0, (1, 2, 3, 4)), (1e-6, (1, 1, 2, 2))])
def test_a_weak_perturbation_is_seen(strength, counts):
    words = [*MODELS["XXZ"], (strength, "ZIZ")]
    f = search(words, 4)
    assert f.counts == counts
    if strength:
        assert f.nearly[2].value < 1e-5


def test_a_larger_hamiltonian_than_the_range(found):
    f = search(MODELS["XXZ+NNN"], 2)
    assert f.counts == (1, 1) and not any(q.hamiltonian for q in f.charges)
    assert f.remarks[0] == "The Hamiltonian covers 3 sites and is not among operators of range 2."


def test_large_blocks_give_the_same_as_small_ones(monkeypatch, found):
    monkeypatch.setattr(null_spaces, "DENSE", 8)
    for name in ("mixed-field Ising", "XXX", "classical Ising", "dimerised XX"):
        f = search(MODELS[name], 4, cell=PERIOD.get(name))
        assert f.counts == COUNTS[name][:4]
        for a, b in zip(f.nearly, found[name].nearly, strict=False):
            assert (a is None) == (b is None)
            if a is not None:
                assert a.value == pytest.approx(b.value, rel=1e-10)
                assert a.multiplicity == b.multiplicity


# ---- what they have to do with one another


@pytest.mark.parametrize("name", ["XXX", "XX", "classical Ising"])
def test_mutual_commutators(name):
    f = search(MODELS[name], 3)
    q = [ring_matrix(charge.words, 7) for charge in f.charges]
    for j, k in product(range(len(q)), repeat=2):
        size = np.linalg.norm(q[j] @ q[k] - q[k] @ q[j]) / (2 * np.linalg.norm(q[j]) * np.linalg.norm(q[k]))
        # Frobenius norms of sums over a ring grow like the root of the number of sites
        assert size * sqrt(7 * 2**7) == pytest.approx(f.commutators[j, k], abs=1e-12)
    assert (name == "XX") == (f.commutators.max() < 1e-12)


def test_mutual_commutators_of_staggered_operators():
    f = search(MODELS["XX"], 3, momentum="pi")
    q = [ring_matrix(charge.words, 8, sign=-1) for charge in f.charges]
    for j, k in product(range(len(q)), repeat=2):
        size = np.linalg.norm(q[j] @ q[k] - q[k] @ q[j]) / (2 * np.linalg.norm(q[j]) * np.linalg.norm(q[k]))
        assert size * sqrt(8 * 2**8) == pytest.approx(f.commutators[j, k], abs=1e-12)


def test_fragmented(found):
    assert {name for name, f in found.items() if f.fragmented} == {"classical Ising"}
    assert found["classical Ising"].diagonal == 16
    assert "46 operators, 16 of them diagonal" in found["classical Ising"].remarks[0]
    many = search([(1, "Z")], 5)
    assert many.fragmented and many.commutators is None and len(many.charges) == many.counts[-1] > 100


def test_completeness_is_not_claimed(found):
    for f in found.values():
        assert "quasi-local charges, larger ranges and other momenta are not found" in f.remarks[-1]


# ---- from formulas


def test_a_sum_on_a_ring_is_read_with_its_parameters():
    text, values = "J*(Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + D*Sz[i]*Sz[i+1]) + 3", {"J": 4.0, "D": 0.5}
    for size in (4, 7, 12):
        f = search(formula(text, Ring(size), values), 4)
        assert f.hamiltonian.terms == ((0.5, "ZZ", 0), (1.0, "XX", 0), (1.0, "YY", 0))
        assert f.counts == (1, 2, 3, 4)


def test_the_cell_of_a_sum_on_a_ring():
    text = "(1 + 0.5*(-1)**i)*(X[i]*X[i+1] + Y[i]*Y[i+1])"
    f = search(formula(text, Ring(8)), 3)
    assert f.hamiltonian.cell == 2 and f.counts == (1, 4, 8)
    assert search(formula(text, Ring(8)), 2, cell=4).hamiltonian.cell == 4
    h = formula(text, Ring(8))
    assert all(h.commutator(formula(q.formula(), Ring(8))).terms == () for q in f.charges)


@pytest.mark.parametrize(("momentum", "counts"), [("0", (1, 4, 8)), ("pi", (0, 0, 0))])
def test_named_sites_of_a_cell(momentum, counts):
    ring = Ring(4, cell=("a", "b"))
    hops = "X[i,a]*X[i,b] + Y[i,a]*Y[i,b] + 0.5*X[i,b]*X[i+1,a] + 0.5*Y[i,b]*Y[i+1,a]"
    f = search(formula(hops, ring), 3, momentum=momentum)
    assert f.hamiltonian.cell == 2 and f.counts == counts
    assert all(formula(hops, ring).commutator(formula(q.formula(), ring)).terms == () for q in f.charges)
    if momentum == "0":
        assert "Sz[i, a] + Sz[i, b]" in [q.formula() for q in f.charges]


def test_a_pattern_over_named_cells():
    ring = Ring(8, cell=("a", "b"))
    text = "Z[i,a]*Z[i,b] + (2 + (-1)**i)*Z[i,b]*Z[i+1,a]"
    f = search(formula(text, ring), 2)
    assert f.hamiltonian.cell == 4
    assert all(formula(text, ring).commutator(formula(q.formula(), ring)).terms == () for q in f.charges)
    with pytest.raises(ValueError, match="3 sites are no multiple of the 2 sites"):
        search(formula(text, ring), 2, cell=3)


@pytest.mark.parametrize(
    ("text", "kind", "said"),
    [
        ("Sz[i]*Sz[i+1]", Spin(1), "for spins 1/2 and fermions so far, not for spin-1 sites"),
        ("n[i]", Bosons(cutoff=1), "no end of local operators, and a cut-off changes their commutators"),
        ("n[i]", Bosons(), "a boson mode has no end of local operators"),
        ("Sz[i, s]", {"s": Spin(), "f": Fermions()}, "needs sites of one kind: spin-1/2 and fermion"),
    ],
)
def test_other_kinds_of_sites_are_refused(text, kind, said):
    with pytest.raises(TypeError, match=said):
        search(formula(text, Ring(6, kind)))


def test_a_lattice_given_by_bonds_has_no_translations():
    with pytest.raises(TypeError, match="needs a ring or an open chain: a lattice given by its bonds"):
        search(formula("Sz[i]*Sz[j] for <i, j>", Lattice.grid(3, 3)))


# ---- open chains


def test_an_open_chain_is_searched_like_a_ring():
    text = "(1 + 0.5*(-1)**i)*(X[i]*X[i+1] + Y[i]*Y[i+1])"
    for size in (4, 7, 9):
        f = search(formula(text, Chain(size)), 3)
        assert f.hamiltonian.cell == 2 and f.hamiltonian.is_open and f.counts == (1, 4, 8)
        assert "its ends may break what is found" in f.remarks[0]
    assert not any("ends" in remark for remark in search(formula(text, Ring(8)), 3).remarks)
    words = search(formula("Sz[i]*Sz[i+2] + 0.5*Sx[i]", Chain(5)), 2).hamiltonian
    assert words.terms == ((0.25, "X", 0), (0.25, "ZIZ", 0)) and words.cell == 1


def test_occupations_at_the_ends_of_a_chain_are_no_terms_of_their_own():
    # n n and Z Z differ by single letters, of which the ends of the chain have half as many
    text = "0.5*n[i]*n[i+1] + (dagger(c[i])*c[i+1] + h.c.)"
    open_, closed = (density(formula(text, line(8, Fermions()))) for line in (Chain, Ring))
    assert open_.terms == closed.terms and (-0.25, "Z", 0) in open_.terms


def test_what_the_ends_break():
    """The energy current of the XX chain commutes with H on a ring, and not on a chain: exact commutators."""
    chain = Chain(7)
    h = formula("X[i]*X[i+1] + Y[i]*Y[i+1]", chain)
    current = next(q for q in search(h, 2).charges if "X[i]*Y[i+1]" in q.formula("pauli"))
    broken = h.commutator(formula(current.formula(), chain))
    assert broken.terms and all(set(t.positions) <= {0, 1, 2} or set(t.positions) <= {4, 5, 6} for t in broken.terms)
    assert h.commutator(formula("Sz[i]", chain)).terms == ()


@pytest.mark.parametrize(
    ("text", "options", "said"),
    [
        ("Sz[i]*Sz[i+1] + 0.1*Sz[0]", {}, "not translation-invariant in the bulk: no shift by fewer than 6 sites"),
        ("Sz[i]*Sz[i+1] + 0.1*Sz[5]", {}, "not translation-invariant in the bulk"),
        ("i*Sz[i]", {}, "not translation-invariant in the bulk"),
        ("(i%3)*Sz[i]*Sz[i+1]", {"cell": 2}, "not invariant under translation by 2 of 6 sites"),
        ("Sz[i]", {"cell": 7}, "not invariant under translation by 7 of 6 sites"),
    ],
)
def test_chains_that_do_not_repeat(text, options, said):
    with pytest.raises(ValueError, match=said):
        search(formula(text, Chain(6)), 2, **options)


def test_every_place_of_a_cell_must_be_on_the_chain():
    # the third place of the cell shows twice among 5 bonds with a cell of 2, once with one of 3
    assert search(formula("(i%2)*Sz[i]*Sz[i+1]", Chain(6)), 1).hamiltonian.cell == 2
    assert search(formula("((i+1)%3)*Sz[i]*Sz[i+1]", Chain(6)), 1).hamiltonian.cell == 3
    with pytest.raises(ValueError, match="not translation-invariant in the bulk"):
        search(formula("Sz[0]*Sz[1]", Chain(2)), 1)


def test_words_across_the_end_of_the_ring():
    for text, words in {
        "X[i]*Y[i-1]": [(1, "YX")],
        "X[i]*Y[i-1]*Z[i+1]": [(1, "YXZ")],
        "X[i]*Z[i+2] + Z[i]": [(1, "XIZ"), (1, "Z")],
        "X[i] + X[0] - X[0]": [(1, "X")],
    }.items():
        d = density(formula(text, Ring(7)))
        assert sorted(d.terms) == sorted((1.0, t, 0) for _, t in words), text


@pytest.mark.parametrize(
    ("hamiltonian", "options", "error", "text"),
    [
        (lambda: formula("Sz[i] + Sx[0]", Ring(6)), {}, ValueError, "no shift by fewer than 6 sites"),
        (lambda: formula("(-1)**i*Sz[i]", Ring(6)), {"cell": 1}, ValueError, "translation by 1 of 6 sites"),
        (lambda: formula("Sz[i]", Ring(6)), {"cell": 4}, ValueError, "translation by 4 of 6 sites"),
        (lambda: formula("Sz[i]*Sz[i+3]", Ring(6)), {}, ValueError, "covers 4 of 6 sites"),
        (lambda: formula("Splus[i]", Ring(6)), {}, ValueError, "not Hermitian: it holds"),
        (lambda: formula("3", Ring(6)), {}, ValueError, "is zero"),
        (lambda: [(1, "XX"), (-1, "XX")], {}, ValueError, "is zero"),
        (lambda: [(1j, "XX")], {}, ValueError, "not Hermitian: XX"),
        (lambda: [(float("nan"), "XX")], {}, ValueError, "no finite number"),
        (lambda: [(1, "XQ")], {}, TypeError, "letters I, X, Y, Z, not 'XQ'"),
        (lambda: [(1, "X" + 40 * "I" + "X")], {}, ValueError, "covers 42 sites"),
        (lambda: [(1, "X" + 24 * "I" + "X")], {}, ValueError, "too wide"),
        (lambda: [(1, "X")], {"up_to": 10**9}, ValueError, "range 1000000000 of the search and 1 of the .* too wide"),
        (lambda: [(1, "X")], {"up_to": 0}, ValueError, "whole number from 1 on, not 0"),
        (lambda: [(1, "X")], {"up_to": 2.0}, ValueError, "whole number from 1 on, not 2.0"),
        (lambda: [(1, "X")], {"cell": 0}, ValueError, "whole number from 1 on, not 0"),
        (lambda: [(1, "X")], {"momentum": "0.5"}, ValueError, "must be '0' or 'pi'"),
    ],
)
def test_bad_input(hamiltonian, options, error, text):
    with pytest.raises(error, match=text):
        search(hamiltonian(), **options)


def test_a_range_that_does_not_fit_is_refused_before_the_work():
    with pytest.raises(ResourceError, match=r"up to range 20 has 824633720832 unknowns and needs [\d.]+ PiB"):
        search(MODELS["XXZ"], 20)
    with pytest.raises(ResourceError, match=r"up to range 4 has 192 unknowns and needs 216 KiB .* available 1 KiB"):
        search(MODELS["XXZ"], 4, limit=1024)
    said = []
    with pytest.raises(ResourceError, match=r"couples 392 unknowns and needs [\d.]+ MiB for .*; available"):
        search(MODELS["mixed-field Ising"], 5, limit=2**20, progress=said.append)
    assert said == []


def test_progress_is_quiet_for_two_seconds(monkeypatch):
    said = []
    search(MODELS["XXZ"], 3, progress=said.append)
    assert said == []
    clock = iter(range(0, 1000, 2))
    monkeypatch.setattr(module.time, "monotonic", lambda: next(clock))
    search(MODELS["XXZ"], 3, progress=said.append)
    assert said[-1] == "range 3 of 3: 48 operators"
