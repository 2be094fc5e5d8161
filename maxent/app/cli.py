"""The command `multipliers`: arguments in, tables out, exit codes.

Floor: app.  Results go to stdout, everything else to stderr.  Imports nothing but the standard library until
a command needs more, so that `--help` and config errors are quick.

Exit codes: 0 solved; 1 ran, the answer is no; 2 bad command line or config; 3 our fault; 130 interrupted, 143
terminated (128 and the number of the signal).
"""

from __future__ import annotations

import argparse
import os
import sys
from collections.abc import Callable, Sequence
from contextlib import AbstractContextManager, nullcontext
from pathlib import Path as File
from typing import Any

from maxent.app.stopping import Stopped, stoppable
from maxent.app.threads import one_thread
from maxent.errors import ConfigError
from maxent.version import __version__

__all__ = ["main"]

_CODES = """exit codes: 0 solved; 1 ran, the answer is no; 2 bad command line or config;
            3 our fault; 130 interrupted; 143 terminated"""


def parser() -> argparse.ArgumentParser:
    """Build the argument parser."""
    top = argparse.ArgumentParser(
        prog="multipliers",
        description="Find the Lagrange multipliers of a maximum-entropy state, or prove that there are none.",
        epilog=f"example: multipliers solve configs/xxz_ring_quench.toml\n\n{_CODES}",
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    top.add_argument("--version", action="version", version=f"multipliers {__version__}")
    commands = top.add_subparsers(dest="command", required=True, metavar="COMMAND")
    solve = commands.add_parser(
        "solve",
        help="find the multipliers and write a run folder",
        description="Solve the problem of a config; print the result and write a run folder.",
        epilog=f"example: multipliers solve configs/wolf_dice.toml --out runs/dice\n\n{_CODES}",
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    solve.add_argument("config", metavar="CONFIG", type=File, help="TOML file, see docs/config.md")
    solve.add_argument("--out", metavar="DIR", type=File, help="run folder (default: runs/<name of the config>-<hash>)")
    solve.add_argument("--json", action="store_true", help="print result.json instead of the table")
    solve.add_argument("--force", action="store_true", help="replace the run folder if it is there already")
    solve.add_argument(
        "--driver",
        choices=["auto", "host", "jax"],
        help="loop that does the fit (default: as the config says)",
    )
    solve.add_argument("--quiet", action="store_true", help="no progress on stderr")
    check = commands.add_parser(
        "check",
        help="everything but the fit: read, build, show sizes",
        description="Read a config, build its problem and show targets and sizes, without solving it.",
        epilog=f"example: multipliers check configs/wolf_dice.toml\n\n{_CODES}",
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    check.add_argument("config", metavar="CONFIG", type=File, help="TOML file, see docs/config.md")
    charges = commands.add_parser(
        "charges",
        help="find the local operators that a Hamiltonian conserves",
        description="Find the translation-invariant local operators that commute with the Hamiltonian of a config, up "
        "to a range and at infinite volume, and print them as charges that can be pasted into the config.",
        epilog=f"example: multipliers charges configs/xxz_ring_quench.toml --range 5\n\n{_CODES}",
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    charges.add_argument("config", metavar="CONFIG", type=File, help="TOML file of spins or fermions; docs/config.md")
    charges.add_argument("--range", metavar="N", type=_whole, default=4, help="most neighbouring sites (default: 4)")
    charges.add_argument(
        "--momentum",
        choices=["0", "pi", "both"],
        default="0",
        help="pi: operators whose sign alternates from cell to cell (default: 0)",
    )
    charges.add_argument("--json", action="store_true", help="print everything as JSON instead of the tables")
    charges.add_argument("--quiet", action="store_true", help="no progress on stderr")
    return top


def main(arguments: Sequence[str] | None = None) -> int:
    """Run a command.

    Parameters
    ----------
    arguments : sequence of str or None
        The command line; None takes the process's own.

    Returns
    -------
    int
        Exit code.
    """
    one_thread()
    try:
        given = parser().parse_args(arguments)
        with stoppable():
            return {"solve": _solve, "check": _check, "charges": _charges}[given.command](given)
    except ConfigError as bad:
        print(bad, file=sys.stderr)
        return 2
    except KeyboardInterrupt as stop:
        print("interrupted; nothing was written", file=sys.stderr)
        return stop.exit_code if isinstance(stop, Stopped) else 130
    except Exception:
        import traceback

        traceback.print_exc()
        print(
            f"This is a fault of multipliers {__version__}; please report it together with the lines above.",
            file=sys.stderr,
        )
        return 3


def _solve(given: argparse.Namespace) -> int:
    from maxent.app.run import solve

    with _progress(given.quiet) as say:
        outcome = solve(given.config, out=given.out, force=given.force, driver=given.driver, say=say)
    if not given.quiet:
        for line in (*outcome.said, f"wrote {outcome.folder}"):
            _log(line)
    from maxent.app.thermodynamics_words import every_failure

    for line in every_failure(outcome.record):
        _log(line)
    if given.json:
        from maxent.app.record import dump

        _show(dump(outcome.record))
    else:
        from maxent.app.words import summary

        _show(summary(outcome.record) + "\n")
    return 0 if outcome.record["success"] else 1


def _check(given: argparse.Namespace) -> int:
    from maxent.app.run import check, sizes
    from maxent.text import number, table

    with _progress(quiet=False) as say:
        config, job = check(given.config, say=say)
    rows = [
        (name, number(t.value, 12), number(t.sigma, 2), number(t.accuracy, 3), t.source)
        for name, t in job.targets.items()
    ]
    parts = [
        f"{config.file}: good; kind {config.header.kind}",
        table(sizes(job).items()),
        table(rows, ("charge", "target", "sigma", "accuracy", "source"), right=[1, 2, 3]),
    ]
    _show("\n\n".join(parts) + "\n")
    return 0


def _charges(given: argparse.Namespace) -> int:
    from maxent.app.charges import search, summary

    momenta: Any = ("0", "pi") if given.momentum == "both" else (given.momentum,)
    with _progress(given.quiet) as say:
        found = search(given.config, given.range, momenta, say=say)
    if given.json:
        from maxent.app.record import dump

        _show(dump(found))
    else:
        _show(summary(found) + "\n")
    return 0


def _whole(text: str) -> int:
    """Read a whole number from 1 on."""
    if not text.isdecimal() or int(text) < 1:
        raise argparse.ArgumentTypeError(f"expected a whole number from 1 on, got {text!r}")
    return int(text)


def _show(text: str) -> None:
    """Write to stdout; a reader that went away (`| head`) is no fault and changes no exit code."""
    try:
        sys.stdout.write(text)
        sys.stdout.flush()
    except BrokenPipeError:
        # whatever Python still wants to flush at its end must go somewhere
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _progress(quiet: bool) -> AbstractContextManager[Callable[[str], None]]:
    from maxent.app.progress import Progress

    return nullcontext(lambda line: None) if quiet else Progress(_log)


def _log(line: str) -> None:
    print(line, file=sys.stderr)
