"""What several commands share: how a site, a date and JSON are asked for."""

from __future__ import annotations

import json
from collections.abc import Callable
from datetime import date
from pathlib import Path
from typing import Any, TypeVar

import click

from monitor.feed.tables import read_day

Command = TypeVar("Command", bound=Callable[..., Any])


class Day(click.ParamType[date]):
    """A date on the command line."""

    name = "date"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> date:
        if isinstance(value, date):
            return value
        day = read_day(str(value))
        if day is None:
            self.fail(f"found {value!r}; expected a date such as 2026-01-31", param, ctx)
        return day


def site_option(command: Command) -> Command:
    return click.option(
        "--site",
        "site_file",
        type=click.Path(path_type=Path),
        envvar="DUSKCHECK_SITE",
        default=Path("site.yaml"),
        show_default=True,
        help="The site file (or DUSKCHECK_SITE).",
    )(command)


def json_option(command: Command) -> Command:
    return click.option("--json", "as_json", is_flag=True, help="Print JSON on stdout and nothing else.")(command)


def print_json(document: Any) -> None:
    """One document on one line."""
    click.echo(json.dumps(document, ensure_ascii=False, allow_nan=False))
