"""The command line: parse, call, print, exit code. No science and no files here."""

from __future__ import annotations

import errno
import sys

import click

from firnlight.cli import answers, nights, setting_up
from firnlight.cli.group import commands
from firnlight.cli.stopping import stoppable
from firnlight.core.errors import InputProblem, NoRoom, StoreBusy

__all__ = ["answers", "commands", "main", "nights", "setting_up"]


def main(arguments: list[str] | None = None) -> int:
    """Run one command and return its exit code."""
    try:
        with stoppable():
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
    except MemoryError as error:
        return _say(f"not enough memory: {error}", 6)
    except OSError as error:
        if error.errno not in (errno.ENOSPC, errno.EDQUOT):
            raise
        return _say(f"{error.filename or 'disk'}: {error.strerror}; make room, then run the same command", 6)


def _say(message: object, code: int) -> int:
    click.echo(f"firnlight: {message}", err=True)
    return code
