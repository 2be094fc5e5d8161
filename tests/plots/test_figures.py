"""What the figures hold: the numbers of the result, names as they are, the same text for the same figure."""

import dataclasses
import subprocess
import sys
import xml.etree.ElementTree as ET
from functools import cache
from itertools import combinations

import matplotlib
import numpy as np
import pytest
from matplotlib.figure import Figure
from matplotlib.patches import Polygon

import maxent
from maxent import plots
from maxent.app import figures
from maxent.core.contract import EPS
from maxent.families import Matrices, Microstates
from maxent.plots.style import short

TRAP = Microstates({"energy": [0.0, 1.0, 2.0, 3.0], "energy_squared": [0.0, 1.0, 4.0, 9.0]})
SPIN = Matrices({"x": [[0, 1], [1, 0]], "z": [[1, 0], [0, -1]]})
DRAWN = [plots.plot_region, plots.plot_spectrum, plots.plot_convergence, plots.plot_populations]


@pytest.fixture(scope="module")
def solved():
    return maxent.solve(TRAP, {"energy": 1.2, "energy_squared": 2.3})


@pytest.fixture(scope="module")
def infeasible():
    return maxent.solve(TRAP, {"energy": 1.5, "energy_squared": 2.1})


@pytest.fixture(scope="module")
def boundary():
    return maxent.solve(SPIN, {"x": 0.6, "z": 0.8})


@cache
def eight():
    """Eight charges with names that a formula reader or HTML would take for something else."""
    rng = np.random.default_rng(5)
    names = ["$a_1^2$", "b<sub>", "c & d", "e_f_g", "100 %", '"quoted"', "\\alpha", "a name that is very long " * 4]
    family = Microstates({n: rng.standard_normal(30) for n in names})
    return maxent.solve(family, {n: 0.05 * k for k, n in enumerate(names)})


def line(ax, label):
    (found,) = [x for x in ax.get_lines() if x.get_label() == label]
    return np.array(found.get_xydata())


def words(ax):
    return [t.get_text() for t in ax.get_legend().get_texts()]


def svg(ax, name="figure"):
    return plots.to_svg(ax, title="t", description="d", name=name)


# ---------------------------------------------------------------- region


def test_region_of_a_solved_result(solved):
    ax = plots.plot_region(solved)
    assert (ax.get_xlabel(), ax.get_ylabel()) == ("energy", "energy_squared")
    assert line(ax, "target") == pytest.approx(np.array([[1.2, 2.3]]))
    assert line(ax, "state") == pytest.approx(np.array([[1.2, 2.3]]))
    assert words(ax) == ["reachable", "target", "state"]
    (shape,) = [p for p in ax.patches if isinstance(p, Polygon)]
    corners = sorted(map(tuple, np.round(shape.get_xy()[:-1], 12) + 0.0))
    assert corners == [(0, 0), (1, 1), (2, 4), (3, 9)]
    low, high = np.array([ax.get_xlim(), ax.get_ylim()]).T
    assert np.all(low < [0, 0]) and np.all(high > [3, 9])


def test_the_certificate_touches_the_region_and_separates_the_target(infeasible):
    ax = plots.plot_region(infeasible)
    assert words(ax) == ["reachable", "certificate", "target"]
    (drawn,) = [x for x in ax.get_lines() if x.get_label() == "certificate"]
    p, q = np.array(drawn.get_xy1()), np.array(drawn.get_xy2())
    # the side from (1, 1) to (2, 4) is the line energy_squared = 3 energy - 2
    for point in (p, q):
        assert point[1] == pytest.approx(3 * point[0] - 2, abs=1e-9)
    assert 3 * 1.5 - 2 > 2.1
    assert np.linalg.norm(q - p) > 0.5


def test_the_line_of_a_limit_state_touches_the_disc_there(boundary):
    ax = plots.plot_region(boundary)
    assert words(ax) == ["reachable", "certificate", "target", "limit state"]
    assert line(ax, "limit state") == pytest.approx(np.array([[0.6, 0.8]]), abs=1e-6)
    (drawn,) = [x for x in ax.get_lines() if x.get_label() == "certificate"]
    for point in (np.array(drawn.get_xy1()), np.array(drawn.get_xy2())):
        assert point @ (0.6, 0.8) == pytest.approx(1.0, abs=1e-6)  # the tangent of the unit circle


def test_the_line_with_further_charges_is_the_certificate_at_their_targets():
    family = Microstates({"a": [0, 1, 2, 0.0], "b": [0, 1, 4, 1.0], "c": [0, 0, 0, 1.0], "d": [1, 2, 1, 2.0]})
    result = maxent.solve(family, {"a": 1.5, "b": 0.5, "c": 0.2, "d": 1.4})
    v, low = result.certificate.direction, result.certificate.lowest
    ax = plots.plot_region(result, pair=("a", "b"))
    (drawn,) = [x for x in ax.get_lines() if x.get_label() == "certificate"]
    for x, y in (drawn.get_xy1(), drawn.get_xy2()):
        assert v["a"] * x + v["b"] * y + v["c"] * 0.2 + v["d"] * 1.4 == pytest.approx(low, abs=1e-9)


def test_pairs_in_which_the_certificate_has_no_part_carry_no_line():
    family = Microstates({"a": [0, 1, 2.0, 1.5], "b": [1, 0, 1, 0.5], "c": [0.3, 0.1, 0.9, 0.2]})
    result = maxent.solve(family, {"a": 2.5, "b": 0.5, "c": 0.4})
    certificate = dataclasses.replace(result.certificate, direction={"a": -1.0, "b": 0.0, "c": 0.0})
    result = dataclasses.replace(result, certificate=certificate)
    assert "certificate" in words(plots.plot_region(result, pair=("a", "b")))
    assert "certificate" not in words(plots.plot_region(result, pair=("b", "c")))


def test_the_nearest_targets_are_marked():
    result = maxent.solve(TRAP, {"energy": 1.5, "energy_squared": 2.1}, explain=True)
    ax = plots.plot_region(result)
    assert words(ax) == ["reachable", "certificate", "target", "nearest"]
    near = line(ax, "nearest")[0]
    assert near == pytest.approx([result.nearest.targets[n] for n in result.names])
    assert near[1] == pytest.approx(3 * near[0] - 2)


def test_units_and_pairs(solved):
    units = {"energy": "meV", "energy_squared": "meV²"}
    ax = plots.plot_region(solved, pair=["energy_squared", "energy"], units=units)
    assert (ax.get_xlabel(), ax.get_ylabel()) == ("energy_squared (meV²)", "energy (meV)")
    for pair, says in [
        (("energy", "mass"), "no charge 'mass'; the charges are 'energy', 'energy_squared'"),
        (("energy", "energy"), "two different charges"),
        (("energy",), "two different charges"),
    ]:
        with pytest.raises(ValueError, match=says):
            plots.plot_region(solved, pair=pair)


def test_one_charge_is_an_interval():
    ax = plots.plot_region(maxent.solve(Microstates({"spots": np.arange(1, 7)}), {"spots": 4.5}))
    assert np.sort(line(ax, "reachable")[:, 0]) == pytest.approx([1, 6])
    assert line(ax, "target") == pytest.approx(np.array([[4.5, 0.0]]))
    assert not len(ax.get_yticks())


# ---------------------------------------------------------------- spectrum, convergence, populations


def test_bars_of_the_spectrum_are_the_variances(solved):
    ax = plots.plot_spectrum(solved)
    spectrum = np.array(solved.conditioning.spectrum)
    assert ax.get_xscale() == "log"
    assert [b.get_x() + b.get_width() for b in ax.patches] == pytest.approx(spectrum)
    assert [b.get_x() for b in ax.patches] == pytest.approx([1.0, 1.0])  # bars begin at uncorrelated
    # the eigenvalues of a 2 x 2 correlation matrix are 1 + r and 1 - r
    r = solved.covariance[0, 1] / np.sqrt(solved.covariance[0, 0] * solved.covariance[1, 1])
    assert spectrum == pytest.approx([1 + r, 1 - r], rel=1e-9)
    notes = [t.get_text() for t in ax.texts]
    assert [n.split(":")[0] for n in notes] == ["stiffest", "sloppiest"]
    assert "energy_squared" in notes[0] and "energy" in notes[1]


def test_steps_are_the_trace_above_its_rounding(solved):
    ax = plots.plot_convergence(solved)
    residual, _, level = np.array(solved.trace).T
    drawn, floor = line(ax, "residual"), line(ax, "rounding")
    assert drawn[:, 0] == pytest.approx(np.arange(len(residual)))
    assert np.all(drawn[residual > 0, 1] == np.maximum(residual, drawn[:, 1])[residual > 0])
    assert drawn[residual > EPS, 1] == pytest.approx(residual[residual > EPS])
    assert floor[:, 1] == pytest.approx(4 * EPS * (1 + level))
    assert ax.get_yscale() == "log" and ax.get_ylim()[0] < drawn[:, 1].min()


def test_a_residual_of_zero_is_drawn_and_said():
    result = maxent.solve(Microstates({"a": [0.0, 1.0]}), {"a": 0.25})
    ax = plots.plot_convergence(dataclasses.replace(result, trace=((0.5, 1.0, 0.0), (1e-5, 1.0, 0.3), (0.0, 1.0, 0.3))))
    assert words(ax) == ["rounding", "residual", "zero"]
    assert len(line(ax, "zero")) == 1 and line(ax, "residual")[-1, 1] > 0


def test_populations_of_few_states_are_bars_with_their_labels(solved):
    ax = plots.plot_populations(solved, labels=["ground", "first", "second", "third"])
    assert [b.get_height() for b in ax.patches] == pytest.approx(solved.state.probabilities)
    assert [t.get_text() for t in ax.get_xticklabels()] == ["ground", "first", "second", "third"]
    assert words(ax) == ["equal (1/4)"]


def test_populations_of_many_states_fall():
    n = np.arange(200.0)
    result = maxent.solve(Microstates({"n": n}), {"n": 20.0})
    ax = plots.plot_populations(result)
    drawn = line(ax, "populations")
    assert drawn[:, 1] == pytest.approx(np.sort(result.state.probabilities)[::-1])
    assert ax.get_yscale() == "log"
    # exp(-lam n) on a logarithmic axis: a straight line with the multiplier as slope
    assert np.diff(np.log(drawn[:, 1])) == pytest.approx(-result.multipliers["n"], rel=1e-6)


def test_populations_of_a_limit_state_are_those_of_the_face(boundary):
    exchange = Microstates({"n": [0.0, 0.0, 1.0, 2.0]})
    ax = plots.plot_populations(maxent.solve(exchange, {"n": 0.0}))
    assert "on the face" in ax.get_xlabel()
    assert [b.get_height() for b in ax.patches] == pytest.approx([0.5, 0.5, 0.0, 0.0])
    assert [b.get_height() for b in plots.plot_populations(boundary).patches] == pytest.approx([1.0])


# ---------------------------------------------------------------- any result


def test_without_a_state_the_axes_say_so(infeasible):
    for draw in (plots.plot_spectrum, plots.plot_populations):
        assert draw(infeasible).texts[0].get_text() == "There is no state."
    assert plots.plot_convergence(infeasible).texts[0].get_text() == "Decided before the first step."


@pytest.mark.parametrize("draw", DRAWN)
def test_unfinished_results_are_drawn(draw, solved):
    blank = dict.fromkeys(solved.names, float("nan"))
    gone = {"values": blank, "residuals": blank, "multipliers": blank, "conditioning": None}
    result = dataclasses.replace(solved, verdict=maxent.Verdict.UNFINISHED, **gone)
    ax = draw(result)
    assert "nan" not in svg(ax).lower()
    if draw is plots.plot_region:
        assert words(ax) == ["reachable", "target"]


@pytest.mark.parametrize("draw", DRAWN)
def test_given_axes_are_drawn_on_and_returned(draw, solved):
    left, right = Figure().subplots(1, 2)
    assert draw(solved, ax=left) is left
    assert left.has_data() and not right.has_data()


@pytest.mark.parametrize("draw", DRAWN)
def test_axes_of_another_kind_are_refused(draw, solved):
    with pytest.raises(TypeError, match="ax must be a Matplotlib Axes or None, not Figure"):
        draw(solved, ax=Figure())


@pytest.mark.parametrize("draw", DRAWN)
def test_settings_of_the_user_stay_as_they_are(draw, solved):
    before = dict(matplotlib.rcParams)
    draw(solved)
    assert dict(matplotlib.rcParams) == before


@pytest.mark.parametrize("draw", DRAWN)
def test_names_are_never_formulas(draw):
    """Also with a user's own axes and settings, where ``$`` is read as a formula and would fail or vanish."""
    result = eight()
    with matplotlib.rc_context({"text.parse_math": True}):
        ax = draw(result, ax=Figure(layout="constrained").add_subplot())
        text = svg(ax)
    if draw is plots.plot_region:
        assert "$a_1^2$" in text and "b&lt;sub&gt;" in text
    assert all(not t.get_parse_math() for t in ax.texts)
    ET.fromstring(text)


def test_long_names_do_not_squeeze_the_axes():
    ax = plots.plot_spectrum(eight())
    svg(ax)
    assert ax.get_position().width > 0.75
    assert len(short("a name that is very long " * 4, 40)) == 40


def test_nothing_opens_a_window_or_touches_the_global_state():
    code = (
        "import numpy as np, sys, maxent, maxent.plots as p; from maxent.families import Microstates\n"
        "r = maxent.solve(Microstates({'a': np.arange(4.)}), {'a': 1.})\n"
        "[f(r) for f in (p.plot_region, p.plot_spectrum, p.plot_convergence, p.plot_populations)]\n"
        "assert 'matplotlib.pyplot' not in sys.modules\n"
    )
    subprocess.run([sys.executable, "-c", code], check=True)


# ---------------------------------------------------------------- SVG


@pytest.mark.parametrize("draw", DRAWN)
def test_svg_is_the_same_text_every_time(draw, solved):
    assert svg(draw(solved)) == svg(draw(solved))
    assert svg(draw(solved)) == svg(draw(maxent.solve(TRAP, solved.targets)))


def test_svg_is_the_same_text_in_another_process(solved):
    code = (
        "import maxent, sys\nfrom maxent.app.figures import draw\nfrom maxent.families import Microstates\n"
        "f = Microstates({'energy': [0.0, 1.0, 2.0, 3.0], 'energy_squared': [0.0, 1.0, 4.0, 9.0]})\n"
        "sys.stdout.write('|'.join(x.svg for x in draw(maxent.solve(f, {'energy': 1.2, 'energy_squared': 2.3}))))\n"
    )
    out = subprocess.run([sys.executable, "-c", code], check=True, capture_output=True, text=True).stdout
    assert out == "|".join(x.svg for x in figures.draw(solved))


def test_svg_stands_alone_and_says_what_it_shows(solved):
    ax = plots.plot_region(solved)
    text = plots.to_svg(ax, title="A < B", description="x & y", name="region-1")
    root = ET.fromstring(text)
    space = "{http://www.w3.org/2000/svg}"
    assert root.tag == f"{space}svg" and root.get("role") == "img"
    assert [root[0].tag, root[0].text] == [f"{space}title", "A < B"]
    assert [root[1].tag, root[1].text] == [f"{space}desc", "x & y"]
    assert root.get("aria-labelledby").split() == [root[0].get("id"), root[1].get("id")]
    ids = [e.get("id") for e in root.iter() if e.get("id")]
    assert len(ids) == len(set(ids)) and all(i.startswith("region-1-") for i in ids)
    # every reference inside points at something inside
    links = [v for e in root.iter() for k, v in e.attrib.items() if k.endswith("href")]
    assert links and all(v[1:] in ids for v in links)
    assert not list(root.iter(f"{space}metadata")) and not list(root.iter(f"{space}script"))


def test_svg_names_are_checked(solved):
    with pytest.raises(ValueError, match="letters, digits and hyphens, not 'a b'"):
        svg(plots.plot_convergence(solved), name="a b")


# ---------------------------------------------------------------- the figures of a run


def test_a_run_draws_what_has_something_to_show(solved, infeasible, boundary):
    names = lambda result: [f.name for f in figures.draw(result)]
    assert names(solved) == ["region-energy-energy-squared", "populations", "spectrum", "convergence"]
    assert names(infeasible) == ["region-energy-energy-squared"]
    assert names(boundary)[0] == "region-x-z" and "populations" not in names(boundary)  # a pure state
    assert names(maxent.solve(Microstates({"a": [0.0, 1.0]}), {"a": 0.25}))[:2] == ["region-a", "populations"]


def test_figures_say_their_numbers_in_words(solved, infeasible):
    region = figures.draw(infeasible)[0]
    assert "Reachable: energy from 0 to 3 and energy_squared from 0 to 9." in region.words
    assert "The target is at energy 1.5 and energy_squared 2.1." in region.words
    v = infeasible.certificate.direction
    assert f"{abs(v['energy']):.4g} energy" in region.words
    populations = figures.draw(solved, labels=["w", "x", "y", "z"])[1]
    assert f"w {solved.state.probabilities[0]:.4g}" in populations.words
    for figure in figures.draw(solved):
        assert figure.words in ET.fromstring(figure.svg)[1].text


def test_names_of_files_are_plain_and_unique():
    rng = np.random.default_rng(0)
    family = Microstates({n: rng.standard_normal(9) for n in ("Q/1", "Q 1", "../é", "<>")})
    result = maxent.solve(family, dict(zip(family.names, family.reference()[0] + 0.01, strict=True)))
    names = [f.name for f in figures.draw(result)]
    assert names[:6] == [
        "region-q-1-q-1", "region-q-1-charge", "region-q-1-charge-2", "region-q-1-charge-3",
        "region-q-1-charge-4", "region-charge-charge",
    ]  # fmt: skip


def test_many_charges_draw_the_pairs_that_matter():
    assert figures._pairs(eight()) == list(combinations(eight().names, 2))[: figures.PAIRS]
    rng = np.random.default_rng(1)
    family = Microstates({f"q{k}": rng.standard_normal(30) for k in range(7)})
    result = maxent.solve(family, dict.fromkeys(family.names, 0.0) | {"q5": 9.0, "q6": -9.0})
    assert str(result.verdict) == "infeasible"
    pairs = figures._pairs(result)
    weight = {n: abs(result.certificate.direction[n]) * np.abs(family.blocks.diagonal[k] - result.targets[n]).max()
              for k, n in enumerate(family.names)}  # fmt: skip
    least = min(weight[a] + weight[b] for a, b in pairs)
    others = [p for p in combinations(family.names, 2) if p not in pairs]
    assert len(pairs) == figures.PAIRS and all(weight[a] + weight[b] <= least + 1e-12 for a, b in others)


def test_colours_may_be_changed_by_a_page_and_stay_otherwise(solved):
    text = figures.draw(solved)[0].svg
    page = figures.recoloured(text)
    assert "var(--figure-edge, #0072b2)" in page and "var(" not in text
    assert page.replace("var(--figure-edge, #0072b2)", "#0072b2").count("#0072b2") == text.count("#0072b2")
