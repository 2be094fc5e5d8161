"""A result in the forms other tools expect: SciPy's, xarray's, a notebook's.  Floor: diagnose.

Takes any result by its public fields.  Must not know: files, the clock; xarray is imported only when it is asked for.
"""

from __future__ import annotations

import html
from typing import Any

import numpy as np

from maxent.core.contract import Verdict
from maxent.text import number, with_error

__all__ = ["STATUS", "to_dataset", "to_html", "to_scipy"]

#: Status of `to_scipy`, in SciPy's manner: 0 is success.
STATUS = {
    Verdict.SOLVED: 0, Verdict.BOUNDARY: 1, Verdict.UNATTAINED: 2, Verdict.INFEASIBLE: 3, Verdict.INCONSISTENT: 4,
    Verdict.UNFINISHED: 5,
}  # fmt: skip

_COLOUR = {Verdict.SOLVED: "#1a6b45", Verdict.BOUNDARY: "#8a5a00", Verdict.UNATTAINED: "#8a5a00"}


def to_scipy(result: Any) -> Any:
    """`scipy.optimize.OptimizeResult` of the minimisation of the dual; see `Result.to_scipy`."""
    from scipy.optimize import OptimizeResult

    vector = lambda values: np.array([values[n] for n in result.names], float)
    lam = vector(result.multipliers)
    return OptimizeResult(
        x=lam,
        fun=float(result.log_partition + lam @ vector(result.targets)),
        jac=-vector(result.residuals),
        hess=result.covariance.copy(),
        nit=result.iterations,
        success=result.success,
        status=STATUS[result.verdict],
        message=f"{result.verdict}: {result.message}",
    )


def to_dataset(result: Any) -> Any:
    """`xarray.Dataset` with the names of the charges as coordinates; see `Result.to_dataset`."""
    try:
        import xarray
    except ImportError as missing:
        raise ImportError("to_dataset needs the package xarray (pip install 'maxent-states[labelled]')") from missing
    names = list(result.names)
    columns = {
        "target": (result.targets, "mean asked for"),
        "value": (result.values, "mean attained"),
        "residual": (result.residuals, "value - target"),
        "multiplier": (result.multipliers, "lam in exp(-sum lam_j Q_j)/Z"),
        "multiplier_error": (result.multiplier_errors, "what rounding and stated target accuracy leave open"),
    }
    data: dict[str, Any] = {
        key: (("charge",), np.array([values[n] for n in names], float), {"long_name": text})
        for key, (values, text) in columns.items()
    }
    about = {"long_name": "-d value/d multiplier"}
    data["covariance"] = (("charge", "charge_other"), result.covariance.copy(), about)
    data["entropy"] = ((), result.entropy, {"units": "nat"})
    data["log_partition"] = ((), result.log_partition, {})
    about = {"verdict": str(result.verdict), "evidence": result.evidence, "message": result.message}
    return xarray.Dataset(data, coords={"charge": names, "charge_other": names}, attrs=about)


def to_html(result: Any) -> str:
    """Verdict, message and the table of charges for a notebook: escaped, without ids, script or figures."""
    text = lambda x: html.escape(str(x))
    cell = lambda x: f'<td style="text-align:right">{text(x)}</td>'
    rows = []
    for n in result.names:
        cells = [
            number(result.targets[n], 12), number(result.values[n], 12), number(result.residuals[n], 2),
            with_error(result.multipliers[n], result.multiplier_errors[n]),
        ]  # fmt: skip
        rows.append(f'<tr><th style="text-align:left">{text(n)}</th>{"".join(map(cell, cells))}</tr>')
    heads = ("target", "value", "residual", "multiplier")
    head = "".join(f'<th style="text-align:right">{h}</th>' for h in heads)
    colour = _COLOUR.get(result.verdict, "#a12b2b" if result.certificate is not None else "#4a5568")
    return (
        f'<div><p style="border-left:4px solid {colour};padding-left:.6em">'
        f"<b>{text(result.verdict)}</b> ({text(result.evidence)}): {text(result.message)}</p>"
        f'<table><thead><tr><th style="text-align:left">charge</th>{head}</tr></thead>'
        f"<tbody>{''.join(rows)}</tbody></table></div>"
    )
