"""Every shipped config, solved once by the command itself."""

from pathlib import Path
from types import SimpleNamespace

import pytest

from maxent.app.cli import main

CONFIGS = Path(__file__).parents[2] / "configs"


@pytest.fixture(scope="session")
def runs(tmp_path_factory):
    """Name of a config -> exit code and run folder."""
    base = tmp_path_factory.mktemp("runs")
    out = {}
    for file in sorted(CONFIGS.glob("*.toml")):
        code = main(["solve", str(file), "--out", str(base / file.stem), "--quiet"])
        out[file.stem] = SimpleNamespace(code=code, folder=base / file.stem, config=file)
    return out
