"""The command itself: what it prints where, how it exits, and what it does not load."""

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

from maxent.app.cli import main
from maxent.version import __version__

CONFIGS = Path(__file__).parents[2] / "configs"

TOP = """usage: multipliers [-h] [--version] COMMAND ...

Find the Lagrange multipliers of a maximum-entropy state, or prove that there are none.

positional arguments:
  COMMAND
    solve     find the multipliers and write a run folder
    check     everything but the fit: read, build, show sizes
    charges   find the local operators that a Hamiltonian conserves

options:
  -h, --help  show this help message and exit
  --version   show program's version number and exit

example: multipliers solve configs/xxz_ring_quench.toml

exit codes: 0 solved; 1 ran, the answer is no; 2 bad command line or config;
            3 our fault; 130 interrupted; 143 terminated
"""

SOLVE = """usage: multipliers solve [-h] [--out DIR] [--json] [--force]
                         [--driver {auto,host,jax}] [--quiet]
                         CONFIG

Solve the problem of a config; print the result and write a run folder.

positional arguments:
  CONFIG                TOML file, see docs/config.md

options:
  -h, --help            show this help message and exit
  --out DIR             run folder (default: runs/<name of the config>-<hash>)
  --json                print result.json instead of the table
  --force               replace the run folder if it is there already
  --driver {auto,host,jax}
                        loop that does the fit (default: as the config says)
  --quiet               no progress on stderr

example: multipliers solve configs/wolf_dice.toml --out runs/dice

exit codes: 0 solved; 1 ran, the answer is no; 2 bad command line or config;
            3 our fault; 130 interrupted; 143 terminated
"""

CHECK = """usage: multipliers check [-h] CONFIG

Read a config, build its problem and show targets and sizes, without solving it.

positional arguments:
  CONFIG      TOML file, see docs/config.md

options:
  -h, --help  show this help message and exit

example: multipliers check configs/wolf_dice.toml

exit codes: 0 solved; 1 ran, the answer is no; 2 bad command line or config;
            3 our fault; 130 interrupted; 143 terminated
"""


def words(text):
    """Text without its line breaks: argparse breaks lines differently from one Python to the next."""
    return text.split()


@pytest.mark.parametrize(
    ("arguments", "text"), [(["--help"], TOP), (["solve", "-h"], SOLVE), (["check", "--help"], CHECK)]
)
def test_help(arguments, text, capsys):
    with pytest.raises(SystemExit) as left:
        main(arguments)
    assert left.value.code == 0
    assert words(capsys.readouterr().out) == words(text)


def test_version(capsys):
    with pytest.raises(SystemExit) as left:
        main(["--version"])
    assert left.value.code == 0
    assert capsys.readouterr().out == f"multipliers {__version__}\n"


HEAVY = ("jax", "pydantic", "matplotlib", "jinja2", "numpy", "scipy", "pandas", "xarray")


@pytest.mark.parametrize(
    ("arguments", "allowed"),
    [
        (["--help"], ()),
        (["solve", "--help"], ()),
        (["--version"], ()),
        (["solve"], ()),
        (["solve", "nowhere.toml"], ()),
        (["check", "{broken}"], ()),
        (["check", "{misspelt}"], ("pydantic",)),
        (["check", "{formula}"], ("pydantic", "numpy")),
    ],
    ids=lambda a: " ".join(a) if isinstance(a, list) else None,
)
def test_help_and_config_errors_load_nothing_heavy(tmp_path, arguments, allowed):
    texts = {
        "broken": "kind = ",
        "misspelt": 'kind = "spins"\n[site]\n',
        "formula": 'kind="spins"\nsites = {geometry = "ring", size = 4}\ncharges.a="Sq[i]"\ntargets.a=0\n',
    }
    for name, text in texts.items():
        (tmp_path / name).write_text(text)
    given = [a.format(**{name: tmp_path / name for name in texts}) for a in arguments]
    script = f"""
import sys
from maxent.app.cli import main
code = 0
try:
    code = main({given!r})
except SystemExit as left:
    code = left.code
print("loaded", *(m for m in {HEAVY!r} if m in sys.modules))
sys.exit(code)
"""
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=False, cwd=tmp_path)
    assert done.returncode == (0 if arguments[-1] in ("--help", "--version") else 2), done.stderr
    assert set(done.stdout.splitlines()[-1].split()[1:]) <= set(allowed)


def test_python_dash_m_is_the_same_command():
    done = subprocess.run([sys.executable, "-m", "maxent", "--help"], capture_output=True, text=True, check=True)
    assert words(done.stdout) == words(TOP)
    assert done.stderr == ""


@pytest.mark.parametrize(
    ("name", "code"),
    [
        ("xxz_ring_quench", 0),
        ("wolf_dice", 0),
        ("jaynes_die", 0),
        ("noncommuting_spins", 0),
        ("unreachable", 1),
        ("edge", 1),
    ],
)
def test_exit_codes_of_the_shipped_configs(runs, name, code):
    assert runs[name].code == code


@pytest.mark.parametrize(
    "arguments",
    [[], ["fit"], ["solve"], ["solve", "a.toml", "--driver", "gpu"], ["check", "a.toml", "--json"]],
    ids=" ".join,
)
def test_bad_command_line(arguments, capsys):
    with pytest.raises(SystemExit) as left:
        main(arguments)
    assert left.value.code == 2
    assert "usage: multipliers" in capsys.readouterr().err


def test_bad_config_is_one_line_on_stderr_and_leaves_nothing(tmp_path, capsys, monkeypatch):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "bad.toml").write_text('kind = "states"\n[charges]\na = [1, 2]\n[targets]\na = nan\n')
    assert main(["solve", "bad.toml"]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err == "bad.toml:5: targets.a: expected a finite number, got nan\n"
    assert os.listdir() == ["bad.toml"]


def test_our_fault_says_so(tmp_path, capsys, monkeypatch):
    def broken(*args, **kwargs):
        raise RuntimeError("a wheel came off")

    monkeypatch.setattr("maxent.solve", broken, raising=False)
    out = tmp_path / "out"
    assert main(["solve", str(CONFIGS / "jaynes_die.toml"), "--out", str(out)]) == 3
    err = capsys.readouterr().err
    assert "Traceback" in err and "a wheel came off" in err
    assert f"fault of multipliers {__version__}; please report it" in err
    assert list(tmp_path.iterdir()) == []


def test_interrupted(tmp_path, capsys, monkeypatch):
    def stopped(*args, **kwargs):
        raise KeyboardInterrupt

    monkeypatch.setattr("maxent.solve", stopped, raising=False)
    assert main(["solve", str(CONFIGS / "jaynes_die.toml"), "--out", str(tmp_path / "a" / "b")]) == 130
    assert capsys.readouterr().err.endswith("interrupted; nothing was written\n")
    assert list(tmp_path.iterdir()) == []


def test_a_reader_that_goes_away_is_no_fault_and_changes_no_exit_code(tmp_path):
    command = [
        sys.executable,
        "-m",
        "maxent",
        "solve",
        str(CONFIGS / "unreachable.toml"),
        "--json",
        "--quiet",
    ]
    reading, writing = os.pipe()
    os.close(reading)
    try:
        done = subprocess.run(
            [*command, "--out", str(tmp_path / "out")],
            stdout=writing,
            stderr=subprocess.PIPE,
            text=True,
            check=False,
            env={k: v for k, v in os.environ.items() if k != "PYTHONUNBUFFERED"},
        )
    finally:
        os.close(writing)
    assert done.stderr == ""
    assert done.returncode == 1
    assert (tmp_path / "out" / "result.json").is_file()


def test_table_on_stdout_and_folder_on_stderr(tmp_path, capsys):
    assert main(["solve", str(CONFIGS / "unreachable.toml"), "--out", str(tmp_path / "out")]) == 1
    out, err = capsys.readouterr()
    assert out.startswith("infeasible (proved): ")
    assert "charge          target  value  residual  multiplier  error  digits\n" in out
    assert "out of reach by 0.126" in out
    assert err.splitlines()[-1] == f"wrote {tmp_path / 'out'}"


def test_json_on_stdout_is_the_file(tmp_path, capsys):
    assert main(["solve", str(CONFIGS / "jaynes_die.toml"), "--out", str(tmp_path / "out"), "--json", "--quiet"]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    assert out == (tmp_path / "out" / "result.json").read_text()
    # E. T. Jaynes, in Statistical Physics (W. A. Benjamin, 1963), from memory: lam = -0.37105 in exp(-lam i) for a
    # die of mean 4.5
    assert json.loads(out)["charges"][0]["multiplier"] == pytest.approx(-0.37105, abs=6e-6)


def test_check_shows_targets_and_sizes_and_writes_nothing(tmp_path, capsys, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert main(["check", str(CONFIGS / "noncommuting_spins.toml")]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    assert "chain of 6 spin-1/2 sites" in out
    assert "the largest of " in out and "memory" in out
    assert "charge  target  sigma  accuracy  source\n" in out
    assert os.listdir() == []


def test_check_shows_where_targets_come_from(capsys):
    assert main(["check", str(CONFIGS / "wolf_dice.toml")]) == 0
    out = capsys.readouterr().out
    assert "mean of 20 000 observations" in out
    assert "0.012" in out


def test_drivers_agree(tmp_path, runs):
    reference = json.loads((runs["wolf_dice"].folder / "result.json").read_text())
    code = main(
        [
            "solve",
            str(CONFIGS / "wolf_dice.toml"),
            "--driver",
            "jax",
            "--out",
            str(tmp_path / "out"),
            "--quiet",
        ]
    )
    found = json.loads((tmp_path / "out" / "result.json").read_text())
    assert code == 0
    assert (reference["driver"], found["driver"], found["asked_driver"]) == ("host", "jax", "jax")
    for a, b in zip(reference["charges"], found["charges"], strict=True):
        assert a["multiplier"] == pytest.approx(b["multiplier"], rel=1e-12)
