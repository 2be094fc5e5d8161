"""How many threads the linear algebra of a run takes.

Many small eigenproblems are slower with several threads than with one, most of all on a busy machine: the release from
a superlattice (400 modes, some hundred decompositions) took 23 s on two shared cores with one thread and more than
120 s with two.  Eigenvectors of one symmetric matrix, seconds with one and with two threads on two cores that others
used as well (load 6):

    dimension    250          500          1000        2000       3000
    seconds      0.02  0.03   0.11  0.66   0.63  2.2   2.8  15    23  48

On an idle machine large matrices gain from threads, and a run that is one large matrix has no other use for the cores;
so for blocks from `LARGE` on every core is taken.  Floor: app.  Must not know: problems.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Iterator
from contextlib import contextmanager

__all__ = ["LARGE", "enough", "one_thread"]

#: Blocks from this dimension on may take a thread for every core.
LARGE = 2000
#: Where a user says how many threads there shall be; what is said there is left alone.
VARIABLES = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "BLIS_NUM_THREADS", "VECLIB_MAXIMUM_THREADS")
#: Says in the environment that the variables were set here, and not by the user.
OURS = "MULTIPLIERS_THREADS"


def one_thread() -> None:
    """Take one thread for each call of linear algebra, unless the user said otherwise.

    The libraries read the environment when they are loaded; in a process that has loaded them nothing is changed.
    """
    if "numpy" in sys.modules or any(name in os.environ for name in VARIABLES):
        return
    os.environ |= dict.fromkeys(VARIABLES, "1") | {OURS: "1"}


@contextmanager
def enough(largest: int) -> Iterator[None]:
    """Take a thread for every core inside, where the largest dense block is worth it and the user said nothing.

    Parameters
    ----------
    largest : int
        Dimension of the block.
    """
    if largest < LARGE or OURS not in os.environ:
        yield
        return
    from threadpoolctl import threadpool_limits

    with threadpool_limits(limits=os.cpu_count(), user_api="blas"):
        yield
