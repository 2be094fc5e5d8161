"""The report in a real browser: nothing sticks out on a desk or on a phone, nothing is loaded, every figure has words.

Runs where Chromium is installed (`chromium` on the path, or its file named in the variable CHROMIUM).  Pages are shown
in frames of 1280 and 390 px, so that media queries see these widths whatever window the browser can open; the script
that measures belongs to the test and not to the page.
"""

import html
import json
import os
import re
import shutil
import subprocess
from types import SimpleNamespace

import pytest

from maxent.app.cli import main

WIDTHS = (1280, 390)
CHROMIUM = os.environ.get("CHROMIUM") or shutil.which("chromium")
FLAGS = (
    "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--hide-scrollbars",
    "--disable-background-networking", "--disable-component-update", "--disable-sync",
)  # fmt: skip

pytestmark = pytest.mark.skipif(CHROMIUM is None, reason="Chromium is not installed: apt-get install chromium")

MEASURE = """
function measure(frame) {
  const page = frame.contentDocument, root = page.documentElement, width = frame.clientWidth;
  const inside = (inner, outer) => inner.left >= outer.left - 1 && inner.right <= outer.right + 1
    && inner.top >= outer.top - 1 && inner.bottom <= outer.bottom + 1;
  const boxed = (e) => e.closest(".box") && e.closest(".box").getBoundingClientRect().right <= width + 1;
  return {
    name: frame.name, width: width, inner: frame.contentWindow.innerWidth, scroll: root.scrollWidth,
    wide: [...page.body.querySelectorAll("*")].filter((e) => !e.closest("svg") && !boxed(e)
      && e.getBoundingClientRect().right > width + 1).map((e) => e.tagName + " " + e.textContent.slice(0, 40)),
    cut: [...page.querySelectorAll("svg text")].filter((t) =>
      !inside(t.getBoundingClientRect(), t.closest("svg").getBoundingClientRect())).map((t) => t.textContent),
    figures: [...page.querySelectorAll("figure")].map((f) => {
      const svg = f.querySelector("svg"), box = svg.getBoundingClientRect();
      const words = svg.getAttribute("aria-labelledby").split(" ").map((i) => page.getElementById(i).textContent);
      return {role: svg.getAttribute("role"), words: words, width: box.width, height: box.height,
        caption: f.querySelector("figcaption").innerText, texts: svg.querySelectorAll("text").length};
    }),
    columns: new Set([...page.querySelectorAll("figure")].map((f) => f.getBoundingClientRect().left)).size,
    requests: frame.contentWindow.performance.getEntriesByType("resource").map((e) => e.name),
    scripts: page.scripts.length,
    ids: [...page.querySelectorAll("[id]")].map((e) => e.id),
    leads: [...page.querySelectorAll("h2")].map((h) => [h.innerText, h.nextElementSibling.tagName])
  };
}
window.onload = () => {
  document.getElementById("out").textContent = JSON.stringify([...document.querySelectorAll("iframe")].map(measure));
};
"""


def browse(tmp_path, page, *flags):
    """Run Chromium on a file with a fresh profile; gives what it prints."""
    command = [CHROMIUM, *FLAGS, f"--user-data-dir={tmp_path / 'profile'}", *flags, page.as_uri()]
    return subprocess.run(command, check=True, capture_output=True, text=True, timeout=120).stdout


def hostile(base):
    """A run whose names are long, cannot be broken at blanks, and look like HTML and formulas."""
    config = base / "hostile.toml"
    names = ["<b>$x_1^2$</b> & more", "supercalifragilistic" * 5, "e_n_e_r_g_y", "d", "a name with blanks " * 5]
    rows = {json.dumps(n): [(7 * i * (k + 2) + i * i * k) % 13 / 3 for i in range(30)] for k, n in enumerate(names)}
    lines = ['kind = "states"', 'title = "' + "unbreakable" * 12 + '"', "[charges]"]
    lines += [f"{n} = {row}" for n, row in rows.items()]
    lines += ["[targets]", *[f"{n} = {sum(row) / len(row) + 0.123456789012}" for n, row in rows.items()]]
    lines += ["[predictions]", f'"{"p" * 90}" = {list(range(30))}']
    config.write_text("\n".join(lines) + "\n")
    assert main(["solve", str(config), "--out", str(base / "hostile"), "--quiet"]) == 0
    return base / "hostile"


def study(base):
    """A run with a comparison of ensembles over three sizes, in a sector, with a long name."""
    config = base / "study.toml"
    config.write_text(
        """kind = "spins"
sites = {geometry = "ring", sizes = [4, 5, 6]}
start = {pattern = ["up"]}
quench = {blocks = [1, 2], ranking = true}
[charges]
energy = "Sx[i]*Sx[i+1] + 0.7*Sz[i]*Sz[i+1] + 0.4*Sz[i] + 0.3*Sx[i]"
[targets]
energy = "from start"
[predictions]
"<b>$z_1$ & a correlator with a long_name" = "Sz[i]*Sz[i+1]/L"
"""
    )
    assert main(["solve", str(config), "--out", str(base / "study"), "--quiet"]) == 0
    return base / "study"


@pytest.fixture(scope="module")
def pages(runs, tmp_path_factory):
    """(name, width) -> what the browser measured."""
    base = tmp_path_factory.mktemp("browser")
    folders = {name: run.folder for name, run in runs.items()}
    folders |= {"hostile": hostile(base), "study": study(base)}
    frames = [
        f'<iframe name="{name} {width}" style="border:0;width:{width}px;height:3000px" '
        f'srcdoc="{html.escape((folder / "report.html").read_text())}"></iframe>'
        for name, folder in folders.items()
        for width in WIDTHS
    ]
    page = base / "all.html"
    page.write_text(
        f'<!DOCTYPE html><meta charset="utf-8"><body><pre id="out"></pre>{"".join(frames)}<script>{MEASURE}</script>'
    )
    out = browse(base, page, "--dump-dom")
    found = json.loads(html.unescape(re.search(r'<pre id="out">(.*?)</pre>', out, re.S)[1]))
    assert len(found) == len(folders) * len(WIDTHS)
    return {tuple(m["name"].split()): SimpleNamespace(**m) for m in found}


def test_nothing_sticks_out_at_any_width(pages):
    for (name, width), page in pages.items():
        assert page.inner == page.width == int(width), (name, width)
        assert page.scroll <= page.width, (name, width, page.scroll)
        assert page.wide == [], (name, width)


def test_every_figure_has_words_with_numbers_and_a_caption(pages):
    for (name, width), page in pages.items():
        assert page.figures, name
        for figure in page.figures:
            title, words = figure["words"]
            assert figure["role"] == "img" and title and re.search(r"\d", words), (name, title)
            assert figure["caption"].startswith(title), (name, title)
            assert figure["texts"] > 3 and figure["width"] > 250 and figure["height"] > 60, (name, width, title)


def test_no_text_of_a_figure_is_cut_off(pages):
    for (name, width), page in pages.items():
        assert page.cut == [], (name, width)


def test_figures_stand_beside_one_another_where_there_is_room(pages):
    for name, width in pages:
        if len(pages[name, width].figures) > 1:
            assert pages[name, width].columns == (2 if width == "1280" else 1), (name, width)


def test_nothing_is_loaded_and_nothing_runs(pages):
    for (name, _), page in pages.items():
        assert page.requests == [] and page.scripts == 0, name


def test_ids_are_unique_and_every_heading_is_introduced(pages):
    for (name, _), page in pages.items():
        assert len(page.ids) == len(set(page.ids)), name
        assert page.leads and all(tag == "P" for _, tag in page.leads), (name, page.leads)


def test_names_that_look_like_markup_stay_text(pages):
    captions = " ".join(f["caption"] for f in pages["hostile", "390"].figures)
    assert "<b>$x_1^2$</b> & more" in captions


def test_a_run_gives_the_same_figures_in_the_page_and_beside_it(runs):
    folder = runs["xxz_ring_quench"].folder
    page = (folder / "report.html").read_text()
    files = sorted((folder / "figures").glob("*.svg"))
    assert len(files) == page.count("<figure>") == 6
    for file in files:
        paths = re.findall(r' d="([^"]+)"', file.read_text())
        assert paths and all(f'd="{p}"' in page for p in paths)


@pytest.mark.skipif(shutil.which("pdftotext") is None, reason="pdftotext is not installed")
def test_it_prints(runs, tmp_path):
    report = runs["edge"].folder / "report.html"
    browse(tmp_path, report, f"--print-to-pdf={tmp_path / 'page.pdf'}", "--no-pdf-header-footer")
    text = subprocess.run(
        ["pdftotext", "-layout", tmp_path / "page.pdf", "-"], check=True, capture_output=True, text=True
    ).stdout
    for words in ("Two spins on the edge", "limit state", "certificate", "0.09477986807", "Course of the iteration"):
        assert words in text
