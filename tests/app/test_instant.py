"""A fit to a charge that the Hamiltonian does not conserve: terminal, record and report call it no stationary state."""

import html
import json
import re

import numpy as np
import pytest
import scipy.linalg as sla

from maxent.app.cli import main

RING = """
kind = "spins"
[sites]
geometry = "ring"
size = 4
[charges]
energy = "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 0.5*Sz[i]*Sz[i+1]"
tilt = "{tilt}[i]"
[targets]
energy = -0.6
tilt = 0.5
"""
PAULI = {"x": np.array([[0, 1], [1, 0]]) / 2, "y": np.array([[0, -1j], [1j, 0]]) / 2, "z": np.diag([1, -1]) / 2}


def spin(axis, site):
    return np.kron(np.kron(np.eye(2**site), PAULI[axis]), np.eye(2 ** (3 - site)))


@pytest.fixture
def run(tmp_path, capsys):
    """Everything that a run says: terminal, record, text of the report."""

    def solve(tilt):
        file = tmp_path / f"{tilt}.toml"
        file.write_text(RING.format(tilt=tilt))
        assert main(["solve", str(file), "--out", str(tmp_path / tilt), "--quiet"]) == 0
        record = json.loads((tmp_path / tilt / "result.json").read_text())
        page = (tmp_path / tilt / "report.html").read_text()
        page = html.unescape(re.sub(r"<(style|script)\b.*?</\1>|<[^>]+>", " ", page, flags=re.S))
        return capsys.readouterr().out, record, page

    return solve


def test_the_state_is_called_the_least_biased_one_at_one_instant(run):
    said, record, page = run("Sx")
    h = sum(
        weight * spin(axis, i) @ spin(axis, (i + 1) % 4)
        for axis, weight in (("x", 1.0), ("y", 1.0), ("z", 0.5))
        for i in range(4)
    )
    q = sum(spin("x", i) for i in range(4))
    lam = {c["name"]: c["multiplier"] for c in record["charges"]}
    rho = sla.expm(-lam["energy"] * h - lam["tilt"] * q)
    levels = np.linalg.eigvalsh(h)
    defect = np.linalg.norm(h @ rho - rho @ h) / (np.ptp(levels) * np.linalg.norm(rho))
    assert defect > 0.01
    (note,) = record["notes"]
    for text in (said, note, page):
        assert "Not stationary: 'tilt' is not conserved: its commutator with the Hamiltonian is" in text
        assert "This is the least biased state at one instant, not a state that lasts." in text
        assert f"|[H, rho]| is {defect:.3g} of the largest possible, H being 'energy'." in text
        # nothing else speaks of a stationary state
        assert re.findall(r"\w+ stationary", text) == ["Not stationary"]


def test_a_charge_that_is_conserved_leaves_no_word_of_it(run):
    said, record, page = run("Sz")
    assert record["notes"] == []
    assert not any("instant" in text or "tationary" in text for text in (said, page))
