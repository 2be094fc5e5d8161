"""Runs that are asked to stop, by any signal and at any moment, leave nothing half-written."""

import os
import shutil
import signal
import subprocess
import sys
import threading
import time

import pytest

from maxent.app import stopping
from maxent.app.run import folder
from maxent.app.stopping import Stopped, stoppable, undisturbed

#: Enough work for any moment: the fit and the comparison of twelve sites.
LONG = """kind = "spins"
[sites]
geometry = "ring"
size = 12
[charges]
energy = "Sx[i]*Sx[i+1] + Sy[i]*Sy[i+1] + 1.5*Sz[i]*Sz[i+1] + 0.3*Sx[i]"
[targets]
energy = "from start"
[start]
theta = 0.4
[quench]
"""


def begun(base):
    """The hidden folder of a run that is at work."""
    return [p for p in base.rglob(".*.part-*") if p.is_dir()]


@pytest.mark.parametrize(
    ("number", "code", "wait"),
    [(signal.SIGTERM, 143, 0.0), (signal.SIGTERM, 143, 0.7), (signal.SIGHUP, 129, 0.3), (signal.SIGINT, 130, 0.0)],
)
def test_a_run_that_is_stopped_leaves_no_folder(tmp_path, number, code, wait):
    (tmp_path / "long.toml").write_text(LONG)
    # under nohup the signal would be inherited as ignored
    heard = f"import signal, sys; signal.signal({int(number)}, signal.SIG_DFL); from maxent.app.cli import main; "
    command = [sys.executable, "-c", f"{heard}sys.exit(main(sys.argv[1:]))", "solve", "long.toml", "--out", "deep/run"]
    with subprocess.Popen([*command, "--quiet"], cwd=tmp_path, stderr=subprocess.PIPE, text=True) as run:
        end = time.monotonic() + 60
        while not begun(tmp_path) and run.poll() is None and time.monotonic() < end:
            time.sleep(0.002)
        assert begun(tmp_path)
        time.sleep(wait)
        run.send_signal(number)
        said = run.communicate(timeout=60)[1]
    assert run.returncode == code
    assert said == "interrupted; nothing was written\n"
    assert os.listdir(tmp_path) == ["long.toml"]


def test_a_second_signal_does_not_stop_the_tidying(tmp_path, monkeypatch):
    remove = shutil.rmtree

    def slow(part, **options):
        os.kill(os.getpid(), signal.SIGTERM)
        remove(part, **options)

    monkeypatch.setattr("maxent.app.run.shutil.rmtree", slow)
    with pytest.raises(Stopped) as caught, stoppable(), folder(tmp_path / "run", force=False) as part:
        (part / "half.txt").write_text("half")
        os.kill(os.getpid(), signal.SIGTERM)
        time.sleep(1)
        pytest.fail("not stopped")
    assert caught.value.exit_code == 143
    assert os.listdir(tmp_path) == []


def test_handlers_are_put_back_and_what_was_ignored_stays_ignored():
    before = [signal.getsignal(n) for n in stopping._SIGNALS]
    signal.signal(signal.SIGHUP, signal.SIG_IGN)
    try:
        with stoppable():
            os.kill(os.getpid(), signal.SIGHUP)
            assert signal.getsignal(signal.SIGHUP) == signal.SIG_IGN
            assert signal.getsignal(signal.SIGTERM) not in before
        assert signal.getsignal(signal.SIGTERM) == before[1]
    finally:
        signal.signal(signal.SIGHUP, before[2])
    with stoppable(), undisturbed():
        os.kill(os.getpid(), signal.SIGTERM)
    assert [signal.getsignal(n) for n in stopping._SIGNALS] == before


def test_outside_the_main_thread_nothing_is_changed():
    found = []

    def run():
        with stoppable():
            found.append(signal.getsignal(signal.SIGTERM))

    thread = threading.Thread(target=run)
    thread.start()
    thread.join()
    assert found == [signal.getsignal(signal.SIGTERM)]
