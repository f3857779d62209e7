"""Each night: night, status, check."""

from __future__ import annotations

import datetime as dt
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from firnlight.cli.group import (
    DATE,
    comma_list,
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

if TYPE_CHECKING:
    from firnlight.run.plan import Span


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
    first, last = day_of(since), day_of(until)
    if on:
        last = on.date()
        first = last - min(dt.timedelta(days=workflow.scenes.look_back_days), last - dt.date.min)
    if first and last and first > last:
        raise SettingsProblem(
            "--since", "dates", f"{first} after {last}", "a first day before the last", "exchange the dates"
        )
    return Span(first, last, comma_list(tile))


@commands.command()
@workflow_argument
@click.option(
    "--on",
    type=DATE,
    help="Acquisition date of the night; scenes inside the look-back window before it are picked up too.",
)
@days_options
@click.option("--tile", multiple=True, help="Only this tile; may be repeated.")
@click.option("--dry-run", is_flag=True, help="Print what would be done and why; write nothing.")
@click.option("--cluster", metavar="ADDRESS", help="Run on the dask scheduler at this address.")
@click.option("--wait", is_flag=True, help="Wait for another run to end instead of refusing.")
@click.option("--verbose", is_flag=True, help="Tracebacks of what failed.")
@json_option
@quiet_option
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
            print_json(plan_data(decisions, refusals))
        else:
            click.echo(plan_text(decisions, refusals))
            say_next(f"firnlight night {workflow}", quiet)
        return 0
    with Teller(quiet) as teller:
        for sentence in settings.remarks():
            teller.say(sentence)
        outcome = run_night(settings, span, cluster, wait, teller)
    if as_json:
        print_json(outcome.data())
    else:
        for warning in outcome.warnings:
            click.echo(f"Note: {warning}", err=True)
        for refusal in outcome.refusals:
            click.echo(f"Refused: {refusal.reason}", err=True)
        for name, trace in outcome.failed.items():
            click.echo(f"Failed: {name}: {trace if verbose else trace.strip().splitlines()[-1]}", err=True)
        click.echo(outcome.sentence())
        bad = outcome.exit_code != 0
        say_next(f"firnlight {'status' if bad else 'budget'} {workflow}{' --failed' if bad else ''}", quiet)
    return outcome.exit_code


@commands.command()
@workflow_argument
@click.option("--failed", is_flag=True, help="Only what was refused or failed, with the command that retries it.")
@click.option("--waiting", is_flag=True, help="Only what is found and not yet made.")
@json_option
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
        print_json(found.data())
    else:
        click.echo(found.text(failed, waiting))
    return 0


@commands.command()
@workflow_argument
@json_option
@quiet_option
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
        print_json(found.data())
    else:
        for gap in found.gaps:
            click.echo(f"Note: {gap}", err=True)
        for problem in found.problems:
            click.echo(f"Refused: {problem}", err=True)
        click.echo(found.sentence())
        say_next(f"firnlight night {workflow}", quiet)
    return 3 if found.problems else 0
