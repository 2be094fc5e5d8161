"""Ensembles side by side: against dense matrices, closed forms and what nested ensembles must obey."""

from __future__ import annotations

import json
from dataclasses import replace

import numpy as np
import pytest
import scipy.linalg as sl

from maxent.lattice import Bosons, Chain, Lattice, ProductState, Ring, formula
from maxent.quench.comparison import compare
from maxent.quench.corrections import second_derivatives
from maxent.quench.distances import relative_entropy, root_fidelity, trace_distance
from maxent.quench.ensembles import Charges
from maxent.quench.sizes import SizeSeries, size_series
from maxent.quench.starts import Start, ground_start

DENSITY = {"h": "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 0.6*Sz[i]*Sz[i+1]"}


def study(size, theta=("pi/3",), phi="2*pi*i/L", **options):
    ring = Ring(size)
    f = lambda text: formula(text, ring, {}, DENSITY)
    charges = {"energy": f("h[i]"), "magnetisation": f("Sz[i]"), "current": f("1j*commutator(h[i], h[i+1])")}
    observables = {"zz": f("Sz[i]*Sz[i+1]/L"), "first": f("Sz[0]")}
    start = Start.from_vector(ProductState(ring, list(theta) if len(theta) > 1 else theta[0], phi))
    return {"charges": charges, "start": start, "observables": observables, **options}


@pytest.fixture(scope="module")
def spiral():
    given = study(8)
    return given, compare(**given)


def gibbs(operators, lam):
    k = sum(x * q.matrix().toarray() for x, q in zip(lam, operators, strict=True))
    rho = sl.expm(-(k - np.linalg.eigvalsh(k)[0] * np.eye(len(k))))
    return rho / np.trace(rho).real


def reduced(rho, size, block):
    t = rho.reshape(2**block, 2 ** (size - block), 2**block, 2 ** (size - block))
    return np.trace(t, axis1=1, axis2=3)


def test_columns_against_dense_matrices(spiral):
    given, found = spiral
    psi = given["start"].vectors[:, 0]
    e, u = np.linalg.eigh(given["charges"]["energy"].matrix().toarray())
    same = np.abs(e[:, None] - e[None, :]) < 1e-9
    c = u.conj().T @ psi
    dephased = u @ (np.outer(c, c.conj()) * same) @ u.conj().T
    for name, op in given["observables"].items():
        assert found.truth[name] == pytest.approx(np.trace(dephased @ op.matrix()).real, abs=1e-12)
    for ensemble in found.ensembles:
        if not ensemble.multipliers or ensemble.sector:
            continue
        operators = [given["charges"][n] for n in ensemble.charges]
        rho = gibbs(operators, [ensemble.multipliers[n] for n in ensemble.charges])
        for n, op in zip(ensemble.charges, operators, strict=True):
            assert np.trace(rho @ op.matrix()).real == pytest.approx(found.targets[n], abs=1e-10)
        for n, op in given["observables"].items():
            assert ensemble.means[n] == pytest.approx(np.trace(rho @ op.matrix()).real, abs=1e-10)
        for block, distance in ensemble.distances.items():
            expected = trace_distance(reduced(rho, 8, block), reduced(dephased, 8, block))
            assert distance == pytest.approx(expected, abs=1e-10)
        p = np.linalg.eigvalsh(rho)
        assert ensemble.entropy == pytest.approx(-np.sum(p * np.log(p)), abs=1e-10)


def test_entropy_drop_is_the_relative_entropy_of_nested_ensembles(spiral):
    given, found = spiral
    states, dropped = [np.eye(256) / 256], []
    names = []
    for step in found.ranking.by_entropy:
        names.append(step.charge)
        label = [e for e in found.ensembles if set(e.charges) == set(names) and not e.sector and e.multipliers]
        operators = [given["charges"][n] for n in label[0].charges]
        states.append(gibbs(operators, [label[0].multipliers[n] for n in label[0].charges]))
        dropped.append(step.entropy_drop)
    assert len(dropped) == 3
    for before, after, drop in zip(states, states[1:], dropped, strict=False):
        assert drop == pytest.approx(relative_entropy(after, before), abs=1e-10)


def test_ranking_orders_and_predictor(spiral):
    _, found = spiral
    steps = found.ranking.by_entropy
    assert {s.charge for s in steps} == {"energy", "magnetisation", "current"}
    assert all(s.entropy_drop >= -1e-12 for s in steps)
    last = steps[-1]  # near the ensemble before, the quadratic predictor is close
    assert last.predicted_drop == pytest.approx(last.entropy_drop, rel=0.2)
    assert "gains end" in found.ranking.suggestion


def test_sector_column_of_a_sharp_start_and_redundant_charge():
    found = compare(**study(8, ("0", "pi"), 0.0))
    assert found.sharp["magnetisation"] == pytest.approx(0, abs=1e-12)
    whole, inside = found.ensemble("canonical"), found.ensemble("canonical", sector=True)
    assert whole.verdict == inside.verdict == "solved"
    assert whole.multipliers["energy"] != pytest.approx(inside.multipliers["energy"], rel=0.1)
    # charges that are odd under reflection annihilate the Neel state: the current has no spread, too
    assert found.sharp == {"magnetisation": 0.0, "current": 0.0, "translation^2": 0.0}
    # by hand: states of zero magnetisation that a translation by two sites leaves as they are, without current
    h = formula(DENSITY["h"], Ring(8)).matrix().toarray()
    shift = np.zeros((256, 256))
    for n in range(256):
        shift[((n << 2) & 255) | (n >> 6), n] = 1.0
    keep = [n for n in range(256) if bin(n).count("1") == 4]
    w, v = np.linalg.eigh(sum(np.linalg.matrix_power(shift, k) for k in range(4))[np.ix_(keep, keep)] / 4)
    v = v[:, w > 0.5]
    assert v.shape[1] == 20
    current = formula("1j*commutator(h[i], h[i+1])", Ring(8), {}, DENSITY).matrix().toarray()[np.ix_(keep, keep)]
    w, u = np.linalg.eigh(v.T @ current @ v)
    v = v @ u[:, np.abs(w) < 1e-9]
    e = np.linalg.eigvalsh(v.conj().T @ h[np.ix_(keep, keep)] @ v)
    p = np.exp(-inside.multipliers["energy"] * (e - e[0]))
    assert v.shape[1] == 16 and p @ e / p.sum() == pytest.approx(found.targets["energy"], abs=1e-11)
    # a charge without spread is a number inside the sector: the grand canonical state is the canonical one there
    with pytest.raises(KeyError):
        found.ensemble("grand canonical", sector=True)
    assert any("grand canonical is the same state as canonical: it is shown once" in n for n in found.notes)
    assert any("magnetisation and current are fixed" in n for n in found.notes)
    # beside a start in which the current has spread its ensemble stands, the magnetisation redundant
    other = compare(**study(8, ("0", "pi", "pi", "pi"), 0.0), by_symmetry=False)
    further = other.ensemble("generalised: energy, magnetisation, current", sector=True)
    assert further.verdict == "solved" and further.multipliers["magnetisation"] == 0.0


def test_single_eigenstates_need_a_window_in_their_own_sector():
    # momentum 0 has too few levels for a window where all sectors together have enough
    ring = Ring(10)
    h = formula("-4*Sx[i]*Sx[i+1] - Sz[i]", ring)
    start = ground_start(formula("-4*Sx[i]*Sx[i+1] - 4*Sz[i]", ring))
    observables = {"z": formula("2*Sz[0]", ring)}
    found = compare({"energy": h}, start, observables=observables, blocks=(1,), ranking=False)
    assert any(note.startswith("No Gaussian window in the sector of the start") for note in found.notes)
    assert found.ensemble("Gaussian window").means["z"] == pytest.approx(0.28, abs=0.02)
    assert "single eigenstate" not in found.labels and found.window == {}


def test_single_eigenstates_are_those_of_the_matching_sector():
    ring = Ring(10)
    h = formula("4*Sz[i]*Sz[i+1] + 1.8*Sx[i] + 1.6*Sz[i]", ring)
    observables = {"z": formula("2*Sz[0]", ring)}
    found = compare({"energy": h}, ProductState(ring, 2.0, 0.5).vector(), observables=observables, blocks=(1,))
    window, single = (found.ensemble(x, sector=True) for x in ("Gaussian window", "single eigenstate"))
    e, z = found.levels["energy"], found.levels["z"]
    # necklaces of ten beads in two colours that may be turned over
    assert found.sharp == {"translation": 0.0, "reflection": 1.0} and len(e) == 78
    # quantiles by hand: the first level at which the weights up to it reach that part
    weight = np.exp(-0.5 * ((e - window.facts["centre"]) / window.facts["width"]) ** 2)
    order = np.argsort(z)
    reached = np.cumsum(weight[order]) / weight.sum()
    low, median, high = (z[order][np.searchsorted(reached, part)] for part in (0.1, 0.5, 0.9))
    assert single.means["z"] == pytest.approx(median, abs=1e-12)
    assert single.ranges["z"] == pytest.approx((low, high), abs=1e-12)
    assert window.means["z"] == pytest.approx(weight @ z / weight.sum(), abs=1e-12)


@pytest.mark.parametrize(
    ("text", "speed", "within"),
    [
        # largest slope of 2 sqrt(1 + h^2 - 2 h cos k) is 2 min(1, h); levels of gapped rings must not count the gap
        ("-X[i]*X[i+1] - 0.5*Z[i]", 1.0, 0.13),
        ("-X[i]*X[i+1] - 1.5*Z[i]", 2.0, 0.05),
        ("-X[i]*X[i+1] - 3*Z[i]", 2.0, 0.13),
        # cos k, and the spinons (pi/2) |sin k| of the isotropic ring: slopes are means over a step of momentum
        ("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1]", 1.0, 0.07),
        ("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Sz[i]*Sz[i+1]", np.pi / 2, 0.25),
    ],
)
def test_estimated_speed(text, speed, within):
    ring = Ring(10)
    start = ProductState(ring, ["0.3", "1.9"], 0.0).vector()
    found = compare({"energy": formula(text, ring)}, start, blocks=(1, 2), ranking=False)
    assert found.speed == pytest.approx(speed, abs=within) and found.speed < speed
    assert found.revival == pytest.approx(10 / (2 * found.speed))
    assert any("estimated from the lowest levels of neighbouring momenta" in note for note in found.notes)


@pytest.mark.parametrize(
    ("sites", "text", "speed"),
    [
        # one flipped spin moves with cos k, faster than the spinons of a weak anisotropy; one boson with 2 cos k
        (Ring(8), "-Sx[i]*Sx[i+1] - Sy[i]*Sy[i+1] + 0.9*Sz[i]*Sz[i+1] + 0.2*Sz[i]", 1.0),
        (Ring(8), "-Sx[i]*Sx[i+1] - Sy[i]*Sy[i+1] - 2*Sz[i]*Sz[i+1]", 1.0),
        (Ring(6, Bosons(cutoff=2)), "-dagger(b[i])*b[i+1] - dagger(b[i+1])*b[i] + 3*n[i]*(n[i] - 1)", 2.0),
    ],
)
def test_estimated_speed_counts_single_excitations(sites, text, speed):
    start = np.random.default_rng(2).normal(size=int(np.prod(sites.dims)))
    found = compare({"energy": formula(text, sites)}, start / np.linalg.norm(start), blocks=(1,), ranking=False)
    step = 2 * np.pi / sites.size
    k = step * np.arange(sites.size)
    slope = speed * np.abs(np.cos(k + step) - np.cos(k)).max() / step
    assert found.speed == pytest.approx(slope, abs=1e-9)


def test_leading_correction_is_that_of_the_spreads():
    # independent spins: <Z_0 Z_1> in the ensemble is m^2; a start of sharp M has 1/(L-1) less of the variance
    ring = Ring(6)
    h = formula("Sz[i]", ring)
    found = compare({"energy": h}, ProductState(ring, ["0", "0", "pi"], 0.0).vector(),
                    observables={"zz": formula("Sz[i]*Sz[i+1]/L", ring)}, ranking=False)  # fmt: skip
    canonical = found.ensemble("canonical")
    m = found.targets["energy"] / 6
    assert canonical.means["zz"] == pytest.approx(m * m, abs=1e-12)
    # o(q) = (q/L)^2: second derivative 2/L^2; V_start - chi = -L (1/4 - m^2)
    assert canonical.corrections["zz"] == pytest.approx(-(0.25 - m * m) / 6, rel=1e-3)


def test_means_by_numbers_are_those_of_dense_matrices():
    given = study(6)
    charges = Charges(given["charges"], "energy", observables=given["observables"])
    assert charges.commute
    lam = np.array([0.7, -0.4, 0.3])
    state = charges.family.state(lam)
    rho = gibbs(given["charges"].values(), lam)
    expected = [np.trace(rho @ q.matrix()).real for q in given["observables"].values()]
    weights = np.concatenate([state.flat_weights, *[g.weights for g in state.groups]])
    np.testing.assert_allclose(charges.lines @ weights, expected, atol=1e-13)


def test_second_derivatives_of_a_closed_form():
    at = lambda lam: (np.array([-lam[0], -2 * lam[1]]), np.array([lam[0] ** 2 * lam[1], np.sin(lam[0])]))
    lam = np.array([0.4, -0.3])
    found = second_derivatives(at, lam, np.diag([1.0, 2.0]))
    expected = [[[2 * lam[1], lam[0]], [lam[0], 0.0]], [[-np.sin(0.4), 0.0], [0.0, 0.0]]]
    np.testing.assert_allclose(found, expected, atol=1e-3)  # o = -q0^2 q1/2 and sin(-q0)
    assert second_derivatives(at, lam, np.ones((2, 2))) is None


def test_charge_that_is_not_conserved_is_refused_unless_insisted_on():
    given = study(6)
    given["charges"]["tilt"] = formula("Sx[i]", Ring(6))
    with pytest.raises(ValueError, match=r"'tilt'.*insist on it"):
        compare(**given)
    found = compare(**given, insist=["tilt"])
    assert any("least biased state at one instant" in note for note in found.notes)
    assert found.conservation.broken == ("tilt",)


def test_open_chain_without_symmetry_and_small_blocks():
    chain = Chain(6)
    h = formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 0.3*i*Sz[i]", chain)
    found = compare({"energy": h, "magnetisation": formula("Sz[i]", chain)},
                    ProductState(chain, ["0", "pi"], 0.0).vector(), blocks=(1, 2, 5))  # fmt: skip
    assert set(found.block_bounds) == {1, 2}
    assert any("larger than half" in note for note in found.notes)
    assert found.speed is None and found.revival is None
    assert found.sharp == {"magnetisation": 0.0}


def test_without_observables_ensembles_are_still_compared_on_blocks():
    given = study(6, ranking=False) | {"observables": {}}
    found = compare(**given)
    far = {e.label: e.distances[3] for e in found.ensembles if not e.sector}
    assert far["generalised: energy, magnetisation, current"] < far["grand canonical"] < far["canonical"]
    assert found.best() == "generalised: energy, magnetisation, current"


def test_a_coarse_resolution_in_time_is_told():
    given = study(6, ("pi/3", 1.0), 0.0, ranking=False)  # told apart up to 0.1: nothing dephases, the start remains
    note = next(n for n in compare(**given, resolution=0.1).notes if "up to the resolution" in n)
    assert f"there zz averages {given['start'].mean(given['observables']['zz'])[0]:.4g}, not" in note
    assert not any("up to the resolution" in n for n in compare(**given).notes)


def test_bounds_count_equal_gaps_without_observables_too():
    ring = Ring(6)  # free fermions: many pairs of levels share a gap
    h, start = formula("-X[i]*X[i+1] - 0.5*Z[i]", ring), ProductState(ring, 0.3, 0.0).vector()
    one = compare({"energy": h}, start, observables={"z": formula("Z[i]", ring)}).block_bounds
    assert compare({"energy": h}, start).block_bounds == pytest.approx(one, rel=1e-12)
    d_eff = compare({"energy": h}, start).effective_dimension
    g = (2 * one[1] / 2) ** 2 * d_eff
    assert g == pytest.approx(round(g), abs=1e-9) and g > 1.5


def test_an_eigenstate_gets_no_window():
    ring = Ring(4)
    h = formula(DENSITY["h"], ring)
    for start in (ProductState(ring, ["0"], 0.0).vector(), ground_start(h)):  # spread zero, and zero up to rounding
        found = compare({"energy": h}, start, observables={"zz": formula("Sz[i]*Sz[i+1]", ring)})
        windows = [note for note in found.notes if "window" in note]
        assert windows == ["No window in energy: the start has no spread in energy that could be its width."]
        assert found.effective_dimension == pytest.approx(1.0) and found.window == {}


def test_bad_input():
    given = study(4)
    with pytest.raises(ValueError, match="'energy': this name is taken"):
        compare(**{**given, "observables": {"energy": given["charges"]["energy"]}})
    with pytest.raises(ValueError, match="none of the charges"):
        compare(**{**given, "hamiltonian": "H"})
    with pytest.raises(ValueError, match="16 amplitudes|dimension 16"):
        compare(given["charges"], np.ones(8) / 8**0.5)
    with pytest.raises(ValueError, match="norm"):
        compare(given["charges"], np.ones(16))
    with pytest.raises(ValueError, match="lives on"):
        compare({**given["charges"], "other": formula("Sz[i]", Ring(5))}, given["start"])
    with pytest.raises(TypeError, match="formula"):
        compare({"energy": np.eye(16)}, given["start"])


def test_plain_data_is_json(spiral):
    _, found = spiral
    again = json.loads(json.dumps(found.to_dict(), allow_nan=False))
    assert again["ensembles"][0]["label"] == "canonical"
    assert again["conservation"]["charges"]["current"]["conserved"] is True
    assert found.best() in found.labels


def test_statements_need_three_sizes():
    series = size_series(lambda n: study(n, ranking=False, blocks=(1, 2)), [8, 6, 4])
    assert series.sizes.tolist() == [4, 6, 8]
    assert series.statements and all("trace distance" in s for s in series.statements)
    assert SizeSeries(series.comparisons[:2]).statements == ()
    sizes, values = series.deviations("canonical", "zz")
    assert sizes.tolist() == [4, 6, 8] and np.isfinite(values).all()
    assert {k: v.tolist() for k, v in series.sequences().items()} == {"L = 4n": [0, 2], "L = 4n + 2": [1]}
    with pytest.raises(ValueError, match="different numbers"):
        size_series(study, [4, 4])


def test_distances():
    rng = np.random.default_rng(3)
    a, b = (x @ x.conj().T for x in rng.normal(size=(2, 4, 4)) + 1j * rng.normal(size=(2, 4, 4)))
    a, b = a / np.trace(a).real, b / np.trace(b).real
    t, f = trace_distance(a, b), root_fidelity(a, b)
    assert 1 - f <= t <= np.sqrt(1 - f * f)
    assert t <= np.sqrt(relative_entropy(a, b) / 2)  # Pinsker's inequality
    expected = np.trace(a @ (sl.logm(a) - sl.logm(b))).real
    assert relative_entropy(a, b) == pytest.approx(expected, rel=1e-10)
    assert root_fidelity(a, b) == pytest.approx(np.trace(sl.sqrtm(sl.sqrtm(a) @ b @ sl.sqrtm(a))).real, rel=1e-7)
    assert relative_entropy(np.eye(2) / 2, np.diag([1.0, 0.0])) == np.inf
    with pytest.raises(ValueError, match="shapes"):
        trace_distance(np.eye(2), np.eye(3))


def test_parity_without_spread_makes_a_sector():
    ring = Ring(6)
    energy = formula("Sx[i]*Sx[i+1] + 0.4*Sz[i]", ring)
    up = ProductState(ring, 0.0, 0.0).vector()
    found = compare({"energy": energy}, up, ranking=False)
    assert found.sharp["parity"] == 1.0
    inside = found.ensemble("canonical", sector=True)
    even = [n for n in range(64) if bin(n).count("1") % 2 == 0]
    # all up also has momentum zero and is its own mirror image: the energy there, from the matrix by hand
    shift = np.zeros((64, 64))
    for n in range(64):
        shift[((n << 1) & 63) | (n >> 5), n] = 1.0
    mirror = np.eye(64)[[int(f"{n:06b}"[::-1], 2) for n in range(64)]]
    q = sum(np.linalg.matrix_power(shift, k) for k in range(6)) / 6
    q = (q + q @ mirror) / 2
    w, v = np.linalg.eigh(q[np.ix_(even, even)])
    v = v[:, w > 0.5]
    e = np.linalg.eigvalsh(v.T @ energy.matrix().toarray()[np.ix_(even, even)] @ v)
    p = np.exp(-inside.multipliers["energy"] * (e - e[0]))
    assert found.sharp == {"translation": 0.0, "parity": 1.0, "reflection": 1.0}
    assert p @ e / p.sum() == pytest.approx(found.targets["energy"], abs=1e-10)


def test_statements_tell_which_sizes_they_rest_on():
    series = size_series(lambda n: study(n, ranking=False, blocks=(1, 2)), [4, 5, 6, 8])
    said = " ".join(series.statements)
    assert "at the end of L = 4, 8; L = 5, 6 play no part, alone in their sequences" in said
    assert "single eigenstate" not in said
    lone = size_series(lambda n: study(n, ranking=False, blocks=(1,)), [4, 5, 6])
    assert lone.statements == ()  # no two sizes of one sequence


def with_distances(comparison, size, **columns):
    """The comparison at another size, with ensembles of known distances on blocks of one and two sites."""
    base = comparison.ensemble("canonical")
    made = [
        replace(base, label=label.removesuffix("_inside"), distances=dict(enumerate(far, 1)),
                sector={"a": 0.0} if label.endswith("_inside") else {})
        for label, far in columns.items()
    ]  # fmt: skip
    return replace(comparison, size=size, ensembles=tuple(made), block_bounds={1: 1.0, 2: 1.0})


def test_what_is_close_and_grows_still_describes():
    one = compare(**study(4, ranking=False, blocks=(1, 2)))
    far = {
        6: {"thermal": (0.04, 0.4), "thermal_inside": (0.01, 0.2), "falling": (0.3, 0.2)},
        8: {"thermal": (0.9, 0.9), "thermal_inside": (0.9, 0.9)},
        10: {"thermal": (0.03, 0.3), "thermal_inside": (0.02, 0.3), "falling": (0.2, 0.1)},
        14: {"thermal": (0.02, 0.2), "thermal_inside": (0.019, 0.4), "falling": (0.1, 0.05)},
    }
    series = SizeSeries(tuple(with_distances(one, n, **columns) for n, columns in far.items()))
    rests = "at the end of L = 6, 10, 14; L = 8 plays no part, alone in its sequence"
    assert series.statements == (
        "thermal: describes the long-time state of 1 site to 0.02 and misses that of 2 neighbouring sites by 0.2 "
        f"(trace distance {rests}).",
        "thermal in the sector of the start: describes the long-time state of 1 site to 0.019 and misses that of "
        f"2 neighbouring sites by 0.4 (trace distance {rests}; that of 2 neighbouring sites still grows with the "
        "size).",
    )
    grown = SizeSeries(tuple(with_distances(one, n, **far[n]) for n in (6, 8, 10)))
    thermal, inside = grown.statements
    assert "to 0.03" in thermal and "grows" not in thermal  # small and growing is no failure, and is told
    assert "to 0.02" in inside and "that of 1 and 2 neighbouring sites still grows" in inside
    kept = SizeSeries(tuple(with_distances(one, n, falling=x) for n, x in ((6, (0.3, 0.2)), (10, (0.2, 0.1)))))
    missing = SizeSeries((*kept.comparisons, with_distances(one, 14, falling=(0.1, 0.05)), with_distances(one, 18)))
    assert missing.labels == () and missing.statements == ()


def test_the_closest_is_named_over_all_sectors_and_inside():
    one = compare(**study(4, ranking=False, blocks=(1, 2)))
    columns = {"wide": (0.0, 0.3), "narrow": (0.1, 0.2), "wide_inside": (0.0, 0.1), "narrow_inside": (0.0, 0.15)}
    found = with_distances(one, 4, **columns)
    assert (found.best(), found.best(sector=True)) == ("narrow", "wide")
    window = replace(found.ensembles[0], label="window", kind="microcanonical", distances={1: 0.0, 2: 0.0})
    assert replace(found, ensembles=(*found.ensembles, window)).best() == "narrow"
    assert with_distances(one, 4, wide=(0.0, 0.3)).best(sector=True) == ""


def test_spread_of_charges_that_do_not_commute_is_symmetrised_in_both():
    ring = Ring(5)
    f = lambda text: formula(text, ring)
    charges = {"energy": f("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Sz[i]*Sz[i+1]"), "x": f("Sx[i]"), "z": f("Sz[i]")}
    start = ProductState(ring, ["0.3", "1.1", "0.2", "1.5", "0.7"], 0.0).vector()
    found = compare(charges, start, observables={"xz": f("Sx[0]*Sz[1]")}, ranking=False)
    for label, names in (("grand canonical", ("energy", "z")), ("generalised: energy, z, x", ("energy", "z", "x"))):
        ensemble = found.ensemble(label)
        rho = gibbs([charges[n] for n in names], [ensemble.multipliers[n] for n in names])
        for n in names:
            q = charges[n].matrix().toarray()
            plain = np.trace(rho @ q @ q).real - np.trace(rho @ q).real ** 2
            assert ensemble.variances[n][1] == pytest.approx(plain, rel=1e-9)
    assert found.conservation.clashes == (("x", "z"),)


def test_times_on_lattices_given_by_bonds_go_by_bonds():
    # three by two sites: three bonds from corner to corner; a ring of six given by its bonds is one of six sites
    ring = Lattice(6, {"all": [(k, (k + 1) % 6) for k in range(6)]})
    for sites, revival in ((Lattice.grid(3, 2), 3.0), (Lattice.grid(3, 3), 4.0), (ring, 3.0), (Ring(6), 3.0)):
        start = ProductState(sites, ["0.3"] + ["1.9"] * (sites.size - 1), 0.0).vector()
        found = compare({"energy": formula("Sx[i]", sites)}, start, blocks=(1,), speed=1.0, ranking=False)
        assert found.revival == pytest.approx(revival)
        assert found.plateau[1] == pytest.approx(revival)
