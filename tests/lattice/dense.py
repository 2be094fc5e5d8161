"""Dense matrices of spin operators built by np.kron alone: the judge of everything in maxent.lattice."""

from functools import reduce

import numpy as np

SX = np.array([[0, 1], [1, 0]]) / 2
SY = np.array([[0, -1j], [1j, 0]]) / 2
SZ = np.diag([0.5, -0.5])
ONE = np.eye(2)
LOCAL = {
    "Sx": SX,
    "Sy": SY,
    "Sz": SZ,
    "Splus": np.array([[0, 1], [0, 0]]),
    "Sminus": np.array([[0, 0], [1, 0]]),
    "X": 2 * SX,
    "Y": 2 * SY,
    "Z": 2 * SZ,
}


class Site:
    """Operators of one size: `s("Sx", 3)` is Sx on site 3 (wrapped), as a dense matrix."""

    def __init__(self, size):
        self.size = size
        self.one = np.eye(2**size)

    def __call__(self, name, site):
        factors = [ONE] * self.size
        factors[site % self.size] = LOCAL[name]
        return reduce(np.kron, factors)

    def total(self, rule, stop=None):
        """Sum of rule(i) over the positions."""
        return sum((rule(i) for i in range(self.size if stop is None else stop)), 0 * self.one)

    def heisenberg(self, i, delta=1.0):
        return sum(w * self(a, i) @ self(a, i + 1) for a, w in (("Sx", 1), ("Sy", 1), ("Sz", delta)))


def comm(a, b):
    return a @ b - b @ a


# --- other kinds of sites, each by its textbook matrices


def spin(s):
    """Sx, Sy, Sz of a spin s from S+|m> = sqrt(s(s+1) - m(m+1)) |m+1>, basis m = s..-s."""
    m = np.arange(s, -s - 1, -1)
    plus = np.diag(np.sqrt(s * (s + 1) - m[1:] * (m[1:] + 1)), 1)
    return {
        "Sx": (plus + plus.T) / 2,
        "Sy": (plus - plus.T) / 2j,
        "Sz": np.diag(m),
        "Splus": plus,
        "Sminus": plus.T,
    }


def boson(cutoff):
    b = np.diag(np.sqrt(np.arange(1, cutoff + 1)), 1)
    return {"b": b, "n": np.diag(np.arange(cutoff + 1))}


def embedded(matrix, slot, dims):
    """Matrix on one factor of a tensor product."""
    factors = [np.eye(d) for d in dims]
    factors[slot] = matrix
    return reduce(np.kron, factors)


def fermion(slot, size):
    """Annihilator of a mode by strings of diag(1, -1) on the modes before it; basis (empty, occupied)."""
    return reduce(np.kron, [np.diag([1, -1])] * slot + [np.array([[0, 1], [0, 0]])] + [np.eye(2)] * (size - slot - 1))
