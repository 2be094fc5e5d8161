"""Each kind of config against the problem posed in Python, and files against the same numbers inline."""

import io
import pickle

import numpy as np
import pytest
from scipy import sparse
from scipy.io import mmwrite

import maxent
from maxent.app import kinds
from maxent.app.config import build, load
from maxent.errors import ConfigError
from maxent.lattice import ProductState, Ring, formula


def job(tmp_path, text):
    file = tmp_path / "c.toml"
    file.write_text(text)
    return build(load(file))


def problems(tmp_path, text):
    with pytest.raises(ConfigError) as caught:
        job(tmp_path, text)
    return [line.split("c.toml:")[1] for line in str(caught.value).splitlines()]


def solved(found):
    result = maxent.solve(found.family, {name: t.value for name, t in found.targets.items()}).require()
    return [result.multipliers[n] for n in result.names]


def test_kinds_are_found_by_listing_the_folder():
    assert kinds.names() == ["bosons", "fermions", "infinite_chain", "levels", "operators", "spins", "states"]


# ---------------------------------------------------------------- states

STATES = """kind = "states"
log_weights = {weights}
[charges]
a = {a}
b = {b}
[targets]
a = 1.2
b = "from counts"
[counts]
per_state = {counts}
"""


def test_states_from_files_are_the_states_inline(tmp_path):
    a, b, weights, counts = [0.0, 1.0, 2.5], [1.0, -1.0, 4.0], [0.0, 0.5, -np.inf], [3, 4, 0]
    inline = job(tmp_path, STATES.format(a=a, b=b, weights=weights, counts=counts))
    np.save(tmp_path / "a.npy", a)
    np.savez(tmp_path / "more.npz", b=b, other=a)
    (tmp_path / "t.csv").write_text("# counted by hand\nstate,weight,n\none,0,3\ntwo,0.5,4\n\nthree,-inf,0\n")
    filed = job(tmp_path, STATES.format(a='"a.npy"', b='"more.npz:b"', weights='"t.csv:weight"', counts='"t.csv:n"'))
    assert filed.targets == inline.targets
    assert set(filed.digests) == {"a.npy", "more.npz", "t.csv"}
    np.testing.assert_array_equal(filed.family.blocks.diagonal, inline.family.blocks.diagonal)
    assert inline.family.size == 2


def test_counts_give_means_and_standard_errors(tmp_path):
    counts, values = np.array([5, 0, 12, 3]), np.array([0.3, 1.0, -2.0, 7.5])
    text = 'kind = "states"\ncharges.a = {v}\ntargets.a = "from counts"\ncounts.per_state = {c}\n'
    text += "accuracy.a = 1e-9\n"
    target = job(tmp_path, text.format(v=values.tolist(), c=counts.tolist())).targets["a"]
    sample = np.repeat(values, counts)
    assert target.value == pytest.approx(sample.mean(), rel=1e-14)
    assert target.sigma == pytest.approx(sample.std(ddof=1) / np.sqrt(20), rel=1e-13)
    assert (target.accuracy, target.source) == (1e-9, "mean of 20 observations")


def test_means_of_very_large_numbers_do_not_overflow(tmp_path):
    text = 'kind = "states"\ncharges.a = [1e279, -1e279, 0]\ntargets.a = "from counts"\n'
    text += "counts.per_state = [3, 2, 1]\n"
    target = job(tmp_path, text).targets["a"]
    assert target.value == pytest.approx(1e279 / 6, rel=1e-15)
    assert target.sigma == pytest.approx(1e279 * np.sqrt((5 - 1 / 6) / 5 / 6), rel=1e-14)


def test_a_charge_that_never_varied_has_no_standard_error_to_speak_of(tmp_path):
    text = 'kind = "states"\ncharges.a = [1, 2]\ntargets.a = "from counts"\ncounts.per_state = [9, 0]\n'
    target = job(tmp_path, text).targets["a"]
    assert (target.value, target.sigma) == (1.0, 0.0)


def test_prior_and_weights_reach_the_family(tmp_path):
    text = 'kind = "states"\nlog_prior = [0, 1, 2]\ncharges.a = [0, 1, 2]\ntargets.a = 1.5\n'
    # p = exp((1 - lam) a)/Z, so the prior shifts the multiplier of the flat problem by one
    flat = solved(job(tmp_path, text.replace("log_prior = [0, 1, 2]\n", "")))
    assert solved(job(tmp_path, text)) == pytest.approx([flat[0] + 1], rel=1e-12)


def broken_file(kind):
    stream = io.BytesIO()
    if kind == "object":
        np.save(stream, np.array([{"a": 1}], dtype=object), allow_pickle=True)
    elif kind == "complex":
        np.save(stream, np.array([1j, 2, 3]))
    elif kind == "matrix":
        np.save(stream, np.eye(3))
    elif kind == "infinite":
        np.save(stream, np.array([1.0, np.inf, 2.0]))
    elif kind == "text":
        np.save(stream, np.array(["a", "b"]))
    elif kind == "pickle":
        stream.write(pickle.dumps([1, 2, 3]))
    elif kind == "cut":
        np.save(stream, np.arange(100.0))
        return stream.getvalue()[:200]
    return stream.getvalue()


@pytest.mark.parametrize(
    ("kind", "words"),
    [
        ("object", "file 'x.npy': holds Python objects; only plain numbers are read"),
        ("pickle", "file 'x.npy': holds Python objects; only plain numbers are read"),
        ("complex", "'x.npy' holds complex128 entries; real numbers are needed"),
        ("matrix", "'x.npy' is no plain list of numbers (shape (3, 3))"),
        ("infinite", "'x.npy' entry 1 is inf; finite numbers are needed"),
        ("text", "'x.npy' holds <U1 entries; real numbers are needed"),
        ("cut", "file 'x.npy': "),
        ("empty", "file 'x.npy': "),
    ],
)
def test_bad_array_files(tmp_path, kind, words):
    (tmp_path / "x.npy").write_bytes(broken_file(kind))
    (line,) = problems(tmp_path, 'kind = "states"\ncharges.a = "x.npy"\ntargets.a = 1\n')
    assert line.startswith(f"2: charges.a: {words}")


@pytest.mark.parametrize(
    ("reference", "words"),
    [
        ("t.csv", "file 't.csv': has 2 columns; say which one, as in 'table.csv:a'"),
        ("t.csv:c", "file 't.csv': has no column 'c'; it has a, b"),
        ("t.csv:b", "file 't.csv': data row 2 has no number in column 'b'"),
        ("e.csv", "file 'e.csv': is empty"),
        ("m.npz", "file 'm.npz': has no array ''; it has a, b"),
        ("m.npz:c", "file 'm.npz': has no array 'c'; it has a, b"),
        ("t.txt", "'t.txt' is no file this program reads"),
    ],
)
def test_bad_references(tmp_path, reference, words):
    (tmp_path / "t.csv").write_text("a,b\n1,2\n3,x\n")
    (tmp_path / "e.csv").write_text("# nothing\n")
    np.savez(tmp_path / "m.npz", b=[1.0], a=[2.0])
    (line,) = problems(tmp_path, f'kind = "states"\ncharges.a = "{reference}"\ntargets.a = 1\n')
    assert line.startswith(f"2: charges.a: {words}")


def test_a_single_column_needs_no_name(tmp_path):
    (tmp_path / "head.csv").write_text("spots\n1\n2\n")
    (tmp_path / "bare.csv").write_text("1\n2\n")
    for name in ("head", "bare"):
        found = job(tmp_path, f'kind = "states"\ncharges.a = "{name}.csv"\ntargets.a = 1.5\n')
        assert found.family.size == 2


# ---------------------------------------------------------------- operators

X, Y = np.array([[0, 1], [1, 0]]), np.array([[0, -1j], [1j, 0]])


def test_operators_from_files_are_the_operators_inline(tmp_path):
    text = 'kind = "operators"\ncharges.x = {x}\ncharges.y = {y}\ntargets.x = 0.3\ntargets.y = -0.2\n'
    text += "predictions.z = [[1, 0], [0, -1]]\n"
    inline = solved(job(tmp_path, text.format(x="[[0, 1], [1, 0]]", y='[[0, "-1j"], ["0 + 1j", 0]]')))
    # closed form: the Bloch vector r = (0.3, -0.2) needs lam = -artanh|r| r/|r|
    r = np.array([0.3, -0.2])
    np.testing.assert_allclose(inline, -np.arctanh(np.linalg.norm(r)) * r / np.linalg.norm(r), rtol=1e-12)
    np.save(tmp_path / "x.npy", X)
    np.savez(tmp_path / "y.npz", y=Y)
    mmwrite(tmp_path / "x.mtx", sparse.coo_array(X))
    mmwrite(tmp_path / "y.mtx", Y)
    for x, y in (("x.npy", "y.npz:y"), ("x.mtx", "y.mtx")):
        found = job(tmp_path, text.format(x=f'"{x}"', y=f'"{y}"'))
        np.testing.assert_allclose(solved(found), inline, rtol=1e-12)
        assert len(found.digests) == 2


def test_sparse_files_stay_sparse(tmp_path):
    big = sparse.diags_array(np.arange(4000.0))
    mmwrite(tmp_path / "big.mtx", big)
    found = job(tmp_path, 'kind = "operators"\ncharges.n = "big.mtx"\ntargets.n = 3\n')
    assert found.family.size == 4000 and not found.family.blocks.dense


def test_dims_and_prior_reach_the_family(tmp_path):
    text = 'kind = "operators"\ndims = [2, 1]\nlog_prior = [[0.5, 0], [0, -0.5]]\n'
    text += "charges.z = [[1, 0], [0, -1]]\ntargets.z = 0.2\n"
    found = job(tmp_path, text)
    assert found.family.dims == (2, 1)
    # exp((0.5 - lam) z) has mean tanh(0.5 - lam)
    assert solved(found) == pytest.approx([0.5 - np.arctanh(0.2)], rel=1e-12)


@pytest.mark.parametrize(
    ("matrix", "words"),
    [
        (np.ones((2, 3)), "not a square matrix: shape 2 x 3"),
        (np.ones(4), "not a square matrix: shape 4"),
        (np.zeros((0, 0)), "not a square matrix: shape 0 x 0"),
        (np.array([[1, np.nan], [np.nan, 1]]), "has entries that are not finite"),
        (np.array([[0, 1], [1 + 1e-9, 0]]), "not Hermitian: an entry differs from its mirror image by 1e-09"),
        (np.array([[1j, 0], [0, 0]]), "not Hermitian: an entry differs from its mirror image by 2"),
        (np.array([["a"]]), "holds <U1 entries; numbers are needed"),
    ],
)
def test_bad_matrices(tmp_path, matrix, words):
    np.save(tmp_path / "x.npy", matrix)
    (line,) = problems(tmp_path, 'kind = "operators"\ncharges.x = "x.npy"\ntargets.x = 1\n')
    assert line == f"2: charges.x: {words}"


def test_rounding_is_no_lack_of_hermiticity(tmp_path):
    np.save(tmp_path / "x.npy", np.array([[0, 1], [1 + 1e-15, 0]]))
    assert job(tmp_path, 'kind = "operators"\ncharges.x = "x.npy"\ntargets.x = 0.1\n').family.size == 2


@pytest.mark.parametrize(
    ("charges", "begin"),
    [
        ("a = [1, 2, 1e307]\nb = [1, 0, 0]", "3: charges.a: charge 'a' is of size 1.0e+307"),
        ("a = [1, 2, 3]\nb = [1e-320, 0, 0]", "4: charges.b: charge 'b' is of size 1.0e-320"),
        ("a = [[1e307, 0], [0, 1]]\nb = [[1, 0], [0, 0]]", "3: charges.a: charge 'a' is of size 1.0e+307"),
    ],
)
def test_charges_out_of_range_are_told_at_their_line(tmp_path, charges, begin):
    kind = "operators" if "[[" in charges else "states"
    (line,) = problems(tmp_path, f'kind = "{kind}"\n[charges]\n{charges}\n[targets]\na = 1.5\nb = 0.1\n')
    assert line.startswith(begin)


def test_matrices_too_large_for_the_machine_are_told_at_their_line(tmp_path, monkeypatch):
    monkeypatch.setattr("maxent.memory.available_memory", lambda: 2**33)
    size = 1 << 30
    (tmp_path / "h.mtx").write_text(f"%%MatrixMarket matrix coordinate real general\n{size} {size} 1\n1 1 1.0\n")
    text = 'kind = "operators"\n[charges]\na = "h.mtx"\n[targets]\na = 0.5\n'
    (line,) = problems(tmp_path, text)
    assert line.startswith("3: charges.a: ")


def test_columns_of_one_name_are_refused(tmp_path):
    (tmp_path / "t.csv").write_text("a,a,b\n1,2,3\n4,5,6\n")
    text = 'kind = "states"\n[charges]\na = "t.csv:{}"\n[targets]\na = 3.5\n'
    (line,) = problems(tmp_path, text.format("a"))
    assert line.startswith("3: charges.a: file 't.csv': has 2 columns called 'a'")
    assert job(tmp_path, text.format("b")).family.size == 2


# ---------------------------------------------------------------- spins

SPINS = """kind = "spins"
[sites]
geometry = "ring"
size = 4
[parameters]
J = 0.7
w = [1.0, 2.0, 3.0, 4.0]
[densities]
h = "J*(Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1])"
[charges]
energy = "h[i]"
weighted = "w[i]*Sz[i]"
[start]
theta = [0.4, 1.1]
phi = "2*pi*i/L*J"
[targets]
energy = "from start"
weighted = 0.25
[predictions]
zz = "Sz[i]*Sz[i+1]/L"
"""


def test_spins_are_what_the_lattice_makes_of_them(tmp_path):
    found = job(tmp_path, SPINS)
    sites = Ring(4)
    parameters = {"J": 0.7, "w": [1.0, 2.0, 3.0, 4.0]}
    energy = formula("J*(Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1])", sites, parameters)
    vector = ProductState(sites, [0.4, 1.1], "2*pi*i/L*J", parameters=parameters).vector()
    mean = (vector.conj() @ energy.matrix() @ vector).real
    assert found.targets["energy"].value == pytest.approx(mean, abs=1e-14)
    assert found.targets["energy"].source == "mean in the start state"
    assert found.targets["weighted"].source == "given"
    assert found.targets["weighted"].value == 0.25
    assert abs(found.predictions["zz"] - formula("Sz[i]*Sz[i+1]/L", sites).matrix()).max() == 0


NO_START = '[start]\ntheta = [0.4, 1.1]\nphi = "2*pi*i/L*J"\n'
EXTRA = '"h[i]"\nextra = "Sq[i]"'

# (what to replace in the good config, by what, how the line begins)
BAD_SPINS = [
    ("size = 4", "size = 1000000000000", "4: sites.size: 2^1000000000000 states fit into no machine"),
    ("size = 4", "size = 0", "4: sites.size: "),
    (
        "size = 4",
        "size = 30",
        "4: sites.size: 2^30 states need at least 48 GiB for 2 charges; available 20 GiB",
    ),
    ("[1.0, 2.0, 3.0, 4.0]", "[1.0]", "12: charges.weighted: formula column 1: "),
    ('"h[i]"', EXTRA, "12: charges.extra: formula column 1: unknown symbol 'Sq'; did you mean"),
    ('"h[i]"', '"h[i"', "11: charges.energy: formula column 2: unbalanced bracket"),
    ('"h[i]"', '"1j*h[i]"', "11: charges.energy: not Hermitian: it holds "),
    ('"h[i]"', '"Splus[i]"', "11: charges.energy: not Hermitian: it holds "),
    ('"Sz[i]*Sz[i+1]/L"', '"Sz[4]"', "20: predictions.zz: formula column 4: subscript 4 is out of range"),
    ("[0.4, 1.1]", "[1, 2, 3]", "14: start.theta: the pattern of 3 angles does not fit a ring of 4 sites"),
    ('"2*pi*i/L*J"', '"2*pi*i/L*K*"', "15: start.phi: formula column "),
    # a bad density is told once, at its own line, and not again for the charge that uses it
    ("Sy[i]*Sy[i+1])", "Sy[i]*Sy[i+1]", "9: densities.h: formula column 3: unbalanced bracket"),
    (NO_START, "", "14: targets.energy: asks for the mean 'from start', but there is no [start]"),
]


BAD_NAMES = ["Sz", "Sx", "pi", "L", "dagger", "commutator", "exp", "sin", "for", "if", "_x", "a b", "2x", "i", "j"]


@pytest.mark.parametrize("name", BAD_NAMES)
@pytest.mark.parametrize("table", ["parameters", "densities"])
def test_names_that_no_formula_can_use(tmp_path, table, name):
    value = '"Sz[k]"' if table == "densities" else "0"
    text = SPINS.replace(f"[{table}]\n", f'[{table}]\n"{name}" = {value}\n', 1)
    (line,) = problems(tmp_path, text)
    kind = {"parameters": "parameter", "densities": "density"}[table]
    number = text.splitlines().index(f'"{name}" = {value}') + 1
    assert line.startswith(f"{number}: {table}.") and f"{kind} name '{name}' " in line


def test_all_bad_names_are_told_at_once(tmp_path):
    text = SPINS.replace("[parameters]\n", "[parameters]\npi = 3\nh = 1\n", 1)
    one, other = problems(tmp_path, text)
    assert "parameters.pi: parameter name 'pi' already has a meaning" in one
    assert "densities.h: 'h' is both a parameter and a density" in other


@pytest.mark.parametrize(("old", "new", "begin"), BAD_SPINS)
def test_bad_spins(tmp_path, monkeypatch, old, new, begin):
    monkeypatch.setattr("maxent.memory.available_memory", lambda: 20 * 2**30)
    assert old in SPINS
    text = SPINS.replace(old, new, 1)
    if new == EXTRA:
        text = text.replace("[targets]\n", "[targets]\nextra = 0\n")
    (line,) = problems(tmp_path, text)
    assert line.startswith(begin)


def test_blocks_too_large_are_refused_before_they_are_made(tmp_path, monkeypatch):
    monkeypatch.setattr("maxent.memory.available_memory", lambda: 20 * 2**30)
    text = SPINS.replace("size = 4", "size = 18").replace("w = [1.0, 2.0, 3.0, 4.0]\n", "").replace("w[i]*", "")
    text = text.replace("[charges]", '[charges]\nx = "Sx[0]"').replace("[targets]", "[targets]\nx = 0")
    (line,) = problems(tmp_path, text)
    # the reflection that keeps site 0 halves the blocks
    assert line.startswith("4: sites.size: 262 144 states in blocks of ")
    assert line.endswith("available 20 GiB")
