"""The command line: parse, call, print, exit code. No science and no files here."""

from __future__ import annotations

import datetime as dt
import difflib
import json
import signal
import sys
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from firnlight import __version__
from firnlight.core.errors import InputProblem, NoRoom, SettingsProblem, StoreBusy

if TYPE_CHECKING:
    from firnlight.run.plan import Span

DATE = click.DateTime(formats=["%Y-%m-%d"])


class Commands(click.Group):
    """Answers a wrong word with the nearest command."""

    def resolve_command(self, ctx: click.Context, args: list[str]) -> Any:
        if args and self.get_command(ctx, args[0]) is None and not args[0].startswith("-"):
            near = difflib.get_close_matches(args[0], self.list_commands(ctx), n=1)
            hint = f"did you mean {near[0]!r}?" if near else "`firnlight --help` lists the commands."
            raise click.UsageError(f"no command {args[0]!r}; {hint}")
        return super().resolve_command(ctx, args)


def _workflow(function: Callable[..., Any]) -> Callable[..., Any]:
    return click.argument("workflow", type=click.Path(path_type=Path))(function)


def _as_json(function: Callable[..., Any]) -> Callable[..., Any]:
    return click.option("--json", "as_json", is_flag=True, help="Print one JSON object instead of text.")(function)


def _quiet(function: Callable[..., Any]) -> Callable[..., Any]:
    return click.option("--quiet", is_flag=True, help="No progress and no talk on stderr.")(function)


def _days(function: Callable[..., Any]) -> Callable[..., Any]:
    function = click.option("--until", type=DATE, help="Last acquisition date, UTC, included.")(function)
    return click.option("--since", type=DATE, help="First acquisition date, UTC, included.")(function)


def _list(values: tuple[str, ...]) -> tuple[str, ...]:
    """Repeatable options also take comma lists."""
    return tuple(part.strip() for value in values for part in value.split(",") if part.strip())


def _day(value: dt.datetime | None) -> dt.date | None:
    return value.date() if value else None


def _print_json(data: object) -> None:
    click.echo(json.dumps(data, indent=1, ensure_ascii=False))


def _next(text: str, quiet: bool = False) -> None:
    if not quiet:
        click.echo(f"Next: {text}", err=True)


@click.group(cls=Commands, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(__version__, prog_name="firnlight")
def commands() -> None:
    """\b
    Examples:
      firnlight night workflows/nightly.toml
      firnlight budget workflows/nightly.toml --by region,snow

    Satellite reflectance tiles to albedo, absorbed sunlight and regional radiation budgets of snowfields.

    \b
    Exit codes: 0 all done (also: nothing to do), 1 unexpected error, 2 wrong use or settings, 3 finished
    but some inputs were refused or failed, 5 another run holds the store, 6 not enough disk or memory,
    130/143 stopped by a signal.
    """


def _span(
    workflow: Any,
    on: dt.datetime | None,
    since: dt.datetime | None,
    until: dt.datetime | None,
    tile: tuple[str, ...],
) -> Span:
    from firnlight.run.plan import Span

    if on and (since or until):
        raise SettingsProblem("--on", "dates", "--on with --since or --until", "one of them", "leave one out")
    first, last = _day(since), _day(until)
    if on:
        last = on.date()
        first = last - dt.timedelta(days=workflow.scenes.look_back_days)
    if first and last and first > last:
        raise SettingsProblem(
            "--since", "dates", f"{first} after {last}", "a first day before the last", "exchange the dates"
        )
    return Span(first, last, _list(tile))


@commands.command()
@_workflow
@click.option(
    "--on",
    type=DATE,
    help="Acquisition date of the night; scenes inside the look-back window before it are picked up too.",
)
@_days
@click.option("--tile", multiple=True, help="Only this tile; may be repeated.")
@click.option("--dry-run", is_flag=True, help="Print what would be done and why; write nothing.")
@click.option("--cluster", metavar="ADDRESS", help="Run on the dask scheduler at this address.")
@click.option("--wait", is_flag=True, help="Wait for another run to end instead of refusing.")
@click.option("--verbose", is_flag=True, help="Tracebacks of what failed.")
@_as_json
@_quiet
def night(
    workflow: Path, on: dt.datetime | None, since: dt.datetime | None, until: dt.datetime | None, tile: tuple[str, ...],
    dry_run: bool, cluster: str | None, wait: bool, verbose: bool, as_json: bool, quiet: bool,
) -> int:  # fmt: skip
    """\b
    Examples:
      firnlight night workflows/nightly.toml
      firnlight night workflows/nightly.toml --on 2031-05-14 --dry-run

    Turn every due scene into maps and budget totals; a second run does nothing.

    Writes into the workflow's store (maps, budget, terrain, ledger.db). Never touches scenes, elevation,
    land cover or regions. Without dates every scene found is looked at. Next: firnlight budget WORKFLOW
    """
    from firnlight.core.settings import load_workflow
    from firnlight.run.night import plan_night, run_night
    from firnlight.run.progress import Teller

    settings = load_workflow(workflow)
    span = _span(settings, on, since, until, tile)
    if dry_run:
        decisions, refusals = plan_night(settings, span)
        from firnlight.run.night import plan_data, plan_text

        if as_json:
            _print_json(plan_data(decisions, refusals))
        else:
            click.echo(plan_text(decisions, refusals))
            _next(f"firnlight night {workflow}", quiet)
        return 0
    with Teller(quiet) as teller:
        for sentence in settings.remarks():
            teller.say(sentence)
        outcome = run_night(settings, span, cluster, wait, teller)
    if as_json:
        _print_json(outcome.data())
    else:
        for refusal in outcome.refusals:
            click.echo(f"Refused: {refusal.reason}", err=True)
        for name, trace in outcome.failed.items():
            click.echo(f"Failed: {name}: {trace if verbose else trace.strip().splitlines()[-1]}", err=True)
        click.echo(outcome.sentence())
        bad = outcome.exit_code != 0
        _next(f"firnlight {'status' if bad else 'budget'} {workflow}{' --failed' if bad else ''}", quiet)
    return outcome.exit_code


@commands.command()
@_workflow
@click.option("--failed", is_flag=True, help="Only what was refused or failed, with the command that retries it.")
@click.option("--waiting", is_flag=True, help="Only what is found and not yet made.")
@_as_json
def status(workflow: Path, failed: bool, waiting: bool, as_json: bool) -> int:
    """\b
    Examples:
      firnlight status workflows/nightly.toml
      firnlight status workflows/nightly.toml --failed

    What ran, what waits, what was refused or failed, why, and the command that retries just that.

    Reads the ledger and lists the scenes; writes nothing. Next: firnlight night WORKFLOW
    """
    from firnlight.core.settings import load_workflow
    from firnlight.run.status import store_status

    found = store_status(load_workflow(workflow), workflow)
    if as_json:
        _print_json(found.data())
    else:
        click.echo(found.text(failed, waiting))
    return 0


@commands.command()
@_workflow
@_days
@click.option("--year", type=int, help="Hydrological year, named by the calendar year it ends in.")
@click.option(
    "--by",
    default="region,elevation_band,land_cover,snow",
    show_default=True,
    help="Keys of the rows, comma list.",
)
@click.option(
    "--every",
    type=click.Choice(["day", "week", "month", "year"]),
    help="One set of rows per period; default the whole span.",
)
@click.option("--as-of", type=DATE, help="Day on which rows are called provisional or final; default today.")
@click.option("--out", type=click.Path(path_type=Path, dir_okay=False), help="File ending in .csv, .parquet or .json.")
@_as_json
@_quiet
def budget(
    workflow: Path, since: dt.datetime | None, until: dt.datetime | None, year: int | None, by: str, every: str | None,
    as_of: dt.datetime | None, out: Path | None, as_json: bool, quiet: bool,
) -> int:  # fmt: skip
    """\b
    Examples:
      firnlight budget workflows/nightly.toml --by region,snow
      firnlight budget workflows/nightly.toml --year 2031 --every month --out budget.csv

    Regional statistics of the nights in the store: areas seen, albedo, incoming, reflected and absorbed
    sunlight with uncertainty.

    Reads the store; writes only the --out file (a .csv gets its units in a .json beside it).
    Next: firnlight methods
    """
    from firnlight.core.dates import year_span
    from firnlight.core.settings import load_workflow
    from firnlight.io.sheets import answer_bytes, write_answer
    from firnlight.report.numbers import budget_table
    from firnlight.run.budget import CAUTIONS, UNITS, key_names, regional_budget
    from firnlight.run.store import Store

    settings = load_workflow(workflow)
    first, last = _day(since), _day(until)
    if year is not None:
        if since or until:
            raise SettingsProblem("--year", "dates", "--year with --since or --until", "one of them", "leave one out")
        first, last = year_span(year, settings.area.hydrological_year_starts)
        if not quiet:
            click.echo(f"Hydrological year {year}: {first} to {last}.", err=True)
    if out is not None and out.suffix.lower() not in (".csv", ".parquet", ".json"):
        raise SettingsProblem(
            "--out", "file ending", out.suffix or "none", ".csv, .parquet or .json", "end the file name so"
        )
    keys = key_names(by)
    today = _day(as_of) or dt.datetime.now(dt.UTC).date()
    answer = regional_budget(settings, Store(settings.path(settings.store.path)), first, last, keys, every, today)
    if out is not None:
        write_answer(out, answer.rows, UNITS, answer.about())
        if not quiet:
            click.echo(f"{len(answer.rows)} rows written to {out}.", err=True)
    elif as_json:
        click.echo(answer_bytes(answer.rows, UNITS, answer.about(), ".json").decode("utf-8"), nl=False)
    else:
        click.echo(budget_table(answer.rows, keys, every is not None))
    if not quiet and not as_json:
        states = " and ".join(sorted({str(row["state"]) for row in answer.rows}))
        click.echo(f"{answer.area}, {answer.since} to {answer.until}, {states} as of {answer.as_of}.", err=True)
        click.echo(f"Caution: {CAUTIONS[1]}", err=True)
        _next(f"firnlight budget {workflow} --out budget.csv" if out is None else "firnlight methods", quiet)
    return 0


@commands.command()
@_workflow
@_as_json
@_quiet
def check(workflow: Path, as_json: bool, quiet: bool) -> int:
    """\b
    Examples:
      firnlight check workflows/nightly.toml
      firnlight check workflows/nightly.toml --json

    Validate settings and inputs: every file is opened and every block read once.

    Writes nothing. Next: firnlight night WORKFLOW
    """
    from firnlight.core.settings import load_workflow
    from firnlight.run.check import check_inputs
    from firnlight.run.progress import Teller

    with Teller(quiet) as teller:
        found = check_inputs(load_workflow(workflow), teller)
    if as_json:
        _print_json(found.data())
    else:
        for problem in found.problems:
            click.echo(f"Refused: {problem}", err=True)
        click.echo(found.sentence())
        _next(f"firnlight night {workflow}", quiet)
    return 3 if found.problems else 0


@commands.command()
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--sensor", required=True, help="One of the sensors of `firnlight methods`.")
@click.option("--pattern", required=True, help='File names, such as "{tile}_{date}_{band}.tif".')
@click.option(
    "--out",
    type=click.Path(path_type=Path, file_okay=False),
    help="Folder for the items; default beside the rasters.",
)
@click.option("--reflectance", type=click.Choice(["surface", "top of atmosphere"]), default="surface", show_default=True,
              help="What the numbers are; Level-1 files hold top-of-atmosphere reflectance.")  # fmt: skip
@click.option("--scale", type=float, help="Reflectance per stored number, where no metadata tells it.")
@click.option("--offset", type=float, help="Reflectance of stored number 0, where no metadata tells it.")
@click.option("--nodata", type=float, help="Stored number of an empty cell, where no metadata tells it.")
@click.option(
    "--time",
    "time_utc",
    help="Time of day of the acquisitions, UTC, as HH:MM:SS, where no metadata tells it.",
)
@_quiet
def describe(
    folder: Path, sensor: str, pattern: str, out: Path | None, reflectance: str, scale: float | None, offset: float | None,
    nodata: float | None, time_utc: str | None, quiet: bool,
) -> int:  # fmt: skip
    """\b
    Examples:
      firnlight describe scenes --sensor oli --pattern "{tile}_{date}_{band}.tif"
      firnlight describe scenes --sensor msi --pattern "{tile}_{date}_{band}.jp2" --out items

    Write STAC items for plain folders of band rasters, so that `firnlight night` can read them.

    Writes one .json per scene. Never touches the rasters. Next: firnlight check WORKFLOW
    """
    from firnlight.io.describe import describe as write_items

    written = write_items(
        folder,
        sensor,
        pattern,
        out=out,
        reflectance=reflectance,
        scale=scale,
        offset=offset,
        nodata=nodata,
        time=time_utc,
    )
    for path in written:
        click.echo(str(path))
    if not quiet:
        click.echo(f"{len(written)} items written.", err=True)
        _next("firnlight check WORKFLOW", quiet)
    return 0


@commands.command()
@click.argument("name", required=False)
@_as_json
def methods(name: str | None, as_json: bool) -> int:
    """\b
    Examples:
      firnlight methods
      firnlight methods liang2001

    Sensors, conversions and models, with formulas, where they hold, fit error and source.

    Writes nothing. Next: firnlight check WORKFLOW
    """
    from firnlight.report.methods import methods_data, methods_text

    if as_json:
        _print_json(methods_data(name))
    else:
        click.echo(methods_text(name))
    return 0


@commands.command()
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--tiles", type=click.IntRange(1, 400), default=2, show_default=True, help="Number of tiles.")
@click.option(
    "--size",
    type=click.IntRange(16, 21960),
    default=256,
    show_default=True,
    help="Rows and columns of a tile, 30 m cells.",
)
@click.option("--scenes", type=click.IntRange(1, 400), default=3, show_default=True, help="Acquisition dates per year.")
@click.option("--years", type=click.IntRange(1, 50), default=1, show_default=True, help="Hydrological years.")
@click.option("--seed", type=int, default=7, show_default=True, help="Seed of all that is random.")
@_quiet
def demo(folder: Path, tiles: int, size: int, scenes: int, years: int, seed: int, quiet: bool) -> int:
    """\b
    Examples:
      firnlight demo morrowfell
      firnlight demo morrowfell --tiles 4 --size 1024 --scenes 12

    Write the invented Morrowfell area at any size, with its truth and a ready workflow.

    Writes into FOLDER, which must be new or empty. Next: firnlight night FOLDER/workflow.toml
    """
    from firnlight.demo.area import write_demo

    if folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
        raise SettingsProblem(str(folder), "folder", "not empty", "a new or empty folder", "name another folder")
    written = write_demo(folder, tiles=tiles, size=size, scenes=scenes, years=years, seed=seed)
    click.echo(f"{len(written)} files written to {folder}.")
    _next(f"firnlight night {folder / 'workflow.toml'}", quiet)
    return 0


def _stop(number: int, frame: object) -> None:
    raise SystemExit(128 + number)


def main(arguments: list[str] | None = None) -> int:
    """Run one command and return its exit code."""
    signal.signal(signal.SIGTERM, _stop)
    try:
        code = commands.main(args=arguments, prog_name="firnlight", standalone_mode=False)
        return code if isinstance(code, int) else 0
    except NoRoom as problem:
        return _say(problem, 6)
    except StoreBusy as problem:
        return _say(problem, 5)
    except InputProblem as problem:
        return _say(problem, 2)
    except click.exceptions.NoArgsIsHelpError as shown:
        click.echo(shown.format_message())
        return 0
    except click.ClickException as problem:
        problem.show(sys.stderr)
        return 2
    except (KeyboardInterrupt, click.Abort):
        return _say("stopped; the same command goes on where it stopped", 130)
    except BrokenPipeError:
        sys.stdout = None
        return 0


def _say(message: object, code: int) -> int:
    click.echo(f"firnlight: {message}", err=True)
    return code
