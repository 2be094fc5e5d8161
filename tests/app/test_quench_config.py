"""Lattice kinds and `[quench]`: configs against the same problems posed in Python, and what bad ones are told."""

import json

import numpy as np
import pytest
import scipy.linalg as sl
from jsonschema import Draft202012Validator
from scipy.io import netcdf_file

import maxent
from maxent.app import run, study_words
from maxent.app.cli import main
from maxent.app.config import build, load
from maxent.errors import ConfigError
from maxent.lattice import (
    Bosons,
    Chain,
    Fermions,
    Lattice,
    PatternState,
    ProductState,
    Ring,
    Spin,
    domain_wall,
    formula,
)
from maxent.quench import comparison, sizes

RING = """kind = "spins"
[sites]
geometry = "ring"
size = 6
[densities]
h = "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 0.6*Sz[i]*Sz[i+1]"
[charges]
energy = "h[i]"
field = "Sz[i]"
[start]
theta = [0.4, 1.9]
[targets]
energy = "from start"
field = "from start"
[predictions]
zz = "Sz[i]*Sz[i+1]/L"
"""
START = "theta = [0.4, 1.9]\n"
DENSITY = {"h": "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 0.6*Sz[i]*Sz[i+1]"}
QUENCH = RING + "[quench]\nblocks = [1, 2]\n"


def job(folder, text):
    file = folder / "c.toml"
    file.write_text(text)
    return build(load(file))


def problems(folder, text):
    with pytest.raises(ConfigError) as caught:
        job(folder, text)
    return [line.split("c.toml:")[1] for line in str(caught.value).splitlines()]


def started(text):
    return RING.replace(START, text)


def targets(found):
    return {name: t.value for name, t in found.targets.items()}


def dense(text, sites, **more):
    return formula(text, sites, more, DENSITY).matrix().toarray()


# ---------------------------------------------------------------- sites

CELLS = [
    ('geometry = "chain"\nsize = 3\nspin = 1', "Sz[i]", Chain(3, Spin(1))),
    ('geometry = "chain"\nsize = 3\nspin = "3/2"', "Sz[i]*Sz[i+1]", Chain(3, Spin("3/2"))),
    (
        'geometry = "ring"\nsize = 2\nspin = {a = "1/2", b = 1}\nbonds = {pairs = [["a", "b"], ["b", "a", 1]]}',
        "Sz[x]*Sz[y] for <x, y>",
        Ring(2, {"a": Spin(), "b": Spin(1)}, bonds={"pairs": [("a", "b"), ("b", "a", 1)]}),
    ),
    ('geometry = "ring"\nsize = 4\nbonds = {far = [2]}', "Sz[a]*Sz[b] for <a, b> in far", Ring(4, bonds={"far": [2]})),
    (
        'geometry = "bonds"\nsize = 3\nbonds = {sides = [[0, 1], [1, 2], [2, 0]]}',
        "Sz[a]*Sz[b] for <a, b>",
        Lattice(3, {"sides": [(0, 1), (1, 2), (2, 0)]}),
    ),
]


@pytest.mark.parametrize(("table", "text", "sites"), CELLS)
def test_sites_are_those_of_the_lattice(tmp_path, table, text, sites):
    found = job(tmp_path, f'kind = "spins"\n[sites]\n{table}\n[charges]\na = "{text}"\n[targets]\na = 0\n')
    assert found.family.dims == sites.dims
    state = found.family.state(np.zeros(1))
    operator = formula(text, sites).matrix()
    mean = (operator @ operator).diagonal().sum() / operator.shape[0]
    assert state.mean(operator @ operator) == pytest.approx(mean, rel=1e-13) and mean > 0


@pytest.mark.parametrize("ends", [False, True])
def test_a_ladder_has_rungs_and_legs(tmp_path, ends):
    text = 'kind = "spins"\n[sites]\ngeometry = "ladder"\nsize = 3\nopen = {}\n[charges]\n{}[targets]\n{}'
    charges = 'r = "Sz[a]*Sz[b] for <a, b> in rungs"\nl = "Sz[i,left]*Sz[i+1,left] + Sz[i,right]*Sz[i+1,right]"\n'
    found = job(tmp_path, text.format(str(ends).lower(), charges, "r = 0\nl = 0\n"))
    # at infinite temperature every bond gives 1/16, and different bonds are independent: the covariance counts them
    bonds = np.diag(found.family.evaluate(np.zeros(2), 2).covariance) * 16
    assert bonds == pytest.approx([3, 4 if ends else 6], rel=1e-12)
    assert found.facts["sites"].startswith("ladder of 6 spin-1/2 sites, 3 cells of left and right")


FERMIONS = """kind = "fermions"
[sites]
geometry = "ring"
size = 3
species = ["up", "down"]
[charges]
energy = "2*n[i,up]*n[i,down] - (dagger(c[i,up])*c[i+1,up] + dagger(c[i,down])*c[i+1,down] + h.c.)"
number = "n[i,up] + n[i,down]"
[start]
pattern = ["up", "down", [1, 1]]
[targets]
energy = "from start"
number = "from start"
"""
BOSONS = """kind = "bosons"
[sites]
geometry = "ring"
size = 4
cutoff = 3
[charges]
energy = "-(dagger(b[i])*b[i+1] + h.c.) + n[i]*(n[i]-1)"
number = "n[i]"
[start]
pattern = [2, 0]
[targets]
energy = "from start"
number = "from start"
"""


@pytest.mark.parametrize(
    ("text", "sites", "pattern"),
    [
        (FERMIONS, Ring(3, Fermions("up", "down")), ["up", "down", [1, 1]]),
        (BOSONS, Ring(4, Bosons(cutoff=3)), [2, 0]),
    ],
    ids=["fermions", "bosons"],
)
def test_particles_against_the_lattice(tmp_path, text, sites, pattern):
    found = job(tmp_path, text)
    start = PatternState(sites, pattern)
    formulas = {name: line.split('"')[1] for name in ("energy", "number") for line in text.splitlines()
                if line.startswith(f"{name} = ") and "from" not in line}  # fmt: skip
    operators = {name: formula(f, sites) for name, f in formulas.items()}
    assert targets(found) == pytest.approx({name: start.mean(q) for name, q in operators.items()}, abs=1e-14)
    result = maxent.solve(found.family, targets(found)).require()
    k = sum(result.multipliers[name] * q.matrix().toarray() for name, q in operators.items())
    rho = sl.expm(-k)
    for name, q in operators.items():
        mean = np.trace(rho @ q.matrix().toarray()).real / np.trace(rho).real
        assert mean == pytest.approx(targets(found)[name], abs=1e-9)


# ---------------------------------------------------------------- symmetry blocks


def test_blocks_of_symmetries_give_the_same_state(tmp_path):
    found = job(tmp_path, RING)
    assert "translation (6 sectors)" in found.facts["symmetries"]
    assert found.family.basis is not None
    plain = maxent.families.Matrices({"energy": dense("h[i]", Ring(6)), "field": dense("Sz[i]", Ring(6))}, dims=[2] * 6)
    ours, theirs = (maxent.solve(f, targets(found)).require() for f in (found.family, plain))
    assert ours.multipliers == pytest.approx(theirs.multipliers, rel=1e-11)
    assert ours.mean(found.predictions["zz"]) == pytest.approx(theirs.mean(found.predictions["zz"]), rel=1e-11)
    np.testing.assert_allclose(ours.state.reduced([0, 1]), theirs.state.reduced([0, 1]), atol=1e-12)


def test_what_is_diagonal_or_small_needs_no_symmetries(tmp_path):
    ising = RING.replace("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + ", "").replace(START, "theta = 0.4\n")
    assert "symmetries" not in job(tmp_path, ising).facts
    assert "symmetries" not in job(tmp_path, RING.replace("size = 6", "size = 4").replace(START, "theta = 1\n")).facts


# ---------------------------------------------------------------- starts


def mean_of(vector, text):
    return float(np.real(vector.conj() @ dense(text, Ring(6)) @ vector))


def thermal(text, beta):
    rho = sl.expm(-beta * dense(text, Ring(6)))
    return rho / np.trace(rho)


STARTS = [
    ('pattern = ["up", "down"]\n', lambda: PatternState(Ring(6), ["up", "down"]).vector()),
    (
        'domain_wall = {left = ["up"], right = ["down", "up"], at = 2}\n',
        lambda: domain_wall(Ring(6), ["up"], ["down", "up"], at=2).vector(),
    ),
    ('theta = "pi/3"\nphi = "2*pi*i/L"\n', lambda: ProductState(Ring(6), "pi/3", "2*pi*i/L").vector()),
    ('ground_of = "Sx[i]"\n', lambda: np.full(64, 0.125) * np.array([(-1) ** bin(k).count("1") for k in range(64)])),
]


@pytest.mark.parametrize(("text", "vector"), STARTS)
def test_pure_starts_give_their_means(tmp_path, text, vector):
    found = job(tmp_path, started(text))
    for name, f in (("energy", "h[i]"), ("field", "Sz[i]")):
        assert found.targets[name].value == pytest.approx(mean_of(vector(), f), abs=1e-12)
        assert 0 < found.targets[name].accuracy < 1e-11


def test_a_thermal_start_gives_its_means(tmp_path):
    found = job(tmp_path, started('thermal_of = "h[i] + 0.3*Sz[i]"\nbeta = 0.7\n'))
    rho = thermal("h[i] + 0.3*Sz[i]", 0.7)
    expected = {n: np.trace(rho @ dense(f, Ring(6))).real for n, f in (("energy", "h[i]"), ("field", "Sz[i]"))}
    assert targets(found) == pytest.approx(expected, abs=1e-12)


def test_files_of_vectors_and_densities(tmp_path):
    vector = ProductState(Ring(6), 1.1, "0.3*i").vector()
    np.save(tmp_path / "v.npy", vector)
    np.savez(tmp_path / "many.npz", rho=np.outer(vector, vector.conj()), other=np.eye(2))
    by_vector = job(tmp_path, started('file = "v.npy"\n'))
    assert by_vector.targets["energy"].value == pytest.approx(mean_of(vector, "h[i]"), abs=1e-12)
    assert set(by_vector.digests) == {"v.npy"}
    assert targets(job(tmp_path, started('file = "many.npz:rho"\n'))) == pytest.approx(targets(by_vector), abs=1e-12)


def test_a_mixture_mixes_the_means(tmp_path):
    parts = (
        '[[start.mixture]]\nweight = 0.25\npattern = ["up"]\n[[start.mixture]]\nweight = 0.75\nthermal_of = "h[i]"\n'
    )
    found = job(tmp_path, started(parts + "beta = 0.5\n"))
    assert found.targets["field"].value == pytest.approx(0.25 * 3, abs=1e-12)
    energy = 0.25 * 0.6 * 6 / 4 + 0.75 * np.trace(thermal("h[i]", 0.5) @ dense("h[i]", Ring(6))).real
    assert found.targets["energy"].value == pytest.approx(energy, abs=1e-12)


def test_degenerate_ground_states_are_told(tmp_path):
    found = job(tmp_path, started('ground_of = "-Sz[i]*Sz[i+1]"\n'))
    (note,) = found.remarks(maxent.solve(found.family, targets(found)))
    assert "2-fold degenerate ground space, taken as the equal mixture" in note
    assert found.targets["field"].value == pytest.approx(0, abs=1e-12)


def test_stated_accuracy_is_kept_where_it_is_the_larger(tmp_path):
    text = RING.replace(START, "theta = 0.4\n") + "[accuracy]\nenergy = 1e-3\nfield = 1e-30\n"
    found = job(tmp_path, text)
    assert found.targets["energy"].accuracy == 1e-3
    assert 1e-17 < found.targets["field"].accuracy < 1e-13


# ---------------------------------------------------------------- bad input

BAD_SITES = [
    ("size = 6", "", "2: sites.size: missing; give `size`, or `sizes` for a series with [quench]"),
    ("size = 6", "size = 6\nsizes = [4, 6]", "5: sites.sizes: give `size` or `sizes`, not both"),
    ("size = 6", "sizes = [4, 6]", "4: sites.sizes: several sizes are for [quench]; give one `size`"),
    ("size = 6", "size = 6\nspin = 0.3", "5: sites.spin: Spin: s must be a multiple of 1/2"),
    ("size = 6", 'size = 6\ncell = ["a", "a"]', "5: sites.cell: "),
    ("size = 6", "size = 6\nbonds = {far = [0]}", "5: sites.bonds: "),
    ("size = 6", "size = 6\nopen = true", "5: sites.open: for ladders"),
    ("size = 6", "size = 60\nspin = 1", "4: sites.size: 3^60 states need at least "),
    ("size = 6", "size = 70\nspin = 1", "4: sites.size: 3^70 states fit into no machine"),
    ('geometry = "ring"', 'geometry = "bonds"', '2: sites: geometry = "bonds" needs the table `bonds`'),
]

BAD_STARTS = [
    ("", "10: start: no state; give one of pattern, domain_wall, ground_of, thermal_of, file, theta or mixture"),
    ('theta = 1\npattern = ["up"]\n', "10: start: one way to make a state is needed, got theta and pattern"),
    ('phi = 1\npattern = ["up"]\n', "11: start.phi: goes with theta, which is not given"),
    ('thermal_of = "h[i]"\n', "11: start.thermal_of: goes with beta, which is not given"),
    ('beta = 1\npattern = ["up"]\n', "11: start.beta: goes with thermal_of, which is not given"),
    (
        'pattern = ["up", "up", "up", "down"]\n',
        "11: start.pattern: the pattern of 4 entries does not fit a ring of 6 sites",
    ),
    ('pattern = ["left"]\n', "11: start.pattern: pattern[0]: expected 'up', 'down' or a value of Sz"),
    ('domain_wall = {left = ["up"], right = ["up"], at = 6}\n', "11: start.domain_wall: domain wall: at must be"),
    ('ground_of = "Sq[i]"\n', "11: start.ground_of: formula column 1: unknown symbol 'Sq'"),
    ('ground_of = "Splus[i]"\n', "11: start.ground_of: not Hermitian: it holds "),
    ('file = "short.npy"\n', "11: start.file: 'short.npy' has shape 8; 6 sites need a vector of 64 amplitudes or"),
    ('file = "long.npy"\n', "11: start.file: start 'long.npy' has norm 8, not 1: divide"),
    ('file = "none.npy"\n', "11: start.file: file 'none.npy' cannot be read"),
    ('file = "pickle.npy"\n', "11: start.file: file 'pickle.npy': holds Python objects; only plain numbers are read"),
    ('file = "start.txt"\n', "11: start.file: 'start.txt' is no file of arrays; expected name.npy or name.npz:array"),
    ('file = "many.npz"\n', "11: start.file: 'many.npz' may hold several arrays; say which one, name.npz:array"),
    (
        '[[start.mixture]]\nweight = 0.5\npattern = ["up"]\n',
        "11: start.mixture: weights must be probabilities that add up to 1, got 0.5",
    ),
    (
        '[[start.mixture]]\nweight = 0.5\npattern = ["up"]\n[[start.mixture]]\nweight = 0.75\npattern = ["down"]\n',
        "11: start.mixture: weights must be probabilities that add up to 1, got 0.5 and 0.75",
    ),
]


@pytest.mark.parametrize("case", BAD_SITES, ids=lambda c: str(c[1])[:40])
def test_bad_sites(tmp_path, case):
    old, new, *begins = case
    lines = problems(tmp_path, RING.replace(old, new, 1))
    assert any(lines[0].startswith(begin) for begin in begins), lines


@pytest.mark.parametrize(("text", "begin"), BAD_STARTS, ids=lambda x: str(x)[:40])
def test_bad_starts(tmp_path, text, begin):
    np.save(tmp_path / "short.npy", np.ones(8) / 8**0.5)
    np.save(tmp_path / "long.npy", np.ones(64))
    np.save(tmp_path / "pickle.npy", np.array([{"a": 1}], dtype=object), allow_pickle=True)
    (line,) = problems(tmp_path, RING.replace("[start]\n" + START, "[start]\n" + text))
    assert line.startswith(begin)


def test_several_problems_are_told_at_once(tmp_path):
    text = QUENCH.replace('field = "from start"', "field = 0.3") + 'insist = ["feld"]\nwindow = -1\ntimes = []\n'
    lines = problems(tmp_path, text.replace("blocks = [1, 2]", "blocks = [0]"))
    assert [x.split(": ")[1] for x in lines] == [
        "targets.field", "quench.blocks", "quench.insist", "quench.window", "quench.times",
    ]  # fmt: skip
    assert lines[2].endswith("no charge is called 'feld'; did you mean 'field'?")


@pytest.mark.parametrize(
    ("old", "new", "begin"),
    [
        ("[quench]\n", "[quench]\nvelocty = 1\n", "18: quench.velocty: unknown key"),
        ("blocks = [1, 2]\n", "speed = 0\n", "18: quench.speed: must be positive, got 0"),
        (
            'energy = "h[i]"',
            'enrgy = "h[i]"',
            "17: quench: no charge is called 'energy', which should be the Hamiltonian; did you mean 'enrgy'?",
        ),
        ("[start]\ntheta = [0.4, 1.9]\n", "", "15: quench: needs a [start]"),
    ],
)
def test_bad_quench(tmp_path, old, new, begin):
    text = QUENCH.replace(old, new, 1)
    if "enrgy" in new:
        text = text.replace('energy = "from start"', 'enrgy = "from start"')
    lines = problems(tmp_path, text)
    assert any(line.startswith(begin) for line in lines), lines


def test_a_pattern_must_fit_every_size(tmp_path):
    lines = problems(
        tmp_path, QUENCH.replace("size = 6", "sizes = [6, 7, 9]").replace("theta = [0.4, 1.9]", "theta = [1, 2, 3]")
    )
    assert lines == ["11: start.theta: the pattern of 3 angles does not fit a ring of 7 sites (3 does not divide 7)"]


def test_sizes_that_do_not_fit_into_memory(tmp_path, monkeypatch):
    monkeypatch.setattr("maxent.memory.available_memory", lambda: 2**20)
    (line,) = problems(tmp_path, QUENCH.replace("size = 6", "sizes = [6, 16]"))
    assert line == "4: sites.sizes: 2^16 states need at least 3 MiB for 2 charges; available 1 MiB"


# ---------------------------------------------------------------- conservation

TILTED = QUENCH.replace('field = "Sz[i]"', 'field = "Sx[i]"')


def test_a_charge_that_is_not_conserved_is_refused(tmp_path):
    (line,) = problems(tmp_path, TILTED)
    assert line.startswith("9: charges.field: 'field' is not conserved: its commutator with the Hamiltonian is 0.")
    assert line.endswith("the least biased state at one instant: insist = ['field'] in [quench]")


@pytest.mark.parametrize(
    "text", [TILTED + 'insist = ["field"]\n', TILTED.split("[quench]")[0]], ids=["insist", "plain"]
)
def test_whoever_insists_is_told_what_the_state_is(tmp_path, text):
    found = job(tmp_path, text)
    result = maxent.solve(found.family, targets(found)).require()
    (note,) = found.remarks(result)
    h, q = dense("h[i]", Ring(6)), dense("Sx[i]", Ring(6))
    rho = sl.expm(-result.multipliers["energy"] * h - result.multipliers["field"] * q)
    e = np.linalg.eigvalsh(h)
    defect = np.linalg.norm(h @ rho - rho @ h) / ((e[-1] - e[0]) * np.linalg.norm(rho))
    assert "least biased state at one instant" in note
    assert f"|[H, rho]| is {defect:.3g} of the largest possible" in note


def test_conserved_charges_leave_no_remark(tmp_path):
    found = job(tmp_path, QUENCH)
    assert found.remarks(maxent.solve(found.family, targets(found))) == []


def test_a_cutoff_that_is_felt_is_told_with_its_weight(tmp_path):
    found = job(tmp_path, BOSONS.replace("pattern = [2, 0]", "pattern = [3, 0]"))
    result = maxent.solve(found.family, targets(found)).require()
    first, second = found.remarks(result)
    assert first.startswith("In the start the cut-off at 3 bosons is felt: b[0] has the weight 1 in its highest level")
    top = np.kron(np.diag([0, 0, 0, 1.0]), np.eye(64))
    assert second.startswith("In the state found") and f"the weight {result.mean(top):.2g} " in second
    few = job(
        tmp_path, BOSONS.replace("cutoff = 3", "cutoff = 5").replace("[2, 0]", "[0]").replace("size = 4", "size = 2")
    )
    assert few.remarks(maxent.solve(few.family, targets(few))) == []


# ---------------------------------------------------------------- runs


@pytest.fixture(scope="module")
def done(tmp_path_factory):
    """A run over three sizes, and what Python says of the same problem."""
    folder = tmp_path_factory.mktemp("quench")
    file = folder / "q.toml"
    file.write_text(QUENCH.replace("size = 6", "sizes = [8, 4, 6]") + "times = 5\n")
    assert main(["solve", str(file), "--out", str(folder / "run"), "--quiet"]) == 0
    record = json.loads((folder / "run/result.json").read_text())

    def given(size):
        ring = Ring(size)
        f = lambda text: formula(text, ring, {}, DENSITY)
        return {
            "charges": {"energy": f("h[i]"), "field": f("Sz[i]")},
            "start": ProductState(ring, [0.4, 1.9], 0.0).vector(),
            "observables": {"zz": f("Sz[i]*Sz[i+1]/L")},
            "blocks": (1, 2),
            "times": np.linspace(0, 5, 400),
        }

    return folder / "run", record, sizes.size_series(given, [4, 6, 8])


def test_the_record_holds_the_comparison(done):
    _, record, series = done
    found = record["quench"]
    assert found["sizes"] == [4, 6, 8] and found["statements"] == list(series.statements)
    for entry, c in zip(found["comparisons"], series.comparisons, strict=True):
        assert entry["truth"] == pytest.approx(c.truth, abs=1e-12)
        assert [e["label"] for e in entry["ensembles"]] == [e.label for e in c.ensembles]
        for e, expected in zip(entry["ensembles"], c.ensembles, strict=True):
            assert e["means"] == pytest.approx(expected.means, abs=1e-10)
        assert entry["start_label"] == "product state, theta = [0.4, 1.9], phi = 0.0"
    assert record["size"] == 2**8


def test_the_record_fits_its_schema(done):
    from importlib.resources import files

    schema = json.loads(files("maxent.app").joinpath("schema/result.schema.json").read_text())
    Draft202012Validator(schema).validate(done[1])


def test_arrays_of_every_size(done):
    folder, _, series = done
    for c in series.comparisons:
        with netcdf_file(folder / f"quench/size-{c.size}.nc", mmap=False) as data:
            assert data.variables["time"][:] == pytest.approx(c.times)
            assert data.variables["trace_0"][:] == pytest.approx(c.traces["zz"], abs=1e-10)
            assert np.sort(data.variables["energy"][:]) == pytest.approx(np.sort(c.levels["energy"]), abs=1e-10)
            assert data.variables["weight"][:].sum() == pytest.approx(1, abs=1e-10)


def test_report_has_its_sections_in_order(done):
    folder, record, _ = done
    page = (folder / "report.html").read_text()
    at = [
        page.index(f"<h3>{title}</h3>")
        for title in ("Start and dynamics", "Conservation", "Ensembles", "Means side by side", "Spread of the charges",
                      "States of blocks", "Which charges matter", "Energy windows", "Sizes", "What the sizes support",
                      "Notes", "Figures of the comparison")
    ]  # fmt: skip
    assert at == sorted(at)
    assert record["quench"]["verdict"].split(".")[0] in page
    drawn = sorted(f.stem for f in (folder / "figures").glob("quench-*.svg"))
    assert drawn == sorted(
        "quench-" + x
        for x in ("ensembles", "distances", "ranking", "trace-1", "eigenstates-1", "widths", "sizes-1", "sizes-2")
    )
    assert page.count("<figure>") == len(list((folder / "figures").glob("*.svg")))


def test_manifest_lists_every_file(done):
    folder, _, _ = done
    listed = json.loads((folder / "manifest.json").read_text())["files"]
    there = {f.relative_to(folder).as_posix() for f in folder.rglob("*") if f.is_file()}
    assert set(listed) == there - {"manifest.json"}


def test_deviations_of_the_tables_are_those_of_the_comparison(done):
    _, record, series = done
    means = next(t for t in study_words.tables(record["quench"]) if t.title == "Means side by side")
    c = series.comparisons[-1]
    assert means.rows[0][0].startswith(f"zz: {c.truth['zz']:.8g} in the long run")
    row = next(r for r in means.rows if r[0] == "canonical")
    assert float(row[2]) == pytest.approx(c.deviation("canonical", "zz"), rel=1e-2)
    assert float(row[-2]) == pytest.approx(c.ensemble("canonical").corrections["zz"], rel=1e-2)
    assert float(row[-1]) == pytest.approx(c.fluctuations["zz"], rel=1e-2)
    assert all(len(r) in (1, len(t.head) or 2) for t in study_words.tables(record["quench"]) for r in t.rows)


def test_one_size_supports_no_statement(tmp_path, capsys):
    file = tmp_path / "q.toml"
    sharp = QUENCH.replace("theta = [0.4, 1.9]", 'pattern = ["up", "down"]') + "ranking = false\n"
    file.write_text(sharp)
    assert main(["solve", str(file), "--out", str(tmp_path / "run"), "--quiet"]) == 0
    shown = capsys.readouterr().out
    assert "One size supports no statement about larger systems" in shown and "Statements:" not in shown
    assert "canonical, in the sector" in shown
    found = json.loads((tmp_path / "run/result.json").read_text())["quench"]
    assert found["comparisons"][0]["sharp"]["field"] == 0 and found["comparisons"][0]["ranking"] is None
    (bound,) = (line.split("(bound)")[0].split()[-1] for line in shown.splitlines() if "(bound)" in line)
    assert float(bound) == pytest.approx(min(found["comparisons"][0]["block_bounds"]["2"], 1), rel=1e-2)
    page = (tmp_path / "run/report.html").read_text()
    assert page.count("canonical, in the sector") > 2 and "What the sizes support" not in page


def test_the_headline_is_that_of_the_table(done):
    c = json.loads(json.dumps(done[1]["quench"]["comparisons"][-1]))
    base = c["ensembles"][0]
    column = lambda label, kind, far, **sector: {**base, "label": label, "kind": kind, "sector": sector, "distances":
                                                 {"2": far}, "charges": ["energy"]}  # fmt: skip
    c["ensembles"] = [
        column("canonical", "canonical", 0.5), column("canonical", "canonical", 0.25, a=1.0),
        column("grand canonical", "grand canonical", 0.4), column("grand canonical", "grand canonical", 0.125, a=1.0),
        column("Gaussian window", "microcanonical", 0.3), column("Gaussian window", "microcanonical", 0.1, a=1.0),
        column("single eigenstate", "eigenstate", 0.01, a=1.0),
    ]  # fmt: skip
    c |= {"best": "grand canonical", "sharp": {"a": 1.0}, "size": 8}
    said = study_words.verdict({"sizes": [8], "statements": [], "comparisons": [c]})
    assert said.startswith(
        "At 8 sites the ensemble closest to the long-time state is, over all sectors: grand canonical (trace distance "
        "on 2 neighbouring sites 0.4; canonical 0.5); inside the sector of the start, a = 1: grand canonical (0.125; "
        "canonical 0.25). These are the fits; of the windows, whose widths are a choice, the closest is: Gaussian "
        "window, in the sector (0.1)."
    )
    c |= {"ensembles": [e for e in c["ensembles"] if not e["sector"]], "sharp": {}}
    assert "closest to the long-time state is: grand canonical (" in study_words.verdict(
        {"sizes": [8], "statements": [], "comparisons": [c]}
    )


def test_windows_tell_their_sector_and_the_velocity_its_reason(done):
    c = json.loads(json.dumps(done[1]["quench"]["comparisons"][-1]))
    table = lambda title: next(
        t for t in study_words.tables({"sizes": [8], "statements": [], "comparisons": [c]}) if t.title == title
    )
    c |= {"sharp": {"a": 1.0}, "window": {"mean": 0.0, "width": 1.0, "beta": 0.1}}
    assert "inside the sector of the start (a = 1)" in table("Energy windows").lead
    assert all(row[0].startswith("width ") for row in table("Energy windows").rows)
    c["window"] = {}
    assert "over all sectors" in table("Energy windows").lead
    assert "not known" not in str(table("Start and dynamics").rows)
    c |= {"speed": None, "revival": None, "plateau": None}
    assert "give speed in [quench]" in dict(table("Start and dynamics").rows)["largest group velocity, sites per time"]


def test_quantiles_of_single_eigenstates_stand_below_their_median(done):
    c = json.loads(json.dumps(done[1]["quench"]["comparisons"][-1]))
    single = {**c["ensembles"][0], "label": "single eigenstate", "distances": {"1": 0.2, "2": 0.3}}
    c["ensembles"].append(single | {"distance_ranges": {"1": [0.1, 0.4], "2": [0.15, 0.45]}})
    tables = study_words.tables({"sizes": [8], "statements": [], "comparisons": [c]})
    rows = next(t for t in tables if t.title == "States of blocks").rows
    assert rows[-4:-1] == (
        ("single eigenstate", "0.2", "0.3"),
        ("10 % of them are below", "0.1", "0.15"),
        ("90 % of them are below", "0.4", "0.45"),
    )


def test_an_interrupted_comparison_leaves_nothing(tmp_path, monkeypatch, capsys):
    def stop(*_, **__):
        raise KeyboardInterrupt

    monkeypatch.setattr("maxent.quench.compare", stop)
    file = tmp_path / "q.toml"
    file.write_text(QUENCH)
    assert main(["solve", str(file), "--out", str(tmp_path / "runs/a")]) == 130
    assert {f.name for f in tmp_path.iterdir()} == {"q.toml"}
    assert capsys.readouterr().err.endswith("interrupted; nothing was written\n")


@pytest.mark.parametrize(
    ("error", "begin"),
    [
        (maxent.errors.ResourceError("10 states need 9 TiB"), "4: sites.size: 10 states"),
        (ValueError("x is y"), "17: quench: x"),
    ],
)
def test_errors_of_the_calculation_are_one_line(tmp_path, monkeypatch, error, begin):
    def fail(*_, **__):
        raise error

    monkeypatch.setattr("maxent.quench.compare", fail)
    file = tmp_path / "c.toml"
    file.write_text(QUENCH)
    with pytest.raises(ConfigError) as caught:
        run.solve(file, out=tmp_path / "run", force=False, driver=None, say=lambda line: None)
    (line,) = str(caught.value).splitlines()
    assert line.split("c.toml:")[1].startswith(begin)
    assert not (tmp_path / "run").exists()


def test_progress_of_long_work_is_told(tmp_path):
    from maxent.app import study

    told = []
    file = tmp_path / "c.toml"
    file.write_text(QUENCH.replace("size = 6", "size = 4") + "ranking = false\n")
    config = load(file)
    study.run(config, build(config).study, told.append)
    assert "size 4: spectrum" in told and "size 4: canonical" in told
    assert comparison.compare is sizes.compare


def test_check_shows_what_was_built(tmp_path, capsys):
    file = tmp_path / "c.toml"
    file.write_text(QUENCH.replace("size = 6", "sizes = [4, 6]"))
    assert main(["check", str(file)]) == 0
    shown = capsys.readouterr().out
    assert "sizes          4, 6\n" in shown and "translation (" in shown and "ring of 6 spin-1/2 sites" in shown


def test_self_checks_without_any_number_are_told_as_failed(done):
    c = json.loads(json.dumps(done[1]["quench"]["comparisons"][-1]))
    checks = [{"name": f"check {k}", "difference": None, "agrees": False} for k in (1, 2)]
    c["ensembles"] = [c["ensembles"][0] | {"self_checks": checks}]
    assert c["ensembles"][0]["kind"] == "canonical" and c["ensembles"][0]["quantities"]
    tables = study_words.tables({"sizes": [8], "statements": [], "comparisons": [c]})
    rows = next(t for t in tables if t.title == "Thermodynamics").rows
    assert rows[-1] == ("self-checks", "FAILED: check 1 and check 2", "largest relative difference –")
