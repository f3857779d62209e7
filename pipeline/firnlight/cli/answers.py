"""Answers: budget, methods."""

from __future__ import annotations

import datetime as dt
from pathlib import Path

import click

from firnlight.cli.group import (
    DATE,
    commands,
    day_of,
    days_options,
    json_option,
    print_json,
    quiet_option,
    say_next,
    workflow_argument,
)
from firnlight.core.errors import SettingsProblem


@commands.command()
@workflow_argument
@days_options
@click.option("--year", type=click.IntRange(1, 9998), help="Hydrological year, named by the calendar year it ends in.")
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
@json_option
@quiet_option
def budget(
    workflow: Path, since: dt.datetime | None, until: dt.datetime | None, year: int | None, by: str, every: str | None,
    as_of: dt.datetime | None, out: Path | None, as_json: bool, quiet: bool,
) -> int:  # fmt: skip
    """\b
    Examples:
      firnlight budget workflows/nightly.toml --by region,snow
      firnlight budget workflows/nightly.toml --year 2031 --every month --out budget.csv

    Regional statistics of the nights in the store: areas seen, albedo, incoming, reflected and absorbed
    sunlight, net longwave and net radiation, with uncertainty.

    Reads the store; writes only the --out file (a .csv gets its units in a .json beside it).
    Next: firnlight methods
    """
    from firnlight.core.dates import year_span
    from firnlight.core.settings import load_workflow
    from firnlight.io.sheets import answer_bytes, write_answer
    from firnlight.report.numbers import budget_table
    from firnlight.run.budget import UNITS, key_names, regional_budget
    from firnlight.run.store import Store

    settings = load_workflow(workflow)
    first, last = day_of(since), day_of(until)
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
    if out is not None and not out.absolute().parent.is_dir():
        raise SettingsProblem("--out", "folder", str(out.absolute().parent), "a folder that is there", "make it first")
    keys = key_names(by)
    today = day_of(as_of) or dt.datetime.now(dt.UTC).date()
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
        for caution in answer.cautions[1:]:
            click.echo(f"Caution: {caution}", err=True)
        say_next(f"firnlight budget {workflow} --out budget.csv" if out is None else "firnlight methods", quiet)
    return 0


@commands.command()
@click.argument("name", required=False)
@json_option
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
        print_json(methods_data(name))
    else:
        click.echo(methods_text(name))
    return 0
