"""Product states: words against amplitudes, patterns, functions of the position, refusals."""

import numpy as np
import pytest

from maxent.errors import FormulaError, ResourceError
from maxent.lattice import Chain, ProductState, Ring, formula
from tests.lattice.dense import Site

RING = Ring(6)
OPERATORS = [
    "Sx[i]",
    "Sy[i]*Sz[i+1]",
    "w*(Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1]) + Sz[i]*Sz[i+2] + 0.7",
    "1j*commutator(Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1], Sx[i+1]*Sx[i+2] + Sz[i+1]*Sz[i+2])",
    "Sz[0]*Sx[2]*Sy[3]",
    "Sx[i]*Sx[j]/abs(i-j) for i < j",
    "3",
]
STATES = {
    "constant": (0.7, -1.1),
    "pattern": ([0.3, 2.0], [0.1, 0.2, 0.3]),
    "function": ("pi/3 + 0.1*cos(2*pi*i/L)", "2*pi*i/L"),
    "up": (0.0, 0.0),
    "in the plane": ("pi/2", 0.0),
}


@pytest.mark.parametrize("angles", STATES.values(), ids=STATES)
@pytest.mark.parametrize("text", OPERATORS)
def test_mean_and_variance_agree_with_the_vector(text, angles):
    state = ProductState(RING, *angles)
    op = formula(text, RING, {"w": 0.8})
    vector = state.vector()
    applied = op.matrix() @ vector
    mean = np.vdot(vector, applied)
    assert np.linalg.norm(vector) == pytest.approx(1, abs=1e-14)
    assert state.mean(op) == pytest.approx(mean.real, abs=1e-14)
    assert state.variance(op) == pytest.approx(np.vdot(applied, applied).real - mean.real**2, abs=1e-12)


def test_spins_point_along_the_angles():
    state = ProductState(Ring(3), [0.4, 1.2, 2.0], [0.5, -0.6, 3.0])
    site = Site(3)
    vector = state.vector()
    for i, (theta, phi) in enumerate([(0.4, 0.5), (1.2, -0.6), (2.0, 3.0)]):
        n = np.array([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)])
        for name, component in zip(("Sx", "Sy", "Sz"), n, strict=True):
            assert np.vdot(vector, site(name, i) @ vector).real == pytest.approx(component / 2, abs=1e-15)
            assert state.mean(formula(f"{name}[{i}]", Ring(3))) == pytest.approx(component / 2, abs=1e-15)


def test_site_zero_is_the_most_significant_and_up_comes_first():
    vector = ProductState(Chain(3), [0, "pi", 0], 0).vector()
    assert np.argmax(abs(vector)) == 0b010


def test_means_need_no_vector():
    ring = Ring(600)
    state = ProductState(ring, 0.3, "2*pi*i/L")
    bond = np.sin(0.3) ** 2 * np.cos(2 * np.pi / 600) / 4
    assert state.mean(formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1]", ring)) == pytest.approx(600 * bond, rel=1e-13)
    assert state.variance(formula("Sz[i]", ring)) == pytest.approx(600 * np.sin(0.3) ** 2 / 4, rel=1e-13)


def test_a_state_that_is_an_eigenstate_has_no_variance():
    state = ProductState(RING, 0.0, 0.0)
    assert state.variance(formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Sz[i]*Sz[i+1]", RING)) == pytest.approx(
        0, abs=1e-15
    )
    assert state.variance(formula("5 + Sz[i]", RING)) == 0


def test_patterns_and_functions():
    alternating = ProductState(RING, [0, "pi"], 0.0)
    np.testing.assert_allclose(alternating.theta, [0, np.pi] * 3)
    mixed = ProductState(RING, ["pi*i/L", 0], "q*i", parameters={"q": 0.5})
    np.testing.assert_allclose(mixed.theta, [0, 0, np.pi / 3, 0, 2 * np.pi / 3, 0])
    np.testing.assert_allclose(mixed.phi, 0.5 * np.arange(6))
    listed = ProductState(RING, "a[site]", "-a[site]/2", parameters={"a": [1, 2, 3, 4, 5, 6]})
    np.testing.assert_allclose(listed.phi, -np.arange(1, 7) / 2)
    np.testing.assert_allclose(ProductState(Chain(5), [0, 1], 0).theta, [0, 1, 0, 1, 0])
    np.testing.assert_allclose(ProductState(RING, "pi", "0").theta, np.pi)


@pytest.mark.parametrize(
    ("theta", "error", "message"),
    [
        (
            [0, 1, 2, 3],
            ValueError,
            r"^theta: the pattern of 4 angles does not fit a ring of 6 sites \(4 does not divide 6\)$",
        ),
        ([0] * 7, ValueError, r"^theta: the pattern of 7 angles is longer than a ring of 6 sites$"),
        ([], ValueError, "^theta: the pattern is empty$"),
        (float("inf"), ValueError, "^theta: the angle must be finite, not inf$"),
        ([0, float("nan")], ValueError, r"^theta\[1\]: the angle must be finite, not nan$"),
        (None, TypeError, "^theta: expected an angle, a pattern or a function of the position, not None$"),
        (1j, TypeError, "^theta: expected an angle"),
        ([[0, 1], [1, 0]], TypeError, "^theta: expected an angle"),
        ("2*pi*i/M", FormulaError, "^formula column 8: unknown symbol 'M'"),
        ("2*p*i/L", FormulaError, "^formula column 5: unknown symbol 'i'"),
        ("2*Pi*i/L", FormulaError, "^formula column 3: unknown symbol 'Pi'; did you mean 'pi'"),
        (
            "1/i",
            FormulaError,
            "^formula column 1: no value at i = 0: division by zero|^formula column 3: division by zero",
        ),
        ("i*j", FormulaError, "^formula column 3: unknown symbol 'j'"),
        ("w[i]*w[j]", FormulaError, "^formula column 1: expected one position, found 'i' and 'j'"),
        ("log(0*i + c)", FormulaError, "^formula column 1: no value at position 0: log of -1"),
        ("1j*i", FormulaError, "^formula column 1: expected a real number, found 1j at position 1"),
        ("sqrt(i-1)", FormulaError, "^formula column 1: no value at i = 0: sqrt of -1"),
        ("Sz[i]", FormulaError, "^formula column 1: operators have no meaning here"),
        ("2*(pi", FormulaError, "^formula column 3: unbalanced bracket"),
    ],
)
def test_unusable_angles_are_named(theta, error, message):
    with pytest.raises(error, match=message) as caught:
        ProductState(RING, theta, 0.0, parameters={"w": [1, 2, 3, 4, 5, 6], "c": -1})
    assert "\n" not in str(caught.value)
    with pytest.raises(error):
        ProductState(RING, 0.0, theta)


def test_operators_that_do_not_belong_are_refused():
    state = ProductState(RING, 0.3, 0.2)
    with pytest.raises(ValueError, match=r"lives on Ring\(4\), the start state on Ring\(6\)"):
        state.mean(formula("Sz[i]", Ring(4)))
    with pytest.raises(ValueError, match=r"not Hermitian: the word Sy\[0\] with the coefficient 1j"):
        state.mean(formula("Splus[i]", RING))
    with pytest.raises(TypeError, match="expected an OperatorSum, not ndarray"):
        state.variance(np.eye(64))


def test_lists_end_with_the_chain():
    with pytest.raises(FormulaError, match="^formula column 1: a subscript leaves the chain at position 4"):
        ProductState(Chain(5), "w[i+1]", 0.0, parameters={"w": [1, 2, 3, 4, 5]})
    assert repr(ProductState(Chain(5), 0.0, 0.0)) == "<ProductState on Chain(5)>"


def test_a_vector_that_does_not_fit_is_refused():
    with pytest.raises(
        ResourceError, match=r"^2\^30 amplitudes of the start state need 24 GiB; available 16 GiB$"
    ):
        ProductState(Ring(30), 0.0, 0.0).vector(limit=16 * 2**30)
