"""Option `method`: one config run as many-body matrices and as free particles, and what free particles refuse."""

import json
import re
from importlib.resources import files

import jsonschema
import numpy as np
import pytest
from scipy.io import netcdf_file

import maxent
from maxent.app.cli import main
from maxent.app.config import build, load
from maxent.app.job import BadInput
from maxent.app.run import sizes
from maxent.errors import ConfigError

SPINS = """kind = "spins"
sites = {geometry = "GEOMETRY", size = 6}
[charges]
energy = "-X[i]*X[i+1] - 0.5*Z[i]"
second = "X[i]*Z[i+1]*X[i+2] + 0.1*Y[i]*Y[i+1]"
[start]
START
[targets]
energy = "from start"
second = "from start"
[predictions]
z = "Z[2]"
zz = "Z[i]*Z[i+1]/L"
far = "X[0]*X[3]"
"""
FERMIONS = """kind = "fermions"
sites = {geometry = "ring", size = 5}
[charges]
energy = "-(dagger(c[i])*c[i+1] + h.c.) + 0.3*(c[i]*c[i+1] + h.c.)"
number = "n[i]"
[start]
START
[targets]
energy = "from start"
number = 2.0
[predictions]
pair = "c[0]*c[1] + h.c."
"""
THERMAL = 'thermal_of = "-X[i]*X[i+1] - 1.5*Z[i]"\nbeta = 0.8'


def built(tmp_path, text, head=""):
    file = tmp_path / "c.toml"
    file.write_text(head + text, encoding="utf-8")
    return build(load(file))


def solved(job):
    result = maxent.solve(job.family, job.asked())
    return result, {name: job.mean(result.state, q) for name, q in job.predictions.items()}


@pytest.mark.parametrize("geometry", ["ring", "chain"])
@pytest.mark.parametrize("start", [THERMAL, 'pattern = ["up", "up", "down"]', "theta = 0.7"])
def test_one_config_both_ways(tmp_path, geometry, start):
    text = SPINS.replace("GEOMETRY", geometry).replace("START", start)
    many, free = built(tmp_path, text), built(tmp_path, text, 'method = "gaussian"\n')
    for name, target in many.targets.items():
        assert free.targets[name].value == pytest.approx(target.value, abs=1e-11)
    (a, means), (b, others) = solved(many), solved(free)
    assert str(a.verdict) == str(b.verdict) == "solved"
    assert b.entropy == pytest.approx(a.entropy, abs=1e-11)
    np.testing.assert_allclose(list(b.multipliers.values()), list(a.multipliers.values()), atol=1e-9)
    np.testing.assert_allclose(list(others.values()), list(means.values()), atol=1e-10)
    assert sizes(free)["method"].startswith("gaussian: free fermions")


@pytest.mark.parametrize(
    "start", ["pattern = [1, 0, 0, 1, 0]", 'thermal_of = "-(dagger(c[i])*c[i+1] + h.c.) - 0.4*n[i]"\nbeta = 0.6']
)
def test_fermions_both_ways(tmp_path, start):
    text = FERMIONS.replace("START", start)
    (a, means), (b, others) = solved(built(tmp_path, text)), solved(built(tmp_path, text, 'method = "gaussian"\n'))
    assert str(a.verdict) == str(b.verdict) == "solved"
    assert b.entropy == pytest.approx(a.entropy, abs=1e-11)
    np.testing.assert_allclose(list(others.values()), list(means.values()), atol=1e-10)


def test_one_gaussian_state_is_cheap_and_nearly_right(tmp_path):
    text = SPINS.replace("GEOMETRY", "ring").replace("START", THERMAL).replace("size = 6", "size = 40")
    text = text.replace('thermal_of = "-X[i]*X[i+1] - 1.5*Z[i]"\nbeta = 0.8', 'pattern = ["up", "up", "up", "down"]')
    (a, means), (b, others) = (
        solved(built(tmp_path, text, f'method = "gaussian"\nsectors = "{s}"\n')) for s in ("both", "unprojected")
    )
    assert b.entropy == pytest.approx(a.entropy, abs=1e-6)
    np.testing.assert_allclose(list(others.values()), list(means.values()), atol=1e-6)


@pytest.mark.parametrize(
    ("sectors", "start", "said"),
    [
        ("odd", 'ground_of = "-X[i]*X[i+1] - 2*Z[i]"', r"sectors: the start has a weight of 1 in the even sector"),
        ("even", 'pattern = ["up", "up", "up", "up", "up", "down"]', r"a weight of 1 in the odd sector"),
        ("even", THERMAL, r"a weight of 0\.\d+ in the odd sector"),
    ],
)
def test_a_sector_that_the_start_does_not_live_in(tmp_path, sectors, start, said):
    text = SPINS.replace("GEOMETRY", "ring").replace("START", start)
    with pytest.raises(ConfigError, match=said):
        built(tmp_path, text, f'method = "gaussian"\nsectors = "{sectors}"\n')


def test_the_sector_of_the_start_is_taken(tmp_path):
    text = SPINS.replace("GEOMETRY", "ring").replace("START", 'ground_of = "-X[i]*X[i+1] - 2*Z[i]"')
    result, _ = solved(built(tmp_path, text, 'method = "gaussian"\nsectors = "even"\n'))
    assert str(result.verdict) == "solved"


def test_a_covariance_from_a_file(tmp_path):
    g = np.zeros((12, 12))
    g[0::2, 1::2], g[1::2, 0::2] = -0.3 * np.eye(6), 0.3 * np.eye(6)
    np.save(tmp_path / "g.npy", g)
    text = SPINS.replace("GEOMETRY", "chain").replace("START", 'file = "g.npy"')
    job = built(tmp_path, text, 'method = "gaussian"\n')
    assert job.targets["energy"].value == pytest.approx(-0.5 * 6 * 0.3)
    assert list(job.digests) == ["g.npy"]
    np.save(tmp_path / "g.npy", 4 * g)
    with pytest.raises(ConfigError, match=r"c\.toml:8: .* no state has this covariance: \|iG\| reaches 1\.2"):
        built(tmp_path, text, 'method = "gaussian"\n')
    np.save(tmp_path / "g.npy", g[:4, :4])
    with pytest.raises(ConfigError, match=r"4 x 4; 6 modes need a covariance of 12 x 12"):
        built(tmp_path, text, 'method = "gaussian"\n')


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ('second = "X[i]*Z[i+1]*X[i+2]', 'second = "X[i]*X[i+2]', r"c\.toml:6: .*needs quadratic charges.*Sx"),
        ("[predictions]", "[quench]\n[predictions]", r"c\.toml:8: start.theta: no Gaussian state"),
        ("theta = 0.7", "[[start.mixture]]\nweight = 1.0\ntheta = 0.1", "no mixtures"),
    ],
)
def test_what_free_particles_refuse(tmp_path, old, new, said):
    text = SPINS.replace("GEOMETRY", "ring").replace("START", "theta = 0.7").replace(old, new)
    with pytest.raises(ConfigError, match=said):
        built(tmp_path, text, 'method = "gaussian"\n')


QUENCH = SPINS.replace(
    'second = "X[i]*Z[i+1]*X[i+2] + 0.1*Y[i]*Y[i+1]"',
    'second = "X[i]*Z[i+1]*X[i+2] - Z[i] - 0.5*(X[i]*X[i+1] + Y[i]*Y[i+1])"',
)


@pytest.mark.parametrize(
    ("head", "quench", "said"),
    [
        ("", "window = 1.0", r"c\.toml:\d+: quench.window: no energy windows"),
        ("", "resolution = 1e3", r"quench.resolution: equal gaps"),
        ('sectors = "odd"\n', "", r"c\.toml:2: sectors: \[quench\] compares all states"),
        ("", "insist = ['z']", r"quench.insist: no charge is called 'z'"),
    ],
)
def test_what_a_comparison_of_free_particles_refuses(tmp_path, head, quench, said):
    text = QUENCH.replace("GEOMETRY", "ring").replace("START", THERMAL) + f"[quench]\n{quench}\n"
    with pytest.raises(ConfigError, match=said):
        built(tmp_path, text, f'method = "gaussian"\n{head}')


def test_a_charge_that_is_not_conserved(tmp_path):
    """A fit to it has a note; a comparison refuses it unless one insists."""
    text = SPINS.replace("GEOMETRY", "ring").replace("START", THERMAL)
    job = built(tmp_path, text, 'method = "gaussian"\n')
    result, _ = solved(job)
    (said,) = [x for x in job.remarks(result) if "Not stationary" in x]
    assert "'second' is not conserved" in said and "of the largest possible rate under 'energy'" in said
    kept = built(tmp_path, QUENCH.replace("GEOMETRY", "ring").replace("START", THERMAL), 'method = "gaussian"\n')
    assert not [x for x in kept.remarks(solved(kept)[0]) if "stationary" in x]
    with pytest.raises(
        ConfigError, match=r"c\.toml:6: charges.second: 'second' is not conserved.*insist = \['second'\]"
    ):
        built(tmp_path, text + "[quench]\n", 'method = "gaussian"\n')
    built(tmp_path, text + "[quench]\ninsist = ['second']\n", 'method = "gaussian"\n')


def test_modes_are_counted_and_not_states(tmp_path):
    text = SPINS.replace("GEOMETRY", "ring").replace("START", THERMAL).replace("size = 6", "size = 40")
    job = built(tmp_path, text, 'method = "gaussian"\n')
    assert job.size == 40 and job.facts["method"].endswith("40 modes")


def test_a_comparison_from_file_to_report(tmp_path, capsys):
    """A series of sizes as command, with everything that is written."""
    text = QUENCH.replace("GEOMETRY", "ring").replace("START", 'ground_of = "-X[i]*X[i+1] - 1.5*Z[i]"')
    text = text.replace("size = 6", "sizes = [12, 16, 20]") + "[quench]\nblocks = [1, 2, 9]\n"
    file, out = tmp_path / "c.toml", tmp_path / "out"
    file.write_text('method = "gaussian"\n' + text, encoding="utf-8")
    assert main(["solve", str(file), "--out", str(out)]) == 0
    told = capsys.readouterr().out
    assert re.search("At 20 sites the ensemble closest to the long-time state is.*generalised: energy, second", told)
    assert told.count("are not for free particles") == 1 and "complete generalised" in told
    record = json.loads((out / "result.json").read_text(encoding="utf-8"))
    schema = json.loads(files("maxent.app").joinpath("schema/result.schema.json").read_text(encoding="utf-8"))
    jsonschema.validate(record, schema)
    last = record["quench"]["comparisons"][-1]
    assert last["statistics"] == "fermions" and last["dimension"] is None
    assert all(set(e["relative_entropies"]) == {"1", "2", "9"} for e in last["ensembles"])
    assert set(last["ensembles"][0]["distance_bounds"]) == {"9"}
    report = (out / "report.html").read_text(encoding="utf-8")
    assert "Relative entropy of blocks" in report and "20, free fermions" in report
    for word in ("Eigenstates inside one sector", "Energy windows", "effective dimension</", "nan"):
        assert word not in report
    with netcdf_file(out / "quench" / "size-20.nc", "r", mmap=False) as arrays:
        assert arrays.variables["mode_occupation"].shape == (20,) and "energy" not in arrays.variables
        n, m = arrays.variables["mode_occupation"][:], arrays.variables["mode_multiplier"][:]
    np.testing.assert_allclose(n, 1 / (1 + np.exp(m)), atol=1e-12)


def test_fermions_bosons_and_predictions_that_need_words(tmp_path):
    text = FERMIONS.replace("START", "pattern = [1, 0, 0, 1, 0]").replace("number = 2.0", 'number = "from start"')
    text = text.replace("+ 0.3*(c[i]*c[i+1] + h.c.)", "")
    job = built(tmp_path, text + "[quench]\n", 'method = "gaussian"\n')
    made = job.study.build(5)
    assert made["start"].label == "pattern 1 0 0 1 0" and list(made["observables"]) == ["pair"]
    bad = text + '[quench]\nobservables = {nn = "n[0]*n[1]"}\n'
    with pytest.raises(ConfigError, match=r"quench.observables.nn: Charge 'nn' is not quadratic"):
        built(tmp_path, bad, 'method = "gaussian"\n')
    bosons = """kind = "bosons"
sites = {geometry = "chain", size = 4}
charges = {energy = "n[i]", number = "n[i]"}
targets = {energy = "from start", number = "from start"}
start = {pattern = [1, 0, 1, 0]}
quench = {}
"""
    job = built(tmp_path, bosons, 'method = "gaussian"\n')
    with pytest.raises(BadInput, match="no Gaussian state: of bosons"):
        job.study.build(4)


def test_keys_of_the_other_method(tmp_path):
    text = SPINS.replace("GEOMETRY", "ring").replace("START", "theta = 0.7")
    with pytest.raises(ConfigError, match=r"c\.toml:1: sectors: goes with method"):
        built(tmp_path, text, 'sectors = "even"\n')
    bosons = 'kind = "bosons"\nsites = {geometry = "chain", size = 2}\ncharges = {n = "n[i]"}\ntargets = {n = 1.0}\n'
    with pytest.raises(ConfigError, match="bosons need a `cutoff`"):
        built(tmp_path, bosons)
    job = built(tmp_path, bosons, 'method = "gaussian"\n')
    result, _ = solved(job)
    assert result.multipliers["n"] == pytest.approx(np.log(3.0))  # 1/2 per mode
