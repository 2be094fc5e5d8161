"""The solver inside jit, vmap and grad: derivatives against differences, batches against loops, compile counts."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest

import maxent
from maxent import compiled
from maxent.core.blocks import Blocks
from maxent.families import Matrices, Microstates
from maxent.lattice import Ring, formula


@pytest.fixture(autouse=True)
def double_precision():
    with jax.enable_x64(True):
        yield


def ring(length=4):
    sites = Ring(length)
    texts = {
        "energy": "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 0.6*Sz[i]*Sz[i+1]",
        "field": "Sx[i]",
        "magnetisation": "Sz[i]",
        "zz": "Sz[i]*Sz[i+2]",
    }
    return Matrices({name: formula(text, sites).matrix() for name, text in texts.items()})


def complex_matrices():
    rng = np.random.default_rng(5)
    raw = rng.normal(size=(4, 6, 6)) + 1j * rng.normal(size=(4, 6, 6))
    hermitian = raw + raw.conj().transpose(0, 2, 1)
    return Matrices(dict(zip("abcd", hermitian, strict=True)))


def weighted():
    rng = np.random.default_rng(6)
    return Microstates(
        dict(zip("abcd", rng.normal(size=(4, 40)), strict=True)), log_weights=rng.uniform(-3, 3, 40)
    )


def with_prior():
    rng = np.random.default_rng(7)
    raw = rng.normal(size=(5, 5, 5))
    raw = raw + raw.transpose(0, 2, 1)
    return Matrices(dict(zip("abcd", raw[:4], strict=True)), log_prior=raw[4] / 3)


FAMILIES = {"ring": ring, "complex": complex_matrices, "weighted": weighted, "prior": with_prior}


def answer(family, q):
    """Three charges asked for, the fourth observed: a multiplier, the entropy, and a mean of everything."""
    names = family.names
    s = compiled.solve(family, dict(zip(names[:3], q, strict=True)))
    return jnp.stack([*(s.multipliers[n] for n in names[:3]), s.entropy, s.log_partition, s.values[names[3]]])


def reachable(family, size):
    rng = np.random.default_rng(1)
    lam = np.append(size * rng.normal(size=3) / np.maximum(family.scale[:3], 1), 0.0)
    return jnp.asarray(family.evaluate(lam).values[:3])


def differences(f, q, h=1e-5):
    return np.stack([(f(q.at[j].add(h)) - f(q.at[j].add(-h))) / (2 * h) for j in range(len(q))], axis=-1)


# size 0: infinite temperature, where every level of the exponent meets
@pytest.mark.parametrize(
    ("kind", "size"), [("ring", 0.0), ("ring", 1.0), ("complex", 0.0), ("weighted", 1.0), ("prior", 1.0)]
)
def test_derivatives_by_targets(kind, size):
    family = FAMILIES[kind]()
    q = reachable(family, size)
    f = jax.jit(lambda x: answer(family, x))
    expected = differences(f, q)
    scale = np.abs(expected).max()
    forward, reverse = jax.jit(lambda x: (jax.jacfwd(f)(x), jax.jacrev(f)(x)))(q)
    np.testing.assert_allclose(forward, expected, atol=1e-6 * scale)
    np.testing.assert_allclose(reverse, expected, atol=1e-6 * scale)
    # the slope of the entropy is the multiplier (Jaynes 1957)
    np.testing.assert_allclose(forward[3], f(q)[:3], atol=1e-9 * scale)


@pytest.mark.parametrize(("kind", "size"), [("ring", 0.0), ("complex", 1.0), ("weighted", 1.0), ("prior", 1.0)])
def test_derivatives_by_the_arrays_of_the_family(kind, size):
    family = FAMILIES[kind]()
    q = dict(zip(family.names[:3], reachable(family, size), strict=True))
    rng = np.random.default_rng(2)

    def bump(x):
        noise = rng.normal(size=x.shape) + (1j * rng.normal(size=x.shape) if np.iscomplexobj(x) else 0)
        return noise + noise.conj().swapaxes(-1, -2) if x.ndim == 3 else noise

    b = family.blocks
    direction = Blocks(bump(b.diagonal), tuple(bump(a) for a in b.dense), b.prior, b.prior_dense)

    def f(t):
        blocks = Blocks(
            b.diagonal + t * direction.diagonal,
            tuple(a + t * d for a, d in zip(b.dense, direction.dense, strict=True)),
            b.prior,
            b.prior_dense,
        )
        s = compiled.solve(compiled.with_arrays(family, blocks), q)
        return jnp.stack([*s.multipliers.values(), s.entropy, *s.values.values()])

    h = 1e-6
    plain = jax.jit(f)
    expected = (plain(h) - plain(-h)) / (2 * h)
    scale = 1 + np.abs(expected).max()
    forward, reverse = jax.jit(lambda x: (jax.jacfwd(f)(x), jax.jacrev(f)(x)))(0.0)
    np.testing.assert_allclose(forward, expected, atol=1e-6 * scale)
    np.testing.assert_allclose(reverse, expected, atol=1e-6 * scale)


def test_inverse_design_field_for_a_wanted_multiplier():
    family = ring()

    def beta(field):
        charges = {"energy": {"energy": 1.0, "magnetisation": -field}, "zz": {"zz": 1.0}}
        return compiled.solve(compiled.combine(family, charges), {"energy": -0.8}).multipliers["energy"]

    plain = jax.jit(beta)
    slope = float(jax.jit(jax.grad(beta))(0.3))
    assert slope == pytest.approx(float(plain(0.3 + 1e-5) - plain(0.3 - 1e-5)) / 2e-5, rel=1e-7)


@pytest.mark.parametrize("kind", FAMILIES)
def test_equals_the_host_solver(kind):
    family = FAMILIES[kind]()
    q = reachable(family, 0.7)
    names = family.names
    trimmed = family.combine(np.eye(4)[:3], np.zeros(3))
    object.__setattr__(trimmed, "names", names[:3])
    host = maxent.solve(trimmed, dict(zip(names[:3], q.tolist(), strict=True)))
    here = compiled.solve(family, dict(zip(names[:3], q, strict=True)))
    assert bool(here.converged)
    for n in names[:3]:
        assert float(here.multipliers[n]) == pytest.approx(host.multipliers[n], abs=1e-12)
    assert float(here.multipliers[names[3]]) == 0.0


@pytest.mark.parametrize("kind", ["complex", "weighted"])
def test_batch_equals_loop_and_vmap(kind):
    family = FAMILIES[kind]()
    q = jnp.stack([reachable(family, s) for s in (0.0, 0.2, 0.5, 0.9, 1.3)])
    names = family.names[:3]
    columns = {n: q[:, j] for j, n in enumerate(names)}
    many = compiled.solve_many(family, columns)
    batched = compiled.solve_many(family, columns, batch=2) if kind == "weighted" else many
    mapped = jax.jit(jax.vmap(lambda x: compiled.solve(family, dict(zip(names, x, strict=True)))))(q)
    assert np.all(many.converged)
    for k in range(len(q)):
        one = compiled.solve(family, dict(zip(names, q[k], strict=True)))
        for n in family.names:
            for other in (many, batched, mapped):
                assert float(other.multipliers[n][k]) == pytest.approx(float(one.multipliers[n]), abs=1e-12)
                assert float(other.values[n][k]) == pytest.approx(float(one.values[n]), abs=1e-12)
        assert float(many.log_partition[k]) == pytest.approx(float(one.log_partition), abs=1e-12)


def test_batches_of_listed_states_with_every_charge_asked_for():
    rng = np.random.default_rng(3)
    charges = rng.normal(size=(4, 300)) * np.array([1e-3, 1.0, 50.0, 1.0])[:, None] + 2.0
    family = Microstates(dict(zip("abcd", charges, strict=True)), log_weights=rng.uniform(-40, 40, 300))
    lam = rng.normal(size=(60, 4)) / charges.std(axis=1)
    q = np.array([family.evaluate(x).values for x in lam])
    columns = {n: q[:, j] for j, n in enumerate("abcd")}
    many = jax.jit(lambda c: compiled.solve_many(family, c))(columns)
    assert np.all(many.converged)
    for j, n in enumerate("abcd"):
        np.testing.assert_allclose(many.values[n], q[:, j], atol=1e-12 * np.abs(charges[j]).max())
        spread = np.array([np.sqrt(np.linalg.inv(family.evaluate(x).covariance)[j, j]) for x in lam])
        np.testing.assert_allclose(many.multipliers[n], lam[:, j], atol=1e-12 * spread.max() + 1e-12)
    jacobian = jax.jacrev(lambda c: compiled.solve_many(family, c).multipliers["b"][7])(columns)
    inverse = -np.linalg.inv(family.evaluate(lam[7]).covariance)
    for j, n in enumerate("abcd"):
        assert float(jacobian[n][7]) == pytest.approx(inverse[1, j], rel=1e-6, abs=1e-9)
        assert not np.any(np.delete(np.asarray(jacobian[n]), 7))


def test_unreachable_targets_do_not_converge_and_do_not_raise():
    die = Microstates({"pips": np.arange(1, 7)})
    assert not bool(compiled.solve(die, {"pips": 6.2}).converged)
    assert not bool(compiled.solve(die, {"pips": 6.0}).converged)  # on the boundary
    many = compiled.solve_many(die, {"pips": jnp.array([3.0, 6.2, 4.0, 0.5, 6.0])})
    assert many.converged.tolist() == [True, False, True, False, False]


def test_redundant_charges_share_their_multiplier():
    die = Microstates({"pips": np.arange(1, 7), "twice": 2 * np.arange(1, 7)})
    s = compiled.solve(die, {"pips": 4.5, "twice": 9.0})
    assert bool(s.converged)
    # exp(-lam i) with lam = -0.37105 (Jaynes 1979, eq. B12)
    assert float(s.multipliers["pips"] + 2 * s.multipliers["twice"]) == pytest.approx(-0.37105, abs=6e-6)


def test_contradictory_copies_do_not_converge():
    states = Microstates({"e": np.arange(4), "two": 2 * np.arange(4) + 1, "five": np.full(4, 5.0)})
    for targets, agrees in (
        ({"e": 1.0, "two": 3.0, "five": 5.0}, True),
        ({"e": 1.0, "two": 5.0, "five": 5.0}, False),
        ({"e": 1.0, "two": 3.0, "five": 5.1}, False),
    ):
        assert bool(compiled.solve(states, targets).converged) is agrees
        many = compiled.solve_many(states, {n: jnp.full(2, q) for n, q in targets.items()})
        assert many.converged.tolist() == [agrees, agrees]
    spin = np.array([[0, 0.5], [0.5, 0]])
    doubled = Matrices({"a": spin, "b": 2 * spin + np.eye(2), "z": np.diag([0.5, -0.5])})
    assert bool(compiled.solve(doubled, {"a": 0.3, "b": 1.6, "z": 0.1}).converged)
    assert not bool(compiled.solve(doubled, {"a": 0.3, "b": 2.5, "z": 0.1}).converged)


def test_same_shapes_compile_once():
    rng = np.random.default_rng(8)
    make = lambda: Microstates({"a": rng.normal(size=50), "b": rng.normal(size=50)})
    compiled.solve(make(), {"a": 0.1, "b": 0.0})
    before = compiled._one._cache_size()
    for _ in range(3):
        compiled.solve(make(), {"a": 0.05, "b": 0.02})
    assert compiled._one._cache_size() == before


def test_bad_input_is_named():
    die = Microstates({"pips": np.arange(1, 7)})
    with pytest.raises(ValueError, match="target 'pip' is for no charge; did you mean 'pips'"):
        compiled.solve(die, {"pip": 4.5})
    with pytest.raises(ValueError, match="one common length"):
        compiled.solve_many(die, {"pips": 4.5})
    with pytest.raises(ValueError, match="'pip', which is no charge; did you mean 'pips'"):
        compiled.combine(die, {"x": {"pip": 1.0}})
    with pytest.raises(ValueError, match="no targets given"):
        compiled.solve(die, {})
    with pytest.raises(ValueError, match="iterations must be a positive integer, not -1"):
        compiled.solve(die, {"pips": 4.5}, iterations=-1)
    with pytest.raises(ValueError, match="batch must be a positive integer, not 0"):
        compiled.solve_many(die, {"pips": jnp.ones(2)}, batch=0)
    with pytest.raises(TypeError, match="target 'pips' must be one number"):
        compiled.solve(die, {"pips": "4"})
    with pytest.raises(TypeError, match="target 'pips' must be one number"):
        compiled.solve(die, {"pips": jnp.ones(2)})
    with pytest.raises(ValueError, match="combine takes new charges"):
        compiled.combine(die, {})
    with pytest.raises(TypeError, match="with_arrays takes"):
        compiled.with_arrays(die, np.ones(6))
    assert float(compiled.solve(die, {"pips": maxent.Exact(4.5)}).values["pips"]) == pytest.approx(4.5)
    with jax.enable_x64(False), pytest.raises(ValueError, match="double precision"):
        compiled.solve(die, {"pips": 4.5})
