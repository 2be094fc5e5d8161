"""The canonical sum: algebra, hermiticity, range, derivatives, matrices, action, memory."""

import numpy as np
import pytest
import scipy.sparse

from maxent.errors import MaxentError, ResourceError
from maxent.lattice import Chain, Ring, formula
from tests.lattice.dense import Site, comm

L = 4
RING = Ring(L)
s = Site(L)
P = {"J": 0.7, "Delta": 1.3, "w": [1.0, 2.0, 3.0, 5.0]}
XXZ = "J*(Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Delta*Sz[i]*Sz[i+1])"


def dense(op):
    return op.matrix().toarray()


def test_algebra_agrees_with_matrices():
    a = formula("J*Splus[i]*Sz[i+1] + 2", RING, P)
    b = formula("Sx[i] - w[i]*Sy[i]", RING, P)
    for made, expected in (
        (a + b, dense(a) + dense(b)),
        (a - b, dense(a) - dense(b)),
        (a * b, dense(a) @ dense(b)),
        (-a, -dense(a)),
        (2.5 * a, 2.5 * dense(a)),
        (a * (1 - 2j), (1 - 2j) * dense(a)),
        (a / 4, dense(a) / 4),
        (np.float64(2.5) * a, 2.5 * dense(a)),
        (np.int64(3) - a, 3 * s.one - dense(a)),
        (a / (1 + 1j), dense(a) / (1 + 1j)),
        (3 - a, 3 * s.one - dense(a)),
        (a + 1j, dense(a) + 1j * s.one),
        (a.adjoint(), dense(a).conj().T),
        (a.commutator(b), comm(dense(a), dense(b))),
    ):
        np.testing.assert_allclose(dense(made), expected, atol=1e-14)
    assert a * b - b * a == a.commutator(b)
    assert (a * b).adjoint() == b.adjoint() * a.adjoint()
    assert (a - a).terms == ()
    assert (0 * a).terms == ()
    assert str(formula("Sz[i]", RING) / 3) == "1/3*Sz[i]"
    with pytest.raises(ZeroDivisionError):
        a / 0


def test_sums_have_values_and_short_names():
    op = formula("J*Sz[i]*Sz[i+1]", RING, P)
    assert op.parameters["J"] == 0.7
    assert repr(op) == "<OperatorSum of 4 words on Ring(4): J*Sz[i]*Sz[i+1]>"
    long = formula("Sx[i]*Sx[j]/abs(i-j) for i < j", RING)
    assert repr(long).endswith("...>") and len(repr(long)) < 120
    assert hash(op) == hash(formula(str(op), RING, P)) and op != "J*Sz[i]*Sz[i+1]"
    for wrong in (lambda: op.commutator(2.5 * s.one), lambda: op * "2", lambda: op - "2", lambda: op / "2"):
        with pytest.raises(TypeError):
            wrong()


def test_terms_are_canonical():
    op = formula("2*X[1]*Sz[0] + Sz[0]*Sx[1]", RING)
    (term,) = op.terms
    assert (term.positions, term.operators, str(term.coefficient)) == ((0, 1), ("Sz", "Sx"), "5")


@pytest.mark.parametrize(
    ("text", "hermitian"),
    [
        (XXZ, True),
        ("Splus[i]", False),
        ("1j*Sz[i]", False),
        ("Splus[i]*Sminus[i+1] + Sminus[i]*Splus[i+1]", True),
        ("Splus[i]*Sminus[i+1] - Sminus[i]*Splus[i+1]", False),
        ("1j*(Splus[i]*Sminus[i+1] - Sminus[i]*Splus[i+1])", True),
        ("0.1*0.7*0.3*Splus[i]*Sx[i+1] + 0.3*0.7*0.1*Sminus[i]*Sx[i+1]", True),
        ("(0.1 + 0.2 + 1e17 - 1e17 - 0.3)*1j*Sz[i] + Sx[i]", True),
        ("0.1000000000000000055*Splus[i] + 0.1*Sminus[i]", False),
        ("exp(1j*J)*Splus[i]*Sminus[i+1] + exp(-1j*J)*Sminus[i]*Splus[i+1]", True),
        ("exp(2j*pi*i/L)*Splus[i] + exp(-2j*pi*i/L)*Sminus[i]", True),
        ("exp(1j*J)*Splus[i]*Sminus[i+1] + exp(1j*J)*Sminus[i]*Splus[i+1]", False),
        ("1j*commutator(Sx[i]*Sx[i+1], Sz[i])", True),
        ("commutator(Sx[i]*Sx[i+1], Sz[i])", False),
        ("Sx[i]*Sz[i] + Sz[i]*Sx[i]", True),
        ("Sx[i]*Sz[i]", False),
        ("z*Splus[i] + h.c.", True),
        ("z*Splus[i] + z*Sminus[i]", False),
        ("z*dagger(z)*Sz[i] + (z + dagger(z))*Sx[i] + abs(z)*Sy[i]", True),
        ("2j", False),
    ],
)
def test_hermiticity_is_exact(text, hermitian):
    op = formula(text, RING, P | {"z": 0.3 + 0.4j})
    assert op.is_hermitian is hermitian
    assert (op.non_hermitian_word is None) is hermitian
    difference = abs(dense(op) - dense(op).conj().T).max()
    # literals are exact: a difference in the 17th digit is seen although no float can hold it
    assert difference < 1e-15 if hermitian or text.startswith("0.1000") else difference > 0.1


@pytest.mark.parametrize(
    ("text", "ring", "chain"),
    [
        ("3", 0, 0),
        ("Sz[i]", 1, 1),
        ("Sz[i]*Sz[i+1]", 2, 2),
        ("Sz[i]*Sz[i+2] + Sx[i]", 3, 3),
        ("Sz[0]*Sz[7]", 2, 8),
        ("Sz[0]*Sz[4]", 5, 5),
        ("Sz[0]*Sz[1]*Sz[6]", 4, 7),
        ("Sz[i]*Sz[j] for i < j", 5, 8),
        ("Sz[i]*Sz[i+1] - Sz[i]*Sz[i+1]", 0, 0),
    ],
)
def test_range(text, ring, chain):
    assert formula(text, Ring(8)).range == ring
    assert formula(text, Chain(8)).range == chain


def test_derivatives_agree_with_differences():
    text = "J**2*Sz[i] + exp(-Delta*J)*Sx[i] + J/(J+Delta)*Sy[i] + sqrt(J)*w[i]**2*Sz[i]*Sz[i+1]"
    text += " + cos(J*w[i])*sin(Delta)*log(J)*abs(J-2)*X[i]"
    op = formula(text, RING, P)
    step = 1e-6
    for name in ("J", "Delta"):
        up, down = (dense(op.with_parameters(**{name: P[name] + sign * step})) for sign in (1, -1))
        np.testing.assert_allclose(dense(op.derivative(name)), (up - down) / (2 * step), atol=1e-8)
    up, down = (dense(op.with_parameters(w=[1, 2, 3 + sign * step, 5])) for sign in (1, -1))
    np.testing.assert_allclose(dense(op.derivative("w", 2)), (up - down) / (2 * step), atol=1e-8)
    assert op.derivative("J").derivative("Delta") == op.derivative("Delta").derivative("J")
    assert formula(XXZ, RING, P).derivative("Delta") == formula("J*Sz[i]*Sz[i+1]", RING, P)


def test_new_parameters_equal_a_new_formula():
    op = formula(XXZ, RING, P).with_parameters(J=2.0, Delta=0.0)
    assert op == formula(XXZ, RING, P | {"J": 2.0, "Delta": 0.0})
    assert op != formula(XXZ, RING, P)


def test_parameters_refuse_what_they_cannot_be():
    op = formula("w[i]*Sz[i]*Sz[i+r] + J*Sx[i] + (z*Splus[i] + h.c.)", RING, P | {"r": 1, "z": 1j})
    with pytest.raises(ValueError, match="unknown parameter 'K'; known: J"):
        op.derivative("K")
    with pytest.raises(ValueError, match="parameter 'w' needs a position"):
        op.derivative("w")
    with pytest.raises(ValueError, match=r"no position 4 \(0..3\)"):
        op.derivative("w", 4)
    with pytest.raises(ValueError, match="parameter 'J' needs no position"):
        op.derivative("J", 0)
    with pytest.raises(ValueError, match="'r' decides positions"):
        op.derivative("r")
    with pytest.raises(ValueError, match="'r' decides positions"):
        op.with_parameters(r=2)
    with pytest.raises(ValueError, match="'z' is complex"):
        op.derivative("z")
    with pytest.raises(ValueError, match="'J' was real .* cannot become complex"):
        op.with_parameters(J=1j)
    with pytest.raises(ValueError, match="'w' needs 4 values, not 3"):
        op.with_parameters(w=[1, 2, 3])
    with pytest.raises(ValueError, match="'w' was a list and cannot become a single number"):
        op.with_parameters(w=1)
    with pytest.raises(ValueError, match="'J' is not finite"):
        op.with_parameters(J=float("nan"))
    with pytest.raises(TypeError, match="'J' must be a number"):
        op.with_parameters(J="2")


def test_a_coefficient_without_a_value_is_named():
    op = formula("Sz[i]/J + sqrt(J)*Sx[i]", RING, {"J": 1.0})
    with pytest.raises(ValueError, match=r"coefficient J\*\*-1 has no value"):
        op.with_parameters(J=0.0).matrix()
    for text in ("Sz[i]/small", "big*big*Sz[i]", "big**2*Sz[i]"):
        with pytest.raises(ValueError, match=r"^coefficient .* leaves the range of floating point$"):
            formula(text, RING, {"small": 1e-310, "big": 1e200}).matrix()
    with pytest.raises(ValueError, match=r"coefficient sqrt\(J\) has no value: sqrt of -1"):
        op.with_parameters(J=-1.0).matrix()


def test_sums_on_different_sites_or_values_do_not_mix():
    op = formula(XXZ, RING, P)
    with pytest.raises(ValueError, match="different sites"):
        op + formula("Sz[i]", Chain(4))
    with pytest.raises(ValueError, match="parameter 'J' has two values: 0.7 and 1.0"):
        op + formula("J*Sz[i]", RING, {"J": 1.0})
    with pytest.raises(TypeError):
        op + "Sz[i]"
    with pytest.raises(ValueError, match="cannot be combined with nan"):
        op + float("nan")


# --- matrices


def test_matrix_is_sparse_sorted_and_real_when_it_can_be():
    energy = formula(XXZ, Ring(8), P).matrix()
    assert isinstance(energy, scipy.sparse.csr_array)
    assert energy.dtype == np.float64
    assert energy.has_canonical_format
    assert np.all(energy.data != 0)
    # XX + YY only exchanges unlike neighbours: half of the states on every bond
    diagonal = np.count_nonzero(energy.diagonal())
    assert energy.nnz - diagonal == 8 * 2**8 // 2
    assert formula("Sy[i]*Sy[i+1]", Ring(8)).matrix().dtype == np.float64
    assert formula("Sy[i]", Ring(8)).matrix().dtype == np.complex128
    assert formula("0", Ring(8)).matrix().nnz == 0


def test_entries_that_vanish_by_symmetry_are_not_stored():
    # couplings that differ from bond to bond and add up in a different order for xx and yy
    parameters = {"a": [0.1, 0.2, 0.3, 0.7, 1.1, 1.3], "b": [0.3, 1 / 3, 0.9, 2.1, 0.11, 5.0]}
    text = "a[i]*Sx[i]*Sx[i+1] + (b[i]*Sx[i]*Sx[i+1] + 0.7*Sx[i]*Sx[i+1])"
    text += " + 0.7*Sy[i]*Sy[i+1] + (a[i] + b[i])*Sy[i]*Sy[i+1]"
    text += " + a[i]*(Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1])*(Sz[i-1] + b[i]*Sz[i+2])"
    op = formula(text, Ring(6), parameters)
    up = np.array([bin(n).count("1") for n in range(64)])
    rows, columns = op.matrix().nonzero()
    assert np.array_equal(up[rows], up[columns])


def test_action_is_the_matrix_without_the_matrix():
    rng = np.random.default_rng(5)
    for text in (XXZ, "1j*commutator(Sx[i]*Sx[i+1], Sz[i+1]*Sz[i+2]) + Sy[i] + 2"):
        op = formula(text, Ring(7), P)
        vector = rng.normal(size=128)
        block = rng.normal(size=(128, 3)) + 1j * rng.normal(size=(128, 3))
        np.testing.assert_allclose(op.action(vector), op.matrix() @ vector, atol=1e-13)
        np.testing.assert_allclose(op.action(block), op.matrix() @ block, atol=1e-13)
    assert formula(XXZ, Ring(7), P).action(vector).dtype == np.float64
    with pytest.raises(ValueError, match=r"needs 2\^7 rows"):
        op.action(np.ones(64))


def test_chunks_join_seamlessly(monkeypatch):
    from maxent.lattice import matrices

    op = formula(XXZ + " + Sy[i]", Ring(6), P)
    whole = op.matrix()
    vector = np.arange(64.0)
    monkeypatch.setattr(matrices, "_CHUNK", 8)
    monkeypatch.setattr(matrices, "_ACTION_CHUNK", 16)
    assert (op.matrix() != whole).nnz == 0
    np.testing.assert_allclose(op.action(vector), whole @ vector, rtol=1e-14)


def test_norm_bound_holds_and_is_reached_by_single_words():
    for text in (XXZ, "Sz[i]", "X[0]*Y[1]", "Sx[i] + 1j*Sz[i]"):
        op = formula(text, RING, P)
        norm = np.linalg.norm(dense(op), 2)
        assert norm <= op.norm_bound * (1 + 1e-12)
        if text in ("Sz[i]", "X[0]*Y[1]"):
            assert norm == pytest.approx(op.norm_bound, rel=1e-12)


def test_too_large_a_matrix_is_refused_before_anything_is_allocated():
    op = formula("J*Sz[i]*Sz[i+1]", Ring(30), P)
    # one diagonal: 2^30 float64 + 2^30 int32 + 2^30 row starts = 16 GiB and a little scratch space
    with pytest.raises(
        ResourceError, match=r"^2\^30 states need 16 GiB for this operator; available 8 GiB$"
    ) as caught:
        op.matrix(limit=8 * 2**30)
    assert isinstance(caught.value, MaxentError) and isinstance(caught.value, MemoryError)
    with pytest.raises(ResourceError, match=r"^2\^200 states need .* EiB"):
        formula("Sx[i]", Ring(200)).matrix()


def test_the_limit_is_the_memory_needed():
    op = formula(XXZ, Ring(8), P)
    with pytest.raises(ResourceError) as caught:
        op.matrix(limit=1000)
    assert str(caught.value).endswith("available 1e+03 bytes")
    assert op.matrix(limit=10**6).shape == (256, 256)


def test_available_memory_is_known_here():
    from maxent.memory import available_memory, size_text

    free = available_memory()
    assert free is None or 0 < free < 2**50
    assert size_text(48 * 2**30) == "48 GiB"
    assert size_text(512) == "512 bytes"


def test_sites_check_their_size():
    assert (Ring(3).dims, Chain(2).dims) == ((2, 2, 2), (2, 2))
    with pytest.raises(ValueError, match="Ring: the number of sites must be at least 1, not 0"):
        Ring(0)
    with pytest.raises(TypeError, match="Chain: the number of sites must be an integer, not 2.0"):
        Chain(2.0)
    with pytest.raises(TypeError, match="must be an integer, not True"):
        Ring(True)
