"""Lines of TOML keys: against tomllib for what is there, against the writer of the text for where it is."""

import tomllib

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from maxent.app.locate import locate, repeated

SCALARS = [
    *("1", "-2.5e-3", "true", "inf", "1979-05-27 07:32:00", "0x1F"),
    *('"plain"', "'literal ] } # = ['", '""', "''", '"esc \\" ] # \\\\"'),
    *('"""two\nlines # ] """', "'''three\n\n'' lines'''", '"""quote at end""""', '"""a \\\n   b"""'),
]
KEYS = ["a", "b1", "c-d", "_", "9", '"q.u"', "'lit # ='", '"]"', '"\\u00e9"', '"tab\\t"']


class Writer:
    """Writes a random TOML text and notes the line of every path it writes."""

    def __init__(self, draw):
        self.draw, self.text, self.lines = draw, "", {}

    def line(self):
        return self.text.count("\n") + 1

    def pick(self, options):
        return self.draw(st.sampled_from(options))

    def keys(self, most):
        return self.draw(st.lists(st.sampled_from(KEYS), unique=True, min_size=0, max_size=most))

    @staticmethod
    def name(key):
        return tomllib.loads(f"{key} = 1").popitem()[0]

    def gap(self, newlines):
        self.text += self.pick(["", " ", "\t"] + (["\n", " # note ] = }\n", "\n\n  "] if newlines else []))

    def value(self, path, depth):
        kind = self.pick(["scalar", "scalar", "list", "inline"]) if depth else "scalar"
        if kind == "scalar":
            self.text += self.pick(SCALARS)
        elif kind == "list":
            self.text += "["
            for k in range(self.pick([0, 1, 3])):
                self.gap(True)
                self.lines[(*path, k)] = self.line()
                self.value((*path, k), depth - 1)
                self.gap(True)
                self.text += ","
            self.gap(True)
            self.text += "]"
        else:
            self.text += "{"
            for k, key in enumerate(self.keys(2)):
                self.text += "," if k else ""
                self.gap(False)
                self.pair(path, key, depth - 1)
                self.gap(False)
            self.text += "}"

    def pair(self, path, key, depth):
        here = (*path, self.name(key))
        self.lines[here] = self.line()
        self.text += key
        if self.pick([False, False, True]):
            self.text += " . inner" if self.pick([False, True]) else ".inner"
            here += ("inner",)
            self.lines[here] = self.line()
        self.gap(False)
        self.text += "="
        self.gap(False)
        self.value(here, depth)

    def body(self, path):
        used = self.keys(4)
        for key in used:
            self.gap(True)
            self.pair(path, key, 2)
            self.text += self.pick(["\n", " # end\n", "\n\n"])
        return used

    def document(self):
        used = self.body(())
        for key in KEYS:
            if key in used or not self.pick([False, True]):
                continue
            path = (self.name(key),)
            if self.pick([False, True]):
                for n in range(self.pick([1, 2])):
                    self.lines.setdefault(path, self.line())
                    self.lines[(*path, n)] = self.line()
                    self.text += f"[[ {key} ]]\n"
                    self.body((*path, n))
                    if self.pick([False, True]):
                        self.lines[(*path, n, "sub table")] = self.line()
                        self.text += f"[{key}.'sub table'] # note\n"
                        self.body((*path, n, "sub table"))
            else:
                self.lines[path] = self.line()
                self.text += f"[{key}]\n" if self.pick([False, True]) else f"[ {key}.deep ]\n"
                if self.text.endswith(".deep ]\n"):
                    path += ("deep",)
                    self.lines[path] = self.line() - 1
                self.body(path)
        return self.text, self.lines


def paths(value, path=()):
    """All paths of a parsed document."""
    inner = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    for key, below in inner:
        yield (*path, key)
        yield from paths(below, (*path, key))


@st.composite
def documents(draw):
    return Writer(draw).document()


@settings(max_examples=150, deadline=None)
@given(documents(), st.booleans())
def test_every_path_of_tomllib_is_found_on_the_line_it_was_written(document, windows):
    text, lines = document
    found = locate(text.replace("\n", "\r\n") if windows else text).lines
    assert set(found) == set(paths(tomllib.loads(text)))
    assert found == lines


def test_a_missing_path_falls_back_to_its_table():
    positions = locate("a = 1\n\n[b]\nc = 2\n")
    assert positions.line(("b", "c")) == 4
    assert positions.line(("b", "missing")) == 3
    assert positions.line(("missing",)) == 1


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("a = 1\nb = 2\na = 3", (("a",), 3, 1)),
        ("[t]\nx = 1\n[u]\n[t]\n", (("t",), 4, 1)),
        ('[t]\nx = 1\n"x" = 2', (("t", "x"), 3, 2)),
        ("p = {x = 1, x = 2}", (("p", "x"), 1, 1)),
        ("a = 1\nb = [", None),
        ("[[t]]\nx = 1\n[[t]]\nx = 2\n", None),
    ],
)
def test_names_defined_twice(text, expected):
    assert repeated(text) == expected
