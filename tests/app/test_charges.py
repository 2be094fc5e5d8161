"""The command `multipliers charges`: tables that can be pasted, JSON, and what it refuses."""

import json
import re
from pathlib import Path as File

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


def test_letters_follow_the_config(config, capsys):
    text = XXZ.replace('h = "J*(Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Delta*Sz[i]*Sz[i+1])"', 'h = "J*X[m]*X[m+1] + Z[m]"')
    text = text.replace('"h[i]"', '"h[m]"')
    assert main(["charges", config(text), "--range", "2"]) == 0
    out = capsys.readouterr().out
    assert 'energy = "h[m]"' in out and 'charge_2 = "X[i]*Y[i+1] - Y[i]*X[i+1]"' in out


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
        (
            ("size = 10", "size = 10\nspin = 1"),
            [],
            "6: sites.spin: the search is for spins 1/2 and fermions so far, not fo",
        ),
        (
            ("size = 10", "size = 2"),
            [],
            "12: charges.energy: a term covers 2 of 2 sites, so that which way around the ring",
        ),
        (("size = 10", "size = 1"), [], "12: charges.energy: "),
        (
            ('"h[i]"', '"h[i] + i*Sz[i]"'),
            [],
            "12: charges.energy: not translation-invariant: no shift by fewer than 10 ",
        ),
        (('"h[i]"', '"h[i] - h[i]"'), [], "12: charges.energy: the Hamiltonian is zero"),
        (("Delta = 0.5", "Delta = inf"), [], "8: parameters.Delta: "),
        (("energy =", "enrgy ="), [], "1: hamiltonian: no charge is called 'energy'; did you mean 'enrgy'?"),
        (('"h[i]"', '"h[i] +"'), [], "12: charges.energy: formula column "),
        (('"h[i]"', '"h[i] + Sz[0]"'), [], "12: charges.energy: not translation-invariant: no shift by fewer than 10"),
        (('"h[i]"', '"h[i] + Splus[i]"'), [], "12: charges.energy: not Hermitian: it holds"),
        (('"h[i]"', '"h[i] + Sq[i]"'), [], "12: charges.energy: formula column 8: unknown symbol 'Sq'"),
        (('kind = "spins"', 'kind = "spins"\nhamiltonian = "energi"'), [], "3: hamiltonian: no charge is called 'en"),
        (("size = 10", "size = 0"), [], "5: sites.size: "),
        (("", ""), ["--range", "15"], "1: the search up to range 15 has 805306368 unknowns and needs"),
        (
            ("", ""),
            ["--range", "1" + 30 * "0"],
            "12: charges.energy: range 1" + 30 * "0" + " of the search and 2 of the H",
        ),
    ],
)
def test_bad_input_is_one_line(config, capsys, change, options, message):
    assert main(["charges", config(XXZ.replace(*change)), *options]) == 2
    out, err = capsys.readouterr()
    assert out == "" and err.count("\n") == 1
    assert f"ring.toml:{message}" in err


def test_lattices_without_translations_and_mixed_spins(config, capsys):
    bonds = XXZ.replace('"ring"', '"bonds"\nbonds = {sides = [[0, 1], [1, 2]]}')
    bonds = re.sub(r"\[densities\]\nh = .*\n", "", bonds).replace('"h[i]"', '"Sz[i]*Sz[j] for <i, j> in sides"')
    assert main(["charges", config(bonds)]) == 2
    err = capsys.readouterr().err
    assert err.endswith(
        "ring.toml:4: sites.geometry: the search needs a ring or an open chain: a lattice given by its bonds has no "
        "translations\n"
    )
    mixed = XXZ.replace("size = 10", 'size = 5\nspin = {a = "1/2", b = 1}')
    mixed = re.sub(r"h = .*\n", 'h = "Sz[i, a]*Sz[i, b]"\n', mixed)
    assert main(["charges", config(mixed)]) == 2
    assert "ring.toml:6: sites.spin: the search is for spins 1/2 and fermions so far, not for spin-1 sites\n" in (
        capsys.readouterr().err
    )


def test_a_wrong_name_is_told_before_a_fit_as_well(config, capsys):
    assert main(["check", config(XXZ.replace('kind = "spins"', 'kind = "spins"\nhamiltonian = "energi"'))]) == 2
    assert "hamiltonian: no charge is called 'energi'; did you mean 'energy'?" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (
            'kind = "states"\n[charges]\na = [1, 2]\n[targets]\na = 1.5\n',
            "1: kind: the search for conserved operators is for spins 1/2 and fermions\n",
        ),
        (
            'kind = "bosons"\n[sites]\ngeometry = "ring"\nsize = 4\ncutoff = 2\n[charges]\nenergy = "n[i]"\n'
            "[targets]\nenergy = 1.5\n",
            "1: kind: no search for bosons: a mode has no end of local operators, and a cut-off changes their "
            "commutators\n",
        ),
    ],
)
def test_other_kinds_are_refused(config, capsys, text, message):
    assert main(["charges", config(text)]) == 2
    assert capsys.readouterr().err.endswith(message)


FERMIONS = """
kind = "fermions"
[sites]
geometry = "ring"
size = 6
species = ["up", "down"]
[parameters]
U = 3.0
[densities]
hop = "-(dagger(c[i, up])*c[i+1, up] + dagger(c[i, down])*c[i+1, down] + h.c.)"
[charges]
energy = "hop[i] + U*n[i, up]*n[i, down]"
[targets]
energy = -1.0
"""


def test_charges_of_fermions_can_be_pasted(config, capsys):
    assert main(["charges", config(FERMIONS), "--range", "3"]) == 0
    out = capsys.readouterr().out
    pasted = out[out.index("[charges]") : out.index("\n\nMost nearly")]
    names = re.findall(r"^(\w+) =", pasted, re.M)
    assert names == ["energy", *(f"charge_1_{k}" for k in (1, 2, 3, 4)), "charge_3"]
    assert 'charge_1_1 = "n[i, up]"  # range 1; exact\n' in pasted
    assert "3j*dagger(c[i, up])*c[i+1, up]" in pasted and "1j*dagger(c[i, up])*c[i+2, up]" in pasted
    again = FERMIONS[: FERMIONS.index("[charges]")].replace("size = 6", "size = 4") + pasted + "\n[targets]\n"
    again += "".join(f"{name} = 0.1\n" for name in names)
    assert main(["check", config(again)]) == 0
    # the pasted text is conserved: the reader of the config knows no commutator that is left
    from maxent.app.config import load
    from maxent.app.kinds import fermions
    from maxent.lattice import Fermions, Ring, formula

    options = load(File(config(again.replace("size = 4", "size = 5")))).options
    h = fermions.hamiltonian(options).with_parameters(U=3.0).matrix()
    for text in options.charges.values():
        q = formula(text, Ring(5, Fermions("up", "down")), options.parameters, options.densities).matrix()
        assert abs(q).max() > 0.5 and abs(h @ q - q @ h).max() < 1e-12


def test_open_chains_tell_what_their_ends_break(config, capsys):
    text = XXZ.replace('"ring"', '"chain"')
    assert main(["charges", config(text), "--range", "3"]) == 0
    out = capsys.readouterr().out
    assert 'charge_1 = "Sz[i]"  # range 1; exact\n' in out
    assert re.search(r"^charge_3 = .*# range 3; exact in the bulk, broken by the ends$", out, re.M)
    assert "its ends may break what is found" in out and "rings of at least" not in out
    assert main(["charges", config(text), "--range", "3", "--json"]) == 0
    charges = json.loads(capsys.readouterr().out)["searches"][0]["charges"]
    assert [q["kept_by_ends"] for q in charges] == [True, True, False]
    assert main(["charges", config(XXZ), "--range", "3", "--json"]) == 0
    assert {q["kept_by_ends"] for q in json.loads(capsys.readouterr().out)["searches"][0]["charges"]} == {None}


def test_a_subscript_that_names_a_species_is_not_taken(config, capsys):
    text = FERMIONS.replace('"up"', '"i"').replace(", up]", ", i]").replace("[i", "[s").replace("hop[i]", "hop[s]")
    assert main(["charges", config(text), "--range", "1"]) == 0
    assert 'charge_1_1 = "n[j, i]"' in capsys.readouterr().out


def test_named_sites_count_as_sites(config, capsys):
    text = XXZ.replace("size = 10", 'size = 5\ncell = ["a", "b"]')
    text = text.replace('"J*(Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Delta*Sz[i]*Sz[i+1])"', '"J*Sz[i, a]*Sz[i, b] + Sx[i, a]"')
    assert main(["charges", config(text), "--range", "4", "--json"]) == 0
    found = json.loads(capsys.readouterr().out)
    assert (found["sites"], found["cell"]) == (10, 2)
    assert not any("rings of at least" in remark for remark in found["searches"][0]["remarks"])


@pytest.mark.parametrize("given", ["0", "-1", "2.5", "all", "1e3", "", "+2"])
def test_bad_range(config, capsys, given):
    with pytest.raises(SystemExit) as left:
        main(["charges", config(XXZ), f"--range={given}"])
    assert left.value.code == 2
    assert f"argument --range: expected a whole number from 1 on, got '{given}'" in capsys.readouterr().err
