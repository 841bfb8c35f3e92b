"""Saving a recovery: a folder that is either whole or not there at all.

The files are built in a hidden folder beside the wanted one, which is then renamed. An older
folder is moved aside first and comes back if anything fails.
"""

from __future__ import annotations

import json
import math
import os
import shutil
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from srcfit.case.model import Case
from srcfit.errors import OutputError
from srcfit.recovery import Recovery

if TYPE_CHECKING:
    import pandas as pd

DIGITS = 10
TABLES = ("source", "zones", "readings", "ladder", "section")
NAMES = (*(f"{name}.csv" for name in TABLES), "summary.json", "report.html", "figures")

NUMBER = ("value", "sd", "lower", "upper")
SCHEMA: Mapping[str, tuple[str, ...]] = {
    "schema": (),
    "version": (),
    "title": (),
    "units": ("position", "source", "total", "response", "strength"),
    "strength": ("solver", "choose", "value", "effective_dof", "choices"),
    "noise": ("stated", "scale", "groups"),
    "fit": ("read", "used", "chi_square", "dof"),
    "total": NUMBER,
    "zones": ("name", "from", "to", *NUMBER, "data_share"),
    "background": NUMBER,
    "peak": ("value", "lower", "upper", "position", "position_lower", "position_upper"),
    "lumped": ("name", "at", *NUMBER),
    "nuisances": ("name", *NUMBER, "unit"),
    "reactions": ("name", "at", "kind", "unit", *NUMBER),
    "limit": ("zone", "at_most", "estimate", "probability", "verdict"),
    "detection": ("name", "critical", "limit", "detected"),
    "findings": ("code", "level", "sentence"),
    "excluded": ("file", "line", "reason"),
    "inputs": ("file", "sha256"),
    "level": (),
    "seed": (),
    "cautions": (),
}
"""Keys of summary.json in their order, and those of the mappings inside (or in their lists)."""


@dataclass(frozen=True)
class Saved:
    """What `save` left behind: the folder, and where files that are not srcfit's were kept."""

    folder: Path
    kept: Path | None = None


def save(recovery: Recovery, folder: str | Path, *, replace: bool = False) -> Saved:
    """Write every file of a recovery into a new folder, all of them or none.

    Parameters
    ----------
    recovery : Recovery
    folder : path
        Folder to make, with its parents. Holds afterwards source.csv, zones.csv, readings.csv,
        ladder.csv, section.csv, summary.json, report.html and figures/.
    replace : bool
        Allow an existing folder to be replaced. Files in it that srcfit did not write are moved
        to a folder beside it.

    Returns
    -------
    Saved

    Raises
    ------
    OutputError
        The folder exists (without `replace`), holds an input, or cannot be written.
    """

    def build(new: Path) -> None:
        write_tables(recovery, new)
        (new / "summary.json").write_text(summary_text(recovery.summary()), encoding="utf-8")
        write_pages(recovery, new)

    return put(folder, build, replace=replace, inputs=input_paths(recovery.case))


def put(
    folder: str | Path,
    build: Callable[[Path], object],
    *,
    replace: bool = False,
    inputs: tuple[Path, ...] = (),
) -> Saved:
    """Let `build` fill a hidden folder, then give it the name `folder` in one step.

    Raises
    ------
    OutputError
        As for `check`, or when the disk refuses; whatever stood there before stands there still.
    """
    target = check(folder, replace=replace, inputs=inputs)
    with _refusals(target), _parents(target):
        new = _beside(target, "part")
        try:
            new.mkdir()
            build(new)
            kept = _swap(new, target)
        finally:
            shutil.rmtree(new, ignore_errors=True)
    return Saved(target, kept)


def check(folder: str | Path, *, replace: bool = False, inputs: tuple[Path, ...] = ()) -> Path:
    """Say early whether `folder` can be made, leaving nothing behind; its absolute path.

    Raises
    ------
    OutputError
        The folder is there already (without `replace`), is a file, holds the current folder or
        one of `inputs`, or its place cannot be written.
    """
    target = Path(os.path.realpath(folder))
    with _refusals(target):
        if os.path.lexists(target):
            _check_existing(target, f"output folder {folder}", replace, inputs)
        with _parents(target, keep=False):
            probe = _beside(target, "probe")
            probe.mkdir()
            probe.rmdir()
    return target


def _check_existing(target: Path, place: str, replace: bool, inputs: tuple[Path, ...]) -> None:
    if not target.is_dir():
        raise OutputError("a file of that name is in the way", place, "choose another with -o")
    if not replace:
        how = "choose another with -o, or allow it to be replaced with --replace"
        raise OutputError("it exists already", place, how)
    for precious in (Path.cwd(), Path(os.path.expanduser("~")), *inputs):
        if Path(os.path.realpath(precious)).is_relative_to(target):
            what = f"it holds {precious}, so it is not replaced"
            raise OutputError(what, place, "choose another with -o")


def put_file(path: str | Path, data: str | bytes, *, replace: bool = False) -> Path:
    """Write one file in one step; its absolute path.

    Raises
    ------
    OutputError
        The file exists (without `replace`), or its place cannot be written.
    """
    target = Path(os.path.realpath(path))
    place = f"output file {path}"
    with _refusals(target, "file"):
        if target.is_dir():
            raise OutputError("a folder of that name is in the way", place, "choose another")
        if target.exists() and not replace:
            how = "choose another, or allow it to be replaced with --replace"
            raise OutputError("it exists already", place, how)
        with _parents(target):
            new = _beside(target, "part")
            try:
                new.write_bytes(data.encode() if isinstance(data, str) else data)
                new.replace(target)
            finally:
                new.unlink(missing_ok=True)
    return target


def input_paths(case: Case) -> tuple[Path, ...]:
    """Absolute paths of the case file and of every file it names."""
    own = (case.path,) if case.path is not None else ()
    paths = (*own, *case.files, *(case.folder / t.file for t in case.tables))
    return tuple(Path(os.path.abspath(p)) for p in paths)


def write_tables(recovery: Recovery, folder: Path) -> None:
    """Write the tables of a recovery as CSV files with ten significant digits."""
    for name in TABLES:
        frame: pd.DataFrame | None = getattr(recovery, name)
        if frame is None:
            continue
        text = csv_text(frame)
        (folder / f"{name}.csv").write_text(text, encoding="utf-8", newline="")


def csv_text(frame: pd.DataFrame) -> str:
    """A table as CSV text: header with units, ten significant digits, empty where unknown."""
    plain = frame.copy(deep=False)
    for column in plain.columns:
        if plain[column].dtype.kind == "O" and all(v is None or isinstance(v, float)
                                                   for v in plain[column]):  # fmt: skip
            plain[column] = plain[column].astype(float)
    text: str = plain.to_csv(index=False, float_format=f"%.{DIGITS}g", lineterminator="\n")
    return text


def write_pages(recovery: Recovery, folder: Path) -> None:
    """Write the figures and the report."""
    from srcfit import plots, report

    figures = folder / "figures"
    figures.mkdir()
    plots.save_figures(recovery, figures)
    (folder / "report.html").write_text(report.render(recovery), encoding="utf-8")


def summary_text(summary: Mapping[str, Any]) -> str:
    """Text of summary.json: strict JSON, every key of the schema in its order."""
    return json.dumps(ordered(summary), indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def ordered(summary: Mapping[str, Any]) -> dict[str, Any]:
    """`summary` as plain JSON values with every key of the schema in order; further keys last."""
    plain = strict(summary)
    out = {key: _arranged(plain.get(key), keys) for key, keys in SCHEMA.items()}
    return out | {key: value for key, value in plain.items() if key not in SCHEMA}


def _arranged(value: Any, keys: tuple[str, ...]) -> Any:
    if isinstance(value, list) and keys:
        return [_arranged(v, keys) for v in value]
    if isinstance(value, dict) and keys:
        return {k: value.get(k) for k in keys} | {k: v for k, v in value.items() if k not in keys}
    return value


def strict(value: Any) -> Any:
    """`value` as plain JSON types; what is not a finite number becomes None."""
    if isinstance(value, Mapping):
        return {str(k): strict(v) for k, v in value.items()}
    if isinstance(value, (list, tuple)):
        return [strict(v) for v in value]
    if hasattr(value, "tolist"):  # numpy scalars and arrays
        return strict(value.tolist())
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if value is None or isinstance(value, (str, int)):
        return value
    if isinstance(value, complex):
        return {"real": strict(value.real), "imaginary": strict(value.imag)}
    return str(value)


def _beside(target: Path, word: str) -> Path:
    """A hidden name beside `target` that is not taken."""
    stem = f".{target.name}.{word}-{os.getpid()}"
    names = (target.with_name(f"{stem}{n or ''}") for n in range(1000))
    return next(path for path in names if not os.path.lexists(path))


def _swap(new: Path, target: Path) -> Path | None:
    """Give `new` the name `target`, an older folder moved aside; where its own files went."""
    if not target.exists():
        new.rename(target)
        return None
    old = _beside(target, "old")
    try:
        target.rename(old)
        new.rename(target)
    except BaseException:  # an interrupt, too, between the two steps
        if old.exists() and not target.exists():
            old.rename(target)
        raise
    return _discard(old, target)


def _discard(old: Path, target: Path) -> Path | None:
    """Delete what srcfit wrote in `old`; move the rest beside `target`, its place returned."""
    for name in NAMES:
        path = old / name
        if path.is_dir() and not path.is_symlink():
            shutil.rmtree(path, ignore_errors=True)
        else:
            path.unlink(missing_ok=True)
    if not any(old.iterdir()):
        old.rmdir()
        return None
    names = (target.with_name(f"{target.name}-kept{n or ''}") for n in range(1000))
    kept = next(path for path in names if not os.path.lexists(path))
    old.rename(kept)
    return kept


@contextmanager
def _parents(target: Path, *, keep: bool = True) -> Iterator[None]:
    """Make missing parents of `target`; they go again on failure, or always unless `keep`."""
    missing = [p for p in target.parents if not p.exists()]
    done = False
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        yield
        done = keep
    finally:
        for parent in () if done else missing:
            if parent.is_dir():
                parent.rmdir()


@contextmanager
def _refusals(target: Path, thing: str = "folder") -> Iterator[None]:
    """Turn what the operating system refuses into an OutputError."""
    try:
        yield
    except OSError as error:
        reason = error.strerror or str(error)
        what = f"it cannot be written ({reason[:1].lower()}{reason[1:]})"
        how = "choose a place that can be written with -o"
        raise OutputError(what, f"output {thing} {target}", how) from error
