"""Every refusal of the formula language: one line, the column, what was expected."""

import pytest

from maxent.errors import FormulaError, MaxentError
from maxent.lattice import Chain, Ring, formula

P = {"J": 1.0, "Delta": 0.5, "w": [1.0, 2.0, 3.0, 4.0], "short": [1.0, 2.0], "r": 1, "x": 0.5}
DENSITIES = {
    "e": "J*Sz[i]*Sz[i+1]",
    "two": "Sz[i]*Sz[j]",
    "none": "Sz[0]",
    "loop": "back[i]",
    "back": "loop[i]",
    "bad": "Sz[i] + Sq[i]",
}

CASES = [
    # unknown symbols
    ("J*Sx[i]*Sx[i+1]+Sq[i]", 17, "unknown symbol 'Sq'; did you mean 'Sz'?"),
    ("sz[i]", 1, "unknown symbol 'sz'; did you mean 'Sz'?"),
    ("delta*Sz[i]", 1, "unknown symbol 'delta'; did you mean 'Delta'?"),
    ("Sz[i] + 2*Splsu[i]", 11, "unknown symbol 'Splsu'; did you mean 'Splus'?"),
    (
        "Q*Sz[i]",
        1,
        "unknown symbol 'Q'; expected an operator, a function or a parameter (given: J, Delta, w,",
    ),
    ("Sz[i]*sinn(J)", 7, "unknown symbol 'sinn'; did you mean 'sin'?"),
    ("Δelta*Sz[i] + Sq[i]", 1, "unknown symbol 'Δelta'; did you mean 'Delta'?"),
    ("None*Sz[i]", 1, "unknown symbol 'None'"),
    ("lambda*Sz[i]", 1, "unknown symbol 'lambda'"),
    # brackets
    ("J*(Sz[i] + Sx[i]", 3, "unbalanced bracket: '(' is never closed"),
    ("Sz[i", 3, "unbalanced bracket: '[' is never closed"),
    ("Sz[i])", 6, "unbalanced bracket: ')' closes nothing"),
    ("J*(Sz[i)]", 8, "unbalanced bracket: expected ']' for the '[' of column 6, found ')'"),
    # subscripts
    ("J*Sz + 1", 5, "missing subscript: operator 'Sz', write 'Sz[i]' or a fixed position such as 'Sz[0]'"),
    ("w*Sz[i]", 2, "missing subscript: parameter 'w' is a list"),
    ("2*e", 4, "missing subscript: density 'e'"),
    ("Sz[]", 4, "missing subscript between '[' and ']'"),
    ("Sz[4]", 4, "subscript 4 is out of range: positions run from 0 to 3"),
    ("Sz[i]*Sz[-1]", 10, "subscript -1 is out of range"),
    ("w[2+2]", 3, "subscript 4 is out of range"),
    ("e[L]", 3, "subscript 4 is out of range"),
    ("Sz[i+0.5]", 6, "expected an integer subscript such as i, i+1 or 3"),
    ("Sz[i/2]", 4, "expected an integer subscript"),
    ("Sz[x]", 4, "subscript 'x' is the parameter 0.5, which is no integer"),
    ("Sz[w]", 4, "subscript 'w' is the parameter (1.0, 2.0, 3.0, 4.0), which is no integer"),
    ("Sz[pi]", 4, "'pi' cannot be a subscript"),
    ("Sz[i, j]", 7, "spin-1/2 operators have one subscript"),
    ("Sz[i//0]", 7, "division by zero in a subscript"),
    ("J[i]*Sz[i]", 1, "parameter 'J' is a single number: write 'J' without a subscript"),
    ("L[0]*Sz[i]", 1, "'L' is a number: it has no subscript"),
    ("short[i]*Sz[i]", 1, "parameter 'short' has 2 values, but there are 4 positions"),
    # free subscripts
    (
        "Sx[i]*Sx[j]",
        7,
        "'i' and 'j' in one summand are ambiguous; close with 'for i < j' or 'for i != j'",
    ),
    ("Sz[i] + Sx[i]*J*Sx[k+1]", 17, "two free subscripts 'i' and 'k'"),
    ("w[i-j]", 5, "two free subscripts 'i' and 'j'"),
    ("i*2 + Sz[i]", 1, "the free subscript 'i' stands in no bracket of this summand; close with 'for i'"),
    ("cos(i)*Sz[0] + Sz[i]", 1, "the free subscript 'i' stands in no bracket of this summand"),
    ("i*J", 1, "unknown symbol 'i'"),
    (
        "J*(Sz[i+1]*Sz[i] - 0.25)",
        20,
        "in brackets with the free subscript 'i' this could count once or for every i",
    ),
    ("(Sz[i+1] + Sx[0])/2", 12, "could count once or for every i"),
    ("(Sz[i] + 1)**2", 10, "could count once or for every i"),
    ("(Sz[i+1] + 1)*(Sz[i] + 1)", 12, "could count once or for every i"),
    ("Sz[i]*Sz[j] + Sx[k] for i < j", 15, "this summand does not carry 'i'"),
    ("J*Sz[i]*Sz[j] + Sz[i] for i < j", 17, "this summand does not carry 'j'"),
    ("Sz[i]*Sz[j] for i < i", 21, "the two subscripts behind 'for' must differ"),
    ("Sz[i]*Sz[j] for i > j", 19, "expected 'for i < j', 'for i != j' or 'for i', found '>'"),
    ("Sz[i]*Sz[j] for <i j>", 20, "expected ',' as in 'for <a, b>'"),
    ("Sz[i]*Sz[j] for <i, j", 22, "expected '>' as in 'for <a, b>'"),
    ("Sz[i]*Sz[j] for <i, 2>", 21, "expected a subscript as in 'for <a, b>'"),
    ("Sz[i]*Sz[j] for <i, j> in", 26, "expected the name of bonds after 'in'"),
    ("Sz[i]*Sz[j] for <i, j> on rungs", 24, "expected 'for <a, b>' or 'for <a, b> in name', found 'on'"),
    ("Sz[i]*Sz[j] for <i, j> in rungs", 27, "unknown bonds 'rungs'; expected neighbours"),
    ("(Sz[i]*Sz[j] for <i, j> in rungs)*2", 28, "unknown bonds 'rungs'; expected neighbours"),
    ("Sz[i]*Sz[j] for [i, j]", 16, "expected a subscript after 'for'"),
    ("c*Sz[i]", 1, "unknown symbol 'c'; expected an operator, a function or a parameter (given: J, Delta, w,"),
    ("Sz[i]*Sz[j] for i <", 20, "expected a second subscript after '<'"),
    ("Sz[i]*Sz[j] for i < J", 21, "'J' has a meaning already and cannot be a subscript"),
    ("Sz[i for i]", 6, "'for' cannot stand in a subscript"),
    ("Sz[i] for i, j", 12, "unexpected ',' behind 'for'"),
    ("for i", 1, "expected a value before 'for'"),
    ("(Sz[i]*Sz[j] for i < j + 1)", 24, "expected 'for i < j', 'for i != j' or 'for i', found '+'"),
    ("Sz[i] < 2", 7, "'<' has a meaning only behind 'for'"),
    # functions
    ("exp(Sz[i])", 5, "'exp' takes a number, not an operator"),
    ("sqrt(2, 3)*Sz[i]", 1, "'sqrt' takes 1 argument, not 2"),
    ("commutator(Sz[i])", 1, "'commutator' takes 2 arguments, not 1"),
    ("sin*Sz[i]", 4, "expected '(' after the function 'sin'"),
    ("sin[i]*Sz[i]", 1, "'sin' is a function: write 'sin(...)' with round brackets"),
    ("Sz(i)", 1, "'Sz' takes a subscript: write 'Sz[...]' with square brackets"),
    ("J(Sz[i])", 1, "expected an operator between 'J' and '('"),
    ("Sz[i]/Sx[i]", 7, "expected a number: an operator is nothing to divide by"),
    ("2**Sz[i]", 4, "expected a number: an operator is nothing to use as exponent"),
    ("Sz[i]**0.5", 8, "the exponent of an operator must be an integer from 1 to 16"),
    ("Sz[i]**-1", 8, "the exponent of an operator must be an integer from 1 to 16"),
    ("Sz[i]**J", 8, "the exponent of an operator must be an integer"),
    ("Sz[i] % 2", 1, "'//' and '%' are for numbers, not for operators"),
    ("(J % 2)*Sz[i]", 2, "'//' and '%' need real numbers without parameters"),
    # values
    ("Sz[i]/i", 7, "division by zero at i = 0"),
    ("Sz[i]/(1-1)", 8, "division by zero"),
    ("log(i)*Sz[i]", 1, "no value at i = 0: log of 0, which is not a positive number"),
    ("sqrt(-2)*Sz[i]", 1, "no value: sqrt of -2"),
    ("1e400*Sz[i]", 1, "number out of range"),
    ("exp(1000)*Sz[i]", 1, "no value: math range error"),
    ("2**10**10*Sz[i]", 4, "the exponent must not exceed 4096"),
    ("1e200*1e200*Sz[i]", 1, "a number leaves the range of floating point"),
    ("exp(700)*exp(700)*Sz[i]", 1, "a number leaves the range of floating point"),
    ("J**1000*Sz[i]", 4, "the exponent of a parameter must not exceed 64"),
    # form
    ("", 1, "the formula is empty"),
    ("Sz[i] +", 8, "expected a value after '+'"),
    ("J**Sz[i] *", 11, "expected a value after '*'"),
    ("Sz[i]*/2", 7, "expected a value between '*' and '/'"),
    ("*Sz[i]", 1, "expected a value before '*'"),
    ("J Sz[i]", 3, "expected an operator between 'J' and 'Sz'"),
    ("2J*Sz[i]", 2, "expected an operator between '2' and 'J'"),
    ("(Sz[i])[0]", 8, "expected an operator between ')' and '['"),
    ("Sz[i], Sx[i]", 6, "unexpected ','; expected an operator such as + - *"),
    ("(Sz[i], Sx[i])", 7, "unexpected ','; expected an operator such as + - *"),
    ("Sz[i]^2", 6, "unexpected character '^'; powers are written '**'"),
    ("H = Sz[i]", 3, "unexpected character '='; a formula has no '='"),
    ("Sz[i].real", 6, "unexpected character '.'"),
    ("'Sz[i]'", 1, "unexpected character"),
    ("2*007*Sz[i]", 3, "numbers do not start with 0"),
    ("2*" + 41 * "7", 3, "number out of range"),
    ("*".join(["J"] * 5000), 1, "too deeply nested; split the formula"),
    ("-" * 5000 + "J", 1, "too deeply nested; split the formula"),
    ("(" * 41 + "J" + ")" * 41, 41, "more than 40 brackets inside one another"),
    # conjugates
    ("h.c.", 1, "'h.c.' is written '+ h.c.' behind the summands it conjugates"),
    ("Splus[i] - h.c.", 12, "'h.c.' is written '+ h.c.'"),
    ("Splus[i] + h.c. + Sz[i]", 12, "'h.c.' must be the last summand in its brackets"),
    ("Splus[i]*(+ h.c.)", 13, "'h.c.' is written '+ h.c.'"),
    ("Sz[i + h.c.]", 8, "'h.c.' cannot stand in a subscript"),
    # densities
    ("two[i]", 1, "density 'two': formula column 1: a density has one free subscript, this one has 2"),
    ("none[i]", 1, "density 'none': formula column 1: a density has one free subscript, this one has 0"),
    ("Sz[i] + bad[i]", 9, "density 'bad': formula column 9: unknown symbol 'Sq'; did you mean 'Sz'?"),
    ("loop[i]", 1, "density 'loop' uses itself"),
]


@pytest.mark.parametrize(("text", "column", "message"), CASES, ids=[case[0][:40] for case in CASES])
def test_refusal(text, column, message):
    with pytest.raises(FormulaError) as caught:
        formula(text, Ring(4), P, DENSITIES)
    error = caught.value
    assert message in str(error)
    assert "\n" not in str(error)
    assert isinstance(error, MaxentError) and isinstance(error, ValueError)
    if str(error).startswith("density") and ":" in message:
        assert error.text in DENSITIES.values()  # the column is one of the density
    else:
        nested = "uses itself" in message  # told by the density that closes the circle
        assert nested or str(error).startswith(f"formula column {column}: ")
        assert nested or (error.column, error.text) == (column, text)


@pytest.mark.parametrize(
    ("text", "column", "word"),
    [
        ("Sz[i] + Splus[i]", 9, "Sy[0] with the coefficient 1j"),
        ("1j*Sz[i]", 1, "Sz[0] with the coefficient 1j"),
        ("Sz[i] - J*Sx[i]*Sz[i]", 9, "Sy[0] with the coefficient 0.5j*J"),
        ("1j", 1, "1 with the coefficient 1j"),
    ],
)
def test_charges_must_be_hermitian(text, column, word):
    assert not formula(text, Ring(4), P).is_hermitian
    with pytest.raises(FormulaError, match="not Hermitian") as caught:
        formula(text, Ring(4), P, hermitian=True)
    assert caught.value.column == column
    assert word in str(caught.value)
    assert formula(f"{text} + h.c.", Ring(4), P, hermitian=True).is_hermitian


def test_short_lists_on_a_chain_serve_bonds_only():
    assert formula("b[i]*Sz[i]*Sz[i+1]", Chain(4), {"b": [1, 2, 3]}).range == 2
    with pytest.raises(
        FormulaError, match="^formula column 1: parameter 'b' has 3 values, none for position 3"
    ):
        formula("b[i]*Sz[i]", Chain(4), {"b": [1, 2, 3]})
    with pytest.raises(
        FormulaError, match="^formula column 1: parameter 'b' has 5 values, but there are 4 positions"
    ):
        formula("b[i]*Sz[i]", Chain(4), {"b": [1, 2, 3, 4, 5]})


@pytest.mark.parametrize(
    ("parameters", "error", "message"),
    [
        ({"Sz": 1}, ValueError, "parameter name 'Sz' already has a meaning"),
        ({"pi": 3}, ValueError, "parameter name 'pi' already has a meaning"),
        ({"i": 0}, ValueError, "parameter name 'i' is a running subscript in formulas; choose another name"),
        ({"j": 1.5}, ValueError, "parameter name 'j' is a running subscript in formulas; choose another name"),
        ({"for": 3}, ValueError, "parameter name 'for' is not usable"),
        ({"a b": 3}, ValueError, "parameter name 'a b' is not usable"),
        ({3: 3}, ValueError, "parameter name 3 is not usable"),
        ({"e": 3}, ValueError, "'e' is both a parameter and a density"),
        ({"J": "1"}, TypeError, "parameter 'J' must be a number or a list of numbers, not '1'"),
        ({"J": True}, TypeError, "parameter 'J' must be a number"),
        ({"J": [[1]]}, TypeError, "parameter 'J' must be a number"),
        ({"J": ["1"]}, TypeError, r"parameter 'J\[0\]' must be a number"),
        ({"J": []}, ValueError, "parameter 'J' is an empty list"),
        ({"J": float("inf")}, ValueError, "parameter 'J' is not finite: inf"),
        ({"J": [1, float("nan")]}, ValueError, r"parameter 'J\[1\]' is not finite: nan"),
    ],
)
def test_unusable_parameters_are_named(parameters, error, message):
    with pytest.raises(error, match=message):
        formula("Sz[i]", Ring(4), parameters, DENSITIES)


def test_a_formula_has_an_end():
    with pytest.raises(FormulaError, match="longer than 1000000 characters"):
        formula(" " * 1_000_001, Ring(4))


def test_a_formula_is_a_text():
    with pytest.raises(TypeError, match="a formula is a text, not 3"):
        formula(3, Ring(4))


def test_only_densities_that_occur_are_read():
    assert formula("e[i]", Ring(4), P, DENSITIES) == formula("J*Sz[i]*Sz[i+1]", Ring(4), P)
