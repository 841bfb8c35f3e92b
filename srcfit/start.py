"""A first case of a member kind: commented text, with invented readings on request."""

from __future__ import annotations

import csv
import io
import math
import tomllib
from collections.abc import Mapping
from pathlib import Path

import numpy as np

from srcfit.case import make_case
from srcfit.case.model import Case, Known
from srcfit.case.template import template
from srcfit.errors import OutputError
from srcfit.inspection import shown
from srcfit.output import put, put_file
from srcfit.prediction import predict
from srcfit.readings.model import Readings
from srcfit.trial import Trial

COUNT = 24  # invented readings along the member
OUTSIDE = 0.35  # invented density outside the zone, relative to the one inside
CLEAR = 60.0  # largest effect of the invented source, in standard deviations of one reading
TRUTH = "truth.csv"


def write(
    kind: str, place: str | Path, *, demo: bool = False, seed: int = 0, replace: bool = False
) -> list[Path]:
    """Write a case of a kind to fill in.

    Parameters
    ----------
    kind : str
        Name of a member kind.
    place : path
        A file that ends in ``.toml``, or a folder, which then holds ``case.toml``.
    demo : bool
        Add readings of an invented source, and that source as ``truth.csv``.
    seed : int
        Of the noise of the invented readings.
    replace : bool
        Allow files that are there already to be replaced.

    Returns
    -------
    list of Path
        What was written, the case first.

    Raises
    ------
    OutputError
        When something of that name is there (without `replace`), or cannot be written.
    """
    place = Path(place)
    single = place.suffix == ".toml"
    folder = place.parent if single else place
    texts = {place.name if single else "case.toml": template(kind)}
    if demo:
        texts |= demo_texts(template(kind), seed)
    return _written(texts, folder, single, replace)


def write_text(text: str, place: str | Path, *, replace: bool = False) -> list[Path]:
    """Write the text of a case to a file or into a folder, as `write` does."""
    place = Path(place)
    single = place.suffix == ".toml"
    name = place.name if single else "case.toml"
    return _written({name: text}, place.parent if single else place, single, replace)


def _written(texts: Mapping[str, str], folder: Path, single: bool, replace: bool) -> list[Path]:
    """Write all files or none."""
    if not single and not folder.exists():
        put(folder, lambda new: [(new / name).write_text(t, "utf-8") for name, t in texts.items()])
        return [folder / name for name in texts]
    taken = [folder / name for name in texts if (folder / name).exists()]
    if taken and not replace:
        how = "choose another place with -o, or allow it to be replaced with --replace"
        raise OutputError("it exists already", f"output file {taken[0]}", how)
    for name, text in texts.items():
        put_file(folder / name, text, replace=replace)
    return [folder / name for name in texts]


def demo_texts(case_text: str, seed: int = 0) -> dict[str, str]:
    """Readings of an invented source, and that source, as the texts of CSV files.

    The source is level, and higher in the first zone; it is scaled so that the readings show it
    clearly above their standard deviation.

    Parameters
    ----------
    case_text : str
        Text of a case with one table of one column and one zone.
    seed : int
        Of the normal noise.

    Returns
    -------
    mapping file name -> text
    """
    case = make_case(tomllib.loads(case_text))
    bare = _places(case)
    unit, si = bare.unit[0], case.member.kind.sensor(bare.kind[0]).unit
    sd = float(shown(bare.sd[0], unit, si, difference=True))
    rest = _predicted(case, bare, 0.0)
    height = CLEAR * sd / float(np.abs(_predicted(case, bare, 1.0) - rest).max())
    height = float(f"{height:.1e}")
    noise = np.random.default_rng(seed).normal(0.0, sd, len(bare))
    column, table = case.columns[0], case.tables[0]
    values = column.sign * (_predicted(case, bare, height) + noise)
    decimals = max(0, 1 - math.floor(math.log10(sd)))
    places = shown(bare.x, table.position.unit or "m", "m")
    rows = [(f"{x:.6g}", f"{v:.{decimals}f}") for x, v in zip(places, values, strict=True)]
    return {
        table.file.name: _csv([(table.position.column, column.columns[0]), *rows]),
        TRUTH: _truth(case, height),
    }


def _places(case: Case) -> Readings:
    """Readings without values, evenly spread over the member."""
    member, spec = case.member, case.columns[0]
    steps = (np.arange(COUNT) + 0.5) / COUNT
    unit = spec.unit or member.kind.sensor(spec.kind).unit
    return Readings(
        file=(case.tables[0].file.name,) * COUNT, line=np.arange(2, COUNT + 2),
        group=(spec.group,) * COUNT, kind=(spec.kind,) * COUNT, unit=(unit,) * COUNT,
        x=np.round(member.start + member.length * steps, 4), value=np.zeros(COUNT),
        sd=np.full(COUNT, spec.sd or 1.0), used=np.ones(COUNT, dtype=bool), reason=("",) * COUNT,
        spec=np.zeros(COUNT, dtype=np.int64), time=np.full(COUNT, np.nan),
    )  # fmt: skip


def _predicted(case: Case, bare: Readings, height: float) -> np.ndarray:
    """Readings under the invented source, in their unit and in the member's own sign."""
    values: np.ndarray = (
        predict(case, bare, Trial(_parts(case, height))).readings["predicted"].to_numpy()
    )
    return values


def _parts(case: Case, height: float) -> tuple[Known, ...]:
    """The invented source; `height` in the user's unit."""
    member, zone = case.member, case.source.zones[0]
    density = height / float(shown(1.0, case.source.unit, member.kind.source_unit))
    stretches = ((member.start, zone.start, OUTSIDE), (zone.start, zone.end, 1.0),
                 (zone.end, member.end, OUTSIDE))  # fmt: skip
    return tuple(Known(a, b, share * density) for a, b, share in stretches if a < b)


def _truth(case: Case, height: float) -> str:
    at = case.source.position_unit
    per: Mapping[str, float] = {"m": float(shown(1.0, at, "m"))}
    density = float(shown(1.0, case.source.unit, case.member.kind.source_unit))
    rows = [
        (f"{p.start * per['m']:.6g}", f"{p.end * per['m']:.6g}", f"{p.value * density:.6g}")
        for p in _parts(case, height)
    ]
    return _csv([(f"from [{at}]", f"to [{at}]", f"value [{case.source.unit}]"), *rows])


def _csv(rows: list[tuple[str, ...]]) -> str:
    out = io.StringIO()
    csv.writer(out, lineterminator="\n").writerows(rows)
    return out.getvalue()
