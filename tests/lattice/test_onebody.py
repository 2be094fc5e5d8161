"""One-body matrices of quadratic sums against many-body spectra and closed forms."""

from itertools import product

import numpy as np
import pytest

from maxent.lattice import Bosons, Chain, Fermions, Lattice, Ring, Spin, formula

HOPPING = "-t*(exp(1j*phi)*dagger(c[i])*c[i+1] + h.c.) + w[i]*n[i]"


def filled(energies, constant=0.0):
    """All many-body levels of fermion modes."""
    return np.sort([constant + sum(e for e, n in zip(energies, ns, strict=True) if n)
                    for ns in product((0, 1), repeat=len(energies))])  # fmt: skip


def test_modes_give_all_levels():
    parameters = {"t": 0.8, "phi": 0.3, "w": [0.1, -0.4, 0.9, 0.2, 0.0]}
    op = formula(f"{HOPPING} + 0.7", Ring(5, Fermions()), parameters, hermitian=True)
    found = op.one_body()
    assert (found.statistics, found.pairing, found.constant) == ("fermions", None, 0.7)
    # A_st multiplies dagger(c_s) c_t, also around the ring
    assert found.matrix[0, 1] == pytest.approx(-0.8 * np.exp(0.3j))
    assert found.matrix[4, 0] == pytest.approx(-0.8 * np.exp(0.3j))
    np.testing.assert_array_equal(found.matrix, found.matrix.conj().T)
    levels = np.linalg.eigvalsh(op.matrix().toarray())
    np.testing.assert_allclose(levels, filled(np.linalg.eigvalsh(found.matrix), 0.7), atol=1e-12)


def test_pairing_gives_all_levels():
    # levels of H = sum A + (B + h.c.)/2: +- e / 2 around the constant + tr A / 2, e from [[A, B], [-B*, -A*]]
    sites = Ring(4, Fermions())
    text = "-(dagger(c[i])*c[i+1] + h.c.) + (D*dagger(c[i])*dagger(c[i+1]) + h.c.) - m*n[i] + 1j*(c[0]*c[2] + "
    text += "dagger(c[0])*dagger(c[2]))"
    op = formula(text, sites, {"D": 0.4 + 0.3j, "m": 0.6}, hermitian=True)
    form = op.one_body()
    A, B = form.matrix, form.pairing
    np.testing.assert_allclose(B, -B.T)
    # at (0, 1): D from the bond 0-1; at (0, 3): -D from the bond 3-0
    assert B[0, 1] == B[3, 0] == 0.4 + 0.3j and B[0, 2] == 1j
    both = np.linalg.eigvalsh(np.block([[A, B], [-B.conj(), -A.conj()]]))
    e = both[4:]
    expected = filled(e, form.constant + np.trace(A).real / 2 - e.sum() / 2)
    np.testing.assert_allclose(np.linalg.eigvalsh(op.matrix().toarray()), expected, atol=1e-12)


def test_species_are_modes():
    text = "-(dagger(c[i, up])*c[i+1, up] + h.c.) + (g*dagger(c[i, up])*c[i, down] + h.c.) + m*n[i, down]"
    op = formula(text, Chain(2, Fermions("up", "down")), {"g": 0.5j, "m": 0.3}, hermitian=True)
    form = op.one_body()
    assert form.modes == ((0, "up"), (0, "down"), (1, "up"), (1, "down"))
    expected = [[0, 0.5j, -1, 0], [-0.5j, 0.3, 0, 0], [-1, 0, 0, 0.5j], [0, 0, -0.5j, 0.3]]
    np.testing.assert_allclose(form.matrix, expected)
    np.testing.assert_allclose(np.linalg.eigvalsh(op.matrix().toarray()), filled(np.linalg.eigvalsh(form.matrix)),
                               atol=1e-12)  # fmt: skip


def test_a_square_of_fermions():
    grid = Lattice.grid(3, 3, wrap=(True, True), kind=Fermions())
    found = formula("-(dagger(c[a])*c[b] + h.c.) for <a, b>", grid).one_body()
    k = 2 * np.pi * np.arange(3) / 3
    expected = np.sort((-2 * np.cos(k)[:, None] - 2 * np.cos(k)[None, :]).ravel())
    np.testing.assert_allclose(np.linalg.eigvalsh(found.matrix), expected, atol=1e-12)


def test_bosons_need_no_cut_off():
    # two-mode squeezing: w (a+a + b+b) + g (a+b+ + ab) has the frequencies sqrt(w^2 - g^2)
    text = "w*n[i] + (g*dagger(b[0])*dagger(b[1]) + h.c.) + 0.2*(b[0]*b[0] + h.c.) + b[0]*dagger(b[0])"
    form = formula(text, Chain(2, Bosons()), {"w": 1.5, "g": 0.4}, hermitian=True).one_body()
    np.testing.assert_allclose(form.matrix, np.diag([2.5, 1.5]))
    # dagger(b_0)^2 stands behind 1/2 once, dagger(b_0) dagger(b_1) twice
    np.testing.assert_allclose(form.pairing, [[0.4, 0.4], [0.4, 0]])
    assert (form.statistics, form.constant) == ("bosons", 1.0)
    plain = formula("n[i] + (g*dagger(b[0])*dagger(b[1]) + h.c.)", Chain(2, Bosons()), {"g": 0.4}).one_body()
    dynamic = np.block([[plain.matrix, plain.pairing], [-plain.pairing, -plain.matrix]])
    np.testing.assert_allclose(np.sort(np.linalg.eigvals(dynamic).real)[2:], np.sqrt(1 - 0.4**2))
    # ground energy of the compression tends to (frequencies - tr A) / 2
    low = formula("n[i] + (g*dagger(b[0])*dagger(b[1]) + h.c.)", Chain(2, Bosons(cutoff=14)), {"g": 0.4}).matrix()
    assert np.linalg.eigvalsh(low.toarray())[0] == pytest.approx(np.sqrt(1 - 0.4**2) - 1, abs=1e-6)


def test_values_of_the_parameters_decide():
    op = formula("t*(dagger(c[i])*c[i+1] + h.c.) + V*n[i]*n[i+1]", Ring(4, Fermions()), {"t": 1.0, "V": 0.0})
    assert op.one_body().matrix[0, 1] == 1.0
    with pytest.raises(ValueError, match=r"^one_body: not quadratic: it holds n\[0\]\*n\[1\] with the coefficient V$"):
        op.with_parameters(V=0.5).one_body()
    # products that are quadratic after all
    again = formula("n[i]**2 + anticommutator(c[0], dagger(c[0]))", Ring(3, Fermions())).one_body()
    np.testing.assert_array_equal(again.matrix, np.eye(3))
    assert again.constant == 1.0


@pytest.mark.parametrize(
    ("kind", "text", "message"),
    [
        (Fermions(), "c[i] + h.c.", r"^one_body: not quadratic: it holds dagger\(c\[0\]\) with the coefficient 1$"),
        (Fermions(), "dagger(c[i])*c[i+1]", r"^one_body: not Hermitian: it holds "),
        (Fermions(), "dagger(c[0])*n[1]*c[2] + h.c.", r"it holds dagger\(c\[0\]\)\*n\[1\]\*c\[2\] with the"),
        (Bosons(), "n[i] + n[i]**2", r"it holds dagger\(b\[0\]\)\*\*2\*b\[0\]\*\*2 with the coefficient 1$"),
        (Bosons(), "b[i] + h.c.", r"not quadratic: it holds b\[0\] with the coefficient 1$"),
        (Spin("1/2"), "Sz[i]", "^one_body: spin-1/2 sites have no one-body matrix$"),
        ({"a": Bosons(), "c": Fermions()}, "n[i, a]", "^one_body: fermions and bosons together have no one-body"),
    ],
)
def test_what_is_not_quadratic_is_named(kind, text, message):
    with pytest.raises(ValueError, match=message) as caught:
        formula(text, Ring(3, kind)).one_body()
    assert "\n" not in str(caught.value)
