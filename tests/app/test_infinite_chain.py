"""Kind `infinite_chain`: against independent numbers, the same state on a long ring, and what it refuses."""

import json

import numpy as np
import pytest
from scipy.io import netcdf_file

import maxent
from maxent.app.cli import main
from maxent.app.config import build, load
from maxent.errors import ConfigError
from maxent.lattice import Ring, formula
from maxent.quench import gaussian_ground

FIELD = """kind = "infinite_chain"
charges = 4
counts = [1, 4, 12]
blocks = [4]
[chain]
model = "transverse field"
field = 0.5
[start]
field = 2.0
[predictions]
z = "Z[0]"
third = "X[1]*X[4] + 0.5"
"""
BOSONS = """kind = "infinite_chain"
charges = 3
[chain]
model = "hard-core bosons"
[start]
superlattice = 4.0
[predictions]
occupation = "0.5 - Z[0]/2"
coherence = "(X[0]*X[1] + Y[0]*Y[1])/4"
"""


def built(tmp_path, text):
    file = tmp_path / "c.toml"
    file.write_text(text, encoding="utf-8")
    return build(load(file))


def fitted(job):
    result = maxent.solve(job.family, job.asked())
    return result, {s.name: {c.name: c.values for c in s.columns} for s in job.further(result)}


def run(tmp_path, text):
    file = tmp_path / "c.toml"
    file.write_text(text, encoding="utf-8")
    code = main(["solve", str(file), "--out", str(tmp_path / "out"), "--quiet"])
    return code, json.loads((tmp_path / "out" / "result.json").read_text())


def test_both_measures(tmp_path):
    """Own computation on a ring of 4096 momenta, as in tests/quench/test_truncated.py."""
    result, found = fitted(built(tmp_path, FIELD))
    assert str(result.verdict) == "solved"
    assert result.entropy == pytest.approx(0.31251595293469037, abs=1e-12)
    table = found["truncation"]
    complete = 0.30071107273653447
    expected = np.array([0.4573945675025043, 0.31251595293469037, 0.30131841122493097]) - complete
    np.testing.assert_allclose(table["entropy gap per site"], expected, atol=1e-12)
    np.testing.assert_allclose(
        table["4 sites"], [0.34075296729586, 0.0024941725827325456, 9.564971037434589e-10], rtol=1e-6
    )
    assert table["charges"] == [1, 4, 12]


def test_targets_are_the_means_of_a_long_ring(tmp_path):
    """Charges as formulas on 80 spins, in the ground state of the field before the quench: no momentum in it."""
    charges = {
        "I0": "-X[i]*X[i+1] - 0.5*Z[i]",
        "I1": "-(X[i]*Z[i+1]*X[i+2] - Z[i]) + 0.5*(X[i]*X[i+1] + Y[i]*Y[i+1])",
        "I2": "-(X[i]*Z[i+1]*Z[i+2]*X[i+3] + Y[i]*Y[i+1]) + 0.5*(X[i]*Z[i+1]*X[i+2] + Y[i]*Z[i+1]*Y[i+2])",
    }
    ring = Ring(80)
    start = gaussian_ground(formula("-X[i]*X[i+1] - 2*Z[i]", ring))
    job = built(tmp_path, FIELD.replace("charges = 4", "charges = 3"))
    for name, text in charges.items():
        assert job.targets[name].value == pytest.approx(start.mean(formula(text, ring))[0] / 80, abs=1e-11)


def test_predictions_stand_beside_all_charges(tmp_path):
    job = built(tmp_path, FIELD)
    result, found = fitted(job)
    means = found["means"]
    assert means["prediction"] == ["z", "third"]
    # <Z> = 0.5173158092 and <X_0 X_3> of all charges: Calabrese, Essler, Fagotti, Phys. Rev. Lett. 106, 227203 (2011)
    assert means["all charges"][0] == pytest.approx(0.5173158092, abs=1e-10)
    ours = [job.mean(result.state, q) for q in job.predictions.values()]
    np.testing.assert_allclose(means["4 charges"], ours, atol=1e-13)
    np.testing.assert_allclose(np.subtract(ours, means["all charges"]), means["difference"], atol=1e-13)
    assert 1e-5 < abs(means["difference"][1]) < 0.1


def test_hard_core_bosons(tmp_path):
    job = built(tmp_path, BOSONS)
    result, found = fitted(job)
    assert str(result.verdict) == "solved" and list(job.targets) == ["I0", "I1", "I2"]
    assert job.targets["I0"].value == pytest.approx(0.5)
    assert job.mean(result.state, job.predictions["occupation"]) == pytest.approx(0.5, abs=1e-12)
    # <b+_0 b_1> is half of the hopping, which is a charge
    assert job.mean(result.state, job.predictions["coherence"]) == pytest.approx(job.targets["I1"].value / 2, abs=1e-12)
    k = np.array(found["occupations"]["momentum"])
    x = 2 * np.cos(k)
    np.testing.assert_allclose(found["occupations"]["all charges"], 0.5 * (1 + x / np.hypot(4, x)), atol=1e-14)
    assert list(found["truncation"]) == ["charges", "entropy gap per site", "2 sites", "4 sites", "8 sites"]


def test_a_ground_state_is_a_boundary(tmp_path):
    """Nothing was quenched: no multipliers, no measures, and the run says so."""
    code, found = run(tmp_path, FIELD.replace("field = 2.0", "field = 0.5"))
    assert (code, found["verdict"]) == (1, "boundary")
    truncation = found["sections"][0]["columns"]
    assert truncation[-1] == {"name": "verdict", "meaning": "verdict of the fit", "values": ["boundary"] * 3}
    assert truncation[1]["values"] == [None] * 3
    z = next(p["value"] for p in found["predictions"] if p["name"] == "z")
    assert z == pytest.approx(found["sections"][2]["columns"][2]["values"][0], abs=1e-10)


def test_tables_arrays_and_figures_of_a_run(tmp_path, capsys):
    code, found = run(tmp_path, FIELD)
    assert code == 0
    out = capsys.readouterr().out
    assert "Truncated ensembles by number of charges:\ncharges  entropy gap per site" in out
    assert "From 4 to 12 charges the entropy gap falls by a factor of 19.4, the relative entropy of 4 sites" in out
    with netcdf_file(tmp_path / "out" / "result.nc", mmap=False) as arrays:
        for column in found["sections"][0]["columns"]:
            name = "truncation_" + column["name"].replace(" ", "_")
            np.testing.assert_array_equal(arrays.variables[name][:], column["values"])
        assert arrays.variables["occupations_momentum"].shape == (65,)
    page = (tmp_path / "out" / "report.html").read_text()
    assert '<h2>Truncated ensembles by number of charges</h2>' in page
    assert 'id="truncation-title"' in page and 'id="occupations-title"' in page and "means-title" not in page
    assert (tmp_path / "out" / "figures" / "truncation.svg").is_file()


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ("field = 0.5\n", "", "c.toml:5: chain.field: missing: the field after the quench"),
        ("field = 2.0", "superlattice = 2.0", "c.toml:8: start.field: missing"),
        ("field = 2.0", "superlattice = 2.0", "c.toml:9: start.superlattice: means nothing for model"),
        ("charges = 4", "charges = 65", "c.toml:2: charges: expected 1 to 64 charges, got 65"),
        ("[1, 4, 12]", "[1, 0]", "c.toml:3: counts[1]: expected 1 to 64 charges, got 0"),
        ("blocks = [4]", "blocks = [100]", "c.toml:4: blocks[0]: expected 1 to 64 sites, got 100"),
        ('"Z[0]"', '"Z[i]"', "c.toml:11: predictions.z: sums over sites, of which an infinite chain has no end"),
        ('"Z[0]"', '"Z[0"', "c.toml:11: predictions.z: formula column"),
        ('"Z[0]"', '"Z[30]"', "c.toml:11: predictions.z: formula column 3: subscript 30 is out of range"),
        ('"Z[0]"', '"1j*Z[0]"', "c.toml:11: predictions.z: "),
        ("[chain]", "[chain]\ncoupling = -1.0", "c.toml:6: chain.coupling: must lie in 1e-06..1e+06, got -1"),
        ('"transverse field"', '"heisenberg"', "c.toml:6: chain.model: expected 'transverse field' or"),
        ("field = 2.0", "field = -1e7", "c.toml:9: start.field: lies beyond 1e+06 J, got -10000000"),
        ("field = 0.5", "field = 1e200", "c.toml:7: chain.field: lies beyond 1e+06 J, got 1e+200"),
        ("field = 2.0", "field = inf", "c.toml:9: start.field: expected a finite number, got inf"),
    ],
)
def test_bad_input(tmp_path, old, new, said):
    with pytest.raises(ConfigError) as caught:
        built(tmp_path, FIELD.replace(old, new, 1))
    lines = [line.split("/")[-1] for line in str(caught.value).splitlines()]
    assert any(line.startswith(said) for line in lines), lines


def test_bosons_have_no_field(tmp_path):
    with pytest.raises(ConfigError, match=r"c\.toml:5: chain\.field: a chain of hard-core bosons has none"):
        built(tmp_path, BOSONS.replace("[start]", "field = 1.0\n[start]"))


def test_the_depth_of_a_superlattice(tmp_path):
    for depth, said in (
        ("0.0", "must be positive, got 0: without a potential nothing changes"),
        ("1e-4", "the occupations are too steep in momentum: the average over momenta still changes by"),
    ):
        with pytest.raises(ConfigError) as caught:
            built(tmp_path, BOSONS.replace("superlattice = 4.0", f"superlattice = {depth}"))
        assert f"c.toml:6: start.superlattice: {said}" in str(caught.value)


def test_steep_occupations_get_more_momenta(tmp_path):
    """A shallow superlattice: targets and entropy are those of the integral and not of 513 momenta."""
    from scipy.integrate import quad

    job = built(tmp_path, BOSONS.replace("superlattice = 4.0", "superlattice = 0.05"))
    occupation = lambda k: 0.5 * (1 + 2 * np.cos(k) / np.hypot(0.05, 2 * np.cos(k)))
    hop = quad(lambda k: 2 * np.cos(k) * occupation(k) / np.pi, 0, np.pi, points=[np.pi / 2], epsabs=1e-13, limit=400)
    assert int(job.facts["momenta"]) > 513
    assert job.targets["I1"].value == pytest.approx(hop[0], abs=1e-11)
