"""Dataclasses as JAX pytrees, without importing JAX before anybody needs it.

A fit on the host never touches JAX, whose import costs as much as the fit of a ring.  Classes are marked here; the
marks are handed to JAX when it is there already, or by `announce` as soon as a module that uses it is imported.
Floor: core.
"""

from __future__ import annotations

import sys
from dataclasses import fields
from typing import Any, TypeVar

__all__ = ["announce", "register"]

T = TypeVar("T")

_waiting: list[tuple[type, tuple[str, ...], tuple[str, ...]]] = []


class _Held:
    """Something that rides along in a pytree without being an array; equal to itself alone."""

    def __init__(self, value: Any):
        self.value = value

    def __eq__(self, other: object) -> bool:
        return isinstance(other, _Held) and other.value is self.value

    def __hash__(self) -> int:
        return id(self.value)


def register(*static: str, held: tuple[str, ...] = ()) -> Any:
    """Class decorator: make a dataclass a pytree whose fields are leaves.

    Fields named `static` are compared by value, those `held` (sparse matrices, Python objects) by identity.
    """

    def apply(cls: type[T]) -> type[T]:
        _waiting.append((cls, static, held))
        if "jax" in sys.modules:
            announce()
        return cls

    return apply


def announce() -> None:
    """Hand all classes that wait to JAX; imports it."""
    import jax

    while _waiting:
        cls, static, held = _waiting.pop()
        jax.tree_util.register_pytree_node(cls, *_both_ways(cls, static, held))


def _both_ways(cls: type, static: tuple[str, ...], held: tuple[str, ...]) -> tuple[Any, Any]:
    """How to take an instance apart and how to rebuild it.

    Rebuilding sets the fields and nothing else: constructors validate, and a trace has nothing to validate.
    """
    leaves = [f.name for f in fields(cls) if f.name not in static + held]

    def take_apart(x: Any) -> tuple[list[Any], tuple[Any, ...]]:
        aux = (*(getattr(x, n) for n in static), *(_Held(getattr(x, n)) for n in held))
        return [getattr(x, n) for n in leaves], aux

    def rebuild(aux: tuple[Any, ...], children: Any) -> Any:
        x: Any = object.__new__(cls)
        for name, value in (*zip(leaves, children, strict=True), *zip(static + held, aux, strict=True)):
            object.__setattr__(x, name, value.value if isinstance(value, _Held) else value)
        return x

    return take_apart, rebuild
