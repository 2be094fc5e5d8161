"""Thermodynamic quantities against closed forms, published values, and finite differences of other fits."""

import math
from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.optimize import brentq, minimize_scalar

import maxent
from maxent.families import Matrices, Microstates
from maxent.lattice import Chain, Fermions, Ring, formula
from maxent.quench.fixed_number import chemical_potential_at_number, log_partitions_by_number
from maxent.quench.forces import generalised_force, parameter_response, parameter_slopes
from maxent.quench.levels import levels
from maxent.quench.selfchecks import chebyshev_slopes, check_response, check_result
from maxent.quench.thermodynamics import thermodynamics

HEISENBERG = "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + Sz[i]*Sz[i+1]"


def fitted(family, lam):
    """Result at the values that known multipliers give."""
    values = np.asarray(family.evaluate(np.atleast_1d(np.asarray(lam, float)), 1).values)
    return maxent.solve(family, dict(zip(family.names, values.tolist(), strict=True)))


def value(family, lam, name, **roles):
    return thermodynamics(fitted(family, lam), **roles)[name].value


# --------------------------------------------------------------------- two levels, spins, oscillator


def capacity(family, beta):
    return value(family, beta, "heat capacity")


@pytest.mark.parametrize(
    ("ratio", "temperature", "peak", "source"),
    [
        (1.0, 0.41677828, 0.439228839890645, "closed form x^2 - 1 with x tanh x = 1; 0.42 and 0.44 in textbooks"),
        (3.0, 0.35149521207154466, 1.0234905543865052, "closed form, stationarity"),
        (0.5, 0.44887247517326573, 0.24077792447765417, "closed form, stationarity"),
    ],
)
def test_two_level_maximum(ratio, temperature, peak, source):
    family = Microstates({"energy": [0.0, 1.0]}, log_weights=[0.0, math.log(ratio)])
    assert_allclose(capacity(family, 1 / temperature), peak, rtol=1e-11)
    best = minimize_scalar(lambda t: -capacity(family, 1 / t), (0.3, temperature + 1e-3, 0.6), tol=1e-10)
    assert_allclose(best.x, temperature, rtol=1e-6)


def test_oscillator():
    """Einstein heat capacity x^2 e^x/(e^x - 1)^2 at x = 1 (closed form, 1907); entropy 2 ln 2 at one quantum."""
    family = Microstates({"energy": np.arange(400.0)})
    assert_allclose(capacity(family, 1.0), 0.9206735942077923, rtol=1e-11)
    thermo = thermodynamics(maxent.solve(family, {"energy": 1.0}))
    assert_allclose(thermo["entropy"].value, 1.3862943611198906, rtol=1e-11)
    assert_allclose(thermo["temperature"].value, 1 / math.log(2), rtol=1e-11)
    assert_allclose(thermo["free energy"].value, 1 - 2, rtol=1e-11)  # T ln(1 - 1/2)


@pytest.mark.parametrize(
    ("spin", "mean"), [(1.0, 0.5752103826044412), (2.5, 1.0653678508573161), (3.5, 1.381947397579529)]
)
def test_brillouin(spin, mean):
    """J B_J(1) (closed form, Brillouin 1927): field h = T/J."""
    m = np.arange(-spin, spin + 1)
    family = Microstates({"energy": 0.0 * m, "along_z": m})
    result = maxent.solve(family, {"energy": 0.0, "along_z": mean})
    assert_allclose(result.multipliers["along_z"], -1 / spin, rtol=1e-12)
    thermo = thermodynamics(result, fields="along_z")
    # a flat Hamiltonian has no temperature, and without one there is no field
    assert not thermo["temperature"].is_defined and "is a number in all states" in thermo["temperature"].reason
    assert not thermo["field"].is_defined and math.isnan(thermo["field"].value)
    assert thermo["entropy"].is_defined and thermo["Massieu potential"].is_defined
    assert "not defined" in str(thermo)


def test_inverted_population():
    """H = sz/2 at +0.25: beta = -ln 3 (closed form); a negative temperature is one."""
    thermo = thermodynamics(maxent.solve(Matrices({"energy": np.diag([0.5, -0.5])}), {"energy": 0.25}))
    assert_allclose(thermo["inverse temperature"].value, -1.0986122886681098, rtol=1e-13)
    assert_allclose(thermo["temperature"].value, -1 / 1.0986122886681098, rtol=1e-13)
    assert_allclose(thermo["entropy"].value, 0.5623351446188083, rtol=1e-13)
    assert thermo["heat capacity"].value > 0


def test_infinite_temperature():
    thermo = thermodynamics(maxent.solve(Microstates({"energy": [0.0, 1.0, 2.0], "number": [0, 1, 1]}),
                                         {"energy": 1.0, "number": 2 / 3}), numbers="number")  # fmt: skip
    assert_allclose(thermo["inverse temperature"].value, 0.0, atol=1e-13)
    for name in ("temperature", "chemical potential", "free energy", "heat capacity at fixed number"):
        assert "temperature is infinite" in thermo[name].reason
    assert_allclose(thermo["entropy"].value, math.log(3))


def test_dimer():
    """Two spins S1.S2: beta = ln 9 at -1/2, and the susceptibility peak at 3 + e^x = x e^x (Bleaney, Bowers 1952)."""
    sites = Chain(2)
    charges = {"energy": formula(HEISENBERG, sites).matrix(), "along_z": formula("Sz[i]", sites).matrix()}
    result = maxent.solve(Matrices(charges), {"energy": -0.5, "along_z": 0.0})
    assert_allclose(thermodynamics(result)["inverse temperature"].value, 2.1972245773362196, rtol=1e-12)
    chi = lambda t: value(Matrices(charges), [1 / t, 0.0], "susceptibility of along_z", fields="along_z")
    closed = lambda t: (2 / t) / (3 + math.exp(1 / t))
    assert_allclose(chi(0.7), closed(0.7), rtol=1e-11)
    assert_allclose(minimize_scalar(lambda t: -chi(t), (0.5, 0.6, 0.8), tol=1e-9).x, 0.6236180081, rtol=1e-6)


def test_electron_in_a_field():
    """g = 2.00231930436, B = 1 T, T = 1 K: polarisation 0.58661723 (closed form, CODATA 2022 constants)."""
    splitting = 2.00231930436 * 9.2740100657e-24 / 1.380649e-23 / 2  # kelvin
    family = Microstates({"energy": [-splitting, splitting]})
    result = maxent.solve(family, {"energy": -splitting * 0.5866172317429609})
    assert_allclose(thermodynamics(result)["temperature"].value, 1.0, rtol=1e-9)


# --------------------------------------------------------------------- chains


def test_ring_of_four():
    """Z = e^2b + 3 e^b + 7 + 5 e^-b (closed form, total-spin algebra) at b = 1, and its derivatives."""
    family = Matrices({"energy": formula(HEISENBERG, Ring(4)).matrix()})
    thermo = thermodynamics(fitted(family, 1.0))
    assert_allclose(math.exp(thermo["Massieu potential"].value), 24.383298790164996, rtol=1e-12)
    e, g = np.array([-2.0, -1, 0, 1]), np.array([1.0, 3, 7, 5])
    p = g * np.exp(-e) / np.sum(g * np.exp(-e))
    assert_allclose(thermo["heat capacity"].value, p @ e**2 - (p @ e) ** 2, rtol=1e-12)


def test_high_temperature_series():
    """C/N = (3 b^2/16)(1 + b/2 - 5b^2/16 - 5b^3/16 + 7b^4/256 + 917b^5/7680 + 1417b^6/61440 ...), Johnston et al.,

    Phys. Rev. B 61, 9558 (2000), leading terms from memory, exact rationals by own traces; 3/16 and 1/8 at b = 0.
    """
    family = Matrices({"energy": formula(HEISENBERG, Ring(8)).matrix()})
    b = 0.1
    terms = [1, 1 / 2, -5 / 16, -5 / 16, 7 / 256]
    series = 3 * b**2 / 16 * sum(c * b**k for k, c in enumerate(terms))
    assert_allclose(capacity(family, b) / 8, series, rtol=3e-6)
    assert_allclose(family.evaluate(np.zeros(1), 2).covariance[0, 0] / 8, 3 / 16, rtol=1e-13)
    xx = Matrices({"energy": formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1]", Ring(6)).matrix()})
    assert_allclose(xx.evaluate(np.zeros(1), 2).covariance[0, 0] / 6, 1 / 8, rtol=1e-13)


def test_infinite_chain_at_high_temperature():
    """T = 2: ln Z/N, e, s, C/N, chi (own solution of the integral equations, Kluemper 1993; own ring of 16 agrees)."""
    sites = Ring(10)
    family = Matrices({"energy": formula(HEISENBERG, sites).matrix(), "along_z": formula("Sz[i]", sites).matrix()})
    thermo = thermodynamics(fitted(family, [0.5, 0.0]), fields="along_z")
    names = ["Massieu potential", "energy", "entropy", "heat capacity at fixed along_z", "susceptibility of along_z"]
    expected = [0.718148018212502, -0.10220344247953472, 0.6670462969727347, 0.053358169808863765, 0.09447374750616519]
    assert_allclose([thermo[n].value / 10 for n in names], expected, atol=1e-6)


# own computation by two routes that agree to 3e-13: spectrum, Chebyshev derivatives of ln Z
CANONICAL = {"E": -6.142969003113127, "C": 1.7233156808820074, "slope": 1.2388713061361243, "bend": 1.2649807527816137}
MIXED = "4*Sz[i]*Sz[i+1] + 2*g*Sx[i] + 2*h*Sz[i]"


@pytest.fixture(scope="module")
def mixed():
    energy = formula(MIXED, Ring(8), {"g": 0.9045, "h": 0.809})
    family = Matrices({"energy": energy.matrix()}, dims=(2,) * 8)
    return energy, family, fitted(family, 0.45)


def test_mixed_field_ring(mixed):
    energy, family, result = mixed
    thermo = thermodynamics(result)
    assert_allclose(thermo["inverse temperature"].value, 0.45, rtol=1e-12)
    assert_allclose(thermo["energy"].value, CANONICAL["E"], rtol=1e-12)
    assert_allclose(thermo["heat capacity"].value, CANONICAL["C"], rtol=1e-11)
    x = energy.derivative("g")
    response = parameter_response(family, result.multipliers, {"energy": x})
    assert_allclose(response.log_partition, CANONICAL["slope"], rtol=1e-11)
    assert_allclose(response.curvature, CANONICAL["bend"], rtol=1e-11)
    assert_allclose(response.force, -result.mean(x.matrix()), rtol=1e-12)
    assert_allclose(generalised_force(result, {"energy": x}), response.force, rtol=1e-12)
    # the plain variance, 7.1466523016, would be wrong: 6.2468185323 (own computation)
    matrix = x.matrix()
    plain = result.mean(matrix @ matrix) - result.mean(matrix) ** 2
    assert_allclose([plain, response.curvature / 0.45**2], [7.1466523016, 6.2468185323], rtol=1e-10)


def test_parameters_by_jax(mixed):
    energy, family, result = mixed
    slopes = parameter_slopes({"energy": energy}, {"energy": 0.45})
    assert slopes.names == ("g", "h")
    along = {p: parameter_response(family, {"energy": 0.45}, {"energy": energy.derivative(p)}) for p in slopes.names}
    assert_allclose(slopes.gradient, [along[p].log_partition for p in slopes.names], rtol=1e-11)
    assert_allclose(np.diag(slopes.hessian), [along[p].curvature for p in slopes.names], rtol=1e-10)
    assert_allclose(slopes.hessian[0, 1], slopes.hessian[1, 0], rtol=1e-10)
    assert_allclose(slopes.log_partition, result.log_partition, rtol=1e-12)


def test_parameters_inside_functions():
    """Lists, functions and complex phases: JAX against the symbolic derivative, two charges at once."""
    sites = Chain(4)
    given = {"J": [0.7, -0.4, 1.1], "a": 0.6}
    energy = formula("J[i]*exp(-a**2)*Sz[i]*Sz[i+1] + cos(a)*Sx[i]/(1 + a)", sites, given)
    current = formula("sqrt(a)*Sx[i]*Sy[i+1] - a*Sy[i]*Sx[i+1]", sites, {"a": 0.6})
    lam = {"energy": 0.8, "current": -0.3}
    slopes = parameter_slopes({"energy": energy, "current": current}, lam)
    assert slopes.names == ("J[0]", "J[1]", "J[2]", "a")
    family = Matrices({"energy": energy.matrix(), "current": current.matrix()})
    by_a = {"energy": energy.derivative("a"), "current": current.derivative("a")}
    twice = {n: x.derivative("a") for n, x in by_a.items()}
    response = parameter_response(family, lam, by_a, second=twice)
    both = lambda x: [x.log_partition, x.curvature]
    assert_allclose([slopes.gradient[3], slopes.hessian[3, 3]], both(response), rtol=1e-11)
    middle = parameter_response(family, lam, {"energy": energy.derivative("J", 1)})
    assert_allclose([slopes.gradient[1], slopes.hessian[1, 1]], both(middle), rtol=1e-11)


def test_parameters_of_fermions():
    """Complex hopping and words that are not Hermitian one by one: JAX against the symbolic derivative."""
    sites, given = Chain(3, Fermions()), {"t": 0.8, "V": 0.4, "z": np.exp(0.4j)}
    energy = formula("-t*(z*dagger(c[i])*c[i+1] + h.c.) + V**2*n[i]*n[i+1]", sites, given)
    slopes = parameter_slopes({"energy": energy}, {"energy": 0.7})
    assert slopes.names == ("V", "t")  # z is complex: no derivative
    family = Matrices({"energy": energy.matrix()})
    for k, name in enumerate(slopes.names):
        first = energy.derivative(name)
        response = parameter_response(
            family, {"energy": 0.7}, {"energy": first}, second={"energy": first.derivative(name)}
        )
        found = [slopes.gradient[k], slopes.hessian[k, k]]
        assert_allclose(found, [response.log_partition, response.curvature], rtol=1e-11)


def test_arrays_by_jax(mixed):
    """The same derivative through the arrays of the family."""
    import jax

    from maxent import compiled

    sites = Ring(4)
    energy = formula(MIXED, sites, {"g": 0.9045, "h": 0.809})
    pair = Matrices({"energy": energy.matrix(), "slope": energy.derivative("g").matrix()})
    response = parameter_response(
        Matrices({"energy": energy.matrix()}), {"energy": 0.45}, {"energy": energy.derivative("g")}
    )
    with jax.enable_x64(True):

        def log_partition(a):
            arrays = pair.traced()
            moved = tuple(block.at[0].add(a * block[1]) for block in map(jax.numpy.asarray, arrays.dense))
            line = jax.numpy.asarray(arrays.diagonal)
            changed = replace(arrays, diagonal=line.at[0].add(a * line[1]), dense=moved)
            return compiled.with_arrays(pair, changed).log_partition(jax.numpy.array([0.45, 0.0]))

        slope = jax.grad(log_partition)
        found = jax.jit(lambda a: jax.numpy.stack([slope(a), jax.jacfwd(slope)(a)]))(0.0)
    assert_allclose(found, [response.log_partition, response.curvature], rtol=1e-11)


# --------------------------------------------------------------------- heat capacities


@pytest.fixture(scope="module")
def gas():
    """Invented list of states with energy, number and magnetisation."""
    rng = np.random.default_rng(1)
    n, m = rng.integers(0, 4, 30), rng.integers(-2, 3, 30)
    return Microstates({"energy": rng.normal(size=30) + n, "number": n, "magnetisation": m})


LAM = np.array([0.8, -0.5, 0.3])
MU, FIELD = 0.5 / 0.8, -0.3 / 0.8


def along_temperature(family, t, held):
    """Energy, entropy on a path of temperature: what is held by value is solved for, the rest stands as given."""
    base = family.evaluate(LAM, 1).values

    def at(t):
        lam = np.array([1 / t, -MU / t, -FIELD / t])
        for k, how in held.items():
            lam[k] = LAM[k] if how == "multiplier" else lam[k]
        fixed = [k for k, how in held.items() if how == "value"]
        for _ in range(60):
            now = family.evaluate(lam, 2)
            if not fixed:
                break
            lam[fixed] += np.linalg.solve(now.covariance[np.ix_(fixed, fixed)], (now.values - base)[fixed])
        now = family.evaluate(lam, 1)
        return np.array([now.values[0], now.log_partition + lam @ now.values])

    return chebyshev_slopes(at, t, 0.2)[0]


BOTH = ("number", "magnetisation")
PATHS = [
    ("heat capacity at fixed number and magnetisation", {1: "value", 2: "value"}, "heat", BOTH, ()),
    ("T dS/dT at fixed number and h", {1: "value", 2: "potential"}, "heat", ("number",), ("magnetisation",)),
    ("dE/dT at fixed mu and h", {1: "potential", 2: "potential"}, "energy", (), BOTH),
    ("T dS/dT at fixed mu and h", {1: "potential", 2: "potential"}, "heat", (), BOTH),
    ("heat capacity at fixed other multipliers", {1: "multiplier", 2: "multiplier"}, "energy", (), ()),
]


@pytest.mark.parametrize(("name", "held", "of", "values", "potentials"), PATHS, ids=[p[0] for p in PATHS])
def test_heat_capacities_along_their_paths(gas, name, held, of, values, potentials):
    thermo = thermodynamics(fitted(gas, LAM), numbers="number", fields="magnetisation")
    slopes = along_temperature(gas, 1 / 0.8, held)
    expected = slopes[0] if of == "energy" else slopes[1] / 0.8
    assert_allclose(thermo[name].value, expected, rtol=1e-10)
    assert_allclose(thermo.heat_capacity(of=of, values=values, potentials=potentials).value, expected, rtol=1e-10)


def test_heat_capacities_by_their_formulas():
    rng = np.random.default_rng(4)
    family = Microstates({"energy": rng.normal(size=25), "number": rng.integers(0, 5, 25)})
    result = fitted(family, [0.7, -0.4])
    beta, mu = 0.7, 0.4 / 0.7
    (ee, en), (_, nn) = result.covariance
    thermo = thermodynamics(result, numbers="number")
    expected = {
        "heat capacity at fixed number": beta**2 * (ee - en**2 / nn),
        "dE/dT at fixed mu": beta**2 * (ee - mu * en),
        "T dS/dT at fixed mu": beta**2 * (ee - 2 * mu * en + mu**2 * nn),
        "heat capacity at fixed other multipliers": beta**2 * ee,
        "susceptibility of number": beta * nn,
        "chemical potential": mu,
    }
    for name, number in expected.items():
        assert_allclose(thermo[name].value, number, rtol=1e-10, err_msg=name)
    capacities = [expected[n] for n in list(expected)[:4]]
    assert len({round(c, 6) for c in capacities}) == 4  # four heat capacities, four numbers
    assert thermo["T dS/dT at fixed mu"].formula == "beta^2 chi[K,K], K = energy - (mu number)"
    held = thermo.susceptibility("number")
    assert_allclose(held.value, beta * nn)
    # the mixed one, and dE of a path that holds the multiplier
    assert_allclose(thermo.heat_capacity(of="heat").value, beta * (beta * ee - beta * mu * en), rtol=1e-10)


def test_potentials_and_their_derivatives(gas):
    thermo = thermodynamics(fitted(gas, LAM), numbers="number", fields="magnetisation")
    t, s, e = (thermo[n].value for n in ("temperature", "entropy", "energy"))
    n, m = (thermo.result.values[k] for k in ("number", "magnetisation"))
    assert_allclose([thermo["chemical potential"].value, thermo["field"].value], [MU, FIELD], rtol=1e-11)
    assert_allclose(thermo["free energy"].value, e - t * s, rtol=1e-12)
    assert_allclose(thermo["free energy at fixed field"].value, e - t * s - FIELD * m, rtol=1e-11)
    total = thermo["grand potential at fixed field"].value
    assert_allclose(total, e - t * s - MU * n - FIELD * m, rtol=1e-11)
    assert_allclose(total, -t * thermo.result.log_partition, rtol=1e-12)

    def potential(t, mu, h):
        return -t * float(gas.evaluate(np.array([1, -mu, -h]) / t, 0).log_partition)

    # d Omega = -S dT - N dmu - M dh
    slopes = [
        chebyshev_slopes(lambda x: potential(x, MU, FIELD), t, 0.3)[0],
        chebyshev_slopes(lambda x: potential(t, x, FIELD), MU, 0.3)[0],
        chebyshev_slopes(lambda x: potential(t, MU, x), FIELD, 0.3)[0],
    ]
    assert_allclose(slopes, [-s, -n, -m], rtol=1e-10)


# --------------------------------------------------------------------- where things are not defined


def test_further_charges_take_the_temperature_away():
    energy, number = np.array([0.0, 1.0, 2.5, 4.0, 6.0]), np.array([0.0, 1, 1, 2, 3])
    family = Microstates({"energy": energy, "number": number})
    result = maxent.solve(family, {"energy": 1.4, "number": 0.9})
    assert thermodynamics(result, numbers="number")["temperature"].is_defined
    further = thermodynamics(result)
    assert further.further == ("number",)
    for name in ("inverse temperature", "temperature", "free energy", "heat capacity at fixed number"):
        assert "depends on how the further charges (number) are written" in further[name].reason
        assert math.isnan(further[name].value)
    assert_allclose(further["entropy"].value, result.entropy)
    # a further charge whose multiplier is zero leaves the state thermal
    thermal = maxent.solve(Microstates({"energy": energy}), {"energy": 1.4})
    same = maxent.solve(family, {"energy": 1.4, "number": thermal.mean(number)})
    alone, beside = thermodynamics(thermal), thermodynamics(same)
    assert_allclose(beside["temperature"].value, alone["temperature"].value, rtol=1e-10)
    assert_allclose(beside["free energy"].value, alone["free energy"].value, rtol=1e-10)
    assert beside["heat capacity at fixed number"].value < alone["heat capacity"].value


def test_a_number_without_spread_has_no_chemical_potential():
    family = Microstates({"energy": [0.0, 1.0, 2.5], "number": [2, 2, 2]})
    result = maxent.solve(family, {"energy": 0.7, "number": 2.0})
    thermo = thermodynamics(result, numbers="number")
    assert thermo["temperature"].is_defined
    assert "number is a number in all states" in thermo["chemical potential"].reason
    assert not thermo["grand potential"].is_defined and not thermo["T dS/dT at fixed mu"].is_defined
    alone = maxent.solve(Microstates({"energy": [0.0, 1.0, 2.5]}), {"energy": 0.7})
    assert_allclose(
        thermo["heat capacity at fixed number"].value, thermodynamics(alone)["heat capacity"].value, rtol=1e-10
    )


def test_redundant_energy():
    family = Microstates({"energy": [0.0, 1.0, 2.0], "number": [0, 2, 4]})
    thermo = thermodynamics(maxent.solve(family, {"energy": 0.7, "number": 1.4}), numbers="number")
    assert "energy is redundant with number" in thermo["temperature"].reason
    assert thermo["entropy"].is_defined


def test_bad_input(gas):
    result = fitted(gas, LAM)
    for wrong, message in [
        (lambda: thermodynamics(result, energy="heat"), "'heat' is no charge of the result"),
        (lambda: thermodynamics(result, numbers="energy"), "'energy' is named twice"),
        (lambda: thermodynamics(result, errors=np.eye(2)), r"of shape \(3, p\)"),
        (lambda: thermodynamics(result, family=Microstates({"energy": [0, 1]})), "other charges"),
        (lambda: thermodynamics(result).heat_capacity(of="work"), "heat or energy"),
        (lambda: thermodynamics(result).heat_capacity(values=["energy"]), "'energy' cannot be held"),
        (lambda: thermodynamics(result).heat_capacity(values=["number", "number"]), "held twice"),
        (lambda: thermodynamics(result).heat_capacity(potentials=["number"]), "has no potential"),
        (lambda: thermodynamics(result).susceptibility("number"), "has no potential"),
        (lambda: thermodynamics(result, numbers="number").susceptibility("number", values=["number"]), "be held"),
        (lambda: generalised_force(result, {"field": np.ones(30)}), "'field', which is no charge"),
        (lambda: generalised_force(result, {}, energy="heat"), "'heat' to be the energy"),
        (lambda: parameter_response(gas, {"energy": 1.0}, {}), "multipliers must be given for"),
        (lambda: parameter_response(gas, dict.fromkeys(gas.names, np.nan), {}), "must be finite"),
        (lambda: parameter_response(gas, result.multipliers, {"energy": np.ones(3)}), "must list 30 states"),
        (lambda: check_result(result, Microstates({"energy": [0, 1]})), "other charges"),
    ]:
        with pytest.raises(ValueError, match=message):
            wrong()
    with pytest.raises(KeyError, match="no quantity 'pressure'; there are inverse temperature"):
        thermodynamics(result)["pressure"]
    with pytest.raises(TypeError, match="Matrices or Microstates"):
        parameter_response(object(), {}, {})
    outside = maxent.solve(gas, {"energy": -99.0, "number": 1.0, "magnetisation": 0.0})
    edge = maxent.solve(Microstates({"energy": [0.0, 1.0]}), {"energy": 0.0})
    assert edge.verdict is maxent.Verdict.BOUNDARY
    for unsolved in (outside, edge):
        for ask in (thermodynamics, lambda r: generalised_force(r, {}), lambda r: check_result(r, gas)):
            with pytest.raises(maxent.SolveError):
                ask(unsolved)
    prior = maxent.solve(Microstates({"energy": [0.0, 1.0, 2.0]}, log_prior=[0.0, 1.0, -1.0]), {"energy": 0.8})
    with pytest.raises(ValueError, match="a state with a prior has no thermodynamics"):
        thermodynamics(prior)
    with pytest.raises(ValueError, match="prior"):
        parameter_response(
            Microstates({"energy": [0.0, 1.0]}, log_prior=[0.0, 1.0]), {"energy": 1.0}, {"energy": np.ones(2)}
        )


def test_bad_formulas():
    sites = Chain(3)
    energy = formula("J*Sz[i]*Sz[i+1] + h*Sx[i]", sites, {"J": 1.0, "h": 0.5})
    for error, wrong, message in [
        (TypeError, lambda: parameter_slopes({"energy": energy.matrix()}, {"energy": 1.0}), "must be an OperatorSum"),
        (ValueError, lambda: parameter_slopes({"energy": energy}, {}), "no multiplier for charge 'energy'"),
        (ValueError, lambda: parameter_slopes({"energy": energy}, {"energy": 1.0}, parameters=["g"]), "'g' is no real"),
        (
            ValueError,
            lambda: parameter_slopes(
                {"energy": energy, "other": formula("h*Sz[i]", sites, {"h": 0.7})}, {"energy": 1.0, "other": 1.0}
            ),
            "'h' has two values: 0.5 and 0.7",
        ),
        (
            ValueError,
            lambda: parameter_slopes({"energy": formula("h*Sx[i]*Sy[i]", sites, {"h": 0.5})}, {"energy": 1.0}),
            "not Hermitian",
        ),
    ]:
        with pytest.raises(error, match=message):
            wrong()


# --------------------------------------------------------------------- errors


def test_standard_errors_against_shifted_fits(gas):
    """First-order propagation against fits at shifted targets, for every quantity."""
    targets = dict(zip(gas.names, gas.evaluate(LAM, 1).values.tolist(), strict=True))
    rows = np.array([[2e-3, 0.0], [1e-3, 5e-4], [0.0, 1e-3]])
    roles = {"numbers": "number", "fields": "magnetisation"}
    thermo = thermodynamics(maxent.solve(gas, targets), **roles, family=gas, errors=rows)
    shifted = []
    for direction in rows.T:
        pair = []
        for sign in (1, -1):
            moved = {n: targets[n] + sign * 0.1 * d for n, d in zip(gas.names, direction, strict=True)}
            pair.append(np.array([q.value for q in thermodynamics(maxent.solve(gas, moved), **roles).quantities]))
        shifted.append((pair[0] - pair[1]) / 0.2)
    expected = np.linalg.norm(shifted, axis=0)
    assert_allclose([q.sigma for q in thermo.quantities], expected, rtol=1e-4)
    assert "+-" in str(thermo["temperature"])


def test_measured_targets(gas):
    known = zip(gas.names, gas.evaluate(LAM, 1).values, [0.03, 0.02, 0.04], strict=True)
    result = maxent.solve(gas, {n: maxent.Measured(v, s) for n, v, s in known})
    thermo = thermodynamics(result, numbers="number", fields="magnetisation")
    sigma = result.multiplier_sigmas()["energy"]
    assert_allclose(thermo["inverse temperature"].sigma, sigma, rtol=1e-8)
    assert_allclose(thermo["temperature"].sigma, sigma / result.multipliers["energy"] ** 2, rtol=1e-6)
    # second order needs the family
    assert math.isnan(thermo["susceptibility of number"].sigma)
    with_family = thermodynamics(result, numbers="number", fields="magnetisation", family=gas)
    assert with_family["susceptibility of number"].sigma > 0
    first_order = [q.sigma for q in thermo.quantities if not math.isnan(q.sigma)]
    assert len(first_order) == 10
    assert_allclose(first_order, [q.sigma for q in with_family.quantities[:10]], rtol=1e-6)


# --------------------------------------------------------------------- forces


def test_pressure_of_a_box():
    """One particle in a box of length L: E_n = n^2/L^2, force 2 E/L; d lam/dL at fixed E is 2 lam/L (scaling)."""
    length = 1.7
    n = np.arange(1, 80.0)
    box = lambda a: Microstates({"energy": n**2 / a**2})
    result = maxent.solve(box(length), {"energy": 2.2})
    first = {"energy": -2 * n**2 / length**3}
    second = {"energy": 6 * n**2 / length**4}
    assert_allclose(generalised_force(result, first), 2 * 2.2 / length, rtol=1e-12)
    response = parameter_response(box(length), result.multipliers, first, second=second)
    assert_allclose(response.force, 2 * 2.2 / length, rtol=1e-12)
    checks = check_response(response, box, result.multipliers, at=length, radius=0.2)
    assert all(checks), "\n".join(map(str, checks))


def test_maxwell_with_charges_that_do_not_commute():
    """Two charges of one spin chain, both depending on a; a new fit at every node."""
    sites = Chain(5)
    parts = {
        "energy": formula("Sx[i]*Sx[i+1] + a*Sz[i]", sites, {"a": 0.6}),
        "other": formula("Sy[i]*Sy[i+1] + a**2*Sx[i]", sites, {"a": 0.6}),
    }

    def family_at(a):
        return Matrices({n: x.with_parameters(a=a).matrix() for n, x in parts.items()})

    lam = {"energy": 0.9, "other": -0.5}
    first = {n: x.derivative("a") for n, x in parts.items()}
    second = {"other": parts["other"].derivative("a").derivative("a")}
    response = parameter_response(family_at(0.6), lam, first, second=second)
    checks = check_response(response, family_at, lam, at=0.6, radius=0.2, nodes=14)
    assert all(checks), "\n".join(map(str, checks))
    # without the second derivative the curvature is wrong, and the check says so
    wrong = check_response(parameter_response(family_at(0.6), lam, first), family_at, lam, at=0.6, radius=0.2, nodes=14)
    assert [bool(c) for c in wrong] == [True, False, True]
    assert "FAILS" in str(wrong[1])


def test_restricted_and_rotated_families():
    """In a sector the parameter answers as in the sector's own matrices."""
    sites = Ring(6)
    energy = formula("Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + d*Sz[i]*Sz[i+1]", sites, {"d": 0.4})
    keep = np.flatnonzero(formula("Sz[i]", sites).matrix().diagonal() == 1.0)
    sector = Matrices({"energy": energy.matrix()}).restrict(keep)
    small = Matrices({"energy": energy.matrix()[keep][:, keep]})
    x = energy.derivative("d").matrix()
    ours = parameter_response(sector, {"energy": 0.7}, {"energy": x})
    theirs = parameter_response(small, {"energy": 0.7}, {"energy": x[keep][:, keep]})
    assert_allclose([ours.log_partition, ours.curvature], [theirs.log_partition, theirs.curvature], rtol=1e-12)
    with pytest.raises(ValueError, match="has dimension 15, the family 64"):
        parameter_response(sector, {"energy": 0.7}, {"energy": x[keep][:, keep]})


# --------------------------------------------------------------------- self-checks


def test_checks_pass_and_print(mixed):
    _, family, result = mixed
    told = []
    checks = check_result(result, family, progress=told.append)
    assert len(checks) == 5 and all(checks), "\n".join(map(str, checks))
    assert told == ["differences of ln Z by the multiplier of energy"]
    assert "entropy, spectrum against ln Z + lam.q: agrees, 4.3535" in str(checks[0])


def test_checks_of_charges_that_do_not_commute(gas):
    sites = Chain(4)
    texts = {"energy": HEISENBERG, "along_x": "Sx[i]", "along_z": "Sz[i]", "bond": "Sx[0]*Sz[1]"}
    family = Matrices({n: formula(t, sites).matrix() for n, t in texts.items()})
    assert all(check_result(fitted(family, [0.8, 0.2, -0.5, 0.4]), family))
    weighted = Microstates({"energy": np.arange(6.0)}, log_weights=np.log([1.0, 4, 2, 7, 1, 3]))
    assert all(check_result(fitted(weighted, 0.6), weighted))
    assert all(check_result(fitted(gas, LAM), gas))
    cold = Microstates({"energy": [0.0, 1.0, 40.0]})
    assert all(check_result(fitted(cold, 12.0), cold))


def test_checks_fail_when_they_should(gas):
    result = fitted(gas, LAM)
    names = lambda checks: [c.name.split(",")[0].split(" against")[0] for c in checks if not c]
    wrong = replace(result, covariance=result.covariance * 1.001)
    assert "covariance" in names(check_result(wrong, gas)) and "variances" in names(check_result(wrong, gas))
    shifted = replace(result, multipliers=result.multipliers | {"number": -0.5001})
    assert {"entropy", "values"} <= set(names(check_result(shifted, gas)))
    moved = replace(result, values=result.values | {"energy": result.values["energy"] + 1e-5})
    assert {"entropy", "values"} <= set(names(check_result(moved, gas)))
    broken = replace(result, covariance=np.full((3, 3), np.nan))
    assert not all(check_result(replace(broken, covariance=np.where(np.eye(3), result.covariance, np.nan)), gas))


# --------------------------------------------------------------------- fixed number


def test_chemical_potential_of_free_fermions():
    """Three levels: Z_N are the elementary symmetric polynomials of exp(-beta e) (closed form)."""
    sites, beta = np.array([0.3, 0.9, 1.4]), 1.3
    occupied = np.array([[(k >> j) & 1 for j in range(3)] for k in range(8)])
    listed = levels(Microstates({"energy": occupied @ sites, "number": occupied.sum(1)}))
    z = log_partitions_by_number(listed, beta)
    w = np.exp(-beta * sites)
    expected = [1.0, w.sum(), w[0] * w[1] + w[0] * w[2] + w[1] * w[2], w.prod()]
    assert_allclose([math.exp(z[n]) for n in range(4)], expected, rtol=1e-13)
    assert_allclose(chemical_potential_at_number(z, 1, beta), -math.log(expected[2] / expected[1]) / beta, rtol=1e-12)
    # a grand-canonical state between the two sectors' mu
    family = Microstates({"energy": occupied @ sites, "number": occupied.sum(1)})
    mu = lambda n: brentq(lambda m: family.evaluate(np.array([beta, -beta * m]), 1).values[1] - n, -9, 9)
    assert chemical_potential_at_number(z, 0, beta) < mu(1.0) < chemical_potential_at_number(z, 1, beta)
    degenerate = levels(Microstates({"energy": [0.0, 1.0], "number": [0, 1]}, log_weights=[0.0, math.log(2)]))
    assert_allclose(log_partitions_by_number(degenerate, 0.5)[1], math.log(2) - 0.5)


def test_fixed_number_needs_numbers():
    for wrong, message in [
        (lambda: chemical_potential_at_number({0: 0.0, 1: 0.1}, 1, 1.0), "there is none of 2"),
        (lambda: chemical_potential_at_number({0: 0.0, 1: 0.1}, 0, 0.0), "at beta = 0"),
        (lambda: log_partitions_by_number(levels([0.0, 1.0]), 1.0), "no charge 'number'"),
        (
            lambda: log_partitions_by_number(levels([0.0, 1.0], further={"number": [0.0, 0.5]}), 1.0),
            "no integers, such as 0.5",
        ),
    ]:
        with pytest.raises(ValueError, match=message):
            wrong()
