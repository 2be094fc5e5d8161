"""The arrays of a result in NetCDF-3, an open format with named dimensions.

Floor: app.  Written by SciPy; holds no clock value, so the same result gives the same bytes.
Must not know: how the numbers came about.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path as File
from typing import Any

import numpy as np

from maxent.app import sections

__all__ = ["write"]


def write(file: File, record: Mapping[str, Any], *, probabilities: Any = None, labels: Sequence[str] = ()) -> None:
    """Write targets, values, multipliers, covariance, predictions, further sections and probabilities of a record.

    Parameters
    ----------
    file : pathlib.Path
        The file to write.
    record : mapping
        See record.py; null becomes NaN.
    probabilities : (n,) array or None
        Probabilities of the listed states, where the family has a list.
    labels : sequence of str
        Names of the listed states.
    """
    from scipy.io import netcdf_file

    charges = record["charges"]
    with netcdf_file(file, "w", version=2) as out:
        for key in ("schema", "verdict", "title"):
            setattr(out, key, record[key].encode())
        out.createDimension("charge", len(charges))
        out.createDimension("charge_other", len(charges))
        _names(out, "charge", [c["name"] for c in charges])
        for key, text in (
            ("target", "mean asked for"),
            ("value", "mean attained"),
            ("residual", "value - target"),
            ("multiplier", "lam in exp(-sum lam_j Q_j)/Z"),
            ("multiplier_sigma", "what the standard errors of the targets leave open"),
            ("multiplier_error", "what rounding and stated target accuracy leave open"),
        ):
            _numbers(out, key, ("charge",), [c[key] for c in charges], text)
        _numbers(out, "covariance", ("charge", "charge_other"), record["covariance"], "-d value/d multiplier")
        if record["predictions"]:
            out.createDimension("prediction", len(record["predictions"]))
            _names(out, "prediction", [p["name"] for p in record["predictions"]])
            _numbers(
                out,
                "prediction_value",
                ("prediction",),
                [p["value"] for p in record["predictions"]],
                "mean in the state found",
            )
        sections.write_arrays(out, record["sections"])
        if probabilities is not None:
            out.createDimension("state", len(probabilities))
            _numbers(out, "probability", ("state",), probabilities, "probability of each listed state")
            if labels:
                _names(out, "state", labels)


def _names(out: Any, dimension: str, names: Sequence[str]) -> None:
    """Write names as UTF-8 bytes, padded with zero bytes to one length."""
    data = [name.encode() for name in names]
    width = max(1, *map(len, data))
    out.createDimension(f"{dimension}_name_bytes", width)
    variable = out.createVariable(f"{dimension}_name", "c", (dimension, f"{dimension}_name_bytes"))
    variable[:] = np.array([list(d.ljust(width, b"\0")) for d in data], dtype=np.uint8).view("S1")


def _numbers(out: Any, name: str, dimensions: tuple[str, ...], values: Any, text: str) -> None:
    variable = out.createVariable(name, "d", dimensions)
    variable[:] = np.array(values, dtype=float)
    variable.long_name = text.encode()
