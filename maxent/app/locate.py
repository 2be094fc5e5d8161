"""Where in a TOML file each key stands, so that an error about a value can name its line.

Floor: app.  `tomllib` tells lines for syntax errors only; this scanner walks text that is known to be good
TOML and notes the line of every key, table and list element.  It reads no values and checks nothing. Must not
know: what the keys mean.
"""

from __future__ import annotations

import tomllib
from bisect import bisect_right
from collections.abc import Mapping

__all__ = ["Path", "Positions", "locate", "repeated"]

Path = tuple[str | int, ...]
"""Keys and list indices from the top of the file down to one value."""

_BARE = frozenset("abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789_-")


class Positions:
    """Lines of the paths of one TOML text.

    Parameters
    ----------
    lines : mapping of path to int
        Line of each path, counted from 1.
    """

    def __init__(self, lines: Mapping[Path, int]):
        self.lines = dict(lines)

    def line(self, path: Path) -> int:
        """Give the line of a path, or of its nearest ancestor in the file (1 for the file itself)."""
        for n in range(len(path), 0, -1):
            if path[:n] in self.lines:
                return self.lines[path[:n]]
        return 1

    def last_before(self, line: int) -> Path:
        """Give the path written last at or above a line, without list indices; () if there is none."""
        best: Path = ()
        for path, at in self.lines.items():
            if at <= line and at >= self.lines.get(best, 0):
                best = path
        return tuple(k for k in best if isinstance(k, str))


def locate(text: str) -> Positions:
    r"""Map every key, table and list element of a TOML text to its line.

    Parameters
    ----------
    text : str
        Text that `tomllib.loads` accepts.  For other text the map ends at the first trouble.

    Returns
    -------
    Positions

    Examples
    --------
    >>> locate('a = 1\n[b]\n"c d" = [2,\n 3]').lines
    {('a',): 1, ('b',): 2, ('b', 'c d'): 3, ('b', 'c d', 0): 3, ('b', 'c d', 1): 4}
    """
    return Positions(_scan(text).lines)


def repeated(text: str) -> tuple[Path, int, int] | None:
    """Find the first name that a TOML text defines twice.

    Parameters
    ----------
    text : str
        Text that `tomllib.loads` refused.

    Returns
    -------
    tuple or None
        Path, line of the second definition, line of the first one.
    """
    twice = _scan(text).twice
    return twice[0] if twice else None


def _scan(text: str) -> _Scanner:
    scanner = _Scanner(text.replace("\r\n", "\n"))
    try:
        scanner.document()
    except (IndexError, ValueError):
        pass  # not TOML from here on; what was found so far stands
    return scanner


class _Scanner:
    """One pass over the text; `at` is the position of the next character."""

    def __init__(self, text: str):
        self.text = text
        self.at = 0
        self.starts = [0] + [k + 1 for k, c in enumerate(text) if c == "\n"]
        self.lines: dict[Path, int] = {}
        self.explicit: set[Path] = set()
        self.twice: list[tuple[Path, int, int]] = []
        self.counts: dict[Path, int] = {}  # arrays of tables: how many so far

    def document(self) -> None:
        """Scan headers and key/value pairs up to the end of the text."""
        table: Path = ()
        while True:
            self.blank(newlines=True)
            if self.at >= len(self.text):
                return
            if self.text[self.at] == "[":
                table = self.header()
            else:
                self.pair(table)

    def header(self) -> Path:
        """Scan `[table]` or `[[array of tables]]` and return the path that following pairs belong to."""
        line = self.line()
        array = self.text.startswith("[[", self.at)
        self.at += 2 if array else 1
        keys = self.keys()
        if not self.text.startswith("]]" if array else "]", self.at):
            raise ValueError("unclosed header")
        self.at += 2 if array else 1
        path: Path = ()
        for n, key in enumerate(keys):
            path += (key,)
            last = n == len(keys) - 1
            if last and array:
                index = self.counts.get(path, 0)
                self.counts[path] = index + 1
                self.lines.setdefault(path, line)
                path += (index,)
            elif not last and path in self.counts:
                path += (self.counts[path] - 1,)
            self.note(path, line, explicit=last)
        return path

    def pair(self, table: Path) -> None:
        """Scan `key = value`."""
        line = self.line()
        keys = self.keys()
        path = table
        for n, key in enumerate(keys):
            path += (key,)
            self.note(path, line, explicit=n == len(keys) - 1)
        if self.text[self.at] != "=":
            raise ValueError("no value")
        self.at += 1
        self.blank()
        self.value(path)

    def note(self, path: Path, line: int, *, explicit: bool) -> None:
        """Remember where a path stands; an explicit definition wins over an implied one."""
        if explicit and path in self.explicit:
            self.twice.append((path, line, self.lines[path]))
            return
        if explicit or path not in self.lines:
            self.lines[path] = line
        if explicit:
            self.explicit.add(path)

    def keys(self) -> list[str]:
        """Scan a dotted key and the blanks around it."""
        out = []
        while True:
            self.blank()
            out.append(self.key())
            self.blank()
            if self.text[self.at] != ".":
                return out
            self.at += 1

    def key(self) -> str:
        """Scan one part of a dotted key."""
        start = self.at
        if self.text[start] in "\"'":
            self.string()
            return tomllib.loads(f"k = {self.text[start : self.at]}")["k"]
        while self.at < len(self.text) and self.text[self.at] in _BARE:
            self.at += 1
        if self.at == start:
            raise ValueError("no key")
        return self.text[start : self.at]

    def value(self, path: Path) -> None:
        """Scan a value of any kind; lists and inline tables note their members."""
        first = self.text[self.at]
        if first in "\"'":
            self.string()
        elif first == "[":
            self.at += 1
            self.members(path, "]", keyed=False)
        elif first == "{":
            self.at += 1
            self.members(path, "}", keyed=True)
        else:
            while self.at < len(self.text) and self.text[self.at] not in ",]}#\n":
                self.at += 1

    def members(self, path: Path, end: str, *, keyed: bool) -> None:
        """Scan the members of a list or an inline table up to its closing bracket."""
        index = 0
        while True:
            self.blank(newlines=True)
            if self.text[self.at] == end:
                self.at += 1
                return
            if keyed:
                self.pair(path)
            else:
                self.note((*path, index), self.line(), explicit=True)
                self.value((*path, index))
                index += 1
            self.blank(newlines=True)
            if self.text[self.at] == ",":
                self.at += 1
            elif self.text[self.at] != end:
                raise ValueError("no comma")

    def string(self) -> None:
        """Scan a string of any of the four kinds."""
        quote = self.text[self.at]
        if self.text.startswith(quote * 3, self.at):
            self.at += 3
            while not self.text.startswith(quote * 3, self.at):
                self.at += 2 if quote == '"' and self.text[self.at] == "\\" else 1
                if self.at >= len(self.text):
                    raise ValueError("unclosed string")
            self.at += 3
            while self.text.startswith(quote, self.at):  # up to two quotes may stand before the closing three
                self.at += 1
            return
        self.at += 1
        while self.text[self.at] != quote:
            if self.text[self.at] == "\n":
                raise ValueError("unclosed string")
            self.at += 2 if quote == '"' and self.text[self.at] == "\\" else 1
        self.at += 1

    def blank(self, *, newlines: bool = False) -> None:
        """Skip blanks; with `newlines` also line ends and comments."""
        while self.at < len(self.text):
            c = self.text[self.at]
            if newlines and c == "#":
                end = self.text.find("\n", self.at)
                self.at = len(self.text) if end < 0 else end
            elif c in " \t" or (newlines and c == "\n"):
                self.at += 1
            else:
                return

    def line(self) -> int:
        """Line of the next character."""
        return bisect_right(self.starts, self.at)
