"""Ends, supports, hinges and interfaces of a member."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from srcfit import units
from srcfit.case.lines import Path
from srcfit.case.reader import Reader, each
from srcfit.case.schema import (
    BeamEnd,
    HingeTable,
    InterfaceTable,
    MixedEnd,
    SpringEnd,
    SupportTable,
    TransferEnd,
    ValueEnd,
    check,
)
from srcfit.member import (
    RIGID,
    End,
    Hinge,
    Interface,
    MemberKind,
    Restraint,
    Support,
    Unknown,
)

Amount = tuple[float | Unknown | None, str]
FREE_WORDS = ("free", "insulated", "closed")
HELD_BY_WORD = {
    "pinned": (RIGID, 0.0),
    "clamped": (RIGID, RIGID),
    "free": (0.0, 0.0),
    "guided": (0.0, RIGID),
}


@dataclass
class Frame:
    """What ends and supports need to know of their member.

    Attributes
    ----------
    ambient : float or None
        None when the case gives none.
    amounts : mapping key path -> (value or None for a profile, SI unit)
        Everything that may have an uncertainty.
    refers : list of Path
        Ends and supports that refer to the ambient.
    """

    reader: Reader
    kind: MemberKind
    span: tuple[float, float]
    ambient: float | None = None
    driven: bool = False
    amounts: dict[str, Amount] = field(default_factory=dict)
    refers: list[Path] = field(default_factory=list)

    def level(
        self, path: Path, value: object, beside: Mapping[str, object] | None = None
    ) -> float | Unknown:
        """An absolute response (an amplitude on driven members), or an unknown one."""
        kind = self.kind
        guess = self.ambient if kind.relative and not self.driven else 0.0
        found = self.reader.amount(
            path, value, kind.response_unit, guess=guess, beside=beside, difference=self.driven
        )
        self.note(path, found, kind.response_unit)
        return found

    def around(self, path: Path, stiffness: float) -> Restraint:
        """A restraint to the ambient, which is steady: no amplitude on driven members."""
        if not self.kind.relative:
            return Restraint(stiffness)
        self.refers.append(path)
        value = 0.0 if self.driven or self.ambient is None else self.ambient
        return Restraint(stiffness, value, to_ambient=True)

    def note(self, path: Path, value: float | Unknown | None, unit: str) -> None:
        """Note an amount that may have an uncertainty under the key path of `path`."""
        self.amounts[_key(path)] = (value, unit)

    def inside(self, path: Path, value: object) -> float:
        """A place strictly inside the member."""
        place = self.reader.quantity(path, value, "m")
        near = 1e-9 * (self.span[1] - self.span[0])
        if place <= self.span[0] + near or place >= self.span[1] - near:
            self.reader.wrong(
                path, f"{value!r} is not inside the member",
                f"it reaches from {self.span[0]:g} m to {self.span[1]:g} m; what holds an end "
                "belongs to `left` or `right`",
            )  # fmt: skip
        return place

    def stiffness(self, path: Path, value: object, unit: str) -> float:
        """A spring; negative ones only in `general`."""
        least = None if self.kind.name == "general" else 0.0
        found = self.reader.quantity(path, value, unit, least=least)
        self.note(path, found, unit)
        return found


def _key(path: Path) -> str:
    """Key path below `[member]`, e.g. "support.1.stiffness"."""
    return ".".join(str(p + 1) if isinstance(p, int) else p for p in path[1:])


def read_end(frame: Frame, side: str, value: object, at_axis: bool) -> End:
    """One end; `at_axis` when it lies at radius 0."""
    path: Path = ("member", side)
    if value is None:
        if not at_axis:
            words = ", ".join(frame.kind.end_words)
            frame.reader.missing(("member",), side, f"write one of {words}, or a table")
        return End("axis", axis=True)
    if isinstance(value, str):
        return _word_end(frame, path, value, at_axis)
    if not isinstance(value, Mapping):
        frame.reader.wrong(path, f"{value!r} is no end", "write a word or a table")
        return End("free")
    if at_axis:
        frame.reader.wrong(path, "nothing can act at radius 0", 'leave it out, or write "axis"')
        return End("axis", axis=True)
    if frame.kind.order == 4:
        return _beam_end(frame, path, value)
    return _table_end(frame, path, value, side)


def _word_end(frame: Frame, path: Path, word: str, at_axis: bool) -> End:
    words = frame.kind.end_words
    if frame.kind.order == 2:  # these say the same everywhere
        words = (*words, *(w for w in FREE_WORDS if w not in words))
    if not frame.reader.choose(path, word, words, f"end of a {frame.kind.name}"):
        return End(word)
    if frame.kind.order == 4:
        held, turn = HELD_BY_WORD[word]
        return End(word, Restraint(held), Restraint(turn))
    if word == "regular":
        return End(word, axis=True)
    if at_axis:
        if word == "fixed":
            frame.reader.wrong(path, "nothing can be held at radius 0", 'write "axis"')
        return End(word, axis=True)
    if word == "axis":
        frame.reader.wrong(
            path, "there is no axis at this end", 'an axis needs inner_radius "0 m"'
        )
        return End(word, axis=True)
    if word in FREE_WORDS:
        return End(word)
    return End(word, frame.around(path, RIGID))


def _table_end(frame: Frame, path: Path, data: Any, side: str) -> End:
    """An end of order 2 as a table; its keys tell its form."""
    reader, kind = frame.reader, frame.kind
    general = kind.name == "general"
    if "value" in data:
        held = check(reader, ValueEnd, data, path)
        beside = {"guess": held.guess, "sd": held.sd}
        return End("value", Restraint(RIGID, frame.level((*path, "value"), held.value, beside)))
    if "spring" in data and (general or not kind.relative):
        spring = check(reader, SpringEnd, data, path).spring
        k = frame.stiffness((*path, "spring"), spring, kind.spring_unit)
        return End("spring", Restraint(k))
    if "transfer" in data and kind.relative:
        return _transfer_end(frame, path, data)
    if general and ("a" in data or "b" in data):
        return _mixed_end(reader, path, data, side)
    forms = ["{ value = … }"]
    forms += ["{ transfer = …, ambient = … }"] if kind.relative else ["{ spring = … }"]
    forms += ["{ a = …, b = … }"] if general else []
    reader.wrong(path, f"{dict(data)!r} is no end of a {kind.name}", "write " + " or ".join(forms))
    return End("free")


def _transfer_end(frame: Frame, path: Path, data: Any) -> End:
    table = check(frame.reader, TransferEnd, data, path)
    k = frame.stiffness((*path, "transfer"), table.transfer, frame.kind.spring_unit)
    if table.ambient is None:
        return End("transfer", frame.around(path, k))
    here = (*path, "ambient")
    around = frame.reader.quantity(here, table.ambient, frame.kind.response_unit)
    if frame.driven:  # surroundings are steady: no amplitude
        return End("transfer", Restraint(k, 0.0))
    frame.note(here, around, frame.kind.response_unit)
    return End("transfer", Restraint(k, around))


def _mixed_end(reader: Reader, path: Path, data: Any, side: str) -> End:
    """Read a u + b p u' = 0; the outward flux of p u' changes sign with the side."""
    table = check(reader, MixedEnd, data, path)
    a = reader.quantity((*path, "a"), table.a, "1")
    b = reader.quantity((*path, "b"), table.b, "1")
    if a == 0 and b == 0:
        reader.wrong(path, "a and b are both 0", "one of them must not be")
        return End("free")
    if b == 0:
        return End("mixed", Restraint(RIGID))
    return End("mixed", Restraint(a / b if side == "right" else -a / b))


def _beam_end(frame: Frame, path: Path, data: Any) -> End:
    """An end of order 4 as a table."""
    reader, kind = frame.reader, frame.kind
    table = check(reader, BeamEnd, data, path)
    held, turn, word = 0.0, 0.0, "elastic"
    if table.kind is not None:
        if not reader.choose((*path, "kind"), table.kind, kind.end_words, "end of a beam"):
            return End("free")
        word = table.kind
        held, turn = HELD_BY_WORD[word]
    elif table.deflection_spring is None and table.rotation_spring is None:
        reader.wrong(path, f"{dict(data)!r} does not say how the end is held",
                     "add `kind`, `deflection_spring` or `rotation_spring`")  # fmt: skip
        return End("free")
    held = _beam_spring(frame, (*path, "deflection_spring"), table.deflection_spring, held,
                        kind.spring_unit)  # fmt: skip
    turn = _beam_spring(frame, (*path, "rotation_spring"), table.rotation_spring, turn,
                        kind.rotation_spring_unit)  # fmt: skip
    unknown = [k for k in ("settlement", "rotation") if getattr(table, k) == "unknown"]
    if table.sd is not None and len(unknown) != 1:
        reader.wrong((*path, "sd"), "it is not clear what `sd` belongs to",
                     'write settlement = { unknown = true, sd = "…" }')  # fmt: skip
    moved: dict[str, float | Unknown] = {}
    unit_of = {"settlement": kind.response_unit, "rotation": "rad"}
    for key, stiffness in (("settlement", held), ("rotation", turn)):
        value = getattr(table, key)
        beside = {"sd": table.sd} if key in unknown and len(unknown) == 1 else None
        moved[key] = reader.amount((*path, key), value, unit_of[key], beside=beside)
        if value is not None:
            frame.note((*path, key), moved[key], unit_of[key])
            if stiffness == 0:
                reader.wrong((*path, key), f"a {word} end does not hold what is to move there",
                             "choose a kind or a spring that does")  # fmt: skip
    return End(word, Restraint(held, moved["settlement"]), Restraint(turn, moved["rotation"]))


def _beam_spring(frame: Frame, path: Path, value: object, held: float, unit: str) -> float:
    if value is None:
        return held
    if held:
        frame.reader.wrong(
            path, "the end's kind holds this rigidly already", "leave one of them out"
        )
    if value == "rigid":
        return RIGID
    return frame.stiffness(path, value, unit)


def read_supports(frame: Frame, value: object) -> tuple[Support, ...]:
    """`[[member.support]]`."""
    words = ("pinned", "spring") if frame.kind.order == 4 else ("fixed", "pinned", "spring")
    if frame.kind.relative:
        words = ("fixed", "spring")

    def one(path: Path, data: object) -> Support | None:
        table = check(frame.reader, SupportTable, data, path)
        at = frame.inside((*path, "at"), table.at) if table.at is not None else float("nan")
        if table.kind is None or not frame.reader.choose(
            (*path, "kind"), table.kind, words, f"support of a {frame.kind.name}"
        ):
            return None
        return Support(at, table.kind, _support(frame, path, table), _key(path))

    found: Any = each(frame.reader, ("member", "support"), value, one)
    _distinct(frame.reader, ("member", "support"), [s.at for s in found], "support")
    return tuple(sorted(found, key=lambda s: s.at))


def _support(frame: Frame, path: Path, table: SupportTable) -> Restraint:
    reader, stiffness = frame.reader, RIGID
    if table.kind == "spring":
        if table.stiffness is None:
            reader.missing(path, "stiffness")
        stiffness = frame.stiffness((*path, "stiffness"), table.stiffness, frame.kind.spring_unit)
    elif table.stiffness is not None:
        reader.wrong((*path, "stiffness"), f"a {table.kind} support is rigid",
                     'write kind = "spring", or leave it out')  # fmt: skip
    if table.value is not None and table.settlement is not None:
        reader.wrong((*path, "value"), "`value` and `settlement` say the same", "leave one out")
    key = "settlement" if table.value is None else "value"
    held = table.settlement if table.value is None else table.value
    if held is None and table.sd is None:
        return frame.around(path, stiffness)
    beside = {"guess": table.guess, "sd": table.sd}
    return Restraint(stiffness, frame.level((*path, key), held, beside))


def read_hinges(frame: Frame, value: object) -> tuple[Hinge, ...]:
    """`[[member.hinge]]`."""

    def one(path: Path, data: object) -> Hinge | None:
        table = check(frame.reader, HingeTable, data, path)
        if table.at is None:
            return None
        at = frame.inside((*path, "at"), table.at)
        if table.spring is None:
            return Hinge(at, key=_key(path))
        unit = frame.kind.rotation_spring_unit
        return Hinge(at, frame.stiffness((*path, "spring"), table.spring, unit), _key(path))

    found: Any = each(frame.reader, ("member", "hinge"), value, one)
    _distinct(frame.reader, ("member", "hinge"), [h.at for h in found], "hinge")
    return tuple(sorted(found, key=lambda h: h.at))


def read_interfaces(frame: Frame, value: object) -> tuple[Interface, ...]:
    """`[[member.interface]]`."""
    unit = units.divide_text("1", frame.kind.spring_unit)

    def one(path: Path, data: object) -> Interface | None:
        table = check(frame.reader, InterfaceTable, data, path)
        if table.at is None or table.resistance is None:
            return None
        at = frame.inside((*path, "at"), table.at)
        here = (*path, "resistance")
        resistance = frame.reader.quantity(here, table.resistance, unit, least=0)
        frame.note(here, resistance, unit)
        return Interface(at, resistance, _key(path))

    found: Any = each(frame.reader, ("member", "interface"), value, one)
    _distinct(frame.reader, ("member", "interface"), [i.at for i in found], "interface")
    return tuple(sorted(found, key=lambda i: i.at))


def _distinct(reader: Reader, path: Path, places: list[float], what: str) -> None:
    for i, place in enumerate(places):
        for j in range(i):
            if abs(place - places[j]) <= 1e-9 * max(abs(place), 1e-30):
                reader.wrong((*path, i, "at"), f"{what} {j + 1} stands at the same place",
                             "leave one of them out")  # fmt: skip
                break
