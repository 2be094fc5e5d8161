"""Thermodynamics of a run against closed forms: table of the config, result.json, terminal and report."""

import json
import math
from dataclasses import replace
from itertools import combinations

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.optimize import brentq

from maxent.app.cli import main
from maxent.app.config import build, load
from maxent.app.kinds._lattice import TAKEN
from maxent.errors import ConfigError
from maxent.quench import comparison, selfchecks

LEVELS = 'kind = "states"\n[charges]\nenergy = {energy}\n[targets]\nenergy = {target}\n'


@pytest.fixture
def solved(tmp_path, capsys):
    """Text of a config -> result.json, page, stdout and stderr."""

    def run(text, code=0):
        (tmp_path / "run.toml").write_text(text)
        assert main(["solve", str(tmp_path / "run.toml"), "--out", str(tmp_path / "out"), "--force"]) == code
        out, err = capsys.readouterr()
        record = json.loads((tmp_path / "out" / "result.json").read_text())
        return record, (tmp_path / "out" / "report.html").read_text(), out, err

    return run


def values(record, key="quantities"):
    return {q["name"]: q["value"] for q in record["thermodynamics"][key]}


def reasons(record):
    return {q["name"]: q["reason"] for q in record["thermodynamics"]["quantities"]}


# --------------------------------------------------------------------- closed forms


def test_spins_in_a_field(solved):
    """Six spins 1/2 in a field b, E = -b M: closed forms of the two-level system (Schottky 1922)."""
    b, beta, n = 1.3, 0.7, 6
    x = 0.5 * beta * b
    record, page, out, err = solved(
        f'kind = "spins"\nsites = {{geometry = "chain", size = {n}}}\nparameters.b = {b}\n'
        f'[charges]\nenergy = "-b*Sz[i]"\n[targets]\nenergy = {-0.5 * n * b * math.tanh(x)!r}\n'
        '[thermodynamics]\nparameters = ["b"]\n'
    )
    found = values(record)
    assert_allclose(found["temperature"], 1 / beta, rtol=1e-11)
    assert_allclose(found["free energy"], -n * math.log(2 * math.cosh(x)) / beta, rtol=1e-11)
    assert_allclose(found["entropy"], n * (math.log(2 * math.cosh(x)) - x * math.tanh(x)), rtol=1e-11)
    assert_allclose(found["heat capacity"], n * (x / math.cosh(x)) ** 2, rtol=1e-11)
    # the force of the field is the magnetisation
    assert_allclose(values(record, "forces")["force of b"], 0.5 * n * math.tanh(x), rtol=1e-11)
    names = [c["name"] for c in record["thermodynamics"]["self_checks"]]
    assert "d ln Z/db against differences" in names and "d ln Z/db, means of operators against JAX" in names
    assert record["thermodynamics"]["passed"] and all(c["passed"] for c in record["thermodynamics"]["self_checks"])
    assert f"temperature    {1 / beta:.9g}"[:24] in out and "self-checks passed" in out and "FAILED" not in err
    assert "<h2>Thermodynamics</h2>" in page and "force of b" in page and 'class="failed"' not in page


def test_oscillator_under_another_name(solved):
    """Einstein (1907): C = x^2 e^x/(e^x - 1)^2, x = hbar omega/T; here one quantum on average, so e^x = 2."""
    text = LEVELS.format(energy=list(map(float, range(300))), target=1.0).replace("energy", "quanta")
    assert solved(text)[0]["thermodynamics"] is None  # no charge is known to be the energy
    record = solved(text + '[thermodynamics]\nenergy = "quanta"\n')[0]
    found = values(record)
    assert_allclose(found["temperature"], 1 / math.log(2), rtol=1e-11)
    assert_allclose(found["heat capacity"], 2 * math.log(2) ** 2, rtol=1e-10)
    assert_allclose(found["entropy"], 2 * math.log(2), rtol=1e-11)


def test_gas_of_two_level_systems_with_sigmas(solved):
    """Five fermion levels with a number: mu and T from the Fermi function, standard errors from shifted fits."""
    levels = np.array([0.0, 0.4, 0.7, 1.1, 1.3])
    filled = np.array([[(k >> j) & 1 for j in range(5)] for k in range(32)])
    t, mu = 0.55, 0.62
    n = 1 / (np.exp((levels - mu) / t) + 1)
    energy, number, width = float(levels @ n), float(n.sum()), 2e-6  # so narrow that the fit meets the middle
    text = (
        f'kind = "states"\n[charges]\nenergy = {(filled @ levels).tolist()}\nnumber = {filled.sum(1).tolist()}\n'
        f"[targets]\nenergy = {{measured = [{energy!r}, {width}]}}\nnumber = {{measured = [{number!r}, 1e-10]}}\n"
        '[thermodynamics]\nnumbers = ["number"]\n'
    )
    record, page, out, _ = solved(text)
    found = values(record)
    assert_allclose([found["temperature"], found["chemical potential"]], [t, mu], rtol=1e-9)
    sigma = next(q["sigma"] for q in record["thermodynamics"]["quantities"] if q["name"] == "temperature")
    # dT = dE/C at fixed number: C from the Fermi function
    w = n * (1 - n)
    capacity = (w @ levels**2 - (w @ levels) ** 2 / w.sum()) / t**2
    assert_allclose(found["heat capacity at fixed number"], capacity, rtol=1e-9)
    assert_allclose(sigma, width / capacity, rtol=1e-4)
    assert "chemical potential" in out and "sigma" in page


def test_negative_and_infinite_temperature(solved):
    record, page, out, _ = solved(LEVELS.format(energy=[0.0, 1.0], target=0.8))
    assert_allclose(values(record)["temperature"], 1 / math.log(0.25), rtol=1e-12)
    assert "The temperature is negative" in page and "The temperature is negative" in out
    record, page, out, _ = solved(LEVELS.format(energy=[0.0, 1.0], target=0.5))
    assert values(record)["temperature"] is None and "the temperature is infinite" in reasons(record)["temperature"]
    assert reasons(record)["free energy"] and values(record)["entropy"] == pytest.approx(math.log(2), rel=1e-12)
    assert "temperature is infinite" in out and "Not defined" in page


def test_boundary_and_infeasible(solved):
    record, page, _, _ = solved(LEVELS.format(energy=[0.0, 0.0, 1.0], target=0.0), code=1)
    assert values(record)["entropy"] == pytest.approx(math.log(2), rel=1e-9) and values(record)["energy"] == 0
    assert all(q["value"] is not None or q["reason"] for q in record["thermodynamics"]["quantities"])
    assert "met in a limit only" in reasons(record)["temperature"] and "Only energy and entropy are defined" in page
    assert solved(LEVELS.format(energy=[0.0, 1.0], target=2.0), code=1)[0]["thermodynamics"] is None


def test_a_further_charge_takes_the_temperature(solved):
    charges, targets = "{energy = [0, 1, 2], other = [1, 0, 2]}", "{energy = 0.9, other = 1.1}"
    record, _, out, _ = solved(f'kind = "states"\ncharges = {charges}\ntargets = {targets}\n')
    assert "further charges (other)" in reasons(record)["temperature"]
    assert "There is no temperature: lam[energy] depends on how the further charges (other) are written." in out


# --------------------------------------------------------------------- numbers, fields, fixed number

FERMIONS = """kind = "fermions"
sites = {geometry = "chain", size = 6}
parameters.V = 0.0
[charges]
energy = "-(dagger(c[i])*c[i+1] + dagger(c[i+1])*c[i]) + V*n[i]*n[i+1]"
number = "n[i]"
[start]
pattern = [1, 0, 0, 1, 0, 0]
[targets]
energy = "from start"
number = "from start"
"""


def test_number_is_recognised_and_sharp(solved, tmp_path):
    """Free fermions on an open chain: the potential at fixed number from all fillings of the levels of the hopping."""
    (tmp_path / "start.toml").write_text(FERMIONS)
    record, _, out, _ = solved(FERMIONS.replace('energy = "from start"', "energy = -1.2"))
    thermo, found = record["thermodynamics"], values(record)
    assert (thermo["numbers"], thermo["fields"]) == (["number"], [])
    levels = -2 * np.cos(np.pi * np.arange(1, 7) / 7)
    fillings = {n: np.array([sum(c) for c in combinations(levels, n)]) for n in (2, 3)}
    weights = lambda n, beta: np.exp(-beta * fillings[n])
    mean = lambda beta: weights(2, beta) @ fillings[2] / weights(2, beta).sum()
    beta = brentq(lambda b: mean(b) + 1.2, 0, 20, xtol=1e-14)
    assert_allclose(found["inverse temperature at number = 2"], beta, rtol=1e-9)
    mu = math.log(weights(2, beta).sum() / weights(3, beta).sum()) / beta
    assert_allclose(found["chemical potential at number = 2"], mu, rtol=1e-9)
    assert "chemical potential at number = 2" in out


def test_fields_are_recognised(tmp_path):
    texts = {
        "energy": "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Sz[i]*Sz[i+1]",
        "along_z": "Sz[i]",
        "along_x": "Sx[i]",  # not diagonal
        "staggered": "(-1)**i*Sz[i]",  # not conserved
    }
    charges = "".join(f'charges.{n} = "{t}"\ntargets.{n} = 0.0\n' for n, t in texts.items())
    head = 'kind = "spins"\nsites = {geometry = "ring", size = 4}\n'
    file = tmp_path / "a.toml"
    file.write_text(head + charges)
    assert build(load(file)).roles.fields == ("along_z",)
    file.write_text(head + charges + '[thermodynamics]\nenergy = "energy"\nfields = []\nnumbers = ["along_x"]\n')
    roles = build(load(file)).roles
    assert (roles.fields, roles.numbers) == ((), ("along_x",))


# --------------------------------------------------------------------- checks that fail


def test_a_failed_self_check_is_conspicuous(solved, monkeypatch):
    real = selfchecks.check_result
    wrong = lambda result, *rest, **options: real(
        replace(result, covariance=1.001 * result.covariance), *rest, **options
    )
    monkeypatch.setattr(selfchecks, "check_result", wrong)
    record, page, out, err = solved(LEVELS.format(energy=[0.0, 1.0, 2.5], target=0.9))
    bad = [c for c in record["thermodynamics"]["self_checks"] if not c["passed"]]
    assert not record["thermodynamics"]["passed"] and bad
    assert all(c["difference"] > c["tolerance"] for c in bad)
    assert err.count("SELF-CHECK FAILED: ") == len(bad) and "FAILED" in out
    assert 'class="failed"' in page and page.count("SELF-CHECK FAILED: ") == len(bad)


def test_checks_along_one_combination_fail_too():
    import maxent
    from maxent.families import Microstates

    rng = np.random.default_rng(4)
    family = Microstates({n: rng.normal(size=40) for n in "abc"})
    values = np.asarray(family.evaluate(np.array([0.3, -0.6, 0.2]), 1).values)
    result = maxent.solve(family, dict(zip("abc", values.tolist(), strict=True)))
    assert all(selfchecks.check_result(result, family, every=False))
    for j in range(3):
        for k in range(j + 1):
            chi = result.covariance.copy()
            chi[j, k] = chi[k, j] = chi[j, k] + 1e-4
            assert not all(selfchecks.check_result(replace(result, covariance=chi), family, every=False))


# --------------------------------------------------------------------- bad input

RING = """kind = "spins"
sites = {geometry = "ring", size = 4}
parameters = {J = 1.0, h = 0.2, w = [1.0, 2.0, 0.5, 1.5], unused = 3.0}
[charges]
energy = "J*Sz[i]*Sz[i+1] + h*Sx[i]*w[i]"
field = "Sz[i]"
[targets]
energy = -0.1
field = 0.0
[thermodynamics]
"""


@pytest.mark.parametrize(
    ("line", "said"),
    [
        ('energy = "enrgy"', "11: thermodynamics.energy: no charge is called 'enrgy'; did you mean 'energy'?"),
        ('numbers = ["feild"]', "11: thermodynamics.numbers[0]: no charge is called 'feild'; did you mean 'field'?"),
        ('numbers = ["energy"]', "11: thermodynamics.numbers[0]: 'energy' is the energy"),
        ('fields = ["field", "field"]', "11: thermodynamics.fields[1]: 'field' is named twice"),
        (
            'numbers = ["field"]\nfields = ["field"]',
            "12: thermodynamics.fields[0]: 'field' is named in numbers, too: a charge has one potential",
        ),
        ('field = ["field"]', "11: thermodynamics.field: unknown key; did you mean 'fields'?"),
        ('numbers = "field"', "11: thermodynamics.numbers: expected a list, got the text 'field'"),
        ('parameters = ["K"]', "11: thermodynamics.parameters[0]: no parameter is called 'K'"),
        ('parameters = ["J", "J"]', "11: thermodynamics.parameters[1]: 'J' is named twice"),
        ('parameters = ["w"]', "11: thermodynamics.parameters[0]: parameter 'w' needs a position"),
        ('parameters = ["w[4]"]', "11: thermodynamics.parameters[0]: parameter 'w' has no position 4 (0..3)"),
        (
            'parameters = ["unused"]',
            "11: thermodynamics.parameters[0]: 'energy' does not hold the parameter 'unused', nor does any other "
            "charge; it holds J, h and w",
        ),
    ],
)
def test_bad_tables(tmp_path, line, said):
    file = tmp_path / "bad.toml"
    file.write_text(RING + line + "\n")
    with pytest.raises(ConfigError) as caught:
        build(load(file))
    assert str(caught.value) == f"{file}:{said}"


@pytest.mark.parametrize(
    ("text", "said"),
    [
        (
            LEVELS.format(energy=[0, 1], target=0.3).replace("energy", "heat") + "[thermodynamics]\n",
            "6: thermodynamics: no charge is called 'energy': name the one that is the energy, energy = ...",
        ),
        (
            "log_prior = [0, 1]\n" + LEVELS.format(energy=[0, 1], target=0.3) + "[thermodynamics]\n",
            "7: thermodynamics: a state with a prior (log_prior) has no thermodynamics",
        ),
        (
            RING.replace("[charges]", 'method = "gaussian"\n[charges]')
            .replace("Sz[i]*Sz[i+1]", "X[i]*X[i+1]")
            .replace("h*Sx[i]*w[i]", "h*Z[i]*w[i]")
            + 'parameters = ["J"]\n',
            '12: thermodynamics.parameters[0]: forces of parameters need method = "matrices"',
        ),
    ],
)
def test_bad_tables_of_other_kinds(tmp_path, text, said):
    file = tmp_path / "bad.toml"
    file.write_text(text)
    with pytest.raises(ConfigError) as caught:
        build(load(file))
    assert str(caught.value) == f"{file}:{said}"


@pytest.mark.parametrize("where", ["predictions", "quench.observables"])
def test_names_that_the_table_of_levels_takes(tmp_path, where):
    assert TAKEN == comparison.TAKEN
    file = tmp_path / "taken.toml"
    file.write_text(FERMIONS + f'[quench]\n[{where}]\nweight = "n[0]"\n')
    with pytest.raises(ConfigError) as caught:
        build(load(file))
    line = FERMIONS.count("\n") + 3
    said = "this name is taken in the table of levels of [quench]; choose another"
    assert str(caught.value) == f"{file}:{line}: {where}.weight: {said}"


def test_a_prior_has_no_section(solved):
    assert solved("log_prior = [0, 1]\n" + LEVELS.format(energy=[0, 1], target=0.3))[0]["thermodynamics"] is None
