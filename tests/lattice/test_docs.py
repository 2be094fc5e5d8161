"""What docs/formulas.md shows is what happens."""

import doctest
import re
from pathlib import Path

import pytest

from maxent import lattice
from maxent.errors import FormulaError
from maxent.lattice import Ring, formula

PAGE = Path(__file__).parents[2] / "docs" / "formulas.md"
SHOWN = re.findall(r"^\| `([^`]+)` \| (formula column .*?) \|$", PAGE.read_text(encoding="utf-8"), re.M)
ELSEWHERE = re.findall(
    r"^\| `([^`]+)` \| `([^`]+)` \| (formula column .*?) \|$", PAGE.read_text(encoding="utf-8"), re.M
)


def test_examples():
    flags = doctest.NORMALIZE_WHITESPACE | doctest.ELLIPSIS
    tested = doctest.testfile(str(PAGE), module_relative=False, optionflags=flags, encoding="utf-8")
    assert tested.failed == 0
    assert tested.attempted > 10


def test_the_table_of_errors_was_found():
    assert (len(SHOWN), len(ELSEWHERE)) == (10, 5)


@pytest.mark.parametrize(("text", "message"), SHOWN)
def test_errors(text, message):
    with pytest.raises(FormulaError) as caught:
        formula(text, Ring(4), {"J": 1.0}, hermitian=True)
    assert str(caught.value) == message


@pytest.mark.parametrize(("sites", "text", "message"), ELSEWHERE)
def test_errors_on_other_sites(sites, text, message):
    with pytest.raises(FormulaError) as caught:
        formula(text, eval(sites, vars(lattice).copy()))
    assert str(caught.value) == message
