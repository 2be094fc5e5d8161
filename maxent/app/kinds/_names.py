"""Names and values of the parameters and densities of a config, before any formula is read with them.

Floor: app.
Must not know: what the formulas say.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any

from maxent.app.job import Problems

__all__ = ["check_names"]


def check_names(sites: Any, parameters: Mapping[str, Any], densities: Iterable[str], problems: Problems) -> None:
    """Refuse what no formula on such sites could use.

    Raises
    ------
    BadInput
        With all problems so far, when there are any: no formula can be read beside such a name.
    """
    from maxent.lattice.grammar import reserved_names
    from maxent.lattice.parameters import check_name, check_parameters

    taken = reserved_names(sites)
    for name, value in parameters.items():
        try:
            check_parameters({name: value}, taken)
        except ValueError as bad:
            problems.add(("parameters", name), str(bad))
    for name in densities:
        try:
            check_name("density", name, taken)
        except ValueError as bad:
            problems.add(("densities", name), str(bad))
        if name in parameters:
            problems.add(("densities", name), f"'{name}' is both a parameter and a density")
    problems.raise_any()
