"""What the figures of a comparison hold: its numbers, the same text every time, words where there is nothing."""

import dataclasses
import subprocess
import sys
import xml.etree.ElementTree as ET

import matplotlib
import numpy as np
import pytest
from matplotlib.collections import PathCollection
from matplotlib.figure import Figure

from maxent import plots
from maxent.lattice import ProductState, Ring, formula
from maxent.plots import dynamics
from maxent.plots.keys import brief_names
from maxent.quench.comparison import compare
from maxent.quench.eigenstate_tests import EigenstateTests, SectorTest
from maxent.quench.eigenstates import Scatter
from maxent.quench.ranking import Ranking
from maxent.quench.sizes import SizeSeries
from maxent.quench.starts import Start
from maxent.quench.windows import WindowScan

DENSITY = {"h": "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 0.6*Sz[i]*Sz[i+1]"}
#: A name that a formula reader and HTML would take for something else.
NAME = "$z_0^2$ <&>"


def study(size, theta, phi, **options):
    ring = Ring(size)
    f = lambda text: formula(text, ring, {}, DENSITY)
    charges = {"energy": f("h[i]"), "magnetisation": f("Sz[i]")}
    start = Start.from_vector(ProductState(ring, theta, phi))
    observables = {"zz": f("Sz[i]*Sz[i+1]/L"), NAME: f("Sz[i]*Sz[i+2]/L")}
    return compare(charges, start, observables=observables, **options)


@pytest.fixture(scope="module")
def neel():
    """Sharp magnetisation: every ensemble twice, with a window and single eigenstates."""
    return study(8, ["0", "pi"], 0.0, by_symmetry=False)


@pytest.fixture(scope="module")
def series():
    tilted = [study(n, "pi/3", "2*pi*i/L", ranking=False, blocks=(1, 2)) for n in (4, 5, 6, 8)]
    return SizeSeries(tuple(tilted))


@pytest.fixture(scope="module")
def nothing(neel):
    """No observables, blocks, ensembles, times."""
    return dataclasses.replace(
        neel, truth={}, initial={}, fluctuations={}, block_bounds={}, times=np.empty(0), traces={}, revival=None,
        plateau=None, ensembles=(), levels={}, window={}, window_scan=None, ranking=None,
    )  # fmt: skip


DRAWN = {
    "ensembles": lambda c, **ax: plots.plot_ensembles(c, **ax),
    "distances": lambda c, **ax: plots.plot_distances(c, **ax),
    "ranking": lambda c, **ax: plots.plot_ranking(c.ranking, **ax),
    "trace": lambda c, **ax: plots.plot_trace(c, NAME, **ax),
    "eigenstates": lambda c, **ax: plots.plot_eigenstates(c, NAME, **ax),
    "widths": lambda c, **ax: plots.plot_widths(c.window_scan, canonical=0.75, **ax),
    "sizes": lambda c, **ax: plots.plot_sizes(SizeSeries((c,)), NAME, **ax),
}


def lines(ax, label):
    """Lines of a name and the further ones of the same name, which the key does not show again."""
    return [np.array(x.get_xydata()) for x in ax.get_lines() if str(x.get_label()).removeprefix("_") == label]


def line(ax, label):
    (found,) = lines(ax, label)
    return found


def key(ax):
    return [t.get_text() for t in ax.get_legend().get_texts()]


def said(ax):
    (text,) = ax.texts
    return text.get_text()


def svg(ax):
    return plots.to_svg(ax, title="t", description="d", name="figure")


# ---------------------------------------------------------------- ensembles


def test_dots_and_rings_are_the_deviations(neel):
    ax = plots.plot_ensembles(neel)
    expected = {False: [], True: []}
    for name in neel.truth:
        for e in neel.ensembles:
            expected[bool(e.sector)].append(e.means[name] - neel.truth[name])
    dots, rings = lines(ax, "all sectors"), lines(ax, "sector of the start")
    assert [p[0, 0] for p in dots] == pytest.approx(expected[False], abs=1e-15)
    assert [p[0, 0] for p in rings] == pytest.approx(expected[True], abs=1e-15)
    texts, rows = [t.get_text() for t in ax.get_yticklabels()], ax.get_yticks()
    names = brief_names(neel.ensembles)
    whole = [names[e.label] for _ in neel.truth for e in neel.ensembles if not e.sector]
    assert [texts[list(rows).index(p[0, 1])] for p in dots] == whole
    assert [t.get_text() for t in ax.texts] == ["zz", NAME]


def test_band_tick_and_bar_are_spread_correction_and_eigenstates(neel):
    ax = plots.plot_ensembles(neel, observables=["zz"])
    (band,) = ax.patches
    spread = neel.fluctuations["zz"]
    assert (band.get_x(), band.get_width()) == pytest.approx((-spread, 2 * spread))
    whiskers = lines(ax, "with leading correction")
    fitted = sorted((e for e in neel.ensembles if e.corrections), key=lambda e: bool(e.sector))
    assert len(whiskers) == len(fitted) >= 2
    for whisker, e in zip(whiskers, fitted, strict=True):
        assert whisker[1, 0] == pytest.approx(e.means["zz"] + e.corrections["zz"] - neel.truth["zz"])
    (single,) = [e for e in neel.ensembles if e.ranges]
    assert line(ax, "10–90 % of eigenstates")[:, 0] + neel.truth["zz"] == pytest.approx(single.ranges["zz"])
    assert len(key(ax)) == len(set(key(ax))) == 5


def test_generalised_ensembles_have_short_names_of_their_own(neel):
    base = neel.ensembles[0]
    sets = [("a", "b", "c"), ("a", "b", "c", "d")]
    several = [dataclasses.replace(base, kind="generalised", label=f"g: {x}", charges=x) for x in sets]
    assert list(brief_names([base, *several]).values()) == [
        "canonical", "generalised, 3 charges", "generalised, 4 charges",
    ]  # fmt: skip
    other = dataclasses.replace(several[0], label="g: others")  # as many charges, but others
    assert list(brief_names([several[0], other]).values()) == [several[0].label, "g: others"]


def test_ensembles_without_a_state_have_no_row(neel):
    failed = dataclasses.replace(neel.ensembles[0], label="failed", verdict="infeasible", means={}, distances={})
    c = dataclasses.replace(neel, ensembles=(*neel.ensembles, failed), fluctuations={})
    for ax in (plots.plot_ensembles(c), plots.plot_distances(c), plots.plot_trace(c, "zz")):
        assert "failed" not in "".join([*key(ax), *(t.get_text() for t in ax.get_yticklabels())])
    assert not plots.plot_ensembles(c).patches


# ---------------------------------------------------------------- distances, ranking


def test_distances_and_bounds_below_one(neel):
    ax = plots.plot_distances(neel)
    for e in neel.ensembles:
        short = brief_names(neel.ensembles)[e.label]
        alone = e.kind == "eigenstate"
        found = line(ax, f"{e.label} in the sector" if e.sector and not alone else short)
        assert found[:, 1] == pytest.approx(list(e.distances.values()), abs=1e-15)
        assert np.round(found[:, 0]) == pytest.approx(list(e.distances))
    below = [x for x in neel.block_bounds.values() if x < 1]
    assert 0 < len(below) < len(neel.block_bounds)
    assert [b.get_height() for b in ax.patches] == pytest.approx(below)
    assert "open: sector of the start" in key(ax)
    none = plots.plot_distances(dataclasses.replace(neel, block_bounds={1: 1.0, 2: 3.0}))
    assert not none.patches and "fluctuation bound" not in key(none)


def test_ranking_shows_both_orders(neel):
    ranking = dataclasses.replace(neel.ranking, by_distance=neel.ranking.by_distance[::-1])
    left, right = plots.plot_ranking(ranking).child_axes
    steps = [*ranking.by_entropy, *ranking.by_distance]
    assert [t.get_text() for t in left.get_yticklabels()] == [s.charge for s in steps]
    assert [b.get_width() for b in left.patches] == pytest.approx([s.entropy_drop for s in steps])
    drawn = np.concatenate(lines(left, "predicted"))
    assert drawn[:, 0] == pytest.approx([s.predicted_drop for s in steps])
    assert drawn[:, 1] == pytest.approx(left.get_yticks())
    for block in steps[0].distances:
        found = np.concatenate(lines(right, f"{block} site{'s' * (block > 1)}"))
        assert found[:, 0] == pytest.approx([s.distances[block] for s in steps], abs=1e-15)
    assert left.get_ylim() == right.get_ylim()


# ---------------------------------------------------------------- time, energy, width


def test_trace_with_its_stationary_value(neel):
    ax = plots.plot_trace(neel, "zz")
    assert line(ax, "trace") == pytest.approx(np.stack([neel.times, neel.traces["zz"]], axis=1))
    assert line(ax, "dephased")[:, 1] == pytest.approx(neel.truth["zz"])
    (band,) = ax.collections
    ends = band.get_paths()[0].vertices[:, 1]
    spread = neel.fluctuations["zz"]
    assert (ends.min(), ends.max()) == pytest.approx((neel.truth["zz"] - spread, neel.truth["zz"] + spread))
    assert line(ax, "revival")[:, 0] == pytest.approx(neel.revival)
    for e in neel.ensembles:
        if not e.sector:
            found = line(ax, brief_names(neel.ensembles)[e.label])
            assert found[:, 1] == pytest.approx(e.means["zz"]) and found[:, 0].min() > neel.times[-1]
    low, high = ax.get_ylim()
    assert low < min(neel.traces["zz"]) and high > max(neel.traces["zz"])


def test_plateau_only_where_it_is_open_and_revival_only_inside(neel):
    c = dataclasses.replace(neel, plateau=(1.0, 3.0))
    assert line(plots.plot_trace(c, "zz"), "plateau")[:, 0] == pytest.approx([1.0, 3.0])
    for plateau in (None, (1.0, 1.9)):
        assert "plateau" not in key(plots.plot_trace(dataclasses.replace(neel, plateau=plateau), "zz"))
    for revival in (None, 2 * neel.times[-1]):
        assert "revival" not in key(plots.plot_trace(dataclasses.replace(neel, revival=revival), "zz"))
    assert "not known" in plots.describe_trace(dataclasses.replace(neel, revival=None), "zz")
    assert "no plateau" in plots.describe_trace(dataclasses.replace(neel, plateau=(1.0, 1.9)), "zz")


def test_eigenstates_all_appear_once(neel):
    ax = plots.plot_eigenstates(neel, "zz")
    (circles,) = [x for x in ax.collections if isinstance(x, PathCollection)]
    drawn = np.concatenate([line(ax, "eigenstate"), np.asarray(circles.get_offsets())])
    expected = np.stack([neel.levels["energy"], neel.levels["zz"]], axis=1)
    assert drawn[np.lexsort(drawn.T)] == pytest.approx(expected[np.lexsort(expected.T)])
    sizes, weight = circles.get_sizes(), neel.levels["weight"]
    largest = np.sort(weight)[::-1][: len(sizes)]
    assert sizes - 6 == pytest.approx(110 * largest / largest[0])  # area above that of a dot
    assert largest.sum() >= 0.999 * weight.sum()
    assert set(line(ax, "dephased")[:, 1]) == {neel.truth["zz"]}
    inner = neel.ensemble("Gaussian window", sector=True)
    window = line(ax, "window")
    assert window[:, 1] == pytest.approx(inner.means["zz"])
    assert window.mean(axis=0)[0] == pytest.approx(neel.window["mean"])
    without = dataclasses.replace(neel, window={})
    assert "window" not in key(plots.plot_eigenstates(without, "zz"))


def test_of_many_eigenstates_those_on_one_spot_are_drawn_once():
    rng = np.random.default_rng(2)
    x, y = rng.normal(size=(2, 30000))
    kept = dynamics._thinned(x, y, np.arange(30000))
    assert len(kept) < 8000 and len(np.unique(kept)) == len(kept)
    fine = np.ptp(x) / dynamics.GRID[0], np.ptp(y) / dynamics.GRID[1]
    for k in rng.integers(30000, size=50):  # every point has a drawn one in its cell
        assert np.any((np.abs(x[kept] - x[k]) <= fine[0]) & (np.abs(y[kept] - y[k]) <= fine[1]))
    assert len(dynamics._thinned(x, y, np.arange(100))) == 100


def test_widths_are_those_of_the_scan(neel):
    scan = neel.window_scan
    ax = plots.plot_widths(scan, canonical=0.75)
    assert line(ax, "Gaussian window") == pytest.approx(np.stack([scan.widths, scan.betas], axis=1))
    assert set(line(ax, "canonical")[:, 1]) == {0.75} and ax.get_xscale() == "log"
    inside = plots.plot_widths(scan, canonical=0.75, sector=True)
    assert key(inside)[:2] == ["canonical, in the sector", "Gaussian window, in the sector"]
    words = plots.describe_widths(scan, canonical=0.75, sector=True)
    assert words.startswith("beta of the Gaussian window in the sector of the start is ")
    assert "; that of the canonical ensemble there is 0.75." in words
    more = WindowScan(scan.windows, ((0.01, "too narrow"),))
    ax = plots.plot_widths(more)
    assert line(ax, "too close to the levels")[:, 0] == pytest.approx([0.01])
    assert ax.get_xlim()[0] < 0.01 and "canonical" not in key(ax)
    assert plots.describe_widths(more).endswith("Width too close to the level spacing: 0.01.")


# ---------------------------------------------------------------- sizes


@pytest.mark.parametrize("what", ["zz", 1])
def test_sizes_by_sequence(series, what):
    ax = plots.plot_sizes(series, what)
    assert key(ax)[-3:] == ["L = 4n", "L = 4n + 2", "L odd"]
    ask = series.distances if what == 1 else series.deviations
    for label in series.labels:
        sizes, values = ask(label, what)
        at = dict(zip(sizes, values, strict=True))
        for sequence, members in {"L = 4n": [4, 8], "L = 4n + 2": [6], "L odd": [5]}.items():
            found = line(ax, f"{label}: {sequence}")
            assert found[:, 0] == pytest.approx([1 / n for n in members])
            assert found[:, 1] == pytest.approx([at[n] for n in members], abs=1e-15)
    assert ax.get_xlim()[0] == 0.0
    words = plots.describe_sizes(series, what)
    assert all(f"at L = {n}" in words for n in (4, 5, 6, 8))


def test_ten_ensembles_keep_apart_without_colour(neel):
    base = neel.ensembles[0]
    many = tuple(dataclasses.replace(base, label=f"e{k}", kind="canonical", sector={}) for k in range(10))
    c = dataclasses.replace(neel, ensembles=many)
    sizes = SizeSeries(tuple(dataclasses.replace(c, size=n) for n in (8, 9, 10, 12)))
    drawn = [plots.plot_distances(c), plots.plot_trace(c, "zz"), *(plots.plot_sizes(sizes, x) for x in ("zz", 1))]
    for ax in drawn:
        legend = ax.get_legend()
        marks = {
            text.get_text(): (h.get_marker(), str(h.get_linestyle()))
            for h, text in zip(legend.legend_handles, legend.get_texts(), strict=True)
            if text.get_text().startswith("e")
        }
        assert len(marks) == len(set(marks.values())) == 10
        shape = {line.get_label().split(":")[0].lstrip("_"): line.get_marker() for line in ax.get_lines()
                 if line.get_label().lstrip("_").startswith("e")}  # fmt: skip
        assert {n: m[0] for n, m in marks.items()} == shape  # the key shows the marks that are drawn


def test_sizes_refuse_what_is_not_there(series):
    for what in ("energy", 3):
        with pytest.raises(ValueError, match=rf"no .*{what}.*there are the observables .*'zz'.* blocks of \[1, 2\]"):
            plots.plot_sizes(series, what)
        with pytest.raises(ValueError, match=rf"no .*{what}"):
            plots.describe_sizes(series, what)
    whole = [tuple(e for e in c.ensembles if not e.sector) for c in series.comparisons]
    pairs = zip(series.comparisons, whole, strict=True)
    without = SizeSeries(tuple(dataclasses.replace(c, ensembles=kept) for c, kept in pairs))
    assert said(plots.plot_sizes(without, "zz", sector=True)) == plots.describe_sizes(without, "zz", sector=True)


# ---------------------------------------------------------------- scatter


def with_tests(c, **levels):
    """The comparison with a tested sector whose scatter of `zz` is known."""
    sectors = tuple(
        SectorTest(
            {"momentum": 0.0},
            size,
            of_start,
            None,
            "",
            {"zz": Scatter(size, np.zeros(2), np.array([-x, x]), 1.0, 0.1)},
            {},
        )
        for size, x, of_start in levels["tests"]
    )
    return dataclasses.replace(c, eigenstate_tests=EigenstateTests(sectors, {}))


def test_scatter_against_the_number_of_levels(series):
    four, five, six, eight = series.comparisons
    plain = (
        with_tests(four, tests=[]),
        with_tests(five, tests=[(50, 0.3, False)]),
        with_tests(six, tests=[(100, 0.2, True)]),
    )
    several = SizeSeries((*plain, with_tests(eight, tests=[(400, 0.1, True), (900, 0.7, False)])))
    ax = plots.plot_scatter(several, "zz")  # where sectors of starts are tested the others are left out
    assert line(ax, "L = 4n + 2") == pytest.approx(np.array([[100, 0.2]]))
    assert line(ax, "L = 4n") == pytest.approx(np.array([[400, 0.1]]))
    guide = line(ax, "levels to the power −1/2")
    assert guide[:, 1] * np.sqrt(guide[:, 0]) == pytest.approx(0.1 * 20)  # through the largest sector
    assert (ax.get_xscale(), ax.get_yscale()) == ("log", "log") and {t.get_text() for t in ax.texts} == {"6", "8"}
    words = plots.describe_scatter(several, "zz")
    assert "0.2 at 6 sites (100 levels) and 0.1 at 8 sites (400 levels)" in words and "power" not in words
    three = SizeSeries(
        tuple(
            with_tests(c, tests=[(n, n**-0.5, True)]) for c, n in zip((five, six, eight), (50, 100, 400), strict=True)
        )
    )
    assert "to the power -0.5;" in plots.describe_scatter(three, "zz")
    nothing = SizeSeries(tuple(with_tests(c, tests=[]) for c in series.comparisons))
    assert said(plots.plot_scatter(nothing, "zz")) == plots.describe_scatter(nothing, "zz")
    alike = SizeSeries((with_tests(six, tests=[(100, 1e-17, True)]),))
    assert said(plots.plot_scatter(alike, "zz")) == plots.describe_scatter(alike, "zz")
    for f in (plots.plot_scatter, plots.describe_scatter):
        with pytest.raises(ValueError, match="no observable 'xx'"):
            f(several, "xx")
    ET.fromstring(svg(ax))


def test_distances_of_single_eigenstates_have_their_range(neel):
    ax = plots.plot_distances(neel)
    (single,) = [e for e in neel.ensembles if e.distance_ranges]
    bars = lines(ax, "10–90 % of eigenstates")
    assert [tuple(b[:, 1]) for b in bars] == list(single.distance_ranges.values())
    assert key(ax).count("10–90 % of eigenstates") == 1
    assert "(medians; 10 % to 90 % " in plots.describe_distances(neel)


# ---------------------------------------------------------------- nothing to show


def test_what_is_missing_is_said(nothing):
    assert said(plots.plot_ensembles(nothing)) == plots.describe_ensembles(nothing) == "No observables were given."
    assert said(plots.plot_distances(nothing)) == plots.describe_distances(nothing) == "No blocks were compared."
    assert said(plots.plot_ranking(None)) == plots.describe_ranking(None) == "The charges were not ranked."
    empty = Ranking((), (), "", "no fit")
    assert said(plots.plot_ranking(empty)).startswith("No charge could be added")
    assert plots.describe_ranking(empty) == "No charge could be added: no fit."
    for scan in (None, WindowScan((), ((0.1, "too narrow"),))):
        assert said(plots.plot_widths(scan)) == plots.describe_widths(scan)
    c = dataclasses.replace(nothing, truth={"zz": 0.1})
    assert said(plots.plot_ensembles(c)) == plots.describe_ensembles(c) == "No ensemble has a state."
    assert said(plots.plot_trace(c, "zz")) == plots.describe_trace(c, "zz") == "No trace in time was computed."
    assert said(plots.plot_eigenstates(c, "zz")) == plots.describe_eigenstates(c, "zz")


def test_unknown_observables_are_refused_by_name(neel, nothing):
    for f in (plots.plot_trace, plots.plot_eigenstates, plots.describe_trace, plots.describe_eigenstates):
        with pytest.raises(ValueError, match="no observable 'xx'; the observables are 'zz', "):
            f(neel, "xx")
    for f in (plots.plot_ensembles, plots.describe_ensembles):
        with pytest.raises(ValueError, match="no observable 'xx'; the observables are none"):
            f(nothing, observables=["xx"])


# ---------------------------------------------------------------- words


def test_words_hold_the_numbers(neel):
    n = lambda x: f"{x:.3g}"
    words = plots.describe_ensembles(neel, observables=["zz"])
    whole, inside = neel.deviation("canonical", "zz"), neel.deviation("canonical", "zz", sector=True)
    assert f"canonical +{n(whole)} (" in words and f"canonical in the sector of the start +{n(inside)}" in words
    assert f"temporal standard deviation {n(neel.fluctuations['zz'])}" in words
    words = plots.describe_distances(neel)
    assert n(neel.ensemble("canonical").distances[2]) in words and f"{n(neel.block_bounds[1])} for 1 site" in words
    step = neel.ranking.by_entropy[0]
    words = plots.describe_ranking(neel.ranking)
    assert f"energy (entropy drop {n(step.entropy_drop)} nats, predicted {n(step.predicted_drop)};" in words
    assert words.endswith(neel.ranking.suggestion)
    words = plots.describe_trace(neel, "zz")
    assert f"The revival time is {neel.revival:.4g}." in words and n(neel.truth["zz"]) in words
    words = plots.describe_eigenstates(neel, "zz")
    assert words.startswith("70 eigenstates in the sector of the start") and n(neel.levels["weight"].max()) in words
    words = plots.describe_widths(neel.window_scan, canonical=0.75)
    assert "that of the canonical ensemble is 0.75." in words and n(neel.window_scan.betas[0]) in words


# ---------------------------------------------------------------- any of them


@pytest.mark.parametrize("draw", DRAWN.values(), ids=DRAWN)
def test_svg_is_the_same_text_every_time(draw, neel):
    text = svg(draw(neel))
    assert text == svg(draw(neel))
    ET.fromstring(text)


@pytest.mark.parametrize("draw", DRAWN.values(), ids=DRAWN)
def test_names_are_never_formulas_and_settings_stay(draw, neel):
    before = dict(matplotlib.rcParams)
    with matplotlib.rc_context({"text.parse_math": True}):
        ax = Figure(layout="constrained").add_subplot()
        assert draw(neel, ax=ax) is ax
        text = svg(ax)
    assert dict(matplotlib.rcParams) == before
    shown = draw not in (DRAWN["distances"], DRAWN["ranking"], DRAWN["widths"])
    assert ("$z_0^2$ &lt;&amp;&gt;" in text) == shown


@pytest.mark.parametrize("draw", DRAWN.values(), ids=DRAWN)
@pytest.mark.parametrize("width", [2.6, 3.4, 6.0])
def test_labels_stay_on_the_page_and_apart(draw, width, neel):
    ax = Figure(figsize=(width, 4.0), layout="constrained").add_subplot()
    draw(neel, ax=ax)
    figure = ax.get_figure()
    figure.draw_without_rendering()
    page = figure.bbox.padded(2)
    boxes = [t.get_window_extent() for half in (ax, *ax.child_axes) for t in _words(half)]
    assert len(boxes) > 4
    for k, box in enumerate(boxes):
        assert page.x0 <= box.x0 and box.x1 <= page.x1 and page.y0 <= box.y0 and box.y1 <= page.y1
        for other in boxes[:k]:
            across = min(box.x1, other.x1) - max(box.x0, other.x0)
            along = min(box.y1, other.y1) - max(box.y0, other.y0)
            assert across <= 1 or along <= 1.5  # text has some room around its letters


def _words(ax):
    """Every text that is seen."""
    inside = lambda at, limits: min(limits) <= at <= max(limits)
    out = [*ax.texts, *(ax.get_legend().get_texts() if ax.get_legend() else ())]
    if ax.axison:
        out += [ax.xaxis.label, ax.yaxis.label]
        out += [t for t in ax.get_xticklabels() if inside(t.get_position()[0], ax.get_xlim())]
        out += [t for t in ax.get_yticklabels() if inside(t.get_position()[1], ax.get_ylim())]
    return [t for t in out if t.get_text()]


def test_nothing_opens_a_window_and_words_need_no_axes():
    code = (
        "import sys, maxent.plots as p\n"
        "p.plot_ranking(None), p.plot_widths(None)\n"
        "assert not {'matplotlib.pyplot', 'jax', 'pydantic'} & set(sys.modules)\n"
    )
    subprocess.run([sys.executable, "-c", code], check=True)
