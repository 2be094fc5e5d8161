"""Momentum basis of a ring of spins 1/2, written out by hand."""

import numpy as np
import scipy.sparse as sp


def momentum_basis(size):
    """Fourier states on the orbits of the shift of a ring of spins 1/2, made the slow way."""
    d, done, columns = 2**size, set(), []
    for n in range(d):
        if n in done:
            continue
        orbit = [n]
        while (m := (orbit[-1] << 1 & (d - 1)) | orbit[-1] >> (size - 1)) != n:
            orbit.append(m)
        done.update(orbit)
        for k in range(len(orbit)):
            column = np.zeros(d, complex)
            column[orbit] = np.exp(2j * np.pi * k * np.arange(len(orbit)) / len(orbit)) / len(orbit) ** 0.5
            columns.append(column)
    return sp.csr_array(np.array(columns).T)
