"""The command `multipliers charges`: tables that can be pasted, JSON, and what it refuses."""

import json
import re

import pytest

from maxent.app.cli import main

XXZ = """
kind = "spins"
[sites]
geometry = "ring"
size = 10
[parameters]
J = 1.0
Delta = 0.5
[densities]
h = "J*(Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Delta*Sz[i]*Sz[i+1])"
[charges]
energy = "h[i]"
[targets]
energy = -1.0
"""


@pytest.fixture
def config(tmp_path):
    def write(text):
        file = tmp_path / "ring.toml"
        file.write_text(text)
        return str(file)

    return write


def test_what_is_printed_can_be_pasted(config, capsys):
    assert main(["charges", config(XXZ), "--range", "4"]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    assert out.startswith("ring.toml: operators that commute with 'energy' (range 2, 1 site per cell), at infinite vol")
    assert "\n    4          4    1 " in out
    pasted = out[out.index("[charges]") : out.index("\n\nMost nearly")]
    assert 'energy = "h[i]"  # range 2; the Hamiltonian\ncharge_1 = "Sz[i]"  # range 1; exact\n' in pasted
    names = re.findall(r"^(\w+) =", pasted, re.M)
    assert names == ["energy", "charge_1", "charge_3", "charge_4"]
    targets = "\n".join(f"{name} = 0.0" for name in names)
    again = XXZ[: XXZ.index("[charges]")] + pasted + f"\n[targets]\n{targets}\n"
    assert main(["check", config(again)]) == 0
    assert "All of them commute with one another." in out
    assert "quasi-local charges, larger ranges and other momenta are not found" in out


def test_letters_and_subscript_follow_the_config(config, capsys):
    text = XXZ.replace('h = "J*(Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Delta*Sz[i]*Sz[i+1])"', 'h = "J*X[m]*X[m+1] + Z[m]"')
    text = text.replace("Delta", "i").replace('"h[i]"', '"h[m]"')
    assert main(["charges", config(text), "--range", "2"]) == 0
    out = capsys.readouterr().out
    assert 'energy = "h[m]"' in out and 'charge_2 = "X[j]*Y[j+1] - Y[j]*X[j+1]"' in out


def test_json_has_everything(config, capsys):
    text = XXZ.replace("Delta = 0.5", "Delta = 0.0")
    assert main(["charges", config(text), "--range", "3", "--momentum", "both", "--json"]) == 0
    found = json.loads(capsys.readouterr().out)
    assert found["schema"] == "maxent.charges/1"
    zero, pi = found["searches"]
    assert (zero["momentum"], pi["momentum"]) == ("0", "pi")
    assert (zero["counts"], pi["counts"]) == ([1, 3, 5], [0, 2, 4])
    assert [q["name"] for q in zero["charges"]] == ["energy", "charge_1", "charge_2", "charge_3_1", "charge_3_2"]
    assert [q["name"] for q in pi["charges"]] == ["staggered_2_1", "staggered_2_2", "staggered_3_1", "staggered_3_2"]
    assert pi["charges"][0]["formula"] == "(-1)**i*(Sx[i]*Sx[i+1] - Sy[i]*Sy[i+1])"
    assert all(sum(w["coefficient"] ** 2 for w in q["orthonormal"]) == pytest.approx(1.0) for q in zero["charges"])
    assert zero["nearly"][0]["value"] > 0 and len(zero["nearly"]) == 3


def test_pairs_that_do_not_commute_are_listed(config, capsys):
    assert main(["charges", config(XXZ.replace("Delta = 0.5", "Delta = 1.0")), "--range", "2"]) == 0
    out = capsys.readouterr().out
    assert "do not commute" in out and "charge_1_1, charge_1_2" in out
    assert "Not all of them commute with one another" in out


def test_long_lists_are_cut(config, capsys):
    text = XXZ.replace('"h[i]"', '"Sz[i]*Sz[i+1] + 0.3*Sz[i]"')
    assert main(["charges", config(text), "--range", "5"]) == 0
    out = capsys.readouterr().out
    assert "# and 6 more: --json lists all" in out and "Fragmented: 46 operators" in out


def test_a_ring_that_is_too_short_is_told(config, capsys):
    assert main(["charges", config(XXZ.replace("size = 10", "size = 5")), "--momentum", "both", "--range", "5"]) == 0
    out = capsys.readouterr().out
    assert "They are conserved on rings of at least 6 sites; this has 5." in out
    assert "They are conserved on rings of at least 6 sites, a multiple of 2; this has 5." in out


def test_the_hamiltonian_is_chosen_by_a_key(config, capsys):
    text = XXZ.replace('kind = "spins"', 'kind = "spins"\nhamiltonian = "field"')
    text = text.replace('"h[i]"', '"h[i]"\nfield = "Sx[i] + Sz[i]*Sz[i+1]"') + "field = 0.0\n"
    assert main(["charges", config(text), "--range", "3"]) == 0
    assert "commute with 'field'" in capsys.readouterr().out
    assert main(["check", config(text)]) == 0


@pytest.mark.parametrize(
    ("change", "options", "message"),
    [
        (('"ring"', '"chain"'), [], "12: charges.energy: the search needs a ring: the ends of an open chain break the"),
        (('"h[i]"', '"h[i] + Sz[0]"'), [], "12: charges.energy: not translation-invariant: no shift by fewer than 10"),
        (('"h[i]"', '"h[i] + Splus[i]"'), [], "12: charges.energy: not Hermitian: it holds"),
        (('"h[i]"', '"h[i] + Sq[i]"'), [], "12: charges.energy: formula column 8: unknown symbol 'Sq'"),
        (('kind = "spins"', 'kind = "spins"\nhamiltonian = "energi"'), [], "3: hamiltonian: no charge is called 'en"),
        (("size = 10", "size = 0"), [], "5: sites.size: "),
        (("", ""), ["--range", "15"], "1: the search up to range 15 has 805306368 unknowns and needs"),
    ],
)
def test_bad_input_is_one_line(config, capsys, change, options, message):
    assert main(["charges", config(XXZ.replace(*change)), *options]) == 2
    out, err = capsys.readouterr()
    assert out == "" and err.count("\n") == 1
    assert f"ring.toml:{message}" in err


def test_a_wrong_name_is_told_before_a_fit_as_well(config, capsys):
    assert main(["check", config(XXZ.replace('kind = "spins"', 'kind = "spins"\nhamiltonian = "energi"'))]) == 2
    assert "hamiltonian: no charge is called 'energi'; did you mean 'energy'?" in capsys.readouterr().err


def test_other_kinds_are_refused(config, capsys):
    assert main(["charges", config('kind = "states"\n[charges]\na = [1, 2]\n[targets]\na = 1.5\n')]) == 2
    assert "1: kind: the search for conserved operators is for the kind 'spins' so far\n" in capsys.readouterr().err


def test_bad_range(config, capsys):
    with pytest.raises(SystemExit) as left:
        main(["charges", config(XXZ), "--range", "0"])
    assert left.value.code == 2
    assert "argument --range: expected a whole number from 1 on, got '0'" in capsys.readouterr().err
