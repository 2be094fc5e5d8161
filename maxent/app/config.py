"""Read a config: TOML in, checked options out, or every problem at once as `file:line: key: text`.

Floor: app.  The kind named in the file decides which keys exist (`maxent/app/kinds/`, one file per kind).
Keys are checked against the kind's `Options` by pydantic in strict mode; names shared by all kinds (charges,
targets, accuracy) and infinite numbers are checked here. Must not know: lattices, families, how a problem is
solved.
"""

from __future__ import annotations

import json
import math
import re
import sys
import tomllib
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path as File
from typing import Any, Literal

from maxent.app import kinds
from maxent.app.job import STRICT, BadInput, Job, Problems, says
from maxent.app.locate import Path, Positions, locate, repeated
from maxent.errors import ConfigError, ResourceError
from maxent.text import listing, suggestion

__all__ = ["Config", "Header", "build", "load"]

_OPEN = {"log_weights", "log_prior"}  # where -inf is a value: it drops a state


@dataclass(frozen=True)
class Header:
    """Keys on top of every config, whatever its kind."""

    __pydantic_config__ = STRICT

    kind: str = field(metadata=says("What the config describes; decides which further keys exist."))
    title: str = field(default="", metadata=says("One line for the head of the report."))
    driver: Literal["auto", "host", "jax"] = field(
        default="auto",
        metadata=says("Which loop does the fit; the command line option `--driver` wins over it."),
    )


@dataclass(frozen=True)
class Config:
    """A config that was read and checked.

    Parameters
    ----------
    file : pathlib.Path
        Where it was read.
    data : bytes
        The file as given.
    header : Header
        Keys common to all kinds.
    options : Options of the kind
        Everything else.
    positions : Positions
        Lines of the keys, for problems found later.
    """

    file: File
    data: bytes
    header: Header
    options: Any
    positions: Positions

    def error(self, problems: list[tuple[Path, str]]) -> ConfigError:
        """Turn problems found later into an error with lines."""
        return _error(self.file, self.positions, problems)


def load(file: File) -> Config:
    """Read and check a config file.

    Parameters
    ----------
    file : pathlib.Path

    Returns
    -------
    Config

    Raises
    ------
    ConfigError
        With one line `file:line: key: text` per problem, all problems at once.
    """
    data = _bytes(file)
    text = _text(file, data)
    table = _parse(file, text)
    positions = locate(text)
    problems = Problems()
    header_table, rest, options_type = _split(table, problems)
    header = _validate(Header, header_table, problems)
    options = None
    if options_type is not None:
        options = _validate(options_type, rest, problems)
        _check_finite(rest, problems)
        _check_names(rest, problems)
    if problems.found:
        raise _error(file, positions, problems.found)
    return Config(file, data, header, options, positions)


def build(config: Config) -> Job:
    """Build the problem that a config describes.

    Parameters
    ----------
    config : Config

    Returns
    -------
    Job

    Raises
    ------
    ConfigError
        For whatever only building can tell: formulas, files, sizes; one line each.
    """
    return complete(config, survey(config))


def survey(config: Config) -> Job:
    """Check everything and find the targets, as `build` does, but leave out a family that would take long.

    Parameters
    ----------
    config : Config

    Returns
    -------
    Job
        For `complete`.

    Raises
    ------
    ConfigError
    """
    return _told(config, lambda: kinds.load(config.header.kind).build(config.options, config.file.parent))


def complete(config: Config, job: Job) -> Job:
    """Build what `survey` left out.

    Parameters
    ----------
    config : Config
    job : Job

    Returns
    -------
    Job

    Raises
    ------
    ConfigError
    """
    return job if job.prepare is None else _told(config, job.prepare)


def _told(config: Config, make: Callable[[], Job]) -> Job:
    try:
        return make()
    except BadInput as bad:
        raise config.error(bad.problems) from bad
    except ResourceError as bad:
        raise config.error([((), str(bad))]) from bad


def _bytes(file: File) -> bytes:
    try:
        return file.read_bytes()
    except FileNotFoundError:
        raise ConfigError(f"{file}: no such file") from None
    except IsADirectoryError:
        raise ConfigError(f"{file}: a folder, not a config file") from None
    except OSError as bad:
        raise ConfigError(f"{file}: cannot be read: {bad.strerror}") from None


def _text(file: File, data: bytes) -> str:
    try:
        return data.decode()
    except UnicodeDecodeError as bad:
        line = data.count(b"\n", 0, bad.start) + 1
        raise ConfigError(f"{file}:{line}: not UTF-8 text") from None


def _parse(file: File, text: str) -> dict[str, Any]:
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as bad:
        again = repeated(text)
        if again is not None:
            path, line, first = again
            raise ConfigError(f"{file}:{line}: {_key(path)}: defined twice; first on line {first}") from None
        found = re.search(r"^(.*) \(at (?:line (\d+), column (\d+)|end of document)\)$", str(bad))
        what = found[1] if found else str(bad)
        lines = text.rstrip("\n").count("\n") + 1
        if found and found[2]:
            line, where = int(found[2]), f"not TOML at column {found[3]}: {_lower(what)}"
        else:
            line, where = lines, f"the file ends too early: {_lower(what)}"
        key = _key(locate(text).last_before(line))
        raise ConfigError(f"{file}:{line}: {key + ': ' if key else ''}{where}") from None


def _split(table: dict[str, Any], problems: Problems) -> tuple[dict[str, Any], dict[str, Any], type[Any] | None]:
    """Part the common keys from those of the kind, and find the kind's Options."""
    common = set(Header.__dataclass_fields__)
    header = {k: v for k, v in table.items() if k in common}
    rest = {k: v for k, v in table.items() if k not in common}
    kind = table.get("kind")
    known = kinds.names()
    if isinstance(kind, str) and kind not in known:
        problems.add(
            ("kind",),
            f"unknown kind {kind!r}{suggestion(kind, known) or f'; expected {listing(known)}'}",
        )
    if kind not in known:
        return header, rest, None
    return header, rest, kinds.load(kind).Options


def _validate(options: type[Any], table: dict[str, Any], problems: Problems) -> Any:
    """Check a table against a dataclass; collect what is wrong in our own words."""
    from pydantic import TypeAdapter, ValidationError

    try:
        return TypeAdapter(options).validate_json(json.dumps(table, default=str))
    except ValidationError as bad:
        found = bad.errors(include_url=False)
    grouped: dict[Path, list[Any]] = {}
    for entry in found:
        grouped.setdefault(_real_path(entry, table), []).append(entry)
    for path, entries in grouped.items():
        deeper = any(len(other) > len(path) and other[: len(path)] == path for other in grouped)
        if not deeper:  # a bad member of a list says more than "not text" about the whole list
            problems.add(path, _explain(path, entries, options, table))
    return None


def _real_path(entry: Any, table: Any) -> Path:
    """Drop from a pydantic location what is not a key or an index of the table (names of union members)."""
    path: Path = ()
    here: Any = table
    for step in entry["loc"]:
        inside = step in here if isinstance(here, dict) else isinstance(here, list) and isinstance(step, int)
        if inside:
            here = here[step]
            path += (step,)
    if entry["type"] in ("missing", "missing_argument"):
        path += (entry["loc"][-1],)
    return path


_WANTED = {
    "float_type": "a number",
    "float_parsing": "a number",
    "int_type": "a whole number",
    "int_from_float": "a whole number",
    "int_parsing": "a whole number",
    "string_type": "text",
    "bool_type": "true or false",
    "list_type": "a list",
    "dict_type": "a table",
    "dataclass_type": "a table",
}


def _explain(path: Path, entries: list[Any], options: type[Any], table: dict[str, Any]) -> str:
    kind = entries[0]["type"]
    if kind in ("missing", "missing_argument"):
        return "missing"
    if kind in ("unexpected_keyword_argument", "extra_forbidden"):
        return f"unknown key{suggestion(str(path[-1]), _neighbours(path, options))}"
    value = _value(table, path)
    wanted: list[str] = []
    words: list[str] = []
    for entry in entries:
        if entry["type"] == "dataclass_type" and len(entries) > 1:
            continue  # a table is one way of several; the plain ones are what was probably meant
        if entry["type"] == "literal_error":
            words += re.findall(r"'([^']*)'", entry["ctx"]["expected"])
        else:
            name = _WANTED.get(entry["type"], _lower(entry["msg"]))
            if name not in wanted:
                wanted.append(name)
    hint = suggestion(value, words) if isinstance(value, str) else ""
    return f"expected {listing(wanted + [repr(w) for w in words])}, got {_show(value)}{hint}"


def _neighbours(path: Path, options: type[Any]) -> list[str]:
    """Keys that would have been known where `path` ends."""
    from typing import get_args, get_type_hints

    here: Any = options
    for step in path[:-1]:
        if here is not options and str(step) not in getattr(here, "__dataclass_fields__", {}):
            continue  # the name of an entry, such as a charge
        hint = get_type_hints(here).get(str(step)) if hasattr(here, "__dataclass_fields__") else None
        choices = [hint, *get_args(hint), *(inner for part in get_args(hint) for inner in get_args(part))]
        here = next((c for c in choices if hasattr(c, "__dataclass_fields__")), None)
    known = list(getattr(here, "__dataclass_fields__", ()))
    return known + list(Header.__dataclass_fields__) if len(path) == 1 else known


def _check_finite(table: dict[str, Any], problems: Problems) -> None:
    for path, value in _leaves(table):
        if isinstance(value, float) and not math.isfinite(value):
            if value == -math.inf and path[0] in _OPEN:
                continue
            problems.add(path, f"expected a finite number, got {value}")
        elif isinstance(value, int) and abs(value) > sys.float_info.max:
            problems.add(path, "a whole number too large to calculate with")


def _check_names(table: dict[str, Any], problems: Problems) -> None:
    """Check what charges, targets and accuracy have to do with one another, for every kind alike."""
    charges = table.get("charges")
    if not isinstance(charges, dict):
        return  # reported by the types already
    if not charges:
        problems.add(("charges",), "no charges; at least one is needed")
    for section in ("charges", "predictions"):
        names = table.get(section)
        if isinstance(names, dict) and any(not name.strip() for name in names):
            problems.add((section,), "an empty name")
    targets = table.get("targets")
    if isinstance(targets, dict):
        for name in targets:
            if name not in charges:
                problems.unknown(("targets", name), "no charge has this name", charges)
        for name in charges:
            if name not in targets:
                problems.add(("charges", name), "no target for this charge; add it to [targets]")
    accuracy = table.get("accuracy")
    if isinstance(accuracy, dict):
        for name, value in accuracy.items():
            if name not in charges:
                problems.unknown(("accuracy", name), "no charge has this name", charges)
            if isinstance(value, (int, float)) and value < 0:
                problems.add(("accuracy", name), f"must not be negative, got {value}")


def _leaves(value: Any, path: Path = ()) -> Iterator[tuple[Path, Any]]:
    if isinstance(value, dict):
        for key, inner in value.items():
            yield from _leaves(inner, (*path, key))
    elif isinstance(value, list):
        for index, inner in enumerate(value):
            yield from _leaves(inner, (*path, index))
    else:
        yield path, value


def _error(file: File, positions: Positions, problems: list[tuple[Path, str]]) -> ConfigError:
    lines = []
    for path, text in sorted(problems, key=lambda p: positions.line(p[0])):
        key = _key(path)
        lines.append(f"{file}:{positions.line(path)}: {key + ': ' if key else ''}{text}")
    return ConfigError("\n".join(dict.fromkeys(lines)))


def _key(path: Path) -> str:
    """Write a path as TOML writes it, with list indices in brackets."""
    out = ""
    for step in path:
        if isinstance(step, int):
            out += f"[{step}]"
        else:
            plain = re.fullmatch(r"[A-Za-z0-9_-]+", step)
            out += ("." if out else "") + (step if plain else json.dumps(step, ensure_ascii=False))
    return out


def _value(table: Any, path: Path) -> Any:
    for step in path:
        table = table[step]
    return table


def _show(value: Any) -> str:
    if isinstance(value, (dict, list)):
        return "a table" if isinstance(value, dict) else "a list"
    if isinstance(value, str):
        return f"the text {value[:40]!r}"
    return str(value).lower() if isinstance(value, bool) else str(value)


def _lower(text: str) -> str:
    return text[:1].lower() + text[1:]
