"""Tables for the docs, made from what they document: the Options of each kind and the result schema.

Floor: app.  `python -m maxent.app.reference PAGE` renews the tables of a page of the docs, between its
markers. Must not know: what the keys do.
"""

from __future__ import annotations

import json
import re
import sys
from collections.abc import Iterator
from dataclasses import MISSING, fields, is_dataclass
from importlib.resources import files
from pathlib import Path as File
from types import NoneType, UnionType
from typing import Any, Literal, Union, get_args, get_origin, get_type_hints

from maxent.app import kinds
from maxent.app.config import Header

__all__ = ["fields_table", "keys", "table", "update"]


def keys(options: type[Any], above: str = "") -> Iterator[tuple[str, str, str, str]]:
    """List the keys of a dataclass of options, those of its tables included.

    Parameters
    ----------
    options : dataclass
    above : str
        Name of the table that holds the keys.

    Yields
    ------
    tuple of str
        Key, what it takes, default ("needed" if there is none), meaning.
    """
    hints = get_type_hints(options)
    for entry in fields(options):
        hint = hints[entry.name]
        inner = [t for t in (hint, *get_args(hint)) if isinstance(t, type) and is_dataclass(t)]
        needed = entry.default is MISSING and entry.default_factory is MISSING
        default = "needed" if needed else _default(entry.default)
        yield above + entry.name, "table" if inner else _takes(hint), default, entry.metadata["help"]
        for table_type in inner:
            yield from keys(table_type, f"{above}{entry.name}.")


def table(name: str) -> str:
    """Write the table of keys of a kind, or of the keys common to all kinds ("every kind").

    Parameters
    ----------
    name : str

    Returns
    -------
    str
        Markdown.
    """
    options = Header if name == "every kind" else kinds.load(name).Options
    rows = [
        f"| `{key}` | {takes} | {default} | {text} |"
        for key, takes, default, text in keys(options)
    ]  # fmt: skip
    return "\n".join(["| key | takes | default | meaning |", "|---|---|---|---|", *rows])


def fields_table() -> str:
    """Write the table of the fields of `result.json`, from its schema.

    Returns
    -------
    str
        Markdown.
    """
    schema = json.loads(files("maxent.app").joinpath("schema/result.schema.json").read_text(encoding="utf-8"))
    rows = [f"| `{name}` | {text} |" for name, text in _fields(schema)]
    return "\n".join(["| field | meaning |", "|---|---|", *rows])


def update(page: str) -> str:
    """Renew the tables in a page, from `<!-- keys: NAME -->` or `<!-- fields -->` up to `<!-- end -->`.

    Parameters
    ----------
    page : str
        Markdown.

    Returns
    -------
    str
    """
    return re.sub(
        r"(<!-- (?:keys: ([a-z_ ]+)|fields) -->\n).*?(<!-- end -->)",
        lambda found: f"{found[1]}\n{table(found[2]) if found[2] else fields_table()}\n\n{found[3]}",
        page,
        flags=re.DOTALL,
    )


def _fields(schema: dict[str, Any], above: str = "") -> Iterator[tuple[str, str]]:
    for name, entry in schema["properties"].items():
        yield above + name, entry["description"]
        inner = entry.get("items", entry)
        if "properties" in inner:
            yield from _fields(inner, f"{above}{name}{'[]' if 'items' in entry else ''}.")


def _default(value: Any) -> str:
    if isinstance(value, bool):
        return f"`{str(value).lower()}`"
    return "–" if value is MISSING or value is None or value == "" else f"`{value}`"


def _takes(hint: Any) -> str:
    origin, inner = get_origin(hint), get_args(hint)
    if origin in (Union, UnionType):
        return " or ".join(_takes(t) for t in inner if t is not NoneType)
    if origin is Literal:
        return " or ".join(f'`"{word}"`' for word in inner)
    if origin is list and is_dataclass(inner[0]):
        return "list of tables"
    if origin is list:
        return f"list of ({_takes(inner[0])})" if get_origin(inner[0]) else f"list of {_takes(inner[0])}s"
    if origin is dict:
        return f"table: name = {_takes(inner[1])}"
    if is_dataclass(hint):
        return " or ".join(f"`{{{entry.name} = ...}}`" for entry in fields(hint))
    return {float: "number", int: "whole number", str: "text", bool: "true or false"}[hint]


if __name__ == "__main__":
    target = File(sys.argv[1])
    target.write_text(update(target.read_text(encoding="utf-8")), encoding="utf-8")
