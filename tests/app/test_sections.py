"""Further sections of a run: record, terminal, arrays and page hold the same numbers."""

import io
import math

import numpy as np
from scipy.io import netcdf_file

from maxent.app.section_figures import draw
from maxent.app.sections import Column, Section, entry, summary, tables, write_arrays

SHORT = Section(
    "short",
    "A <b>title</b>",
    "How to read it.",
    (Column("size", [1, 2], "sites"), Column("gap, in nats", [0.5, math.nan], "a gap"), Column("word", ["a", "b"], "")),
    "A note.",
    curves=("gap, in nats",),
)
LONG = Section("long", "Long", "", (Column("x", np.linspace(0, 1, 100).tolist(), "x"),))


def test_an_entry_is_plain():
    found = entry(SHORT)
    assert [c["values"] for c in found["columns"]] == [[1, 2], [0.5, None], ["a", "b"]]
    assert type(entry(Section("n", "", "", (Column("x", np.arange(2), ""),)))["columns"][0]["values"][0]) is int


def test_long_tables_are_thinned_and_say_so():
    (table,) = tables([entry(LONG)])
    assert table.rows[0] == ("0",) and table.rows[-1] == ("1",) and len(table.rows) <= 17
    assert table.note == "One row in 7; all 100 stand in result.json and result.nc."
    (text,) = summary([entry(SHORT)])
    assert text.splitlines()[:2] == ["A <b>title</b>:", "size  gap, in nats  word"]
    assert text.splitlines()[3].split() == ["2", "–", "b"] and text.endswith("A note.")


def test_arrays_hold_the_columns_of_numbers():
    stream = io.BytesIO()
    with netcdf_file(stream, "w", version=2) as out:
        write_arrays(out, [entry(SHORT), entry(LONG)])
        out.flush()
        data = stream.getvalue()
    found = netcdf_file(io.BytesIO(data), mmap=False)
    np.testing.assert_array_equal(found.variables["short_gap_in_nats"][:], [0.5, np.nan])
    assert found.variables["short_size"].long_name == b"sites" and "short_word" not in found.variables
    assert found.variables["long_x"].shape == (100,)
    found.close()


def test_names_that_look_alike_keep_their_numbers(tmp_path):
    twins = Section("s", "", "", (Column("a b", [1.0], ""), Column("a-b", [2.0], "")))
    with netcdf_file(tmp_path / "s.nc", "w", version=2) as out:
        write_arrays(out, [entry(twins)])
    with netcdf_file(tmp_path / "s.nc", mmap=False) as found:
        assert (found.variables["s_a_b"][0], found.variables["s_a_b_2"][0]) == (1.0, 2.0)


def test_figures_are_named_by_their_section_and_escaped():
    (figure,) = draw([entry(SHORT), entry(LONG)])
    assert (figure.name, figure.section, figure.study) == ("short", "short", False)
    assert "<b>" not in figure.svg and "&lt;b&gt;title" in figure.svg
    assert "0.5 at size 1" in figure.words
