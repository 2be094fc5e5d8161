"""Level statistics, eigenstates, energy windows: values that tests/quench leaves open."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose

from maxent.families import Microstates
from maxent.lattice import ProductState, Ring, formula
from maxent.lattice.symmetries import reflection, sector, translation
from maxent.quench import Start, gaussian_window
from maxent.quench.eigenstates import eigenstate_means, sector_spectrum
from maxent.quench.spacings import REFERENCES, spacing_ratio

#: Y. Y. Atas, E. Bogomolny, O. Giraud, G. Roux, Phys. Rev. Lett. 110, 084101 (2013), Table I.
SURMISES = {
    "orthogonal ensemble, 3x3 surmise": 0.5358983848622456,
    "unitary ensemble, 3x3 surmise": 0.6026577908435842,  # from memory
}
#: Numerics for large matrices, same table: 0.5307(1) and 0.5996(1).
LARGE = {"orthogonal ensemble": 0.5307, "unitary ensemble": 0.5996}


@pytest.mark.parametrize("name", SURMISES)
def test_surmises(name):
    """4 - 2 sqrt 3 and 2 sqrt 3/pi - 1/2: the reference lines."""
    assert REFERENCES[name].value == pytest.approx(SURMISES[name], abs=1e-12)


@pytest.mark.parametrize("name", LARGE)
def test_large_random_matrices(name):
    assert REFERENCES[name].value == LARGE[name]
    rng, n = np.random.default_rng(22), 40
    raw = rng.normal(size=(2500, n, n))
    if name.startswith("unitary"):
        raw = raw + 1j * rng.normal(size=raw.shape)
    levels = np.linalg.eigvalsh(raw + raw.conj().swapaxes(1, 2))
    means = [spacing_ratio(row).mean for row in levels]
    error = np.std(means) / np.sqrt(len(means))
    assert error < 1.2e-3
    assert np.mean(means) == pytest.approx(LARGE[name], abs=3 * error)
    other = next(v for k, v in LARGE.items() if k != name)
    assert abs(np.mean(means) - other) > 20 * error


def test_eigenstates_of_a_chaotic_ring():
    """Ring of 14, zz - 1.05 x + 0.5 z in Pauli matrices (M. C. Banuls, J. I. Cirac, M. B. Hastings, Phys. Rev. Lett.
    106, 050405 (2011)), zero momentum and even reflection: 687 levels; mean spacing ratio of the middle half; rms of
    <sx> in the middle fifth about a straight line (own exact diagonalisation, one route)."""
    ring = Ring(14)
    part = sector([translation(ring), reflection(ring)], {"translation": 0, "reflection": 1})
    energies, vectors = sector_spectrum(formula("Z[i]*Z[i+1] - 1.05*X[i] + 0.5*Z[i]", ring).matrix(), part.matrix)
    assert len(energies) == 687
    assert spacing_ratio(energies, part=0.5).mean == pytest.approx(0.5367165841894439, abs=1e-6)
    x = eigenstate_means(vectors, formula("X[i]", ring).matrix() / 14, isometry=part.matrix)
    fifth = slice(687 // 2 - 687 // 10, 687 // 2 + 687 // 10)
    line = np.polynomial.Polynomial.fit(energies[fifth], x[fifth], 1)
    assert np.std(x[fifth] - line(energies[fifth])) == pytest.approx(0.012959986838054043, abs=1e-9)


# ------------------------------------------------------------------ windows


@pytest.mark.parametrize(("particles", "excess"), [(10, 0.0714285714285714), (1000, 0.0006671114076051143)])
def test_temperature_of_a_monatomic_gas(particles, excess):
    """Density of states E^(3N/2 - 1): T = E/(3N/2 - 1), at E = 3N/2 above 1 by 1/(3N/2 - 1) (textbooks, closed form).

    A window of width s sees the slope of the logarithm to order s^2; two widths remove that order.
    """
    energy = 1.5 * particles

    def beta(width):
        e = np.arange(-9.0, 9.0, 1 / 64) * width  # counted from the energy, so that nothing cancels
        listed = Microstates({"energy": e}, log_weights=(energy - 1) * np.log1p(e / energy))
        return gaussian_window(listed, width, centre=0.0).beta

    narrow, wide = beta(1e-3 * np.sqrt(energy)), beta(2e-3 * np.sqrt(energy))
    assert 1 / ((4 * narrow - wide) / 3) - 1 == pytest.approx(excess, abs=1e-10)


@pytest.mark.parametrize("size", [8, 12, 16])
def test_energy_spread_of_the_alternating_state(size):
    """sqrt(L/4)/L, J = 1 (closed form): 0.125 at L = 16; the same for every Delta."""
    ring = Ring(size)
    start = Start.from_vector(ProductState(ring, ["0", "pi"], 0.0).vector())
    for delta in (1.0, 3.0):
        energy = formula(f"Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + {delta!r}*Sz[i]*Sz[i+1]", ring)
        assert_allclose(start.mean(energy)[0] / size, -delta / 4, atol=1e-13)
        assert start.spread(energy) / size == pytest.approx(0.5 / np.sqrt(size), abs=1e-12)
    if size == 16:
        assert start.spread(energy) / size == pytest.approx(0.125, abs=1e-12)
