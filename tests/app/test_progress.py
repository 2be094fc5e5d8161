"""Progress of a run, and the threads it takes."""

import subprocess
import sys
import threading

from maxent.app.progress import Progress
from maxent.app.threads import LARGE


def test_the_newest_line_and_a_long_step_again_more_and_more_rarely():
    shown, seen = [], threading.Event()

    def show(line):
        shown.append(line)
        if len(shown) in (3, 4):
            seen.set()

    with Progress(show, every=0.01) as progress:
        progress("first step")
        assert seen.wait(10)
        seen.clear()
        progress("second step")
        assert seen.wait(10)
    progress("too late")
    first = [line for line in shown if line.startswith("first step")]
    assert first[:3] == ["first step", *["first step (0 s so far)"] * 2]
    assert shown[len(first)] == "second step" and "too late" not in shown


THREADS = """
import os
{before}
from maxent.app.threads import enough, one_thread
one_thread()
import numpy, scipy.linalg
from threadpoolctl import threadpool_info
count = lambda: {{lib["num_threads"] for lib in threadpool_info() if lib["user_api"] == "blas"}}
few = count()
with enough({large}):
    many = count()
with enough({large} - 1):
    assert count() == few
assert count() == few
print(few, many, os.cpu_count())
"""


def threads(before=""):
    code = "for n in list(os.environ):\n    if n.endswith('_THREADS'): del os.environ[n]\n" + before
    done = subprocess.run(
        [sys.executable, "-c", THREADS.format(before=code, large=LARGE)], capture_output=True, text=True, check=True
    )
    few, many, cores = done.stdout.replace("{", "").replace("}", "").split()
    return int(few), int(many), int(cores)


def test_one_thread_for_small_blocks_and_all_for_large_ones():
    few, many, cores = threads()
    assert few == 1 and many == cores


def test_what_the_user_says_is_left_alone():
    few, many, _ = threads("os.environ['OMP_NUM_THREADS'] = '1'\n")
    assert few == many == 1
