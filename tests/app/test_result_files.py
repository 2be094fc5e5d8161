"""What stands in result.json, result.nc and the docs of both."""

import json
import re
from importlib.resources import files
from pathlib import Path

import jsonschema
import numpy as np
import pytest
from scipy.io import netcdf_file

import maxent
from maxent.app import kinds
from maxent.app.cli import main
from maxent.app.config import Header, build, load
from maxent.app.reference import fields_table, keys, table, update
from maxent.families import Microstates
from maxent.result import Check

DOCS = Path(__file__).parents[2] / "docs"
CONFIGS = DOCS.parent / "configs"
SCHEMA = json.loads(files("maxent.app").joinpath("schema/result.schema.json").read_text())
NAMES = sorted(f.stem for f in (DOCS.parent / "configs").glob("*.toml"))


def result(run):
    return json.loads((run.folder / "result.json").read_text())


@pytest.mark.parametrize("name", NAMES)
def test_result_follows_its_schema(runs, name):
    jsonschema.Draft202012Validator.check_schema(SCHEMA)
    jsonschema.validate(result(runs[name]), SCHEMA, cls=jsonschema.Draft202012Validator)


@pytest.mark.parametrize(
    "damage",
    [
        lambda r: r.pop("verdict"),
        lambda r: r.update(verdict="fine"),
        lambda r: r.update(surprise=1),
        lambda r: r["charges"][0].update(multiplier="large"),
        lambda r: r["charges"][0].pop("sigma"),
        lambda r: r.update(charges=[]),
        lambda r: r.update(schema="maxent.result/2"),
    ],
)
def test_the_schema_refuses_damaged_results(runs, damage):
    found = result(runs["wolf_dice"])
    damage(found)
    with pytest.raises(jsonschema.ValidationError):
        jsonschema.validate(found, SCHEMA, cls=jsonschema.Draft202012Validator)


def test_wolf_dice(runs):
    # E. T. Jaynes, 'Where do we stand on maximum entropy?', in The Maximum Entropy Formalism (MIT Press
    # 1979): targets B59 and B62; multipliers below B66; probabilities Table 2
    found = result(runs["wolf_dice"])
    shift, axis = found["charges"]
    assert (shift["target"], axis["target"]) == (
        pytest.approx(0.0983, abs=6e-5),
        pytest.approx(0.1393, abs=6e-5),
    )
    assert shift["multiplier"] == pytest.approx(-0.0317244, abs=6e-8)
    assert axis["multiplier"] == pytest.approx(-0.0717764, abs=6e-8)
    published = [0.16433, 0.16963, 0.14117, 0.14573, 0.18656, 0.19258]
    assert [p["value"] for p in found["predictions"]] == pytest.approx(published, abs=6e-6)
    # E. T. Jaynes, 'Concentration of distributions at entropy maxima' (1979), eq. 23
    assert found["entropy"] == pytest.approx(1.785225, abs=6e-7)
    # standard errors of the sample means, by NumPy from the 20 000 single throws
    throws = np.repeat(np.arange(6), [3246, 3449, 2897, 2841, 3635, 3932])
    for charge, values in ((shift, np.arange(6) - 2.5), (axis, np.array([1, 1, -2, -2, 1, 1]))):
        assert charge["sigma"] == pytest.approx(np.std(values[throws], ddof=1) / np.sqrt(20000), rel=1e-12)


def test_boundary_and_its_limit_state(runs):
    found = result(runs["edge"])
    assert (found["verdict"], found["success"]) == ("boundary", False)
    assert found["certificate"]["kind"] == "face" and found["certificate"]["verified"]
    assert found["face"]["dimension"] == 3
    assert [c["multiplier"] for c in found["charges"]] == [None, None]
    # triplet of two spins 1/2 with weights proportional to x^m: mean m = 0.3 fixes x; zz = 1/4 - p_0/2
    x = np.roots([1 - 0.3, -0.3, -1 - 0.3]).max()
    weight = np.array([1 / x, 1, x]) / (1 / x + 1 + x)
    prediction = {p["name"]: p["value"] for p in found["predictions"]}
    assert prediction["zz"] == pytest.approx(0.25 - weight[1] / 2, abs=1e-12)
    assert prediction["xx"] == pytest.approx((0.25 - prediction["zz"]) / 2, abs=1e-12)
    assert found["entropy"] == pytest.approx(-np.sum(weight * np.log(weight)), abs=1e-12)


def test_infeasible_and_its_certificate(runs):
    found = result(runs["unreachable"])
    assert (found["verdict"], found["evidence"]) == ("infeasible", "proved")
    certificate = found["certificate"]
    assert certificate["kind"] == "outside" and certificate["verified"]
    levels = np.arange(4.0)
    combination = certificate["direction"]["energy"] * levels + certificate["direction"]["energy_squared"] * levels**2
    asked = certificate["direction"]["energy"] * 1.5 + certificate["direction"]["energy_squared"] * 2.1
    assert combination.min() == pytest.approx(certificate["lowest"], abs=1e-14)
    assert certificate["margin"] == pytest.approx(combination.min() - asked, abs=1e-14)
    assert found["charges"][0]["value"] is None and found["entropy"] is None


def test_certificates_are_recomputed(tmp_path, runs, monkeypatch):
    doubt = Check(False, 0.0, 0.0, 0.0, 0.0)
    monkeypatch.setattr("maxent.result.Certificate.verify", lambda self, family, targets: doubt)
    main(["solve", str(runs["unreachable"].config), "--out", str(tmp_path / "out"), "--quiet"])
    assert json.loads((tmp_path / "out" / "result.json").read_text())["certificate"]["verified"] is False


def test_spiral_targets_carry_an_energy_current(runs):
    # closed forms of the spiral product state: nearest spins at azimuth angle a = 2 pi/10, polar angle pi/3
    found = result(runs["xxz_ring_quench"])
    energy, magnetisation, current = found["charges"]
    a, s, c = 2 * np.pi / 10, np.sin(np.pi / 3) / 2, np.cos(np.pi / 3) / 2
    assert energy["target"] == pytest.approx(-10 * (s**2 * np.cos(a) + 0.6 * c**2), abs=1e-13)
    assert magnetisation["target"] == pytest.approx(10 * c, abs=1e-13)
    assert abs(current["target"]) > 0.05
    assert found["verdict"] == "solved"
    assert all(abs(charge["residual"]) < 1e-12 for charge in found["charges"])


@pytest.mark.parametrize("name", NAMES)
def test_arrays_are_those_of_the_json(runs, name):
    found = result(runs[name])
    with netcdf_file(runs[name].folder / "result.nc", mmap=False) as run:
        assert run.schema.decode() == "maxent.result/1"
        assert run.verdict.decode() == found["verdict"]
        names = [row.tobytes().rstrip(b"\0").decode() for row in run.variables["charge_name"][:]]
        assert names == [c["name"] for c in found["charges"]]
        for key in ("target", "value", "residual", "multiplier", "multiplier_error"):
            expected = np.array([c[key] for c in found["charges"]], dtype=float)
            np.testing.assert_array_equal(run.variables[key][:], expected)
        np.testing.assert_array_equal(run.variables["covariance"][:], np.array(found["covariance"], dtype=float))
        if found["predictions"]:
            expected = np.array([p["value"] for p in found["predictions"]], dtype=float)
            np.testing.assert_array_equal(run.variables["prediction_value"][:], expected)


def test_probabilities_and_labels_are_kept(runs):
    with netcdf_file(runs["wolf_dice"].folder / "result.nc", mmap=False) as run:
        probability = run.variables["probability"][:]
        labels = [row.tobytes().rstrip(b"\0").decode() for row in run.variables["state_name"][:]]
    assert labels == ["one", "two", "three", "four", "five", "six"]
    values = [p["value"] for p in result(runs["wolf_dice"])["predictions"]]
    np.testing.assert_allclose(probability, values, atol=1e-15)


@pytest.mark.parametrize("page", ["config.md", "result.md"])
def test_pages_are_up_to_date(page):
    text = (DOCS / page).read_text()
    assert update(text) == text, f"run: python -m maxent.app.reference docs/{page}"


def test_pages_hold_every_table():
    page = (DOCS / "config.md").read_text()
    for name in ("every kind", *kinds.names()):
        assert table(name) in page
    assert fields_table() in (DOCS / "result.md").read_text()


@pytest.mark.parametrize("name", ["every kind", *kinds.names()])
def test_every_key_is_documented(name):
    options = Header if name == "every kind" else kinds.load(name).Options
    assert all(text.strip().endswith(".") for _, _, _, text in keys(options))


def test_examples_of_the_docs_build(tmp_path):
    blocks = (DOCS / "config.md").read_text().split("```toml\n")[1:]
    assert len(blocks) == len(kinds.names())
    for n, block in enumerate(blocks):
        file = tmp_path / f"{n}.toml"
        file.write_text(block.split("```")[0])
        assert build(load(file)).targets


def test_multipliers_of_counts_carry_the_error_of_sampling(tmp_path):
    """Wolf's die: ``chi^-1 Sigma chi^-1`` by dense algebra, and the scatter of fits to counts drawn again."""
    assert main(["solve", str(CONFIGS / "wolf_dice.toml"), "--out", str(tmp_path / "out"), "--quiet"]) == 0
    found = json.loads((tmp_path / "out" / "result.json").read_text())
    sigmas = np.array([c["multiplier_sigma"] for c in found["charges"]])
    rows = np.array([[-2.5, -1.5, -0.5, 0.5, 1.5, 2.5], [1, 1, -2, -2, 1, 1]])
    counts = np.array([3246, 3449, 2897, 2841, 3635, 3932])
    throws = np.repeat(rows, counts, axis=1)
    inverse = np.linalg.inv(np.array(found["covariance"]))
    expected = np.sqrt(np.diag(inverse @ np.cov(throws) @ inverse / 20000))
    np.testing.assert_allclose(sigmas, expected, rtol=1e-9)

    family, draw = Microstates({"a": rows[0], "b": rows[1]}), np.random.default_rng(5)
    means = draw.multinomial(20000, counts / 20000, size=400) @ rows.T / 20000
    fits = [list(maxent.solve(family, {"a": a, "b": b}).multipliers.values()) for a, b in means]
    np.testing.assert_allclose(np.std(fits, axis=0, ddof=1), sigmas, rtol=0.15)  # 400 fits: 3.5 % is one sigma


def test_rounding_is_not_what_the_data_say(tmp_path, capsys):
    assert main(["solve", str(CONFIGS / "wolf_dice.toml"), "--out", str(tmp_path / "out"), "--quiet"]) == 0
    out = capsys.readouterr().out
    page = (tmp_path / "out" / "report.html").read_text()
    assert "multiplier  multiplier sigma\n" in out and "  digits" not in out
    assert re.search(r"^gravity_shift .* -0\.032\(4\) +0\.004$", out, re.MULTILINE)
    for text in (out, page):
        assert "data fix" not in text
        assert "fix when they are taken as exact numbers: " in text
        assert "leave of the multipliers: gravity_shift -0.032(4) and long_axis -0.072(5)." in text


def test_a_measured_target_beside_counts(tmp_path):
    """Counts of one charge, an independent measurement of the other: no covariance between them."""
    config = tmp_path / "mixed.toml"
    config.write_text(
        'kind = "states"\n[charges]\na = [0, 1, 2, 3]\nb = [1, 0, 0, 1]\n[counts]\nper_state = [4, 5, 6, 7]\n'
        '[targets]\na = "from counts"\nb = { measured = [0.4, 0.1] }\n'
    )
    assert main(["solve", str(config), "--out", str(tmp_path / "out"), "--quiet"]) == 0
    found = json.loads((tmp_path / "out" / "result.json").read_text())
    sigma = np.array([c["sigma"] for c in found["charges"]])
    inverse = np.linalg.inv(np.array(found["covariance"]) + np.diag([0.0, 0.1**2]))
    expected = np.sqrt(np.diag(inverse @ np.diag(sigma**2) @ inverse))
    np.testing.assert_allclose([c["multiplier_sigma"] for c in found["charges"]], expected, rtol=1e-9)


def test_without_sigmas_there_are_none_of_the_multipliers(tmp_path):
    assert main(["solve", str(CONFIGS / "jaynes_die.toml"), "--out", str(tmp_path / "out"), "--quiet"]) == 0
    found = json.loads((tmp_path / "out" / "result.json").read_text())
    assert [c["multiplier_sigma"] for c in found["charges"]] == [None]
