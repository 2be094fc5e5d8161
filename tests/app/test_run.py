"""Run folders: whole or not at all, never silently replaced, the same bytes for the same input."""

import json
import os
import subprocess
import sys
from hashlib import sha256
from pathlib import Path

import pytest

from maxent.app.cli import main
from maxent.app.config import build, load
from maxent.app.run import folder, name
from maxent.errors import ConfigError

CONFIGS = Path(__file__).parents[2] / "configs"
FILES = {"config.toml", "result.json", "result.nc", "report.html", "manifest.json"}


def tree(base):
    """Every file below a folder, hidden ones too, with its content."""
    return {str(p.relative_to(base)): p.read_bytes() for p in sorted(base.rglob("*")) if p.is_file()}


def solve(config, *more):
    return main(["solve", str(config), "--quiet", *map(str, more)])


@pytest.mark.parametrize("config", ["wolf_dice", "unreachable", "edge", "noncommuting_spins", "xxz_ring_quench"])
def test_rerun_is_byte_identical_except_for_the_manifest(runs, tmp_path, config):
    solve(runs[config].config, "--out", tmp_path / "again")
    first, again = tree(runs[config].folder), tree(tmp_path / "again")
    assert set(first) == set(again)
    figures = set(first) - FILES
    assert figures and all(f.startswith("figures/") and f.endswith(".svg") for f in figures)
    differing = {f for f in first if first[f] != again[f]}
    assert differing <= {"manifest.json"}
    assert first["config.toml"] == runs[config].config.read_bytes()


def test_manifest_tells_versions_times_and_digests(runs):
    base = runs["wolf_dice"].folder
    manifest = json.loads((base / "manifest.json").read_text())
    assert {"maxent", "numpy", "scipy", "jax", "python"} <= set(manifest["versions"])
    assert set(manifest["seconds"]) == {"build", "fit", "thermodynamics", "total"}
    assert manifest["seed"] is None
    files = {f: content for f, content in tree(base).items() if f != "manifest.json"}
    assert manifest["files"] == {f: sha256(content).hexdigest() for f, content in files.items()}
    assert "figures/spectrum.svg" in manifest["files"]


def test_default_folder_is_named_after_the_config(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    assert main(["solve", str(CONFIGS / "jaynes_die.toml")]) == 0
    (made,) = (tmp_path / "runs").iterdir()
    assert made.name.startswith("jaynes_die-") and len(made.name) == len("jaynes_die-") + 8
    assert {p.name for p in made.iterdir()} == FILES | {"figures"}
    assert capsys.readouterr().err.splitlines()[-1] == f"wrote {made.relative_to(tmp_path)}"


def test_an_existing_folder_is_refused_before_the_work_and_left_alone(tmp_path, capsys, monkeypatch):
    out = tmp_path / "out"
    assert solve(CONFIGS / "jaynes_die.toml", "--out", out) == 0
    before = tree(tmp_path)
    monkeypatch.setattr("maxent.app.run.survey", lambda config: pytest.fail("work was done"))
    assert solve(CONFIGS / "jaynes_die.toml", "--out", out) == 2
    err = capsys.readouterr().err
    assert err == f"{out}: exists already; choose another folder with --out, or replace it with --force\n"
    assert tree(tmp_path) == before


def test_the_default_folder_is_refused_too(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    assert solve(CONFIGS / "jaynes_die.toml") == 0
    before = tree(tmp_path)
    assert solve(CONFIGS / "jaynes_die.toml") == 2
    assert "exists already" in capsys.readouterr().err
    assert tree(tmp_path) == before


def test_force_replaces_a_run_folder_and_nothing_else(tmp_path, capsys):
    out = tmp_path / "out"
    assert solve(CONFIGS / "jaynes_die.toml", "--out", out) == 0
    (out / "stale.txt").write_text("from the run before")
    assert solve(CONFIGS / "unreachable.toml", "--out", out, "--force") == 1
    assert {f.name for f in out.iterdir()} == FILES | {"figures"}
    assert {f.name for f in tmp_path.iterdir()} == {"out"}
    assert json.loads((out / "result.json").read_text())["verdict"] == "infeasible"
    treasure = tmp_path / "treasure"
    treasure.mkdir()
    (treasure / "thesis.tex").write_text("ten years of work")
    assert solve(CONFIGS / "jaynes_die.toml", "--out", treasure, "--force") == 2
    assert "is no run folder" in capsys.readouterr().err
    assert (treasure / "thesis.tex").read_text() == "ten years of work"


def test_force_keeps_the_old_folder_when_the_new_run_fails(tmp_path, monkeypatch):
    out = tmp_path / "out"
    assert solve(CONFIGS / "jaynes_die.toml", "--out", out) == 0
    before = tree(tmp_path)

    def broken(*args, **kwargs):
        raise RuntimeError

    monkeypatch.setattr("maxent.app.report.render", broken)
    assert solve(CONFIGS / "jaynes_die.toml", "--out", out, "--force") == 3
    assert tree(tmp_path) == before


def test_a_disk_that_fails_at_the_last_step_costs_nothing(tmp_path, monkeypatch, capsys):
    out = tmp_path / "out"
    assert solve(CONFIGS / "jaynes_die.toml", "--out", out) == 0
    before = tree(tmp_path)
    rename = Path.rename

    def failing(self, to):
        if Path(to) == out and not self.name.endswith(".old"):
            raise OSError(28, "No space left on device")
        return rename(self, to)

    monkeypatch.setattr(Path, "rename", failing)
    assert solve(CONFIGS / "jaynes_die.toml", "--out", out, "--force") == 2
    assert capsys.readouterr().err == f"{out}: cannot be written: No space left on device\n"
    assert tree(tmp_path) == before


def test_a_folder_that_cannot_be_written_is_one_line_before_the_fit(tmp_path, capsys, monkeypatch):
    (tmp_path / "file").write_text("no folder")
    monkeypatch.setattr("maxent.app.run._fit", lambda *args: pytest.fail("work was done"))
    for out in (tmp_path / "file" / "out", tmp_path / "file" / "deep" / "out"):
        assert solve(CONFIGS / "jaynes_die.toml", "--out", out) == 2
        assert capsys.readouterr().err == f"{out}: cannot write a folder here: Not a directory\n"
    long = tmp_path / ("x" * 300)
    assert solve(CONFIGS / "jaynes_die.toml", "--out", long) == 2
    assert capsys.readouterr().err == f"{long}: cannot write a folder here: File name too long\n"
    assert os.listdir(tmp_path) == ["file"]


def test_a_file_in_the_way_is_refused(tmp_path, capsys):
    out = tmp_path / "out"
    out.write_text("a file")
    assert solve(CONFIGS / "jaynes_die.toml", "--out", out, "--force") == 2
    assert "is no run folder" in capsys.readouterr().err
    assert out.read_text() == "a file"


def test_a_folder_appears_whole_or_not_at_all(tmp_path):
    target = tmp_path / "a" / "b" / "run"
    with pytest.raises(ZeroDivisionError), folder(target, force=False) as part:
        (part / "half.txt").write_text("half")
        assert part.parent == target.parent and not target.exists()
        raise ZeroDivisionError
    assert list(tmp_path.iterdir()) == []
    with folder(target, force=False) as part:
        (part / "whole.txt").write_text("whole")
        assert not target.exists()
    assert tree(tmp_path) == {"a/b/run/whole.txt": b"whole"}
    with pytest.raises(ConfigError, match="exists already"), folder(target, force=False):
        pytest.fail("entered")


def test_the_name_changes_with_all_that_may_change_the_result_and_with_nothing_else(tmp_path):
    def named(text, values=(1.0, 2.0), driver="auto"):
        (tmp_path / "a.csv").write_text("\n".join(map(str, values)))
        (tmp_path / "c.toml").write_text(text)
        config = load(tmp_path / "c.toml")
        return name(config, build(config), driver)

    text = 'kind = "states"\n[charges]\na = "a.csv"\n[targets]\na = 1.5\n'
    first = named(text)
    assert named("# a comment\n" + text.replace("a = 1.5", "a   = 1.50")) == first
    others = [
        named(text.replace("1.5", "1.25")),
        named(text, values=(1.0, 3.0)),
        named(text, driver="jax"),
        named('title = "x"\n' + text),
    ]
    assert len({first, *others}) == 5


def test_without_template_and_plot_libraries_there_is_all_but_page_and_figures(tmp_path, capsys, monkeypatch):
    monkeypatch.setattr("maxent.app.run.find_spec", lambda name: None)
    assert main(["solve", str(CONFIGS / "jaynes_die.toml"), "--out", str(tmp_path / "out")]) == 0
    said = capsys.readouterr().err
    assert "no report.html: it needs the package jinja2" in said
    assert "no figures: they need the package matplotlib" in said
    assert set(tree(tmp_path / "out")) == FILES - {"report.html"}


def test_compiling_is_told_apart_and_kept(tmp_path):
    """The JAX driver's compile seconds stand in the manifest, and its products in the user's cache folder."""
    command = [sys.executable, "-m", "maxent", "solve", str(CONFIGS / "jaynes_die.toml"), "--driver", "jax"]
    done = subprocess.run(
        [*command, "--out", str(tmp_path / "run")],
        env=os.environ | {"XDG_CACHE_HOME": str(tmp_path / "cache")},
        capture_output=True,
        text=True,
        check=True,
    )
    seconds = json.loads((tmp_path / "run" / "manifest.json").read_text())["seconds"]
    assert 0 < seconds["compile"] <= seconds["fit"] <= seconds["total"]
    assert "s of them compiling" in done.stderr
    assert any((tmp_path / "cache" / "maxent" / "compiled").iterdir())
