"""Relaxed targets in configs: tables that ask for less than one number, in every kind."""

import json

import pytest

import maxent
from maxent.app.cli import main
from maxent.app.config import build, load
from maxent.errors import ConfigError

STATES = (
    'kind = "states"\n[charges]\npips = [1, 2, 3, 4, 5, 6]\neven = [0, 1, 0, 1, 0, 1]\n[targets]\neven = 0.5\npips = '
)
OPERATORS = 'kind = "operators"\n[charges]\nx = [[0, 1], [1, 0]]\nz = [[1, 0], [0, -1]]\n[targets]\nz = 0.1\nx = '
SPINS = (
    'kind = "spins"\nsites = {geometry = "ring", size = 4}\nstart = {theta = 0.5}\n[charges]\nm = "Sz[i]"\n'
    'e = "Sx[i]*Sx[i+1]"\n[targets]\nm = "from start"\ne = '
)


def job(tmp_path, text):
    file = tmp_path / "config.toml"
    file.write_text(text, encoding="utf-8")
    return build(load(file))


@pytest.mark.parametrize("kind", [STATES, OPERATORS, SPINS], ids=["states", "operators", "spins"])
@pytest.mark.parametrize(
    ("table", "asked"),
    [
        ("{within = [0.4, 0.1]}", maxent.Within(0.4, 0.1)),
        ("{within = [1, 2]}", maxent.Within(1.0, 2.0)),
        ("{at_most = 0.25}", maxent.AtMost(0.25)),
        ("{at_least = -1}", maxent.AtLeast(-1.0)),
        ("{measured = [0.4, 0.1]}", maxent.Measured(0.4, 0.1)),
        ("0.4", 0.4),
    ],
)
def test_tables(tmp_path, kind, table, asked):
    found = job(tmp_path, kind + table)
    name = list(found.targets)[0 if kind is STATES or kind is OPERATORS else 1]
    assert found.asked()[name] == asked
    assert found.targets[name].value == (asked if isinstance(asked, float) else asked.value)
    assert found.targets[name].sigma == getattr(asked, "sigma", None)


BAD = [
    ("{within = [4.5]}", "targets.pips.within: expected [value, tolerance], got 1 numbers"),
    ("{within = 4.5}", "targets.pips.within: expected a list, got 4.5"),
    ("{within = [4.5, 0]}", "targets.pips.within: the tolerance must be positive, got 0.0"),
    ("{within = [4.5, -0.1]}", "targets.pips.within: the tolerance must be positive, got -0.1"),
    ("{within = [4.5, nan]}", "targets.pips.within[1]: expected a finite number, got nan"),
    ("{within = [4.5, '1']}", "targets.pips.within[1]: expected a number, got the text '1'"),
    ("{measured = [4.5, 0.1, 3]}", "targets.pips.measured: expected [value, sigma], got 3 numbers"),
    ("{measured = [4.5, 0]}", "targets.pips.measured: the sigma must be positive, got 0.0"),
    ("{at_most = inf}", "targets.pips.at_most: expected a finite number, got inf"),
    ("{at_most = '4'}", "targets.pips.at_most: expected a number, got the text '4'"),
    ("{wihtin = [4.5, 0.1]}", "targets.pips.wihtin: unknown key; did you mean 'within'?"),
    (
        "{at_most = 5, at_least = 4}",
        "targets.pips: one of within, at_most, at_least and measured is needed, got at_most and at_least",
    ),
    ("{}", "targets.pips: one of within, at_most, at_least and measured is needed, got none"),
]


@pytest.mark.parametrize(("table", "text"), BAD, ids=[t for t, _ in BAD])
def test_bad_tables(tmp_path, table, text):
    with pytest.raises(ConfigError) as caught:
        job(tmp_path, STATES + table)
    assert str(caught.value) == f"{tmp_path / 'config.toml'}:7: {text}"


def test_a_run(tmp_path, capsys):
    """The run solves what the config asks for, and tells where each value lies."""
    file = tmp_path / "die.toml"
    file.write_text(STATES.replace("even = 0.5", "even = {within = [0.5, 0.1]}") + "{within = [4.5, 0.2]}")
    assert main(["solve", str(file), "--out", str(tmp_path / "run"), "--quiet"]) == 0
    assert "All targets are kept: 1 at an edge, 1 inside and not needed." in capsys.readouterr().out
    record = json.loads((tmp_path / "run" / "result.json").read_text(encoding="utf-8"))
    charges = {c["name"]: c for c in record["charges"]}
    assert charges["pips"]["place"] == "at the lower edge"
    assert charges["pips"]["value"] == pytest.approx(4.3, abs=1e-12)
    assert charges["pips"]["target_source"] == "given, within 0.2"
    assert charges["even"]["place"] == "inside"
    assert charges["even"]["multiplier"] == 0.0


def test_a_run_that_ends_in_a_certificate(tmp_path, capsys):
    file = tmp_path / "die.toml"
    file.write_text(STATES.replace("even = 0.5", "even = {measured = [0.5, 0.1]}") + "{within = [7.0, 0.5]}")
    assert main(["solve", str(file), "--out", str(tmp_path / "run"), "--quiet"]) == 1
    assert "they are out of reach by 0.5" in capsys.readouterr().out
    record = json.loads((tmp_path / "run" / "result.json").read_text(encoding="utf-8"))
    claim = record["certificate"]
    assert claim["verified"] is True
    assert claim["asked"] == -6.5  # the largest that the tolerance allows -pips
    assert claim["lowest"] - claim["asked"] == pytest.approx(claim["margin"], abs=1e-13)
    assert {c["name"]: c["place"] for c in record["charges"]} == {"pips": "unknown", "even": "penalised"}


@pytest.mark.parametrize("table", ["measured = [1.5, 1e300]", "at_most = 1e300", "within = [1.5, 1e-200]"])
def test_numbers_out_of_range_are_told_with_their_place(tmp_path, capsys, table):
    config = tmp_path / "far.toml"
    config.write_text(f'kind = "states"\n[charges]\nenergy = [0, 1, 2]\n[targets]\nenergy = {{ {table} }}\n')
    assert main(["check", str(config)]) == 2
    (line,) = capsys.readouterr().err.strip().splitlines()
    assert line.startswith(f"{config}:5: targets.energy.")
