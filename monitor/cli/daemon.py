"""duskcheck daemon: evenings on schedule, until told to stop."""

from __future__ import annotations

from pathlib import Path

import click

from monitor.cli.options import site_option


@click.command()
@site_option
def daemon(site_file: Path) -> int:
    """Check evenings on schedule in the foreground, until SIGTERM or SIGINT. Logs to stderr."""
    from monitor.daemon.serve import serve

    return serve(site_file)
