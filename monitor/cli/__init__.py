"""The commands: they parse, call and print, and nothing else. Results go to stdout, everything else to stderr."""

from __future__ import annotations

import os
import sys
from importlib import import_module

import click

import monitor
from monitor.words import DuskcheckError, Exit

TRACE = "DUSKCHECK_TRACE"
# Each command lives in the module of its name and is loaded when it is called: loading all of them takes a second.
COMMANDS = {
    "backtest": "How the loss model has done against what happened.",
    "check": "An evening now, or several in order.",
    "daemon": "Evenings on schedule, until told to stop.",
    "demo": "Set up the invented firm and run a year of its evenings.",
    "excess": "The register of excesses.",
    "ledger": "The record: verify it, show its entries.",
    "report": "The pages of an evening again.",
    "rules": "The limit rules: check them, show what they say.",
}


class Commands(click.Group):
    """The commands by name, none of them loaded before it is called."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in COMMANDS:
            return None
        command: click.Command = getattr(import_module(f"monitor.cli.{cmd_name}"), cmd_name)
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl(list(COMMANDS.items()))


@click.group(cls=Commands, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(monitor.__version__, prog_name="duskcheck")
def commands() -> None:
    """Check every evening whether any position, book or the whole firm is over its signed risk limits.

    Exit codes: 0 every standing is within, near or waived; 1 the program failed; 2 the command, the site or the rules
    are wrong; 3 something is over its limit; 4 the evening could not be completed; 5 the record is damaged.
    """


def main() -> None:
    """Run one command and leave with its exit code. No traceback reaches the user unless DUSKCHECK_TRACE is set."""
    try:
        code = commands.main(standalone_mode=False)
    except click.ClickException as error:
        error.show()
        sys.exit(Exit.WRONG_USE)
    except (click.Abort, KeyboardInterrupt):
        click.echo("duskcheck: stopped", err=True)
        sys.exit(Exit.FAILED)
    except DuskcheckError as error:
        click.echo(f"duskcheck: {error}", err=True)
        sys.exit(error.exit)
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        sys.exit(Exit.FAILED)
    except Exception as error:
        if TRACE in os.environ:
            raise
        told = f"{type(error).__name__}: {error}".splitlines()[0]
        click.echo(f"duskcheck: failed by a defect of its own ({told}). Set {TRACE}=1 to see where", err=True)
        sys.exit(Exit.FAILED)
    sys.exit(code if isinstance(code, int) else Exit.DONE)
