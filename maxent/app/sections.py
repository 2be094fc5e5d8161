"""Further tables and curves of a run: what a kind has to show beside charges and predictions.

A kind hands over sections with plain numbers; here they become entries of the record, tables for people and arrays.
Floor: app.  Must not know: what the numbers mean, figures, HTML.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from numbers import Integral
from typing import Any, Literal

from maxent.app.study_words import Table
from maxent.text import number, table

__all__ = ["Column", "Section", "entry", "summary", "tables", "write_arrays"]

#: Rows of a table for people; of longer ones every n-th is shown, and the last.
SHOWN = 16
#: Digits in tables for people.
DIGITS = 6


@dataclass(frozen=True)
class Column:
    """One column of a section.

    Parameters
    ----------
    name : str
        Heading of the column, label of the curve.
    values : sequence of float or of str
        NaN where there is none.
    meaning : str
        One sentence for the arrays.
    """

    name: str
    values: Sequence[Any]
    meaning: str

    @property
    def is_text(self) -> bool:
        """Whether the values are words."""
        return any(isinstance(v, str) for v in self.values)


@dataclass(frozen=True)
class Section:
    """A table, and curves of some of its columns over the first.

    Parameters
    ----------
    name : str
        Letters, digits and hyphens; names the figure and the dimension of the arrays.
    title, lead : str
        What it is, and how to read it.
    columns : tuple of Column
        Of one length.
    note : str, optional
        What is to be said below.
    curves : tuple of str, optional
        Names of the columns that are drawn; no figure without any.
    ordinate : str, optional
        What the curves have in common, for the axis.
    scale : {"linear", "log"}, optional
        Of that axis.
    """

    name: str
    title: str
    lead: str
    columns: tuple[Column, ...]
    note: str = ""
    curves: tuple[str, ...] = ()
    ordinate: str = ""
    scale: Literal["linear", "log"] = "linear"


def entry(section: Section) -> dict[str, Any]:
    """The section as it stands in a record: JSON-ready, null where a number is not finite."""
    return {
        "name": section.name,
        "title": section.title,
        "lead": section.lead,
        "note": section.note,
        "columns": [
            {"name": c.name, "meaning": c.meaning, "values": [_plain(v) for v in c.values]} for c in section.columns
        ],
        "curves": list(section.curves),
        "ordinate": section.ordinate,
        "scale": section.scale,
    }


def tables(entries: Sequence[Mapping[str, Any]]) -> list[Table]:
    """The sections of a record as tables for people."""
    return [_table(e) for e in entries]


def summary(entries: Sequence[Mapping[str, Any]]) -> list[str]:
    """The sections of a record for the terminal, a text of several lines each."""
    out = []
    for t in tables(entries):
        texts = [k for k, row in enumerate(zip(*t.rows, strict=True)) if any(cell[:1].isalpha() for cell in row)]
        numbers = [k for k in range(len(t.head)) if k not in texts]
        out.append("\n".join(filter(None, [f"{t.title}:", table(t.rows, t.head, right=numbers), t.note])))
    return out


def write_arrays(out: Any, entries: Sequence[Mapping[str, Any]]) -> None:
    """Write the columns of numbers into an open NetCDF file, ``<section>_<column>`` along the dimension `<section>`."""
    import numpy as np

    for e in entries:
        dimension = _identifier(e["name"])
        numbers = [c for c in e["columns"] if not any(isinstance(v, str) for v in c["values"])]
        if not numbers or not numbers[0]["values"]:
            continue
        out.createDimension(dimension, len(numbers[0]["values"]))
        named: set[str] = set()
        for c in numbers:
            name = _unique(f"{dimension}_{_identifier(c['name'])}", named)
            variable = out.createVariable(name, "d", (dimension,))
            variable[:] = np.array(c["values"], dtype=float)
            variable.long_name = c["meaning"].encode()


def _table(found: Mapping[str, Any]) -> Table:
    columns = found["columns"]
    count = len(columns[0]["values"])
    step = -(-count // SHOWN)
    shown = [*range(0, count - 1, step), count - 1] if count else []
    note = found["note"]
    if step > 1:
        note = " ".join(filter(None, [note, f"One row in {step}; all {count} stand in result.json and result.nc."]))
    rows = tuple(tuple(_cell(c["values"][k]) for c in columns) for k in shown)
    return Table(found["title"], found["lead"], tuple(c["name"] for c in columns), rows, note)


def _cell(value: Any) -> str:
    return value if isinstance(value, str) else number(value, DIGITS)


def _plain(value: Any) -> Any:
    if isinstance(value, str):
        return value
    if isinstance(value, Integral):
        return int(value)
    return float(value) if math.isfinite(value) else None


def _identifier(name: str) -> str:
    return re.sub(r"[^a-z0-9]+", "_", name.lower()).strip("_")


def _unique(name: str, named: set[str]) -> str:
    """`name`, with a number behind it if a column before has it: names may differ in what identifiers cannot show."""
    count, out = 1, name
    while out in named:
        count += 1
        out = f"{name}_{count}"
    named.add(out)
    return out
