"""Parameters of formulas: which names and values are usable.

Floor: lattice (NumPy). Must not know operators or positions.
"""

from __future__ import annotations

import keyword
from collections.abc import Iterable, Mapping
from numbers import Number
from typing import Any

import numpy as np

from maxent.lattice.coefficients import Value

#: Names that formulas use for running subscripts: as a parameter one would silently turn a sum into a fixed position.
RUNNING = ("i", "j")


def check_parameter(name: str, value: Any) -> Value:
    """Bring the value of a parameter into its kept form.

    Parameters
    ----------
    name : str
        Used in messages.
    value : number, or sequence of numbers
        One value, or one value per position.

    Returns
    -------
    float, complex, or tuple of these
        Complex only where an imaginary part is not zero.

    Raises
    ------
    TypeError, ValueError
        When it is no number, no flat list of numbers, an empty list, or not finite.
    """
    if isinstance(value, Number) and not isinstance(value, bool):
        return _check_number(name, value)
    if isinstance(value, list | tuple | np.ndarray) and np.ndim(value) == 1:
        if len(value) == 0:
            raise ValueError(f"parameter '{name}' is an empty list")
        numbers = []
        for k, entry in enumerate(value):
            if not isinstance(entry, Number) or isinstance(entry, bool):
                raise TypeError(f"parameter '{name}[{k}]' must be a number, not {entry!r}")
            numbers.append(_check_number(f"{name}[{k}]", entry))
        return tuple(numbers)
    if isinstance(value, np.ndarray) and value.ndim == 0:
        return check_parameter(name, value[()])
    raise TypeError(f"parameter '{name}' must be a number or a list of numbers, not {value!r}")


def is_complex(value: Value) -> bool:
    """Whether a checked value has an imaginary part anywhere."""
    return any(isinstance(v, complex) for v in (value if isinstance(value, tuple) else (value,)))


def _check_number(name: str, value: Any) -> float | complex:
    number = complex(value)
    if not np.isfinite(number):
        raise ValueError(f"parameter '{name}' is not finite: {value}")
    return number.real if number.imag == 0 else number


def check_parameters(parameters: Mapping[str, Any] | None, taken: Iterable[str]) -> dict[str, Value]:
    """Check all parameters of a formula.

    Parameters
    ----------
    parameters : mapping from str to value, optional
        See `check_parameter`.
    taken : iterable of str
        Names the language itself uses.

    Returns
    -------
    dict from str to value

    Raises
    ------
    TypeError, ValueError
        When a name or a value is not usable.
    """
    checked = {}
    for name, value in (parameters or {}).items():
        check_name("parameter", name, taken)
        checked[name] = check_parameter(name, value)
    return checked


def check_name(kind: str, name: object, taken: Iterable[str]) -> None:
    """Refuse a name that a formula could not use.

    Raises
    ------
    ValueError
        When it is no plain name, or the language already gives it a meaning, or it is a running subscript.
    """
    if (
        not isinstance(name, str)
        or not name.isidentifier()
        or keyword.iskeyword(name)
        or name.startswith("_")
    ):
        raise ValueError(f"{kind} name {name!r} is not usable: letters, digits and inner underscores only")
    if name in taken:
        raise ValueError(f"{kind} name '{name}' already has a meaning in formulas")
    if name in RUNNING:
        raise ValueError(f"{kind} name '{name}' is a running subscript in formulas; choose another name")
