"""One run: config in, folder with the result out; and the folder itself, which is there whole or not at all.

Floor: app.  The only module that looks at a clock or at versions of other programs.
Must not know: how to draw or print.
"""

from __future__ import annotations

import hashlib
import json
import os
import platform
import shutil
import sys
import time
from collections.abc import Callable, Mapping, Sequence
from contextlib import contextmanager, suppress
from dataclasses import asdict, dataclass
from importlib import metadata
from importlib.util import find_spec
from pathlib import Path as File
from typing import Any

from maxent.app.config import Config, complete, load, survey
from maxent.app.job import Job
from maxent.app.stopping import undisturbed
from maxent.app.threads import enough
from maxent.errors import ConfigError, ResourceError
from maxent.memory import size_text
from maxent.text import plural
from maxent.version import __version__

__all__ = ["Outcome", "check", "folder", "name", "sizes", "solve"]

Say = Callable[[str], None]


@dataclass(frozen=True)
class Outcome:
    """What a run left behind.

    Parameters
    ----------
    record : mapping
        The content of `result.json` (record.py).
    folder : pathlib.Path
        Where it was written.
    said : tuple of str
        What its user is to see beside it: seconds spent compiling, files that are missing and why.
    """

    record: Mapping[str, Any]
    folder: File
    said: tuple[str, ...] = ()


def solve(file: File, *, out: File | None, force: bool, driver: str | None, say: Say) -> Outcome:
    """Read a config, solve its problem and write the run folder.

    Parameters
    ----------
    file : pathlib.Path
        The config.
    out : pathlib.Path or None
        The run folder; None takes `runs/<name of the config>-<hash>`.
    force : bool
        Replace a run folder that is there already.
    driver : str or None
        "auto", "host" or "jax"; None takes what the config says.
    say : callable
        Receives lines of progress: what is being done now.

    Returns
    -------
    Outcome

    Raises
    ------
    ConfigError
        Bad config, or a folder that cannot be written; nothing is left behind then.
    """
    started, begun = time.time(), time.perf_counter()
    say(f"{file}: reading and building")
    config = load(file)
    asked = driver or config.header.driver
    if out is not None:
        _refuse_existing(out, force)
    job = survey(config)
    if job.expected:
        say("building: " + "; ".join(f"{key} {text}" for key, text in job.expected.items()))
    job = complete(config, job)
    seconds = {"build": time.perf_counter() - begun}
    target = out if out is not None else File("runs") / name(config, job, asked)
    with folder(target, force=force) as part, enough(_largest(job)):
        say(f"fit of {plural(len(job.targets), 'charge')} on {plural(job.size, job.unit)}")
        result, spent = _timed_fit(config, job, asked)
        seconds |= spent
        notes = job.remarks(result)
        sections, spent = _further(job, result)
        seconds |= spent
        from maxent.app.thermodynamics import section

        clock = time.perf_counter()
        say("thermodynamics")
        thermodynamics, seconds["thermodynamics"] = section(job, result, say), time.perf_counter() - clock
        series, quench = None, None
        if job.study is not None:
            from maxent.app import study

            clock = time.perf_counter()
            say("comparison with the long-time state")
            series = study.run(config, job.study, say)
            quench, seconds["quench"] = study.section(series), time.perf_counter() - clock
        from maxent.app.record import record as collect

        found = collect(
            config, job, result, asked_driver=asked, facts=sizes(job), versions=_versions(), notes=notes, quench=quench,
            sections=sections, thermodynamics=thermodynamics,
        )  # fmt: skip
        say("files, figures and report")
        said = _write(part, config, job, result, found, series)
        manifest = {
            "started": time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime(started)),
            "seconds": seconds | {"total": time.perf_counter() - begun},
            "command": sys.argv,
            "versions": found["versions"] | {"python": platform.python_version()},
            "machine": {
                "system": platform.system(),
                "processor": platform.machine(),
                "cores": os.cpu_count(),
            },
            "seed": None,
            "inputs": dict(job.digests),
            "files": {
                f.relative_to(part).as_posix(): hashlib.sha256(f.read_bytes()).hexdigest()
                for f in sorted(part.rglob("*"))
                if f.is_file()
            },
        }
        (part / "manifest.json").write_text(json.dumps(manifest, indent=2) + "\n", encoding="utf-8")
    if "compile" in seconds:
        said = (f"fit: {seconds['fit']:.2f} s, {seconds['compile']:.2f} s of them compiling", *said)
    return Outcome(found, target, said)


def check(file: File, *, say: Say = lambda line: None) -> tuple[Config, Job]:
    """Do everything but the fit and what only the fit needs: read, check, find targets, estimate sizes.

    Parameters
    ----------
    file : pathlib.Path
    say : callable, optional
        Receives lines of progress.

    Returns
    -------
    tuple of Config and Job
        A family that takes long is left out.

    Raises
    ------
    ConfigError
    """
    say(f"{file}: reading and estimating")
    config = load(file)
    return config, survey(config)


def name(config: Config, job: Job, driver: str) -> str:
    """Name a run folder: the config's name, and eight digits that change with all that may change the result.

    Parameters
    ----------
    config : Config
    job : Job
        Its input files count by content.
    driver : str

    Returns
    -------
    str
    """
    resolved = {
        "header": asdict(config.header) | {"driver": driver},
        "options": asdict(config.options),
        "inputs": dict(job.digests),
        "version": __version__,
    }
    digest = hashlib.sha256(json.dumps(resolved, sort_keys=True).encode()).hexdigest()
    return f"{config.file.stem}-{digest[:8]}"


@contextmanager
def folder(target: File, *, force: bool):
    """Give a temporary folder beside `target` that becomes `target` if all goes well, and vanishes otherwise.

    Parameters
    ----------
    target : pathlib.Path
        The folder to make.
    force : bool
        Replace an existing run folder; a folder that is no run folder is never replaced.

    Yields
    ------
    pathlib.Path
        The temporary folder.

    Raises
    ------
    ConfigError
        If it cannot be made, before any work is done; or if the disk fails later.
    """
    _refuse_existing(target, force)
    part = target.absolute().parent / f".{target.name}.part-{os.getpid()}"
    made: list[File] = []
    try:
        _make(part, target, made)
        yield part
        with undisturbed():
            _put(part, target)
    except BaseException as bad:
        with undisturbed():
            shutil.rmtree(part, ignore_errors=True)
            _remove_empty(made)
        if isinstance(bad, OSError):
            raise ConfigError(f"{target}: cannot be written: {bad.strerror or bad}") from bad
        raise


def _make(part: File, target: File, made: list[File]) -> None:
    """Make the temporary folder and the folders above it; each is noted before it is made."""
    try:
        for parent in reversed(part.parents):
            if not parent.exists():
                made.append(parent)
                parent.mkdir()
        part.mkdir()
    except OSError as bad:
        raise ConfigError(f"{target}: cannot write a folder here: {bad.strerror}") from None


def _put(part: File, target: File) -> None:
    """Rename the finished folder; an old one steps aside first and is removed last."""
    if not target.exists():
        part.rename(target)
        return
    old = part.with_name(f"{part.name}.old")
    target.rename(old)
    try:
        part.rename(target)
    except OSError:
        old.rename(target)
        raise
    shutil.rmtree(old)


def _refuse_existing(target: File, force: bool) -> None:
    try:
        there = target.exists() or target.is_symlink()
    except OSError as bad:
        raise ConfigError(f"{target}: cannot write a folder here: {bad.strerror}") from None
    if not there:
        return
    if not force:
        raise ConfigError(f"{target}: exists already; choose another folder with --out, or replace it with --force")
    if not (target / "manifest.json").is_file():
        raise ConfigError(f"{target}: exists and is no run folder; --force replaces run folders only")


def _remove_empty(made: list[File]) -> None:
    for parent in reversed(made):
        with suppress(OSError):  # never made, or someone else put something there
            parent.rmdir()


def _timed_fit(config: Config, job: Job, driver: str) -> tuple[Any, dict[str, float]]:
    """The result and its seconds; for the JAX driver, those spent compiling are told apart."""
    if driver != "jax":
        clock = time.perf_counter()
        result = _fit(config, job, driver)
        return result, {"fit": time.perf_counter() - clock}
    from maxent.app.compiling import counted

    with counted() as heard:
        result = _fit(config, job, driver)
    return result, {"fit": heard.total, "compile": heard.compile}


def _fit(config: Config, job: Job, driver: str) -> Any:
    import maxent

    try:
        return maxent.solve(
            job.family,
            job.asked(),
            accuracy={name: target.accuracy for name, target in job.targets.items()},
            driver=driver,
            explain=True,
        )
    except ResourceError as bad:
        raise config.error([((), str(bad))]) from bad


def _further(job: Job, result: Any) -> tuple[Sequence[Any], dict[str, float]]:
    """Further sections of the job and, where there are any, their seconds."""
    clock = time.perf_counter()
    sections = job.further(result)
    return sections, {"sections": time.perf_counter() - clock} if sections else {}


def _write(
    part: File, config: Config, job: Job, result: Any, record: Mapping[str, Any], series: Any
) -> tuple[str, ...]:
    """Write the files of a run; say which are missing for want of a package."""
    from maxent.app import arrays
    from maxent.app.record import dump

    (part / "config.toml").write_bytes(config.data)
    (part / "result.json").write_text(dump(record), encoding="utf-8")
    probabilities = getattr(result.state, "probabilities", None)
    arrays.write(part / "result.nc", record, probabilities=probabilities, labels=job.labels)
    if series is not None:
        from maxent.app.study import write_arrays

        write_arrays(part / "quench", series)
    drawn, written = find_spec("matplotlib") is not None, find_spec("jinja2") is not None
    figures = _figures(part, job, result, record, series) if drawn else ()
    if written:
        from maxent.app.report import render

        (part / "report.html").write_text(render(record, figures=figures), encoding="utf-8")
    missing = [] if drawn else ["no figures: they need the package matplotlib (pip install 'maxent-states[report]')"]
    if not written:
        missing.append("no report.html: it needs the package jinja2 (pip install 'maxent-states[report]')")
    return tuple(missing)


def _figures(part: File, job: Job, result: Any, record: Mapping[str, Any], series: Any) -> Any:
    from maxent.app.figures import draw

    figures = draw(result, labels=job.labels)
    if record["sections"]:
        from maxent.app.section_figures import draw as draw_sections

        figures += draw_sections(record["sections"])
    if series is not None:
        from maxent.app.study_figures import draw as draw_study

        figures += draw_study(series)
    if figures:
        (part / "figures").mkdir()
    for figure in figures:
        text = f'<?xml version="1.0" encoding="utf-8"?>\n{figure.svg}'
        (part / "figures" / f"{figure.name}.svg").write_text(text, encoding="utf-8")
    return figures


def _largest(job: Job) -> int:
    """Dimension of the largest matrix that is decomposed."""
    if job.unit != "state":
        return job.size if job.unit == "mode" else 0
    return max((a.shape[-1] for a in job.family.blocks.dense), default=0)


def _versions() -> dict[str, str]:
    """Versions of the libraries that do the arithmetic."""
    return {package: metadata.version(package) for package in ("numpy", "scipy", "jax")}


def sizes(job: Job) -> dict[str, str]:
    """Say what was built, how large it is and what a fit will need.

    Parameters
    ----------
    job : Job

    Returns
    -------
    dict of str to str
    """
    if job.unit != "state":
        return dict(job.facts)
    if job.family is None:
        return dict(job.facts) | dict(job.expected)
    blocks = job.family.blocks
    n_alone, dense = blocks.diagonal.shape[1], [a.shape[-1] for a in blocks.dense]
    if dense:
        structure = f"{plural(len(dense), 'block')} of states, the largest of {plural(max(dense), 'state')}"
        if n_alone:
            structure += f"; {plural(n_alone, 'further state')} on which the charges are numbers"
    else:
        structure = f"the charges commute: numbers on each of the {plural(n_alone, 'state')}"
    # the charges as given, whitened, and in the eigenbasis
    need = 3 * (blocks.diagonal.nbytes + sum(a.nbytes for a in blocks.dense))
    return dict(job.facts) | {"blocks": structure, "memory": f"about {size_text(need)} for the fit"}
