"""The command line. Heavy modules are imported by the commands that need them."""

from __future__ import annotations

import codecs
import json
import os
import sys
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal, TextIO, TypeVar

import click

from srcfit import __version__
from srcfit.errors import SrcfitError

if TYPE_CHECKING:
    from click.shell_completion import CompletionItem

    from srcfit.case.model import Case
    from srcfit.readings.model import Readings

DONE, BROKEN, USAGE, UNUSABLE, SERIOUS, INTERRUPTED = 0, 1, 2, 3, 4, 130
ASCII = {"±": "+-", "−": "-", "–": "-", "…": "...", "°": "deg ", "²": "^2", "³": "^3", "·": "*"}

EPILOG = """\b
Exit status: 0 done; 2 wrong usage; 3 the input cannot be used (nothing is
written); 4 with --strict when a finding is serious; 130 interrupted.

\b
Completion of commands and options, one line in the shell's start file:
  bash  eval "$(_SRCFIT_COMPLETE=bash_source srcfit)"
  zsh   eval "$(_SRCFIT_COMPLETE=zsh_source srcfit)"
  fish  _SRCFIT_COMPLETE=fish_source srcfit | source
"""

F = TypeVar("F", bound=Callable[..., Any])


def main(argv: Sequence[str] | None = None) -> int:
    """Run the command line and return its exit status.

    Parameters
    ----------
    argv : sequence of str, optional
        Arguments after the program's name; those of the process when left out.
    """
    _tolerant(sys.stdout, sys.stderr)
    try:
        with _orderly():
            status = cli.main(args=argv, prog_name="srcfit", standalone_mode=False)
        return status if isinstance(status, int) else DONE
    except SrcfitError as error:
        return _fail(str(error), UNUSABLE)
    except (click.Abort, KeyboardInterrupt):
        return _fail("interrupted", INTERRUPTED)
    except click.ClickException as error:
        error.show()
        return error.exit_code
    except MemoryError:
        return _fail("not enough memory; ask for fewer cells or readings", UNUSABLE)
    except Exception as error:
        if os.environ.get("SRCFIT_DEBUG"):
            raise
        what = f"unexpected {type(error).__name__}: {error}"
        how = "this is a fault of srcfit; run again with SRCFIT_DEBUG=1 set and report the trace"
        return _fail(f"{what}; {how}", BROKEN)


def _fail(message: str, status: int) -> int:
    _say(message, False)
    return status


@contextmanager
def _orderly() -> Iterator[None]:
    """Let a request to end run the clean-up that an interrupt runs."""
    import signal
    from threading import current_thread, main_thread

    def end(number: int, frame: object) -> None:
        raise SystemExit(128 + number)

    if current_thread() is not main_thread():
        yield
        return
    before = signal.signal(signal.SIGTERM, end)
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)


def _tolerant(*streams: TextIO) -> None:
    """Let terminals without the signs we print get plain ones instead of an error."""

    def plain(error: UnicodeError) -> tuple[str, int]:
        if not isinstance(error, UnicodeEncodeError):
            raise error
        text = error.object[error.start : error.end]
        return "".join(ASCII.get(c, "?") for c in text), error.end

    codecs.register_error("srcfit", plain)
    for stream in streams:
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="srcfit")


def _kind_names(
    context: click.Context, parameter: click.Parameter, text: str
) -> list[CompletionItem]:
    from click.shell_completion import CompletionItem

    from srcfit.members import MEMBERS

    return [CompletionItem(name) for name in MEMBERS if name.startswith(text)]


def _checked_kind(
    context: click.Context, parameter: click.Parameter, name: str | None
) -> str | None:
    """The member kind, or wrong usage with the nearest names."""
    from difflib import get_close_matches

    from srcfit.members import MEMBERS

    if name is None or name in MEMBERS:
        return name
    near = get_close_matches(name, MEMBERS, 1) or MEMBERS
    raise click.BadParameter(f"there is no member kind {name!r}; did you mean {', '.join(near)}?")


CASE = click.argument("case_path", metavar="CASE", type=click.Path())


def _kind(required: bool) -> Callable[[F], F]:
    return click.argument(
        "kind", required=required, shell_complete=_kind_names, callback=_checked_kind
    )


AS_JSON = click.option("--json", "as_json", is_flag=True, help="Print JSON for machines.")
QUIET = click.option("--quiet", "-q", is_flag=True, help="No progress and no table.")
SEED = click.option("--seed", type=click.IntRange(min=0), default=0, show_default=True,
                    help="Seed of everything random; it is recorded.")  # fmt: skip
STRICT = click.option("--strict", is_flag=True, help="Exit with 4 when a finding is serious.")
REPLACE = click.option("--replace", is_flag=True, help="Replace what is there already.")


@click.group(epilog=EPILOG, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, message="srcfit %(version)s")
def cli() -> None:
    """Recover the source that drives a one-dimensional member from readings along it.

    CASE is a TOML file: start one with `srcfit new KIND`, look at what it reads with
    `srcfit inspect CASE`, then `srcfit recover CASE`.
    """


@cli.command(short_help="List the member kinds, or all that one takes.")
@_kind(required=False)
@AS_JSON
def kinds(kind: str | None, as_json: bool) -> None:
    """List the member kinds, or all that one KIND takes."""
    from srcfit import kindtext
    from srcfit.members import MEMBERS

    if as_json:
        chosen = [MEMBERS[kind]] if kind else MEMBERS.values()
        facts = [kindtext.kind_facts(k) for k in chosen]
        return _print_json(facts[0] if kind else facts)
    click.echo(kindtext.kind_text(MEMBERS[kind]) if kind else kindtext.kinds_text(MEMBERS))


@cli.command(short_help="Write a commented case to fill in.")
@_kind(required=True)
@click.option("-o", "--output", type=click.Path(), help="A .toml file or a folder to write.")
@click.option("--demo", is_flag=True, help="Add invented readings, so that the case runs.")
@click.option("--seed", type=click.IntRange(min=0), default=0, help="Seed of the demo's noise.")
@click.option("--from", "table", metavar="FILE", type=click.Path(),
              help="Draft the case from this table of readings.")  # fmt: skip
@REPLACE
def new(
    kind: str, output: str | None, demo: bool, seed: int, table: str | None, replace: bool
) -> None:
    """Write a commented case of this KIND to fill in (on the screen without -o).

    With --demo it comes with invented readings and runs as it stands; the folder is KIND-demo
    unless -o names another.

    With --from FILE the columns, units and sensor kinds are guessed from a table of readings,
    each guess marked in a remark, and what remains to fill in is listed. The table is left where
    it is and named by its path from the case.
    """
    if table is not None:
        if demo:
            raise click.UsageError("--demo and --from exclude each other")
        return _new_from(kind, table, output, replace)
    if output is None and not demo:
        from srcfit.case.template import template

        click.echo(template(kind), nl=False)
        return
    from srcfit import start

    written = start.write(kind, output or f"{kind}-demo", demo=demo, seed=seed, replace=replace)
    for path in written:
        click.echo(path)


def _new_from(kind: str, table: str, output: str | None, replace: bool) -> None:
    from srcfit import draft, start

    place = Path(output) if output is not None else Path()
    folder = place.parent if place.suffix == ".toml" else place
    found = draft.draft(kind, table, folder)
    if output is None:
        click.echo(found.text, nl=False)
    else:
        for path in start.write_text(found.text, output, replace=replace):
            click.echo(path)
    click.echo("Remains to fill in:", err=output is None)
    for item in found.remaining:
        click.echo(f"  - {item}", err=output is None)


@cli.command(short_help="Show what a case reads and asks; solve nothing.")
@CASE
@click.option("-o", "--output", type=click.Path(), help="Draw the readings to this picture.")
@AS_JSON
@QUIET
@REPLACE
def inspect(case_path: str, output: str | None, as_json: bool, quiet: bool, replace: bool) -> None:
    """Show what CASE reads and asks and what is wrong with it, without solving anything."""
    from srcfit import inspection

    case, readings = _load(case_path, quiet)
    facts = inspection.inspect(case, readings)
    if output is not None:
        from srcfit import rawplot

        rawplot.save(case, readings, output, replace=replace)
    if as_json:
        _print_json(facts)
    elif not quiet:
        click.echo(inspection.text(facts))


@cli.command(short_help="Recover the source into a new folder.")
@CASE
@click.option("-o", "--output", type=click.Path(), help="Folder to make.  [default: CASE-result]")
@SEED
@STRICT
@AS_JSON
@QUIET
@REPLACE
def recover(
    case_path: str, output: str | None, seed: int, strict: bool, as_json: bool, quiet: bool,
    replace: bool,
) -> int:  # fmt: skip
    """Recover the source of CASE and write tables, figures and a report into a new folder.

    The folder is named after the case file, with -result, in the current folder.
    """
    from srcfit import output as saving
    from srcfit.recover import recover as run

    folder = output if output is not None else f"{Path(case_path).stem}-result"
    case, readings = _load(case_path, quiet)
    saving.check(folder, replace=replace, inputs=saving.input_paths(case))
    _say(f"recovering the source from {int(readings.used.sum())} readings", quiet)
    found = run(case, readings, rng=seed)
    _say(f"writing {folder}", quiet)
    saved = saving.save(found, folder, replace=replace)
    if saved.kept is not None:
        _say(f"files that srcfit did not write were moved to {saved.kept}", False)
    summary = saving.ordered(found.summary())
    if as_json:
        _print_json(summary)
    elif not quiet:
        from srcfit.text import recovery_text

        told = recovery_text(summary, _limit_unit(case), found.balance)
        click.echo(f"{told}\n\nWritten to {folder}")
    return _status(summary["findings"], strict)


@cli.command(short_help="Find what changed between two campaigns of readings.")
@click.argument("case_a", metavar="A", type=click.Path())
@click.argument("case_b", metavar="B", type=click.Path())
@click.option("-o", "--output", type=click.Path(), help="Folder to make.  [default: A-B-change]")
@click.option("--common", metavar="NAME", multiple=True,
              help="A nuisance that is the same in both (as in summary.json); repeatable."
)  # fmt: skip
@click.option("--shared-noise", metavar="R", type=float, default=0.0, show_default=True,
              help="Correlation of one sensor's noise between the campaigns, 0 to below 1."
)  # fmt: skip
@click.option("--by", type=click.Choice(["pairs", "stack"]),
              help="Difference common sensors, or take all readings together.")  # fmt: skip
@click.option("--reckon", metavar="DENSITY",
              help='Mean change to reckon with, e.g. "10 kN/m".  [default: the mean source]'
)  # fmt: skip
@SEED
@STRICT
@AS_JSON
@QUIET
@REPLACE
def compare(
    case_a: str, case_b: str, output: str | None, common: tuple[str, ...], shared_noise: float,
    by: Literal["pairs", "stack"] | None, reckon: str | None, seed: int, strict: bool,
    as_json: bool, quiet: bool, replace: bool,
) -> int:  # fmt: skip
    """Find what changed from campaign A to campaign B; tables, a page and figures in a new folder.

    A and B are case files of one layout: the same member and the same questions, each with its
    own readings. Readings of sensors that both have are differenced, so that what is the same in
    both drops out; the change and its interval are found jointly, which is sharper than the
    difference of two answers. A nuisance that did not change between the campaigns (a datum, a
    settlement, an end value) is named with --common.
    """
    from srcfit import output as saving
    from srcfit.changes import comparison_text
    from srcfit.compare import compare as run

    folder = output if output is not None else f"{Path(case_a).stem}-{Path(case_b).stem}-change"
    first, second = _load(case_a, quiet), _load(case_b, quiet)
    inputs = (*saving.input_paths(first[0]), *saving.input_paths(second[0]))
    saving.check(folder, replace=replace, inputs=inputs)
    _say("comparing the campaigns", quiet)
    found = run(first[0], second[0], common=common, shared_noise=shared_noise, by=by,
                reckon=reckon, readings=(first[1], second[1]), rng=seed)  # fmt: skip
    _say(f"writing {folder}", quiet)
    found.save(folder, replace=replace)
    if as_json:
        _print_json(saving.strict(found.summary()))
    elif not quiet:
        click.echo(f"{comparison_text(found.summary())}\n\nWritten to {folder}")
    return _status(found.findings, strict)


@cli.command(short_help="Predict the readings for a given source.")
@CASE
@click.option("--source", "source_path", metavar="FILE", type=click.Path(), required=True,
              help="Table of the source to try, or a folder.")  # fmt: skip
@click.option("-o", "--output", type=click.Path(), help="Write the predicted readings as CSV.")
@AS_JSON
@QUIET
@REPLACE
def predict(
    case_path: str, source_path: str, output: str | None, as_json: bool, quiet: bool, replace: bool
) -> None:
    """Predict the readings of CASE for the source in FILE (a forward what-if).

    FILE is a table with units in the brackets of its header. A row may hold a stretch
    (`from [m]`, `to [m]`, `value [kN/m]`), a lumped part (`at [m]`, `strength [kN]`), or both;
    cells that do not apply stay empty. A source.csv that `srcfit recover` wrote is read too
    (`x [m]` and `estimate [kN/m]`, the middles of joined cells), and so is the whole folder it
    wrote, with lumped parts and nuisances. Parts that overlap add up, and so does what the case
    states as known; unknown nuisances are otherwise taken at their guess.
    """
    from srcfit import prediction
    from srcfit.trial import read_source

    case, readings = _load(case_path, quiet)
    source = read_source(source_path, case)
    found = prediction.predict(case, readings, source)
    if output is not None:
        from srcfit.output import csv_text, put_file

        put_file(output, csv_text(found.readings), replace=replace)
    if as_json:
        _print_json(prediction.facts(found))
    elif not quiet:
        click.echo(prediction.text(found))


def _load(case_path: str, quiet: bool) -> tuple[Case, Readings]:
    from srcfit.case import load_case
    from srcfit.readings import read

    _say(f"reading {case_path}", quiet)
    case = load_case(Path(case_path))
    return case, read(case)


def _status(findings: Sequence[Mapping[str, str]], strict: bool) -> int:
    serious = any(f["level"] == "serious" for f in findings)
    return SERIOUS if strict and serious else DONE


def _limit_unit(case: Case) -> str:
    source = case.source
    if source.limit is None:
        return ""
    return source.unit if source.limit.density else source.total_unit


def _say(message: str, quiet: bool) -> None:
    """Progress and errors on the error stream, without the control characters of names.

    Several errors in one message stay one a line.
    """
    from unicodedata import category

    if not quiet:
        lines = (
            " ".join("".join(" " if category(c)[0] == "C" else c for c in line).split())
            for line in message.split("\n  ")
        )
        click.echo("srcfit: " + "\n  ".join(lines), err=True)


def _print_json(value: Mapping[str, Any] | Sequence[Any]) -> None:
    click.echo(json.dumps(value, indent=2, ensure_ascii=False, allow_nan=False))
