"""What the pages say happens: every Python block runs as shown, every link and every named file is there."""

import doctest
import re
import shlex
import shutil
from pathlib import Path
from xml.etree import ElementTree

import pytest

from maxent.app.cli import main

ROOT = Path(__file__).parents[2]
PAGES = sorted([ROOT / "README.md", ROOT / "DEVELOPERS.md", ROOT / "CHANGELOG.md", *(ROOT / "docs").glob("*.md")])
FLAGS = doctest.NORMALIZE_WHITESPACE | doctest.ELLIPSIS

BLOCK = re.compile(r"^```python\n(.*?)^```$", re.S | re.M)
FENCED = re.compile(r"^```.*?^```$", re.S | re.M)
LINK = re.compile(r"\[[^\]]*\]\(([^)\s]+)\)")
#: `maxent/core/decide.py`, `tests/app/`: paths that are named without a link
NAMED = re.compile(r"`((?:maxent|tests|docs|configs|benchmarks|\.ci)/[\w./-]*)`")


def name(page):
    return str(page.relative_to(ROOT))


def read(page):
    return page.read_text(encoding="utf-8")


def blocks(page):
    """Line number and text of each Python block."""
    text = read(page)
    return [(text.count("\n", 0, found.start(1)), found[1]) for found in BLOCK.finditer(text)]


def anchors(page):
    """Names under which headings can be linked to."""
    headings = re.findall(r"^#+ (.+)$", FENCED.sub("", read(page)), re.M)
    return {re.sub(r"[^\w\- ]", "", h.lower()).replace(" ", "-") for h in headings}


@pytest.fixture(scope="module")
def workplace(tmp_path_factory):
    """A folder as a reader has it: the configs, and the run folder that the pages speak of."""
    folder = tmp_path_factory.mktemp("reader")
    shutil.copytree(ROOT / "configs", folder / "configs")
    done = main(["solve", str(folder / "configs/wolf_dice.toml"), "--out", str(folder / "runs/dice"), "--quiet"])
    assert done == 0
    return folder


@pytest.mark.parametrize("page", [p for p in PAGES if blocks(p)], ids=name)
def test_python_blocks(page, workplace, monkeypatch):
    monkeypatch.chdir(workplace)
    scope = {"__name__": "__main__"}
    runner, report = doctest.DocTestRunner(optionflags=FLAGS), []
    for line, text in blocks(page):
        if ">>>" in text:
            example = doctest.DocTestParser().get_doctest(text, scope, name(page), str(page), line)
            runner.run(example, out=report.append, clear_globs=False)
            scope.update(example.globs)
        else:
            exec(compile("\n" * line + text, str(page), "exec"), scope)
    assert runner.failures == 0, "".join(report)


@pytest.mark.parametrize("page", PAGES, ids=name)
def test_links(page):
    text = FENCED.sub("", read(page))
    for target in LINK.findall(text):
        if re.match(r"[a-z]+:", target):
            continue
        path, _, anchor = target.partition("#")
        there = (page.parent / path).resolve() if path else page
        assert there.exists(), f"{name(page)} links to {target}, which is not there"
        assert not anchor or anchor in anchors(there), f"{name(page)} links to {target}, a heading that is not there"
    for path in NAMED.findall(text):
        assert (ROOT / path).exists(), f"{name(page)} names {path}, which is not there"


def test_every_page_is_in_the_index():
    index = ROOT / "docs" / "index.md"
    listed = {(index.parent / target).resolve() for target in LINK.findall(read(index))}
    missing = [name(p) for p in PAGES if p.parent == index.parent and p != index and p.resolve() not in listed]
    assert missing == []


def test_the_readme_has_two_commands():
    commands = re.findall(r"^```sh\n(.*?)^```$", read(ROOT / "README.md"), re.S | re.M)
    assert len(commands) == 2
    words = [shlex.split(c) for c in commands]
    assert all(c.replace("\\\n", "").count("\n") == 1 for c in commands)
    for line in words:
        assert line[:4] == ["python3", "-m", "venv", ".venv"]
    config = ROOT / words[0][words[0].index("solve") + 1]
    assert config.exists() and "--force" in words[0]
    assert words[1][-7:] == [".venv/bin/python", "-m", "pytest", "-n", "auto", "--dist", "loadfile"]


def rows(table):
    """Numbers of each line of a printed table that can be compared between machines, by the first word."""
    out = {}
    for line in table.splitlines():
        head, *cells = line.split() or [""]
        if re.fullmatch(r"-?[\d.]+", cells[0] if cells else ""):
            numbers = [float(c) for c in cells]
            out[head] = numbers if len(numbers) == 1 else [numbers[i] for i in (0, 1, 3)]  # target, value, multiplier
    return out


def test_the_shown_table_is_what_the_main_job_prints(workplace, capsys):
    shown = rows(re.search(r"^```text\n(solved .*?)^```$", read(ROOT / "README.md"), re.S | re.M)[1])
    config = workplace / "configs/xxz_ring_quench.toml"
    assert main(["solve", str(config), "--out", str(workplace / "runs/quench"), "--quiet"]) == 0
    printed = rows(capsys.readouterr().out)
    assert len(shown) == 7
    assert printed.keys() == shown.keys()
    for head, numbers in shown.items():
        assert printed[head] == pytest.approx(numbers, rel=1e-9), head


def test_every_figure_is_shown_and_can_be_heard():
    shown = {(p.parent / target).resolve() for p in PAGES for target in LINK.findall(read(p))}
    drawn = sorted((ROOT / "docs" / "figures").glob("*"))
    assert drawn and {f.resolve() for f in drawn} <= shown
    for figure in drawn:
        root = ElementTree.fromstring(read(figure))
        title, description, *_ = root
        assert title.tag.endswith("title") and description.tag.endswith("desc"), figure.name
        assert len(title.text) > 10 and len(description.text) > 50, figure.name
        assert not re.search(r'href="(?!#)', read(figure)), f"{figure.name} loads something"
