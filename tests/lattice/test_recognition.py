"""Quadratic charges recognised: Jordan-Wigner forms against many-body matrices, and what is not quadratic."""

import re

import numpy as np
import pytest

from maxent.families.gaussian_states import majorana_operators
from maxent.families.majoranas import to_majoranas
from maxent.lattice import Bosons, Chain, Fermions, Lattice, Ring, Spin, formula, recognise

SPINS = {
    "energy": "-X[i]*X[i+1] - 0.6*Z[i] + 0.25",
    "second": "-X[i]*Z[i+1]*X[i+2] + 0.7*Y[i]*Z[i+1]*Y[i+2]",
    "odd": "X[i]*Y[i+1] - Y[i]*X[i+1]",
    "chiral": "X[i]*Z[i+1]*Y[i+2] - Y[i]*Z[i+1]*X[i+2]",
    "staggered": "(-1)**i*(Sz[i] + Sx[i]*Sx[i+1])",
}


def matrix_of(form):
    """Many-body matrix of a one-body form, through products of Majorana matrices."""
    a, half = to_majoranas(form.matrix, form.pairing)
    n = len(a) // 2
    g = [x.toarray() for x in majorana_operators(n)]
    total = (half + form.constant) * np.eye(2**n, dtype=complex)
    for p, q in zip(*np.nonzero(a), strict=True):
        total += 0.25j * a[p, q] * (g[p] @ g[q])
    return total


def parities(n):
    """Product of all Z, in the product basis."""
    return np.array([(-1) ** bin(k).count("1") for k in range(2**n)])


@pytest.mark.parametrize("geometry", [Ring, Chain])
@pytest.mark.parametrize("size", [1, 2, 3, 4, 5, 6])
def test_forms_are_the_operators(geometry, size):
    charges = {name: formula(text, geometry(size)) for name, text in SPINS.items()}
    if geometry is Ring and size == 2:  # the bond from 1 back to 0 is the bond from 0 to 1
        del charges["second"], charges["chiral"]
    if geometry is Ring and size == 1:  # X*X is a number, X*Z*X too
        charges = {"energy": charges["energy"]}
    found = recognise(charges)
    assert found.is_quadratic and found.statistics == "fermions"
    assert found.has_sectors == (geometry is Ring and size > 2)
    for eta, forms in found.sectors.items():
        kept = np.ones(2**size, bool) if eta == 0 else parities(size) == eta
        for name, form in forms.items():
            wanted = charges[name].matrix().toarray()[:, kept]
            np.testing.assert_allclose(matrix_of(form)[:, kept], wanted, atol=1e-13, err_msg=f"{name}, parity {eta}")


def test_boundary_of_the_sectors():
    """A bond across the end is antiperiodic for even and periodic for odd parity."""
    found = recognise({"hop": formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1]", Ring(6))})
    even, odd = (found.forms(eta)["hop"].matrix for eta in (1, -1))
    assert even[0, 1] == odd[0, 1] == odd[5, 0] == 0.5 and even[5, 0] == -0.5
    with pytest.raises(ValueError, match="parity"):
        found.forms()


def test_words_across_the_end_of_a_lattice():
    """Not the geometry decides but the words: a bond list that closes a ring is one."""
    ring = Lattice(5, {"links": [(i, (i + 1) % 5) for i in range(5)]})
    text = "X[a]*X[b] for <a, b> in links"
    assert recognise({"e": formula(text, ring)}).has_sectors
    line = Lattice(5, {"links": [(i, i + 1) for i in range(4)]})
    assert not recognise({"e": formula(text, line)}).has_sectors


def test_only_fields_need_no_sectors():
    assert not recognise({"field": formula("Z[i]", Ring(6))}).has_sectors


def test_the_parity_itself_is_a_number_in_its_sectors():
    found = recognise({"parity": formula("Z[0]*Z[1]*Z[2]", Ring(3))})
    assert [found.forms(eta)["parity"].constant for eta in (1, -1)] == [1.0, -1.0]
    assert not found.forms(1)["parity"].matrix.any()


@pytest.mark.parametrize(
    ("text", "sites", "word"),
    [
        ("Z[i]*Z[i+1]", Ring(6), r"Sz\[0\]\*Sz\[1\]"),
        ("X[i]*X[i+1] + X[2]", Ring(6), r"Sx\[2\]"),
        ("X[i]*X[i+2]", Chain(6), r"Sx\[0\]\*Sx\[2\]"),
        ("X[0]*Z[2]*X[4]", Chain(6), r"Sx\[0\]\*Sz\[2\]\*Sx\[4\]"),
        ("n[i]*n[i+1]", Ring(5, Fermions()), r"n\[0\]\*n\[1\]"),
        ("Sz[i]", Ring(4, Spin(1)), "spin-1"),
    ],
)
def test_what_is_not_quadratic_is_named(text, sites, word):
    found = recognise({"fine": formula("0*1 + 2", sites), "bad": formula(text, sites)})
    assert not found.is_quadratic and not found.sectors
    assert re.search(word, found.obstacle) and ("'bad'" in found.obstacle) == ("spin-1" not in word)
    with pytest.raises(ValueError, match=word):
        found.forms()


def test_fermions_and_bosons():
    pairs = "-(dagger(c[i])*c[i+1] + h.c.) + 0.3*(dagger(c[i])*dagger(c[i+1]) + h.c.)"
    found = recognise({"e": formula(pairs, Ring(6, Fermions()))})
    assert found.statistics == "fermions" and not found.has_sectors
    form = found.forms()["e"]
    np.testing.assert_allclose(matrix_of(form), formula(pairs, Ring(6, Fermions())).matrix().toarray(), atol=1e-13)
    found = recognise({"n": formula("n[i]", Chain(3, Bosons()))})
    assert (found.statistics, found.representation) == ("bosons", "Quadratic in bosons: one Gaussian state.")


def test_charges_that_do_not_belong_together():
    with pytest.raises(ValueError, match="no charges"):
        recognise({})
    with pytest.raises(ValueError, match=r"'b' lives on Ring\(5\), not on Ring\(4\)"):
        recognise({"a": formula("Z[i]", Ring(4)), "b": formula("Z[i]", Ring(5))})
    with pytest.raises(ValueError, match="'a' is not Hermitian"):
        recognise({"a": formula("1j*Z[i]", Ring(4))})
