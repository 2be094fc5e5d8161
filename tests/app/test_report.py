"""The page of a run: well-formed, self-contained, escaped, and saying the right things for every verdict."""

import json
import re
from html.parser import HTMLParser

import pytest

from maxent.app.cli import main
from maxent.app.report import render

VOID = {"meta", "br", "hr", "img", "link", "input"}


class Page(HTMLParser):
    """Reads a page strictly: every tag that opens must close, in order."""

    def __init__(self, text):
        super().__init__(convert_charrefs=True)
        self.open, self.tags, self.texts, self.attributes = [], [], [], []
        self.feed(text)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag, attrs):
        self.tags.append(tag)
        self.attributes += attrs
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        if not self.open or self.open[-1] != "style":
            self.texts.append(data)

    @property
    def text(self):
        return " ".join(" ".join(self.texts).split())


def headings(text):
    return re.findall(r"<h2>(.*?)</h2>", text)


@pytest.fixture
def record(runs):
    """Record of a shipped config; damage it as you like."""
    return lambda name: json.loads((runs[name].folder / "result.json").read_text())


@pytest.mark.parametrize(
    ("name", "sections"),
    [
        ("wolf_dice", ["Charges", "Predictions", "Conditioning"]),
        ("unreachable", ["Charges", "What cannot be met, and why", "Certificate"]),
        ("edge", ["Charges", "Certificate", "Limit state", "Predictions", "Conditioning"]),
    ],
)
def test_sections_stand_in_order_and_none_is_empty(runs, name, sections):
    text = (runs[name].folder / "report.html").read_text()
    page = Page(text)
    assert headings(text) == [*sections, "Figures", "State, settings and versions"]
    assert page.tags[:2] == ["html", "head"]
    assert not re.search(r"\bNone\b|\bnan\b|Undefined", page.text)


def test_the_page_needs_nothing_else(runs):
    for run in runs.values():
        page = Page((run.folder / "report.html").read_text())
        assert not {"script", "link", "img", "iframe", "object"} & set(page.tags)
        assert not [value for key, value in page.attributes if key in ("src", "href") or key.startswith("on")]
        text = (run.folder / "report.html").read_text()
        assert "@import" not in text and set(re.findall(r"url\((.)", text)) <= {"#"}
        assert all(value.startswith("#") for key, value in page.attributes if key == "xlink:href")


def test_the_page_says_what_the_result_says(runs, record):
    page = Page((runs["wolf_dice"].folder / "report.html").read_text())
    found = record("wolf_dice")
    for word in (
        "solved · proved",
        found["message"],
        "gravity_shift",
        "-0.032(4)",
        "0.012",
        "0.1643303732",
    ):
        assert word in page.text
    edge = Page((runs["edge"].folder / "report.html").read_text()).text
    assert "The targets are met in a limit only" in edge
    assert "a face of 3 dimensions, found in one step" in edge
    assert "recomputed from scratch confirmed" in edge


def test_names_and_titles_are_escaped(tmp_path):
    config = tmp_path / "c.toml"
    config.write_text(
        'kind = "states"\ntitle = "</title><script>alert(1)</script>"\n'
        '[charges]\n"<b>bold</b> & \\"quoted\\"" = [1, 2, 3]\n"a" = [1, 2, 3]\n'
        '[targets]\n"<b>bold</b> & \\"quoted\\"" = 2.2\na = 2.2\n'
        '[predictions]\n"<i>tilted" = [1, 0, 0]\n'
    )
    assert main(["solve", str(config), "--out", str(tmp_path / "out"), "--quiet"]) == 0
    page = Page((tmp_path / "out" / "report.html").read_text())
    assert not {"b", "i", "script"} & set(page.tags)
    assert '<b>bold</b> & "quoted"' in page.text
    assert "</title><script>alert(1)</script>" in page.text
    assert "<i>tilted" in page.text
    assert "Redundant charges" in page.text


def test_every_verdict_has_its_words_and_colours(record):
    found = record("unreachable")
    style = render(found)
    for verdict in ("solved", "boundary", "unattained", "infeasible", "inconsistent", "unfinished"):
        page = Page(render(found | {"verdict": verdict}))
        assert f"{verdict} · proved" in page.text
        assert ("class", f"banner {verdict}") in page.attributes
        assert f".{verdict}" in style


def test_unattained_tells_what_stays_unmatched(record):
    found = record("unreachable") | {"verdict": "unattained", "certificate": None, "excess": {"energy": 0.25}}
    assert "none of them has the largest entropy: 0.25 energy." in Page(render(found)).text


def test_a_contradiction_and_a_deep_face_are_put_in_words(record):
    found = record("edge")
    found["certificate"] |= {"kind": "contradiction", "verified": False}
    found["face"] |= {"dimension": 1, "depth": 2, "gaps": [0.5, 0.25]}
    text = Page(render(found | {"loose": True})).text
    assert "has the same value -0.25 in every state" in text
    assert "NOT confirmed" in text
    assert "a face of a single state, found in 2 steps" in text
    assert "as a share of the whole range: 0.5 and 0.25." in text
    assert "loosely fixed" in text
