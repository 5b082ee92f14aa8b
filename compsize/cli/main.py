"""The program: finds the command, runs it, and turns every error into a message and an exit code."""

from __future__ import annotations

import os
import sys
import traceback
from collections.abc import Sequence
from importlib import import_module

import click

from compsize.cli.codes import INPUT, INTERNAL, INTERRUPTED, USAGE
from compsize.cli.say import tell
from compsize.errors import InputError, InternalError, OutputError, UsageError

__all__ = ["COMMANDS", "DEBUG", "main"]

COMMANDS = ("new", "check", "margins", "size", "report", "convert")
"""Names of the commands in the order of a study; each is a module of this package with a ``command``."""
DEBUG = "COMPSIZE_DEBUG"
"""Environment variable: where it is set to 1, an internal fault shows its traceback."""


class _Commands(click.Group):
    """Loads the module of a command only when that command is asked for."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in COMMANDS:
            return None
        found = import_module(f"compsize.cli.{cmd_name}").command
        assert isinstance(found, click.Command)
        return found

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        if args[0] not in COMMANDS and not args[0].startswith("-"):
            from compsize.study.schema import nearest

            raise click.UsageError(f"There is no command '{args[0]}'. {nearest(args[0], COMMANDS)}", ctx)
        return super().resolve_command(ctx, args)


def _show_version(ctx: click.Context, _: click.Parameter, asked: bool) -> None:
    if asked and not ctx.resilient_parsing:
        from importlib.metadata import version

        click.echo(f"compsize {version('compsize')}")
        ctx.exit()


@click.command(cls=_Commands, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.option(
    "--version", is_flag=True, is_eager=True, expose_value=False, callback=_show_version, help="Show the version."
)
def _program() -> None:
    """Least-cost capacitor banks, SVCs and STATCOMs so that every listed outage keeps its margin to the nose.

    Exit codes: 0 done, requirement met; 1 input or file error; 2 usage; 3 the requirement cannot be met;
    4 stopped by a limit or proof incomplete; 70 internal fault.
    """


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line (None: that of the process) and return the exit code. Never raises."""
    try:
        code = _program.main(arguments, prog_name="compsize", standalone_mode=False)
    except click.ClickException as fault:
        fault.show()
        return fault.exit_code
    except click.Abort:
        tell("compsize: stopped; nothing was written.")
        return INTERRUPTED
    except (InputError, OutputError) as fault:
        tell(f"compsize: {fault}")
        return INPUT
    except UsageError as fault:
        tell(f"compsize: {fault}")
        return USAGE
    except Exception as fault:
        _confess(fault)
        return INTERNAL
    return code if isinstance(code, int) else 0


def _confess(fault: Exception) -> None:
    if os.environ.get(DEBUG) == "1":
        traceback.print_exc(file=sys.stderr)
        return
    words = str(fault) if isinstance(fault, InternalError) else f"{type(fault).__name__}: {fault}"
    frames = traceback.extract_tb(fault.__traceback__)
    place = f" ({os.path.basename(frames[-1].filename)}, line {frames[-1].lineno})" if frames else ""
    tell(
        f"compsize: internal fault: {words}{place}\n"
        f"This is a fault of the program, not of the study. {DEBUG}=1 shows where it arose."
    )
