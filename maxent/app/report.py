"""The report page of a run, made from its record and its figures and nothing else.

Floor: app.  One Jinja2 template with inline style, no script, everything escaped.  Computes nothing: numbers
come from the record, sentences from words.py, roundings from text.py, figures from figures.py.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from maxent.app import sections, study_words, thermodynamics_words, words
from maxent.app.figures import Figure, recoloured
from maxent.text import combination, number

__all__ = ["render"]


def render(record: Mapping[str, Any], *, figures: Sequence[Figure] = ()) -> str:
    """Write the page.

    Parameters
    ----------
    record : mapping
        See record.py.
    figures : sequence of Figure, optional
        Stand in the page as they are; their names and words were escaped when they were drawn.

    Returns
    -------
    str
        A complete, self-contained HTML page.
    """
    from jinja2 import Environment, PackageLoader, StrictUndefined

    environment = Environment(
        loader=PackageLoader("maxent.app"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )
    environment.filters |= {
        "number": number,
        "combination": combination,
        "certificate": words.certificate,
        "face": words.face,
        "redundancy": words.redundancy,
        "recoloured": recoloured,
        "numbers": study_words.columns_of_numbers,
    }
    head, rows = words.charge_table(record)
    return environment.get_template("report.html").render(
        r=record,
        short=words.verdict(record),
        head=head,
        rows=rows,
        figures=[f for f in figures if not f.study and not f.section],
        sections=[
            (table, [f for f in figures if f.section == entry["name"]])
            for table, entry in zip(sections.tables(record["sections"]), record["sections"], strict=True)
        ],
        thermo=thermodynamics_words.tables(record["thermodynamics"]) if record["thermodynamics"] else (),
        agreement=thermodynamics_words.agreement(record["thermodynamics"]) if record["thermodynamics"] else "",
        failures=thermodynamics_words.failures(record["thermodynamics"]) if record["thermodynamics"] else (),
        units=thermodynamics_words.UNITS,
        study=study_words.tables(record["quench"]) if record["quench"] else (),
        study_notes=study_words.notes(record["quench"]) if record["quench"] else (),
        study_figures=[f for f in figures if f.study],
    )
