"""Numbers from files beside a config: NumPy arrays, comma-separated tables, Matrix Market matrices.

Floor: app.  Nothing is ever unpickled.  Every file that was read is remembered with its digest, because the
name of a run folder depends on it.
Must not know: what the numbers mean.
"""

from __future__ import annotations

import csv
import hashlib
import io
from pathlib import Path as File
from typing import Any

import numpy as np

__all__ = ["Files"]


class Files:
    """Reader for the files that one config names.

    Parameters
    ----------
    folder : pathlib.Path
        Relative names are taken from here (the folder of the config).
    """

    def __init__(self, folder: File):
        self.folder = folder
        self.digests: dict[str, str] = {}

    def read(self, reference: str) -> Any:
        """Read the array that a reference names.

        Parameters
        ----------
        reference : str
            `name.npy`, `name.npz:array`, `name.csv` (one column) or `name.csv:column`, `name.mtx`.

        Returns
        -------
        numpy.ndarray or scipy.sparse matrix (`.mtx` with coordinates)

        Raises
        ------
        ValueError
            In one line that names the file, for whatever is wrong with it.
        """
        name, member = reference, ""
        for ending in (".npz:", ".csv:"):
            if ending in reference:
                head, _, member = reference.rpartition(ending)
                name = head + ending[:-1]
        file = self.folder / name
        ending = file.suffix.lower()
        if ending not in (".npy", ".npz", ".csv", ".mtx"):
            raise ValueError(f"{name!r} is no file this program reads; expected .npy, .npz:name, .csv:column or .mtx")
        try:
            data = file.read_bytes()
        except OSError as bad:
            raise ValueError(f"file {name!r} cannot be read: {bad.strerror or bad}") from None
        self.digests[name] = hashlib.sha256(data).hexdigest()
        try:
            if ending == ".csv":
                return _column(data.decode(), member)
            if ending == ".mtx":
                from scipy.io import mmread

                return mmread(io.BytesIO(data))
            loaded = np.load(io.BytesIO(data), allow_pickle=False)
            if ending == ".npy":
                return loaded
            if member not in loaded.files:
                raise ValueError(f"has no array {member!r}; it has {', '.join(sorted(loaded.files))}")
            return loaded[member]
        except Exception as bad:
            # whatever a damaged file makes a reader raise, the user needs the file's name
            text = " ".join(str(bad).split())
            if "allow_pickle" in text:
                text = "holds Python objects; only plain numbers are read"
            raise ValueError(f"file {name!r}: {text or type(bad).__name__}") from None


def _column(text: str, name: str) -> np.ndarray:
    """Read one column of a comma-separated table whose first row may hold the names of the columns."""
    rows = [r for r in csv.reader(line for line in text.splitlines() if line.strip() and line[0] != "#")]
    if not rows:
        raise ValueError("is empty")
    head = [cell.strip() for cell in rows[0]]
    if name:
        if name not in head:
            raise ValueError(f"has no column {name!r}; it has {', '.join(head)}")
        if head.count(name) > 1:
            raise ValueError(f"has {head.count(name)} columns called {name!r}; one of them must be meant")
        index, body = head.index(name), rows[1:]
    else:
        if len(head) != 1:
            raise ValueError(f"has {len(head)} columns; say which one, as in 'table.csv:{head[0]}'")
        index, body = 0, rows if _is_number(head[0]) else rows[1:]
    out = []
    for n, row in enumerate(body, 1):
        if index >= len(row) or not _is_number(row[index]):
            raise ValueError(f"data row {n} has no number in column {name or 1!r}")
        out.append(float(row[index]))
    return np.array(out)


def _is_number(cell: str) -> bool:
    try:
        float(cell)
    except ValueError:
        return False
    return True
