"""Bad configs and the lines they must give: every problem at once, each with its place."""

import re
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from maxent.app.config import build, load
from maxent.errors import ConfigError

CONFIGS = Path(__file__).parents[2] / "configs"

GOOD = """kind = "states"
[charges]
spots = [1, 2, 3]
[targets]
spots = 2.2
"""

# (what is wrong, config, lines without the file name)
BAD = [
    ("empty file", "", ["1: kind: missing"]),
    ("kind missing", "[charges]\na = [1]\n", ["1: kind: missing"]),
    (
        "kind misspelt",
        'kind = "spin"\n',
        ["1: kind: unknown kind 'spin'; did you mean 'spins'?"],
    ),
    (
        "kind unknown",
        'kind = "quarks"\n',
        [
            "1: kind: unknown kind 'quarks'; "
            "expected bosons, fermions, infinite_chain, levels, operators, spins or states"
        ],
    ),
    ("kind of the wrong type", "kind = 3\n", ["1: kind: expected text, got 3"]),
    (
        "everything at once",
        """kind = "spins"
titel = "x"
driver = "gpu"
[sites]
geometry = "rnig"
size = 3.5
colour = 1
[charges]
energy = 3
m = "Sz[i]"
[targets]
enrgy = 1.0
m = "from strat"
[accuracy]
m = -1
energy = nan
""",
        [
            "2: titel: unknown key; did you mean 'title'?",
            "3: driver: expected 'auto', 'host' or 'jax', got the text 'gpu'",
            "5: sites.geometry: expected 'ring', 'chain', 'ladder' or 'bonds', got the text 'rnig'; "
            "did you mean 'ring'?",
            "6: sites.size: expected a whole number, got 3.5",
            "7: sites.colour: unknown key",
            "9: charges.energy: expected text, got 3",
            "9: charges.energy: no target for this charge; add it to [targets]",
            "12: targets.enrgy: no charge has this name; did you mean 'energy'?",
            "13: targets.m: expected a number or 'from start', got the text 'from strat'; "
            "did you mean 'from start'?",
            "15: accuracy.m: must not be negative, got -1",
            "16: accuracy.energy: expected a finite number, got nan",
        ],
    ),
    (
        "members of lists",
        """kind = "states"
log_weights = [
  0,
  "a",
  -inf,
  inf,
]
[charges]
a = [1, "2", 3]
b = 4
[targets]
a = true
b = 1
""",
        [
            "4: log_weights[1]: expected a number, got the text 'a'",
            "6: log_weights[3]: expected a finite number, got inf",
            "9: charges.a[1]: expected a number, got the text '2'",
            "10: charges.b: expected a list or text, got 4",
            "12: targets.a: expected a number or 'from counts', got true",
        ],
    ),
    (
        "rows of a matrix",
        'kind = "operators"\n[charges]\nx = [[0, 1], [true, 0]]\ny = [1, 0]\n'
        '[targets]\nx = 0\ny = "1+2j"\n',
        [
            "3: charges.x[1][0]: expected a number or text, got true",
            "4: charges.y[0]: expected a list, got 1",
            "4: charges.y[1]: expected a list, got 0",
            "7: targets.y: expected a number, got the text '1+2j'",
        ],
    ),
    (
        "nested key misspelt",
        GOOD + "[counts]\nper_stat = [1, 2, 3]\n",
        ["6: counts.per_state: missing", "7: counts.per_stat: unknown key; did you mean 'per_state'?"],
    ),
    (
        "no charges",
        'kind = "states"\n[charges]\n[targets]\n',
        ["2: charges: no charges; at least one is needed"],
    ),
    ("charges missing", 'kind = "states"\ntargets = {}\n', ["1: charges: missing"]),
    (
        "charges no table",
        'kind = "states"\ncharges = 1\ntargets = {}\n',
        ["2: charges: expected a table, got 1"],
    ),
    (
        "an empty name",
        'kind = "states"\n[charges]\n"" = [1]\n[targets]\n"" = 1\n',
        ["2: charges: an empty name"],
    ),
    (
        "quoted names",
        'kind = "states"\n[charges]\n"a b" = ["x"]\n[targets]\n"a b" = inf\n',
        [
            """3: charges."a b"[0]: expected a number, got the text 'x'""",
            '5: targets."a b": expected a finite number, got inf',
        ],
    ),
    ("a date for a number", GOOD.replace("2.2", "2020-01-01"), [
        "5: targets.spots: expected a number or 'from counts', got 2020-01-01",
    ]),
    (
        "numbers beyond all bounds",
        GOOD.replace("2.2", "1" + "0" * 400).replace("2, 3", "2, 1e999"),
        [
            "3: charges.spots[2]: expected a finite number, got inf",
            "5: targets.spots: a whole number too large to calculate with",
        ],
    ),
    ("defined twice", GOOD + "spots = 1\n", ["6: targets.spots: defined twice; first on line 5"]),
    ("table twice", GOOD + "[charges]\nx = [1]\n", ["6: charges: defined twice; first on line 2"]),
    ("cut inside a list", GOOD[:41], ["3: charges.spots: the file ends too early: invalid value"]),
    ("cut after a list", GOOD[:39], ["3: charges.spots: the file ends too early: unclosed array"]),
    ("cut after an equals sign", GOOD[:33], ["3: charges.spots: the file ends too early: invalid value"]),
    (
        "cut inside a string",
        'kind = "sta',
        ["1: kind: the file ends too early: unterminated string"],
    ),
    (
        "no TOML at all",
        "hello world\n",
        ["1: hello: not TOML at column 7: expected '=' after a key in a key/value pair"],
    ),
    (
        "lengths differ",
        GOOD.replace("[targets]", "b = [1, 2]\n[targets]\nb = 1"),
        ["4: charges.b: has length 2, but charges.spots has length 3; one entry per state is needed"],
    ),
    (
        "no states",
        GOOD.replace("[1, 2, 3]", "[]"),
        ["3: charges.spots: an empty list; at least one state is needed"],
    ),
    (
        "every state dropped",
        "log_weights = [-inf, -inf, -inf]\n" + GOOD,
        ["1: log_weights: drops every state"],
    ),
    (
        "counts asked for but not given",
        GOOD.replace("2.2", '"from counts"'),
        ["5: targets.spots: asks for a mean 'from counts', but there is no [counts]"],
    ),
    (
        "counts that are none",
        GOOD + "[counts]\nper_state = [1, 2.5, -1]\n",
        ["7: counts.per_state: counts must be whole numbers, none of them negative"],
    ),
    (
        "too many counts",
        GOOD + "[counts]\nper_state = [1e300, 1, 0]\n",
        ["7: counts.per_state: more observations than can be counted exactly (2^53)"],
    ),
    (
        "too few counts",
        GOOD + "[counts]\nper_state = [1, 0, 0]\n",
        ["7: counts.per_state: at least two observations are needed"],
    ),
    (
        "a file that is not there",
        GOOD.replace("[1, 2, 3]", '"spots.npy"'),
        ["3: charges.spots: file 'spots.npy' cannot be read: No such file or directory"],
    ),
    (
        "a file of unknown kind",
        GOOD.replace("[1, 2, 3]", '"spots.pickle"'),
        [
            "3: charges.spots: 'spots.pickle' is no file this program reads; "
            "expected .npy, .npz:name, .csv:column or .mtx"
        ],
    ),
    (
        "not Hermitian",
        'kind = "operators"\n[charges]\nx = [[0, 1], [2, 0]]\ny = [["0", "1j"], ["1j", 0]]\n'
        "[targets]\nx = 0\ny = 0\n",
        [
            "3: charges.x: not Hermitian: an entry differs from its mirror image by 1",
            "4: charges.y: not Hermitian: an entry differs from its mirror image by 2",
        ],
    ),
    (
        "matrices that do not fit",
        """kind = "operators"
dims = [2, 3]
[charges]
x = [[0, 1], [1, 0]]
y = [[1]]
z = [[1, 0]]
[targets]
x = 0
y = 0
z = 0
[predictions]
p = [[1, "i"], ["-1j", 1]]
""",
        [
            "2: dims: the product of the dimensions is 6, but charges.x is 2 x 2",
            "5: charges.y: is 1 x 1, but charges.x is 2 x 2",
            "6: charges.z: not square: 1 row of lengths [2]",
            "12: predictions.p: row 1, column 2: 'i' is no number; complex ones look like '1+2j'",
        ],
    ),
    (
        "dimensions that are none",
        'kind = "operators"\ndims = [2, 0]\n[charges]\nx = [[0, 1], [1, 0]]\n[targets]\nx = 0\n',
        ["2: dims: dimensions must be positive"],
    ),
]  # fmt: skip


@pytest.mark.parametrize(("text", "lines"), [b[1:] for b in BAD], ids=[b[0] for b in BAD])
def test_bad_config(tmp_path, text, lines):
    file = tmp_path / "bad.toml"
    file.write_text(text)
    with pytest.raises(ConfigError) as caught:
        build(load(file))
    assert str(caught.value).splitlines() == [f"{file}:{line}" for line in lines]


def test_good_config_passes_the_same_road(tmp_path):
    file = tmp_path / "good.toml"
    file.write_text(GOOD)
    job = build(load(file))
    assert {name: target.value for name, target in job.targets.items()} == {"spots": 2.2}
    assert job.family.size == 3


def test_windows_line_ends_do_not_shift_lines(tmp_path):
    file = tmp_path / "bad.toml"
    file.write_bytes(GOOD.replace("2.2", "nan").replace("\n", "\r\n").encode())
    with pytest.raises(ConfigError, match=r"bad.toml:5: targets.spots: expected a finite number, got nan"):
        load(file)


def test_files_that_cannot_be_read(tmp_path):
    with pytest.raises(ConfigError, match=r"nowhere.toml: no such file$"):
        load(tmp_path / "nowhere.toml")
    with pytest.raises(ConfigError, match="a folder, not a config file$"):
        load(tmp_path)
    binary = tmp_path / "binary.toml"
    binary.write_bytes(b"a = 1\n\xff\xfe")
    with pytest.raises(ConfigError, match=r"binary.toml:2: not UTF-8 text$"):
        load(binary)
    with pytest.raises(ConfigError, match="cannot be read: Not a directory$"):
        load(binary / "below.toml")


@pytest.mark.parametrize("file", sorted(CONFIGS.glob("*.toml")), ids=lambda f: f.name)
def test_shipped_configs_are_good(file):
    job = build(load(file))
    assert job.targets


SCRAPS = [
    "",
    '"',
    "[",
    "]",
    "{",
    "=",
    "\n",
    "#",
    "nan",
    "inf",
    "1e999",
    "-1",
    "true",
    "x",
    "[[]]",
    "é",
    "i",
    "*",
    "(",
    "'",
    "10" * 200,
]
SMALL = [(CONFIGS / f"{n}.toml").read_text() for n in ("wolf_dice", "edge", "unreachable")] + [
    'kind = "operators"\ndims = [2]\n[charges]\nx = [[0, "1j"], ["-1j", 0]]\n[targets]\nx = 0.5\n'
]


@settings(max_examples=150, deadline=None)
@given(data=st.data())
def test_a_damaged_config_is_never_our_fault(tmp_path_factory, data):
    text = data.draw(st.sampled_from(SMALL))
    for _ in range(data.draw(st.integers(1, 3))):
        start = data.draw(st.integers(0, len(text)))
        stop = data.draw(st.integers(start, min(len(text), start + 12)))
        text = text[:start] + data.draw(st.sampled_from(SCRAPS)) + text[stop:]
    file = tmp_path_factory.mktemp("fuzz") / "c.toml"
    file.write_text(text)
    try:
        build(load(file))
    except ConfigError as bad:
        last = text.count("\n") + 1
        for line in str(bad).splitlines():
            found = re.match(re.escape(str(file)) + r":(\d+): .", line)
            assert found and 1 <= int(found[1]) <= last
