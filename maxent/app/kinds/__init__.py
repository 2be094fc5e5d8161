"""Kinds of configs, one file each; the file name is the `kind` in TOML.

A kind file holds `Options`, a frozen dataclass with one documented field per key, and
`build(options, folder) -> Job`.  A new kind is found by listing this folder; nothing else needs to be edited.
"""

from __future__ import annotations

from importlib import import_module
from pathlib import Path
from types import ModuleType

__all__ = ["load", "names"]


def names() -> list[str]:
    """List the kinds, in alphabetical order."""
    return sorted(p.stem for p in Path(__file__).parent.glob("*.py") if not p.stem.startswith("_"))


def load(name: str) -> ModuleType:
    """Import a kind.

    Parameters
    ----------
    name : str
        One of `names()`.
    """
    return import_module(f"maxent.app.kinds.{name}")
