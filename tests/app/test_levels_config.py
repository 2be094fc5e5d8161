"""Kind `levels`: against closed forms and root finding by SciPy, and what it refuses."""

import json

import numpy as np
import pytest
from scipy.optimize import root
from scipy.special import zeta

import maxent
from maxent.app.cli import main
from maxent.app.config import build, load
from maxent.errors import ConfigError

TRAP = """kind = "levels"
statistics = "bosons"
count = 60
degeneracy = "i + 1"
[parameters]
w = 0.5
[charges]
number = "1"
energy = "w*(i + 1)"
[targets]
number = 40.0
energy = 200.0
[predictions]
square = "(w*(i + 1))**2"
"""
GAS = """kind = "levels"
statistics = "bosons"
degeneracy = "4/sqrt(pi)*x[i]**2"
[grid]
to = 7.0
nodes = 200
[charges]
number = "1"
energy = "x[i]**2"
[targets]
number = 3.0
energy = 2.012230885876
[continuum]
number = 1.0
energy = 0.0
"""
OWN = """kind = "levels"
statistics = "fermions"
occupations = [0.9, 0.5, 0.12]
"""


def built(tmp_path, text):
    file = tmp_path / "c.toml"
    file.write_text(text, encoding="utf-8")
    return build(load(file))


def run(tmp_path, text):
    tmp_path.mkdir(exist_ok=True)
    (tmp_path / "c.toml").write_text(text)
    code = main(["solve", str(tmp_path / "c.toml"), "--out", str(tmp_path / "out"), "--quiet"])
    return code, json.loads((tmp_path / "out" / "result.json").read_text())


@pytest.mark.parametrize(("statistics", "sign"), [("bosons", -1), ("fermions", 1), ("distinguishable", 0)])
def test_a_trap_by_root_finding(tmp_path, statistics, sign):
    job = built(tmp_path, TRAP.replace('"bosons"', f'"{statistics}"'))
    result = maxent.solve(job.family, job.asked()).require()
    g, e = np.arange(1.0, 61), 0.5 * np.arange(1.0, 61)
    filled = lambda lam: g / (np.exp(lam[0] + lam[1] * e) + sign)
    found = root(lambda lam: [filled(lam).sum() / 40 - 1, filled(lam) @ e / 200 - 1], [0.5, 0.3], tol=1e-13)
    assert found.success
    np.testing.assert_allclose([result.multipliers["number"], result.multipliers["energy"]], found.x, rtol=1e-8)
    assert job.mean(result.state, job.predictions["square"]) == pytest.approx(filled(found.x) @ e**2, rel=1e-9)
    (section,) = job.further(result)
    table = {c.name: np.array(c.values) for c in section.columns}
    np.testing.assert_allclose(table["occupation"] * table["copies"], filled(found.x), rtol=1e-8)


def test_formulas_lists_and_files_are_the_same(tmp_path):
    e = 0.5 * np.arange(1.0, 61)
    np.save(tmp_path / "e.npy", e)
    (tmp_path / "t.csv").write_text("copies,ones\n" + "".join(f"{k},1\n" for k in range(1, 61)))
    text = TRAP.replace("count = 60\n", "").replace('"i + 1"', '"t.csv:copies"').replace('"w*(i + 1)"', '"e.npy"')
    text = text.replace('number = "1"', 'number = "t.csv:ones"').replace('"(w*(i + 1))**2"', str((e**2).tolist()))
    first, second = built(tmp_path, TRAP), built(tmp_path, text)
    np.testing.assert_array_equal(first.family.charges, second.family.charges)
    np.testing.assert_array_equal(first.family.degeneracy, second.family.degeneracy)
    assert set(second.digests) == {"e.npy", "t.csv"}


def test_a_condensate_and_its_fluctuations(tmp_path):
    """Nearly all bosons in one level: solved, with the share and the spread sqrt(n (1 + n)) told."""
    code, found = run(tmp_path, TRAP.replace("energy = 200.0", "energy = 22.0"))
    assert (code, found["verdict"]) == (0, "solved")
    held = next(c for c in found["sections"][0]["columns"] if c["name"] == "occupation")["values"][0]
    assert 35 < held < 40
    (note,) = found["notes"]
    assert note.startswith(f"Level 0 holds {held:.6g} of 40 bosons")
    assert f"deviation of {(held * (1 + held)) ** 0.5:.3g}" in note


def test_a_charge_may_be_called_occupation(tmp_path):
    """The names of its table are no reserved words."""
    code, found = run(tmp_path, TRAP.replace("number", "occupation"))
    assert code == 0
    names = [c["name"] for c in found["sections"][0]["columns"]]
    assert names == ["level", "charge occupation", "charge energy", "copies", "occupation", "spread"]


def test_levels_that_were_left_out_are_told(tmp_path):
    _, found = run(tmp_path, TRAP.replace("energy = 200.0", "energy = 600.0"))
    (note,) = found["notes"]
    assert note.startswith("The list ends at level 59, which still holds")


def test_a_continuum_takes_up_no_more_than_it_can(tmp_path):
    """The ideal gas in three dimensions: at the transition it holds zeta(3/2) particles per cubed wavelength."""
    code, found = run(tmp_path, GAS)
    assert (code, found["verdict"]) == (1, "unattained")
    assert found["excess"]["number"] == pytest.approx(3 - zeta(1.5), abs=1e-8)
    code, found = run(tmp_path / "second", GAS.replace("number = 3.0", "number = 2.5").replace("2.012230885876", "2.0"))
    assert (code, found["verdict"]) == (0, "solved")
    assert found["sections"][0]["columns"][0]["name"] == "x"


def test_own_occupations_need_no_iteration(tmp_path):
    code, found = run(tmp_path, OWN)
    assert (code, found["iterations"]) == (0, 0)
    n = np.array([0.9, 0.5, 0.12])
    np.testing.assert_allclose([c["multiplier"] for c in found["charges"]], np.log(1 / n - 1), atol=1e-12)
    assert [c["name"] for c in found["charges"]] == ["level 0", "level 1", "level 2"]
    full = built(tmp_path, OWN.replace("0.9", "1.0"))
    assert str(maxent.solve(full.family, full.asked()).verdict) == "boundary"


def test_targets_from_occupations(tmp_path):
    text = OWN + '[charges]\nnumber = [1, 1, 1]\nenergy = [0.0, 1.0, 2.0]\n[targets]\nnumber = "from occupations"\n'
    job = built(tmp_path, text + 'energy = "from occupations"\n[constants]\nenergy = 10.0\n')
    assert [t.value for t in job.targets.values()] == pytest.approx([1.52, 10.74])
    result = maxent.solve(job.family, job.asked()).require()
    assert result.entropy > -sum(p * np.log(p) + (1 - p) * np.log(1 - p) for p in (0.9, 0.5, 0.12))


def test_too_many_fermions(tmp_path):
    job = built(tmp_path, TRAP.replace('"bosons"', '"fermions"').replace("number = 40.0", "number = 1831.0"))
    result = maxent.solve(job.family, job.asked())  # 1830 places
    assert str(result.verdict) == "infeasible" and result.certificate.verify(job.family, job.asked())


@pytest.mark.parametrize(
    ("text", "old", "new", "said"),
    [
        (TRAP, 'number = "1"\n', "", "c.toml:7: charges: no charge confines the particles"),
        (TRAP, '"bosons"', '"anyons"', "c.toml:2: statistics: expected 'fermions'"),
        (TRAP, "count = 60\n", "", "c.toml:7: charges.number: '1' is no file; a formula needs the number of levels"),
        (TRAP, "count = 60", "count = 0", "c.toml:3: count: expected 1 to 20000 levels, got 0"),
        (TRAP, '"i + 1"', '"i"', ""),
        (TRAP, '"i + 1"', '"i - 1"', "c.toml:4: degeneracy: is -1 at level 0; copies cannot be negative or all zero"),
        (TRAP, '"i + 1"', "[1, 2]", "c.toml:4: degeneracy: has 2 levels, but the config has 60"),
        (TRAP, '"w*(i + 1)"', '"v*(i + 1)"', "c.toml:9: charges.energy: formula column"),
        (TRAP, '"w*(i + 1)"', '"e.npy"', "c.toml:9: charges.energy: file 'e.npy' cannot be read"),
        (TRAP, "number = 40.0", 'number = "from occupations"', "c.toml:11: targets.number: asks for 'from occ"),
        (TRAP, "[targets]\nnumber = 40.0\nenergy = 200.0\n", "", "c.toml:8: charges.number: no target for this charge"),
        (GAS, '"bosons"', '"fermions"', "c.toml:13: continuum: states where bosons condense; fermions do not"),
        (GAS, "energy = 0.0", "", "c.toml:13: continuum: the value of 'energy' there is missing"),
        (GAS, "energy = 0.0", "enrgy = 0.0", "c.toml:15: continuum.enrgy: no charge has this name; did you mean 'en"),
        (GAS, "to = 7.0", "to = -7.0", "c.toml:5: grid.to: must lie above start, 0"),
        (GAS, "nodes = 200", "nodes = 1", "c.toml:6: grid.nodes: expected 2 to 20000 nodes, got 1"),
        (GAS, "[grid]", "count = 4\n[grid]", "c.toml:5: grid: stands instead of count; give one of them"),
        (OWN, "0.5", "1.5", "c.toml:3: occupations: 1.5 at level 1: fermions have 0..1 per copy"),
        (OWN, "occupations = [0.9, 0.5, 0.12]", "", "c.toml:1: charges: missing; or give the occupations"),
    ],
)
def test_bad_input(tmp_path, text, old, new, said):
    changed = text.replace(old, new, 1)
    if old == 'number = "1"\n':
        changed = changed.replace("number = 40.0\n", "").replace('"w*(i + 1)"', '"w*(i - 1)"')
    if not said:  # a level without copies is no level
        assert built(tmp_path, changed).family.size == 1770
        return
    with pytest.raises(ConfigError) as caught:
        built(tmp_path, changed)
    lines = [line.split("/")[-1] for line in str(caught.value).splitlines()]
    assert any(line.startswith(said) for line in lines), lines
