"""Every construct of the formula language against dense matrices built by np.kron."""

import numpy as np
import pytest

from maxent.lattice import Chain, Ring, formula
from tests.lattice.dense import Site, comm

L = 5
s = Site(L)
PARAMETERS = {"J": 0.7, "h": -0.4, "w": [0.3, -1.0, 2.0, 0.25, 1.5], "z": 0.6 - 0.8j, "r": 2, "alpha": 1.5}
DENSITIES = {
    "e": "J*Sx[i]*Sx[i+1] + h*Sz[i]",
    "twice": "e[k] + e[k+1]",
    "p": "0.5 + Sz[i]",
    "field": "w[i+1]*Sz[i]",
}
J, h, w, z, alpha = (PARAMETERS[name] for name in ("J", "h", "w", "z", "alpha"))


def density(i):
    return J * s("Sx", i) @ s("Sx", i + 1) + h * s("Sz", i)


def pairs(rule, strict=True):
    return sum(rule(i, j) for i in range(L) for j in range(L) if (i < j if strict else i != j))


RING = {
    **{
        f"{name}[i]": s.total(lambda i, name=name: s(name, i))
        for name in ("Sx", "Sy", "Sz", "Splus", "Sminus")
    },
    **{f"{name}[i]": s.total(lambda i, name=name: s(name, i)) for name in ("X", "Y", "Z")},
    "J*Sz[k]*Sz[k+1]": s.total(lambda i: J * s("Sz", i) @ s("Sz", i + 1)),
    "Sx[i]*Sy[i+1]*Sz[i+2]": s.total(lambda i: s("Sx", i) @ s("Sy", i + 1) @ s("Sz", i + 2)),
    "Sx[i]*Sy[i]": s.total(lambda i: s("Sx", i) @ s("Sy", i)),
    "Sz[i]*Sx[i-1]": s.total(lambda i: s("Sz", i) @ s("Sx", i - 1)),
    "Sz[i]*Sz[i+r]": s.total(lambda i: s("Sz", i) @ s("Sz", i + 2)),
    "Sz[2*i]": s.total(lambda i: s("Sz", 2 * i)),
    "Sx[i]*Sx[L-1-i]": s.total(lambda i: s("Sx", i) @ s("Sx", L - 1 - i)),
    "Sz[3]": s("Sz", 3),
    "Sz[L-1]*Sx[0]": s("Sz", L - 1) @ s("Sx", 0),
    "Sz[0]*Sz[i]": s.total(lambda i: s("Sz", 0) @ s("Sz", i)),
    "2": 2 * s.one,
    "Sz[i] + 1.5": s.total(lambda i: s("Sz", i)) + 1.5 * s.one,
    "J": J * s.one,
    "w[i]": sum(w) * s.one,
    "w[i]*Sz[i]": s.total(lambda i: w[i] * s("Sz", i)),
    "w[i+1]*Sx[i]*Sx[i+1]": s.total(lambda i: w[(i + 1) % L] * s("Sx", i) @ s("Sx", i + 1)),
    "w[2]*Sz[2]": w[2] * s("Sz", 2),
    "(-1)**i*Sz[i]": s.total(lambda i: (-1) ** i * s("Sz", i)),
    "cos(2*pi*i/L)*Sx[i] + sin(2*pi*i/L)*Sy[i]": s.total(
        lambda i: np.cos(2 * np.pi * i / L) * s("Sx", i) + np.sin(2 * np.pi * i / L) * s("Sy", i)
    ),
    "sqrt(2)*exp(-J)*log(3)*abs(h)*Sz[i]": np.sqrt(2)
    * np.exp(-J)
    * np.log(3)
    * abs(h)
    * s.total(lambda i: s("Sz", i)),
    "sqrt(i+1)*Sz[i]": s.total(lambda i: np.sqrt(i + 1) * s("Sz", i)),
    "(i%2 + i//2)*Sz[i]": s.total(lambda i: (i % 2 + i // 2) * s("Sz", i)),
    "J**2*h**(-1)*Sz[i]/(J+h)": J**2 / h / (J + h) * s.total(lambda i: s("Sz", i)),
    "2**(-alpha)*J**0.5*J**alpha*Sz[i]": 2**-alpha * J**0.5 * J**alpha * s.total(lambda i: s("Sz", i)),
    "sqrt(J)**2*sqrt(J)**(-3)*Sz[i]": J**-0.5 * s.total(lambda i: s("Sz", i)),
    "exp(J+1)*exp(-J)*Sz[i]": np.e * s.total(lambda i: s("Sz", i)),
    "cos(1j*J)*cos(2j)*sin(1j)*Sz[i]": np.cosh(J)
    * np.cosh(2)
    * 1j
    * np.sinh(1)
    * s.total(lambda i: s("Sz", i)),
    "Sz[i//2]*Sx[i%3]": s.total(lambda i: s("Sz", i // 2) @ s("Sx", i % 3)),
    "(w[i]*w[j] for i < j)*Sz[0]": sum(w[i] * w[j] for i in range(L) for j in range(i + 1, L)) * s("Sz", 0),
    "commutator(J, 2)*Sz[i] + anticommutator(J, 2)*Sz[i]": 4 * J * s.total(lambda i: s("Sz", i)),
    "(1j*J + h.c.)*Sz[i] + (z + h.c.)*Sx[i]": 2 * z.real * s.total(lambda i: s("Sx", i)),
    "2*((1j*Splus[i] + h.c.) + Sx[i+1])": s.total(lambda i: -4 * s("Sy", i) + 2 * s("Sx", i)),
    "Sx[i]*dagger(Splus[i+1])": s.total(lambda i: s("Sx", i) @ s("Sminus", i + 1)),
    "-Sz[i]": -s.total(lambda i: s("Sz", i)),
    "+Sz[i]": s.total(lambda i: s("Sz", i)),
    "-(Sz[i] - Sx[i+1])/2": -s.total(lambda i: s("Sz", i) - s("Sx", i)) / 2,
    "1 - 2*(J*Sz[i] + h*Sx[k])": s.one - 2 * s.total(lambda i: J * s("Sz", i) + h * s("Sx", i)),
    "Sz[i]**2": L / 4 * s.one,
    "(Sx[i] + Sz[i])**3": s.total(lambda i: np.linalg.matrix_power(s("Sx", i) + s("Sz", i), 3)),
    "(Sx[i] + Sy[i])*(Sx[i+1] - Sy[i+1])": s.total(
        lambda i: (s("Sx", i) + s("Sy", i)) @ (s("Sx", i + 1) - s("Sy", i + 1))
    ),
    "J*(Sz[i]*Sz[i+1] - 0.25) for i": s.total(lambda i: J * (s("Sz", i) @ s("Sz", i + 1) - 0.25 * s.one)),
    "(0.5 + Sz[i])*(0.5 - Sz[i+1]) for i": s.total(
        lambda i: (0.5 * s.one + s("Sz", i)) @ (0.5 * s.one - s("Sz", i + 1))
    ),
    "dagger(Splus[i]*Sz[i+1])": s.total(lambda i: s("Sz", i + 1) @ s("Sminus", i)),
    "dagger(z)*Splus[i]": np.conj(z) * s.total(lambda i: s("Splus", i)),
    "1j*Sz[i] + 0.5j": 1j * s.total(lambda i: s("Sz", i)) + 0.5j * s.one,
    "Splus[i]*Sminus[i+1] + h.c.": s.total(
        lambda i: s("Splus", i) @ s("Sminus", i + 1) + s("Sminus", i) @ s("Splus", i + 1)
    ),
    "J*(z*Splus[i]*Sminus[i+1] + h.c.) + h*Sz[i]": s.total(
        lambda i: (
            J * (z * s("Splus", i) @ s("Sminus", i + 1) + np.conj(z) * s("Sminus", i) @ s("Splus", i + 1))
            + h * s("Sz", i)
        )
    ),
    "(Splus[i] + h.c.) - (1j*Splus[i] + h.c.)": s.total(lambda i: 2 * s("Sx", i) + 2 * s("Sy", i)),
    "exp(1j*J)*Splus[i]*Sminus[i+1] + h.c.": s.total(
        lambda i: (
            np.exp(1j * J) * s("Splus", i) @ s("Sminus", i + 1)
            + np.exp(-1j * J) * s("Sminus", i) @ s("Splus", i + 1)
        )
    ),
    "Sz[i]*Sz[j] for i < j": pairs(lambda i, j: s("Sz", i) @ s("Sz", j)),
    "Splus[i]*Sminus[j] for i != j": pairs(lambda i, j: s("Splus", i) @ s("Sminus", j), strict=False),
    "J/abs(i-j)**3*Sx[i]*Sx[j] for i < j": pairs(lambda i, j: J / abs(i - j) ** 3 * s("Sx", i) @ s("Sx", j)),
    "abs(i-j)**(-alpha)*Sx[i]*Sx[j] for i < j": pairs(
        lambda i, j: abs(i - j) ** -alpha * s("Sx", i) @ s("Sx", j)
    ),
    "(Sz[i]*Sz[j] for i < j)/L + h*Sx[k]": pairs(lambda i, j: s("Sz", i) @ s("Sz", j)) / L
    + h * s.total(lambda i: s("Sx", i)),
    "w[i]*w[j]*(Splus[i]*Sminus[j] + h.c.) for i < j": pairs(
        lambda i, j: w[i] * w[j] * (s("Splus", i) @ s("Sminus", j) + s("Sminus", i) @ s("Splus", j))
    ),
    "e[i]": s.total(density),
    "e[2]": density(2),
    "e[L-1]": density(L - 1),
    "twice[i]": 2 * s.total(density),
    "1j*commutator(e[i], e[i+1])": s.total(lambda i: 1j * comm(density(i), density(i + 1))),
    "anticommutator(e[i], Sx[i+1])": s.total(
        lambda i: density(i) @ s("Sx", i + 1) + s("Sx", i + 1) @ density(i)
    ),
    "p[i]*p[i+1] for i": s.total(lambda i: (s.one / 2 + s("Sz", i)) @ (s.one / 2 + s("Sz", i + 1))),
    "commutator(Sx[i], Sy[i]) - 1j*Sz[i]": 0 * s.one,
    "Sz[i] - Sz[j]": 0 * s.one,
}


@pytest.mark.parametrize("text", RING)
def test_ring(text):
    op = formula(text, Ring(L), PARAMETERS, DENSITIES)
    np.testing.assert_allclose(op.matrix().toarray(), RING[text], atol=2e-14)
    assert formula(str(op), Ring(L), PARAMETERS) == op


CHAIN = {
    "Sz[i]*Sz[i+1]": s.total(lambda i: s("Sz", i) @ s("Sz", i + 1), L - 1),
    "Sz[i]*Sx[i-2]": s.total(lambda i: s("Sz", i + 2) @ s("Sx", i), L - 2),
    "J*(Sz[i]*Sz[i+1] + h*Sx[i])": s.total(lambda i: J * s("Sz", i) @ s("Sz", i + 1), L - 1)
    + J * h * s.total(lambda i: s("Sx", i)),
    "e[i]": s.total(lambda i: J * s("Sx", i) @ s("Sx", i + 1), L - 1) + h * s.total(lambda i: s("Sz", i)),
    "1j*commutator(e[i], e[i+1])": 1j
    * s.total(
        lambda i: comm(
            J * s("Sx", i) @ s("Sx", i + 1) + h * s("Sz", i),
            (J * s("Sx", i + 1) @ s("Sx", i + 2) if i + 2 < L else 0 * s.one) + h * s("Sz", i + 1),
        ),
        L - 1,
    ),
    "bond[i]*Sz[i]*Sz[i+1]": s.total(lambda i: (i + 1) * s("Sz", i) @ s("Sz", i + 1), L - 1),
    "w[i+1]*Sz[i]": s.total(lambda i: w[i + 1] * s("Sz", i), L - 1),
    "(w[i] + w[i+1])*Sz[i]": s.total(lambda i: (w[i] + (w[i + 1] if i + 1 < L else 0)) * s("Sz", i)),
    "(exp(w[i+1])*Sz[i] + Sz[i+1])*J": J
    * s.total(lambda i: np.exp(w[i + 1]) * s("Sz", i) + s("Sz", i + 1), L - 1),
    "Sz[i]*(w[i+1]*Sx[k] for k) + 0*Sz[0]": s.total(
        lambda i: w[i + 1] * s("Sz", i) @ s.total(lambda k: s("Sx", k)), L - 1
    ),
    "field[i]": s.total(lambda i: w[i + 1] * s("Sz", i), L - 1),
    "exp(w[i+1])*Sz[i]": s.total(lambda i: np.exp(w[i + 1]) * s("Sz", i), L - 1),
}


@pytest.mark.parametrize("text", CHAIN)
def test_chain(text):
    parameters = PARAMETERS | {"bond": [1.0, 2.0, 3.0, 4.0]}
    op = formula(text, Chain(L), parameters, DENSITIES)
    np.testing.assert_allclose(op.matrix().toarray(), CHAIN[text], atol=1e-14)
    assert formula(str(op), Chain(L), parameters) == op


def test_small_rings_are_taken_as_written():
    two, one = Site(2), Site(1)
    np.testing.assert_array_equal(
        formula("Sz[i]*Sz[i+1]", Ring(2)).matrix().toarray(), 2 * two("Sz", 0) @ two("Sz", 1)
    )
    np.testing.assert_array_equal(formula("Sz[i]*Sz[i+1]", Ring(1)).matrix().toarray(), one.one / 4)
    assert formula("Sz[i]*Sz[i+1]", Chain(1)).matrix().nnz == 0


def test_spaces_and_lines_do_not_matter():
    text = "\n  J * Sz[ i ] * Sz[ i + 1 ]\n\t+ h *Sx[i]\n"
    assert formula(text, Ring(L), PARAMETERS) == formula("h*Sx[k]+J*Sz[k]*Sz[k+1]", Ring(L), PARAMETERS)


def test_names_may_be_greek_letters():
    op = formula("Δ*Sz[i] + Δ*1.25*Sx[i]", Ring(3), {"Δ": 2.0})
    assert str(op) == "1.25*Δ*Sx[i] + Δ*Sz[i]"


def test_a_long_formula_needs_no_deep_recursion():
    text = " + ".join(f"{k}*Sz[{k % 8}]" for k in range(1, 5001))
    op = formula(text, Ring(8))
    totals = [sum(k for k in range(1, 5001) if k % 8 == site) for site in range(8)]
    assert [int(a.real) for a in op.coefficients] == totals
