"""On which line of a TOML text each key stands.

The standard reader gives no lines. This walker follows the grammar of a text that the standard
reader has already accepted, so that it need not find faults.
"""

from __future__ import annotations

import bisect
import re
import tomllib

Path = tuple[str | int, ...]

_SPACE = re.compile(r"(?:[ \t\r\n]|#[^\n]*)*")
_BLANK = re.compile(r"[ \t]*")
_KEY = re.compile(r"[A-Za-z0-9_-]+|\"(?:[^\"\\\n]|\\.)*\"|'[^'\n]*'")
_STRING = re.compile(
    r'"""(?:[^\\]|\\.)*?"{3,5}|\'\'\'.*?\'{3,5}|"(?:[^"\\\n]|\\.)*"|\'[^\'\n]*\'', re.DOTALL
)
_BARE = re.compile(r"[^,\]}#\n]*")


class _Walker:
    """A place in the text, and the lines of the keys seen so far."""

    def __init__(self, text: str) -> None:
        self.text = text
        self.at = 0
        self.ends = [i for i, c in enumerate(text) if c == "\n"]
        self.lines: dict[Path, int] = {(): 1}

    def note(self, path: Path) -> None:
        line = bisect.bisect_left(self.ends, self.at) + 1
        for depth in range(1, len(path) + 1):
            self.lines.setdefault(path[:depth], line)

    def skip(self, pattern: re.Pattern[str]) -> str:
        match = pattern.match(self.text, self.at)
        if match is None:
            return ""
        self.at = match.end()
        return match[0]

    def see(self, mark: str) -> bool:
        """Whether `mark` stands here; steps over it."""
        if self.text.startswith(mark, self.at):
            self.at += len(mark)
            return True
        return False

    def key(self) -> Path:
        parts: list[str] = []
        while True:
            self.skip(_BLANK)
            word = self.skip(_KEY)
            if not word:
                raise ValueError("no key")
            parts.append(next(iter(tomllib.loads(f"{word} = 0"))))
            self.skip(_BLANK)
            if not self.see("."):
                return tuple(parts)

    def value(self, path: Path) -> None:
        self.note(path)
        if self.see("{"):
            self._items(path, "}", self._pair)
        elif self.see("["):
            self._items(path, "]", lambda p, i: self.value((*p, i)))
        elif not self.skip(_STRING):
            self.skip(_BARE)

    def _pair(self, path: Path, _: int) -> None:
        start = self.at
        key = self.key()
        self.see("=")
        self.skip(_SPACE)
        after, self.at = self.at, start
        self.note((*path, *key))
        self.at = after
        self.value((*path, *key))

    def _items(self, path: Path, end: str, one: object) -> None:
        count = 0
        while True:
            self.skip(_SPACE)
            if self.see(end):
                return
            one(path, count)  # type: ignore[operator]
            count += 1
            self.skip(_SPACE)
            self.see(",")


def key_lines(text: str) -> dict[Path, int]:
    """Line of every key, table and item of a valid TOML text.

    Parameters
    ----------
    text : str
        Text that `tomllib.loads` accepts.

    Returns
    -------
    dict
        Path of keys and item numbers (from 0) -> line (from 1). A table has the line of its
        header; the empty path has line 1.
    """
    walker = _Walker(text)
    table: Path = ()
    counts: dict[Path, int] = {}
    while True:
        walker.skip(_SPACE)
        if walker.at >= len(text):
            return walker.lines
        if walker.see("[["):
            start = walker.at
            path = _inside(walker.key(), counts)
            counts[path] = counts.get(path, 0) + 1
            table = (*path, counts[path] - 1)
            walker.at, end = start, walker.at
            walker.note(table)
            walker.at = end + 2
        elif walker.see("["):
            start = walker.at
            table = _inside(walker.key(), counts)
            walker.at, end = start, walker.at
            # a header that comes after its own subtables still begins the table
            walker.lines.pop(table, None)
            walker.note(table)
            walker.at = end + 1
        else:
            walker._pair(table, 0)


def _inside(path: Path, counts: dict[Path, int]) -> Path:
    """`path` with the number of the last item wherever a list of tables is meant."""
    found: Path = ()
    for i, part in enumerate(path):
        found = (*found, part)
        if i < len(path) - 1 and found in counts:
            found = (*found, counts[found] - 1)
    return found
