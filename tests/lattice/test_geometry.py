"""Unit cells, bonds and lattices: the same sums written out site by site, and refusals."""

import numpy as np
import pytest

from maxent.errors import FormulaError
from maxent.lattice import Bosons, Chain, Fermions, Lattice, Ring, Spin, formula, position_values
from tests.lattice.dense import Site, embedded, fermion, spin

LADDER = {"rungs": [("a", "b")], "legs": [("a", "a", 1), ("b", "b", 1)]}
P = {"J": 0.7, "K": -0.4, "cells": [1.0, 2.0, 3.0], "sites": [0.1, 0.2, 0.3, 0.4, 0.5, 0.6]}


def matrix(text, sites, parameters=P, densities=None):
    op = formula(text, sites, parameters, densities)
    assert formula(str(op), sites, parameters) == op
    return op.matrix().toarray()


def ladder(kind=Ring):
    return kind(3, cell=("a", "b"), bonds=LADDER)


s = Site(6)  # site of (cell, a) = 2 cell, of (cell, b) = 2 cell + 1


def zz(i, j, name="Sz"):
    return s(name, i) @ s(name, j)


CELLS = {
    "Sz[i, a]": s("Sz", 0) + s("Sz", 2) + s("Sz", 4),
    "Sz[1, b]": s("Sz", 3),
    "Sx[i, a]*Sx[i+1, b]": zz(0, 3, "Sx") + zz(2, 5, "Sx") + zz(4, 1, "Sx"),
    "J*Sz[x]*Sz[y] for <x, y> in rungs": 0.7 * (zz(0, 1) + zz(2, 3) + zz(4, 5)),
    "Sz[x]*Sz[y] for <x, y> in legs": zz(0, 2) + zz(1, 3) + zz(2, 4) + zz(3, 5) + zz(4, 0) + zz(5, 1),
    "(Sz[x]*Sz[y] for <x, y>) + K*Sx[i, b]": zz(0, 1)
    + zz(2, 3)
    + zz(4, 5)
    + zz(0, 2)
    + zz(1, 3)
    + zz(2, 4)
    + zz(3, 5)
    + zz(4, 0)
    + zz(5, 1)
    - 0.4 * (s("Sx", 1) + s("Sx", 3) + s("Sx", 5)),
    "cells[i]*Sz[i, b]": s("Sz", 1) + 2 * s("Sz", 3) + 3 * s("Sz", 5),
    "cells[i+1]*Sz[i, b]": 2 * s("Sz", 1) + 3 * s("Sz", 3) + s("Sz", 5),
    "sites[i, b]*Sz[i, a]": 0.2 * s("Sz", 0) + 0.4 * s("Sz", 2) + 0.6 * s("Sz", 4),
    "sites[1, a]*Sz[i, a]": 0.3 * (s("Sz", 0) + s("Sz", 2) + s("Sz", 4)),
    "sites[x]*Sz[y] for <x, y> in rungs": 0.1 * s("Sz", 1) + 0.3 * s("Sz", 3) + 0.5 * s("Sz", 5),
    "x*Sz[x]*Sz[y] for <x, y> in rungs": 2 * zz(2, 3) + 4 * zz(4, 5),
    "L*Sz[0, a]": 3 * s("Sz", 0),
    "(Splus[x]*Sminus[y] + h.c. for <x, y> in rungs)/2": zz(0, 1, "Sx")
    + zz(0, 1, "Sy")
    + zz(2, 3, "Sx")
    + zz(2, 3, "Sy")
    + zz(4, 5, "Sx")
    + zz(4, 5, "Sy"),
}


@pytest.mark.parametrize("text", CELLS)
def test_cells_and_bonds_of_a_ladder(text):
    np.testing.assert_allclose(matrix(text, ladder()), CELLS[text], atol=1e-14)


def test_open_ladders_leave_bonds_out():
    expected = zz(0, 2) + zz(1, 3) + zz(2, 4) + zz(3, 5)
    np.testing.assert_allclose(matrix("Sz[x]*Sz[y] for <x, y> in legs", ladder(Chain)), expected, atol=1e-14)
    np.testing.assert_allclose(matrix("Sz[i, a]*Sz[i+1, b]", ladder(Chain)), zz(0, 3) + zz(2, 5), atol=1e-14)
    assert ladder(Chain).bonds["rungs"] == ((0, 1), (2, 3), (4, 5))


def test_a_dimerised_chain_is_one_chain():
    # the cell (a, b) with bonds a-b and b-a': the same as alternating couplings on one chain
    sites = Chain(3, cell=("a", "b"), bonds={"strong": [("a", "b")], "weak": [("b", "a", 1)]})
    cells = formula("(J*Sz[x]*Sz[y] for <x, y> in strong) + (K*Sz[x]*Sz[y] for <x, y> in weak)", sites, P)
    plain = formula("w[i]*Sz[i]*Sz[i+1]", Chain(6), {"w": [0.7, -0.4, 0.7, -0.4, 0.7]})
    assert abs(cells.matrix() - plain.matrix()).max() < 1e-15
    assert (cells.range, plain.range) == (2, 2)


def test_default_bonds_are_the_neighbours():
    for sites in (Ring(5), Chain(5), Ring(2), Chain(1)):
        assert formula("J*Sz[a]*Sz[b] for <a, b>", sites, P) == formula("J*Sz[i]*Sz[i+1]", sites, P)
    further = Ring(6, bonds={"near": [1], "far": [2, 3]})
    assert formula("Sz[a]*Sz[b] for <a, b> in far", further) == formula("Sz[i]*Sz[i+2] + Sz[i]*Sz[i+3]", further)
    # on one site per cell the end of a bond is a position
    assert formula("h[a]*Sz[b+1] for <a, b>", Ring(5), densities={"h": "Sx[i]*Sx[i+1]"}) == formula(
        "Sx[i]*Sx[i+1]*Sz[i+2]", Ring(5)
    )


def test_cells_of_different_kinds():
    sites = Chain(2, {"e": Fermions("up", "down"), "s": Spin(1)})
    assert (sites.size, sites.dims) == (4, (4, 3, 4, 3))
    dims = (2, 2, 3, 2, 2, 3)

    def c(slot):
        # strings pass over fermion modes only
        place = {0: 0, 1: 1, 3: 2, 4: 3}[slot]
        factors = [np.eye(d) for d in dims]
        for other, k in {0: 0, 1: 1, 3: 2, 4: 3}.items():
            factors[other] = np.diag([1, -1]) if k < place else factors[other]
        factors[slot] = np.array([[0, 1], [0, 0]])
        out = np.eye(1)
        for f in factors:
            out = np.kron(out, f)
        return out

    np.testing.assert_array_equal(matrix("c[1, e, down]", sites), c(4))
    hop = c(0).T @ c(3)
    np.testing.assert_array_equal(matrix("dagger(c[i, e, up])*c[i+1, e, up] + h.c.", sites), hop + hop.T)
    flip = sum(c(k).T @ c(k + 1) @ embedded(spin(1)["Sminus"], k + 2, dims) for k in (0, 3))
    text = "J*dagger(c[i, e, up])*c[i, e, down]*Sminus[i, s] + h.c."
    np.testing.assert_allclose(matrix(text, sites), 0.7 * (flip + flip.T), atol=1e-14)
    op = formula(text, sites, P)
    total = formula("n[i, e, up]/2 - n[i, e, down]/2 + Sz[i, s]", sites)
    assert op.commutator(total).terms == ()


def test_spinful_ring_by_hand():
    sites = Ring(3, Fermions("up", "down"))
    c = [fermion(k, 6) for k in range(6)]
    hop = sum(c[2 * i + k].T @ c[2 * ((i + 1) % 3) + k] for i in range(3) for k in (0, 1))
    onsite = sum(c[2 * i].T @ c[2 * i] @ c[2 * i + 1].T @ c[2 * i + 1] for i in range(3))
    text = "J*(dagger(c[a, up])*c[b, up] + dagger(c[a, down])*c[b, down] + h.c. for <a, b>) + K*n[i, up]*n[i, down]"
    np.testing.assert_allclose(matrix(text, sites), 0.7 * (hop + hop.T) - 0.4 * onsite, atol=1e-14)


def test_a_cell_of_one_named_site_needs_no_name():
    for sites in (Ring(3, {"a": Spin(1)}), Ring(3, cell=("a",)), Ring(3, cell="a")):
        op = formula("J*Sz[i]*Sz[i+1] + K*Sx[1]", sites, P)
        assert formula(str(op), sites, P) == op
        assert formula("Sz[x]*Sz[y] for <x, y>", sites) == formula("Sz[i]*Sz[i+1]", sites)


def test_derivatives_by_entries_of_a_list_per_site():
    op = formula("sites[i, a]**2*Sz[i, b] + (sites[x]*Sx[x]*Sx[y] for <x, y> in rungs)", ladder(), P)
    found = op.derivative("sites", 2)  # site 2 is (1, a)
    assert found == formula("2*sites[1, a]*Sz[1, b] + Sx[1, a]*Sx[1, b]", ladder(), P)
    hop = formula("w[i]*(dagger(c[i])*c[i+1] + h.c.)", Ring(3, Fermions()), {"w": [1, 2, 3]})
    assert hop.derivative("w", 2) == formula("dagger(c[2])*c[0] + h.c.", hop.sites)


# --- lattices given by bonds


def test_heisenberg_on_a_tetrahedron():
    # all pairs of 4 spins: H = (S(S+1) - 4 * 3/4) / 2, S = 0 (2 times 1), 1 (3 times 3), 2 (5)
    sites = Lattice(4, {"edges": [(a, b) for a in range(4) for b in range(a + 1, 4)]})
    found = np.linalg.eigvalsh(matrix("Sx[a]*Sx[b] + Sy[a]*Sy[b] + Sz[a]*Sz[b] for <a, b>", sites))
    np.testing.assert_allclose(found, [-1.5] * 2 + [-0.5] * 9 + [1.5] * 5, atol=1e-13)
    assert formula("Sx[a]*Sx[b] for <a, b>", sites).range == 2


def test_named_bonds_of_a_rectangle():
    sites = Lattice.grid(3, 2, wrap=(True, False))
    assert sites.bonds["along"] == ((0, 1), (1, 2), (2, 0), (3, 4), (4, 5), (5, 3))
    assert sites.bonds["across"] == ((0, 3), (1, 4), (2, 5))
    expected = sum(zz(a, b, "Sx") for a, b in sites.bonds["along"]) + 0.7 * sum(
        zz(a, b) for a, b in sites.bonds["across"]
    )
    text = "(Sx[a]*Sx[b] for <a, b> in along) + (J*Sz[a]*Sz[b] for <a, b> in across) + K*Sy[i] + (-1)**i*Sx[i]"
    expected = expected + sum(-0.4 * s("Sy", i) + (-1) ** i * s("Sx", i) for i in range(6))
    np.testing.assert_allclose(matrix(text, sites), expected, atol=1e-14)
    np.testing.assert_allclose(matrix("sites[i]*Sz[i]", sites), sum(P["sites"][i] * s("Sz", i) for i in range(6)))
    np.testing.assert_allclose(
        matrix("e[a]*e[b] for <a, b> in across", sites, densities={"e": "Sz[i] + 0.5"} ),
        sum((s("Sz", a) + s.one / 2) @ (s("Sz", b) + s.one / 2) for a, b in sites.bonds["across"]),
    )  # fmt: skip


def test_bonds_keep_their_direction():
    sites = Lattice(3, {"arrows": [(0, 1), (2, 1)]}, Fermions())
    found = matrix("1j*dagger(c[a])*c[b] + h.c. for <a, b>", sites)
    half = 1j * (fermion(0, 3).T @ fermion(1, 3) + fermion(2, 3).T @ fermion(1, 3))
    np.testing.assert_allclose(found, half + half.conj().T)


def test_two_dimensional_wrap_of_two_does_not_double_bonds():
    assert Lattice.grid(2, 2, wrap=(True, True)).bonds == {"along": ((0, 1), (2, 3)), "across": ((0, 2), (1, 3))}


def test_sites_compare_and_show_themselves():
    assert ladder() == ladder() and ladder() != Ring(3, cell=("a", "b")) and hash(ladder()) == hash(ladder())
    assert repr(Ring(4)) == "Ring(4)" and repr(Chain(3, Spin(1))) == "Chain(3, Spin(1))"
    assert repr(ladder()) == "Ring(3, cell=('a', 'b'), bonds rungs: 3, legs: 6)"
    assert (
        repr(Lattice.grid(2, 2, kind=Bosons(cutoff=2)))
        == "Lattice(4, along: 2 bonds, across: 2 bonds, Bosons(cutoff=2))"
    )
    assert repr(Ring(2, {"x": Spin(1), "y": Fermions()})) == "Ring(2, {'x': Spin(1), 'y': Fermions()})"
    np.testing.assert_array_equal(position_values("2*i", ladder()), [0, 2, 4])
    with pytest.raises(ValueError, match="different sites"):
        formula("Sz[i, a]", ladder()) + formula("Sz[i, a]", ladder(Chain))


# --- refusals


@pytest.mark.parametrize(
    ("make", "error", "message"),
    [
        (lambda: Ring(0), ValueError, "^Ring: the number of sites must be at least 1, not 0$"),
        (lambda: Ring(3, cell=("a", "a")), ValueError, "^Ring: two site names are equal: a, a$"),
        (lambda: Ring(3, cell=("a", "b c")), ValueError, "^Ring: the name of a site must be a plain word, not 'b c'$"),
        (lambda: Ring(3, {}), ValueError, "^Ring: a unit cell has at least one site$"),
        (lambda: Ring(3, {"a": 1}), TypeError, "^Ring: expected Spin"),
        (lambda: Ring(3, {"a": Spin(1)}, cell=("b",)), ValueError, "do not name the same sites"),
        (lambda: Chain(3, cell={"a": Spin(1)}), TypeError, "^Chain: cell takes names; a mapping of names to kinds"),
        (lambda: Ring(3, bonds=[(0, 1)]), TypeError, "^Ring: bonds are given by name"),
        (lambda: Ring(3, bonds={"x": [0]}), ValueError, "^Ring: bond 0 of 'x' joins a site with itself$"),
        (lambda: Ring(3, bonds={"x": ["a"]}), ValueError, "^Ring: bond 'a' of 'x' is no bond: expected a shift"),
        (lambda: Ring(3, bonds={"x y": [1]}), ValueError, "^Ring: the name of a bond must be a plain word"),
        (lambda: Ring(3, cell=("a", "b"), bonds={"x": [1]}), ValueError, r"expected \(site, site\) or \(site"),
        (lambda: Ring(3, cell=("a", "b"), bonds={"x": [("a", "c")]}), ValueError, "^Ring: bond .* is no bond"),
        (lambda: Lattice(3, {"x": [(0, 3)]}), ValueError, r"^Lattice: bond \(0, 3\) of 'x': sites run from 0 to 2$"),
        (lambda: Lattice(3, {"x": [(1, 1)]}), ValueError, "joins a site with itself$"),
        (lambda: Lattice(3, {"x": [(0, 1), (1, 0)]}), ValueError, r"^Lattice: bond \(1, 0\) of 'x' occurs twice$"),
        (lambda: Lattice(3, {"x": [(0,)]}), ValueError, r"^Lattice: bond \(0,\) of 'x' is no pair of site numbers$"),
        (lambda: Lattice(3, [(0, 1)]), TypeError, "^Lattice: bonds are given by name"),
        (lambda: Lattice(3, {}, {"a": Spin(1)}), TypeError, "^Lattice: one kind for all sites"),
        (lambda: Lattice.grid(0, 2), ValueError, "^Lattice.grid: columns and rows must be .* from 1 on, not 0$"),
    ],
)  # fmt: skip
def test_unusable_sites(make, error, message):
    with pytest.raises(error, match=message) as caught:
        make()
    assert "\n" not in str(caught.value)


KONDO = Ring(3, {"e": Fermions("up", "down"), "s": Spin(1)}, bonds={"x": [("e", "s")]})


@pytest.mark.parametrize(
    ("sites", "text", "column", "message"),
    [
        (ladder(), "Sz[i]", 4, r"'Sz' needs a site of the unit cell: write 'Sz\[..., a\]' \(sites: a, b\)"),
        (ladder(), "Sz[i, c]", 7, "unknown site of the unit cell; expected a or b"),
        (ladder(), "Sz[i, 1]", 7, "unknown site of the unit cell"),
        (ladder(), "Sz[i, a, b]", 10, "spin-1/2 operators have two subscripts"),
        (ladder(), "Sz[3, a]", 4, "subscript 3 is out of range: positions run from 0 to 2"),
        (ladder(), "sites[i]*Sz[i, a]", 1, r"parameter 'sites' has one value per site: write 'sites\[i, a\]'"),
        (ladder(), "cells[i, a]*Sz[i, a]", 1, "parameter 'cells' has 3 values, but there are 6 sites"),
        (ladder(), "sites[i, a, b]*Sz[i, a]", 13, "parameter 'sites' has one subscript less"),
        (ladder(), "cells[x]*Sz[x]*Sz[y] for <x, y>", 1, "parameter 'cells' has 3 values, but there are 6 sites"),
        (ladder(), "Sz[x, a]*Sz[y] for <x, y>", 7, "the end of a bond is a site already: leave its name out"),
        (ladder(), "Sz[x+1]*Sz[y] for <x, y>", 4, "the end of a bond is a site: there is no arithmetic with it"),
        (ladder(), "e[x]*Sz[y] for <x, y>", 3, "density 'e' has a position, not the end of a bond"),
        (ladder(), "e[i, a]", 6, "density 'e' has one subscript"),
        (ladder(), "Sz[x]*Sz[y] for <x, y> in rung", 27, "unknown bonds 'rung'; expected rungs, legs"),
        (ladder(), "Sz[x]*Sz[x] for <x, y>", 1, "this summand does not carry 'y'"),
        (ladder(), "Sz[x]*Sz[y] for <x, x>", 21, "the two subscripts behind 'for' must differ"),
        (ladder(), "Sz[x]*Sz[y] for <x, J>", 21, "'J' has a meaning already"),
        (ladder(), "(Sz[x]*Sz[y] for <x, y>) + Sz[x, a]*Sz[y, a]", 37, "two free subscripts"),
        (ladder(), "(Sz[x]*Sz[y] for <x, y>) + Sz[x]", 31, "'Sz' needs a site of the unit cell"),
        (Ring(3, cell=("a", "b")), "Sz[x]*Sz[y] for <x, y>", 18, r"has no bonds: give bonds=\{'name': \[...\]\}"),
        (Lattice(3, {"x": [(0, 1)]}), "Sz[i]*Sz[i+1]", 10, "the sites of a lattice have no order: use bonds"),
        (Lattice(3, {"x": [(0, 1)]}), "Sz[3]", 4, "subscript 3 is out of range"),
        (Lattice(3, {"x": [(0, 1)]}), "sites[i]*Sz[i]", 1, "parameter 'sites' has 6 values, but there are 3 positions"),
        (KONDO, "Sz[i, e]", 4, r"'Sz' does not exist on a fermion \(up, down\) site"),
        (KONDO, "c[i, e]", 3, "'c' needs a species"),
        (KONDO, "c[i, s, up]", 3, "'c' does not exist on a spin-1 site"),
        (KONDO, "c[x, up]*Sz[y] + c[y, up]*c[x, up] for <x, y>", 18, r"site 1 is a spin-1 site: it has no 'c\[\.\.\."),
    ],
)  # fmt: skip
def test_refusals_with_their_column(sites, text, column, message):
    with pytest.raises(FormulaError, match=message) as caught:
        formula(text, sites, P, {"e": "Sz[i, a]"})
    assert caught.value.column == column and "\n" not in str(caught.value)
