"""The commands: they parse, call and print, and nothing else. Results go to stdout, everything else to stderr."""

from __future__ import annotations

import os
import sys

import click

import monitor
from monitor.cli.check import check
from monitor.cli.demo import demo
from monitor.cli.excess import excess
from monitor.cli.ledger import ledger
from monitor.cli.report import report
from monitor.cli.rules import rules
from monitor.cli.serve import daemon
from monitor.words import DuskcheckError, Exit

TRACE = "DUSKCHECK_TRACE"


@click.group(context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(monitor.__version__, prog_name="duskcheck")
def commands() -> None:
    """Check every evening whether any position, book or the whole firm is over its signed risk limits.

    Exit codes: 0 every standing is within, near or waived; 1 the program failed; 2 the command, the site or the rules
    are wrong; 3 something is over its limit; 4 the evening could not be completed; 5 the record is damaged.
    """


for command in (check, daemon, demo, excess, ledger, report, rules):
    commands.add_command(command)


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
