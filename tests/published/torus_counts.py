"""Multiplicities of the square Ising model on a torus, exact: Kaufman's product modulo many primes.

Z = (2 sinh 2K)^(N/2) (A + B + C + D)/2 with A, B over odd and C, D over even angles (B. Kaufman, Phys. Rev. 76, 1232
(1949)); in x = exp(-2K) everything is rational, and the cosines exist modulo primes with roots of unity.
"""

from __future__ import annotations

import numpy as np


def torus_counts(n: int) -> list[int]:
    """Number of configurations with 0, 2, 4, .. unequal bonds on an n x n torus, n a power of two."""
    size, points = n * n, 1 << int(np.ceil(np.log2(n * n + 1)))
    total, modulus, p = [0] * (size + 1), 1, 1 << 25
    while modulus <= 2 << size:
        p = _prime_below(p, 4 * points)
        residues = _counts_modulo(n, points, p)
        step = pow(modulus, -1, p)  # Chinese remainders
        total = [t + modulus * ((int(r) - t) * step % p) for t, r in zip(total, residues, strict=True)]
        modulus *= p
    return total


def _prime_below(start: int, order: int) -> int:
    """The next prime below `start` that is 1 modulo `order`."""
    p = (start - 2) // order * order + 1
    while p >= start or any(p % q == 0 for q in range(3, int(p**0.5) + 1, 2)):
        p -= order
    return p


def _counts_modulo(n: int, points: int, p: int) -> np.ndarray:
    order = 2 * points
    root = next(r for g in range(2, p) if pow(r := pow(g, (p - 1) // order, p), order // 2, p) == p - 1)
    powers = np.empty(order, np.int64)
    powers[0] = 1
    for k in range(1, order):
        powers[k] = int(powers[k - 1]) * root % p
    for shift in range(2, p):
        x = shift * powers[:points] % p  # x^2 runs through shift^2 times all roots of unity
        y = x * x % p
        if not np.any((1 - y * y) % p == 0):
            break

    def power(a, exponent):
        out = np.ones(points, np.int64)
        while exponent:
            out, a, exponent = (out * a % p if exponent & 1 else out), a * a % p, exponent >> 1
        return out

    inverse = lambda a: power(a % p, p - 2)
    half = (p + 1) // 2
    base = (1 + y) ** 2 % p * inverse(2 * x * (1 - y) % p) % p  # cosh 2K coth 2K
    products = {parity: [np.ones(points, np.int64)] * 2 for parity in (0, 1)}
    for q in range(1, n):  # every angle twice
        cosine = (powers[q * order // (2 * n)] + powers[order - q * order // (2 * n)]) * half % p
        t = (base - cosine) % p
        for _ in range(n.bit_length() - 1):  # T_2k = 2 T_k^2 - 1
            t = (2 * t * t - 1) % p
        plus, minus = products[q % 2]
        products[q % 2] = [plus * (2 * t + 2) % p, minus * (2 * t - 2) % p]
    # exp(gamma_0) and exp(gamma_n), the two angles that have no partner
    for e in ((1 - x) * inverse(x * (1 + x) % p) % p, (1 + x) * inverse(x * (1 - x) % p) % p):
        up = power(e, n // 2)
        down = inverse(up)
        plus, minus = products[0]
        products[0] = [plus * (up + down) % p, minus * (up - down) % p]
    total = sum(part for pair in products.values() for part in pair) % p * half % p
    total = total * power((1 - y) * inverse(x) % p, n * n // 2) % p * power(x, n * n) % p
    # inverse Fourier transform at the points shift^2 root^(2m)
    back = powers[(-2 * np.outer(np.arange(n * n + 1), np.arange(points))) % order]
    coefficients = back @ total % p * pow(points, -1, p) % p
    scale = pow(shift * shift, -1, p)
    return np.array([int(c) * pow(scale, k, p) % p for k, c in enumerate(coefficients)])
