"""Quadratic charges: one evaluation against one eigendecomposition, a fit against a script, and 1e5 sites.

The evaluation holds ln Z, all values and the whole covariance of four charges on 400 modes; the yardstick is one
eigendecomposition of the same one-body matrix.  The script is the one that a user would write: SciPy's BFGS on the
one-body matrices.
"""

from __future__ import annotations

import numpy as np
import scipy.optimize

import maxent
from benchmarks.measure import clean_environment, interleaved, report, seconds, table
from maxent.families import Bilinears, Periodic, SpinRing

GOAL, SITES = 4.0, 100_000


def four(n: int, *, is_complex: bool) -> dict[str, np.ndarray]:
    """Four dense one-body matrices of norm near 2 that do not commute."""
    rng = np.random.default_rng(n)
    out = {}
    for name in ("a", "b", "c", "d"):
        h = rng.standard_normal((n, n))
        if is_complex:
            h = h + 1j * rng.standard_normal((n, n))
        out[name] = (h + h.conj().T) / np.sqrt((16 if is_complex else 8) * n / 4)
    return out


def by_hand(charges: dict, targets: dict[str, float]) -> tuple[np.ndarray, float]:
    """Multipliers and residual of the usual script."""
    dense, q = np.array(list(charges.values())), np.array(list(targets.values()))

    def dual(lam):
        x, u = np.linalg.eigh(np.tensordot(lam, dense, axes=1))
        g = (u / (1 + np.exp(x))) @ u.conj().T
        values = np.einsum("jab,ba->j", dense, g).real
        return np.logaddexp(0, -x).sum() + lam @ q, q - values

    found = scipy.optimize.minimize(dual, np.zeros(len(q)), jac=True, method="BFGS", options={"gtol": 1e-10})
    return found.x, float(np.abs(found.jac).max())


def chain_script(targets: np.ndarray, cells: int) -> tuple[np.ndarray, float]:
    """The script for four charges of a ring that are numbers at each momentum."""
    k = 2 * np.pi * np.arange(cells) / cells
    q = np.array([-2 * np.cos(k), np.ones(cells), -2 * np.cos(2 * k), np.sin(k)])

    def dual(lam):
        x = lam @ q
        return (np.logaddexp(0, -x).sum() + lam @ targets) / cells, (targets - q @ (1 / (1 + np.exp(x)))) / cells

    found = scipy.optimize.minimize(dual, np.zeros(4), jac=True, method="BFGS", options={"gtol": 1e-12})
    return found.x, float(np.abs(found.jac).max() * cells)


def evaluations() -> list[list[str]]:
    """One evaluation against one eigendecomposition."""
    rows = []
    lam = np.array([0.7, -0.4, 0.3, 0.9])
    for n in (200, 400):
        for is_complex in (False, True):
            charges = four(n, is_complex=is_complex)
            family = Bilinears(charges)
            whole = np.tensordot(lam, np.array(list(charges.values())), axes=1)
            tasks = {"ours": lambda f=family: f.evaluate(lam), "one": lambda k=whole: np.linalg.eigh(k)}
            spent = interleaved(tasks, 7)
            ratio = spent["ours"] / spent["one"]
            kind = "complex" if is_complex else "real"
            rows.append([str(n), kind, seconds(spent["ours"]), seconds(spent["one"]), f"{ratio:.2f}", f"<= {GOAL:g}"])
    return rows


def fits() -> list[list[str]]:
    """Whole fits against scripts."""
    rows = []
    lam = np.array([0.7, -0.4, 0.3, 0.9])

    def row(name: str, make, targets: dict, script, repetitions: int) -> None:
        kept: dict = {}

        def ours():
            kept["ours"] = maxent.solve(make(), targets)

        tasks = {"ours": ours}
        if script is not None:
            tasks["script"] = lambda: kept.__setitem__("script", script())
        spent = interleaved(tasks, repetitions)
        result = kept["ours"]
        off = max(abs(x) for x in result.residuals.values())
        other = ["-", "-", "-"]
        if script is not None:
            miss = kept["script"][1]
            other = [seconds(spent["script"]), f"{spent['script'] / spent['ours']:.1f}", f"{miss:.0e}"]
        rows.append([name, str(result.verdict), str(result.iterations), seconds(spent["ours"]), *other, f"{off:.0e}"])

    charges = four(200, is_complex=True)
    values = Bilinears(charges).evaluate(lam, 1).values
    asked = dict(zip(charges, map(float, values), strict=True))
    row("200 dense complex modes", lambda: Bilinears(charges), asked, lambda: by_hand(charges, asked), 3)
    n = SITES
    ring = {
        "energy": Periodic(n, {1: -1.0}), "number": Periodic(n, {0: 1.0}), "next": Periodic(n, {2: -1.0}),
        "current": Periodic(n, {1: -0.5j}),
    }  # fmt: skip
    start = np.array([0.7, 0.3, 0.2, 0.1])
    values = Bilinears(ring).evaluate(start, 1).values
    asked_ring = dict(zip(ring, map(float, values), strict=True))
    row(f"ring of {n} sites", lambda: Bilinears(ring), asked_ring, lambda: chain_script(values, n), 3)
    paired = {
        "energy": Periodic(n, {0: 1.2, 1: -1.0}, pairing={1: -1.0}), "number": Periodic(n, {0: 1.0}),
        "two": Periodic(n, {2: -1.0}, pairing={2: -1.0}), "three": Periodic(n, {3: -1.0}, pairing={3: -1.0}),
    }  # fmt: skip
    values = Bilinears(paired).evaluate(start, 1).values
    asked_pairs = dict(zip(paired, map(float, values), strict=True))
    row(f"ring of {n} sites with pairing", lambda: Bilinears(paired), asked_pairs, None, 3)
    size = 100
    spins = {
        "energy": [(-1.0, {j: "X", (j + 1) % size: "X"}) for j in range(size)]
        + [(-0.6, {j: "Z"}) for j in range(size)],
        "current": [(1.0, {j: "X", (j + 1) % size: "Y"}) for j in range(size)]
        + [(-1.0, {j: "Y", (j + 1) % size: "X"}) for j in range(size)],
    }
    values = SpinRing(size, spins).evaluate(np.array([0.8, 0.2])).values
    asked_spins = dict(zip(spins, map(float, values), strict=True))
    row(f"exact ring of {size} spins, two sectors", lambda: SpinRing(size, spins), asked_spins, None, 3)
    return rows


def main() -> None:
    """Run, print, and write when asked."""
    clean_environment("benchmarks.bilinears")
    text = (
        "One evaluation holds ln Z, four values and the whole covariance; the yardstick is `numpy.linalg.eigh` of the "
        "same one-body matrix.\n\n"
    )
    first = table(["modes", "matrices", "evaluation", "one eigendecomposition", "ratio", "goal"], evaluations())
    second = (
        "\n\nWhole fits, building the family included, from targets of known multipliers. The script is "
        '`scipy.optimize.minimize(method="BFGS")` on the one-body matrices, on the ring on the momenta. '
        f"The goal for {SITES} sites is 2 s.\n\n"
    )
    head = ["system", "verdict", "steps", "maxent", "script", "ratio", "residual, script", "residual, maxent"]
    report("benchmarks.bilinears", "Quadratic charges", text + first + second + table(head, fits()))


if __name__ == "__main__":
    main()
