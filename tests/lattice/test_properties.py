"""Properties that hold for every formula: printing and reading, adjoints, robustness against any text."""

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from maxent.errors import FormulaError
from maxent.lattice import Bosons, Chain, Fermions, Lattice, Ring, Spin, formula

PARAMETERS = {"J": 0.75, "g": 2.0, "w": [0.5, -1.0, 0.25, 2.0], "z": 0.5 + 0.25j}
SITES = st.sampled_from([Ring(4), Chain(4)])

numbers = st.sampled_from(["2", "0.1", "1/3", "1e-3", "0.7j", "(0.3-0.2j)", "pi", "sqrt(2)", "L"])
scalars = st.sampled_from(
    [
        "J",
        "g",
        "z",
        "dagger(z)",
        "w[k]",
        "w[k+1]",
        "w[2]",
        "(-1)**k",
        "cos(2*pi*k/L)",
        "exp(1j*J*k)",
        "(J+g)**-2",
    ]
    + ["J**2", "abs(z)", "sqrt(J+k)", "log(g)", "J/(g-w[0])", "k", "exp(-J)", "sin(J*w[k])"]
)
operators = st.builds(
    "{}[k{}]".format,
    st.sampled_from(["Sx", "Sy", "Sz", "Splus", "Sminus", "X", "Y", "Z"]),
    st.sampled_from(["", "+1", "-1", "+2"]),
)
fixed = st.builds("{}[{}]".format, st.sampled_from(["Sx", "Sy", "Z"]), st.integers(0, 3))


@st.composite
def summands(draw):
    factors = draw(st.lists(numbers | scalars, max_size=2))
    factors += [draw(operators)] + draw(st.lists(operators | fixed, max_size=2))
    text = "*".join(draw(st.permutations(factors)))
    return draw(
        st.sampled_from(["{}", "-({})", "dagger({})", "({} + h.c.)", "1j*commutator({}, Sx[k])"])
    ).format(text)


formulas = st.lists(summands(), min_size=1, max_size=4).map(" + ".join)


@settings(max_examples=150, deadline=None)
@given(formulas, SITES)
def test_printing_and_reading_again_gives_the_same_sum(text, sites):
    op = formula(text, sites, PARAMETERS)
    again = formula(str(op), sites, PARAMETERS)
    assert again == op
    assert str(again) == str(op)


@settings(max_examples=60, deadline=None)
@given(formulas, formulas, SITES)
def test_products_and_adjoints_agree_with_matrices(first, second, sites):
    a, b = formula(first, sites, PARAMETERS), formula(second, sites, PARAMETERS)
    left, right = a.matrix().toarray(), b.matrix().toarray()
    scale = 1e-13 * (1 + a.norm_bound) * (1 + b.norm_bound)
    np.testing.assert_allclose((a * b).matrix().toarray(), left @ right, atol=scale)
    np.testing.assert_allclose(
        a.commutator(b).matrix().toarray(), left @ right - right @ left, atol=2 * scale
    )
    np.testing.assert_allclose(a.adjoint().matrix().toarray(), left.conj().T, atol=scale)
    if a.is_hermitian:
        np.testing.assert_allclose(left, left.conj().T, atol=scale)
    assert (a + a.adjoint()).is_hermitian
    assert (1j * (a - a.adjoint())).is_hermitian


pieces = st.sampled_from(
    [
        "Sz",
        "Sx[i]",
        "[",
        "]",
        "(",
        ")",
        "i",
        "j",
        "+",
        "-",
        "*",
        "**",
        "/",
        "//",
        "%",
        "1",
        "2.5",
        "1j",
        "J",
        "w",
        ",",
        " ",
    ]
    + [
        "for",
        "<",
        "!=",
        "h.c.",
        "exp",
        "dagger",
        "commutator",
        "lambda",
        "import",
        "None",
        "not",
        "e[i]",
        "if",
        "0",
        "é",
    ]
)


@settings(max_examples=600, deadline=None)
@given(
    st.lists(pieces, max_size=9).map("".join) | st.lists(pieces, max_size=9).map(" ".join) | st.text(max_size=12),
    SITES,
)
def test_no_text_does_anything_but_a_sum_or_a_formula_error(text, sites):
    refused_or_read(text, sites, {"e": "Sz[i]*Sz[i+1]"})


def refused_or_read(text, sites, densities):
    try:
        formula(text, sites, {"J": 0.5, "w": [1.0, 2.0, 3.0, 4.0]}, densities)
    except FormulaError as error:
        assert "\n" not in str(error)
        assert 1 <= error.column <= len(error.text) + 1


CELLS = Ring(2, {"a": Fermions("up", "down"), "s": Spin(1)}, bonds={"rungs": [("a", "s")], "legs": [("a", "a", 1)]})
SQUARE = Lattice.grid(2, 2, kind=Bosons(cutoff=2))
more_pieces = pieces | st.sampled_from(
    ["<", ">", "<x, y>", "in", "rungs", "legs", "along", "for <x, y>", "a", "s", "up", "x", "y", "c[i, a, up]"]
    + ["c[x, up]", "c[y, up]", "Sz[i, s]", "Sz[y]", "n[i]", "b[x]", "n[y]", "w[i, a]", "w[x]", "dagger(", "c", "n", "b"]
)


@settings(max_examples=600, deadline=None)
@given(
    st.lists(more_pieces, max_size=9).map("".join) | st.lists(more_pieces, max_size=9).map(" ".join),
    st.sampled_from([CELLS, SQUARE]),
)
def test_no_text_about_cells_and_bonds_does_anything_else(text, sites):
    refused_or_read(text, sites, {"e": "n[0]" if sites is SQUARE else "Sz[i, s]"})
