"""Table `[momentum]`: against many-body matrices, exact evolution, and what it refuses."""

import json

import numpy as np
import pytest
from scipy.io import netcdf_file

import maxent
from maxent.app.cli import main
from maxent.app.config import build, load
from maxent.errors import ConfigError

CHAIN = """kind = "spins"
sites = {geometry = "chain", size = 8}
method = "gaussian"
[charges]
energy = "-(X[i]*X[i+1] + Y[i]*Y[i+1])/2"
number = "L/2 - (Z[i]/2 for i)"
[start]
ground_of = "-(X[i]*X[i+1] + Y[i]*Y[i+1])/2 - 0.8*(-1)**i*Z[i]"
[targets]
energy = "from start"
number = "from start"
[momentum]
points = 9
"""
FERMIONS = """kind = "fermions"
sites = {geometry = "chain", size = 4}
method = "gaussian"
[charges]
energy = "-(dagger(c[i])*c[i+1] + h.c.)"
current = "1j*dagger(c[i])*c[i+1] + h.c."
number = "n[i]"
[targets]
energy = -0.5
current = 0.4
number = 1.5
[momentum]
points = 5
"""


def built(tmp_path, text):
    file = tmp_path / "c.toml"
    file.write_text(text, encoding="utf-8")
    return build(load(file))


def columns(job):
    result = maxent.solve(job.family, job.asked())
    (section,) = job.further(result)
    return {c.name: np.array(c.values) for c in section.columns}, section, result


def coherence(state, size):
    """Sum over pairs at each momentum of <b+_i b_j>, by means of products of Pauli matrices on matrices."""
    from maxent.lattice import Chain, formula

    chain = Chain(size)
    out = np.zeros((size, size))
    for i in range(size):
        out[i, i] = 0.5 - state(formula(f"Z[{i}]", chain)) / 2
        for j in range(i + 1, size):
            out[i, j] = out[j, i] = state(formula(f"(X[{i}]*X[{j}] + Y[{i}]*Y[{j}])/4", chain))
    return out


def distribution(c, k):
    at = np.arange(len(c))
    return np.array([np.real(np.exp(1j * q * (at[None, :] - at[:, None])) * c).sum() / len(c) for q in k])


def test_hard_core_bosons_by_matrices(tmp_path):
    found, section, _ = columns(built(tmp_path, CHAIN))
    k = np.linspace(0, np.pi, 9)
    np.testing.assert_allclose(found["momentum"], k)
    many = built(tmp_path, CHAIN.replace('method = "gaussian"\n', "").replace("[momentum]\npoints = 9\n", ""))
    state = maxent.solve(many.family, many.asked()).state
    np.testing.assert_allclose(
        found["ensemble"], distribution(coherence(lambda q: state.mean(q.matrix()), 8), k), atol=1e-9
    )
    assert list(found) == ["momentum", "ensemble", "long run", "start"] and "Wick" in section.note


def test_start_and_long_run_by_matrices(tmp_path):
    """Correlations of the hopping ground state dephased by hand, the strings measured on the density matrix."""
    from maxent.families.gaussian_states import FermionState

    found, _, _ = columns(built(tmp_path, CHAIN))
    k, hop = found["momentum"], -(np.eye(8, k=1) + np.eye(8, k=-1))
    # -0.8 (-1)^i Z = 1.6 (-1)^i n up to a number: the four lowest levels are filled
    filled = np.linalg.eigh(hop + np.diag(1.6 * (-1.0) ** np.arange(8)))[1][:, :4]
    frame = np.linalg.eigh(hop)[1]  # no two levels are equal
    number = filled @ filled.T
    averaged = (frame * np.diag(frame.T @ number @ frame)) @ frame.T
    for name, correlations in (("start", number), ("long run", averaged)):
        density = FermionState.of_correlations(correlations).density()
        mean = lambda q, rho=density: float(np.real(np.trace(q.matrix() @ rho)))
        np.testing.assert_allclose(found[name], distribution(coherence(mean, 8), k), atol=1e-10)
    weights = np.full(9, 1 / 8) * np.where((k == 0) | (k == np.pi), 0.5, 1)
    assert weights @ found["long run"] == pytest.approx(0.5, abs=1e-12)  # the number per site


def test_fermions_with_a_current(tmp_path):
    """Correlations from many-body matrices; n(k) and n(-k) differ."""
    found, _, result = columns(built(tmp_path, FERMIONS))
    k = np.linspace(-np.pi, np.pi, 5)
    assert list(found) == ["momentum", "ensemble"]
    many = built(tmp_path, FERMIONS.replace('method = "gaussian"\n', "").split("[momentum]")[0])
    state = maxent.solve(many.family, many.asked()).state
    from maxent.lattice import Chain, Fermions, formula

    chain = Chain(4, Fermions())
    number = np.zeros((4, 4), complex)  # <c+_i c_j>
    for i in range(4):
        for j in range(4):
            both = f"dagger(c[{i}])*c[{j}]"
            real, turned = (state.mean(formula(f"{f}*{both} + h.c.", chain).matrix()) for f in ("1", "1j"))
            number[i, j] = (real - 1j * turned) / 2
    np.testing.assert_allclose(found["ensemble"], distribution(number, k), atol=1e-9)
    assert abs(found["ensemble"][1] - found["ensemble"][3]) > 0.1
    assert result.success


def test_a_start_that_is_not_gaussian_is_told(tmp_path):
    text = CHAIN.replace(CHAIN.split("[start]\n")[1].split("\n")[0], "theta = 0.5")
    found, section, _ = columns(built(tmp_path, text))
    assert list(found) == ["momentum", "ensemble"] and section.note.startswith("The start is no Gaussian state")


def test_bosons_with_a_pump(tmp_path):
    """Correlations <b+_i b_j> of eight modes: the sum rule of the number, at the start and in the ensemble."""
    hop = "(dagger(b[i])*b[i+1] + h.c.)"
    text = f"""kind = "bosons"
sites = {{geometry = "chain", size = 8}}
method = "gaussian"
charges.energy = "n[i] - 0.2*{hop} + 0.1*(b[i]*b[i+1] + h.c.)"
charges.number = "n[i]"
start = {{thermal_of = "n[i] - 0.3*{hop}", beta = 1.5}}
targets = {{energy = "from start", number = "from start"}}
momentum = {{points = 17}}
"""
    job = built(tmp_path, text)
    found, section, _ = columns(job)
    assert list(found) == ["momentum", "ensemble", "long run", "start"] and not section.note
    for name in ("ensemble", "start"):
        mean = (found[name][:-1]).mean()  # -pi to pi, both ends the same; exact for distances below 16
        assert mean == pytest.approx(job.targets["number"].value / 8, abs=1e-10)


def test_spins_with_a_current_have_no_column(tmp_path):
    text = CHAIN.replace("number = \"L/2", "current = \"(X[i]*Y[i+1] - Y[i]*X[i+1])/2\"\nnumber = \"L/2")
    job = built(tmp_path, text.replace('[targets]\n', '[targets]\ncurrent = 0.5\n'))
    found, section, result = columns(job)
    assert result.success and list(found) == ["momentum", "long run", "start"]
    assert section.note.startswith("No distribution in the ensemble: coherences need a state without currents")


def test_a_pattern_and_a_run(tmp_path, capsys):
    text = CHAIN.replace(CHAIN.split("[start]\n")[1].split("\n")[0], 'pattern = ["down", "up"]')
    (tmp_path / "c.toml").write_text(text)
    assert main(["solve", str(tmp_path / "c.toml"), "--out", str(tmp_path / "out"), "--quiet"]) == 0
    assert "Momentum distribution:\nmomentum  ensemble  long run  start\n" in capsys.readouterr().out
    found = json.loads((tmp_path / "out" / "result.json").read_text())
    (section,) = found["sections"]
    start = section["columns"][-1]
    assert start["name"] == "start" and np.allclose(start["values"], 0.5)  # one boson on every second site
    with netcdf_file(tmp_path / "out" / "result.nc", mmap=False) as arrays:
        np.testing.assert_array_equal(arrays.variables["momentum_long_run"][:], section["columns"][2]["values"])
    assert (tmp_path / "out" / "figures" / "momentum.svg").is_file()


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ('method = "gaussian"\n', "", r"c\.toml:11: momentum: needs method = .gaussian."),
        ('"chain"', '"ring"', r"c\.toml:12: momentum: needs geometry = .chain."),
        ("points = 9", "points = 1", r"c\.toml:13: momentum\.points: expected 2 to 4001 momenta, got 1"),
        ("points = 9", "point = 9", r"c\.toml:13: momentum\.point: unknown key; did you mean .points."),
        ('"gaussian"\n', '"gaussian"\nsectors = "even"\n', r"c\.toml:13: momentum: states of one parity"),
    ],
)
def test_bad_input(tmp_path, old, new, said):
    with pytest.raises(ConfigError, match=said):
        built(tmp_path, CHAIN.replace(old, new, 1))


def test_several_species(tmp_path):
    text = 'kind = "fermions"\nsites = {geometry = "chain", size = 3, species = ["up", "down"]}\nmethod = "gaussian"\n'
    text += 'momentum = {}\ncharges.number = "n[i,up] + n[i,down]"\ntargets.number = 2.0\n'
    with pytest.raises(ConfigError, match=r"c\.toml:4: momentum: needs one mode per site, not 2 species"):
        built(tmp_path, text)
