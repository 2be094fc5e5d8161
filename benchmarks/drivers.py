"""Host against JAX driver: first fit of a shape and later ones, by dimension and number of charges.

From it follows after how many fits of one shape compilation has paid for itself.
"""

from __future__ import annotations

import time

import numpy as np

import maxent
from benchmarks.measure import clean_environment, interleaved, report, seconds, table
from maxent.families import Matrices, Microstates

MATRICES = ((2, 2), (8, 2), (8, 4), (32, 4), (128, 4), (128, 8))
LISTED = ((6, 1), (100, 3), (10_000, 3), (10_000, 10))


def spent(task) -> float:
    """CPU seconds of one run."""
    start = time.process_time()
    task()
    return time.process_time() - start


def instance(kind: str, size: int, m: int):
    """A family and targets well inside."""
    rng = np.random.default_rng(size * 100 + m)
    names = [f"q{j}" for j in range(m)]
    if kind == "listed states":
        family = Microstates(dict(zip(names, rng.standard_normal((m, size)), strict=True)))
    else:
        a = rng.standard_normal((m, size, size))
        a = (a + a.transpose(0, 2, 1)) / np.sqrt(8 * size)
        family = Matrices(dict(zip(names, a, strict=True)))
    values = family.evaluate(0.5 * rng.standard_normal(m)).values
    return family, dict(zip(names, map(float, values), strict=True))


def main() -> None:
    """Run, print, and write when asked."""
    clean_environment("benchmarks.drivers")
    warm, targets = instance("listed states", 7, 2)
    maxent.solve(warm, targets, driver="jax")  # JAX's own start-up is no part of a compilation
    rows = []
    for kind, shapes in (("listed states", LISTED), ("real block", MATRICES)):
        for size, m in shapes:
            family, targets = instance(kind, size, m)
            host = lambda family=family, targets=targets: maxent.solve(family, targets, driver="host")
            compiled = lambda family=family, targets=targets: maxent.solve(family, targets, driver="jax")
            first_host, first = spent(host), spent(compiled)
            later = interleaved({"host": host, "jax": compiled}, 7)
            gain = later["host"] - later["jax"]
            pays = f"{int(np.ceil((first - later['jax']) / gain))}" if gain > 0 else "never"
            rows.append(
                [
                    kind,
                    size,
                    m,
                    seconds(first_host),
                    seconds(later["host"]),
                    seconds(first),
                    seconds(later["jax"]),
                    pays,
                ]
            )
    head = ["kind", "states", "charges", "host, first", "host, later", "jax, first", "jax, later", "pays after fits"]
    text = (
        '`driver="auto"` takes the host because a compilation costs more than hundreds of fits; certificates, '
        "whitening and existence proofs run on the host for both and are part of both columns.\n\n"
    )
    report("benchmarks.drivers", "Host and JAX driver", text + table(head, rows))


if __name__ == "__main__":
    main()
