"""What is wrong with a case: gathered with its places, and raised all at once."""

from __future__ import annotations

import difflib
import math
import re
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from pathlib import Path as File

from srcfit import units
from srcfit.case.lines import Path
from srcfit.errors import CaseError, UnitError
from srcfit.member import Unknown

NAN = math.nan


@dataclass
class Reader:
    """Reads values of a case and gathers what is wrong with them.

    Readers of values return nan (or None) after noting a problem, so that the rest of the case
    is still looked at.

    Attributes
    ----------
    file : str
        Name of the case file for messages, empty for a mapping.
    lines : mapping path -> line
    plain : bool
        Whether plain numbers in SI are accepted everywhere (kind `general`).
    """

    folder: File = field(default_factory=File)
    file: str = ""
    lines: Mapping[Path, int] = field(default_factory=dict)
    plain: bool = False
    problems: list[CaseError] = field(default_factory=list)
    files: list[File] = field(default_factory=list)

    def line(self, path: Path) -> int:
        """Line of the nearest key at or above `path`; 0 without a file."""
        while path and path not in self.lines:
            path = path[:-1]
        return self.lines.get(path, 0) if self.file else 0

    def place(self, path: Path) -> str:
        """Place for messages, as in "case.toml:7: readings.column[1].kind"."""
        shown = show(path)
        if not self.file:
            return shown
        line = self.line(path)
        return f"{self.file}:{line}: {shown}" if shown else f"{self.file}:{line}"

    def wrong(self, path: Path, what: str, how: str = "") -> None:
        """Note a problem."""
        self.problems.append(CaseError(what, self.place(path), how))

    def missing(self, table: Path, key: str, how: str = "") -> None:
        """Note that a key is missing from a table."""
        self.wrong(table, f"the key `{key}` is missing from {title(table)}", how)

    def quantity(
        self,
        path: Path,
        value: object,
        unit: str,
        *,
        difference: bool = False,
        above: float | None = None,
        least: float | None = None,
        marks: bool = False,
    ) -> float:
        """A quantity in SI, nan after noting what is wrong with it (or when it is None).

        `marks`: the amount may be one that no reading can have (a temperature below 0 K).
        """
        if value is None:
            return NAN
        try:
            found = self._plain(value)
            if found is None:
                found = units.quantity(value, unit, self.place(path), difference=difference)
        except UnitError as error:
            self.problems.append(error)
            return NAN
        if unit == "K" and found < 0 and not (difference or marks or self.plain):
            self.wrong(path, f"{value!r} is below absolute zero", "check its sign and its unit")
            return NAN
        if above is not None and not found > above:
            self.wrong(path, f"{value!r} is not more than {above:g}", "give a larger value")
            return NAN
        if least is not None and found < least:
            self.wrong(path, f"{value!r} is less than {least:g}", "give a larger value")
            return NAN
        return found

    def _plain(self, value: object) -> float | None:
        """A plain number where the kind takes plain numbers."""
        if not self.plain or isinstance(value, bool):
            return None
        try:
            found = float(value) if isinstance(value, (int, float, str)) else NAN
        except ValueError:
            return None
        return found if math.isfinite(found) else None

    def amount(
        self,
        path: Path,
        value: object,
        unit: str,
        *,
        default: float = 0.0,
        guess: float | None = 0.0,
        beside: Mapping[str, object] | None = None,
        difference: bool = False,
    ) -> float | Unknown:
        """A quantity, or an unknown: "unknown" or `{ unknown = true, guess, sd }`.

        Parameters
        ----------
        guess : float or None
            Where an unknown is expected to be; None: an `sd` needs a guess of the user's own.
        beside : mapping
            `guess` and `sd` that stand beside the key instead of in a table of its own.
        """
        own = {k: v for k, v in (beside or {}).items() if v is not None}
        at = path[:-1]
        if isinstance(value, Mapping):
            for key in value:
                if key not in ("unknown", "guess", "sd"):
                    self.unknown_key((*path, key), ("unknown", "guess", "sd"))
            if value.get("unknown") is not True:
                self.wrong(
                    path, "it does not say `unknown = true`", "write it, or give a quantity"
                )
            own, at = {k: v for k, v in value.items() if k != "unknown"}, path
        elif value != "unknown":
            for key in own:
                self.wrong(
                    (*at, key),
                    f"`{key}` goes only with an unknown",
                    f'write {path[-1]} = "unknown"',
                )
            if value is None:
                return default
            return self.quantity(path, value, unit, difference=difference)
        spread: float | None = None
        if "sd" in own:
            spread = self.quantity((*at, "sd"), own["sd"], unit, difference=True, above=0)
        if "guess" in own:
            guess = self.quantity((*at, "guess"), own["guess"], unit, difference=difference)
        elif guess is None and spread is not None:
            self.wrong((*at, "sd"), "an sd needs a value to be around", "add `guess`")
        return Unknown(guess or 0.0, spread)

    def unknown_key(self, path: Path, known: Iterable[str]) -> None:
        """Note a key that means nothing, with the nearest one that does."""
        key, known = str(path[-1]), list(known)
        self.wrong(path, f"`{key}` is no key of {title(path[:-1])}", suggest(key, known))

    def choose(self, path: Path, value: object, known: Iterable[str], what: str) -> bool:
        """Whether `value` is one of the known words; notes the nearest one when not."""
        known = list(known)
        if isinstance(value, str) and value in known:
            return True
        self.wrong(path, f"{value!r} is no {what}", suggest(str(value), known))
        return False

    def finish(self) -> None:
        """Raise what was gathered, in the order of the file.

        Raises
        ------
        CaseError
            One problem as it is; several in one message that begins with their number.
        """
        found = list({str(p): p for p in self.problems}.values())
        if not found:
            return
        found.sort(key=lambda p: _line_of(p.where))
        if len(found) == 1:
            raise found[0]
        listing = "".join(f"\n  {p}" for p in found).removesuffix(".")
        kind = UnitError if all(isinstance(p, UnitError) for p in found) else CaseError
        raise kind(f"{len(found)} errors{listing}", self.file)


def _line_of(where: str) -> int:
    match = re.search(r":(\d+)", where)
    return int(match[1]) if match else 0


def show(path: Path) -> str:
    """A path as text, items counted from 1, as in "readings.column[1].kind"."""
    shown = ""
    for part in path:
        if isinstance(part, int):
            shown += f"[{part + 1}]"
        else:
            word = part if re.fullmatch(r"[A-Za-z0-9_-]+", part) else f'"{part}"'
            shown += f".{word}" if shown else word
    return shown


def title(path: Path) -> str:
    """How a table is named in a message."""
    if not path:
        return "the case"
    bare = ".".join(str(p) for p in path if isinstance(p, str))
    return f"[[{bare}]] number {path[-1] + 1}" if isinstance(path[-1], int) else f"[{bare}]"


def suggest(word: str, known: list[str]) -> str:
    """The nearest known word, and all of them."""
    near = difflib.get_close_matches(word.lower(), known, n=1, cutoff=0.5)
    listing = "known here: " + ", ".join(known)
    return f"did you mean `{near[0]}`? {listing}" if near else listing


def each(
    reader: Reader, path: Path, value: object, read: Callable[[Path, object], object | None]
) -> list[object]:
    """Read every item of a list, leaving out those that could not be read."""
    if value is None:
        return []
    if not isinstance(value, (list, tuple)):
        reader.wrong(path, "it is no list", "write it in brackets, as in [ … ]")
        return []
    found = (read((*path, i), item) for i, item in enumerate(value))
    return [item for item in found if item is not None]
