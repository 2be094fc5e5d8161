"""The comparison that `[quench]` asks for: run it for every size, keep it as plain data and as arrays.

Floor: app.  Computing is done by `maxent.quench`, sentences are made by `study_words`.
Must not know: HTML, figures, the terminal.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path as File
from typing import Any

import numpy as np

from maxent.app import study_words
from maxent.app.config import Config
from maxent.app.job import BadInput, Study
from maxent.errors import ResourceError

__all__ = ["run", "section", "write_arrays"]


def run(config: Config, study: Study, say: Callable[[str], None]) -> Any:
    """Compare for every size.

    Parameters
    ----------
    config : Config
        For the lines of errors.
    study : Study
    say : callable
        Receives lines of progress.

    Returns
    -------
    SizeSeries

    Raises
    ------
    ConfigError
        What only the calculation can tell, in one line with the numbers.
    """
    from maxent.quench import compare, compare_gaussian
    from maxent.quench.sizes import size_series

    try:
        make = compare_gaussian if study.gaussian else compare
        return size_series(study.build, study.sizes, make=make, progress=say)
    except BadInput as bad:
        raise config.error(bad.problems) from bad
    except ResourceError as bad:
        key = "size" if len(study.sizes) == 1 else "sizes"
        raise config.error([(("sites", key), str(bad))]) from bad
    except (TypeError, ValueError) as bad:
        raise config.error([(("quench",), str(bad))]) from bad


def section(series: Any) -> dict[str, Any]:
    """The entry `quench` of a record.

    Parameters
    ----------
    series : SizeSeries

    Returns
    -------
    dict
        JSON-ready.
    """
    found: dict[str, Any] = {
        "sizes": [int(n) for n in series.sizes],
        "statements": list(series.statements),
        "comparisons": [c.to_dict() | {"best": c.best()} for c in series.comparisons],
    }
    return {"verdict": study_words.verdict(found), **found}


def write_arrays(folder: File, series: Any) -> None:
    """Write traces in time and single eigenstates or levels of free particles, `size-8.nc` for 8 sites, as NetCDF-3.

    Parameters
    ----------
    folder : pathlib.Path
        Made if it is not there.
    series : SizeSeries
    """
    from scipy.io import netcdf_file

    folder.mkdir(exist_ok=True)
    for c in series.comparisons:
        with netcdf_file(folder / f"size-{c.size}.nc", "w", version=2) as out:
            out.hamiltonian, out.start = c.hamiltonian.encode(), c.start_label.encode()
            names = list(c.truth)
            if names:
                out.observables = "\n".join(names).encode()
            if len(c.times):
                out.createDimension("time", len(c.times))
                _line(out, "time", "time", c.times, "time, in units of 1/energy")
                for k, name in enumerate(names):
                    _line(out, f"trace_{k}", "time", c.traces[name], f"mean of {name} in time")
            if c.modes:
                out.createDimension("mode", len(c.modes["energy"]))
                _line(out, "mode_energy", "mode", c.modes["energy"], "energies of the single-particle levels")
                _line(out, "mode_occupation", "mode", c.modes["occupation"], "their mean occupations, at all times")
                text = "their multipliers in the complete generalised state"
                _line(out, "mode_multiplier", "mode", c.modes["multiplier"], text)
            if c.levels:
                out.createDimension("level", len(c.levels["energy"]))
                _line(out, "energy", "level", c.levels["energy"], "energies in the sector of the start")
                _line(out, "weight", "level", c.levels["weight"], "weight of each eigenstate in the start")
                for k, name in enumerate(names):
                    _line(out, f"eigenstate_{k}", "level", c.levels[name], f"mean of {name} in each eigenstate")
            for s, test in enumerate(() if c.eigenstate_tests is None else c.eigenstate_tests.sectors):
                _tested(out, s, test, names)


def _tested(out: Any, number: int, test: Any, names: list[str]) -> None:
    """Deviations of the eigenstates of a sector that was tested."""
    found = [*test.scatter.values(), *test.distances.values()]
    if not found:
        return
    dimension = f"tested_{number}"
    out.createDimension(dimension, len(found[0].energies))
    where = ", ".join(f"{n} = {x:g}" for n, x in test.sector.items()) or "all states"
    _line(out, f"tested_energy_{number}", dimension, found[0].energies, f"energies of eigenstates tested in {where}")
    for name, scatter in test.scatter.items():
        text = f"{name} minus its running mean"
        _line(out, f"tested_{number}_deviation_{names.index(name)}", dimension, scatter.deviations, text)
    for block, scatter in test.distances.items():
        text = f"trace distance of a block of size {block} from the window"
        _line(out, f"tested_{number}_distance_{block}", dimension, scatter.deviations, text)


def _line(out: Any, name: str, dimension: str, values: Any, text: str) -> None:
    variable = out.createVariable(name, "d", (dimension,))
    variable[:] = np.asarray(values, dtype=float)
    variable.long_name = text.encode()
