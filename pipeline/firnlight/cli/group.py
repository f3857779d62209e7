"""What the commands share: the group, its options, and how they speak."""

from __future__ import annotations

import datetime as dt
import difflib
import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import click

from firnlight import __version__

DATE = click.DateTime(formats=["%Y-%m-%d"])


class Commands(click.Group):
    """Answers a wrong word with the nearest command, and lists each by its line of meaning, not its examples."""

    def add_command(self, cmd: click.Command, name: str | None = None) -> None:
        paragraphs = (cmd.help or "").split("\n\n")
        cmd.short_help = " ".join(paragraphs[1].split()) if len(paragraphs) > 1 else None
        super().add_command(cmd, name)

    def resolve_command(self, ctx: click.Context, args: list[str]) -> Any:
        if args and self.get_command(ctx, args[0]) is None and not args[0].startswith("-"):
            near = difflib.get_close_matches(args[0], self.list_commands(ctx), n=1)
            hint = f"did you mean {near[0]!r}?" if near else "`firnlight --help` lists the commands."
            raise click.UsageError(f"no command {args[0]!r}; {hint}")
        return super().resolve_command(ctx, args)


def workflow_argument(function: Callable[..., Any]) -> Callable[..., Any]:
    return click.argument("workflow", type=click.Path(path_type=Path))(function)


def json_option(function: Callable[..., Any]) -> Callable[..., Any]:
    return click.option("--json", "as_json", is_flag=True, help="Print one JSON object instead of text.")(function)


def quiet_option(function: Callable[..., Any]) -> Callable[..., Any]:
    return click.option("--quiet", is_flag=True, help="No progress and no talk on stderr.")(function)


def days_options(function: Callable[..., Any]) -> Callable[..., Any]:
    function = click.option("--until", type=DATE, help="Last acquisition date, UTC, included.")(function)
    return click.option("--since", type=DATE, help="First acquisition date, UTC, included.")(function)


def comma_list(values: tuple[str, ...]) -> tuple[str, ...]:
    """Repeatable options also take comma lists."""
    return tuple(part.strip() for value in values for part in value.split(",") if part.strip())


def day_of(value: dt.datetime | None) -> dt.date | None:
    return value.date() if value else None


def print_json(data: object) -> None:
    click.echo(json.dumps(data, indent=1, ensure_ascii=False))


def say_next(text: str, quiet: bool = False) -> None:
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
